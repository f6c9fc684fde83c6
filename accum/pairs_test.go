package accum

import (
	"math/rand/v2"
	"sync"
	"testing"
)

// Pairs are counted and summed exactly, whoever comes first, and whether a shard
// is sparse or dense.
func TestPairTable(t *testing.T) {
	for name, levels := range map[string][2]int{"dense": {300, 40}, "sparse": {30000, 20000}, "thin": {3, 5000}} {
		t.Run(name, func(t *testing.T) {
			const workers, rows = 4, 20000
			counts, values := newPairTable(0, defaultUnit), newPairTable(2, defaultUnit)
			values.expect = pairCount{workers * rows / 2, levels[0], levels[1]}
			type pair struct{ a, b int32 }
			want := map[pair][3]float64{}
			rng := rand.New(rand.NewPCG(3, 4))
			var wg sync.WaitGroup
			for range workers {
				n, v := &pairBuffer{t: counts}, &pairBuffer{t: values}
				var list []pair
				for range rows {
					p := pair{int32(rng.IntN(levels[0])), int32(rng.IntN(levels[1]))}
					if rng.IntN(2) == 0 {
						p.a, p.b = p.a/50, p.b/50
					}
					list = append(list, p)
					w := want[p]
					x := float64(p.a-p.b) / 8
					want[p] = [3]float64{w[0] + 1, w[1] + x, w[2] + 2*x}
				}
				wg.Go(func() {
					for i, p := range list {
						x := float64(p.a-p.b) / 8
						n.put(p.a, p.b)
						v.put(p.a, p.b, x, 2*x)
						if i%999 == 0 {
							n.flush()
							v.flush()
						}
					}
					n.flush()
					v.flush()
				})
			}
			wg.Wait()
			seen := 0
			counts.each(func(a, b int32, vals []float64) {
				seen++
				if w := want[pair{a, b}]; vals[0] != w[0] {
					t.Fatalf("(%d, %d) occurs %v times, want %v", a, b, vals[0], w[0])
				}
			})
			if seen != len(want) {
				t.Fatalf("%d pairs, want %d", seen, len(want))
			}
			values.each(func(a, b int32, vals []float64) {
				if w := want[pair{a, b}]; vals[0] != w[1] || vals[1] != w[2] {
					t.Fatalf("(%d, %d) sums to %v, want %v", a, b, vals, w)
				}
			})
			sparse, held := 0, int64(0)
			for s := range counts.shards {
				if counts.shards[s].keys != nil {
					sparse++
				}
				held += int64(8 * (len(counts.shards[s].keys) + len(counts.shards[s].n)))
			}
			if (sparse > 0) != (name == "sparse") {
				t.Errorf("%d shards are sparse", sparse)
			}
			if counts.memory() != held {
				t.Errorf("memory %d, want %d", counts.memory(), held)
			}
			if over, _ := values.fits(1, workers*rows); over {
				t.Error("small sums overflow")
			}
			b := &pairBuffer{t: values}
			b.put(1, 1, 1e30, 1)
			b.flush()
			if over, _ := values.fits(1, workers*rows); !over {
				t.Error("1e30 fits a unit of 2^-70")
			}
		})
	}
}
