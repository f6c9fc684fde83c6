package vcov_test

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// once is a source that can be read once and not sampled, like a pipe.
type once struct{ stream.Source }

func (o once) Info() stream.Info {
	i := o.Source.Info()
	i.Sampled, i.Rewindable = false, false
	return i
}

// index is the place of a term.
func index(t *testing.T, r *vcov.Result, term string) int {
	t.Helper()
	i := slices.Index(r.Terms, term)
	if i < 0 {
		t.Fatalf("no term %q in %q", term, r.Terms)
	}
	return i
}

func warned(r *vcov.Result, code string) bool {
	return slices.ContainsFunc(r.Warnings, func(w vcov.Warning) bool { return w.Code == code })
}

// A count with one zero, or with zeros in one cluster only, is a number like any
// other: nothing is decided by that row or cluster, so t and p exist, and the
// errors are those of the textbook definitions (dense, in this package's tests).
func TestOneZeroAmongNumbers(t *testing.T) {
	const n = 600
	r := rand.New(rand.NewPCG(1, 1))
	x, y := make([]float64, n), make([]float64, n)
	quay := make([]int64, n)
	d := &dense{y: y}
	for i := range n {
		x[i] = float64(1 + r.IntN(9))
		quay[i] = int64(i % 6)
		y[i] = 2 + x[i]/3 + r.NormFloat64()
	}
	x[77] = 0
	for i, q := range quay {
		d.x = append(d.x, []float64{1, x[i]})
		d.w = append(d.w, 1)
		d.group = append(d.group, int(q))
	}
	d.solve()
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.int("quay", quay)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x"}, Keys: []string{"quay"}}
	for _, passes := range []int{1, 2} {
		res := fit(t, tb.source(200), spec, vcov.Options{Errors: kinds("hc1", "cr1"), Passes: passes})
		for _, kind := range []string{"hc1", "cr1"} {
			e := errorsOf(t, res, kind)
			if !e.P[1].Exists() || !e.Low[1].Exists() {
				t.Errorf("%d passes, %s: no p or interval for a term with a single zero cell", passes, kind)
			}
			if want := math.Sqrt(d.covariance(kind).At(1, 1)); !near(float64(e.SE[1]), want, want, 1e-12) {
				t.Errorf("%d passes, %s: error %v, want %v", passes, kind, e.SE[1], want)
			}
		}
	}
}

// A row with a frequency of 3 stands for three equal rows, of which none decides
// a term alone: one pass and two must both see that.
func TestFrequencyIsNotLone(t *testing.T) {
	const n = 300
	r := rand.New(rand.NewPCG(5, 1))
	d, y, w := make([]float64, n), make([]float64, n), make([]float64, n)
	for i := range n {
		y[i], w[i] = r.NormFloat64(), 1
	}
	d[9], w[9] = 1, 3
	tb := &table{}
	tb.float("y", y)
	tb.float("d", d)
	tb.float("w", w)
	spec := stream.Spec{Outcome: "y", Terms: []string{"d"}, Weight: "w", WeightKind: stream.Frequency}
	var se []float64
	for _, passes := range []int{1, 2} {
		e := errorsOf(t, fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds("hc0"), Passes: passes}), "hc0")
		if !e.P[1].Exists() {
			t.Errorf("%d passes: no p for a row that stands for three", passes)
		}
		se = append(se, float64(e.SE[1]))
	}
	if !near(se[0], se[1], se[1], 1e-12) {
		t.Errorf("errors %v in one pass and two", se)
	}
}

