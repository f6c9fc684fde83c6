package kernel

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"slices"
	"testing"
)

// inBoth runs f with assembly, where there is some, and without.
func inBoth(f func(path string)) {
	f("")
	defer DisableAVX2()()
	f(" in Go")
}

// drawWide fills x with double-doubles, and with whatever draw gives where odds
// are small.
func drawWide(rng *rand.Rand, hi, lo []float64, odds int) {
	draw(rng, hi, odds)
	for i, h := range hi {
		lo[i] = h * 0x1p-53 * (rng.Float64() - 0.5)
	}
	if odds < 100 {
		draw(rng, lo, odds)
	}
}

// wideBlock is a double-double block with NaN around it and between its columns.
func wideBlock(rng *rand.Rand, stride, rows, cols, odds int) (hi, lo []float64) {
	n := max(0, (cols-1)*stride+rows)
	_, hi = guarded(n, rng.IntN(4))
	_, lo = guarded(n, rng.IntN(4))
	for j := range cols {
		drawWide(rng, hi[j*stride:][:rows], lo[j*stride:][:rows], odds)
	}
	return hi, lo
}

func checkGramWide(t *testing.T, rng *rand.Rand, rows, cols, odds int) {
	t.Helper()
	stride, n := rows+rng.IntN(3), cols*(cols+1)/2
	hi, lo := wideBlock(rng, stride, rows, cols, odds)
	start, startLow := make([]float64, n), make([]float64, n)
	drawWide(rng, start, startLow, odds)
	want, wantLow := slices.Clone(start), slices.Clone(startLow)
	if rows > 0 {
		gramWideRef(want, wantLow, hi, lo, stride, rows, cols)
	}
	inBoth(func(path string) {
		name := fmt.Sprintf("GramWide%s, %d rows, %d columns", path, rows, cols)
		offset := rng.IntN(4)
		whole, got := guarded(n, offset)
		wholeLow, gotLow := guarded(n, offset)
		copy(got, start)
		copy(gotLow, startLow)
		GramWide(got, gotLow, hi, lo, stride, rows, cols)
		sameAll(t, name, got, want)
		sameAll(t, name+", low", gotLow, wantLow)
		checkGuards(t, whole, offset, n)
		checkGuards(t, wholeLow, offset, n)
		if odds > 1e6 && slices.ContainsFunc(got, math.IsNaN) {
			t.Fatalf("%s: NaN", name)
		}
	})
}

func TestGramWideBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(21, 22))
	for _, rows := range rowCounts() {
		for cols := 1; cols <= 11; cols++ {
			if rows < 20 || (rows+cols)%4 == 0 {
				checkGramWide(t, rng, rows, cols, []int{1 << 30, 1, 3, 40}[rng.IntN(4)])
			}
		}
	}
}

// checkWide holds the functions on single elements against their references.
func checkWideElements(t *testing.T, rng *rand.Rand, n, odds int) {
	t.Helper()
	xHi, xLo := wideBlock(rng, n, n, 1, odds)
	yHi, yLo := wideBlock(rng, n, n, 1, odds)
	f := make([]float64, 2)
	drawWide(rng, f[:1], f[1:], odds)
	inv := math.Ldexp(1, rng.IntN(60)-30)
	for _, c := range []struct {
		name   string
		f, ref func(xHi, xLo, yHi, yLo []float64)
	}{
		{
			"AxpyWide", func(xHi, xLo, yHi, yLo []float64) { AxpyWide(f[0], f[1], xHi, xLo, yHi, yLo) },
			func(xHi, xLo, yHi, yLo []float64) { axpyWideRef(f[0], f[1], xHi, xLo, yHi, yLo) },
		},
		{
			"ScaleWide", func(xHi, xLo, yHi, yLo []float64) { ScaleWide(yHi, yLo, xHi, xLo, f[0]) },
			func(xHi, xLo, yHi, yLo []float64) { scaleWideRef(yHi, yLo, xHi, xLo, f[0]) },
		},
		{
			"ShiftScaleWide", func(xHi, xLo, yHi, yLo []float64) { ShiftScaleWide(yHi, yLo, xHi, xLo, f[0], f[1], inv) },
			func(xHi, xLo, yHi, yLo []float64) { shiftScaleWideRef(yHi, yLo, xHi, xLo, -f[0], -f[1], inv) },
		},
	} {
		for _, inPlace := range []bool{false, true} {
			inBoth(func(path string) {
				wantHi, wantLo := slices.Clone(yHi), slices.Clone(yLo)
				offset := rng.IntN(4)
				whole, gotHi := guarded(n, offset)
				wholeLow, gotLo := guarded(n, offset)
				copy(gotHi, yHi)
				copy(gotLo, yLo)
				if inPlace {
					c.ref(wantHi, wantLo, wantHi, wantLo)
					c.f(gotHi, gotLo, gotHi, gotLo)
				} else {
					c.ref(xHi, xLo, wantHi, wantLo)
					c.f(xHi, xLo, gotHi, gotLo)
				}
				name := fmt.Sprintf("%s%s of %d, in place %v", c.name, path, n, inPlace)
				sameAll(t, name, gotHi, wantHi)
				sameAll(t, name+", low", gotLo, wantLo)
				checkGuards(t, whole, offset, n)
				checkGuards(t, wholeLow, offset, n)
			})
		}
	}
}

func TestWideBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(23, 24))
	for _, n := range rowCounts() {
		for _, odds := range []int{1, 5, 1 << 30} {
			checkWideElements(t, rng, n, odds)
		}
	}
}

// exact returns hi + lo without rounding.
func exact(hi, lo float64) *big.Float {
	f := new(big.Float).SetPrec(2000).SetFloat64(hi)
	return f.Add(f, new(big.Float).SetFloat64(lo))
}

// off returns |got - want| / size in units of 2^-106.
func off(t *testing.T, hi, lo float64, want, size *big.Float) float64 {
	t.Helper()
	if math.Abs(lo) > math.Abs(hi)*0x1p-53 {
		t.Errorf("%g and %g: not a double-double", hi, lo)
	}
	d := exact(hi, lo)
	d.Sub(d, want).Abs(d)
	if d.Sign() == 0 {
		return 0
	}
	q, _ := d.Quo(d, size).Float64()
	return q * 0x1p106
}

// TestGramWideDigits: numbers of one sign, of both, sums that cancel, and columns
// of far scales, against exact sums.
func TestGramWideDigits(t *testing.T) {
	rng := rand.New(rand.NewPCG(25, 26))
	const rows, cols, blocks = 512, 3, 20
	for _, kind := range []string{"one sign", "both signs", "cancelling", "far scales"} {
		dst, low := make([]float64, 6), make([]float64, 6)
		want, size := make([]*big.Float, 6), make([]*big.Float, 6)
		for i := range want {
			want[i], size[i] = exact(0, 0), exact(0, 0)
		}
		for range blocks {
			hi, lo := make([]float64, rows*cols), make([]float64, rows*cols)
			for i := range hi {
				hi[i] = rng.Float64()
				if kind != "one sign" {
					hi[i] -= 0.5
				}
				if kind == "far scales" {
					hi[i] = math.Ldexp(hi[i], rng.IntN(60))
				}
				lo[i] = hi[i] * 0x1p-53 * (rng.Float64() - 0.5)
			}
			if kind == "cancelling" { // column 1 repeats, column 0 changes sign
				for r := 0; r < rows; r += 2 {
					hi[r+1], lo[r+1] = -hi[r], -lo[r]*(1+rng.Float64())
					hi[rows+r+1], lo[rows+r+1] = hi[rows+r], lo[rows+r]
				}
			}
			GramWide(dst, low, hi, lo, rows, rows, cols)
			for j := range cols {
				for i := range j + 1 {
					at := j*(j+1)/2 + i
					for r := range rows {
						p := exact(hi[i*rows+r], lo[i*rows+r])
						p.Mul(p, exact(hi[j*rows+r], lo[j*rows+r]))
						want[at].Add(want[at], p)
						size[at].Add(size[at], p.Abs(p))
					}
				}
			}
		}
		var worst float64
		for i := range want {
			worst = max(worst, off(t, dst[i], low[i], want[i], size[i]))
		}
		t.Logf("%s: %.2g 2^-106 of the sum of absolute products", kind, worst)
		if worst > 60 {
			t.Errorf("%s: error %.3g 2^-106 of the sum of absolute products", kind, worst)
		}
	}
}

