package accum

import (
	"math/rand/v2"
	"slices"
	"testing"
)

// What is known of an owner hangs on the set of clusters that were seen, in whatever order
// and grouping they are joined, as numbers of rows or as records.
func TestOwnersJoinInAnyOrder(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 1))
	for range 2000 {
		n := r.IntN(6)
		seen := make([]int32, n)
		for i := range seen {
			seen[i] = 1 + r.Int32N(2)*r.Int32N(3)
		}
		want := fixed{}
		for _, c := range seen {
			if want = (fixed{lo: uint64(c)}); seen[0] != c {
				want = manyOwners
				break
			}
		}
		joined := make([]fixed, 2)
		split := false
		add := addOwned(addPlain, 1, func() { split = true })
		for from := 0; from < n; {
			to := from + 1 + r.IntN(n-from)
			part, rows := make([]float64, 2), make([]float64, to-from)
			for i := range rows {
				rows[i] = 1
			}
			add(part, rows, seen[from:to], to-from)
			of := make([]fixed, 2)
			addSums(of, part, defaultUnit, 1)
			if r.IntN(2) == 0 {
				mergeSums(joined, of, 1)
			} else {
				mergeSums(of, joined, 1)
				joined = slices.Clone(of)
			}
			from = to
		}
		if joined[1] != want || joined[0].float(defaultUnit) != float64(n) {
			t.Fatalf("%v: owner %+v, want %+v; sum %v", seen, joined[1], want, joined[0].float(defaultUnit))
		}
		if split && want != manyOwners {
			t.Fatalf("%v: split", seen)
		}
	}
}
