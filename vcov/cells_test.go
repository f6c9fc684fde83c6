package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// unsampled can be read again, but not looked into.
type unsampled struct{ stream.Source }

func (u unsampled) Info() stream.Info {
	i := u.Source.Info()
	i.Sampled = false
	return i
}

var rowKinds = []string{"hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5"}

// discrete makes n unloadings whose regressors take few values: crew, wet, pallets and
// a barge, some cells missing. Minutes are whole numbers about an offset, so that the
// dense solution may take it out without rounding.
func discrete(n int, kind stream.WeightKind, offset float64, cats bool) (*table, stream.Spec, *dense) {
	r := rand.New(rand.NewPCG(uint64(n), uint64(kind)))
	cols := map[string][]float64{}
	var barge []string
	labels := []string{"ark", "deck", "motor"}
	d := &dense{kind: kind}
	put := func(name string, x float64) { cols[name] = append(cols[name], x) }
	for i := range n {
		crew, wet, pallets, l := float64(2+r.IntN(3)), float64(r.IntN(2)), float64(10*r.IntN(4)), r.IntN(3)
		w := 1.0
		switch kind {
		case stream.Frequency:
			w = float64(r.IntN(4))
		case stream.Precision, stream.Sampling:
			w = []float64{0.3, 1, 2.5}[r.IntN(3)]
		}
		y := math.Round(100*(60-5*crew+8*wet+pallets/2+3*float64(l)+(1+wet+pallets/10)*r.NormFloat64()) + 20*wet*pallets)
		b := labels[l]
		used := w > 0
		switch {
		case i == n/2: // a row that stands alone
			crew = 9
		case i%97 == 0:
			pallets, used = math.NaN(), false
		case i%89 == 0 && cats:
			b, used = "", false
		}
		put("crew", crew)
		put("wet", wet)
		put("pallets", pallets)
		put("w", w)
		put("minutes", y+offset)
		barge = append(barge, b)
		if !used {
			continue
		}
		x := []float64{1, crew, wet, pallets}
		if cats {
			x = append(x, 0, 0, 0, 0)
			if l > 0 {
				x[3+l], x[5+l] = 1, crew
			}
		}
		d.x, d.y, d.w = append(d.x, x), append(d.y, y), append(d.w, w)
	}
	tb := &table{}
	for _, name := range []string{"crew", "wet", "pallets", "w", "minutes"} {
		tb.float(name, cols[name])
	}
	tb.text("barge", barge)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"crew", "wet", "pallets"}, WeightKind: kind}
	if kind != stream.NoWeight {
		spec.Weight = "w"
	}
	if cats {
		spec.Terms = append(spec.Terms, "each(barge)", "each(barge)*crew")
	}
	d.solve()
	return tb, spec, d
}

