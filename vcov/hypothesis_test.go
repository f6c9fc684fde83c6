package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// asExpression writes the name of a coefficient as hypotheses name it.
func asExpression(label string) string {
	var factors []string
	for _, f := range strings.Split(label, " * ") {
		f = strings.Trim(f, "()")
		if name, level, ok := strings.Cut(f, " = "); ok {
			f = fmt.Sprintf("each(%s, level=%q)", name, level)
		} else if f == "log(hours" {
			f += ")"
		}
		factors = append(factors, f)
	}
	return strings.Join(factors, "*")
}

// drawn is a random hypothesis in text and as R b = r.
func drawn(rng *rand.Rand, labels []string) (text string, r *mat.Dense, v []float64) {
	k := len(labels)
	q := 1 + rng.IntN(min(3, k))
	r = mat.NewDense(q, k, nil)
	var parts []string
	perm := rng.Perm(k)
	for i := range q {
		left := ""
		for n, j := range perm[i:min(k, i+1+rng.IntN(2))] {
			c := float64(1+rng.IntN(16)) / 4
			r.Set(i, j, c)
			if n > 0 {
				left += " + "
			}
			left += fmt.Sprintf("%v * %s", c, asExpression(labels[j]))
		}
		x := float64(rng.IntN(5)) / 2
		if i == 0 && k > q && rng.IntN(2) == 0 { // a term on the right
			j := perm[k-1]
			if r.At(0, j) == 0 {
				r.Set(0, j, -1)
				parts = append(parts, fmt.Sprintf("%s - %v = %s", left, x, asExpression(labels[j])))
				v = append(v, x)
				continue
			}
		}
		parts = append(parts, fmt.Sprintf("%s = %v", left, x))
		v = append(v, x)
	}
	return strings.Join(parts, ", "), r, v
}

// wald is (R b - r)'(R V R')^-1 (R b - r) from its definition.
func wald(b []float64, cov, r *mat.Dense, v []float64) float64 {
	q, k := r.Dims()
	var rv, rvr, rb, s mat.Dense
	rv.Mul(r, cov)
	rvr.Mul(&rv, r.T())
	rb.Mul(r, mat.NewDense(k, 1, b))
	rb.Sub(&rb, mat.NewDense(q, 1, v))
	if err := s.Solve(&rvr, &rb); err != nil {
		return math.NaN()
	}
	var w mat.Dense
	w.Mul(rb.T(), &s)
	return w.At(0, 0)
}

// restricted is the residual sum of squares under R b = r, by regression on the null
// space of R.
func (d *dense) restricted(r *mat.Dense, v []float64) float64 {
	q, k := r.Dims()
	var svd mat.SVD
	svd.Factorize(r, mat.SVDFull)
	var right, b0 mat.Dense
	svd.VTo(&right)
	svd.SolveTo(&b0, mat.NewDense(q, 1, v), q)
	rows := len(d.x)
	x, y := mat.NewDense(rows, k, nil), mat.NewDense(rows, 1, nil)
	for i := range rows {
		s := math.Sqrt(d.w[i])
		for j, c := range d.x[i] {
			x.Set(i, j, s*c)
		}
		y.Set(i, 0, s*d.y[i])
	}
	var fixed mat.Dense
	fixed.Mul(x, &b0)
	y.Sub(y, &fixed)
	if q == k {
		return mat.Dot(y.ColView(0), y.ColView(0))
	}
	var z, t, fit mat.Dense
	z.Mul(x, right.Slice(0, k, q, k))
	if err := t.Solve(&z, y); err != nil {
		panic(err)
	}
	fit.Mul(&z, &t)
	y.Sub(y, &fit)
	return mat.Dot(y.ColView(0), y.ColView(0))
}

