package vcov

import (
	"fmt"
	"math"

	"github.com/tallrow/tallrow/vcov/internal/tail"
)

// estimate is what an estimator hands over: a covariance of the solved
// coordinates g and how to read it.
type estimate struct {
	v      []float64 // K x K, covariance of g, units of v
	meat   []float64 // K x K, v = factor G^-1 meat G^-1; nil if v is not made so
	factor float64
	df     float64   // of t
	dfs    []float64 // of t for each coefficient, where they differ; NaN for none
	// comboDFs are the same for solution.combos.
	comboDFs []float64
	// joint gives F and its second df from the Wald statistic of q restrictions;
	// ok is false with a reason where no test exists.
	joint func(w float64, q int) (f, df2 float64, ok bool, reason string)
	noP   []bool     // coefficients without t, p and interval
	noSE  []bool     // coefficients without an error at all
	gross []float64  // size of what was added up for meat, K x K; nil if no more than meat itself
	noise []float64  // bound of rounding in each variance of a coefficient, without factor, units of v
	zero  []bool     // coefficients whose error is zero but for rounding
	lost  []bool     // those of noSE that have no digits left
	apart *apartMeat // if a group is apart; its coefficients follow in the lists above
	loss  float64    // relative error of the variances that cancelling may have cost
}

// plainJoint is W/q on F(q, df).
func plainJoint(df float64) func(float64, int) (float64, float64, bool, string) {
	return func(w float64, q int) (float64, float64, bool, string) {
		return w / float64(q), df, df > 0, "no degrees of freedom"
	}
}

// infer fills an Errors entry: se = sqrt(V_jj), t = b/se, p = P(|T_df| >= |t|),
// interval b -+ t_{df,level} se.
func (x *solution) infer(e *Errors, r *estimate, level float64, full bool) {
	k, total := x.k(), x.count()
	x.judged = r
	full = full || total <= 200
	var v, spread []float64
	if full && x.apart == nil {
		v = x.covariance(r.v)
		for j := range k {
			spread = append(spread, v[j*k+j])
		}
	} else {
		spread = x.variances(r)
	}
	x.zeroErrors(r, spread)
	e.Status = "ok"
	e.Factor = Number(r.factor)
	crit := tail.TQuantileTail(1-level, r.df)
	for j := range total {
		se, df, t, p, lp, lo, hi := nan, nan, nan, nan, nan, nan, nan
		if !math.IsNaN(x.est[j]) && !(r.noSE != nil && r.noSE[j]) {
			if !r.zero[j] {
				se = math.Sqrt(max(0, spread[j]))
			} else {
				se = 0
			}
			df = r.df
			crit := crit
			if r.dfs != nil {
				df = r.dfs[j]
				crit = nan
				if df > 0 {
					crit = tail.TQuantileTail(1-level, df)
				}
			}
			if x.perfect {
				se, lo, hi = 0, x.est[j], x.est[j]
			} else if !(r.noP != nil && r.noP[j]) && se > 0 && df > 0 {
				t = x.est[j] / se
				p, lp = tail.T(t, df)
				lo, hi = x.est[j]-crit*se, x.est[j]+crit*se
			}
		}
		e.SE = append(e.SE, Number(se))
		e.DF = append(e.DF, Number(df))
		e.T = append(e.T, Number(t))
		e.P = append(e.P, Number(p))
		e.Log10P = append(e.Log10P, Number(lp))
		e.Low = append(e.Low, Number(lo))
		e.High = append(e.High, Number(hi))
	}
	e.Overall = x.overall(r)
	x.arrange(e)
	if v != nil {
		for i := range k {
			row := make([]Number, k)
			for j := range k {
				row[j] = Number(v[i*k+j])
				switch {
				case math.IsNaN(x.est[i]) || math.IsNaN(x.est[j]), r.noSE != nil && (r.noSE[i] || r.noSE[j]):
					row[j] = Number(nan)
				case x.perfect:
					row[j] = 0
				}
			}
			e.Covariance = append(e.Covariance, row)
		}
	}
}

// zeroShare is the square of 1e-10, about what rounding leaves of nothing.
const zeroShare = 1e-20