// The joint test does not know which of several equal parametrisations was
// written: F with terms that repeat others is F without them, for every kind.
func TestJointTestWithRepeatedTerms(t *testing.T) {
	const n = 900
	r := rand.New(rand.NewPCG(2, 1))
	x1, x2, al, y := make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n)
	barge := make([]string, n)
	for i := range n {
		x1[i], x2[i] = 5+r.NormFloat64(), r.ExpFloat64()
		al[i] = 2*x1[i] - 4
		barge[i] = []string{"ark", "deck", "motor"}[r.IntN(3)]
		y[i] = 3*x1[i] - x2[i] + float64(len(barge[i])) + r.NormFloat64()*x2[i]
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x1", x1)
	tb.float("x2", x2)
	tb.float("al", al)
	tb.text("barge", barge)
	run := func(terms ...string) *vcov.Result {
		return fit(t, tb.source(1000), stream.Spec{Outcome: "y", Terms: terms}, vcov.Options{Errors: kinds("classical", "hc1")})
	}
	for _, c := range [][2][]string{
		{{"x1", "x2"}, {"x1", "al", "x2"}},
		{{"al", "x2"}, {"al", "x1", "x2"}},
		// All levels of a product repeat the number itself.
		{{"each(barge, base=\"none\")*x1", "each(barge, base=\"none\")"}, {"each(barge, base=\"none\")*x1", "x1", "each(barge, base=\"none\")", "al"}},
	} {
		short, long := run(c[0]...), run(c[1]...)
		for i, kind := range []string{"classical", "hc1"} {
			a, b := short.Errors[i].Overall, long.Errors[i].Overall
			if a == nil || b == nil || a.DF1 != b.DF1 || !near(float64(b.F), float64(a.F), float64(a.F), 1e-10) {
				t.Errorf("%s of %q: %+v, of %q %+v", kind, c[0], a, c[1], b)
			}
		}
	}
}

// A term that repeats another takes no errors away from the rest: one pass gives
// the cluster errors of two.
func TestRepeatedTermKeepsClusterErrors(t *testing.T) {
	const n = 800
	r := rand.New(rand.NewPCG(3, 1))
	x, zero, y := make([]float64, n), make([]float64, n), make([]float64, n)
	quay := make([]int64, n)
	for i := range n {
		x[i], y[i], quay[i] = r.NormFloat64(), r.NormFloat64(), int64(r.IntN(12))
		y[i] += x[i]
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.float("zero", zero)
	tb.int("quay", quay)
	spec := stream.Spec{Outcome: "y", Terms: []string{"zero", "x", "2*x"}, Keys: []string{"quay"}}
	one := errorsOf(t, fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds("cr1"), Passes: 1}), "cr1")
	two := errorsOf(t, fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds("cr1"), Passes: 2}), "cr1")
	for j := range one.SE {
		if one.SE[j].Exists() != two.SE[j].Exists() || (one.SE[j].Exists() && !near(float64(one.SE[j]), float64(two.SE[j]), float64(two.SE[j]), 1e-12)) {
			t.Errorf("coefficient %d: %v in one pass, %v in two", j, one.SE[j], two.SE[j])
		}
	}
	if !one.SE[2].Exists() {
		t.Error("no error for x")
	}
}

