package vcov

import (
	"context"
	"fmt"
	"math"
	"sync/atomic"
)

// joint tests q equations R b = r at once by the draws of the wild cluster bootstrap,
// for which the estimates under the hypothesis are
//
//	b_r = b - M R'(R M R')^-1 (R b - r),  M = (X'WX)^-1 = L L'
//
// With Q an orthonormal basis (m x q) of the span of L'R', L'R' = Q T, and delta =
// T'^-1 (R b - r), the scores of a cluster are t_g + H_g Q delta (wcr) or t_g (wcu),
// called t_g below. Of a draw with weights v_g and w = sum v_g t_g,
//
//	W* = (Q'w)' [c sum_g a_g a_g']^-1 (Q'w),  a_g = v_g Q't_g - Q'H_g w
//
// is the Wald statistic with the covariance by cr1 of the model solved anew, of the
// hypothesis (wcr) or of R b* = R b (wcu); p is the share of W* >= W as for t (Cameron,
// Gelbach & Miller 2008; Djogbenou, MacKinnon & Nielsen 2019). A draw whose covariance
// is singular counts as one beyond W. Q makes W* free of the way the equations are put.
//
// Time O(draws G q (m + q)), memory O(G m q), no more than what is kept of the clusters.
type joint struct {
	w       *wild
	q       int
	basis   []float64 // Q', q x m
	delta   []float64 // q
	t       []float64 // t_g, G x m
	alpha   []float64 // Q't_g, G x q
	h       []float64 // Q'H_g, G x q x m
	imposed bool
}

// singularShare of a diagonal element left by elimination makes a matrix singular.
const singularShare = 1e-12

// newJoint prepares equations, given L'R' by rows and R b - r in units of v; nil if
// they are not independent.
func (w *wild) newJoint(rows [][]float64, distance []float64, imposed bool) *joint {
	m, n, q := w.m, w.g, len(rows)
	j := &joint{w: w, q: q, imposed: imposed, t: w.t, delta: make([]float64, q)}
	for i, row := range rows {
		c := append([]float64(nil), row...)
		left := distance[i]
		for range 2 { // once more for what rounding leaves
			for k := range i {
				b := j.basis[k*m : (k+1)*m]
				t := dot(b, c)
				axpy(-t, b, c)
				left -= t * j.delta[k]
			}
		}
		norm := math.Sqrt(dot(c, c))
		if !(norm > singularShare*math.Sqrt(dot(row, row))) {
			return nil
		}
		for _, x := range c {
			j.basis = append(j.basis, x/norm)
		}
		j.delta[i] = left / norm
	}
	j.h = make([]float64, n*q*m)
	for g := range n {
		for i := range q {
			out := j.h[(g*q+i)*m : (g*q+i+1)*m]
			for p := range m {
				out[p] = dot(w.h[(g*m+p)*m:(g*m+p+1)*m], j.basis[i*m:(i+1)*m])
			}
		}
	}
	if imposed {
		j.t = append([]float64(nil), w.t...)
		for g := range n {
			for i, d := range j.delta {
				axpy(d, j.h[(g*q+i)*m:(g*q+i+1)*m], j.t[g*m:(g+1)*m])
			}
		}
	}
	j.alpha = make([]float64, n*q)
	for g := range n {
		for i := range q {
			j.alpha[g*q+i] = dot(j.basis[i*m:(i+1)*m], j.t[g*m:(g+1)*m])
		}
	}
	return j
}

// room is what a draw writes over.
type room struct{ w, y, a, s []float64 }

func (j *joint) room() *room {
	return &room{make([]float64, j.w.m), make([]float64, j.q), make([]float64, j.q), make([]float64, j.q*j.q)}
}