// Every kind's test is the Wald statistic of its covariance as the dense definitions
// give it; the classical one is also the F of the restricted sum of squares.
func TestHypothesesAreWaldTests(t *testing.T) {
	forProblems(t, 60, func(t *testing.T, rng *rand.Rand, p *problem) {
		names := p.names
		passes := 0
		first, err := tryFit(p.tb.source(700), p.spec, vcov.Options{})
		if err != nil {
			t.Fatal(err)
		}
		text, r, v := drawn(rng, first.Terms)
		res, err := tryFit(p.tb.source(700), p.spec, vcov.Options{Errors: kinds(names...), Passes: passes, Hypotheses: []string{text}})
		if err != nil {
			t.Fatalf("%s: %v", text, err)
		}
		q, _ := r.Dims()
		d := p.d
		g, free := float64(d.groups()), d.n-float64(d.k)
		for i, name := range names {
			h := res.Hypotheses[i]
			cov := d.covariance(name)
			w := wald(d.b, cov, r, v)
			f, df2 := w/float64(q), free
			if strings.HasPrefix(name, "cr") {
				if float64(q) > g-1 {
					if h.F.Exists() || h.Reason == nil {
						t.Errorf("%s of %d clusters: %s has F %v", name, int(g), text, h.F)
					}
					continue
				}
				f, df2 = f*(g-float64(q))/(g-1), g-float64(q)
			}
			if h.Reason != nil {
				t.Errorf("%s: %s: %s", name, text, *h.Reason)
				continue
			}
			if name == "cr2" && q == 1 { // Satterthwaite's, held against rows elsewhere
				if df2 = float64(h.DF2); !(df2 > 0 && df2 < g) {
					t.Errorf("cr2: %s: df %v of %v clusters", text, df2, g)
				}
			}
			if float64(h.DF1) != float64(q) || float64(h.DF2) != df2 || !near(float64(h.F), f, f, 1e-7) {
				t.Errorf("%s: %s: F %v on %v and %v, dense %v on %d and %v", name, text, h.F, h.DF1, h.DF2, f, q, df2)
			}
			if name == "classical" && p.d.kind != stream.Sampling {
				byRSS := (d.restricted(r, v) - d.rss) / float64(q) / (d.rss / free)
				if !near(float64(h.F), byRSS, byRSS, 1e-8) {
					t.Errorf("%s: F %v, by the restricted sum of squares %v", text, h.F, byRSS)
				}
			}
			if q > 1 {
				if h.Estimate.Exists() || h.T.Exists() || h.Low.Exists() {
					t.Errorf("%s: %d restrictions have one estimate", text, q)
				}
				continue
			}
			var rb, variance float64
			for a := range d.b {
				rb += r.At(0, a) * d.b[a]
				for c := range d.b {
					variance += r.At(0, a) * cov.At(a, c) * r.At(0, c)
				}
			}
			se, crit := math.Sqrt(variance), tQuantile(0.975, df2)
			scale := math.Abs(rb) + se
			if !near(float64(h.Estimate), rb, scale, 1e-9) || !near(float64(h.SE), se, se, 1e-9) || !near(float64(h.T), (rb-v[0])/se, math.Abs(float64(h.T))+1, 1e-8) ||
				!near(float64(h.Low), rb-crit*se, scale, 1e-8) || !near(float64(h.High), rb+crit*se, scale, 1e-8) {
				t.Errorf("%s: %s: %+v, dense estimate %v error %v", name, text, h, rb, se)
			}
		}
	})
}

func quayTable(rows int, seed uint64) (tb *table, pallets, tonnes, minutes []float64) {
	r := rand.New(rand.NewPCG(seed, 9))
	tb = &table{}
	var barge []string
	var quay []int64
	for i := range rows {
		a, b := float64(r.IntN(64)), float64(r.IntN(256))/8
		pallets, tonnes = append(pallets, a), append(tonnes, b)
		l := []string{"canal", "deck", "motor"}[r.IntN(3)]
		barge = append(barge, l)
		quay = append(quay, int64(i%17))
		y := 20 + 2*a + 0.3*b + float64(len(l)) + (1+a/16)*r.NormFloat64() + float64(i%17)/4
		minutes = append(minutes, math.Round(256*y)/256)
	}
	tb.float("pallets", pallets)
	tb.float("tonnes", tonnes)
	tb.text("barge", barge)
	tb.int("quay", quay)
	tb.float("minutes", minutes)
	return tb, pallets, tonnes, minutes
}

func scaled(x []float64, by, plus float64) []float64 {
	out := make([]float64, len(x))
	for i, v := range x {
		out[i] = by*v + plus
	}
	return out
}

