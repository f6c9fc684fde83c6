package scan

import (
	"bytes"
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"runtime"
	"strconv"
	"strings"
	"sync"
	"testing"
)

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

// columnOf makes a column of one cell in each row.
func columnOf(text []byte, ends []int32, cells ...[]byte) ([]byte, Column) {
	text, ends = text[:0], append(ends[:0], -1)
	for _, c := range cells {
		text = append(text, c...)
		ends = append(ends, int32(len(text)))
		text = append(text, '\n')
	}
	n := len(text)
	for range Pad {
		text = append(text, '7') // what is beyond must not matter
	}
	return text, Column{Text: text[:n], Ends: ends, Stride: 1, Last: true}
}

// checkFloat compares ParseFloat and Column.Floats with strconv.ParseFloat bit
// by bit.
func checkFloat(num []byte, point byte) error {
	want, err := strconv.ParseFloat(string(num), 64)
	cell := num
	if point != '.' {
		cell = bytes.ReplaceAll(num, []byte{'.'}, []byte{point})
	}
	same := func(v float64) bool { return math.Float64bits(v) == math.Float64bits(want) || v != v && want != want }
	switch v, s := ParseFloat(cell, point); {
	case err == nil && (s != OK || !same(v)):
		return fmt.Errorf("ParseFloat(%q) = %v, %d, want %v", cell, v, s, want)
	case err != nil && s != Range:
		return fmt.Errorf("ParseFloat(%q) = %v, %d, want Range: %v", cell, v, s, err)
	}
	var room [256]byte
	var ends [2]int32
	_, c := columnOf(room[:], ends[:], cell)
	var out [1]float64
	switch r := c.Floats(0, out[:], point); {
	case err == nil && (r != 1 || !same(out[0])):
		return fmt.Errorf("Floats(%q) = %v, %d, want %v", cell, out[0], r, want)
	case err != nil && r != 0:
		return fmt.Errorf("Floats(%q) = %v, %d, want none: %v", cell, out[0], r, err)
	}
	return nil
}

// Ten million numbers of all shapes, over all processors.
func TestFloatBits(t *testing.T) {
	n := 10_000_000
	if testing.Short() {
		n = 400_000
	}
	workers := runtime.GOMAXPROCS(0)
	var wg sync.WaitGroup
	for w := range workers {
		wg.Go(func() {
			r := rand.New(rand.NewPCG(3, uint64(w)))
			var b []byte
			for i := range n/workers + 1 {
				b = randomNumber(r, b)
				point := byte('.')
				if i%8 == 0 {
					point = ','
				}
				if err := checkFloat(b, point); err != nil {
					t.Error(err)
					return
				}
			}
		})
	}
	wg.Wait()
}

// Digits of a number halfway between two doubles, written out in full and cut
// off, go to the even one; one digit more or less decides.
func TestHalfway(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 10))
	n := 3_000
	if testing.Short() {
		n = 500
	}
	for range n {
		v := math.Float64frombits(r.Uint64() >> 1)
		if r.IntN(2) == 0 {
			v = math.Ldexp(1+r.Float64(), r.IntN(140)-70)
		}
		next := math.Nextafter(v, math.Inf(1))
		if v != v || math.IsInf(next, 0) {
			continue
		}
		half := new(big.Float).SetPrec(2000).SetFloat64(v)
		half.Add(half, new(big.Float).SetFloat64(next)).Quo(half, big.NewFloat(2))
		even := v
		if math.Float64bits(v)&1 == 1 {
			even = next
		}
		s := half.Text('f', -1)
		if len(s) > 400 || r.IntN(2) == 0 {
			s = half.Text('e', 800)
		}
		digits, exp, _ := strings.Cut(s, "e")
		if exp != "" {
			exp = "e" + exp
		}
		above, below := digits+"1", digits
		if !strings.Contains(digits, ".") {
			above = digits + ".1"
		}
		// One less in the last place.
		k := strings.LastIndexFunc(below, func(c rune) bool { return c != '0' && c != '.' })
		below = below[:k] + string(below[k]-1) + strings.ReplaceAll(below[k+1:], "0", "9")
		for _, c := range []struct {
			cell string
			want float64
		}{{digits, even}, {above, next}, {below, v}} {
			if got, st := ParseFloat([]byte(c.cell+exp), '.'); st != OK || got != c.want {
				t.Fatalf("ParseFloat(%q) = %v, %d, want %v", c.cell+exp, got, st, c.want)
			}
		}
	}
}

