package scan

import (
	"math/rand/v2"
	"slices"
	"testing"
)

func stopRef(b []byte, i int, delim byte) int {
	for b[i] != delim && b[i] != '\n' && b[i] != '"' {
		i++
	}
	return i
}

func rowEndRef(b []byte, i int, odd bool) (int, bool) {
	for ; i < len(b); i++ {
		if b[i] == '"' {
			odd = !odd
		}
		if b[i] == '\n' && !odd {
			return i + 1, false
		}
	}
	return -1, odd
}

func TestSearchAgainstByteLoops(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	// The neighbours of the searched bytes catch borrows between lanes.
	alphabet := []byte("aaaaaaa,,\"\n+-!#\v\t\x00\x80\xff\xac\x8a\xa2;")
	for range 20000 {
		b := make([]byte, 1+r.IntN(60))
		for i := range b {
			b[i] = alphabet[r.IntN(len(alphabet))]
		}
		b[len(b)-1] = '\n'
		i := r.IntN(len(b))
		delim := []byte(",\t;")[r.IntN(3)]
		if got, want := Stop(b, i, delim), stopRef(b, i, delim); got != want {
			t.Fatalf("Stop(%q, %d, %q) = %d, want %d", b, i, delim, got, want)
		}
		odd := r.IntN(2) == 0
		b[len(b)-1] = alphabet[r.IntN(len(alphabet))]
		end, after := RowEnd(b, i, odd)
		if e, a := rowEndRef(b, i, odd); end != e || after != a {
			t.Fatalf("RowEnd(%q, %d, %v) = %d, %v, want %d, %v", b, i, odd, end, after, e, a)
		}
	}
}

// indexRef cuts text, whose rows are sound up to a first quote out of place, byte
// by byte.
func indexRef(text []byte, i int, delim byte) (ends []int32, odd int) {
	ends = []int32{int32(i - 1)}
	for {
		if i == len(text) {
			return ends, -1
		}
		if text[i] == '"' {
			for i++; ; i++ {
				if i == len(text) {
					return ends, -1
				}
				if text[i] == '"' {
					if i+1 < len(text) && text[i+1] == '"' {
						i++
						continue
					}
					break
				}
			}
			i++
			if i == len(text) {
				return ends, -1
			}
			if c := text[i]; c != delim && c != '\n' && (c != '\r' || text[i+1] != '\n') {
				return ends, i
			}
		}
		for text[i] != delim && text[i] != '\n' {
			if text[i] == '"' {
				return ends, i
			}
			if i++; i == len(text) {
				return ends, -1
			}
		}
		ends = append(ends, int32(i))
		i++
	}
}

func TestIndexAgainstByteLoop(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	cells := []string{"", "a", "12.5", "-1", "\x80\xac\xa2", "quay", "long enough to reach over one block of bytes", "+\x0b", "!#",
		`""`, `"a"`, `"b,c"`, "\"d\n\"", `"e""f"`, `""""`, `""","""`}
	wrong := []string{`a"`, `"a"b`, `"a""`, `a"b"`, "\"a\"\r", `" ,`}
	var x Index
	odds := 0
	for range 20000 {
		delim := []byte(",\t;")[r.IntN(3)]
		var b []byte
		plain := r.IntN(3) == 0
		for range r.IntN(60) {
			c := cells[r.IntN(len(cells))]
			switch {
			case plain:
				c = cells[r.IntN(9)]
			case r.IntN(80) == 0:
				c = wrong[r.IntN(len(wrong))]
			}
			b = append(b, c...)
			switch r.IntN(6) {
			case 0:
				b = append(b, '\n')
			case 1:
				b = append(b, "\r\n"...)
			default:
				b = append(b, delim)
			}
		}
		b = append(b, '\n')
		text := slices.Concat(b, []byte("\",;\t\n,\",,\"\"\n"), make([]byte, Pad))[:len(b)]
		i := r.IntN(len(text))
		want, odd := indexRef(text, i, delim)
		x.Reset(i, 3)
		for x.More(text, delim) {
		}
		// What is out of place may be found at the quote or behind it.
		if (x.Odd < 0) != (odd < 0) || !slices.Equal(x.Ends, want) {
			t.Fatalf("%q from %d by %q: ends %d, odd %d, want %d, %d", text, i, delim, x.Ends, x.Odd, want, odd)
		}
		if odd >= 0 {
			odds++
		}
	}
	if odds < 1000 {
		t.Errorf("only %d texts with a quote out of place", odds)
	}
}

// A text of more ends than there is room for is indexed in turns.
func TestIndexInTurns(t *testing.T) {
	var text []byte
	for i := range 30_000 {
		text = append(text, "12,"[:1+i%3]...)
		text[len(text)-1] = ",\n"[i%2]
	}
	text = append(text, make([]byte, Pad)...)[:len(text)]
	want, _ := indexRef(text, 0, ',')
	var x Index
	x.Reset(0, 3000)
	got := []int32{-1}
	for x.More(text, ',') {
		n := len(x.Ends) / 2
		got = append(got, x.Ends[1:n+1]...)
		if !x.Seek(int(x.Ends[n]) + 1) {
			t.Fatal("an end is lost")
		}
	}
	got = append(got, x.Ends[1:]...)
	if !slices.Equal(got, want) {
		t.Fatalf("%d ends, want %d", len(got), len(want))
	}
}
