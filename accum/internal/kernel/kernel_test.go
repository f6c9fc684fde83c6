package kernel

import (
	"encoding/binary"
	"fmt"
	"hash/crc32"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// guard stands around every slice: a read of it shows in the result.
const guard = 7

func guarded(n, offset int) (whole, inner []float64) {
	whole = make([]float64, offset+guard+n+guard)
	for i := range whole {
		whole[i] = math.NaN()
	}
	inner = whole[offset+guard : offset+guard+n]
	return whole, inner
}

func checkGuards(t *testing.T, whole []float64, offset, n int) {
	t.Helper()
	for i, v := range whole {
		if in := i >= offset+guard && i < offset+guard+n; !in && !math.IsNaN(v) {
			t.Fatalf("wrote at %d, outside %d..%d", i, offset+guard, offset+guard+n-1)
		}
	}
}

func same(a, b float64) bool {
	return math.Float64bits(a) == math.Float64bits(b) || math.IsNaN(a) && math.IsNaN(b)
}

type gramFunc func(dst, x []float64, stride, rows, cols int)
type crossFunc func(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int)

var grams = []struct {
	name string
	f    gramFunc
}{
	{"Gram", Gram},
	{"Gram in AVX2", func(d, x []float64, s, r, c int) {
		defer DisableAVX512()()
		Gram(d, x, s, r, c)
	}},
	{"Gram in Go", func(d, x []float64, s, r, c int) {
		defer DisableAVX2()()
		Gram(d, x, s, r, c)
	}},
	{"width 2", func(d, x []float64, s, r, c int) { gramTiles(d, x, s, r, c, 2) }},
	{"width 3", func(d, x []float64, s, r, c int) { gramTiles(d, x, s, r, c, 3) }},
}

var crosses = []struct {
	name string
	f    crossFunc
}{
	{"Cross", Cross},
	{"Cross in AVX2", func(d []float64, ldd int, a []float64, sa, ca int, b []float64, sb, cb, r int) {
		defer DisableAVX512()()
		Cross(d, ldd, a, sa, ca, b, sb, cb, r)
	}},
	{"Cross in Go", func(d []float64, ldd int, a []float64, sa, ca int, b []float64, sb, cb, r int) {
		defer DisableAVX2()()
		Cross(d, ldd, a, sa, ca, b, sb, cb, r)
	}},
	{"width 2", func(d []float64, ldd int, a []float64, sa, ca int, b []float64, sb, cb, r int) {
		crossTiles(d, ldd, a, sa, ca, b, sb, cb, r, 2)
	}},
	{"width 3", func(d []float64, ldd int, a []float64, sa, ca int, b []float64, sb, cb, r int) {
		crossTiles(d, ldd, a, sa, ca, b, sb, cb, r, 3)
	}},
}

// numbers fills the columns of a block and leaves NaN between them.
func numbers(rng *rand.Rand, n, stride, rows, cols, offset int) (whole, x []float64) {
	whole, x = guarded(n, offset)
	for j := range cols {
		for r := range rows {
			x[j*stride+r] = rng.NormFloat64() * math.Ldexp(1, rng.IntN(80)-40)
		}
	}
	return whole, x
}

func rowCounts() []int {
	var n []int
	for i := range 100 {
		n = append(n, i)
	}
	return append(n, 511, 512)
}

func TestGramBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, rows := range rowCounts() {
		for cols := 1; cols <= 40; cols++ {
			if cols > 12 && (rows > 9 && rows < 512 && rows%10 != cols%10 || testing.Short()) {
				continue // all widths at few rows, all rows at few widths
			}
			offset := rng.IntN(4)
			stride := rows + rng.IntN(3)
			_, x := numbers(rng, max(0, (cols-1)*stride+rows), stride, rows, cols, offset)
			n := cols * (cols + 1) / 2
			_, want := guarded(n, 0)
			for i := range want {
				want[i] = rng.NormFloat64()
			}
			start := append([]float64(nil), want...)
			gramRef(want, x, stride, rows, cols)
			if rows == 0 {
				copy(want, start)
			}
			for _, g := range grams {
				whole, got := guarded(n, offset)
				copy(got, start)
				g.f(got, x, stride, rows, cols)
				for i := range want {
					if !same(got[i], want[i]) || math.IsNaN(got[i]) {
						t.Fatalf("%s: rows %d, columns %d, element %d: %x, reference %x", g.name, rows, cols, i, got[i], want[i])
					}
				}
				checkGuards(t, whole, offset, n)
			}
		}
	}
}

func TestCrossBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for _, rows := range rowCounts() {
		for range 30 {
			colsA, colsB := 1+rng.IntN(11), 1+rng.IntN(11)
			if n := rng.IntN(4); n == 0 {
				colsA = 1 + rng.IntN(2)
			} else if n == 1 {
				colsB = 1 + rng.IntN(2)
			}
			sa, sb := rows+rng.IntN(4), rows+rng.IntN(4)
			ldd := colsB + rng.IntN(3)
			offset := rng.IntN(4)
			_, a := numbers(rng, (colsA-1)*sa+rows, sa, rows, colsA, offset)
			_, b := numbers(rng, (colsB-1)*sb+rows, sb, rows, colsB, rng.IntN(4))
			n := (colsA-1)*ldd + colsB
			_, want := guarded(n, 0)
			for i := range colsA {
				for j := range colsB {
					want[i*ldd+j] = rng.NormFloat64()
				}
			}
			start := append([]float64(nil), want...)
			crossRef(want, ldd, a, sa, colsA, b, sb, colsB, rows)
			if rows == 0 {
				copy(want, start)
			}
			for _, c := range crosses {
				whole, got := guarded(n, offset)
				copy(got, start)
				c.f(got, ldd, a, sa, colsA, b, sb, colsB, rows)
				for i := range want {
					if !same(got[i], want[i]) || math.IsNaN(got[i]) != (i%ldd >= colsB) {
						t.Fatalf("%s: rows %d, %d x %d columns, element %d: %x, reference %x", c.name, rows, colsA, colsB, i, got[i], want[i])
					}
				}
				checkGuards(t, whole, offset, n)
			}
		}
	}
}

const golden = 0x1d7fb065

// TestGolden holds the bits against a computation in exact rational arithmetic
// (Python's fractions, each fma rounded once): they may never change, on no
// machine.
func TestGolden(t *testing.T) {
	const rows, cols = 39, 5
	state := uint64(1)
	x := make([]float64, rows*cols)
	for i := range x {
		state = state*6364136223846793005 + 1442695040888963407
		x[i] = float64(int64(state)>>11) / (1 << 45)
	}
	dst := make([]float64, cols*(cols+1)/2)
	for i := range dst {
		dst[i] = 0.1 * float64(i)
	}
	Gram(dst, x, rows, rows, cols)
	Gram(dst, x, rows, rows, cols)
	h := crc32.NewIEEE()
	for _, v := range dst {
		_ = binary.Write(h, binary.LittleEndian, math.Float64bits(v))
	}
	if got := h.Sum32(); got != golden {
		t.Errorf("checksum %#x, want %#x", got, golden)
	}
}

func TestGramIntegers(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	const rows, cols = 509, 7
	x := make([]float64, rows*cols)
	for i := range x {
		x[i] = float64(rng.IntN(2001) - 1000)
	}
	dst := make([]float64, cols*(cols+1)/2)
	Gram(dst, x, rows, rows, cols)
	for j := range cols {
		for i := range j + 1 {
			var want int64
			for r := range rows {
				want += int64(x[i*rows+r]) * int64(x[j*rows+r])
			}
			if got := dst[j*(j+1)/2+i]; got != float64(want) {
				t.Errorf("columns %d, %d: %v, want %d", i, j, got, want)
			}
		}
	}
}

func TestGramErrorBound(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 8))
	for _, rows := range []int{1, 2, 5, 64, 511, 512} {
		const cols = 5
		_, x := numbers(rng, rows*cols, rows, rows, cols, 0)
		dst := make([]float64, cols*(cols+1)/2)
		Gram(dst, x, rows, rows, cols)
		for j := range cols {
			for i := range j + 1 {
				sum, abs := new(big.Float).SetPrec(600), new(big.Float).SetPrec(600)
				for r := range rows {
					p := new(big.Float).SetPrec(600).SetFloat64(x[i*rows+r])
					p.Mul(p, new(big.Float).SetFloat64(x[j*rows+r]))
					sum.Add(sum, p)
					abs.Add(abs, p.Abs(p))
				}
				diff, _ := sum.Sub(sum, big.NewFloat(dst[j*(j+1)/2+i])).Float64()
				mag, _ := abs.Float64()
				if bound := (float64(rows)/4 + 3) * 0x1p-53 * mag; math.Abs(diff) > bound {
					t.Errorf("rows %d, columns %d, %d: error %g above the bound %g", rows, i, j, diff, bound)
				}
			}
		}
	}
}

