package vcov_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

func bootTable(groups int, seed uint64) (tb *table, a, y []float64) {
	r := rand.New(rand.NewPCG(seed, 41))
	var quay []int64
	for g := range groups {
		effect := r.NormFloat64()
		for range 5 + r.IntN(3*(g+1)) {
			x := r.NormFloat64() + effect/2
			a, y = append(a, x), append(y, 1+0.4*x+effect+r.NormFloat64())
			quay = append(quay, int64(g))
		}
	}
	tb = &table{}
	tb.float("y", y)
	tb.float("a", a)
	tb.int("quay", quay)
	return tb, a, y
}

// The ends of the interval of wcr are where its own test turns: just inside p is above
// 0.05, just outside it is not. The tests there are fits of y - r a.
func TestBootstrapIntervalInvertsTheTest(t *testing.T) {
	for _, groups := range []int{7, 12, 30} {
		tb, a, y := bootTable(groups, uint64(groups))
		spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"quay"}}
		o := vcov.Options{Errors: kinds("cr1", "wcr", "wcu"), Draws: 1999, Seed: 5}
		res := fit(t, tb.source(60), spec, o)
		e := errorsOf(t, res, "wcr")
		if e.SE[1] != errorsOf(t, res, "cr1").SE[1] || e.T[1] != errorsOf(t, res, "cr1").T[1] {
			t.Errorf("%d clusters: error and t are not those of cr1", groups)
		}
		if all := groups == 7; e.Bootstrap == nil || e.Bootstrap.All || (e.Bootstrap.Weights == "six-point") != all {
			t.Errorf("%d clusters: %+v", groups, e.Bootstrap)
		}
		p := func(r float64) float64 {
			moved := make([]float64, len(y))
			for i := range y {
				moved[i] = y[i] - r*a[i]
			}
			other := &table{}
			other.float("y", moved)
			other.add(tb.schema.Columns[1], tb.cols[1])
			other.add(tb.schema.Columns[2], tb.cols[2])
			return float64(errorsOf(t, fit(t, other.source(60), spec, o), "wcr").P[1])
		}
		low, high, se := float64(e.Low[1]), float64(e.High[1]), float64(e.SE[1])
		const step = 1e-6
		for _, c := range []struct {
			r      float64
			inside bool
		}{{low + step*se, true}, {low - step*se, false}, {high - step*se, true}, {high + step*se, false}} {
			if got := p(c.r); (got > 0.05) != c.inside {
				t.Errorf("%d clusters: p at %v is %v, inside %v (interval %v to %v)", groups, c.r, got, c.inside, low, high)
			}
		}
		if one := p(float64(res.Estimates[1])); one != 1 {
			t.Errorf("%d clusters: p at the estimate is %v, want 1", groups, one)
		}
	}
}

// All patterns of signs: p counts patterns, and seed, draws and workers do not matter.
func TestBootstrapOfAllPatterns(t *testing.T) {
	tb, _, _ := bootTable(10, 3)
	spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"quay"}}
	var first *vcov.Errors
	for i, o := range []vcov.Options{{Workers: 1}, {Workers: 3, Seed: 9}, {Draws: 5000, Passes: 1}} {
		o.Errors, o.BootWeights = kinds("cr1", "wcr", "wcu"), "signs"
		res := fit(t, tb.source(40), spec, o)
		for _, kind := range []string{"wcr", "wcu"} {
			e := errorsOf(t, res, kind)
			if !e.Bootstrap.All || e.Bootstrap.Draws != 1024 {
				t.Fatalf("%+v, want all 1024 patterns", e.Bootstrap)
			}
			// t*(-v) = -t*(v), so |t*| comes in pairs.
			if n := float64(e.P[1]) * 512; n != math.Trunc(n) || n < 1 {
				t.Errorf("%s: p %v is no share of 512 pairs", kind, e.P[1])
			}
		}
		e := errorsOf(t, res, "wcr")
		if i == 0 {
			first = e
		} else if e.P[1] != first.P[1] || e.Low[1] != first.Low[1] || e.High[1] != first.High[1] {
			t.Errorf("p %v, interval %v to %v; first %v, %v to %v", e.P[1], e.Low[1], e.High[1], first.P[1], first.Low[1], first.High[1])
		}
	}
	for _, bad := range []vcov.Options{{Draws: 98}, {Draws: -1}, {BootWeights: "coins"}} {
		bad.Errors = kinds("wcr")
		if _, err := tryFit(tb.source(40), spec, bad); err == nil {
			t.Errorf("%+v is taken", bad)
		}
	}
}
