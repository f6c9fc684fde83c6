package vcov_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// forUnloading calls do for some usable designs of each kind of weights.
func forUnloading(t *testing.T, do func(t *testing.T, u *unloading, r *rand.Rand)) {
	for _, kind := range weightKinds {
		done := 0
		for seed := uint64(1); done < 4; seed++ {
			r := rand.New(rand.NewPCG(seed, 80+uint64(kind)))
			if u := drawUnloading(r, kind); u.usable() {
				done++
				t.Run(fmt.Sprintf("weights=%d,seed=%d", kind, seed), func(t *testing.T) { do(t, u, r) })
			}
		}
	}
}

// sameErrors holds errors against those of another fit whose coefficients, by the
// matrix c, are these.
func sameErrors(t *testing.T, what string, got, want *vcov.Errors, c *mat.Dense, tol float64) {
	t.Helper()
	k := len(got.SE)
	v := mat.NewDense(k, k, nil)
	for i := range k {
		for j := range k {
			v.Set(i, j, float64(want.Covariance[i][j]))
		}
	}
	var m mat.Dense
	m.Product(c, v, c.T())
	for i := range k {
		for j := range k {
			if s := math.Sqrt(m.At(i, i) * m.At(j, j)); !near(float64(got.Covariance[i][j]), m.At(i, j), s, tol) {
				t.Errorf("%s, %s and %s (%d, %d): %v and %v", what, got.Name(), want.Name(), i, j, got.Covariance[i][j], m.At(i, j))
			}
		}
	}
}

func unit(k int) *mat.Dense {
	c := mat.NewDense(k, k, nil)
	for j := range k {
		c.Set(j, j, 1)
	}
	return c
}

// Where every row is a cluster of its own, cr0 is hc0, cr1 hc1, cr2 hc2 and cr3 hc3;
// where every period is a cluster, driscoll-kraay without lags is cr0; where clusters
// lie within others, errors by both are those by the larger ones. Frequencies make
// clusters of equal rows, so the first is not so for them.
func TestErrorsThatCoincide(t *testing.T) {
	forUnloading(t, func(t *testing.T, u *unloading, _ *rand.Rand) {
		n := len(u.d.y)
		row, berth := make([]int64, n), make([]int64, n)
		for i := range n {
			row[i], berth[i] = int64(i), int64(u.quay[i]*100+u.crane[i]/4) // a berth belongs to a quay
		}
		u.tb.int("row", row)
		u.tb.int("berth", berth)
		u.spec.Keys, u.spec.Crossed = []string{"row", "day", "quay", "berth"}, [][]int{{2, 3}}
		pairs := []struct{ a, b vcov.Kind }{
			{vcov.Kind{Name: "driscoll-kraay", Cluster: 1}, vcov.Kind{Name: "cr0", Cluster: 1}},
			{vcov.Kind{Name: "cr0", Cluster: 4}, vcov.Kind{Name: "cr0", Cluster: 2}},
			{vcov.Kind{Name: "cr1", Cluster: 4}, vcov.Kind{Name: "cr1", Cluster: 2}},
		}
		if u.d.kind != stream.Frequency {
			for _, n := range []string{"0", "1", "2", "3"} {
				if n < "2" || u.d.kind != stream.Sampling {
					pairs = append(pairs, struct{ a, b vcov.Kind }{vcov.Kind{Name: "cr" + n, Cluster: 0}, vcov.Kind{Name: "hc" + n, Cluster: -1}})
				}
			}
		}
		var o vcov.Options
		for _, p := range pairs {
			o.Errors = append(o.Errors, p.a, p.b)
		}
		for _, o.Arithmetic = range []string{"auto", "double"} {
			r := fit(t, u.tb.source(80), u.spec, o)
			for i := range pairs {
				a, b := &r.Errors[2*i], &r.Errors[2*i+1]
				if a.Status != "ok" || b.Status != "ok" {
					t.Fatalf("%s %s, %s %s", a.Name(), a.Status, b.Name(), b.Status)
				}
				if i < 3 && !near(float64(a.DF[1]), float64(b.DF[1]), 1, 0) {
					t.Errorf("df %v and %v", a.DF[1], b.DF[1])
				}
				sameErrors(t, o.Arithmetic, a, b, unit(u.d.k), 1e-11)
			}
		}
	})
}

