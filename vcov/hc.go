package vcov

import (
	"math"

	"github.com/tallrow/tallrow/accum"
)

// The heteroskedasticity-consistent family: errors of unequal spread that do not
// move together,
//
//	V = c (X'WX)^-1 [ sum_i m_i e_i^2 g(h_i) x_i x_i' ] (X'WX)^-1,  t on N - k
//
//	kind  c        g(h)                                  source
//	hc0   1        1                                     White 1980; Eicker 1967
//	hc1   N/(N-k)  1                                     Hinkley 1977
//	hc2   1        1/(1-h)                               Horn, Horn, Duncan 1975
//	hc3   1        1/(1-h)^2                             MacKinnon & White 1985
//	hc4   1        (1-h)^-min(4, r)                      Cribari-Neto 2004
//	hc4m  1        (1-h)^-(min(1, r) + min(1.5, r))      Cribari-Neto & da Silva 2011
//	hc5   1        (1-h)^-(min(r, max(4, 0.7 R)) / 2)    Cribari-Neto, Souza, Vasconcellos 2007
//
// where r = N h/k, R = N h_max/k, m_i is 1 without weights, f_i for frequencies,
// w_i^2 for precision and sampling weights, and h_i the leverage, x'(X'WX)^-1 x,
// times w_i for precision and sampling weights. hc0 and hc1 come from fourth moments
// in one pass, or from rows in a second; the others need the second pass, and hc5 a
// third where 0.7 R is above 4: the largest leverage is known only after the second.
// Where regressors take few values, unique rows give all of them in one (cells.go).
// Cost O(k^2) a row.
//
// A row of leverage 1 has residual 0 and adds nothing; a coefficient that it
// decides has no p, no interval, and no error of hc2 or higher.

// leverages reports whether a kind depends on the leverage of every row.
func leverages(kind string) bool {
	switch kind {
	case "hc2", "hc3", "hc4", "hc4m", "hc5":
		return true
	}
	return false
}

// NeedsRows reports whether errors of a kind take a pass over the rows after the
// estimates are known, unless there are few unique rows.
func NeedsRows(kind string) bool { return leverages(kind) || inOrder(kind) }

// rowKind reports whether a kind is of this family.
func rowKind(kind string) bool { return kind == "hc0" || kind == "hc1" || leverages(kind) }

// hcWeight is g as a function of 1-h. perTerm is N/k, most the largest leverage;
// only hc5 looks at it.
func hcWeight(kind string, perTerm, most float64) func(gap float64) float64 {
	switch kind {
	case "hc2":
		return func(gap float64) float64 { return 1 / gap }
	case "hc3":
		return func(gap float64) float64 { return 1 / (gap * gap) }
	case "hc4":
		return func(gap float64) float64 { return math.Pow(gap, -min(4, perTerm*(1-gap))) }
	case "hc4m":
		return func(gap float64) float64 {
			r := perTerm * (1 - gap)
			return math.Pow(gap, -(min(1, r) + min(1.5, r)))
		}
	case "hc5":
		limit := max(4, 0.7*perTerm*most)
		return func(gap float64) float64 { return math.Pow(gap, -min(perTerm*(1-gap), limit)/2) }
	}
	return func(float64) float64 { return 1 }
}

// hc returns the estimate from a meat over internal columns and, if a group is
// apart, its blocks.
func (x *solution) hc(kind string, meat []float64, b accum.Blocks) *estimate {
	df := float64(x.df())
	r := &estimate{factor: 1, df: df, joint: plainJoint(df)}
	if x.apart != nil {
		r.apart = x.rowMeat(meat, b)
		r.meat = r.apart.rest
	} else {
		r.meat = x.project(meat)
	}
	v := sandwich(x.inverse, r.meat, x.k())
	r.v = v
	if kind == "hc1" {
		r.factor = float64(x.n) / df
		for i := range v {
			v[i] *= r.factor
		}
		if r.apart != nil {
			r.apart.scale = r.factor
		}
	}
	return r
}

