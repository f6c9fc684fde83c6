package vcov

import (
	"cmp"
	"fmt"
	"maps"
	"math"
	"slices"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Version of the program, as results carry it.
const Version = "0.1.0"

var weightNames = map[stream.WeightKind]string{stream.Frequency: "frequency", stream.Precision: "precision", stream.Sampling: "sampling"}

// result assembles the plain-data result.
func (f *fitter) result() (*Result, error) {
	x, s, d := f.sol, f.state, f.d
	r := &Result{Format: Format, Version: Version, Outcome: d.OutcomeText(), N: x.n, Rank: x.rank(),
		Aliased: append([]Alias{}, x.alias...), BaseLevels: x.bases, Hypotheses: []Hypothesis{}, Errors: []Errors{}}
	info := f.info()
	r.Input = Input{Fingerprint: s.Fingerprint, Files: info.Files, Bytes: info.Bytes}
	if r.Input.Bytes < 0 {
		r.Input.Bytes = s.Bytes
	}
	r.Rows = Rows{Read: s.Read, Used: s.Tally.Used, Missing: s.Tally.Missing, Excluded: s.Tally.Excluded,
		Malformed: s.Malformed, ZeroWeight: s.Tally.ZeroWeight, MissingBy: s.Tally.MissingBy}
	if s.Swept != nil {
		r.Rows.Singleton = s.Swept.Singletons
		r.Sweep = &Sweep{Units: x.unit(), Effects: s.Swept.Units}
	}
	if r.Rows.MissingBy == nil {
		r.Rows.MissingBy = map[string]int64{}
	}
	for _, p := range s.Problems {
		r.Rows.Problems = append(r.Rows.Problems, p.Error())
	}
	r.Weight = WeightSum{Sum: Number(s.Weight)}
	if n, ok := weightNames[x.kind]; ok {
		r.Weight.Kind = ptr(n)
	}
	r.Terms, r.Estimates = []string{}, []Number{}
	order := x.order()
	for i := range x.count() {
		if order != nil {
			i = order[i]
		}
		r.Terms = append(r.Terms, x.coefficient(i).label)
		r.Estimates = append(r.Estimates, Number(x.est[i]))
	}
	f.fitQuality(r)
	tests := make([][]Hypothesis, len(x.hypotheses))
	for _, k := range f.o.Errors {
		x.judged = nil
		e := f.errorsFor(k)
		if x.judged != nil && k.Name != "classical" && x.kind != stream.Sampling && f.rssLoss <= lossRefuse {
			e.Extremes = x.extremes(x.judged)
		}
		for i, h := range x.hypotheses {
			t := x.test(h, &e, x.judged, f.o.Level)
			if bootstraps(k.Name) {
				f.fail = cmp.Or(f.fail, f.bootstrapTest(&t, h, k, &e))
			}
			tests[i] = append(tests[i], t)
		}
		r.Errors = append(r.Errors, e)
	}
	for _, t := range tests {
		r.Hypotheses = append(r.Hypotheses, t...)
	}
	f.shapes(r)
	f.several(r)
	if err := f.audit(r); err != nil {
		return nil, err
	}
	r.SpreadTest = f.spreadTest()
	r.Leverage = f.leverageSummary()
	f.warnings(r)
	r.Model = f.model()
	r.Run = Run{Passes: f.passes, Route: f.route, Arithmetic: "double", Workers: f.o.Workers, Segments: s.Segments, Unread: s.Unread,
		Bytes: f.bytes, SpilledBytes: f.scan.Meter.Spilled.Load(), SpilledRuns: f.scan.Meter.Runs.Load(), Condition: Number(x.condition())}
	if f.byCells {
		r.Run.UniqueRows = s.CellRows()
	}
	if s.Extended {
		r.Run.Arithmetic, r.Run.ArithmeticReason = "extended", f.whyExtended(s.Frame)
		if f.o.Arithmetic == "extended" {
			r.Run.ArithmeticReason = "asked for"
		}
	}
	return r, nil
}

// fitQuality fills residual, R2 and adjusted R2. With mean-1 weights for precision
// and sampling weights,
//
//	sd^2 = RSS (N / sum w) / (N - k),  R2 = 1 - RSS/TSS,
//	adjusted R2 = 1 - (1 - R2) (N - c)/(N - k),  c = 1 if centred, else 0.
//
// Where effects of units are swept out TSS is about the means of the units, c their
// number and k with them.
func (f *fitter) fitQuality(r *Result) {
	x := f.sol
	s2 := x.state.Frame.YInv * x.state.Frame.YInv
	rss := x.rss / s2
	if x.perfect {
		rss = 0
	}
	n, df := float64(x.n), float64(x.df())
	mean1 := 1.0
	if x.kind == stream.Precision || x.kind == stream.Sampling {
		mean1 = n / x.state.Weight
	}
	r.Residual = Residual{DF: x.df(), SS: Number(rss), SD: Number(math.Sqrt(rss * mean1 / df))}
	if df <= 0 {
		r.Residual.SD = Number(nan)
	}
	centred := x.constantSpanned()
	r.R2Kind = "uncentred"
	c := 0.0
	if centred {
		r.R2Kind, c = "centred", 1
	}
	tss := x.outcomeSquares(centred) / s2
	least := perfectShare * perfectShare * x.outcomeSquares(false) / s2
	if x.state.Swept != nil {
		r.R2Kind, c = "within", float64(x.swept())
		least = x.sweptNoise() / s2
	}
	r.R2, r.R2Adjusted = Number(nan), Number(nan)
	if tss > least {
		r2 := 1 - rss/tss
		r.R2 = Number(r2)
		if df > 0 {
			r.R2Adjusted = Number(1 - (1-r2)*(n-c)/df)
		}
	}
}

func (f *fitter) warnings(r *Result) {
	x, s := f.sol, f.state
	r.Warnings = append([]Warning{}, x.warnings()...)
	for _, e := range slices.Sorted(maps.Keys(s.Tally.NoValue)) {
		r.Warnings = append(r.Warnings, Warning{Code: "no-value", Term: ptr(e),
			Text: fmt.Sprintf("%s has no value in %d rows although its cells are there; those rows count as missing", e, s.Tally.NoValue[e])})
	}
	if x.perfect {
		r.Warnings = append(r.Warnings, Warning{Code: "perfect-fit", Text: "the terms give the outcome exactly: errors are 0, and t and p do not exist"})
	}
	if x.df() <= 0 {
		r.Warnings = append(r.Warnings, Warning{Code: "no-degrees-of-freedom", Text: fmt.Sprintf("%d rows for %d terms: there are no errors", x.n, int64(x.rank())+x.swept())})
	}
	if !r.R2.Exists() && !x.perfect {
		where := "every used row"
		if s.Swept != nil {
			where = "all rows of each " + x.unit()
		}
		r.Warnings = append(r.Warnings, Warning{Code: "constant-outcome", Text: fmt.Sprintf("the outcome is the same in %s; R2 does not exist", where)})
	}
	for i := range r.Errors {
		e := &r.Errors[i]
		if e.Status != "ok" || x.perfect {
			continue
		}
		var lone []Warning
		for j, t := range r.Terms {
			if !r.Estimates[j].Exists() || e.T[j].Exists() || f.told[e.Name()+"\x00"+t] {
				continue
			}
			if e.SE[j] == 0 {
				what := "rows"
				if len(e.Clusters) > 0 {
					what = "clusters"
				}
				r.Warnings = append(r.Warnings, Warning{Code: "zero-error", Term: ptr(t), Kind: ptr(e.Name()),
					Text: fmt.Sprintf("the %s that decide %s leave no residual; %s gives it the error 0, no p and no interval", what, t, e.Name())})
				continue
			}
			what := "a single row"
			if len(e.Clusters) > 0 {
				what = "a single cluster"
			}
			lone = append(lone, Warning{Code: "lone", Term: ptr(t), Kind: ptr(e.Name()),
				Text: fmt.Sprintf("%s is determined by %s; %s gives it no p and no interval", t, what, e.Name())})
		}
		if len(lone) > maxAlike {
			what := "row"
			if len(e.Clusters) > 0 {
				what = "cluster"
			}
			lone = []Warning{{Code: "lone", Kind: ptr(e.Name()), Text: fmt.Sprintf("%s are each determined by a single %s; %s gives them no p and no interval",
				list(termsOf(lone), 6), what, e.Name())}}
		}
		r.Warnings = append(r.Warnings, lone...)
	}
	f.tellSweep()
	r.Warnings = append(r.Warnings, f.warn...)
}

// maxAlike is how many warnings of one code, a term each, stand by themselves.
const maxAlike = 20

// termsOf lists the terms of warnings that have one.
func termsOf(ws []Warning) []string {
	var names []string
	for _, w := range ws {
		names = append(names, *w.Term)
	}
	return names
}

// model echoes what was asked.
func (f *fitter) model() Model {
	d, sp := f.d, f.d.Spec
	m := Model{Outcome: d.OutcomeText(), Terms: []string{}, Constant: !sp.NoConstant, Cluster: []string{}, Errors: []string{},
		Missing: "skip", BadRows: "stop", Level: Number(f.o.Level), Zone: "UTC"}
	terms := d.Terms
	if f.listed != nil {
		terms = f.listed.state.Design.Terms
	}
	for i := range terms {
		m.Terms = append(m.Terms, terms[i].Text)
	}
	if sp.Weight != "" {
		m.Weight = ptr(d.WeightText())
		m.WeightKind = ptr(weightNames[sp.WeightKind])
	}
	if sp.Where != "" {
		m.Where = ptr(d.WhereText())
	}
	if d.Sweep >= 0 {
		m.Sweep = ptr(d.Keys[d.Sweep].Text)
	}
	for i, k := range d.Keys {
		if d.Parts[i] == nil && (i != d.Sweep || f.clustersBy(i)) {
			m.Cluster = append(m.Cluster, k.Text)
		}
	}
	for _, k := range f.o.Errors {
		name := k.Name
		if k.Cluster >= 0 {
			name += "(" + d.Keys[k.Cluster].Text + ")"
		}
		m.Errors = append(m.Errors, name)
	}
	m.Hypotheses, m.Adjust = []string{}, f.o.Adjust
	for _, h := range f.plan.hypotheses {
		m.Hypotheses = append(m.Hypotheses, hypothesisText(h))
	}
	if b := f.o.dealt(d); b != nil {
		by := ""
		if b.Key >= 0 {
			by = d.Keys[b.Key].Text
		}
		m.Audit = ptr(AuditText(f.o.Buckets, by))
	}
	if sp.Stop {
		m.Missing = "stop"
	}
	if sp.Zone != nil {
		m.Zone = sp.Zone.String()
	}
	return m
}

// timings reports where the time went: the stages of the scan, and the solve.
func (f *fitter) timings(r *Result, solve time.Duration) {
	if f.scan.Timings == nil {
		return
	}
	for _, s := range accum.Stages() {
		if d := f.scan.Timings.Spent(s); d > 0 {
			r.Run.Timings = append(r.Run.Timings, Timing{s.String(), Number(d.Seconds())})
		}
	}
	r.Run.Timings = append(r.Run.Timings, Timing{"errors", Number(solve.Seconds())})
}

// shapes describes the clusters of each clustering once.
func (f *fitter) shapes(r *Result) {
	done := map[int]bool{}
	for _, k := range f.o.Errors {
		if k.Cluster < 0 || done[k.Cluster] {
			continue
		}
		done[k.Cluster] = true
		if c := f.groups[k.Cluster]; c != nil && c.shape != nil && c.groups > 1 && !c.failed {
			s := c.shape.clustering()
			s.Clusters, s.GroupRows = []string{f.d.Keys[k.Cluster].Text}, c.rows
			r.Clusterings = append(r.Clusterings, s)
		}
	}
}
