package vcov

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// extremesLimit is the rank up to which extremes are looked for: time is O(rank^3)
// for each kind.
const extremesLimit = 200

// extremes finds, among all linear combinations c'b of the terms but the constant,
// those whose error by r is the largest and the smallest multiple of the classical
// one: the eigenvectors of
//
//	V c = ratio^2 V_classical c
//
// for the largest and the smallest eigenvalue, found in the solved coordinates, where
// V_classical is s^2 G^-1 and, with G^-1 = H H', the problem is that of
// H^-1 V H^-T / s^2. The coefficients c are scaled so that the one which carries most
// of the combination, by its classical error, is 1.
//
// It returns nil where a coefficient has no error, there are fewer than two terms, or
// too many.
func (x *solution) extremes(r *estimate) *Extremes {
	k := x.k()
	var idx []int
	for _, p := range x.e.kept {
		if x.cols[p].term >= 0 {
			idx = append(idx, p)
		}
	}
	m := len(idx)
	if x.perfect || x.apart != nil || m < 2 || m > extremesLimit {
		return nil
	}
	for j := range k {
		if (r.noP != nil && r.noP[j] || r.noSE != nil && r.noSE[j]) && !math.IsNaN(x.est[j]) {
			return nil
		}
	}
	// V_classical / s^2 = H H' over the terms.
	base, v := mat.NewSymDense(m, nil), mat.NewDense(m, m, nil)
	for i, p := range idx {
		for j, q := range idx {
			if j <= i {
				base.SetSym(i, j, x.inverse[p*k+q])
			}
			v.Set(i, j, r.v[p*k+q])
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(base) {
		return nil
	}
	var low mat.TriDense
	chol.LTo(&low)
	var half, whole mat.Dense
	if half.Solve(&low, v) != nil || whole.Solve(&low, half.T()) != nil {
		return nil
	}
	sym := mat.NewSymDense(m, nil)
	s2 := x.rss / float64(x.df())
	for i := range m {
		for j := range i + 1 {
			sym.SetSym(i, j, (whole.At(i, j)+whole.At(j, i))/2/s2)
		}
	}
	var eig mat.EigenSym
	if !eig.Factorize(sym, true) {
		return nil
	}
	val := eig.Values(nil)
	var vec mat.Dense
	eig.VectorsTo(&vec)
	ratio := func(l float64) Number {
		if l <= float64(m)*0x1p-50*val[m-1] {
			return 0 // rounding: clusters fewer than terms
		}
		return Number(math.Sqrt(l))
	}
	out := &Extremes{WorstRatio: ratio(val[m-1]), BestRatio: ratio(val[0])}
	out.Worst = x.combinationOf(idx, &low, vec.ColView(m-1))
	out.Best = x.combinationOf(idx, &low, vec.ColView(0))
	if out.Worst == nil || out.Best == nil {
		return nil
	}
	return out
}

// combinationOf turns an eigenvector into weights of the coefficients: weights l of
// the coordinates are H^-T v, and l = W'c.
func (x *solution) combinationOf(idx []int, low *mat.TriDense, v mat.Vector) []Number {
	k, m := x.k(), len(idx)
	var l, c mat.VecDense
	if l.SolveVec(low.T(), v) != nil {
		return nil
	}
	w := mat.NewDense(m, m, nil)
	for i, p := range idx {
		for j, q := range idx {
			w.Set(i, j, x.wAlias[p*k+q])
		}
	}
	if err := c.SolveVec(w.T(), &l); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			return nil
		}
	}
	bread := sandwichDiagonal(x.wAlias, x.inverse, k)
	by, most := 1.0, 0.0
	for i, p := range idx {
		// The first of those that carry the same: rounding must not choose.
		if size := math.Abs(c.AtVec(i)) * math.Sqrt(bread[p]); size > most*(1+1e-9) {
			by, most = c.AtVec(i), size
		}
	}
	out := make([]Number, k)
	for i, p := range idx {
		out[p] = Number(c.AtVec(i) / by)
	}
	return out
}
