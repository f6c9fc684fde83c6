package kernel

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Filter and Correlate are what their formulas say, with the bits of plain Go.
func TestFilterAndCorrelate(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 90))
	for _, n := range []int{1, 2, 3, 4, 5, 7, 8, 15, 16, 17, 33, 64, 100, 513} {
		for _, taps := range []int{1, 2, 3, 5, 8, 13, 40, 300} {
			x, w, a := randoms(r, n+taps-1), randoms(r, taps), randoms(r, n)
			dst, sums := randoms(r, n), randoms(r, taps)
			wantDst, wantSums := append([]float64(nil), dst...), append([]float64(nil), sums...)
			for i := range wantDst {
				for j, k := range w {
					wantDst[i] = math.FMA(k, x[i+j], wantDst[i])
				}
			}
			for j := range wantSums {
				wantSums[j] += dotRef(a, x[j:], n)
			}
			Filter(dst, x, w)
			Correlate(sums, a, x)
			for i := range dst {
				if dst[i] != wantDst[i] {
					t.Fatalf("Filter of %d by %d: element %d is %v, want %v", n, taps, i, dst[i], wantDst[i])
				}
			}
			for j := range sums {
				if sums[j] != wantSums[j] {
					t.Fatalf("Correlate of %d by %d: element %d is %v, want %v", n, taps, j, sums[j], wantSums[j])
				}
			}
		}
	}
}

func randoms(r *rand.Rand, n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = r.NormFloat64()
	}
	return x
}