// Moving a term by 1e9 and counting it in other units changes neither the test of
// the same hypothesis nor its digits.
func TestHypothesesDoNotDependOnUnits(t *testing.T) {
	tb, pallets, tonnes, minutes := quayTable(1500, 1)
	moved := &table{schema: stream.Schema{Columns: slices.Clone(tb.schema.Columns[2:4])}, cols: slices.Clone(tb.cols[2:4])}
	moved.float("pallets", scaled(pallets, 4, 1e9))
	moved.float("tonnes", scaled(tonnes, 1024, -3e8))
	moved.float("minutes", minutes)
	for _, terms := range [][]string{{"pallets", "tonnes"}, {"pallets", "tonnes", "each(barge)"}} {
		for _, c := range []struct{ plain, moved string }{
			{"pallets = 2", "4 * pallets = 2"},
			{"pallets = tonnes", "4 * pallets = 1024 * tonnes"},
			{"pallets + 2 * tonnes = 1, pallets - tonnes = 2", "4 * pallets + 2048 * tonnes = 1, 4 * pallets - 1024 * tonnes = 2"},
			// The fit at 30 pallets and 16 tonnes.
			{"constant + 30 * pallets + 16 * tonnes = 90", "constant + 1000000120 * pallets - 299983616 * tonnes = 90"},
			{"constant + 30 * pallets + 16 * tonnes = 90, pallets = 2, tonnes = 0.25",
				"constant + 1000000120 * pallets - 299983616 * tonnes = 90, 4 * pallets = 2, 1024 * tonnes = 0.25"},
		} {
			for _, passes := range []int{1, 2} {
				names := []string{"classical", "hc1", "cr1"}
				if len(terms) == 3 {
					if passes == 1 {
						continue
					}
				}
				spec := stream.Spec{Outcome: "minutes", Terms: terms, Keys: []string{"quay"}}
				a := fit(t, tb.source(400), spec, vcov.Options{Errors: kinds(names...), Passes: passes, Hypotheses: []string{c.plain}})
				b := fit(t, moved.source(400), spec, vcov.Options{Errors: kinds(names...), Passes: passes, Hypotheses: []string{c.moved}})
				for i, h := range a.Hypotheses {
					g := b.Hypotheses[i]
					if h.Reason != nil || g.Reason != nil {
						t.Fatalf("%s: %v, %v", c.plain, h.Reason, g.Reason)
					}
					if d := digits(float64(g.F), float64(h.F)); d < 10.5 {
						t.Errorf("%d passes, %s %s: F %v, moved %v: %.1f digits", passes, h.Errors, c.plain, h.F, g.F, d)
					}
					if h.SE.Exists() {
						if d := digits(float64(g.SE), float64(h.SE)); d < 11.5 {
							t.Errorf("%d passes, %s %s: error %v, moved %v: %.1f digits", passes, h.Errors, c.plain, h.SE, g.SE, d)
						}
					}
				}
			}
		}
	}
}

// The same hypothesis in other words is the same test; what follows from the rest
// does not count; a joint test of all terms is the overall one.
func TestHypothesesInOtherWords(t *testing.T) {
	tb, _, _, _ := quayTable(900, 2)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(barge)", "pallets * tonnes"}, Keys: []string{"quay"}}
	o := vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1"), Hypotheses: []string{
		"pallets = 0, tonnes = 0",
		"pallets + tonnes = 0, pallets = tonnes",
		"pallets = 0, pallets + 1e-9 * tonnes = 0",
		"pallets = 0, tonnes = 0, 2 * pallets - 3 * tonnes = 0, 0 = 0.1 * tonnes",
		"tonnes = pallets, pallets = 0, tonnes = 0",
		`each(barge) = 0`,
		`each(barge, level="deck") = 0, each(barge, level="motor") = 0`,
		`each(barge, level="deck") = each(barge, level="motor"), each(barge, level="deck") = 0`,
		"pallets = 0, tonnes = 0, each(barge) = 0, tonnes * pallets = 0",
	}}
	r := fit(t, tb.source(300), spec, o)
	k := len(o.Errors)
	same := func(i, j, q int) {
		for e := range k {
			a, b := r.Hypotheses[i*k+e], r.Hypotheses[j*k+e]
			if a.Reason != nil || float64(a.DF1) != float64(q) || a.DF1 != b.DF1 || a.DF2 != b.DF2 || digits(float64(a.F), float64(b.F)) < 9 {
				t.Errorf("%+v is not %+v", a, b)
			}
		}
	}
	same(0, 1, 2)
	same(0, 2, 2)
	same(0, 3, 2)
	same(0, 4, 2)
	same(5, 6, 2)
	same(5, 7, 2)
	for e := range k {
		h, o := r.Hypotheses[8*k+e], r.Errors[e].Overall
		if h.DF1 != o.DF1 || h.DF2 != o.DF2 || digits(float64(h.F), float64(o.F)) < 9 || digits(float64(h.P), float64(o.P)) < 6 {
			t.Errorf("all terms: %+v, overall %+v", h, o)
		}
	}
	told := 0
	for _, w := range r.Warnings {
		if w.Code == "redundant-restriction" {
			told++
		}
	}
	if told != 3 {
		t.Errorf("%d restrictions are told to be redundant, want 3: %+v", told, r.Warnings)
	}
}

