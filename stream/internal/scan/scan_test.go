package scan

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"testing"
)

func stopRef(b []byte, i int, delim byte) int {
	for b[i] != delim && b[i] != '\n' && b[i] != '"' {
		i++
	}
	return i
}

func skipRef(b []byte, i int, delim byte, n int) (int, int) {
	for {
		i = stopRef(b, i, delim)
		if b[i] != delim {
			return i, n
		}
		i++
		if n--; n == 0 {
			return i, 0
		}
	}
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
		n := 1 + r.IntN(6)
		at, left := Skip(b, i, delim, n)
		if a, l := skipRef(b, i, delim, n); at != a || left != l {
			t.Fatalf("Skip(%q, %d, %q, %d) = %d, %d, want %d, %d", b, i, delim, n, at, left, a, l)
		}
		odd := r.IntN(2) == 0
		b[len(b)-1] = alphabet[r.IntN(len(alphabet))]
		end, after := RowEnd(b, i, odd)
		if e, a := rowEndRef(b, i, odd); end != e || after != a {
			t.Fatalf("RowEnd(%q, %d, %v) = %d, %v, want %d, %v", b, i, odd, end, after, e, a)
		}
	}
}

// randomNumber makes strings of many shapes that strconv.ParseFloat accepts.
func randomNumber(r *rand.Rand, b []byte) []byte {
	b = b[:0]
	switch r.IntN(9) {
	case 0: // any double, shortest form
		return strconv.AppendFloat(b, math.Float64frombits(r.Uint64()&^(0x7ff<<52)|uint64(r.IntN(2047))<<52), 'g', -1, 64)
	case 1:
		return strconv.AppendInt(b, int64(r.Uint64()>>r.IntN(64)), 10)
	case 2: // money
		return strconv.AppendFloat(b, r.NormFloat64()*1000, 'f', r.IntN(6), 64)
	case 3: // around two to the 53rd, where the exact path ends
		return strconv.AppendUint(b, 1<<53-50+uint64(r.IntN(100)), 10)
	case 4: // halfway between two doubles
		m := 1<<53 + 2*uint64(r.IntN(1<<30)) + 1
		b = strconv.AppendUint(b, m, 10)
		if r.IntN(2) == 0 {
			b = append(b, ".000000000000000000000000000001"...)
		}
		return b
	case 5:
		return strconv.AppendFloat(b, r.Float64(), 'g', 1+r.IntN(20), 64)
	case 6:
		b = strconv.AppendFloat(b, r.Float64()*100, 'f', 1+r.IntN(17), 64)
		b = append(b, 'e')
		return strconv.AppendInt(b, int64(r.IntN(700)-350), 10)
	}
	if r.IntN(2) == 0 {
		b = append(b, "-+"[r.IntN(2)])
	}
	n := r.IntN(24)
	for range n {
		b = append(b, byte('0'+r.IntN(10)))
	}
	m := r.IntN(24)
	if m > 0 || n == 0 || r.IntN(3) == 0 {
		b = append(b, '.')
		if n == 0 {
			m++
		}
	}
	for range m {
		b = append(b, byte('0'+r.IntN(10)))
	}
	if r.IntN(2) == 0 {
		b = append(b, "eE"[r.IntN(2)])
		if k := r.IntN(3); k < 2 {
			b = append(b, "-+"[k])
		}
		for range 1 + r.IntN(4) {
			b = append(b, byte('0'+r.IntN(10)))
		}
	}
	return b
}

// checkFloat compares Float and ParseFloat with strconv.ParseFloat bit by bit.
func checkFloat(t testing.TB, num []byte, point byte, room []byte) {
	want, err := strconv.ParseFloat(string(num), 64)
	cell := append(room[:0], num...)
	if point != '.' {
		for i, c := range cell {
			if c == '.' {
				cell[i] = point
			}
		}
	}
	v, s := ParseFloat(cell, point)
	switch {
	case err == nil && (s != OK || math.Float64bits(v) != math.Float64bits(want) && v == v):
		t.Fatalf("ParseFloat(%q) = %v, %d, want %v", cell, v, s, want)
	case err != nil && s != Range:
		t.Fatalf("ParseFloat(%q) = %v, %d, want Range: %v", cell, v, s, err)
	}
	cell = append(cell, '\n')
	v, end := Float(cell, 0, point)
	if end >= 0 && (err != nil || end != len(num) || math.Float64bits(v) != math.Float64bits(want)) {
		t.Fatalf("Float(%q) = %v, end %d, want %v (%v)", cell, v, end, want, err)
	}
}

func TestFloatBits(t *testing.T) {
	n := 1_200_000
	if testing.Short() {
		n = 100_000
	}
	r := rand.New(rand.NewPCG(3, 4))
	var b, room []byte
	taken := 0
	for i := range n {
		b = randomNumber(r, b)
		point := byte('.')
		if i%8 == 0 {
			point = ','
		}
		checkFloat(t, b, point, room)
		if _, end := Float(append(b, '\n'), 0, '.'); end >= 0 {
			taken++
		}
	}
	if taken < n/2 {
		t.Errorf("Float took only %d of %d numbers itself", taken, n)
	}
}

func TestFloatSimpleShapesAreFast(t *testing.T) {
	for _, s := range []string{"0", "-0", "1", "-17", "12.5", ".5", "5.", "-0.001", "1e5", "2.5E-3", "9007199254740993", "0.1234567890123456", "1e22", "1e23", "123456789012345678e-5"} {
		v, end := Float([]byte(s+","), 0, '.')
		want, err := strconv.ParseFloat(s, 64)
		if err != nil || end != len(s) || math.Float64bits(v) != math.Float64bits(want) {
			t.Errorf("Float(%q) = %v, %d, want %v, %v", s, v, end, want, err)
		}
	}
}