func TestSpecialValues(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	for _, rows := range []int{1, 3, 4, 5, 18} {
		for at := range rows {
			for _, special := range []float64{inf, -inf, nan} {
				const cols = 5
				x := make([]float64, rows*cols)
				for i := range x {
					x[i] = 1 + float64(i%3)
				}
				x[2*rows+at] = special
				for _, g := range grams {
					dst := make([]float64, cols*(cols+1)/2)
					g.f(dst, x, rows, rows, cols)
					for j := range cols {
						for i := range j + 1 {
							got := dst[j*(j+1)/2+i]
							touched := i == 2 || j == 2
							switch {
							case !touched && (math.IsNaN(got) || math.IsInf(got, 0)),
								touched && math.IsNaN(special) && !math.IsNaN(got),
								touched && !math.IsNaN(special) && i != j && got != special,
								touched && !math.IsNaN(special) && i == j && got != inf:
								t.Fatalf("%s: %v in row %d of %d: columns %d, %d give %v", g.name, special, at, rows, i, j, got)
							}
						}
					}
				}
			}
		}
	}
}

// TestPaddedZero: products that underflow to -0 show whether lanes without a
// row in the last group are skipped (-0 stays) or padded (+0).
func TestPaddedZero(t *testing.T) {
	for rows := 1; rows <= 13; rows++ {
		for shape := range 8 * 8 {
			colsA, colsB := 1+shape/8, 1+shape%8
			a, b := make([]float64, rows*colsA), make([]float64, rows*colsB)
			for i := range a {
				a[i] = -1e-200
			}
			for i := range b {
				b[i] = 1e-200
			}
			for _, c := range crosses {
				dst := make([]float64, colsA*colsB)
				for i := range dst {
					dst[i] = math.Copysign(0, -1)
				}
				c.f(dst, colsB, a, rows, colsA, b, rows, colsB, rows)
				for i, v := range dst {
					if v != 0 || math.Signbit(v) != (rows%4 == 0) {
						t.Fatalf("%s: rows %d, %d x %d columns, element %d: sign bit %v", c.name, rows, colsA, colsB, i, math.Signbit(v))
					}
				}
			}
		}
	}
}

func panics(t *testing.T, want string, call func()) {
	t.Helper()
	defer func() {
		t.Helper()
		if got := recover(); got != want {
			t.Errorf("panic %v, want %q", got, want)
		}
	}()
	call()
}

func TestMisuse(t *testing.T) {
	f := func(n int) []float64 { return make([]float64, n) }
	for _, c := range []struct {
		want string
		call func()
	}{
		{negRows, func() { Gram(f(9), f(9), 3, -1, 2) }},
		{negCols, func() { Gram(f(9), f(9), 3, 3, -1) }},
		{badStride, func() { Gram(f(9), f(9), 2, 3, 2) }},
		{shortX, func() { Gram(f(3), f(6), 4, 3, 2) }},
		{shortDst, func() { Gram(f(2), f(7), 4, 3, 2) }},
		{negRows, func() { Cross(f(9), 2, f(9), 3, 2, f(9), 3, 2, -1) }},
		{negCols, func() { Cross(f(9), 2, f(9), 3, -1, f(9), 3, 2, 3) }},
		{negCols, func() { Cross(f(9), 2, f(9), 3, 2, f(9), 3, -2, 3) }},
		{badStride, func() { Cross(f(9), 2, f(9), 2, 2, f(9), 3, 2, 3) }},
		{badStride, func() { Cross(f(9), 2, f(9), 3, 2, f(9), 2, 2, 3) }},
		{badLdd, func() { Cross(f(9), 1, f(9), 3, 2, f(9), 3, 2, 3) }},
		{shortA, func() { Cross(f(9), 2, f(5), 3, 2, f(9), 3, 2, 3) }},
		{shortB, func() { Cross(f(9), 2, f(9), 3, 2, f(5), 3, 2, 3) }},
		{shortDst, func() { Cross(f(4), 3, f(9), 3, 2, f(9), 3, 2, 3) }},
		{shortX, func() { Scale(f(3), f(2), f(3)) }},
		{shortW, func() { Scale(f(3), f(3), f(2)) }},
		{shortY, func() { Axpy(1, f(3), f(2)) }},
	} {
		panics(t, c.want, c.call)
	}
	Gram(nil, nil, 0, 0, 3)
	Gram(nil, nil, 5, 5, 0)
	Cross(nil, 4, nil, 0, 3, nil, 0, 4, 0)
	Scale(nil, nil, f(1))
	Axpy(1, nil, f(1))
}

func Example() {
	// pallets and minutes of four barges, with a constant
	x := []float64{
		1, 1, 1, 1,
		10, 20, 15, 5,
		62, 118, 90, 34,
	}
	sums := make([]float64, 6)
	Gram(sums, x, 4, 4, 3)
	fmt.Println(sums)
	// Output: [4 50 750 304 4500 27024]
}