// zeroErrors marks coefficients whose variance in v is rounding: of what was added
// up to form it, or below zeroShare of what residuals of equal spread would give.
// All rows (clusters) that bear on
// such a coefficient have residual (score) zero.
func (x *solution) zeroErrors(r *estimate, v []float64) {
	k := x.count()
	r.zero = make([]bool, k)
	s2 := x.state.Frame.YInv * x.state.Frame.YInv
	floor := x.zeroVariance()
	var gross []float64
	if r.meat != nil {
		gross = sandwichDiagonal(absolute(x.bread()), absolute(r.meat), x.k())
		if r.apart != nil {
			gross = append(gross, r.apart.gross...)
		}
		for j := range k {
			noise := 64 * 0x1p-52 * r.factor * gross[j]
			if noise > harmless(floor[j]) && v[j]*s2 <= noise {
				// Rounding could hide an error of a size that matters.
				if r.noSE == nil {
					r.noSE = make([]bool, k)
				}
				if r.lost == nil {
					r.lost = make([]bool, k)
				}
				r.lost[j] = !r.noSE[j]
				r.noSE[j] = true
			}
			floor[j] = max(floor[j], noise)
		}
	}
	for j, n := range r.noise {
		floor[j] = max(floor[j], r.factor*n)
	}
	for j, z := range floor {
		r.zero[j] = v[j]*s2 <= z
		if gross != nil && !r.zero[j] && !math.IsNaN(x.est[j]) && !(r.noSE != nil && r.noSE[j]) {
			r.loss = max(r.loss, 0x1p-53*r.factor*gross[j]/(v[j]*s2))
		}
	}
}

var nan = math.NaN()

// overall tests that all kept terms but the constant are zero:
// W = g'V^-1 g over their coordinates, which is invariant to the basis.
func (x *solution) overall(r *estimate) *Overall {
	out := &Overall{Number(nan), Number(nan), Number(nan), Number(nan)}
	if x.perfect {
		return out
	}
	for j := range x.count() {
		lone := (r.noP != nil && r.noP[j]) || (r.noSE != nil && r.noSE[j])
		if lone || (r.zero[j] && !math.IsNaN(x.est[j]) && x.coefficient(j).term >= 0) {
			return out
		}
	}
	if x.apart != nil {
		return x.overallApart(r, out)
	}
	var idx []int
	for _, p := range x.e.kept {
		if x.cols[p].term >= 0 {
			idx = append(idx, p)
		}
	}
	q := len(idx)
	if q == 0 {
		return nil
	}
	fit := x.onKept(x.full)
	v := make([]float64, q*q)
	g := make([]float64, q)
	for i, p := range idx {
		g[i] = fit[p]
		for j, o := range idx {
			v[i*q+j] = r.v[p*x.k()+o]
		}
	}
	e := eliminate(v, q, 1e-12)
	if len(e.kept) < q {
		return out
	}
	f, df2, ok, _ := r.joint(dot(g, e.solve(g)), q)
	if !ok {
		return out
	}
	p, _ := tail.F(f, float64(q), df2)
	return &Overall{Number(q), Number(df2), Number(f), Number(p)}
}

// overallApart is overall where a group is apart. The classical test is that of the
// sums of squares; clusters would need all products between levels.
func (x *solution) overallApart(r *estimate, out *Overall) *Overall {
	var w float64
	var q int
	ok := true
	switch {
	case r.apart.base != nil:
		return out
	case r.apart.within == nil:
		constant := !x.state.Design.Spec.NoConstant
		if q = x.rank(); constant {
			q--
		}
		w = (x.outcomeSquares(constant) - x.rss) / r.apart.scale
	default:
		w, q, ok = x.apartOverall(r.apart)
		w /= r.apart.scale
	}
	if q == 0 {
		return nil
	}
	if !ok {
		return out
	}
	f, df2, ok, _ := r.joint(w, q)
	if !ok {
		return out
	}
	p, _ := tail.F(f, float64(q), df2)
	return &Overall{Number(q), Number(df2), Number(f), Number(p)}
}

// variances is the diagonal of covariance, with the coefficients of the group apart
// behind.
func (x *solution) variances(r *estimate) []float64 {
	s := 1 / x.state.Frame.YInv
	out := sandwichDiagonal(x.wAlias, r.v, x.k())
	for i := range out {
		out[i] = out[i] * s * s
	}
	if x.apart != nil && r.apart != nil {
		var v []float64
		v, r.apart.gross = x.apartVariances(r.apart)
		for _, y := range v {
			out = append(out, r.apart.scale*y*s*s)
		}
	}
	return out
}

// arrange puts the lists of e into the order of the model.
func (x *solution) arrange(e *Errors) {
	order := x.order()
	if order == nil {
		return
	}
	for _, l := range []*[]Number{&e.SE, &e.DF, &e.T, &e.P, &e.Log10P, &e.Low, &e.High} {
		sorted := make([]Number, len(order))
		for i, j := range order {
			sorted[i] = (*l)[j]
		}
		*l = sorted
	}
}

// unavailable marks a kind that cannot be given.
func (x *solution) unavailable(e *Errors, format string, args ...any) {
	e.Status = "unavailable"
	e.Reason = ptr(fmt.Sprintf(format, args...))
	e.Factor = Number(nan)
	for range x.count() {
		for _, s := range []*[]Number{&e.SE, &e.DF, &e.T, &e.P, &e.Log10P, &e.Low, &e.High} {
			*s = append(*s, Number(nan))
		}
	}
}