// Longley's F of all six terms is certified by NIST: 330.285339234588.
func TestHypothesisLongley(t *testing.T) {
	for _, s := range nistSets(t) {
		if s.Name != "Longley" {
			continue
		}
		h := strings.Join(s.Terms, " = 0, ") + " = 0"
		r := fit(t, openFile(t, testdata("nist", s.File), stream.Options{}), s.spec(), vcov.Options{Errors: kinds("classical"), Hypotheses: []string{h}})
		if d := digits(float64(r.Hypotheses[0].F), 330.285339234588); d < 12 {
			t.Errorf("F %v: %.1f digits", r.Hypotheses[0].F, d)
		}
	}
}

func TestHypothesesWithoutTest(t *testing.T) {
	tb, pallets, tonnes, minutes := quayTable(120, 3)
	twice := make([]float64, len(pallets))
	lone := make([]float64, len(pallets))
	for i := range twice {
		twice[i] = 2*pallets[i] + 3
	}
	lone[7] = 1
	tb.float("twice", twice)
	tb.float("lone", lone)
	few := make([]int64, len(pallets))
	for i := range few {
		few[i] = int64(i % 3)
	}
	tb.int("shift", few)
	tb.text("flag", slices.Repeat([]string{"yes"}, len(pallets)))
	exact := make([]float64, len(pallets))
	for i := range exact {
		exact[i] = 1 + 2*pallets[i] - tonnes[i]
	}
	tb.float("exact", exact)
	_ = minutes
	terms := []string{"pallets", "tonnes", "twice", "lone", "each(barge)", "each(flag)"}
	spec := stream.Spec{Outcome: "minutes", Terms: terms, Keys: []string{"shift"}}
	errs := kinds("classical", "hc1", "hc3", "cr1")
	for _, c := range []struct {
		text string
		want [4]string // "" for a test
	}{
		{"twice = 0", [4]string{"twice is aliased", "twice is aliased", "twice is aliased", "twice is aliased"}},
		{"pallets + 2 * twice = 2", [4]string{}},
		{"pallets + 2 * twice = 2, tonnes = 0", [4]string{}},
		{"pallets + 2 * twice = 2, pallets = 2", [4]string{"twice is aliased", "twice is aliased", "twice is aliased", "twice is aliased"}},
		{"constant + 3 * twice = 20", [4]string{}},
		{"lone = 0", [4]string{"", "lone has no p by hc1", "lone has no p by hc3", "lone has no p by cr1(shift)"}},
		{"lone = pallets", [4]string{"", "lone has no p by hc1", "lone has no p by hc3", "lone has no p by cr1(shift)"}},
		{"pallets = 0, tonnes = 0, each(barge) = 0", [4]string{"", "", "", "more restrictions than clusters less one"}},
		{"each(flag) = 0", [4]string{"single level", "single level", "single level", "single level"}},
	} {
		r := fit(t, tb.source(50), spec, vcov.Options{Errors: errs, Hypotheses: []string{c.text}, Passes: 2})
		for i, h := range r.Hypotheses {
			switch {
			case c.want[i] == "":
				if h.Reason != nil || !h.P.Exists() {
					t.Errorf("%s under %s: no test because %s", c.text, h.Errors, *h.Reason)
				}
			case h.Reason == nil || !strings.Contains(*h.Reason, c.want[i]) || h.P.Exists() || h.F.Exists():
				t.Errorf("%s under %s: %+v, want none because %s", c.text, h.Errors, h, c.want[i])
			}
		}
	}
	// What aliased terms add up to is told by the term that is kept.
	r := fit(t, tb.source(50), spec, vcov.Options{Errors: errs, Hypotheses: []string{"pallets + 2 * twice = 2", "pallets = 2", "constant + 3 * twice = 20", "constant = 20"}, Passes: 2})
	for i := range errs {
		for _, pair := range [][2]int{{0, 1}, {2, 3}} {
			a, b := r.Hypotheses[pair[0]*4+i], r.Hypotheses[pair[1]*4+i]
			if digits(float64(a.Estimate), float64(b.Estimate)) < 12 || digits(float64(a.SE), float64(b.SE)) < 11 {
				t.Errorf("%+v is not %+v", a, b)
			}
		}
	}
	spec = stream.Spec{Outcome: "exact", Terms: []string{"pallets", "tonnes"}}
	r = fit(t, tb.source(50), spec, vcov.Options{Errors: kinds("classical", "hc1"), Hypotheses: []string{"pallets = 2"}})
	for _, h := range r.Hypotheses {
		if h.Reason == nil || !strings.Contains(*h.Reason, "exactly") || h.P.Exists() || math.Abs(float64(h.Estimate)-2) > 1e-12 {
			t.Errorf("perfect fit: %+v", h)
		}
	}
	spec = stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Weight: "tonnes", WeightKind: stream.Sampling}
	r = fit(t, tb.source(50), spec, vcov.Options{Errors: kinds("classical", "hc1"), Hypotheses: []string{"pallets = 2"}})
	if h := r.Hypotheses[0]; h.Reason == nil || !strings.Contains(*h.Reason, "classical: classical errors have no meaning") {
		t.Errorf("%+v", h)
	}
	if h := r.Hypotheses[1]; h.Reason != nil {
		t.Errorf("%+v", h)
	}
}

