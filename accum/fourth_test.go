package accum

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Every product of four entries, in any order of the indexes, against a plain
// loop over the rows.
func TestQuartic(t *testing.T) {
	const p, rows = 5, 300
	rng := rand.New(rand.NewPCG(1, 2))
	z := make([]float64, p*stride)
	for i := range z {
		z[i] = float64(rng.IntN(7) - 3) // products of small integers are exact
	}
	q := newQuartic(p)
	if want := 8 * 7 * 6 * 5 / 24; q.size() != want {
		t.Fatalf("size %d, want %d", q.size(), want)
	}
	sums := make([]float64, q.size())
	q.add(sums, z, rows)
	for a := range p {
		for b := range p {
			for c := range p {
				for d := range p {
					var want float64
					for r := range rows {
						want += z[a*stride+r] * z[b*stride+r] * z[c*stride+r] * z[d*stride+r]
					}
					if got := sums[q.at(a, b, c, d)]; got != want {
						t.Fatalf("sum of z%d z%d z%d z%d = %v, want %v", a, b, c, d, got, want)
					}
				}
			}
		}
	}
	th := []float64{1, -2, 0.5, 3, 1}
	got := q.contract(sums, th, 4, false)
	for a := range 4 {
		for b := range 4 {
			var want float64
			for r := range rows {
				var e float64
				for c := range p {
					e += th[c] * z[c*stride+r]
				}
				want += e * e * z[a*stride+r] * z[b*stride+r]
			}
			if math.Abs(got[a*4+b]-want) > 1e-10*math.Abs(want)+1e-9 {
				t.Errorf("contraction %d,%d = %v, want %v", a, b, got[a*4+b], want)
			}
		}
	}
}
