package kernel

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// special holds values at which implementations part if they part anywhere:
// signed zeros, infinities, products that underflow, the smallest numbers, sums
// that cancel.
var special = []float64{
	0, math.Copysign(0, -1), 1, -1, math.Inf(1), math.Inf(-1), math.NaN(),
	1e-200, -1e-200, 0x1p-1074, -0x1p-1074, 0x1p-1022, math.MaxFloat64, -math.MaxFloat64,
	1 + 0x1p-52, 0x1p53 + 2, 1.0 / 3, -0x1p600,
}

func draw(rng *rand.Rand, x []float64, odds int) {
	for i := range x {
		if rng.IntN(odds) == 0 {
			x[i] = special[rng.IntN(len(special))]
		} else {
			x[i] = rng.NormFloat64()
		}
	}
}

func sameAll(t *testing.T, name string, got, want []float64) {
	t.Helper()
	for i := range want {
		if !same(got[i], want[i]) {
			t.Fatalf("%s: element %d: %x (%v), reference %x (%v)", name, i, math.Float64bits(got[i]), got[i], math.Float64bits(want[i]), want[i])
		}
	}
}

// checkPaths holds every implementation against the reference on one problem
// drawn from rng.
func checkPaths(t *testing.T, rng *rand.Rand, rows, colsA, colsB, odds int) {
	t.Helper()
	sa, sb, ldd := rows+rng.IntN(4), rows+rng.IntN(4), colsB+rng.IntN(3)
	offset := rng.IntN(4)
	_, a := guarded(max(0, (colsA-1)*sa+rows), offset)
	_, b := guarded(max(0, (colsB-1)*sb+rows), rng.IntN(4))
	for j := range colsA {
		draw(rng, a[j*sa:][:rows], odds)
	}
	for j := range colsB {
		draw(rng, b[j*sb:][:rows], odds)
	}

	n := colsA * (colsA + 1) / 2
	start := make([]float64, n)
	draw(rng, start, odds)
	want := slices.Clone(start)
	if rows > 0 {
		gramRef(want, a, sa, rows, colsA)
	}
	for _, g := range grams {
		if rows == 0 && strings.HasPrefix(g.name, "width") {
			continue // Gram itself handles this case
		}
		whole, got := guarded(n, offset)
		copy(got, start)
		g.f(got, a, sa, rows, colsA)
		sameAll(t, g.name, got, want)
		checkGuards(t, whole, offset, n)
	}

	n = (colsA-1)*ldd + colsB
	start = make([]float64, n)
	draw(rng, start, odds)
	want = slices.Clone(start)
	if rows > 0 {
		crossRef(want, ldd, a, sa, colsA, b, sb, colsB, rows)
	}
	for _, c := range crosses {
		if rows == 0 && strings.HasPrefix(c.name, "width") {
			continue
		}
		whole, got := guarded(n, offset)
		copy(got, start)
		c.f(got, ldd, a, sa, colsA, b, sb, colsB, rows)
		sameAll(t, c.name, got, want)
		checkGuards(t, whole, offset, n)
	}
}

func checkElementwise(t *testing.T, rng *rand.Rand, n, odds int) {
	t.Helper()
	_, x := guarded(n, rng.IntN(4))
	_, y := guarded(n, rng.IntN(4))
	draw(rng, x, odds)
	draw(rng, y, odds)
	factor := []float64{rng.NormFloat64()}
	draw(rng, factor, odds)
	offset := rng.IntN(4)

	for _, f := range []struct {
		name string
		ref  func(y []float64)
		f    func(y []float64)
		self func(y []float64) // f with y in the place of x too
		same func(y []float64)
	}{
		{
			"Scale", func(y []float64) { scaleRef(y, x, y) }, func(y []float64) { Scale(y, x, y) },
			func(y []float64) { Scale(y, y, y) }, func(y []float64) { scaleRef(y, y, y) },
		},
		{
			"Axpy", func(y []float64) { axpyRef(factor[0], x, y) }, func(y []float64) { Axpy(factor[0], x, y) },
			func(y []float64) { Axpy(factor[0], y, y) }, func(y []float64) { axpyRef(factor[0], y, y) },
		},
	} {
		for _, path := range []string{"", " in Go"} {
			restore := func() {}
			if path != "" {
				restore = DisableAVX2()
			}
			for _, pair := range [][2]func([]float64){{f.ref, f.f}, {f.same, f.self}} {
				want := slices.Clone(y)
				pair[0](want)
				whole, got := guarded(n, offset)
				copy(got, y)
				pair[1](got)
				sameAll(t, f.name+path, got, want)
				checkGuards(t, whole, offset, n)
			}
			restore()
		}
	}
}

func TestSpecialBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 12))
	for rows := range 22 {
		for colsA := 1; colsA <= 9; colsA++ {
			for colsB := 1; colsB <= 9; colsB += 1 + rng.IntN(3) {
				checkPaths(t, rng, rows, colsA, colsB, []int{1, 3, 40, 1000}[rng.IntN(4)])
			}
		}
	}
}

func TestElementwiseBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(13, 14))
	for _, n := range rowCounts() {
		for _, odds := range []int{1, 5, 1000} {
			checkElementwise(t, rng, n, odds)
		}
	}
}

func TestElementwise(t *testing.T) {
	// Scale: products exact in double; Axpy: 1 - (1+u)(1-u) with u = 2^-30 is u^2
	// with one rounding and 0 with two.
	x, w := []float64{1, -2, 0.5, math.Inf(1), 9}, []float64{3, 4, 0.1, 0, 9}
	dst := []float64{0, 0, 0, 0}
	Scale(dst, x, w)
	sameAll(t, "Scale", dst, []float64{3, -8, 0.05, math.NaN()})
	Scale(x[:3], x, w)
	sameAll(t, "Scale in place", x, []float64{3, -8, 0.05, math.Inf(1), 9})

	const u = 0x1p-30
	x = make([]float64, 39)
	y := make([]float64, 40)
	for i := range y {
		y[i] = 1
	}
	for i := range x {
		x[i] = 1 + u
	}
	Axpy(-(1 - u), x, y)
	for i, v := range y {
		if want := map[bool]float64{true: u * u, false: 1}[i < len(x)]; v != want {
			t.Errorf("Axpy: element %d: %g, want %g", i, v, want)
		}
	}
}

func FuzzPaths(f *testing.F) {
	f.Add(uint64(1), uint16(512), byte(5), byte(7), byte(9))
	f.Add(uint64(2), uint16(3), byte(1), byte(1), byte(0))
	f.Add(uint64(3), uint16(17), byte(13), byte(4), byte(2))
	f.Fuzz(func(t *testing.T, seed uint64, rows uint16, colsA, colsB, odds byte) {
		rng := rand.New(rand.NewPCG(seed, 0))
		checkPaths(t, rng, int(rows%600), 1+int(colsA%24), 1+int(colsB%24), 1+int(odds))
		checkElementwise(t, rng, int(rows%600), 1+int(odds))
		checkChains(t, rng, int(rows%600), int(colsA%80), int(colsB%24), 1+int(odds))
		checkShiftScale(t, rng, int(rows%600), 1+int(odds))
		checkGramWide(t, rng, int(rows%600), 1+int(colsA%24), 1+int(odds))
		checkWideElements(t, rng, int(rows%600), 1+int(odds))
	})
}
