package kernel

import (
	"fmt"
	"math/rand/v2"
	"testing"

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

func BenchmarkGram(b *testing.B) {
	const rows = 512
	for _, cols := range []int{4, 8, 10, 16, 32, 64} {
		x := benchBlock(rows, cols)
		n := cols * (cols + 1) / 2
		dst := make([]float64, n)
		full := make([]float64, cols*cols)
		for _, impl := range []struct {
			name string
			f    func()
		}{
			{"tile", func() { Gram(dst, x, rows, rows, cols) }},
			{"ref", func() { gramRef(dst, x, rows, rows, cols) }},
			{"gonum", func() {
				blas64.Syrk(blas.NoTrans, 1, blas64.General{Rows: cols, Cols: rows, Stride: rows, Data: x},
					1, blas64.Symmetric{N: cols, Stride: cols, Data: full, Uplo: blas.Upper})
			}},
		} {
			b.Run(fmt.Sprintf("rows=%d/cols=%d/impl=%s", rows, cols, impl.name), func(b *testing.B) {
				b.SetBytes(int64(8 * rows * cols))
				for b.Loop() {
					impl.f()
				}
				flops(b, rows, n)
			})
		}
	}
}

func BenchmarkCross(b *testing.B) {
	const rows = 512
	for _, cols := range []int{8, 32} {
		x, y := benchBlock(rows, cols), benchBlock(rows, cols)
		dst := make([]float64, cols*cols)
		mat := func(d []float64) blas64.General {
			return blas64.General{Rows: cols, Cols: rows, Stride: rows, Data: d}
		}
		for _, impl := range []struct {
			name string
			f    func()
		}{
			{"tile", func() { Cross(dst, cols, x, rows, cols, y, rows, cols, rows) }},
			{"gonum", func() {
				blas64.Gemm(blas.NoTrans, blas.Trans, 1, mat(x), mat(y), 1, blas64.General{Rows: cols, Cols: cols, Stride: cols, Data: dst})
			}},
		} {
			b.Run(fmt.Sprintf("rows=%d/cols=%d/impl=%s", rows, cols, impl.name), func(b *testing.B) {
				b.SetBytes(int64(2 * 8 * rows * cols))
				for b.Loop() {
					impl.f()
				}
				flops(b, rows, cols*cols)
			})
		}
	}
}

func BenchmarkScale(b *testing.B) {
	x := benchBlock(512, 3)
	b.SetBytes(8 * 512)
	for b.Loop() {
		Scale(x[:512], x[512:1024], x[1024:])
	}
}
