package delimited

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

func TestSample(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(81, 82)), 4000, ',', false)
	for _, way := range []string{"file", "spool"} {
		src := openWay(t, way, text, stream.Options{})
		scanned, _, err := readAll(t, src, allUses(src), true)
		if err != nil {
			t.Fatal(err)
		}
		at := map[int64]int{}
		for i, r := range scanned {
			scanned[i] = strings.TrimPrefix(r, "0:")
			var mark int64
			if _, err := fmt.Sscanf(scanned[i], "@%d|", &mark); err != nil {
				t.Fatal(err)
			}
			at[mark] = i
		}
		sampled := func(f float64) []string {
			seg, err := src.Sample(t.Context(), allUses(src), f)
			if err != nil {
				t.Fatal(err)
			}
			defer seg.Close()
			if seg.Number() != -1 {
				t.Errorf("number %d", seg.Number())
			}
			rows, err := readSegment(t, seg, true)
			if err != nil {
				t.Fatal(err)
			}
			return rows
		}
		for i := range 101 {
			f := float64(i) / 100
			rows := sampled(f)
			from := len(scanned) - len(rows)
			if !slices.Equal(rows, scanned[max(from, 0):]) {
				t.Fatalf("at %v: other rows than the scan's", f)
			}
			want := int(f * float64(len(scanned)))
			if d := from - want; d > 120 || (d < -120 && from < len(scanned)-900) {
				t.Errorf("at %v: starts at row %d of %d", f, from, len(scanned))
			}
			if i%10 == 0 && !slices.Equal(rows, sampled(f)) {
				t.Errorf("at %v: not the same twice", f)
			}
		}
		if n := len(sampled(1)); n < 256 || n > 1024 {
			t.Errorf("%d rows at the end, want about %d", n, stream.BatchRows)
		}
		if n := len(sampled(0)); n != len(scanned) {
			t.Errorf("%d rows from the start", n)
		}
	}
	for _, way := range []string{"pipe", "gzip"} {
		src := openWay(t, way, text, stream.Options{})
		if _, err := src.Sample(t.Context(), nil, 0.5); !errors.Is(err, stream.ErrNoSample) {
			t.Errorf("%s: %v", way, err)
		}
	}
}

// TestGuessInside tries every offset of a text whose quoted cells hold rows.
func TestGuessInside(t *testing.T) {
	var b strings.Builder
	b.WriteString("a,b,c\n")
	for i := range 40 {
		fmt.Fprintf(&b, "%d,\"x%d\n\"\"1,2,3\"\"\ny\",\"z\"\n%d,plain,\"\"\n", i, i, i)
	}
	text := b.String()
	src := openWay(t, "file", text, stream.Options{})
	inside := false
	wrong := 0
	for i := 1; i < len(text)-60; i++ {
		if text[i-1] == '"' {
			inside = !inside
		}
		if got := src.guessInside([]byte(text[i-1:])); got != inside {
			wrong++
			t.Logf("offset %d (%q): guessed %v", i, text[i-1:i+20], got)
		}
	}
	if wrong > 0 {
		t.Errorf("%d wrong guesses", wrong)
	}
}

func TestSamplePassesOverBadRows(t *testing.T) {
	text := "a,b\n" + strings.Repeat("1,2\n1\nx,2\n3,4\n", 2000)
	src := openWay(t, "file", text, stream.Options{Kinds: map[string]stream.Kind{"a": stream.Int64}})
	seg, err := src.Sample(t.Context(), allUses(src), 0.5)
	if err != nil {
		t.Fatal(err)
	}
	rows, err := readSegment(t, seg, false)
	if err != nil || len(rows) < 1990 || len(rows) > 2010 || seg.Tally().Malformed != 0 {
		t.Errorf("%d rows, tally %+v, %v", len(rows), seg.Tally(), err)
	}
	var b stream.Batch
	seg, _ = src.Sample(t.Context(), allUses(src), 0.25)
	if err := seg.Read(&b); err != nil {
		t.Fatal(err)
	}
	mark := b.Marks[7]
	if got, want := seg.Locate(mark).Line, int64(strings.Count(text[:mark], "\n")+1); got != want {
		t.Errorf("line %d, want %d", got, want)
	}
}

func TestLocate(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(91, 92)), 300, ',', true)
	for _, way := range ways {
		src := openWay(t, way, text, stream.Options{SegmentBytes: 300})
		sc, err := src.Scan(t.Context(), allUses(src))
		if err != nil {
			t.Fatal(err)
		}
		var b stream.Batch
		n := 0
		for {
			seg, err := sc.Next(t.Context())
			if err != nil {
				break
			}
			for seg.Read(&b) == nil {
				for _, m := range b.Marks {
					p := seg.Locate(m)
					if want := int64(strings.Count(text[:m], "\n") + 1); p.Line != want || p.File != src.in.Name {
						t.Fatalf("%s: mark %d at %v, want line %d", way, m, p, want)
					}
					n++
				}
			}
			seg.Close()
		}
		if n != 300 {
			t.Errorf("%d rows", n)
		}
	}
}