func TestHypothesesRefused(t *testing.T) {
	tb, _, _, _ := quayTable(90, 4)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(barge)", "each(barge) * each(quay)"}}
	for _, c := range []struct{ text, want string }{
		{"palets = 0", "there is no term palets; nearest: pallets"},
		{"pallets = 1, pallets = 2", `hypothesis "pallets = 1, pallets = 2": pallets = 2 contradicts what stands before it`},
		{"pallets + tonnes = 1, 2 * pallets + 2 * tonnes = 3", "contradicts"},
		{"each(barge) = 0, each(barge) = 1", "contradicts"},
		{`each(barge) = 0, each(barge, level="deck") = 1`, "contradicts"},
		{`each(barge) = each(barge, level="deck") + 1`, "contradicts itself"},
		{`each(barge, level="dck") = 1`, "no used row has that level; levels are canal, deck, motor"},
		{`each(barge, level="canal") = 1`, "canal is the base level of barge"},
		{"1e300 * pallets = 1e-300, 1e300 * 1e300 * tonnes = 0", ""},
	} {
		_, err := tryFit(tb.source(50), spec, vcov.Options{Errors: kinds("classical"), Hypotheses: []string{c.text}})
		if c.want == "" {
			if err != nil {
				t.Errorf("%s: %v", c.text, err)
			}
			continue
		}
		if err == nil || !strings.Contains(err.Error(), c.want) || !errors.Is(err, stream.ErrUse) {
			t.Errorf("%s: %v, want %s", c.text, err, c.want)
		}
	}
}

