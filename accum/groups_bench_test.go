package accum

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// BenchmarkGroups sums scores of 6 columns by random keys, 2^20 rows an operation.
func BenchmarkGroups(b *testing.B) {
	const rows = 1 << 20
	for _, ids := range []int64{100, 10_000, 1_000_000} {
		b.Run(fmt.Sprintf("ids=%d", ids), func(b *testing.B) {
			rng := rand.New(rand.NewPCG(1, 2))
			key := &stream.Vector{Kind: stream.Int64, I64: make([]int64, rows)}
			for i := range key.I64 {
				key.I64[i] = rng.Int64N(ids) * 1_000_003
			}
			cols := make([][]float64, 7)
			for j := range cols {
				cols[j] = make([]float64, stream.BatchRows)
				for i := range cols[j] {
					cols[j][i] = rng.NormFloat64()
				}
			}
			pool := newGroupPool(&Options{Memory: 2 << 30, Workers: 1})
			g := newGroups(pool.store(stream.Int64, len(cols)-1, defaultUnit), len(cols), 0, addScaled)
			for b.Loop() {
				for at := 0; at < rows; at += stream.BatchRows {
					part := stream.Vector{Kind: stream.Int64, I64: key.I64[at : at+stream.BatchRows]}
					dst, _ := g.room(stream.BatchRows)
					transpose(dst, len(cols), 0, cols)
					g.take(&part, stream.BatchRows)
					if (at+stream.BatchRows)%(foldBatches*stream.BatchRows) == 0 {
						if err := g.fold(); err != nil {
							b.Fatal(err)
						}
					}
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows, "ns/row")
		})
	}
}
