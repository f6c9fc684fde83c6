package vcov

import (
	"fmt"
	"math"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Errors when rows near each other in order, or in time, move together (hac):
//
//	V = N/(N-k) (X'WX)^-1 [ G_0 + sum_j k_j (G_j + G_j') ] (X'WX)^-1,  G_j = sum_t s_t s_{t-j}'
//
// with s_t = w_t e_t x_t and the kernels and the choice of L of driscoll-kraay
// (Newey & West 1987, 1994; Gallant 1987; Andrews 1991); t on N - k. Lags count used
// rows in the order of the input, or periods if there is one: a period without a row is
// a score of zero. With units no lag leaves a unit. L is chosen with T the rows of the
// unit with most of them.
//
// The weights of the quadratic spectral kernel never end: lags are summed up to 20 S,
// and further as long as reach times rows (periods, if more) is below 2^29, which takes
// in all of them up to 23,170 rows. What is left out changes an error by about 1e-4 of it.
//
// A second pass sums scores with L given; where L is chosen, or may lie beyond the
// data, another one before it sums autocovariances. Cost O(k (L + k)) a row, of bartlett
// O(k^2); memory O(k L) for each worker, see accum.SeriesPass.

// RowOrder says how rows follow each other in time, for hac.
type RowOrder struct {
	// Period and Unit are indexes into Design.Keys, -1 for none. A unit has one row in
	// a period; rows of a unit stand together in rising order of period.
	Period, Unit int
}

// quadraticWork is reach times rows up to which the quadratic spectral kernel is
// summed beyond 20 bandwidths.
const quadraticWork = 1 << 29

func (o *Options) order() RowOrder {
	if o.Order == nil {
		return RowOrder{-1, -1}
	}
	return *o.Order
}

// inOrder reports whether a kind is of rows in order.
func inOrder(kind string) bool { return kind == "hac" }

// checkOrder refuses what gives rows no order.
func (o *Options) checkOrder(d *stream.Design) error {
	r := o.order()
	for _, k := range []int{r.Period, r.Unit} {
		if k < -1 || k >= len(d.Keys) || k >= 0 && d.Parts[k] != nil {
			return stream.Usef("errors: hac finds no key %d", k)
		}
	}
	if d.Spec.WeightKind == stream.Frequency {
		return stream.Usef("errors: hac has no meaning under frequency weights: a row that stands for many has no order among them")
	}
	if r.Period >= 0 {
		return checkPeriod("hac", d.Keys[r.Period])
	}
	return nil
}

// series is the state of hac in a fit.
type series struct {
	sums *accum.SeriesSums
	lags Lags
	why  string // why there are no errors
}

// seriesPass is the first pass that hac takes over the rows, nil if none would help.
// last reports that none follows.
func (f *fitter) seriesPass() (sp *accum.SeriesPass, last bool, err error) {
	x, s, o := f.sol, f.state, &f.o
	f.series = &series{lags: o.givenLags()}
	order := o.order()
	switch {
	case x.apart != nil:
		f.series.why = "a category with too many levels stands apart, and the scores of rows are kept over all columns"
		return nil, true, nil
	case len(s.Columns) > momentsMost:
		f.series.why = fmt.Sprintf("hac keeps the scores of rows over all columns, up to %d; the model has %d", momentsMost, len(s.Columns))
		return nil, true, nil
	}
	sp = &accum.SeriesPass{Period: order.Period, Unit: order.Unit}
	if order.Period >= 0 {
		col := f.d.Keys[order.Period]
		sp.Time = func(v stream.KeyValue) (int64, bool) { return timeOf(col, accum.Key{Kind: col.Kind, KeyValue: v}) }
	}
	keyed := order.Period >= 0 || order.Unit >= 0
	switch {
	case o.AutoLags:
		sp.Reach = int(seenLags(o.kernel(), float64(s.Rows)))
		sp.Direction = f.sol.expand(f.sol.standardised())
	case keyed && (o.Lags >= s.Rows || o.kernel() == "quadratic"):
		sp.Direction = f.sol.expand(f.sol.standardised()) // to learn the span
	case o.Lags >= s.Rows:
		f.beyond(s.Rows)
		return nil, true, nil
	default:
		return sp, true, f.weigh(sp, s.Rows)
	}
	return sp, false, nil
}

// weigh sets reach and weights; span is of periods.
func (f *fitter) weigh(sp *accum.SeriesPass, span int64) error {
	l := &f.series.lags
	reach := l.Lags
	if l.Kernel == "quadratic" {
		reach = max(int64(math.Ceil(20*float64(l.Bandwidth))), quadraticWork/max(span, f.state.Rows))
		if reach < span-1 {
			l.Reach = &reach
		}
	}
	sp.Direction = nil
	sp.Reach = int(min(reach, span-1))
	if err := accum.SeriesFits(len(f.state.Columns), sp.Reach, &f.scan); err != nil {
		return err
	}
	sp.Linear = l.Kernel == "bartlett" && reach < span
	sp.Weights = make([]float64, sp.Reach)
	for j := range sp.Weights {
		sp.Weights[j] = kernelWeight(l.Kernel, float64(j+1), float64(l.Bandwidth))
	}
	return nil
}

// beyond says that lags reach beyond the data.
func (f *fitter) beyond(span int64) {
	// Scores add up to zero over all rows: such a reach would leave almost nothing.
	what := "rows"
	if f.o.order().Period >= 0 {
		what = "periods"
	}
	of := "the data have"
	if f.o.order().Unit >= 0 {
		of = "the longest unit has"
	}
	f.series.why = fmt.Sprintf("%d lags reach beyond the data: %s %d %s, so that at most %d are possible", f.o.Lags, of, span, what, span-1)
}

// seriesAgain takes the sums of a pass and makes the next one, if there is one.
func (f *fitter) seriesAgain(sp accum.SeriesPass, sums *accum.SeriesSums, last bool) error {
	h := f.series
	h.sums = sums
	if !last {
		if f.o.AutoLags {
			n := seenLags(f.o.kernel(), float64(sums.Rows))
			h.lags = chosenLags(f.o.kernel(), sums.Auto[:n+1], float64(sums.Rows))
		} else if f.o.Lags >= sums.Span {
			f.beyond(sums.Span)
			return nil
		}
		if err := f.weigh(&sp, sums.Span); err != nil {
			return err
		}
		more, err := f.rowPass(accum.RowPass{Theta: f.sol.theta, ThetaLow: f.low(), Series: &sp})
		if err != nil {
			return err
		}
		more.Close()
		h.sums = more.Series
	}
	if !f.o.AutoLags && f.o.Lags >= h.sums.Span {
		f.beyond(h.sums.Span)
	}
	return nil
}

// hac fills the entry of errors for rows in order.
func (f *fitter) hac(e *Errors) {
	x := f.sol
	h := f.series
	if x.perfect {
		x.infer(e, x.nothing(float64(x.df())), f.o.Level, f.o.Covariance)
		return
	}
	if h.why != "" {
		x.unavailable(e, "%s", h.why)
		return
	}
	order := f.o.order()
	h.lags.Periods = h.sums.Rows
	if order.Period >= 0 {
		h.lags.Period = ptr(f.d.Keys[order.Period].Text)
	}
	if order.Unit >= 0 {
		h.lags.Unit, h.lags.Units = ptr(f.d.Keys[order.Unit].Text), h.sums.Units
	}
	e.Lags = &h.lags
	r := x.hc("hc1", h.sums.Meat, accum.Blocks{}) // the same factor and df
	r.noP = f.loneTerms()
	x.infer(e, r, f.o.Level, f.o.Covariance)
	f.tellLost(e, r)
}
