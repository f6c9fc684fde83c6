package vcov

import (
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
)

// clusterRobust is the covariance when rows of one cluster may move together in
// any way and clusters do not,
//
//	V = c (X'WX)^-1 [ sum_g s_g s_g' ] (X'WX)^-1,  s_g = sum_{i in g} w_i e_i x_i
//
//	kind  c                            source
//	cr0   1                            Liang & Zeger 1986; Arellano 1987
//	cr1   G/(G-1) (N-1)/(N-k)          Cameron & Miller 2015
//
// with t on G-1 and joint tests (G-q)/((G-1) q) W on F(q, G-q). scores are over
// internal columns, one row a cluster in key order. Time O(G (P K + K^2)).
func (x *solution) clusterRobust(kind string, sc *accum.Scores) *estimate {
	k, g := x.k(), len(sc.Keys)
	meat := make([]float64, k*k)
	s := make([]float64, k)
	for i := range g {
		x.projectVec(sc.S[i*sc.P:(i+1)*sc.P], s)
		for a, t := range s {
			axpy(t, s, meat[a*k:(a+1)*k])
		}
	}
	v := sandwich(x.inverse, meat, k)
	gf, n := float64(g), float64(x.n)
	r := &estimate{v: v, factor: 1, df: gf - 1}
	if kind == "cr1" {
		r.factor = gf / (gf - 1) * ((n - 1) / float64(x.df()))
		for i := range v {
			v[i] *= r.factor
		}
	}
	r.joint = func(w float64, q int) (float64, float64, bool, string) {
		if q > g-1 {
			return 0, 0, false, "more restrictions than clusters less one"
		}
		qf := float64(q)
		return (gf - qf) / ((gf - 1) * qf) * w, gf - qf, gf > qf, "too few clusters"
	}
	// A term that a single cluster identifies: its score is zero by construction.
	r.noP = make([]bool, k)
	for j, u := range x.cols {
		if u.term >= 0 && u.column < len(sc.Lone) && sc.Lone[u.column] {
			r.noP[j] = true
		}
	}
	return r
}

// groupRows describes the sizes of clusters.
func groupRows(rows []int64) *Spread {
	if len(rows) == 0 {
		return nil
	}
	r := slices.Clone(rows)
	slices.Sort(r)
	m := float64(r[len(r)/2])
	if len(r)%2 == 0 {
		m = (float64(r[len(r)/2-1]) + m) / 2
	}
	return &Spread{Min: r[0], Median: Number(m), Max: r[len(r)-1]}
}

// scoreLoss bounds the relative error of the errors in r where scores were formed
// from second moments: eps times what was added up for each coefficient over what
// is left.
func (x *solution) scoreLoss(sc *accum.Scores, r *estimate) float64 {
	if sc.Gross == nil {
		return 0
	}
	k := x.k()
	size := make([]float64, k)
	root := make([]float64, sc.P)
	for i, g := range sc.Gross {
		root[i] = math.Sqrt(g)
	}
	x.projectVecAbs(root, size)
	l := absolute(x.bread())
	net := sandwich(x.wAlias, r.v, k)
	floor := x.zeroVariance()
	worst := 0.0
	for j := range k {
		if math.IsNaN(x.est[j]) {
			continue
		}
		loss := dot(l[j*k:(j+1)*k], size) / math.Sqrt(max(net[j*k+j]/r.factor, floor[j]))
		if !(loss >= 0) {
			loss = math.Inf(1)
		}
		worst = max(worst, loss)
	}
	return 0x1p-53 * worst
}