// The table of powers against exact ones.
func TestPowers(t *testing.T) {
	for e := minPower; e <= maxPower; e++ {
		p := powers[e-minPower]
		got := new(big.Int).SetUint64(p.hi)
		got.Add(got.Lsh(got, 64), new(big.Int).SetUint64(p.lo))
		if got.BitLen() != 128 {
			t.Fatalf("5^%d has %d bits", e, got.BitLen())
		}
		// got <= 5^e 2^s < got + 1, or up to one above.
		exact := new(big.Rat).SetInt(new(big.Int).Exp(big.NewInt(5), big.NewInt(int64(max(e, -e))), nil))
		if e < 0 {
			exact.Inv(exact)
		}
		low, high := new(big.Rat).SetInt(got), new(big.Rat).SetInt(new(big.Int).Add(got, big.NewInt(1)))
		if e < 0 && e >= -27 {
			low, high = new(big.Rat).SetInt(new(big.Int).Sub(got, big.NewInt(1))), low
		}
		scale := new(big.Rat).SetInt(new(big.Int).Lsh(big.NewInt(1), uint(127+max(0, (-e*2322)/1000+2))))
		scale.Mul(scale, exact)
		for scale.Cmp(high) >= 0 {
			scale.Quo(scale, big.NewRat(2, 1))
		}
		if scale.Cmp(low) < 0 {
			t.Errorf("5^%d is %v times a power of two, want within %v and %v", e, scale.FloatString(3), low, high)
		}
	}
}

// Cells of every length in one column, empty and odd ones among them.
func TestColumns(t *testing.T) {
	cells := []string{"1", "", "-2", "3.5", "", "0.123", "-12345678", "1234567.8", "12345678.9", "123456789012345", "0.12345678901234567",
		"-.5", "5.", "1e5", "nan", "+7", "1234567890.12345", "12345678901234.5", "9007199254740993", "99999999999999.99", "-1234567890123456.789", "\r"}
	var b [][]byte
	for _, c := range cells {
		b = append(b, []byte(c))
	}
	b[3] = []byte("3.5\r")
	_, c := columnOf(nil, nil, b...)
	out := make([]float64, len(cells))
	if r := c.Floats(0, out, '.'); r != len(cells) {
		t.Fatalf("stopped at %q", cells[r])
	}
	for i, s := range cells {
		want, err := strconv.ParseFloat(s, 64)
		if s == "" || s == "\r" {
			want, err = math.NaN(), nil
		}
		if err != nil || out[i] != want && want == want || out[i] == out[i] && want != want {
			t.Errorf("%q is %v, want %v %v", s, out[i], want, err)
		}
	}
	for _, s := range []string{".", "-", "-.", "1.2.3", "1-2", "--1", "12345.6.7", "1234567890.1.2", "123456789x", "x", "1 ", " 1", "1/", "1:", "12345678.", "-12345678."} {
		_, c := columnOf(nil, nil, []byte("1"), []byte(s))
		want, err := strconv.ParseFloat(s, 64)
		if r := c.Floats(0, out[:2], '.'); (r == 2) != (err == nil) || r == 2 && out[1] != want {
			t.Errorf("%q: row %d, %v, want %v, %v", s, r, out[1], want, err)
		}
	}
}

func oneInt(cell string) (v int64, ok bool) {
	_, c := columnOf(nil, nil, []byte(cell))
	var out [1]int64
	r := c.Ints(0, out[:])
	return out[0], r == 1
}