func TestNotNumbers(t *testing.T) {
	for _, s := range []string{"", "-", "+", ".", "-.", "e5", "1e", "1e+", "1e-", "--1", "1.2.3", "1,5", "0x10", "1_000", "0x1p-2", "1 ", " 1", "1f", "in", "infi", "nanx", "٣", "1e5.5", "+-1"} {
		if v, st := ParseFloat([]byte(s), '.'); st != Syntax {
			t.Errorf("ParseFloat(%q) = %v, %d, want Syntax", s, v, st)
		}
		if v, end := Float([]byte(s+"\n"), 0, '.'); end == len(s) {
			t.Errorf("Float(%q) took the whole cell as %v", s, v)
		}
	}
	for _, s := range []string{"1e400", "-1e309", "179769313486231580793728971405301e290", "1.8e308"} {
		if v, st := ParseFloat([]byte(s), '.'); st != Range {
			t.Errorf("ParseFloat(%q) = %v, %d, want Range", s, v, st)
		}
		if _, end := Float([]byte(s+"\n"), 0, '.'); end >= 0 {
			t.Errorf("Float(%q) took it", s)
		}
	}
	for s, want := range map[string]float64{"inf": math.Inf(1), "-Inf": math.Inf(-1), "+INFINITY": math.Inf(1), "1e-400": 0, "-infinity": math.Inf(-1)} {
		if v, st := ParseFloat([]byte(s), '.'); st != OK || v != want {
			t.Errorf("ParseFloat(%q) = %v, %d, want %v", s, v, st, want)
		}
	}
	for _, s := range []string{"nan", "NaN", "NAN", "-nan", "+NaN"} {
		if v, st := ParseFloat([]byte(s), '.'); st != OK || !math.IsNaN(v) {
			t.Errorf("ParseFloat(%q) = %v, %d, want NaN", s, v, st)
		}
	}
}

func TestIntegers(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	cells := []string{"0", "-0", "+0", "00", "007", "-01", "9223372036854775807", "9223372036854775808", "-9223372036854775808", "-9223372036854775809", "18446744073709551615", "18446744073709551616", "", "-", "1.0", "1e3", "1_0", "+5", "-1", "999999999999999999", "1000000000000000000", " 1"}
	for range 50000 {
		cells = append(cells, fmt.Sprint(int64(r.Uint64())>>r.IntN(64)), fmt.Sprint(r.Uint64()>>r.IntN(64)))
	}
	for _, c := range cells {
		want, err := strconv.ParseInt(c, 10, 64)
		zeros := len(bytes.TrimLeft([]byte(c), "+-")) > 1 && bytes.TrimLeft([]byte(c), "+-")[0] == '0'
		if v, s := ParseInt([]byte(c)); (s == OK) != (err == nil && !zeros) || (s == OK && v != want) {
			t.Fatalf("ParseInt(%q) = %d, %d, want %d, %v", c, v, s, want, err)
		}
		if v, end := Int([]byte(c+"\n"), 0); end == len(c) && (err != nil || zeros || v != want) {
			t.Fatalf("Int(%q) = %d, want %d, %v", c, v, want, err)
		} else if end < 0 && err == nil && !zeros && len(c) <= 18 && c[0] != '+' {
			t.Fatalf("Int(%q) left it to ParseInt", c)
		}
		uc := c
		if c != "" && (c[0] == '+' || c == "-0") {
			uc = c[1:]
		}
		uwant, uerr := strconv.ParseUint(uc, 10, 64)
		if v, s := ParseUint([]byte(c)); (s == OK) != (uerr == nil && !zeros) || (s == OK && v != uwant) {
			t.Fatalf("ParseUint(%q) = %d, %d, want %d, %v", c, v, s, uwant, uerr)
		}
	}
}

func FuzzFloat(f *testing.F) {
	for _, s := range []string{"1.5", "-0", "1e400", "9007199254740993", ".5e-300", "123456789012345678901234567890", "1e", "nan", "-inf"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		v, st := ParseFloat([]byte(s), '.')
		want, err := strconv.ParseFloat(s, 64)
		if st == OK && v == v && (err != nil || math.Float64bits(v) != math.Float64bits(want)) {
			t.Fatalf("ParseFloat(%q) = %v, want %v, %v", s, v, want, err)
		}
		if fv, end := Float([]byte(s+"\n"), 0, '.'); end == len(s) && (st != OK || math.Float64bits(fv) != math.Float64bits(v)) {
			t.Fatalf("Float(%q) = %v, ParseFloat %v, %d", s, fv, v, st)
		}
	})
}

func BenchmarkFloat(b *testing.B) {
	for _, c := range []string{"17", "12.5", "1234.5678", "0.12345678901234567"} {
		cell := []byte(c + "\n")
		b.Run("impl=scan/"+c, func(b *testing.B) {
			b.SetBytes(int64(len(c)))
			for b.Loop() {
				Float(cell, 0, '.')
			}
		})
		b.Run("impl=strconv/"+c, func(b *testing.B) {
			b.SetBytes(int64(len(c)))
			for b.Loop() {
				_, _ = strconv.ParseFloat(string(cell[:len(c)]), 64)
			}
		})
	}
}

func BenchmarkSkip(b *testing.B) {
	text := append(bytes.Repeat([]byte("123.45,"), 1000), '\n')
	b.SetBytes(int64(len(text)))
	for b.Loop() {
		Skip(text, 0, ',', 2000)
	}
}