// A category that is eliminated first changes nothing about the other terms; of its
// own coefficients single ones are tested.
func TestHypothesesBesideManyLevels(t *testing.T) {
	tb := harbour(1500, 90, 7, 4, 5)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(berth)", "each(quay)"}, Keys: []string{"crew"}}
	o := vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1"), Dense: 1 << 20, Hypotheses: []string{
		"pallets = 2", "pallets = 4 * tonnes", "pallets = 2, tonnes = 0.5", `each(quay, level="3") = each(quay, level="4")`,
		`2 * each(berth, level="17") = 9`, "constant = 30", `each(quay, level="3") = 0, each(quay, level="4") = 0, tonnes = 0`,
	}}
	dense := fit(t, tb.source(400), spec, o)
	o.Dense = 1
	apart := fit(t, tb.source(400), spec, o)
	for i, h := range apart.Hypotheses {
		g := dense.Hypotheses[i]
		if h.Text != g.Text || h.Errors != g.Errors || h.DF1 != g.DF1 || (h.Reason == nil) != (g.Reason == nil) {
			t.Fatalf("%+v, dense %+v", h, g)
		}
		if h.Reason != nil {
			if g.F.Exists() || h.F.Exists() || *h.Reason != *g.Reason {
				t.Errorf("%s, dense %s", *h.Reason, *g.Reason)
			}
			continue
		}
		if digits(float64(h.F), float64(g.F)) < 9 || h.DF2 != g.DF2 || (h.SE.Exists() && (digits(float64(h.SE), float64(g.SE)) < 10 || digits(float64(h.High), float64(g.High)) < 9)) {
			t.Errorf("%+v, dense %+v", h, g)
		}
	}
	o.Hypotheses = []string{`each(berth) = 0`, `each(berth, level="17") = pallets`, "constant + pallets = 3"}
	r := fit(t, tb.source(400), spec, o)
	for _, h := range r.Hypotheses {
		if h.Reason == nil || h.F.Exists() {
			t.Errorf("%+v", h)
		}
	}
}

// The tests that are adjusted for are those of the terms: neither the constant nor
// an aliased term is one.
func TestAdjustedPCountsTerms(t *testing.T) {
	tb, pallets, _, _ := quayTable(200, 6)
	tb.float("twice", scaled(pallets, 2, 1))
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "twice", "each(barge)"}}
	for _, method := range []string{"holm", "bh", "none"} {
		r := fit(t, tb.source(64), spec, vcov.Options{Errors: kinds("classical", "hc1"), Adjust: method})
		if r.Model.Adjust != method {
			t.Errorf("method %q, want %q", r.Model.Adjust, method)
		}
		for _, e := range r.Errors {
			if method == "none" {
				if e.PAdjusted != nil {
					t.Errorf("adjusted p %v without a method", e.PAdjusted)
				}
				continue
			}
			if e.PAdjusted[0].Exists() || e.PAdjusted[3].Exists() {
				t.Errorf("%s: the constant or an aliased term is a test: %v", method, e.PAdjusted)
			}
			// Four tests; pallets has by far the smallest p.
			if got, want := float64(e.PAdjusted[1]), 4*float64(e.P[1]); digits(got, want) < 14 {
				t.Errorf("%s: smallest p %v of 4 became %v", method, e.P[1], got)
			}
		}
	}
	if _, err := tryFit(tb.source(64), spec, vcov.Options{Errors: kinds("hc1"), Adjust: "sidak"}); !errors.Is(err, stream.ErrUse) {
		t.Errorf("an unknown method: %v", err)
	}
}

// A single term against zero is the line of the table, its degrees of freedom under
// cr2 among it.
func TestHypothesisOfOneTermIsTheTable(t *testing.T) {
	tb, _, _, _ := quayTable(600, 7)
	for _, cats := range []bool{false, true} {
		spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{"quay"}}
		terms := []string{"constant", "pallets", "tonnes"}
		if cats {
			spec.Terms = append(spec.Terms, "each(barge)")
			terms = append(terms, `each(barge, level="deck")`, `each(barge, level="motor")`)
		}
		o := vcov.Options{Errors: kinds("classical", "hc0", "hc1", "hc3", "cr0", "cr1", "cr2", "cr3")}
		for _, name := range terms {
			o.Hypotheses = append(o.Hypotheses, name+" = 0")
		}
		r := fit(t, tb.source(200), spec, o)
		for j := range terms {
			for i := range o.Errors {
				e, h := r.Errors[i], r.Hypotheses[j*len(o.Errors)+i]
				for what, pair := range map[string][2]vcov.Number{"estimate": {h.Estimate, r.Estimates[j]}, "error": {h.SE, e.SE[j]}, "df": {h.DF2, e.DF[j]}, "t": {h.T, e.T[j]}, "p": {h.P, e.P[j]}, "low": {h.Low, e.Low[j]}, "high": {h.High, e.High[j]}} {
					if digits(float64(pair[0]), float64(pair[1])) < 10 {
						t.Errorf("%s by %s: %s %v, in the table %v", h.Text, h.Errors, what, pair[0], pair[1])
					}
				}
			}
		}
	}
}