// TestWideDigits holds single elements against exact ones, with the bounds of
// the documentation.
func TestWideDigits(t *testing.T) {
	rng := rand.New(rand.NewPCG(27, 28))
	const n = 2000
	wide := func() (hi, lo []float64) {
		hi, lo = make([]float64, n), make([]float64, n)
		for i := range hi {
			hi[i] = rng.NormFloat64()
			lo[i] = hi[i] * 0x1p-53 * (rng.Float64() - 0.5)
		}
		return hi, lo
	}
	abs := func(f *big.Float) *big.Float { return new(big.Float).Abs(f) }
	var axpy, scale, shift float64

	// y + t x, half of them cancelling but for a few bits
	xHi, xLo := wide()
	yHi, yLo := wide()
	tt, tLow := 1.0/3, 0x1p-57
	for i := range n / 2 {
		yHi[i], yLo[i] = -tt*xHi[i]*(1+0x1p-50*float64(rng.IntN(9)-4)), xLo[i]*rng.Float64()/4
	}
	dHi, dLo := slices.Clone(yHi), slices.Clone(yLo)
	AxpyWide(tt, tLow, xHi, xLo, dHi, dLo)
	for i := range n {
		y, p := exact(yHi[i], yLo[i]), exact(tt, tLow)
		p.Mul(p, exact(xHi[i], xLo[i]))
		size := new(big.Float).Add(abs(y), abs(p))
		axpy = max(axpy, off(t, dHi[i], dLo[i], y.Add(y, p), size))
	}

	ScaleWide(dHi, dLo, xHi, xLo, tt)
	for i := range n {
		p := exact(tt, 0)
		p.Mul(p, exact(xHi[i], xLo[i]))
		scale = max(scale, off(t, dHi[i], dLo[i], p, abs(p)))
	}

	// x - m, half of them cancelling wholly or but for a few bits
	m, mLow := xHi[7]*(1+0x1p-40), 0x1p-60
	for i := range n / 2 {
		xHi[i], xLo[i] = m*(1+0x1p-52*float64(rng.IntN(5)-2)), mLow*float64(rng.IntN(9))/4
	}
	ShiftScaleWide(dHi, dLo, xHi, xLo, m, mLow, 0x1p-7)
	for i := range n {
		c := exact(m, mLow)
		c.Sub(exact(xHi[i], xLo[i]), c).Mul(c, big.NewFloat(0x1p-7))
		if c.Sign() != 0 {
			shift = max(shift, off(t, dHi[i], dLo[i], c, abs(c)))
		} else if dHi[i] != 0 || dLo[i] != 0 {
			t.Errorf("x - m = 0 gives %g + %g", dHi[i], dLo[i])
		}
	}
	t.Logf("in 2^-106: axpy %.2g, scale %.2g, shift %.2g", axpy, scale, shift)
	if axpy > 8 || scale > 4 || shift > 4 {
		t.Errorf("errors in 2^-106: axpy %.3g, scale %.3g, shift %.3g", axpy, scale, shift)
	}
}

func TestWideMisuse(t *testing.T) {
	f := func(n int) []float64 { return make([]float64, n) }
	for _, c := range []struct {
		want string
		call func()
	}{
		{negRows, func() { GramWide(f(9), f(9), f(9), f(9), 3, -1, 2) }},
		{negCols, func() { GramWide(f(9), f(9), f(9), f(9), 3, 3, -1) }},
		{badStride, func() { GramWide(f(9), f(9), f(9), f(9), 2, 3, 2) }},
		{shortX, func() { GramWide(f(3), f(3), f(6), f(7), 4, 3, 2) }},
		{shortLow, func() { GramWide(f(3), f(3), f(7), f(6), 4, 3, 2) }},
		{shortDst, func() { GramWide(f(2), f(3), f(7), f(7), 4, 3, 2) }},
		{shortLow, func() { GramWide(f(3), f(2), f(7), f(7), 4, 3, 2) }},
		{shortLow, func() { AxpyWide(1, 0, f(3), f(2), f(3), f(3)) }},
		{shortY, func() { AxpyWide(1, 0, f(3), f(3), f(2), f(3)) }},
		{shortLow, func() { AxpyWide(1, 0, f(3), f(3), f(3), f(2)) }},
		{shortX, func() { ScaleWide(f(3), f(3), f(2), f(3), 1) }},
		{shortLow, func() { ScaleWide(f(3), f(2), f(3), f(3), 1) }},
		{shortLow, func() { ScaleWide(f(3), f(3), f(3), f(2), 1) }},
		{shortX, func() { ShiftScaleWide(f(3), f(3), f(2), f(3), 1, 0, 1) }},
		{shortLow, func() { ShiftScaleWide(f(3), f(2), f(3), f(3), 1, 0, 1) }},
		{shortLow, func() { ShiftScaleWide(f(3), f(3), f(3), f(2), 1, 0, 1) }},
	} {
		panics(t, c.want, c.call)
	}
	GramWide(nil, nil, nil, nil, 0, 0, 3)
	GramWide(nil, nil, nil, nil, 5, 5, 0)
	AxpyWide(1, 0, nil, nil, nil, nil)
	ScaleWide(nil, nil, nil, nil, 1)
	ShiftScaleWide(nil, nil, nil, nil, 1, 0, 1)
}

// BenchmarkGramWide: the ratio is the time of GramWide over that of Gram.
func BenchmarkGramWide(b *testing.B) {
	const rows = 512
	for _, cols := range []int{4, 10, 12, 32} {
		hi := benchBlock(rows, cols)
		lo := make([]float64, len(hi))
		for i, h := range hi {
			lo[i] = h * 0x1p-54
		}
		n := cols * (cols + 1) / 2
		dst, low := make([]float64, n), make([]float64, n)
		b.Run(fmt.Sprintf("cols=%d", cols), func(b *testing.B) {
			versus(b, func() { Gram(dst, hi, rows, rows, cols) }, func() { GramWide(dst, low, hi, lo, rows, rows, cols) })
		})
	}
}
