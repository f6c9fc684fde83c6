package kernel

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// The definitions of Combine, Whiten and Leverage one element at a time.

func combineRef(dst, x []float64, stride, rows, cols int, theta []float64) {
	for r := range rows {
		for j := range cols {
			dst[r] = math.FMA(theta[j], x[j*stride+r], dst[r])
		}
	}
}

func whitenRef(t []float64, p int, z []float64, stride, rows int) {
	for r := range rows {
		for j := p - 1; j >= 0; j-- {
			u := t[j*p+j] * z[j*stride+r]
			for i := range j {
				if t[i*p+j] != 0 {
					u = math.FMA(t[i*p+j], z[i*stride+r], u)
				}
			}
			z[j*stride+r] = u
		}
	}
}

func leverageRef(h, x []float64, stride, rows, cols int, w []float64, k int) {
	for r := range rows {
		for c := range k {
			used := func(j int) bool { return w[j*k+c] != 0 }
			from, to := 0, cols
			for ; from < to && !used(from); from++ {
			}
			for ; to > from && !used(to-1); to-- {
			}
			if from == to {
				continue
			}
			var t float64
			for j := from; j < to; j++ {
				t = math.FMA(w[j*k+c], x[j*stride+r], t)
			}
			h[r] = math.FMA(t, t, h[r])
		}
	}
}

// withZeros is a rows x cols matrix of one of several patterns.
func withZeros(rng *rand.Rand, rows, cols, odds int) []float64 {
	m := make([]float64, rows*cols)
	draw(rng, m, odds)
	pattern := rng.IntN(5)
	for i := range rows {
		for j := range cols {
			zero := false
			switch pattern {
			case 1:
				zero = i > j
			case 2:
				zero = i < j
			case 3:
				zero = rng.IntN(3) == 0
			case 4:
				zero = rng.IntN(3) != 0
			}
			if zero {
				m[i*cols+j] = math.Copysign(0, rng.Float64()-0.5)
			}
		}
	}
	return m
}

func checkChains(t *testing.T, rng *rand.Rand, rows, cols, k, odds int) {
	t.Helper()
	stride := rows + rng.IntN(4)
	n := max(0, (cols-1)*stride+rows)
	_, x := guarded(n, rng.IntN(4))
	for j := range cols {
		draw(rng, x[j*stride:][:rows], odds)
	}
	start := make([]float64, rows)
	draw(rng, start, odds)
	theta, w, tri := make([]float64, cols), withZeros(rng, cols, k, odds), withZeros(rng, cols, cols, odds)
	draw(rng, theta, odds)
	for i := range cols {
		for j := range i {
			tri[i*cols+j] = math.NaN() // not read
		}
	}
	offset := rng.IntN(4)
	inBoth(func(path string) {
		for _, c := range []struct {
			name   string
			f, ref func(dst []float64)
		}{
			{
				"Combine", func(d []float64) { Combine(d, x, stride, rows, cols, theta) },
				func(d []float64) { combineRef(d, x, stride, rows, cols, theta) },
			},
			{
				"Leverage", func(d []float64) { Leverage(d, x, stride, rows, cols, w, k) },
				func(d []float64) { leverageRef(d, x, stride, rows, cols, w, k) },
			},
		} {
			want := slices.Clone(start)
			c.ref(want)
			whole, got := guarded(rows, offset)
			copy(got, start)
			c.f(got)
			sameAll(t, fmt.Sprintf("%s%s, %d rows, %d columns, %d", c.name, path, rows, cols, k), got, want)
			checkGuards(t, whole, offset, rows)
		}
		scaled, sd := make([]float64, n), stride+3
		for j := range cols {
			scaleRef(scaled[j*stride:][:rows], x[j*stride:], start)
		}
		nd := max(0, (cols-1)*sd+rows)
		whole, got := guarded(nd, offset)
		ScaleColumns(got, sd, x, stride, rows, cols, start)
		for j := range cols {
			sameAll(t, fmt.Sprintf("ScaleColumns%s, %d rows, column %d of %d", path, rows, j, cols), got[j*sd:][:rows], scaled[j*stride:][:rows])
			for r := j*sd + rows; r < min((j+1)*sd, nd); r++ {
				if !math.IsNaN(got[r]) {
					t.Fatalf("ScaleColumns%s: wrote %d rows behind column %d of %d", path, rows, j, cols)
				}
			}
		}
		checkGuards(t, whole, offset, nd)
		got = slices.Clone(x)
		ScaleColumns(got, stride, got, stride, rows, cols, start)
		for j := range cols {
			sameAll(t, "ScaleColumns in place"+path, got[j*stride:][:rows], scaled[j*stride:][:rows])
		}
		want := slices.Clone(x)
		whitenRef(tri, cols, want, stride, rows)
		whole, got = guarded(n, offset)
		copy(got, x)
		Whiten(tri, cols, got, stride, rows)
		sameAll(t, fmt.Sprintf("Whiten%s, %d rows, %d columns", path, rows, cols), got, want)
		checkGuards(t, whole, offset, n)
	})
}

func TestChainBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(31, 32))
	for _, rows := range rowCounts() {
		for range 4 {
			checkChains(t, rng, rows, rng.IntN(12), rng.IntN(12), []int{1 << 30, 1, 3, 40}[rng.IntN(4)])
		}
	}
	for _, cols := range []int{9, 13, 40, 63, 64, 70} { // more than one panel of rows
		for range 3 {
			checkChains(t, rng, 450+rng.IntN(100), cols, cols-rng.IntN(3), 1<<30)
		}
	}
}

func checkShiftScale(t *testing.T, rng *rand.Rand, n, odds int) {
	t.Helper()
	_, x := guarded(n, rng.IntN(4))
	draw(rng, x, odds)
	f := make([]float64, 2)
	draw(rng, f, odds)
	m, inv := f[0], f[1]
	want := make([]float64, n)
	var lane [4]float64
	for i, v := range x {
		d := float64(v - m)
		want[i] = float64(d * inv)
		if i < n/4*4 {
			lane[i%4] += v
		} else {
			lane[0] += v
		}
	}
	wantSum := float64(lane[0]+lane[1]) + float64(lane[2]+lane[3])
	offset := rng.IntN(4)
	inBoth(func(path string) {
		for _, inPlace := range []bool{false, true} {
			whole, got := guarded(n, offset)
			from := x
			if inPlace {
				copy(got, x)
				from = got
			}
			sum := ShiftScale(got, from, m, inv)
			name := fmt.Sprintf("ShiftScale%s of %d, in place %v", path, n, inPlace)
			sameAll(t, name, got, want)
			sameAll(t, name+", sum", []float64{sum}, []float64{wantSum})
			checkGuards(t, whole, offset, n)
		}
	})
}

func TestShiftScaleBits(t *testing.T) {
	rng := rand.New(rand.NewPCG(33, 34))
	for _, n := range rowCounts() {
		for _, odds := range []int{1, 5, 1 << 30, 1 << 30} {
			checkShiftScale(t, rng, n, odds)
		}
	}
}

func TestZeros(t *testing.T) {
	rng := rand.New(rand.NewPCG(35, 36))
	for _, n := range rowCounts() {
		for _, odds := range []int{1, 2, 1000} {
			whole, x := guarded(n, rng.IntN(4))
			draw(rng, x, odds)
			for i := range whole {
				if math.IsNaN(whole[i]) {
					whole[i] = 0 // around x, and counted if read
				}
			}
			want := zerosRef(x)
			inBoth(func(path string) {
				if got := Zeros(x); got != want {
					t.Fatalf("Zeros%s of %d finds %d, want %d", path, n, got, want)
				}
			})
		}
	}
}

// TestChains: small cases worked by hand, with numbers that are exact.
func TestChains(t *testing.T) {
	x := []float64{
		1, 1, 1, 9,
		2, 4, 8, 9,
	}
	dst := []float64{10, 20, 30}
	Combine(dst, x, 4, 3, 2, []float64{-1, 0.5})
	sameAll(t, "Combine", dst, []float64{10, 21, 33})
	h := []float64{100, 0, 0}
	Leverage(h, x, 4, 3, 2, []float64{
		3, 1,
		0, 2,
	}, 2)
	sameAll(t, "Leverage", h, []float64{100 + 9 + 25, 9 + 81, 9 + 17*17})
	Whiten([]float64{
		2, -1,
		0, 3,
	}, 2, x, 4, 3)
	sameAll(t, "Whiten", x, []float64{2, 2, 2, 9, 5, 11, 23, 9})
	if sum := ShiftScale(dst, []float64{1, 2, 4, 8}, 1, 0.5); sum != 7 {
		t.Errorf("ShiftScale of 3 elements: sum %v, want 7", sum)
	}
	if n := Zeros([]float64{0, math.Copysign(0, -1), 0x1p-1074, math.NaN(), 0}); n != 3 {
		t.Errorf("Zeros finds %d, want 3", n)
	}
	sameAll(t, "ShiftScale", dst, []float64{0, 0.5, 1.5})
}

