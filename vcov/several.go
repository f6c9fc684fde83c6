package vcov

import (
	"cmp"
	"math"
	"slices"
)

// adjustments are the ways in which the p of several tests are adjusted.
var adjustments = []string{"none", "holm", "bh"}

// adjustP gives the p that a whole family of m tests leaves each of them: the
// smallest share of wrongly rejected hypotheses at which the procedure rejects it.
// With p_(1) <= ... <= p_(m),
//
//	holm  max_{j <= i} min(1, (m - j + 1) p_(j))   any wrong rejection (Holm 1979)
//	bh    min_{j >= i} min(1, m/j p_(j))           expected share of wrong ones among
//	                                               the rejected (Benjamini & Hochberg
//	                                               1995), for independent tests or
//	                                               positive dependence
//
// Entries that do not exist are no tests.
func adjustP(method string, p []Number) []Number {
	out := make([]Number, len(p))
	var order []int
	for i, x := range p {
		out[i] = Number(nan)
		if x.Exists() {
			order = append(order, i)
		}
	}
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(p[a], p[b]) })
	m := float64(len(order))
	switch method {
	case "holm":
		most := 0.0
		for j, i := range order {
			most = max(most, math.Min(1, (m-float64(j))*float64(p[i])))
			out[i] = Number(most)
		}
	case "bh":
		least := 1.0
		for j, i := range slices.Backward(order) {
			least = min(least, m/float64(j+1)*float64(p[i]))
			out[i] = Number(least)
		}
	}
	return out
}

// several fills PAdjusted of every kind, over the terms but the constant.
func (f *fitter) several(r *Result) {
	if f.o.Adjust == "none" {
		return
	}
	for i := range r.Errors {
		e := &r.Errors[i]
		p := slices.Clone(e.P)
		if len(p) > 0 && !f.d.Spec.NoConstant {
			p[0] = Number(nan)
		}
		e.PAdjusted = adjustP(f.o.Adjust, p)
	}
}