// A cell with leverage 1e14 times the rest lies outside the rows that shape the
// frame. What it leaves is the fit of the other rows about their mean (to 1e-9 of
// it): no perfect fit.
func TestFarCellIsNoPerfectFit(t *testing.T) {
	const n = 400
	r := rand.New(rand.NewPCG(4, 1))
	x, y := make([]float64, n), make([]float64, n)
	var sum, want float64
	for i := range n {
		x[i], y[i] = 1e7+r.NormFloat64(), 1000+2*r.NormFloat64()
		if i != 133 {
			sum += y[i]
		}
	}
	x[133] = 1e16
	for i := range n {
		if i != 133 {
			want += (y[i] - sum/(n-1)) * (y[i] - sum/(n-1))
		}
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	res := fit(t, tb.source(1000), stream.Spec{Outcome: "y", Terms: []string{"x"}}, vcov.Options{Errors: kinds("classical")})
	if warned(res, "perfect-fit") || !near(float64(res.Residual.SS), want, want, 1e-6) {
		t.Errorf("residual sum of squares %v, want %v; warnings %v", res.Residual.SS, want, res.Warnings)
	}
	// Read once, the digits are gone, of extended sums too: no number is better than a
	// wrong one.
	for _, arithmetic := range []string{"double", "extended"} {
		res = fit(t, once{tb.source(1000)}, stream.Spec{Outcome: "y", Terms: []string{"x"}}, vcov.Options{Errors: kinds("classical"), Arithmetic: arithmetic})
		if warned(res, "perfect-fit") {
			t.Errorf("read once, %s: the fit is called perfect", arithmetic)
		}
		if e := &res.Errors[0]; e.Status == "ok" && !near(float64(res.Residual.SS), want, want, 1e-5) {
			t.Errorf("read once, %s: residual sum of squares %v without a word, want %v", arithmetic, res.Residual.SS, want)
		}
	}
}

// A fit that category levels make perfect is perfect: errors 0, no t and no p.
func TestLevelsMakeAPerfectFit(t *testing.T) {
	tb := &table{}
	var y []float64
	var barge []string
	for i := range 60 {
		b := []string{"ark", "deck", "motor"}[i%3]
		barge = append(barge, b)
		y = append(y, []float64{0.1, 7.3, 1e4 / 3}[i%3])
	}
	tb.float("y", y)
	tb.text("barge", barge)
	res := fit(t, tb.source(1000), stream.Spec{Outcome: "y", Terms: []string{"each(barge)"}}, vcov.Options{Errors: kinds("classical", "hc1")})
	if !warned(res, "perfect-fit") {
		t.Errorf("no perfect fit: %v, warnings %v", res.Residual, res.Warnings)
	}
	for i := range res.Errors {
		for j := range res.Terms {
			if e := &res.Errors[i]; e.Status != "ok" || e.SE[j] != 0 || e.P[j].Exists() {
				t.Errorf("%s of %s: status %s se %v p %v", e.Kind, res.Terms[j], e.Status, e.SE[j], e.P[j])
			}
		}
	}
}

// What all used rows have as zero, or as one value up to the last bit, has no
// direction of its own: null, and the other estimates are those without it.
func TestColumnsThatAreRoundingOnly(t *testing.T) {
	const n = 500
	r := rand.New(rand.NewPCG(6, 1))
	x, bits, y := make([]float64, n), make([]float64, n), make([]float64, n)
	barge, quay := make([]string, n), make([]string, n)
	for i := range n {
		barge[i] = []string{"ark", "deck", "motor"}[r.IntN(3)]
		quay[i] = []string{"east", "west"}[r.IntN(2)]
		x[i] = 3 + r.NormFloat64()
		if barge[i] == "deck" && quay[i] == "west" {
			x[i] = 0
		}
		bits[i] = 1e9
		if r.IntN(2) == 1 {
			bits[i] = math.Nextafter(1e9, 2e9)
		}
		y[i] = 1 + x[i] + r.NormFloat64()
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.float("bits", bits)
	tb.text("barge", barge)
	tb.text("quay", quay)
	for _, c := range []struct {
		terms, without []string
		gone           string
	}{
		{[]string{"each(barge)*each(quay)*x"}, nil, "(barge = deck) * (quay = west) * x"},
		{[]string{"bits", "x"}, []string{"x"}, "bits"},
		{[]string{"x", "bits"}, []string{"x"}, "bits"},
		{[]string{"x", "each(barge)*x", "bits"}, []string{"x", "each(barge)*x"}, "bits"},
	} {
		res := fit(t, tb.source(1000), stream.Spec{Outcome: "y", Terms: c.terms}, vcov.Options{Errors: kinds("classical")})
		if at := index(t, res, c.gone); res.Estimates[at].Exists() {
			t.Errorf("%q: %s has the estimate %v, want none", c.terms, c.gone, res.Estimates[at])
		}
		if c.without == nil {
			continue
		}
		want := fit(t, tb.source(1000), stream.Spec{Outcome: "y", Terms: c.without}, vcov.Options{Errors: kinds("classical")})
		for j, term := range want.Terms {
			a := res.Estimates[index(t, res, term)]
			if !near(float64(a), float64(want.Estimates[j]), float64(want.Errors[0].SE[j]), 1e-9) {
				t.Errorf("%q: %s is %v, without the column %v", c.terms, term, a, want.Estimates[j])
			}
		}
	}
}

// Levels whose numbers are small beside the mean of all keep their digits: the
// slope of each level is the ratio of two sums over its rows (no constant, one
// column a level: rows of other levels do not enter).
func TestSmallNumbersInALevel(t *testing.T) {
	const n = 300
	r := rand.New(rand.NewPCG(7, 1))
	x, y := make([]float64, n), make([]float64, n)
	barge := make([]string, n)
	var xx, xy [3]float64
	for i := range n {
		l := i % 3
		barge[i] = []string{"ark", "deck", "motor"}[l]
		x[i] = math.Exp(r.NormFloat64()) * []float64{1, 1e-4, 300}[l]
		y[i] = x[i] + r.NormFloat64()*x[i]
		xx[l] += x[i] * x[i]
		xy[l] += x[i] * y[i]
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.text("barge", barge)
	spec := stream.Spec{Outcome: "y", Terms: []string{"each(barge, base=\"none\")*x"}, NoConstant: true}
	res := fit(t, tb.source(1000), spec, vcov.Options{Errors: kinds("classical")})
	for l := range 3 {
		if want := xy[l] / xx[l]; !near(float64(res.Estimates[l]), want, want, 1e-11) {
			t.Errorf("slope of level %d is %v, want %v", l, res.Estimates[l], want)
		}
	}
}

// Where the first segments hold no used row, the frame waits for one: a pipe
// gives what a file gives, at an offset of 1e9 too.
func TestPipeThatStartsWithoutUsedRows(t *testing.T) {
	const n = 12000
	r := rand.New(rand.NewPCG(8, 1))
	x, y, day := make([]float64, n), make([]float64, n), make([]float64, n)
	for i := range n {
		x[i] = 1e9 + r.NormFloat64()
		y[i] = (x[i] - 1e9) + (1+math.Abs(x[i]-1e9))*r.NormFloat64()
		day[i] = float64(i)
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.float("day", day)
	for _, from := range []string{"day >= 3000", "day >= 4600", "day >= 11999 - 1500"} {
		spec := stream.Spec{Outcome: "y", Terms: []string{"x"}, Where: from}
		o := vcov.Options{Errors: kinds("classical", "hc1"), Passes: 1, Workers: 3}
		file := fit(t, tb.source(2000), spec, o)
		pipe := fit(t, once{tb.source(2000)}, spec, o)
		if pipe.Rows.Used != file.Rows.Used || pipe.Rows.Excluded != file.Rows.Excluded {
			t.Errorf("%s: rows %+v, from a file %+v", from, pipe.Rows, file.Rows)
		}
		for i := range file.Errors {
			a, b := file.Errors[i].SE[1], pipe.Errors[i].SE[1]
			if !near(float64(b), float64(a), float64(a), 1e-11) {
				t.Errorf("%s: %s is %v from a pipe, %v from a file", from, file.Errors[i].Kind, b, a)
			}
		}
	}
}

// Whether cluster sums outgrow their share of memory is judged on all of them: a
// worker that sees a part of the clusters of a sorted input must not change the
// route, nor a bit.
func TestClusterMemoryDoesNotShowWorkers(t *testing.T) {
	const n = 20000
	r := rand.New(rand.NewPCG(9, 1))
	x, y := make([]float64, n), make([]float64, n)
	quay := make([]int64, n)
	for i := range n {
		x[i], y[i], quay[i] = r.NormFloat64(), r.NormFloat64(), int64(i/10)
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.int("quay", quay)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x"}, Keys: []string{"quay"}}
	// 2,000 clusters of 6 sums of 16 bytes.
	for _, memory := range []int64{2000*6*16 - 1, 2000 * 6 * 16} {
		var want string
		for _, workers := range []int{1, 2, 3, 8} {
			res := fit(t, tb.source(500), spec, vcov.Options{Errors: kinds("cr1"), Passes: 1, ClusterMemory: memory, Workers: workers})
			if got := fixed(t, res); want == "" {
				want = got
			} else if got != want {
				t.Errorf("%d bytes for clusters: %d workers give\n%s\n1 gives\n%s", memory, workers, got, want)
			}
		}
	}
}

// Models that leave nothing to estimate still give a result, with empty lists
// and no number that means nothing.
func TestModelsWithNothingInThem(t *testing.T) {
	tb := &table{}
	tb.float("y", []float64{1, 2, 4})
	tb.text("barge", []string{"ark", "ark", "ark"})
	tb.int("quay", []int64{1, 1, 2})
	all := kinds("classical", "hc0", "hc1", "hc2", "hc3", "cr0", "cr1")
	for _, spec := range []stream.Spec{
		{Outcome: "y", Terms: []string{"each(barge)"}, NoConstant: true, Keys: []string{"quay"}},
		{Outcome: "y", Terms: []string{"each(barge)"}, Keys: []string{"quay"}},
		{Outcome: "y", Terms: []string{"each(barge, base=\"none\")"}, Keys: []string{"quay"}},
	} {
		res := fit(t, tb.source(1000), spec, vcov.Options{Errors: all})
		text := fixed(t, res)
		if strings.Contains(text, `"terms":null`) || strings.Contains(text, `"estimates":null`) || strings.Contains(text, `"se":null`) {
			t.Errorf("%q: a list is null: %s", spec.Terms, text)
		}
		if !spec.NoConstant && (res.Estimates[0] != 7./3 && !near(float64(res.Estimates[0]), 7./3, 1, 1e-15)) {
			t.Errorf("%q: constant %v, want 7/3", spec.Terms, res.Estimates[0])
		}
	}
}

// Sums of levels are kept in fixed point, and are made again with another unit
// where the first does not fit. Tables that hold nothing must not choose it: HC
// errors are those of the definitions beside a far cell as well.
func TestFarCellBesideLevels(t *testing.T) {
	const n = 400
	r := rand.New(rand.NewPCG(10, 1))
	x, y := make([]float64, n), make([]float64, n)
	barge := make([]string, n)
	d := &dense{y: y}
	for i := range n {
		barge[i] = []string{"ark", "deck", "motor"}[i%3]
		x[i] = r.NormFloat64()
		if i == 57 {
			x[i] = 1e5
		}
		y[i] = (1 + float64(i%3)) * r.NormFloat64()
		row := []float64{1, 0, 0, x[i], 0, 0}
		if i%3 > 0 {
			row[i%3], row[3+i%3] = 1, x[i]
		}
		d.x = append(d.x, row)
		d.w = append(d.w, 1)
	}
	d.solve()
	tb := &table{}
	tb.float("y", y)
	tb.float("x", x)
	tb.text("barge", barge)
	res := fit(t, tb.source(100), stream.Spec{Outcome: "y", Terms: []string{"each(barge)", "x", "each(barge)*x"}}, vcov.Options{Errors: kinds("classical", "hc0")})
	for _, kind := range []string{"classical", "hc0"} {
		e := errorsOf(t, res, kind)
		v := d.covariance(kind)
		for j := range res.Terms {
			if want := math.Sqrt(v.At(j, j)); !near(float64(e.SE[j]), want, want, 1e-8) {
				t.Errorf("%s of %s: %v, want %v", kind, res.Terms[j], e.SE[j], want)
			}
		}
	}
}
