package vcov_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// The description of clusters against its definitions over rows: blocks of the hat
// matrix, a fit without each cluster, sums over pairs of rows of one cluster.
func TestClusteringByRows(t *testing.T) {
	for seed := range uint64(6) {
		r := rand.New(rand.NewPCG(seed, 21))
		groups := 6 + r.IntN(10)
		var a, b, y []float64
		var quay []int64
		d := &dense{}
		for g := range groups {
			effect := r.NormFloat64()
			for range 4 + r.IntN(5*(g+1)) {
				x1, x2 := r.NormFloat64()+effect, 5+r.ExpFloat64()
				a, b, y = append(a, x1), append(b, x2), append(y, 1+x1-x2+effect+r.NormFloat64())
				quay = append(quay, int64(100+g))
				d.x, d.w, d.group = append(d.x, []float64{1, x1, x2}), append(d.w, 1), append(d.group, g)
			}
		}
		d.y = y
		d.solve()
		tb := &table{}
		tb.float("y", y)
		tb.float("a", a)
		tb.float("b", b)
		tb.int("quay", quay)
		spec := stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"quay"}}
		for _, passes := range []int{1, 2} {
			res := fit(t, tb.source(50), spec, vcov.Options{Errors: kinds("classical", "cr1"), Shape: true, Passes: passes})
			if len(res.Clusterings) != 1 {
				t.Fatalf("%d clusterings", len(res.Clusterings))
			}
			c := res.Clusterings[0]
			n, k := len(y), 3
			// Rows of M x_i, leverage by cluster, sums.
			mx := make([][]float64, n)
			lever, size := make([]float64, groups), make([]float64, groups)
			var rss float64
			esum := make([]float64, groups)
			for i, x := range d.x {
				mx[i] = make([]float64, k)
				for p := range k {
					for q := range k {
						mx[i][p] += d.m.At(p, q) * x[q]
					}
				}
				g := d.group[i]
				lever[g] += d.h[i]
				size[g]++
				rss += d.e[i] * d.e[i]
				esum[g] += d.e[i]
			}
			check := func(what string, got vcov.Number, want float64) {
				t.Helper()
				if !near(float64(got), want, math.Abs(want), 1e-8) {
					t.Errorf("seed %d passes %d: %s %v, by rows %v", seed, passes, what, got, want)
				}
			}
			most := 0
			for g, l := range lever {
				if l > lever[most] {
					most = g
				}
			}
			check("leverage", c.Leverage.Value, lever[most])
			if want := fmt.Sprint(100 + most); c.Leverage.Cluster != want {
				t.Errorf("leverage of cluster %s, want %s", c.Leverage.Cluster, want)
			}
			check("mean leverage", c.MeanLeverage, float64(k)/float64(groups))
			// Analysis of variance of the residuals (Snedecor and Cochran, Statistical
			// Methods, intraclass correlation with unequal sizes).
			var msb, msw, n2 float64
			for g := range size {
				msb += esum[g] * esum[g] / size[g]
				n2 += size[g] * size[g]
			}
			for i := range y {
				dev := d.e[i] - esum[d.group[i]]/size[d.group[i]]
				msw += dev * dev
			}
			gf, nf := float64(groups), float64(n)
			msb, msw = msb/(gf-1), msw/(nf-gf)
			n0 := (nf - n2/nf) / (gf - 1)
			icc := (msb - msw) / (msb + (n0-1)*msw)
			check("intraclass", c.Intraclass, icc)
			for j := range k {
				gamma, own := make([]float64, groups), make([]float64, groups)
				var total, same, pairs float64
				for i := range n {
					gamma[d.group[i]] += mx[i][j]
					own[d.group[i]] += mx[i][j] * mx[i][j]
					total += mx[i][j] * mx[i][j]
					for l := range n {
						if l != i && d.group[l] == d.group[i] {
							same += mx[i][j] * mx[l][j]
							pairs++
						}
					}
				}
				for _, rho := range []float64{1, math.Max(0, icc)} {
					var s1, s2 float64
					for g := range gamma {
						v := (1-rho)*own[g] + rho*gamma[g]*gamma[g]
						s1 += v
						s2 += v * v
					}
					if rho == 1 {
						check("worst effective", c.EffectiveWorst[j], s1*s1/s2)
					} else {
						check("effective", c.Effective[j], s1*s1/s2)
					}
				}
				rho := same / pairs / (total / nf)
				mean := nf / gf
				check("moulton", c.Moulton[j], 1+((n2/gf-mean*mean)/mean+mean-1)*rho*icc)
				p := 0
				for g := range own {
					if own[g] > own[p] {
						p = g
					}
				}
				check("partial", c.Partial[j].Value, own[p]/d.m.At(j, j))
				// Delete each cluster and fit again.
				best, change := 0, 0.0
				for g := range groups {
					o := &dense{}
					for i := range n {
						if d.group[i] != g {
							o.x, o.y, o.w = append(o.x, d.x[i]), append(o.y, y[i]), append(o.w, 1)
						}
					}
					o.solve()
					if diff := o.b[j] - d.b[j]; math.Abs(diff) > math.Abs(change) {
						best, change = g, diff
					}
				}
				check("influence", c.Influence[j][0].Value, change)
				if want := fmt.Sprint(100 + best); c.Influence[j][0].Cluster != want {
					t.Errorf("most influential on term %d: %s, want %s", j, c.Influence[j][0].Cluster, want)
				}
			}
		}
	}
}
