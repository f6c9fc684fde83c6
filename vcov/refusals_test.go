package vcov_test

import (
	"errors"
	"math/rand/v2"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// refusalTable has 60 rows on 20 days in 4 quays; one holds a single value.
func refusalTable() *table {
	const n = 60
	r := rand.New(rand.NewPCG(1, 71))
	a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
	one, quay, day := make([]int64, n), make([]int64, n), make([]int64, n)
	for i := range n {
		a[i], b[i] = r.NormFloat64(), r.ExpFloat64()
		y[i] = 1 + a[i] - b[i] + r.NormFloat64()
		one[i], quay[i], day[i] = 7, int64(i%4), int64(100+i/3)
	}
	tb := &table{}
	tb.float("minutes", y)
	tb.float("pallets", a)
	tb.float("tonnes", b)
	tb.int("one", one)
	tb.int("quay", quay)
	tb.int("day", day)
	return tb
}

// Errors that the clusters or periods do not allow are left out with the reason; what
// can be given beside them stays.
func TestErrorsThatTheClustersDoNotAllow(t *testing.T) {
	tb := refusalTable()
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}}
	for _, c := range []struct {
		kind, key, want string
		o               vcov.Options
	}{
		{"cr0", "one", "all rows are in one cluster; at least two are needed", vcov.Options{}},
		{"cr1", "one", "all rows are in one cluster; at least two are needed", vcov.Options{Passes: 1}},
		{"cr2", "one", "all rows are in one cluster", vcov.Options{}},
		{"cr3", "one", "all rows are in one cluster", vcov.Options{}},
		{"wcr", "one", "all rows are in one cluster", vcov.Options{}},
		{"wcu", "one", "all rows are in one cluster", vcov.Options{}},
		{"driscoll-kraay", "one", "all rows are in one cluster", vcov.Options{}},
		{"driscoll-kraay", "day", "20 lags reach beyond the data: day spans 20 periods, so that at most 19 are possible", vcov.Options{Lags: 20}},
		{"driscoll-kraay", "day", "day spans 20 periods", vcov.Options{Lags: 1 << 62, Kernel: "parzen"}},
		{"driscoll-kraay", "day", "day spans 20 periods", vcov.Options{Lags: 33, Kernel: "quadratic", Passes: 2}},
		{"driscoll-kraay", "day", "", vcov.Options{Lags: 19}},
		{"driscoll-kraay", "day", "", vcov.Options{AutoLags: true}},
	} {
		s := spec
		s.Keys = []string{c.key}
		c.o.Errors = []vcov.Kind{{Name: "classical", Cluster: -1}, {Name: c.kind, Cluster: 0}}
		c.o.Hypotheses = []string{"pallets = 1, tonnes = 0", "pallets = 1"}
		r := fit(t, tb.source(25), s, c.o)
		e := r.Errors[1]
		if r.Errors[0].Status != "ok" || !r.Errors[0].P[1].Exists() {
			t.Errorf("%s by %s: no classical errors beside it", c.kind, c.key)
		}
		if c.want == "" {
			if e.Status != "ok" || !e.P[1].Exists() {
				t.Errorf("%s by %s: %+v", c.kind, c.key, e)
			}
			continue
		}
		if e.Status != "unavailable" || e.Reason == nil || !strings.Contains(*e.Reason, c.want) || len(e.SE) != 3 || e.SE[1].Exists() || e.P[1].Exists() || e.Low[1].Exists() {
			t.Errorf("%s by %s: %+v, want none because %s", c.kind, c.key, e, c.want)
		}
		for _, h := range []vcov.Hypothesis{r.Hypotheses[1], r.Hypotheses[3]} {
			if h.P.Exists() || h.F.Exists() || h.Reason == nil || !strings.Contains(*h.Reason, c.want) {
				t.Errorf("%s under %s: %+v", h.Text, c.kind, h)
			}
		}
	}
}