func TestNotNumbers(t *testing.T) {
	one := func(s string) (float64, bool) {
		_, c := columnOf(nil, nil, []byte(s))
		var out [1]float64
		r := c.Floats(0, out[:], '.')
		return out[0], r == 1
	}
	for _, s := range []string{"", "-", "+", ".", "-.", "e5", "1e", "1e+", "1e-", "--1", "1.2.3", "1,5", "0x10", "1_000", "0x1p-2", "1 ", " 1", "1f", "in", "infi", "nanx", "٣", "1e5.5", "+-1"} {
		if v, st := ParseFloat([]byte(s), '.'); st != Syntax {
			t.Errorf("ParseFloat(%q) = %v, %d, want Syntax", s, v, st)
		}
		if v, ok := one(s); ok && s != "" {
			t.Errorf("Floats(%q) took it as %v", s, v)
		}
	}
	for _, s := range []string{"1e400", "-1e309", "179769313486231580793728971405301e290", "1.8e308", "1e99999999999999999999"} {
		if v, st := ParseFloat([]byte(s), '.'); st != Range {
			t.Errorf("ParseFloat(%q) = %v, %d, want Range", s, v, st)
		}
		if _, ok := one(s); ok {
			t.Errorf("Floats(%q) took it", s)
		}
	}
	for s, want := range map[string]float64{"inf": math.Inf(1), "-Inf": math.Inf(-1), "+INFINITY": math.Inf(1), "1e-400": 0, "-infinity": math.Inf(-1), "1e-99999999999999999999": 0, "0e99999999999999999999": 0} {
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
		if v, s := oneInt(c); s && (err != nil || zeros || v != want) {
			t.Fatalf("Ints(%q) = %d, want %d, %v", c, v, want, err)
		} else if !s && err == nil && !zeros && len(c) <= 16 && c[0] != '+' {
			t.Fatalf("Ints(%q) left it to ParseInt", c)
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

// FuzzNumber compares with strconv, which takes hexadecimal and underscores beside.
func FuzzNumber(f *testing.F) {
	for _, s := range []string{"1.5", "-0", "1e400", "9007199254740993", ".5e-300", "123456789012345678901234567890", "1e", "nan", "-inf", "2.2250738585072011e-308", "0.000000000000000000000000123456789012345678901"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		if len(s) > 100 || strings.ContainsAny(s, "\n\r") {
			return
		}
		if strings.Trim(s, "0123456789+-.eE") == "" {
			_, c := columnOf(nil, nil, []byte("\""+s+"\""))
			var out [1]float64
			v, st := ParseFloat([]byte(s), '.')
			if r := c.Floats(0, out[:], '.'); (r == 1) != (st == OK) || r == 1 && math.Float64bits(out[0]) != math.Float64bits(v) {
				t.Fatalf("Floats of %q in quotes = %v, %d, ParseFloat %v, %d", s, out[0], r, v, st)
			}
		}
		v, st := ParseFloat([]byte(s), '.')
		want, err := strconv.ParseFloat(s, 64)
		ours := !strings.ContainsAny(s, "xX_")
		switch {
		case v != v: // we take nan with a sign
		case st == OK && (err != nil || math.Float64bits(v) != math.Float64bits(want)):
			t.Fatalf("ParseFloat(%q) = %v, want %v, %v", s, v, want, err)
		case ours && (st == OK) != (err == nil):
			t.Fatalf("ParseFloat(%q) = %v, %d, want %v, %v", s, v, st, want, err)
		}
		if s != "" && s[0] == '"' {
			return // an Index lets through only cells that end in a quote too
		}
		_, c := columnOf(nil, nil, []byte(s))
		var out [1]float64
		if r := c.Floats(0, out[:], '.'); s != "" && ((r == 1) != (st == OK) || r == 1 && math.Float64bits(out[0]) != math.Float64bits(v) && v == v) {
			t.Fatalf("Floats(%q) = %v, %d, ParseFloat %v, %d", s, out[0], r, v, st)
		}
		n, is := ParseInt([]byte(s))
		if got, ok := oneInt(s); ok && (is != OK || got != n) {
			t.Fatalf("Ints(%q) = %d, ParseInt %d, %d", s, got, n, is)
		}
	})
}