// Errors by unique rows are those of the definitions over rows and those of two
// passes, with every kind of weight, from a file and from a pipe, at any offset, to the
// same bits for any number of workers.
func TestUniqueRows(t *testing.T) {
	for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Frequency, stream.Precision, stream.Sampling} {
		for _, cats := range []bool{false, true} {
			for _, offset := range []float64{0, 1e4, 1e8} {
				if testing.Short() && offset == 1e4 {
					continue
				}
				t.Run(fmt.Sprintf("weight=%d,cats=%v,offset=%g", kind, cats, offset), func(t *testing.T) {
					tb, spec, d := discrete(5000, kind, offset, cats)
					src := tb.source(900)
					o := vcov.Options{Errors: kinds(rowKinds...), Workers: 2}
					one := fit(t, src, spec, o)
					if one.Run.Passes != 1 || one.Run.Route != "unique rows" || one.Run.UniqueRows == 0 {
						t.Fatalf("%d passes by %s, %d unique rows", one.Run.Passes, one.Run.Route, one.Run.UniqueRows)
					}
					o.Passes = 2
					two := fit(t, src, spec, o)
					if g := gap(t, two, one, rowKinds); g > 1e-12 {
						t.Errorf("by unique rows and in two passes: %.1e apart", g)
					}
					o.Passes = 0
					pipe := fit(t, once{src}, spec, o)
					if pipe.Run.Passes != 1 || pipe.Run.UniqueRows != one.Run.UniqueRows {
						t.Errorf("a pipe: %d passes, %d unique rows; a file %d", pipe.Run.Passes, pipe.Run.UniqueRows, one.Run.UniqueRows)
					}
					if g := gap(t, two, pipe, rowKinds); g > 1e-12 {
						t.Errorf("by unique rows from a pipe and in two passes: %.1e apart", g)
					}
					for _, name := range rowKinds {
						cov := d.covariance(name)
						e := errorsOf(t, one, name)
						for j, se := range e.SE {
							if want := math.Sqrt(cov.At(j, j)); !near(float64(se), want, want, 1e-12*d.kappa) {
								t.Errorf("%s of %s: %v, dense %v", name, one.Terms[j], se, want)
							}
						}
					}
					if g, w := one.SpreadTest, two.SpreadTest; g.Statistic.Exists() != w.Statistic.Exists() ||
						w.Statistic.Exists() && !near(float64(g.Statistic), float64(w.Statistic), float64(w.Statistic), 1e-11) {
						t.Errorf("test of spread %+v, in two passes %+v", g, w)
					}
					sameLeverages(t, one, two, d)
					want := fixed(t, one)
					for _, workers := range []int{1, 3, 8} {
						o.Workers = workers
						if got := fixed(t, fit(t, src, spec, o)); got != want {
							t.Fatalf("%d workers and 2 differ:\n%s\n%s", workers, got, want)
						}
					}
				})
			}
		}
	}
}

// sameLeverages compares what is told of leverages with the dense ones.
func sameLeverages(t *testing.T, one, two *vcov.Result, d *dense) {
	t.Helper()
	mean := float64(d.k) / d.n
	var above [4]int64
	for i, h := range d.h {
		times := int64(1)
		if d.kind == stream.Frequency {
			times = int64(d.w[i])
		}
		for j, limit := range []float64{2 * mean, 3 * mean, 0.5, 0.99} {
			if h > limit {
				above[j] += times
			}
		}
	}
	for _, r := range []*vcov.Result{one, two} {
		l := r.Leverage
		if l == nil {
			t.Fatal("no word of leverages")
		}
		if got := [4]int64{l.AboveTwice, l.AboveThreeTimes, l.AboveHalf, l.Above99}; got != above {
			t.Errorf("%d passes: rows above %v, dense %v", r.Run.Passes, got, above)
		}
		if !near(float64(l.Largest), d.hMost, d.hMost, 1e-11) && d.kind != stream.Frequency || !near(float64(l.Mean), mean, mean, 1e-15) {
			t.Errorf("%d passes: largest %v, mean %v; dense %v, %v", r.Run.Passes, l.Largest, l.Mean, d.hMost, mean)
		}
	}
	high := slices.Clone(d.h)
	slices.Sort(high)
	slices.Reverse(high)
	if len(two.Leverage.Highest) != 5 || len(one.Leverage.Highest) != 0 {
		t.Fatalf("highest rows %v, by unique rows %v", two.Leverage.Highest, one.Leverage.Highest)
	}
	for i, h := range two.Leverage.Highest {
		if !near(float64(h.Leverage), high[i], high[i], 1e-11) || h.Row == "" {
			t.Errorf("highest row %d is %+v, dense %v", i, h, high[i])
		}
	}
}