// More equations than clusters less one have no test by any kind with clusters, as many
// have one.
func TestMoreEquationsThanClusters(t *testing.T) {
	tb := refusalTable()
	tb.float("wind", make([]float64, tb.rows()))
	r := rand.New(rand.NewPCG(2, 71))
	for i := range tb.rows() {
		tb.cols[len(tb.cols)-1].F64[i] = r.NormFloat64()
	}
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wind"}, Keys: []string{"quay"}}
	names := []string{"classical", "cr0", "cr1", "cr2", "cr3", "wcr", "wcu"}
	res := fit(t, tb.source(25), spec, vcov.Options{Errors: kinds(names...), Draws: 199,
		Hypotheses: []string{"constant = 1, pallets = 1, tonnes = 0, wind = 0", "pallets = 1, tonnes = 0, wind = 0"}})
	for i, name := range names {
		many, some := res.Hypotheses[i], res.Hypotheses[len(names)+i]
		if name != "classical" && (many.Reason == nil || *many.Reason != "more restrictions than clusters less one" || many.P.Exists() || many.F.Exists()) ||
			name == "classical" && !many.P.Exists() {
			t.Errorf("%s, four equations: %+v", name, many)
		}
		if some.Reason != nil || !some.P.Exists() || !some.F.Exists() {
			t.Errorf("%s, three equations: %+v", name, some)
		}
	}
}

// Two quays of four with the same rows have the same score, so that the scores, which add
// up to zero, span two dimensions only: three equations have no test though three are
// fewer than the clusters.
func TestSingularCovarianceHasNoJointTest(t *testing.T) {
	tb := refusalTable()
	n := tb.rows()
	wind := make([]float64, n)
	r := rand.New(rand.NewPCG(3, 71))
	for i := range n {
		if wind[i] = r.NormFloat64(); i%4 == 3 {
			wind[i] = wind[i-1]
			for _, c := range tb.cols[:3] {
				c.F64[i] = c.F64[i-1]
			}
		}
	}
	tb.float("wind", wind)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wind"}, Keys: []string{"quay"}}
	for _, passes := range []int{1, 2} {
		res := fit(t, tb.source(25), spec, vcov.Options{Passes: passes, Errors: kinds("cr0", "cr1", "wcr", "wcu"), Draws: 199, Hypotheses: []string{"pallets = 1, tonnes = 0, wind = 0", "pallets = 1, tonnes = 0"}})
		for i, e := range res.Errors {
			joint, two := res.Hypotheses[i], res.Hypotheses[4+i]
			if want := "the covariance by " + e.Name() + " is singular for these restrictions"; joint.Reason == nil || *joint.Reason != want || joint.P.Exists() || joint.F.Exists() {
				t.Errorf("%+v, want none because %s", joint, want)
			}
			if !two.P.Exists() || two.Reason != nil {
				t.Errorf("%+v", two)
			}
			if e.Overall != nil && (e.Overall.P.Exists() || e.Overall.F.Exists()) {
				t.Errorf("%s: overall %+v", e.Name(), e.Overall)
			}
		}
	}
}

// Of four quays, three with as many values of two terms leave the fourth to decide a
// combination of them: draws cannot test it.
func TestEquationsThatOneClusterDecides(t *testing.T) {
	tb := refusalTable()
	n := tb.rows()
	depth, cranes := make([]float64, n), make([]float64, n)
	for i := range n { // orthogonal to 1, depth and cranes over quays: (4, 0, -5, 1)
		depth[i], cranes[i] = []float64{3, 5, 4, 8}[i%4], []float64{1, 1, 2, 6}[i%4]
	}
	tb.float("depth", depth)
	tb.float("cranes", cranes)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"depth", "cranes"}, Keys: []string{"quay"}}
	res := fit(t, tb.source(25), spec, vcov.Options{Errors: kinds("wcr", "wcu"), Draws: 199, Hypotheses: []string{"depth = 1, cranes = 0", "depth = 1"}})
	for _, h := range res.Hypotheses {
		if h.Reason == nil || !strings.Contains(*h.Reason, "a single cluster decides") || h.P.Exists() || h.F.Exists() {
			t.Errorf("%+v, want none because a single cluster decides it", h)
		}
	}
}