func TestChainMisuse(t *testing.T) {
	f := func(n int) []float64 { return make([]float64, n) }
	for _, c := range []struct {
		want string
		call func()
	}{
		{shortX, func() { ShiftScale(f(3), f(2), 1, 1) }},
		{negRows, func() { Combine(f(3), f(9), 3, -1, 2, f(2)) }},
		{negCols, func() { Combine(f(3), f(9), 3, 3, -2, f(2)) }},
		{badStride, func() { Combine(f(3), f(9), 2, 3, 2, f(2)) }},
		{shortX, func() { Combine(f(3), f(6), 4, 3, 2, f(2)) }},
		{shortDst, func() { Combine(f(2), f(7), 4, 3, 2, f(2)) }},
		{shortTheta, func() { Combine(f(3), f(7), 4, 3, 2, f(1)) }},
		{negCols, func() { ScaleColumns(f(9), 3, f(9), 3, 3, -1, f(3)) }},
		{badStride, func() { ScaleColumns(f(9), 2, f(9), 3, 3, 2, f(3)) }},
		{shortX, func() { ScaleColumns(f(9), 3, f(6), 4, 3, 2, f(3)) }},
		{shortDst, func() { ScaleColumns(f(6), 4, f(9), 3, 3, 2, f(3)) }},
		{shortW, func() { ScaleColumns(f(9), 3, f(9), 3, 3, 2, f(2)) }},
		{negCols, func() { Whiten(f(4), -2, f(7), 4, 3) }},
		{shortX, func() { Whiten(f(4), 2, f(6), 4, 3) }},
		{shortT, func() { Whiten(f(3), 2, f(7), 4, 3) }},
		{negCols, func() { Leverage(f(3), f(7), 4, 3, 2, f(4), -1) }},
		{shortX, func() { Leverage(f(3), f(6), 4, 3, 2, f(4), 2) }},
		{shortH, func() { Leverage(f(2), f(7), 4, 3, 2, f(4), 2) }},
		{shortW, func() { Leverage(f(3), f(7), 4, 3, 2, f(3), 2) }},
	} {
		panics(t, c.want, c.call)
	}
	ShiftScale(nil, f(1), 1, 1)
	Combine(nil, nil, 5, 0, 2, nil)
	Combine(nil, nil, 5, 5, 0, nil)
	ScaleColumns(nil, 5, nil, 5, 0, 2, nil)
	Whiten(nil, 0, nil, 5, 5)
	Leverage(nil, nil, 5, 5, 0, nil, 3)
}

// BenchmarkChain holds the chains against the calls of Axpy and the loops in Go
// that they stand for.
func BenchmarkChain(b *testing.B) {
	const rows, stride = 512, 520
	for _, cols := range []int{4, 10, 32, 64} {
		x := benchBlock(stride, cols)
		dst, t := make([]float64, rows), make([]float64, rows)
		theta, tri := make([]float64, cols), make([]float64, cols*cols)
		for i := range cols {
			theta[i] = 1e-9
			for j := i; j < cols; j++ {
				tri[i*cols+j] = 1e-9
			}
			tri[i*cols+i] = 1
		}
		col := func(j int) []float64 { return x[j*stride:][:rows] }
		for _, c := range []struct {
			name  string
			f, by func()
		}{
			{
				"Combine", func() { Combine(dst, x, stride, rows, cols, theta) },
				func() {
					for j := range cols {
						Axpy(theta[j], col(j), dst)
					}
				},
			},
			{
				"Whiten", func() { Whiten(tri, cols, x, stride, rows) },
				func() {
					for j := cols - 1; j >= 0; j-- {
						u, d := col(j), tri[j*cols+j]
						for r := range u {
							u[r] *= d
						}
						for i := range j {
							Axpy(tri[i*cols+j], col(i), u)
						}
					}
				},
			},
			{
				"Leverage", func() { Leverage(dst, x, stride, rows, cols, tri, cols) },
				func() {
					for c := range cols {
						clear(t)
						for j := range cols {
							if w := tri[j*cols+c]; w != 0 {
								Axpy(w, col(j), t)
							}
						}
						for r, v := range t {
							dst[r] = math.FMA(v, v, dst[r])
						}
					}
				},
			},
		} {
			b.Run(fmt.Sprintf("f=%s/cols=%d", c.name, cols), func(b *testing.B) { versus(b, c.f, c.by) })
		}
	}
	for _, cols := range []int{4, 10, 20} {
		x, dst, w := benchBlock(stride, cols), make([]float64, stride*cols), benchBlock(rows, 1)
		b.Run(fmt.Sprintf("f=ScaleColumns/cols=%d", cols), func(b *testing.B) {
			versus(b, func() { ScaleColumns(dst, stride, x, stride, rows, cols, w) }, func() {
				for j := range cols {
					Scale(dst[j*stride:][:rows], x[j*stride:], w)
				}
			})
		})
	}
	x, dst := benchBlock(rows, 1), make([]float64, rows)
	b.Run("f=ShiftScale", func(b *testing.B) {
		versus(b, func() { ShiftScale(dst, x, 1, 0.5) }, func() { shiftScaleRef(dst, x, 1, 0.5) })
	})
}
