package kernel

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
)

func benchBlock(rows, cols int) []float64 {
	rng := rand.New(rand.NewPCG(9, 9))
	x := make([]float64, rows*cols)
	for i := range x {
		x[i] = rng.NormFloat64()
	}
	return x
}

// flops counts a multiplication and an addition a row for each of n products.
func flops(b *testing.B, rows, n int) {
	b.ReportMetric(2*float64(rows)*float64(n)*float64(b.N)/float64(b.Elapsed().Nanoseconds()), "GFLOP/s")
}

// inGo runs f without assembly.
func inGo(b *testing.B, f func()) {
	defer DisableAVX2()()
	for b.Loop() {
		f()
	}
}

// compare runs f with and without assembly, and other beside them, each doing n
// products a row.
func compare(b *testing.B, name string, rows, n int, bytes int64, f, other func()) {
	run := func(impl string, loop func(b *testing.B)) {
		b.Run(name+"/impl="+impl, func(b *testing.B) {
			b.SetBytes(bytes)
			loop(b)
			flops(b, rows, n)
		})
	}
	if useAVX2 {
		run("asm", func(b *testing.B) {
			for b.Loop() {
				f()
			}
		})
	}
	run("go", func(b *testing.B) { inGo(b, f) })
	if other != nil {
		run("gonum", func(b *testing.B) {
			for b.Loop() {
				other()
			}
		})
	}
}

// repeated times several calls of f, in nanoseconds.
func repeated(f func()) func(times int) float64 {
	return func(times int) float64 {
		from := time.Now()
		for range times {
			f()
		}
		return float64(time.Since(from).Nanoseconds())
	}
}

// takeTurns runs functions by turns, a third of a millisecond each, and returns
// the lower quartile of their times for one: what slows the machine down for a
// while slows all, and other processes can only add.
func takeTurns(run ...func(times int) float64) []float64 {
	const rounds, burst = 101, 3e5
	times := make([]int, len(run))
	for i, f := range run {
		f(3)
		times[i] = max(1, int(burst/(f(10)/10)))
	}
	t := make([][]float64, len(run))
	for range rounds {
		for i, f := range run {
			t[i] = append(t[i], f(times[i])/float64(times[i]))
		}
	}
	quartile := make([]float64, len(run))
	for i := range t {
		slices.Sort(t[i])
		quartile[i] = t[i][rounds/4]
	}
	return quartile
}

// versus reports how many times as long as f other takes.
func versus(b *testing.B, f, other func()) {
	for b.Loop() {
		t := takeTurns(repeated(f), repeated(other))
		b.ReportMetric(t[0], "ns/call")
		b.ReportMetric(t[1]/t[0], "ratio")
		b.ReportMetric(0, "ns/op")
	}
}

var benchCols = []int{8, 10, 16, 32, 64, 128, 256}

func BenchmarkGram(b *testing.B) {
	const rows = 512
	for _, cols := range benchCols {
		x := benchBlock(rows, cols)
		n := cols * (cols + 1) / 2
		dst := make([]float64, n)
		full := make([]float64, cols*cols)
		compare(b, fmt.Sprintf("rows=%d/cols=%d", rows, cols), rows, n, int64(8*rows*cols),
			func() { Gram(dst, x, rows, rows, cols) },
			func() {
				blas64.Syrk(blas.NoTrans, 1, blas64.General{Rows: cols, Cols: rows, Stride: rows, Data: x},
					1, blas64.Symmetric{N: cols, Stride: cols, Data: full, Uplo: blas.Upper})
			})
	}
}

func BenchmarkCross(b *testing.B) {
	const rows = 512
	for _, cols := range benchCols {
		x, y := benchBlock(rows, cols), benchBlock(rows, cols)
		dst := make([]float64, cols*cols)
		mat := func(d []float64) blas64.General {
			return blas64.General{Rows: cols, Cols: rows, Stride: rows, Data: d}
		}
		compare(b, fmt.Sprintf("rows=%d/cols=%d", rows, cols), rows, cols*cols, int64(2*8*rows*cols),
			func() { Cross(dst, cols, x, rows, cols, y, rows, cols, rows) },
			func() {
				blas64.Gemm(blas.NoTrans, blas.Trans, 1, mat(x), mat(y), 1, blas64.General{Rows: cols, Cols: cols, Stride: cols, Data: dst})
			})
	}
}

// BenchmarkCrossNarrow has one or two columns on one side.
func BenchmarkCrossNarrow(b *testing.B) {
	const rows = 512
	for _, shape := range [][2]int{{1, 8}, {8, 1}, {2, 8}, {8, 2}, {1, 55}, {2, 45}} {
		m, n := shape[0], shape[1]
		x, y := benchBlock(rows, m), benchBlock(rows, n)
		dst := make([]float64, m*n)
		compare(b, fmt.Sprintf("rows=%d/cols=%dx%d", rows, m, n), rows, m*n, int64(8*rows*(m+n)),
			func() { Cross(dst, n, x, rows, m, y, rows, n, rows) }, nil)
	}
}

// BenchmarkGramShort shows what a call costs.
func BenchmarkGramShort(b *testing.B) {
	for _, rows := range []int{1, 3, 8, 33} {
		for _, cols := range []int{1, 4, 9} {
			x := benchBlock(rows, cols)
			n := cols * (cols + 1) / 2
			dst := make([]float64, n)
			compare(b, fmt.Sprintf("rows=%d/cols=%d", rows, cols), rows, n, int64(8*rows*cols),
				func() { Gram(dst, x, rows, rows, cols) }, nil)
		}
	}
}

func BenchmarkElementwise(b *testing.B) {
	for _, n := range []int{4, 128, 512} {
		x := benchBlock(n, 3)
		one := func(name string, f func()) {
			b.Run(fmt.Sprintf("f=%s/rows=%d", name, n), func(b *testing.B) {
				b.SetBytes(int64(8 * n))
				for b.Loop() {
					f()
				}
			})
		}
		scale := func() { Scale(x[:n], x[n:2*n], x[2*n:]) }
		axpy := func() { Axpy(1e-9, x[n:2*n], x[2*n:]) }
		one("copy", func() { copy(x[:n], x[n:2*n]) })
		for _, f := range []struct {
			name string
			f    func()
		}{{"scale", scale}, {"axpy", axpy}} {
			if useAVX2 {
				one(f.name+"/impl=asm", f.f)
			}
			restore := DisableAVX2()
			one(f.name+"/impl=go", f.f)
			restore()
		}
	}
}
