package vcov

import (
	"math"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// unsampled hides that a source can seek, so that its frame is renewed in epochs.
type unsampled struct{ stream.Source }

func (u unsampled) Info() stream.Info {
	i := u.Source.Info()
	i.Sampled = false
	return i
}

// The bound that lets pass two do without leverages holds for every row, and is
// small for long ordinary data.
func TestLeverageBound(t *testing.T) {
	for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Precision, stream.Frequency} {
		for _, rows := range []int{40, 3_000, 60_000} {
			for _, epochs := range []bool{false, true} {
				r := rand.New(rand.NewPCG(uint64(rows), uint64(kind)))
				cols := make([][]float64, 4)
				for i := range rows {
					a, b := r.NormFloat64(), 1e5+r.ExpFloat64()
					if i == rows/3 {
						a = 30
					}
					w := float64(1 + r.IntN(4))
					for j, x := range []float64{1 + a - b + r.NormFloat64(), a, b, w} {
						cols[j] = append(cols[j], x)
					}
				}
				var schema stream.Schema
				var data []stream.Vector
				for j, name := range []string{"y", "a", "b", "w"} {
					schema.Columns = append(schema.Columns, stream.Column{Name: name, Kind: stream.Float64})
					data = append(data, stream.Vector{Kind: stream.Float64, F64: cols[j]})
				}
				src := stream.NewMemory(schema, data, 4_000)
				if epochs {
					src = unsampled{src}
				}
				spec := stream.Spec{Outcome: "y", Terms: []string{"a", "b", "a * b"}, WeightKind: kind}
				if kind != stream.NoWeight {
					spec.Weight = "w"
				}
				d, err := stream.NewDesign(spec, src.Schema())
				if err != nil {
					t.Fatal(err)
				}
				o := accum.Options{Workers: 2, Memory: 1 << 30}
				s, err := accum.First(t.Context(), src, d, accum.Needs{}, o)
				if err != nil {
					t.Fatal(err)
				}
				b, err := newBasis(s)
				if err != nil {
					t.Fatal(err)
				}
				rp := accum.RowPass{}
				x := solve(b)
				rp.Theta = x.theta
				rp.Whitener, rp.K = x.whitener()
				sums, err := accum.Second(t.Context(), src, s, rp, o)
				if err != nil {
					t.Fatal(err)
				}
				bound := s.LeverageBound(rp.Whitener)
				if bound < sums.MaxLeverage || math.IsNaN(bound) {
					t.Errorf("weights %d, %d rows, epochs %v: bound %g, largest leverage %g", kind, rows, epochs, bound, sums.MaxLeverage)
				}
				if rows == 60_000 && !epochs && bound > 0.5 {
					t.Errorf("weights %d: bound %g for %d rows; want it small enough to be of use", kind, bound, rows)
				}
			}
		}
	}
}