// Regressors that take too many values make the fit go another way, with the numbers
// of that way; where there is none it says so.
func TestUniqueRowsOverflow(t *testing.T) {
	const n = 60_000
	r := rand.New(rand.NewPCG(12, 1))
	x, y := make([]float64, n), make([]float64, n)
	for i := range n {
		x[i] = float64(r.IntN(2))
		// Between the places that are looked at.
		if i > 19_700 && i < 21_700 {
			x[i] = float64(i)
		}
		y[i] = x[i]/1e4 + r.NormFloat64()
	}
	tb := &table{}
	tb.float("x", x)
	tb.float("y", y)
	src := tb.source(1000)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x"}}
	o := vcov.Options{Errors: kinds("hc1", "hc3"), ClusterMemory: 100_000}
	names := []string{"hc1", "hc3"}
	for what, src := range map[string]stream.Source{"sampled": src, "not sampled": unsampled{src}} {
		two := o
		two.Passes = 2
		want := fit(t, src, spec, two)
		var bits string
		for _, workers := range []int{1, 2, 3, 8} {
			o.Workers = workers
			res := fit(t, src, spec, o)
			if res.Run.Route != "row pass" || res.Run.UniqueRows != 0 || warned(res, "second-pass") != (what == "sampled") {
				t.Errorf("%s: route %s, warnings %v", what, res.Run.Route, res.Warnings)
			}
			if g := gap(t, want, res, names); g != 0 {
				t.Errorf("%s: %.1e from two passes", what, g)
			}
			if got := fixed(t, res); bits == "" {
				bits = got
			} else if got != bits {
				t.Errorf("%s: workers show", what)
			}
		}
	}
	if _, err := tryFit(once{src}, spec, o); !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), "--passes 2") {
		t.Errorf("from a pipe: %v, want a refusal that names a way", err)
	}
	// What the sample shows is refused at once.
	for i := range x {
		x[i] = float64(i)
	}
	o.Passes = 1
	if _, err := tryFit(src, spec, o); !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), "distinct values") {
		t.Errorf("one pass over %d unique rows: %v, want a refusal", n, err)
	}
}

// Where the first rows tell nothing of the later ones the squares of unique rows
// cancel: the result says what that costs, another pass saves it, and what has left the
// range of the sums is not given.
func TestUniqueRowsThatCancel(t *testing.T) {
	const n = 6000
	for _, jump := range []float64{1e4, 1e9} {
		r := rand.New(rand.NewPCG(13, 1))
		late, wet, y := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range n {
			wet[i] = float64(r.IntN(2))
			if i >= 5000 {
				late[i] = 1
			}
			y[i] = wet[i] + jump*late[i] + r.NormFloat64()
		}
		tb := &table{}
		tb.float("late", late)
		tb.float("wet", wet)
		tb.float("y", y)
		spec := stream.Spec{Outcome: "y", Terms: []string{"late", "wet"}}
		o := vcov.Options{Errors: kinds("hc3")}
		want := fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds("hc3"), Passes: 2})
		again := fit(t, unsampled{tb.source(1000)}, spec, o)
		if again.Run.Route != "row pass" || warned(again, "second-pass") != (jump == 1e4) {
			t.Errorf("read again: route %s, warnings %v", again.Run.Route, again.Warnings)
		}
		for j, se := range want.Errors[0].SE {
			if got := again.Errors[0].SE[j]; !near(float64(got), float64(se), float64(se), 1e-8) {
				t.Errorf("read again: error %v, in two passes %v", got, se)
			}
		}
		res, err := tryFit(once{tb.source(1000)}, spec, o)
		if jump == 1e9 {
			if !errors.Is(err, stream.ErrUse) {
				t.Errorf("from a pipe: %v, want a refusal", err)
			}
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		if !warned(res, "digits") {
			t.Errorf("from a pipe: no word of lost digits: %v", res.Warnings)
		}
		if g := gap(t, want, res, []string{"hc3"}); g > 1e-7 {
			t.Errorf("from a pipe: %.1e from two passes", g)
		}
	}
}

