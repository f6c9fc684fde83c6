package vcov_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"runtime"
	"testing"

	"github.com/tallrow/tallrow/accum"
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

// A single equation is tested by the same draws: that of a term alone gives the
// term's own p and interval, against another value those of the moved outcome, and a
// difference of terms those of the model in which it is a coefficient.
func TestBootstrapOfEquations(t *testing.T) {
	tb, a, y := bootTable(14, 8)
	n := len(y)
	b, sum, moved := make([]float64, n), make([]float64, n), make([]float64, n)
	r := rand.New(rand.NewPCG(8, 42))
	for i := range n {
		b[i] = r.NormFloat64()
		sum[i] = a[i] + b[i]
		moved[i] = y[i] - 0.25*a[i]
	}
	tb.float("b", b)
	tb.float("both", sum)
	tb.float("moved", moved)
	o := vcov.Options{Errors: kinds("cr1", "wcr", "wcu"), Draws: 999, Seed: 3}
	with := func(outcome string, terms []string, h ...string) *vcov.Result {
		o := o
		o.Hypotheses = h
		return fit(t, tb.source(60), stream.Spec{Outcome: outcome, Terms: terms, Keys: []string{"quay"}}, o)
	}
	res := with("y", []string{"a", "b"}, "a = 0", "a = 0.25", "a - b = 0")
	other := with("moved", []string{"a", "b"})
	turned := with("y", []string{"a", "both"}) // a + b both: the coefficient of a is that of a less that of b
	for i, kind := range []string{"wcr", "wcu"} {
		at := func(h int) vcov.Hypothesis { return res.Hypotheses[3*h+1+i] }
		check := func(what string, h vcov.Hypothesis, e *vcov.Errors, shift float64) {
			t.Helper()
			if h.Errors != e.Name() || h.P != e.P[1] || h.DF2.Exists() ||
				!near(float64(h.Low), float64(e.Low[1])+shift, 1, 1e-9) || !near(float64(h.High), float64(e.High[1])+shift, 1, 1e-9) {
				t.Errorf("%s by %s: p %v, %v to %v; the coefficient has p %v, %v to %v (shifted by %v)", what, h.Errors, h.P, h.Low, h.High, e.P[1], e.Low[1], e.High[1], shift)
			}
		}
		check("a = 0", at(0), errorsOf(t, res, kind), 0)
		check("a = 0.25", at(1), errorsOf(t, other, kind), 0.25)
		check("a - b = 0", at(2), errorsOf(t, turned, kind), 0)
	}
}