// A row without its cluster or period falls out under every kind of errors and is
// counted by the column; without any id there is nothing to fit.
func TestRowsWithoutClusterOrPeriod(t *testing.T) {
	for key, kind := range map[string]string{"quay": "cr1", "day": "driscoll-kraay", "name": "wcr"} {
		tb := refusalTable()
		names := make([]string, tb.rows())
		for i := range names {
			names[i] = string(rune('a' + i%5))
		}
		tb.text("name", names)
		keep := &table{} // the same without the rows
		gone := func(i int) bool { return i%10 == 3 }
		for j, c := range tb.schema.Columns {
			v := stream.Vector{Dict: tb.cols[j].Dict}
			null := make([]bool, tb.rows())
			for i := range tb.rows() {
				if null[i] = gone(i); null[i] {
					continue
				}
				switch c.Kind {
				case stream.Float64:
					v.F64 = append(v.F64, tb.cols[j].F64[i])
				case stream.Int64:
					v.I64 = append(v.I64, tb.cols[j].I64[i])
				default:
					v.Code = append(v.Code, tb.cols[j].Code[i])
				}
			}
			keep.add(c, v)
			if c.Name == key {
				tb.cols[j].Null = null
				for i, n := range null {
					if n && c.Kind == stream.Text {
						tb.cols[j].Code[i] = -1
					}
				}
			}
		}
		spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{key}}
		o := vcov.Options{Errors: []vcov.Kind{{Name: "hc1", Cluster: -1}, {Name: kind, Cluster: 0}}, Lags: 2, Draws: 199}
		got, want := fit(t, tb.source(1000), spec, o), fit(t, keep.source(1000), spec, o)
		if got.Rows.Missing != 6 || got.Rows.MissingBy[key] != 6 || got.N != want.N {
			t.Errorf("%s: %+v, want 6 missing", key, got.Rows)
		}
		for i := range got.Errors {
			for j := range got.Estimates {
				a, b := got.Errors[i], want.Errors[i]
				if !near(float64(a.SE[j]), float64(b.SE[j]), float64(b.SE[j]), 1e-12) || !near(float64(a.P[j]), float64(b.P[j]), 1, 1e-12) {
					t.Errorf("%s by %s: error %v, p %v, without the rows %v, %v", a.Name(), key, a.SE[j], a.P[j], b.SE[j], b.P[j])
				}
			}
		}
		for j := range tb.cols {
			if tb.schema.Columns[j].Name == key {
				for i := range tb.rows() {
					tb.cols[j].Null[i] = true
					if tb.cols[j].Code != nil {
						tb.cols[j].Code[i] = -1
					}
				}
			}
		}
		var none *accum.NoRowsError
		if _, err := tryFit(tb.source(1000), spec, o); !errors.As(err, &none) {
			t.Errorf("no %s at all: %v", key, err)
		}
	}
}

// What aliased terms add up to is tested with other equations by draws as the terms
// that are kept are.
func TestAliasedEquationsByDraws(t *testing.T) {
	tb := refusalTable()
	twice := make([]float64, tb.rows())
	for i := range twice {
		twice[i] = 2*tb.cols[1].F64[i] + 3
	}
	tb.float("twice", twice)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "twice"}, Keys: []string{"day"}}
	o := vcov.Options{Errors: kinds("cr1", "wcr", "wcu"), Draws: 199, Hypotheses: []string{
		"pallets + 2 * twice = 1, tonnes = -1", "pallets = 1, tonnes = -1", "pallets = 1, twice = 0"}}
	r := fit(t, tb.source(25), spec, o)
	spec.Terms = []string{"pallets", "tonnes"}
	o.Hypotheses = o.Hypotheses[1:2]
	kept := fit(t, tb.source(25), spec, o)
	for i := range 3 {
		a, none, want := r.Hypotheses[i], r.Hypotheses[6+i], kept.Hypotheses[i]
		if !near(float64(a.F), float64(want.F), float64(want.F), 1e-9) || !near(float64(a.P), float64(want.P), 1, 1e-9) || !a.P.Exists() {
			t.Errorf("%+v, without the aliased term %+v", a, want)
		}
		if none.P.Exists() || none.Reason == nil || !strings.Contains(*none.Reason, "twice is aliased") {
			t.Errorf("%+v", none)
		}
	}
}

// Restrictions of which one follows from the others are counted once, by draws as by F.
func TestRedundantEquationsByDraws(t *testing.T) {
	tb := refusalTable()
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{"day"}}
	r := fit(t, tb.source(25), spec, vcov.Options{Errors: kinds("cr1", "wcr", "wcu"), Draws: 199, Hypotheses: []string{
		"pallets = 1, tonnes = -1", "pallets = 1, tonnes = -1, pallets + tonnes = 0", "2 * pallets = 2, pallets = 1", "pallets = 1"}})
	if !warned(r, "redundant-restriction") {
		t.Error("no warning")
	}
	for i := range 3 {
		if a, b := r.Hypotheses[i], r.Hypotheses[3+i]; a.P != b.P || a.DF1 != 2 || b.DF1 != 2 || !a.P.Exists() {
			t.Errorf("%+v and %+v", a, b)
		}
		if a, b := r.Hypotheses[6+i], r.Hypotheses[9+i]; a.DF1 != 1 || !near(float64(a.P), float64(b.P), 1, 1e-12) || !a.P.Exists() {
			t.Errorf("%+v and %+v", a, b)
		}
	}
}