// Rows whose residuals are far smaller than others' keep their digits.
func TestUniqueRowsOfUnequalSpread(t *testing.T) {
	const n = 9000
	r := rand.New(rand.NewPCG(14, 1))
	quiet, wet, y := make([]float64, n), make([]float64, n), make([]float64, n)
	for i := range n {
		quiet[i], wet[i] = float64(i%2), float64(r.IntN(3))
		y[i] = (1 - quiet[i]*(1-1e-6)) * (wet[i] + r.NormFloat64())
	}
	tb := &table{}
	tb.float("quiet", quiet)
	tb.float("wet", wet)
	tb.float("y", y)
	spec := stream.Spec{Outcome: "y", Terms: []string{"quiet", "wet", "quiet*wet"}}
	one := fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds(rowKinds...)})
	two := fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds(rowKinds...), Passes: 2})
	if one.Run.Route != "unique rows" {
		t.Fatalf("route %s", one.Run.Route)
	}
	if g := gap(t, two, one, rowKinds); g > 1e-12 {
		t.Errorf("%.1e from two passes", g)
	}
}

// Beside clusters, unique rows are taken or not; the numbers are the same.
func TestUniqueRowsBesideClusters(t *testing.T) {
	tb, spec, _ := discrete(8000, stream.NoWeight, 0, false)
	quay := make([]int64, 8000)
	for i := range quay {
		quay[i] = int64(i / 100)
	}
	tb.int("quay", quay)
	spec.Keys = []string{"quay"}
	for _, names := range [][]string{{"hc3", "cr1"}, {"hc1", "cr1"}, {"hc2", "cr2"}} {
		src := tb.source(1300)
		two := fit(t, src, spec, vcov.Options{Errors: kinds(names...), Passes: 2})
		for _, passes := range []int{0, 1} {
			res := fit(t, src, spec, vcov.Options{Errors: kinds(names...), Passes: passes})
			if res.Run.Passes == 1 != (res.Run.UniqueRows > 0 || names[0] == "hc1") || passes == 1 && res.Run.Passes != 1 {
				t.Errorf("%v: %d passes by %s", names, res.Run.Passes, res.Run.Route)
			}
			if g := gap(t, two, res, names); g > 1e-12 {
				t.Errorf("%v by %s: %.1e from two passes", names, res.Run.Route, g)
			}
		}
	}
}

// Set TALLROW_ROWS=10000000 to compare unique rows and two passes on quay data.
func BenchmarkUniqueRows(b *testing.B) {
	n := 100_000
	if s := os.Getenv("TALLROW_ROWS"); s != "" {
		if _, err := fmt.Sscan(s, &n); err != nil {
			b.Fatal(err)
		}
	}
	r := rand.New(rand.NewPCG(15, 1))
	cols := map[string][]float64{}
	var crane []string
	for range n {
		crew, wet, night, tonnes := float64(2+r.IntN(4)), float64(r.IntN(2)), float64(r.IntN(2)), float64(5*r.IntN(20))
		cols["crew"], cols["wet"], cols["night"] = append(cols["crew"], crew), append(cols["wet"], wet), append(cols["night"], night)
		cols["tonnes"] = append(cols["tonnes"], tonnes)
		cols["minutes"] = append(cols["minutes"], 20+tonnes-3*crew+wet*(1+tonnes/10)*r.NormFloat64()+r.NormFloat64())
		crane = append(crane, []string{"K1", "K2", "K3", "K4"}[r.IntN(4)])
	}
	tb := &table{}
	for _, c := range []string{"crew", "wet", "night", "tonnes", "minutes"} {
		tb.float(c, cols[c])
	}
	tb.text("crane", crane)
	for _, terms := range []string{"crew wet night tonnes", "crew wet night tonnes each(crane)"} {
		b.Run("terms="+strings.ReplaceAll(terms, " ", ","), func(b *testing.B) {
			src := openParquet(b, tb, 200_000)
			spec := stream.Spec{Outcome: "minutes", Terms: strings.Fields(terms)}
			for b.Loop() {
				var best [3]time.Duration
				for range 5 {
					for passes := 1; passes <= 2; passes++ {
						start := time.Now()
						fit(b, src, spec, vcov.Options{Errors: kinds("hc3"), Passes: passes, Workers: 1})
						if t := time.Since(start); best[passes] == 0 || t < best[passes] {
							best[passes] = t
						}
					}
				}
				b.ReportMetric(float64(best[1].Nanoseconds())/float64(n), "unique-ns/row")
				b.ReportMetric(float64(best[2].Nanoseconds())/float64(n), "two-passes-ns/row")
				b.ReportMetric(float64(best[2])/float64(best[1]), "ratio")
			}
		})
	}
}