// Several equations are tested by the draws too: F is that of cr1, p a share of draws
// that does not hang on the way the equations are put, on workers or on units, and near
// that of F where there are many clusters.
func TestBootstrapOfSeveralEquations(t *testing.T) {
	tb, a, _ := bootTable(40, 8)
	b, far := make([]float64, len(a)), make([]float64, len(a))
	r := rand.New(rand.NewPCG(8, 44))
	for i := range a {
		b[i] = r.NormFloat64()
		far[i] = 1024*a[i] + 4096
	}
	tb.float("b", b)
	tb.float("far", far)
	hypotheses := []string{"a = 0.875, b = 0.0625", "a + b = 0.9375, a - 2 * b = 0.75", "a = 0.875, b = 0.0625, constant = 1"}
	with := func(term string, o vcov.Options, h ...string) *vcov.Result {
		o.Errors, o.Seed, o.Hypotheses = kinds("cr1", "wcr", "wcu"), 3, h
		return fit(t, tb.source(60), stream.Spec{Outcome: "y", Terms: []string{term, "b"}, Keys: []string{"quay"}}, o)
	}
	res := with("a", vcov.Options{Workers: 1}, hypotheses...)
	for h := range hypotheses {
		cr1 := res.Hypotheses[3*h]
		for i, kind := range []string{"wcr", "wcu"} {
			got := res.Hypotheses[3*h+1+i]
			if got.Errors != kind+"(quay)" || got.F != cr1.F || got.DF1 != cr1.DF1 || got.DF2.Exists() || got.Reason != nil {
				t.Errorf("%+v beside %+v", got, cr1)
			}
			// 10,000 draws: a share p has the error sqrt(p(1-p)/10,000), at most 0.005.
			if math.Abs(float64(got.P-cr1.P)) > 0.1 || got.P < 0.01 || got.P > 0.99 {
				t.Errorf("%s of %s: p %v, by F %v", got.Errors, got.Text, got.P, cr1.P)
			}
			if n := float64(got.P) * 10_000; math.Abs(n-math.Round(n)) > 1e-9 {
				t.Errorf("p %v is no share of 10,000", got.P)
			}
		}
	}
	for i := range 3 {
		if x, y := res.Hypotheses[i], res.Hypotheses[3+i]; i > 0 && x.P != y.P || !near(float64(x.F), float64(y.F), float64(x.F), 1e-10) {
			t.Errorf("in other words: %+v and %+v", x, y)
		}
	}
	units := with("far", vcov.Options{Passes: 1}, "far = 0.0008544921875, b = 0.0625")
	exact := with("a", vcov.Options{}, "a = 0.875, b = 0.0625")
	for i, h := range units.Hypotheses {
		if want := exact.Hypotheses[i]; i > 0 && h.P != want.P || !near(float64(h.F), float64(want.F), float64(want.F), 1e-9) {
			t.Errorf("in other units: %+v and %+v", h, want)
		}
	}
	first := fixed(t, res)
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	for _, n := range []int{1, 2, 3, 8} {
		runtime.GOMAXPROCS(n) // draws take as many
		if other := fixed(t, with("a", vcov.Options{Workers: n}, hypotheses...)); other != first {
			t.Errorf("%d workers: %s\none: %s", n, other, first)
		}
	}
}

// All patterns of signs: p of several equations is a share of pairs of patterns, the
// data themselves among them, whatever seed and draws.
func TestBootstrapOfSeveralEquationsByAllPatterns(t *testing.T) {
	tb, _, _ := bootTable(9, 5)
	o := vcov.Options{Errors: kinds("wcr"), BootWeights: "signs", Hypotheses: []string{"constant = 0, a = 0", "constant = 1000, a = -50"}}
	spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"quay"}}
	one := fit(t, tb.source(40), spec, o)
	o.Seed, o.Draws = 77, 600
	two := fit(t, tb.source(40), spec, o)
	for i, h := range one.Hypotheses {
		if n := float64(h.P) * 256; n != math.Trunc(n) || n < 1 || h.P != two.Hypotheses[i].P {
			t.Errorf("%s: p %v and %v", h.Text, h.P, two.Hypotheses[i].P)
		}
	}
	if p := one.Hypotheses[1].P; p > 0.1 {
		t.Errorf("p %v of what is far from the data", p)
	}
}

// What keeps numbers of all clusters or periods says so when the memory does not allow
// it: no draws, and no errors over time.
func TestKeptNumbersAreBounded(t *testing.T) {
	const n = 9_000
	r := rand.New(rand.NewPCG(1, 43))
	x, y, at := make([]float64, n), make([]float64, n), make([]int64, n)
	for i := range n {
		x[i], y[i], at[i] = r.NormFloat64(), r.NormFloat64(), int64(i)
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.int("at", at)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x"}, Keys: []string{"at"}}
	few := vcov.Options{Memory: 1 << 20, Errors: kinds("cr1", "wcr"), Draws: 99}
	res := fit(t, tb.source(1000), spec, few)
	if e := res.Errors[1]; e.Status != "unavailable" || e.Reason == nil || e.P[1].Exists() {
		t.Errorf("wcr of %d clusters within 1 MiB: %s", n, e.Status)
	}
	few.Errors = []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}
	var m *accum.MemoryError
	if _, err := tryFit(tb.source(1000), spec, few); !errors.As(err, &m) {
		t.Errorf("driscoll-kraay over %d periods within 1 MiB: %v, want a refusal for memory", n, err)
	}
}