// statistic is W* of the weights v; infinite if its covariance is singular.
func (j *joint) statistic(v []float64, r *room) float64 {
	m, q := j.w.m, j.q
	clear(r.w)
	clear(r.s)
	for g, x := range v {
		axpy(x, j.t[g*m:(g+1)*m], r.w)
	}
	for i := range q {
		r.y[i] = dot(j.basis[i*m:(i+1)*m], r.w)
	}
	for g, x := range v {
		for i := range q {
			r.a[i] = x*j.alpha[g*q+i] - dot(j.h[(g*q+i)*m:(g*q+i+1)*m], r.w)
			axpy(r.a[i], r.a[:i+1], r.s[i*q:i*q+i+1])
		}
	}
	return wald(r.s, r.y) / j.w.factor
}

// observed is W of the fit itself.
func (j *joint) observed() float64 {
	r := j.room()
	if j.imposed {
		// Weights 1 give the data: with the same bits as the draw that does.
		v := make([]float64, j.w.g)
		for g := range v {
			v[g] = 1
		}
		return j.statistic(v, r)
	}
	for g := range j.w.g {
		for i := range j.q {
			axpy(j.alpha[g*j.q+i], j.alpha[g*j.q:g*j.q+i+1], r.s[i*j.q:i*j.q+i+1])
		}
	}
	copy(r.y, j.delta)
	return wald(r.s, r.y) / j.w.factor
}

// wald is y's^-1 y by Cholesky of the lower triangle of s, both overwritten; infinite
// where s is singular.
func wald(s, y []float64) float64 {
	q := len(y)
	var out float64
	for i := range q {
		row := s[i*q : i*q+i+1]
		whole := row[i]
		for k := range i {
			other := s[k*q : k*q+k+1]
			row[k] = (row[k] - dot(row[:k], other[:k])) / other[k]
		}
		left := whole - dot(row[:i], row[:i])
		if !(left > singularShare*whole) {
			return math.Inf(1)
		}
		row[i] = math.Sqrt(left)
		y[i] = (y[i] - dot(row[:i], y[:i])) / row[i]
		out = math.FMA(y[i], y[i], out)
	}
	return out
}

// chance is p of the equations, NaN if the covariance of the fit itself is singular.
func (j *joint) chance(ctx context.Context, b *Bootstrap) (float64, error) {
	at := j.observed()
	if math.IsInf(at, 1) {
		return nan, nil
	}
	var beyond atomic.Int64
	err := b.each(ctx, j.w.g, func() func(int, []float64) {
		r := j.room()
		return func(_ int, v []float64) {
			if j.statistic(v, r)*(1+2e-12) >= at {
				beyond.Add(1)
			}
		}
	})
	return b.share(int(beyond.Load())), err
}

// bootstrapJoint puts draws in the place of F in the test of several equations.
func (f *fitter) bootstrapJoint(out *Hypothesis, h *hypothesis, k Kind, e *Errors) error {
	x, c := f.sol, f.groups[k.Cluster]
	none := func(format string, args ...any) error {
		out.DF2, out.F, out.P = Number(nan), Number(nan), Number(nan)
		out.Reason = ptr(fmt.Sprintf(format, args...))
		return nil
	}
	for _, t := range h.touch {
		if c.adjusted.lone[t] {
			return none("a single cluster decides %s: it has no p by %s", x.coefficient(t).label, e.Name())
		}
	}
	rows, distance := make([][]float64, len(h.combos)), make([]float64, len(h.combos))
	for i, l := range h.combos {
		rows[i] = x.whitened(l)
		distance[i] = (x.valueOf(h, i) - h.values[i]) * x.state.Frame.YInv
	}
	j := c.wild.newJoint(rows, distance, k.Name == "wcr")
	p := nan
	if j != nil {
		var err error
		if p, err = j.chance(f.ctx, e.Bootstrap); err != nil {
			return err
		}
	}
	if math.IsNaN(p) {
		return none("the covariance by %s is singular for these restrictions", e.Name())
	}
	out.DF2, out.P = Number(nan), Number(p)
	return nil
}

// whitened is L'c of a combination c of the solved coordinates, M = L L'.
func (x *solution) whitened(c []float64) []float64 {
	half := x.e.half() // K x m
	m := len(half) / x.k()
	out := make([]float64, m)
	for i, t := range c {
		axpy(t, half[i*m:(i+1)*m], out)
	}
	return out
}