// cancellation bounds the relative error of each standard error that was
// contracted from fourth moments: eps times the ratio of what was added to what
// is left, for each coefficient.
// Errors that are zero but for harmless noise do not count. noise bounds what
// rounding leaves of each variance.
func (x *solution) cancellation(meat, gross []float64) (loss float64, noise []float64) {
	k := x.k()
	l := x.bread()
	net := sandwichDiagonal(l, x.project(meat), k)
	all := sandwichDiagonal(absolute(l), x.projectAbs(gross), k)
	floor := x.zeroVariance()
	noise = make([]float64, k)
	worst := 0.0
	for j := range k {
		if math.IsNaN(x.est[j]) {
			continue
		}
		noise[j] = 64 * 0x1p-53 * all[j]
		if net[j] <= noise[j] && noise[j] <= harmless(floor[j]) {
			continue // zero
		}
		r := all[j] / max(net[j], floor[j])
		if !(r >= 0) {
			r = math.Inf(1)
		}
		worst = max(worst, r)
	}
	return 0x1p-53 * worst, noise
}

// bread is W G^-1: its rows map scores to coefficients, in units of v.
func (x *solution) bread() []float64 {
	k := x.k()
	l := make([]float64, k*k)
	for i := range k {
		for j, w := range x.wAlias[i*k : (i+1)*k] {
			axpy(w, x.inverse[j*k:(j+1)*k], l[i*k:(i+1)*k])
		}
	}
	return l
}

// zeroVariance is, for each coefficient in units of v, the variance below which
// an error counts as zero.
func (x *solution) zeroVariance() []float64 {
	k := x.k()
	m := sandwichDiagonal(x.wAlias, x.inverse, k)
	out := make([]float64, k)
	share := max(zeroShare, 100*x.blur*x.blur)
	for j := range k {
		out[j] = share * x.rss / float64(max(1, x.df())) * m[j]
	}
	if x.apart != nil {
		for _, u := range x.apartUnit() {
			out = append(out, share*x.rss/float64(max(1, x.df()))*u)
		}
	}
	return out
}

// harmless is the noise in a variance, 1e-8 of what residuals of equal spread would
// give, that is not worth telling from zero; floor is from zeroVariance.
func harmless(floor float64) float64 { return 1e-8 / zeroShare * floor }

func absolute(a []float64) []float64 {
	out := make([]float64, len(a))
	for i, v := range a {
		out[i] = math.Abs(v)
	}
	return out
}

// projectAbs is project with the absolute values of Q.
func (b *basis) projectAbs(m []float64) []float64 {
	if b.sel != nil {
		return b.project(m)
	}
	c := *b
	c.q = make([]float64, len(b.q))
	for i, x := range b.q {
		c.q[i] = math.Abs(x)
	}
	return c.project(m)
}

// heavyMeat adds the rows of high leverage to a meat, with 1-h and the residual
// formed without cancellation: with A_-i, b_-i the sums and the fit without row i,
//
//	1 - h_i = 1 / (1 + x_i'A_-i^-1 x_i),  e_i = (1 - h_i)(y_i - x_i'b_-i).
//
// Light holds the second moments of all other rows. It returns false if leaving
// out a row makes the terms dependent. Rows carry the root of a precision weight;
// frequencies are not for this.
func (x *solution) heavyMeat(sums *accum.RowSums, g func(gap float64) float64, meat []float64) bool {
	s := x.state
	p := len(s.Columns)
	n := p + 1
	for i := range sums.Heavy {
		a := append([]float64(nil), sums.Light...)
		for j := range sums.Heavy {
			if j != i {
				z := sums.Heavy[j].Z
				for r := range n {
					axpy(z[r], z, a[r*n:(r+1)*n])
				}
			}
		}
		z := sums.Heavy[i].Z
		k := x.k()
		ga := x.project(a)
		c := make([]float64, k)
		x.projectVec(a[p*n:p*n+p], c)
		e := eliminate(ga, k, aliasPivot)
		if len(e.kept) < x.rank() {
			return false
		}
		xi := make([]float64, k)
		x.projectVec(z, xi)
		loo := dot(xi, e.solve(xi))
		gap := 1 / (1 + loo)
		res := gap * (z[p] - dot(xi, e.solve(c)))
		m := res * res * g(gap)
		for r := range p {
			axpy(m*z[r], z[:p], meat[r*n:r*n+p])
		}
	}
	return true
}
