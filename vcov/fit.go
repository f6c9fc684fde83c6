package vcov

import (
	"context"
	"fmt"
	"math"
	"slices"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

const (
	// lossLimit is the bound of relative error above which errors from one-pass
	// sums are replaced by a second pass.
	lossLimit = 1e-12
	// lossRefuse: beyond it nothing is printed.
	lossRefuse = 1e-6
	// blurLimit: second moments that may have lost more are told of.
	blurLimit = 1e-9
	// loneShare of a coefficient's variance factor that one row may decide.
	loneShare = 1e-9
)

// Fit reads the source once or twice and returns estimates and errors. src is
// not closed. Same input and model give the same bits for any o.Workers.
//
// Errors: a *stream.UseError for a wrong model or option, the source's errors,
// *accum.NoRowsError, *accum.MemoryError, *accum.ScratchError, *accum.DamageError,
// *accum.ChangedError, the context's.
func Fit(ctx context.Context, src stream.Source, d *stream.Design, o Options) (*Result, error) {
	start := time.Now()
	o = o.withDefaults()
	p, err := PlanFit(ctx, src, d, o)
	if err != nil {
		return nil, err
	}
	var l *listed
	if d.Sweep >= 0 && len(d.Categories) > 0 {
		if l, err = listLevels(ctx, src, d, accum.Options{Workers: o.Workers, Memory: o.Memory, Dense: o.Dense, Scratch: o.Scratch, Meter: o.Meter, Checkpoint: o.Checkpoint}); err != nil {
			return nil, err
		}
		d = l.design
		numeric := o
		numeric.Hypotheses = nil
		asked := p.hypotheses
		if p, err = PlanFit(ctx, src, d, numeric); err != nil {
			return nil, err
		}
		p.hypotheses = asked
	}
	f := &fitter{ctx: ctx, src: src, d: d, o: o, plan: p, listed: l, told: map[string]bool{},
		scan: accum.Options{Workers: o.Workers, Memory: o.Memory, Clusters: o.ClusterMemory, Dense: o.Dense, Scratch: o.Scratch, Meter: o.Meter, Arithmetic: arithmetics[o.Arithmetic], Sample: p.sample, Checkpoint: o.Checkpoint}}
	if f.scan.Meter == nil {
		f.scan.Meter = new(accum.Meter)
	}
	if l != nil {
		f.passes, f.bytes = l.passes, l.bytes
	}
	defer f.close()
	if o.Timings {
		f.scan.Timings = new(accum.Timings)
	}
	if err := f.first(); err != nil {
		return nil, err
	}
	if err := f.second(); err != nil {
		return nil, err
	}
	begin := time.Now()
	r, err := f.answer()
	if err != nil {
		return nil, err
	}
	f.timings(r, time.Since(begin))
	r.Run.Seconds = Number(time.Since(start).Seconds())
	return r, nil
}

// answer is the result of all sums that the passes have left.
func (f *fitter) answer() (*Result, error) {
	if err := f.clusters(); err != nil {
		return nil, err
	}
	r, err := f.result()
	if err == nil {
		err = f.fail
	}
	if err != nil {
		return nil, err
	}
	return r, nil
}

var arithmetics = map[string]accum.Arithmetic{"": accum.Auto, "auto": accum.Auto, "double": accum.Double, "extended": accum.Extended}

type fitter struct {
	ctx     context.Context
	src     stream.Source
	d       *stream.Design
	o       Options
	plan    *Plan
	listed  *listed // nil unless categories stand beside a sweep
	scan    accum.Options
	state   *accum.State
	sol     *solution
	sums    *accum.RowSums
	kinds   []string             // of sums.Meats
	keys    []int                // of sums.Scores
	groups  map[int]*clusterSums // by key
	byCells bool                 // sums are from unique rows
	heavyOK bool                 // rows of high leverage were summed one by one
	fourth  []float64
	gross   []float64 // size of what fourth moments added up for it
	loss    float64   // of the fourth-moment errors
	rssLoss float64   // of the residual sum of squares
	noise   []float64 // of the fourth-moment variances
	passes  int
	bytes   int64
	warn    []Warning
	told    map[string]bool // kinds and terms of warnings that errors were left out
	route   string
	fail    error // of the bootstrap
	series  *series
}

// first runs pass one, again in a better frame if the data ask for it.
func (f *fitter) first() error {
	s, err := accum.First(f.ctx, f.src, f.d, f.plan.needs, f.scan)
	if err != nil {
		return err
	}
	f.count(s)
	if err := f.solve(s); err != nil {
		return err
	}
	lossy := arithmetics[f.o.Arithmetic] == accum.Auto && !s.Extended && s.Frame.Lossy()
	if f.sweepLossy() {
		return f.sweepAgain()
	}
	if (lossy || f.sol.needsFrame()) && f.info().Rewindable {
		s.Close()
		s, err := accum.Again(f.ctx, f.src, s, f.plan.needs, f.scan)
		if err != nil {
			return err
		}
		f.count(s)
		if lossy && s.Extended {
			f.note("frame-renewed", "the first pass was repeated in extended arithmetic: the first rows did not show how collinear the terms are")
		} else {
			f.note("frame-renewed", "the first pass was repeated: the rows that set shift and scale did not stand for the whole input")
		}
		if err := f.solve(s); err != nil {
			return err
		}
		f.sol.settle()
	}
	if len(s.Groups) > 0 || f.sol.rss == f.sol.svv {
		f.sol.settle() // levels are no part of the frame
	}
	f.sumLoss()
	return nil
}

// count adds the passes that made s.
func (f *fitter) count(s *accum.State) {
	f.passes += 1 + len(s.Repeated)
	f.bytes += s.Bytes * int64(1+len(s.Repeated))
	for _, why := range s.Repeated {
		f.note("unit-renewed", "the first pass was repeated: %s", why)
	}
}

// sumLoss says where the second moments themselves have lost digits.
func (f *fitter) sumLoss() {
	x := f.sol
	if x.blur > blurLimit {
		f.note("digits", "some terms are so close to combinations of others, or so small beside them, that estimates and errors may have only about %d digits", digits(x.blur))
	}
	if fr := f.state.Frame; x.apart != nil && fr.Lossy() && !x.perfect {
		f.note("digits", "terms are nearly collinear: some estimates may have only about %d digits, since there are too many levels for a solve with more", int(fr.Digits))
	} else if !f.state.Extended && fr.Lossy() && !x.perfect {
		f.note("digits", "terms are nearly collinear: some estimates may have only about %d digits; --arithmetic extended keeps more", int(fr.Digits))
	}
	if x.perfect || x.df() <= 0 {
		return
	}
	eps := 0x1p-53
	if f.state.Extended && len(f.state.Groups) == 0 {
		eps = 0x1p-100
	}
	if f.rssLoss = eps * x.svv / x.rss; f.rssLoss > lossLimit {
		f.note("digits", "the residual sum of squares has about %d digits left: the rows that set shift and scale did not stand for the whole input; --passes 2 keeps them", digits(f.rssLoss))
	}
}

func (f *fitter) solve(s *accum.State) error {
	b, err := newBasis(s)
	if err != nil {
		return err
	}
	if f.listed != nil {
		f.listed.name(b)
	}
	f.state, f.sol = s, solve(b)
	return f.sol.resolve(f.plan.hypotheses)
}

// second runs pass two where the plan says so, or where pass one lost digits.
func (f *fitter) second() error {
	x, s := f.sol, f.state
	f.route = f.plan.Route
	rows := f.plan.rows
	if x.df() <= 0 || x.perfect {
		rows = false // no errors to compute
		if f.plan.needs.Fourth {
			f.fourth, _ = s.Fourth(x.theta, false)
		}
		return nil
	}
	if f.plan.needs.Fourth {
		f.fourth, _ = s.Fourth(x.theta, false)
		gross, _ := s.Fourth(x.theta, true)
		f.gross = gross
		f.loss, f.noise = x.cancellation(f.fourth, gross)
		if f.loss > lossLimit {
			if f.info().Rewindable && f.o.Passes != 1 {
				rows = true
				f.fourth = nil
				f.note("second-pass", "fourth moments lost digits (relative error up to %.1e); a second pass was made", f.loss)
			} else {
				f.note("digits", "hc0 and hc1 have about %d digits left: fourth moments cancel; a second pass would keep them", digits(f.loss))
			}
		}
	}
	if key := f.splitKey(); key >= 0 && !rows && f.info().Rewindable && f.o.Passes != 1 {
		rows = true
		f.plan.moments, f.plan.needs.Keep = f.plan.needs.Keep, false
		f.note("second-pass", "rows of some %s lie in several clusters of %s, so that a second pass took the means off every row", x.unit(), f.d.Keys[key].Text)
	}
	if s.Swept != nil && s.Dropped && !rows && s.KeepMeans(f.o.Memory/meansShare) != nil {
		f.note("frame-renewed", "the first pass was repeated: the second moments of each %s outgrew a sixteenth of --memory, and the means for a second pass do not fit either; the moments went to scratch", x.unit())
		f.plan.needs.Keep = true
		s.Close()
		if err := f.first(); err != nil {
			return err
		}
		x, s = f.sol, f.state
	}
	if len(f.plan.needs.Clusters) > 0 && s.Dropped && !(s.Swept != nil && rows) {
		rows = true
		f.note("second-pass", "the clusters' second moments outgrew a sixteenth of --memory; a second pass kept scores only")
	}
	if s.Coarse && f.info().Rewindable && len(f.plan.needs.Clusters) > 0 {
		rows = true
		f.note("second-pass", "the clusters' second moments differ too much in size to keep their digits; a second pass kept scores only")
	}
	if s.Swept != nil && !rows && len(f.plan.needs.Clusters) > 0 && 0x1p-53*s.Swept.Spread > lossLimit && f.info().Rewindable && f.o.Passes != 1 {
		rows = true
		f.plan.moments, f.plan.needs.Keep = f.plan.needs.Keep, false
		f.note("second-pass", "what varies within %s is too small beside what varies between for the second moments of each; a second pass was made", x.unit())
	}
	if s.Coarse && len(s.Groups) > 0 {
		f.note("digits", "the sums of category levels differ too much in size: small ones have lost digits")
	}
	if f.plan.needs.Cells && s.CellsLost {
		rows = true
		if f.plan.sample.Cells.Rows > 0 { // else it was but a try
			f.note("second-pass", "the regressors take too many values, or residuals of too different size, to keep unique rows; a second pass was made")
		}
	}
	if f.plan.needs.Cells && !rows {
		f.byCells = true
		if err := f.sumRows(); err != nil || f.cellsEnough() {
			return err
		}
		if !f.info().Rewindable || f.o.Passes == 1 {
			f.note("digits", "errors by unique rows have about %d digits left: their squares cancel; a second pass would keep them", digits(f.loss))
			return nil
		}
		rows, f.byCells, f.kinds = true, false, nil
		f.note("second-pass", "sums by unique rows lost digits (relative error up to %.1e); a second pass was made", f.loss)
	}
	if !rows {
		return nil
	}
	if !f.info().Rewindable {
		if s.CellsLost {
			return stream.Usef("rows with equal regressors are too many, or differ too much, to sum them together in one pass, and the input can be read once only: give --passes 2 to copy it to --scratch while it is read")
		}
		return stream.Usef("the errors asked for need a second pass, and the input can be read once only: give --passes 2 to copy it to --scratch while it is read")
	}
	f.route = "row pass"
	return f.sumRows()
}

// sumRows sums what depends on single rows, by reading them again or by unique rows.
func (f *fitter) sumRows() error {
	x, s := f.sol, f.state
	var series *accum.SeriesPass
	var lastSeries bool
	if slices.ContainsFunc(f.o.Errors, func(k Kind) bool { return inOrder(k.Name) }) {
		var err error
		if series, lastSeries, err = f.seriesPass(); err != nil {
			return err
		}
	}
	rp, lever := f.passOver(series)
	if s.Swept != nil {
		if err := s.KeepMeans(f.o.Memory / meansShare); err != nil {
			return err
		}
	}
	if !f.plan.needs.Keep && !f.byCells {
		s.Close() // scores come from the second pass
	}
	sums, err := f.rowPass(rp)
	if err != nil {
		return err
	}
	f.sums = sums
	if sp := rp.Series; sp != nil {
		rp.Series = nil
		if err := f.seriesAgain(*sp, sums.Series, lastSeries); err != nil {
			return err
		}
	}
	most := sums.MaxLeverage
	if sums.LoneRows > 0 {
		most = 1
	}
	if i := slices.Index(f.kinds, "hc5"); i >= 0 && 0.7*f.perTerm()*most > 4 {
		again := rp
		again.Weights, again.Scores, again.Over = f.weights([]string{"hc5"}, most), nil, nil
		more, err := f.rowPass(again)
		if err != nil {
			return err
		}
		sums.Meats[i], sums.MeatBlocks[i] = more.Meats[0], more.MeatBlocks[0]
		if f.byCells {
			sums.Gross[i], sums.GrossBlocks[i] = more.Gross[0], more.GrossBlocks[0]
		}
		rp.Weights = f.weights(f.kinds, most)
	}
	if lever && sums.HeavyRows > 0 && sums.HeavyRows <= 1000 && x.kind != stream.Frequency && x.apart == nil && s.Swept == nil {
		return f.heavy(rp, most)
	}
	return nil
}

// passOver says what a pass over the rows sums for the kinds asked for; lever tells
// whether they need leverages. series are sums over rows near each other, or nil.
func (f *fitter) passOver(series *accum.SeriesPass) (rp accum.RowPass, lever bool) {
	x, s := f.sol, f.state
	rp = accum.RowPass{Theta: x.theta, ThetaLow: f.low()}
	if x.apart != nil {
		rp.Eliminated = x.apart.elim
	}
	seen := map[string]bool{}
	for _, k := range f.o.Errors {
		if k.Name == "hc1" {
			k.Name = "hc0"
		}
		switch {
		case rowKind(k.Name) && !seen[k.Name]:
			seen[k.Name] = true
			f.kinds = append(f.kinds, k.Name)
			lever = lever || leverages(k.Name)
		case k.Cluster >= 0 && !f.byCells:
			w, _ := waysOf(f.d, k.Cluster)
			for _, key := range w.keys {
				if !slices.Contains(f.keys, key) && !f.kept(key) {
					f.keys = append(f.keys, key)
				}
			}
		}
	}
	if x.apart == nil && len(s.Columns) <= momentsMost {
		if f.plan.moments {
			rp.Moments = slices.Clone(f.keys)
		}
		if f.plan.deals {
			f.keys = append(f.keys, f.d.Buckets)
			rp.Moments = append(rp.Moments, f.d.Buckets)
		}
	}
	rp.Scores = f.keys
	rp.Weights = f.weights(f.kinds, 0)
	rp.Series = series
	rp.Spread = x.apart == nil && s.Swept == nil && (x.kind == stream.NoWeight || x.kind == stream.Frequency)
	if len(rp.Weights) > 0 || rp.Series != nil {
		// hc0, hc1 and hac want leverages only to find rows that alone decide a coefficient.
		w, m := x.whitener()
		if lever || s.Swept != nil || s.LeverageBound(w) > 0.5 {
			rp.Whitener, rp.K = w, m
		}
		if lever {
			rp.Over = x.leverageLimits()
		}
	}
	return rp, lever
}

// low is what theta leaves off, for a pass over the rows.
func (f *fitter) low() []float64 {
	if !f.state.Extended {
		return nil
	}
	return f.sol.thetaLow
}

// momentsMost is the number of internal columns up to which a cluster's second
// moments are summed in pass two.
const momentsMost = 150

// perTerm is N/k.
func (f *fitter) perTerm() float64 {
	return float64(f.sol.n) / float64(max(1, int64(f.sol.rank())+f.sol.swept()))
}

// weights are the functions g of kinds, of the leverage.
func (f *fitter) weights(kinds []string, most float64) []func(float64) float64 {
	var list []func(float64) float64
	for _, k := range kinds {
		g := hcWeight(k, f.perTerm(), most)
		list = append(list, func(h float64) float64 { return g(1 - h) })
	}
	return list
}

// rowPass is a further pass.
func (f *fitter) rowPass(rp accum.RowPass) (*accum.RowSums, error) {
	if f.byCells {
		return accum.SecondByCells(f.state, rp, f.scan)
	}
	sums, err := accum.Second(f.ctx, f.src, f.state, rp, f.scan)
	if err == nil {
		f.passes += sums.Passes
		f.bytes += sums.Bytes
	}
	return sums, err
}

// heavy repeats pass two for rows of leverage near 1.
func (f *fitter) heavy(rp accum.RowPass, most float64) error {
	rp.Heavy = true
	rp.Scores, rp.Over = nil, nil
	sums, err := f.rowPass(rp)
	if err != nil {
		return err
	}
	for i, k := range f.kinds {
		if !f.sol.heavyMeat(sums, hcWeight(k, f.perTerm(), most), sums.Meats[i]) {
			return nil // keep the plain sums
		}
	}
	f.sums.Meats = sums.Meats
	f.heavyOK = true
	f.note("high-leverage", "%d rows have leverage above %.2f; they were summed once more, one by one, to keep digits", sums.HeavyRows, accum.HeavyAt)
	return nil
}

func (f *fitter) note(code, format string, args ...any) {
	f.warn = append(f.warn, Warning{Code: code, Text: fmt.Sprintf(format, args...)})
}

func digits(loss float64) int {
	if !(loss > 0) {
		return 15
	}
	return max(0, int(-math.Log10(loss)))
}

// errorsFor computes one kind.
func (f *fitter) errorsFor(k Kind) Errors {
	x := f.sol
	e := Errors{Kind: k.Name, Clusters: []string{}, Groups: []int64{}}
	for _, l := range []*[]Number{&e.SE, &e.DF, &e.T, &e.P, &e.Log10P, &e.Low, &e.High} {
		*l = []Number{}
	}
	isCluster := k.Cluster >= 0
	if isCluster {
		w, _ := waysOf(f.d, k.Cluster)
		for _, key := range w.dims {
			e.Clusters = append(e.Clusters, f.d.Keys[key].Text)
		}
	}
	if x.df() <= 0 {
		x.unavailable(&e, "%d rows for %d terms leave no degrees of freedom", x.n, int64(x.rank())+x.swept())
		return e
	}
	switch {
	case k.Name == "classical":
		if x.kind == stream.Sampling {
			x.unavailable(&e, "classical errors have no meaning under sampling weights")
			return e
		}
		if f.rssLoss > lossRefuse {
			x.unavailable(&e, "the residual sum of squares cancels (relative error up to %.1e); use --passes 2", f.rssLoss)
			return e
		}
		x.infer(&e, x.classical(), f.o.Level, f.o.Covariance)
	case isCluster:
		f.cluster(&e, k)
	case inOrder(k.Name):
		f.hac(&e)
	default:
		f.heteroskedastic(&e, k)
	}
	if x.perfect && e.Status == "ok" {
		e.Overall = nil
	}
	return e
}

func (f *fitter) heteroskedastic(e *Errors, k Kind) {
	x := f.sol
	if x.perfect {
		x.infer(e, x.nothing(float64(x.df())), f.o.Level, f.o.Covariance)
		return
	}
	var meat []float64
	var blocks accum.Blocks
	if f.sums != nil {
		for i, name := range f.kinds {
			if name == k.Name || (name == "hc0" && k.Name == "hc1") {
				meat, blocks = f.sums.Meats[i], f.sums.MeatBlocks[i]
			}
		}
		most := f.sums.MaxLeverage
		if f.sums.LoneRows > 0 {
			most = 1
		}
		if k.Name == "hc5" && f.src == nil && 0.7*f.perTerm()*most > 4 {
			x.unavailable(e, "its weights depend on the largest leverage of all rows, which is known only after the second round; fit the data")
			return
		}
	}
	fourth := meat == nil
	if fourth {
		meat = f.fourth
		if f.loss > lossRefuse {
			x.unavailable(e, "fourth moments cancel (relative error up to %.1e); use --passes 2", f.loss)
			return
		}
	}
	r := x.hc(k.Name, meat, blocks)
	if f.byCells {
		var loss float64
		if r, loss = x.cellsLoss(k.Name, f.sums, f.kindAt(k.Name)); loss > lossRefuse {
			x.unavailable(e, "the squares of residuals of unique rows cancel (relative error up to %.1e); use --passes 2", loss)
			return
		}
	}
	if fourth {
		r.noise, r.gross = f.noise, x.projectAbs(f.gross)
	}
	lone := f.loneTerms()
	r.noP = lone
	if leverages(k.Name) {
		r.noSE = lone
		if loss := 0x1p-50 / (1 - f.sums.MaxLeverage); loss > lossLimit && !f.heavyOK {
			f.note("digits", "%s has about %d digits left: %d rows have leverage above %.2f, the largest %.12f", k.Name, digits(loss), f.sums.HeavyRows, accum.HeavyAt, f.sums.MaxLeverage)
		}
	}
	x.infer(e, r, f.o.Level, f.o.Covariance)
	f.tellLost(e, r)
}

// tellLost says which errors are left out because they cancelled.
func (f *fitter) tellLost(e *Errors, r *estimate) {
	if r.loss > blurLimit {
		f.note("digits", "some errors of %s may have only about %d digits: parts of them cancel", e.Name(), digits(r.loss))
	}
	for j, lost := range r.lost {
		if lost && !math.IsNaN(f.sol.est[j]) {
			term := f.sol.coefficient(j).label
			f.told[e.Name()+"\x00"+term] = true
			f.warn = append(f.warn, Warning{Code: "digits", Term: ptr(term), Kind: ptr(e.Name()),
				Text: fmt.Sprintf("what forms %s of %s cancels to less than rounding; it is left out", e.Name(), term)})
		}
	}
}

// nothing is the estimate of a perfect fit.
func (x *solution) nothing(df float64) *estimate {
	r := &estimate{v: make([]float64, x.k()*x.k()), factor: 1, df: df, joint: plainJoint(0)}
	if x.apart != nil {
		r.apart = &apartMeat{rest: r.v, own: make([]float64, len(x.state.Apart.D)), scale: 1}
	}
	return r
}

// loneTerms marks coefficients that a single row decides.
func (f *fitter) loneTerms() []bool {
	x, s := f.sol, f.state
	out := make([]bool, x.count())
	if f.sums != nil {
		if f.sums.LoneGram == nil {
			return nil
		}
		for j, q := range x.share(f.sums.LoneGram, f.sums.LoneBlocks) {
			out[j] = q > loneShare
		}
		return out
	}
	any := false
	// One pass has no categories: every column but the constant is a numeric term.
	for j, u := range x.cols {
		if u.term < 0 {
			continue
		}
		dense := s.Columns[u.column].Dense - 1
		switch n := s.NonZero[dense]; {
		case n == 1:
			out[j] = true
		case n == x.n-1 && !s.Varied[dense] && s.Shifted():
			out[j] = true
			for i, c := range x.cols { // the constant is the fit of that row
				out[i] = out[i] || c.term < 0
			}
		}
		any = any || out[j]
	}
	if !any {
		return nil
	}
	return out
}

// close gives back memory and scratch files.
func (f *fitter) close() {
	if f.state != nil {
		f.state.Close()
	}
	if f.sums != nil {
		f.sums.Close()
	}
}
