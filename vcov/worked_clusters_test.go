package vcov_test

import (
	"context"
	"math"
	"math/big"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// A model of one term through the origin, small whole numbers, worked out in exact
// rational arithmetic from the definitions: with A = sum x^2, h_g = sum_g x^2 / A and
// s_g = sum_g x e,
//
//	cr0 = sum s_g^2 / A^2       cr2 = sum s_g^2 / (1 - h_g) / A^2
//	cr3 = sum s_g^2 / (1 - h_g)^2 / A^2
//	df of cr2 = 1 / (sum D_g^2 - 2 sum D_g n_g + (sum n_g)^2), n_g = h_g^2/(1 - h_g),
//	            D_g = h_g/(1 - h_g) in units of 1/A
//
// (Bell and McCaffrey 2002; the last is their formula for one coefficient). Two ways
// at once: cr1 of each way less that of rows that agree in both, each with its own
// G/(G-1) (N-1)/(N-k) (Cameron, Gelbach and Miller 2011).
func TestWorkedClusters(t *testing.T) {
	x := []int64{1, 2, 3, 1, 4, 2, 5, 1, 2, 3, 2, 6}
	y := []int64{2, 3, 7, 0, 9, 5, 8, 3, 1, 7, 6, 10}
	quay := []int64{1, 1, 1, 2, 2, 3, 3, 3, 3, 4, 4, 5}
	crane := []int64{1, 2, 2, 1, 3, 3, 1, 2, 4, 4, 1, 3}
	rat := func(n int64) *big.Rat { return new(big.Rat).SetInt64(n) }
	add := func(a, b *big.Rat) *big.Rat { return new(big.Rat).Add(a, b) }
	mul := func(a, b *big.Rat) *big.Rat { return new(big.Rat).Mul(a, b) }
	div := func(a, b *big.Rat) *big.Rat { return new(big.Rat).Quo(a, b) }
	sub := func(a, b *big.Rat) *big.Rat { return new(big.Rat).Sub(a, b) }
	a, xy := rat(0), rat(0)
	for i := range x {
		a, xy = add(a, rat(x[i]*x[i])), add(xy, rat(x[i]*y[i]))
	}
	b := div(xy, a)
	type sums struct{ s, h *big.Rat }
	by := func(key func(i int) [2]int64) map[[2]int64]*sums {
		m := map[[2]int64]*sums{}
		for i := range x {
			g := m[key(i)]
			if g == nil {
				g = &sums{rat(0), rat(0)}
				m[key(i)] = g
			}
			e := sub(rat(y[i]), mul(b, rat(x[i])))
			g.s = add(g.s, mul(e, rat(x[i])))
			g.h = add(g.h, div(rat(x[i]*x[i]), a))
		}
		return m
	}
	quays := by(func(i int) [2]int64 { return [2]int64{quay[i]} })
	cranes := by(func(i int) [2]int64 { return [2]int64{crane[i]} })
	both := by(func(i int) [2]int64 { return [2]int64{quay[i], crane[i]} })
	cr1 := func(m map[[2]int64]*sums) *big.Rat {
		v := rat(0)
		for _, g := range m {
			v = add(v, mul(g.s, g.s))
		}
		g := int64(len(m))
		return div(mul(v, big.NewRat(g, g-1)), mul(a, a)) // (N-1)/(N-k) is 1 for one term
	}
	v2, v3, dd, dn, nn := rat(0), rat(0), rat(0), rat(0), rat(0)
	for _, g := range quays {
		gap := sub(rat(1), g.h)
		v2 = add(v2, div(mul(g.s, g.s), gap))
		v3 = add(v3, div(mul(g.s, g.s), mul(gap, gap)))
		d, n := div(g.h, gap), div(mul(g.h, g.h), gap)
		dd, dn, nn = add(dd, mul(d, d)), add(dn, mul(d, n)), add(nn, n)
	}
	v2, v3 = div(v2, mul(a, a)), div(v3, mul(a, a))
	df := div(rat(1), add(sub(dd, mul(rat(2), dn)), mul(nn, nn)))
	twoWay := sub(add(cr1(quays), cr1(cranes)), cr1(both))
	if twoWay.Sign() <= 0 {
		t.Fatal("the example has no two-way variance; change its numbers")
	}

	tb := &table{}
	floats := func(v []int64) []float64 {
		f := make([]float64, len(v))
		for i := range v {
			f[i] = float64(v[i])
		}
		return f
	}
	tb.float("y", floats(y))
	tb.float("x", floats(x))
	tb.int("quay", quay)
	tb.int("crane", crane)
	src := tb.source(5)
	d, err := stream.NewDesign(stream.Spec{Outcome: "y", Terms: []string{"x"}, NoConstant: true, Keys: []string{"quay", "crane"}, Crossed: [][]int{{0, 1}}}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	for _, passes := range []int{1, 2} {
		res, err := vcov.Fit(context.Background(), src, d, vcov.Options{Passes: passes,
			Errors: []vcov.Kind{{Name: "cr2", Cluster: 0}, {Name: "cr3", Cluster: 0}, {Name: "cr1", Cluster: 2}}})
		if err != nil {
			t.Fatal(err)
		}
		check := func(what string, got vcov.Number, want *big.Rat, root bool) {
			t.Helper()
			w, _ := want.Float64()
			if root {
				w = math.Sqrt(w)
			}
			if !near(float64(got), w, w, 1e-13) {
				t.Errorf("%d passes: %s %v, exact %v", passes, what, got, w)
			}
		}
		check("estimate", res.Estimates[0], b, false)
		check("cr2", res.Errors[0].SE[0], v2, true)
		check("df of cr2", res.Errors[0].DF[0], df, false)
		check("cr3", res.Errors[1].SE[0], v3, true)
		check("cr1 two ways", res.Errors[2].SE[0], twoWay, true)
	}
}