// Other units, other zeros, other combinations of the same terms, another base level
// and another order of rows change numbers as they must, and t, degrees of freedom and
// p not at all.
func TestErrorsDoNotHangOnTheWayTermsArePut(t *testing.T) {
	forUnloading(t, func(t *testing.T, u *unloading, r *rand.Rand) {
		n, k := len(u.d.y), u.d.k
		col := func(name string) []float64 {
			for j, c := range u.tb.schema.Columns {
				if c.Name == name {
					return u.tb.cols[j].F64
				}
			}
			return nil
		}
		tonnes, pallets, minutes := col("tonnes"), col("pallets"), col("minutes")
		kilos, layers, hours := make([]float64, n), make([]float64, n), make([]float64, n)
		sum, apart := make([]float64, n), make([]float64, n)
		for i := range n {
			kilos[i], layers[i], hours[i] = 1000*tonnes[i]-321.5, pallets[i]/7+2, minutes[i]/60
			sum[i], apart[i] = tonnes[i]+pallets[i], tonnes[i]-2*pallets[i]
		}
		u.tb.float("kilos", kilos)
		u.tb.float("layers", layers)
		u.tb.float("hours", hours)
		u.tb.float("sum", sum)
		u.tb.float("apart", apart)
		names := []string{"hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5"}
		var o vcov.Options
		if u.d.kind != stream.Sampling {
			names = append(names, "classical", "cr2", "cr3")
		}
		o.Errors = append(kinds(append(names, "cr0", "cr1", "wcr", "wcu")...), vcov.Kind{Name: "driscoll-kraay", Cluster: 2})
		o.Draws, o.Lags = 499, 3
		base := fit(t, u.tb.source(80), u.spec, o)

		check := func(what string, got *vcov.Result, c *mat.Dense, slopes []int) {
			t.Helper()
			if !near(float64(got.R2), float64(base.R2), 1, 1e-12) {
				t.Errorf("%s: R2 %v, before %v", what, got.R2, base.R2)
			}
			var b mat.Dense
			b.Mul(c, mat.NewDense(k, 1, floats(got.Estimates)))
			for i := range got.Errors {
				e, before := &got.Errors[i], &base.Errors[i]
				for j := range k {
					if s := float64(before.SE[j]); !near(b.At(j, 0), float64(base.Estimates[j]), s, 1e-9) {
						t.Fatalf("%s: estimate %d %v, before %v", what, j, b.At(j, 0), base.Estimates[j])
					}
				}
				sameErrors(t, what, before, e, c, 1e-9)
				for _, j := range slopes { // coefficients with the same t
					for _, p := range [][2]vcov.Number{{e.DF[j], before.DF[j]}, {e.T[j], before.T[j]}, {e.P[j], before.P[j]}} {
						if p[0].Exists() != p[1].Exists() || p[0].Exists() && !near(float64(p[0]), float64(p[1]), math.Abs(float64(p[1])), 1e-8) {
							t.Errorf("%s: %s of term %d: %v, before %v", what, e.Name(), j, p[0], p[1])
						}
					}
				}
			}
		}
		with := func(outcome string, terms ...string) *vcov.Result {
			s := u.spec
			s.Outcome, s.Terms = outcome, append(terms, u.spec.Terms[len(terms):]...)
			return fit(t, u.tb.source(80), s, o)
		}
		all := []int{1, 2, 3}

		c := unit(k) // hours on kilos and layers: b of tonnes = 60 * 1000 b of kilos
		for j := range k {
			c.Set(j, j, 60)
		}
		c.Set(1, 1, 60_000)
		c.Set(2, 2, 60.0/7)
		c.Set(0, 1, -60*321.5)
		c.Set(0, 2, 60*2)
		check("in other units", with("hours", "kilos", "layers"), c, all)

		c = unit(k) // b of tonnes = b of sum + b of apart, of pallets = b of sum - 2 b of apart
		c.Set(1, 2, 1)
		c.Set(2, 1, 1)
		c.Set(2, 2, -2)
		check("as sum and difference", with("minutes", "sum", "apart"), c, []int{0, 3})

		if len(u.spec.Terms) > 3 {
			s := u.spec
			s.Terms = append(slices.Clone(s.Terms[:3]), `each(barge, base="motor")`)
			c = unit(k) // canal and deck against motor
			c.Set(0, 4, 1)
			c.Set(4, 4, -1)
			c.Set(4, 5, 1)
			c.Set(5, 4, -1)
			c.Set(5, 5, 0)
			check("from another base level", fit(t, u.tb.source(80), s, o), c, all)
		}

		other := &table{}
		order := r.Perm(n)
		for j, cl := range u.tb.schema.Columns {
			v := stream.Vector{Dict: u.tb.cols[j].Dict}
			for _, i := range order {
				switch cl.Kind {
				case stream.Float64:
					v.F64 = append(v.F64, u.tb.cols[j].F64[i])
				case stream.Int64:
					v.I64 = append(v.I64, u.tb.cols[j].I64[i])
				default:
					v.Code = append(v.Code, u.tb.cols[j].Code[i])
				}
			}
			other.add(cl, v)
		}
		check("in another order", fit(t, other.source(70), u.spec, o), unit(k), []int{0, 1, 2, 3})
	})
}