// Unique rows go with every way of summing and solving: collinear powers of few values,
// in double and extended arithmetic; many levels, eliminated first; products without
// their category; no constant; rows that decide a term alone, or nearly.
func TestUniqueRowsInEveryBasis(t *testing.T) {
	const n = 9000
	r := rand.New(rand.NewPCG(16, 1))
	year, wet, y := make([]float64, n), make([]float64, n), make([]float64, n)
	barge, quay := make([]string, n), make([]string, n)
	lone, far := make([]float64, n), make([]float64, n)
	for i := range n {
		far[i] = float64(r.IntN(2))
		year[i], wet[i] = float64(2000+r.IntN(12)), float64(r.IntN(2))
		barge[i], quay[i] = []string{"ark", "deck", "motor"}[r.IntN(3)], fmt.Sprint("q", r.IntN(9))
		y[i] = 3*(year[i]-2005) + float64(len(barge[i])) + (1+wet[i])*r.NormFloat64()
	}
	lone[4000], far[7000] = 1, 1e4 // leverage 1, and close to it
	tb := &table{}
	tb.float("lone", lone)
	tb.float("far", far)
	tb.float("year", year)
	tb.float("wet", wet)
	tb.float("y", y)
	tb.text("barge", barge)
	tb.text("quay", quay)
	src := tb.source(1500)
	for _, c := range []struct {
		terms string
		none  bool
		o     vcov.Options
	}{
		{terms: "year;year*year;wet"},
		{terms: "year;year*year;wet", o: vcov.Options{Arithmetic: "double"}},
		{terms: "year;year*year;year*wet", o: vcov.Options{Arithmetic: "extended"}},
		{terms: "wet;each(quay);each(barge)", o: vcov.Options{Dense: 6}},
		{terms: "wet;each(quay);each(quay)*wet;each(barge)", o: vcov.Options{Dense: 6}},
		{terms: "each(barge)*wet;each(quay)"},
		{terms: "each(barge)*each(quay);wet"},
		{terms: "each(barge, base=\"none\");wet", none: true},
		{terms: "wet;year", none: true},
		{terms: "wet;lone"},
		{terms: "wet;far"},
		{terms: ""},
	} {
		spec := stream.Spec{Outcome: "y", NoConstant: c.none}
		if c.terms != "" {
			spec.Terms = strings.Split(c.terms, ";")
		}
		o := c.o
		o.Errors = kinds(rowKinds...)
		one := fit(t, src, spec, o)
		pipe := fit(t, once{src}, spec, o)
		o.Passes = 2
		two := fit(t, src, spec, o)
		for what, res := range map[string]*vcov.Result{"file": one, "pipe": pipe} {
			if res.Run.Route != "unique rows" {
				t.Errorf("%q, %s: route %s", c.terms, what, res.Run.Route)
			}
			limit := 1e-12
			if c.terms == "wet;far" {
				limit = 1e-9 // hc4 of wet is what is left of 1/(1-h)^4, some 1e17
			}
			for _, name := range rowKinds {
				e, f := errorsOf(t, two, name), errorsOf(t, res, name)
				for j, se := range e.SE {
					if f.SE[j].Exists() != se.Exists() || se.Exists() && !near(float64(f.SE[j]), float64(se), float64(se), limit) || e.P[j].Exists() != f.P[j].Exists() {
						t.Errorf("%q, %s: %s of %s is %v, in two passes %v", c.terms, what, name, two.Terms[j], f.SE[j], se)
					}
				}
				if (e.Overall == nil) != (f.Overall == nil) || e.Overall != nil && e.Overall.F.Exists() && !near(float64(f.Overall.F), float64(e.Overall.F), float64(e.Overall.F), 1e3*limit) {
					t.Errorf("%q, %s: %s together %+v, in two passes %+v", c.terms, what, name, f.Overall, e.Overall)
				}
			}
		}
	}
}
