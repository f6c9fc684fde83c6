package vcov

import (
	"context"
	"maps"
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
// with t on G-1 and joint tests (G-q)/((G-1) q) W on F(q, G-q). Time O(K^3).
func (x *solution) clusterRobust(kind string, c *clusterSums) *estimate {
	k, g := x.k(), c.groups
	r := &estimate{factor: x.clusterFactor(kind, g, c.nested), df: float64(g - 1)}
	meat := c.meat
	if c.apart != nil {
		own := *c.apart
		r.apart = &own
	}
	v := sandwich(x.inverse, meat, k)
	r.v, r.meat = v, meat
	if kind == "cr1" {
		for i := range v {
			v[i] *= r.factor
		}
		if r.apart != nil {
			r.apart.scale = r.factor
		}
	}
	r.joint = clusterJoint(g)
	r.noP = x.loneClusters(c.scores)
	return r
}

// clusterFactor is G/(G-1) (N-1)/(N-k) for cr1, 1 for cr0. Effects that are swept out
// count in k unless each unit lies in one cluster.
func (x *solution) clusterFactor(kind string, groups int, nested bool) float64 {
	if kind == "cr0" {
		return 1
	}
	g, df := float64(groups), x.df()
	if nested {
		df += x.swept()
	}
	return g / (g - 1) * ((float64(x.n) - 1) / float64(df))
}

// clusterJoint is (G-q)/((G-1) q) W on F(q, G-q) (the scaling of Hotelling 1931).
func clusterJoint(g int) func(float64, int) (float64, float64, bool, string) {
	return func(w float64, q int) (float64, float64, bool, string) {
		if q > g-1 {
			return 0, 0, false, "more restrictions than clusters less one"
		}
		gf, qf := float64(g), float64(q)
		return (gf - qf) / ((gf - 1) * qf) * w, gf - qf, gf > qf, "too few clusters"
	}
}

// clusterSums is what one walk over the scores of all clusters of a key leaves.
type clusterSums struct {
	scores    *accum.Scores
	groups    int
	nested    bool // every unit whose effects are swept out lies in one cluster
	rows      *Spread
	meat      []float64  // sum_g s_g s_g' in solved coordinates
	apart     *apartMeat // where a group of categories is kept apart
	*adjusted            // of cr2 and cr3; nil unless asked for
	shape     *shape     // nil unless asked for
	wild      *wild      // nil unless asked for, or too large
	lagged    *lagged    // of driscoll-kraay; nil unless asked for
}

// walk fills c over the clusters of a key, in order of key: with second moments if
// c.adjusted is there. Time O(G (P K + K^2)).
func (x *solution) walk(ctx context.Context, sc *accum.Scores, c *clusterSums) error {
	k := x.k()
	c.scores, c.meat = sc, make([]float64, k*k)
	s := make([]float64, k)
	var n sizes
	err := sc.Each(func(g *accum.Cluster) error {
		if c.groups++; c.groups%4096 == 0 && ctx.Err() != nil {
			return ctx.Err()
		}
		n.add(g.Rows)
		if x.apart != nil {
			return nil
		}
		if c.adjusted != nil {
			c.adjusted.add(g.A, g.S)
			if c.shape != nil {
				c.shape.add(g)
			}
			if c.wild != nil && !c.wild.add(c.adjusted) {
				c.wild = nil
			}
		}
		x.projectVec(g.S, s)
		if c.lagged != nil {
			if err := c.lagged.add(g.Key, s); err != nil {
				return err
			}
		}
		for a, t := range s {
			axpy(t, s[:a+1], c.meat[a*k:a*k+a+1])
		}
		return nil
	})
	for a := range k {
		for b := range a {
			c.meat[b*k+a] = c.meat[a*k+b]
		}
	}
	if c.rows = n.spread(); err == nil && x.apart != nil {
		m := x.state.ClusterMeat(sc, x.apart.elim, x.apart.base)
		c.meat = x.project(m.Rest)
		c.apart = &apartMeat{rest: c.meat, own: m.Own, base: m.Base, within: m.Within, scale: 1}
	}
	return err
}

// loneClusters marks the coefficients of each direction of the terms that lives in
// one cluster, whose score in that direction is zero by construction: a term that
// is nonzero in one cluster only; with the constant, a term that is zero in one
// cluster only and has one value elsewhere, or a category whose base level occurs
// in one cluster only.
func (x *solution) loneClusters(sc *accum.Scores) []bool {
	s := x.state
	out := make([]bool, x.count())
	all := make([]userColumn, len(out))
	used := map[int]bool{}
	for j := range all {
		all[j] = x.coefficient(j)
		used[all[j].column] = true
	}
	carry := map[int]bool{}
	if s.Shifted() {
		carriers := x.carriers()
		if x.apart != nil {
			carriers = append(carriers, x.apart.carriers()...)
		}
		for _, c := range carriers {
			carry[c] = true
		}
	}
	withConstant := func() {
		for j, u := range all {
			out[j] = out[j] || carry[u.column]
		}
	}
	for j, u := range all {
		switch {
		case u.term < 0:
		case sc.Lone[u.column]:
			out[j] = true
		case sc.LoneZero[u.column] && len(carry) > 0:
			out[j] = true
			withConstant()
		}
	}
	for t := range s.Design.Terms {
		term := &s.Design.Terms[t]
		if len(term.Categories) != 1 || term.Dense >= 0 || len(carry) == 0 {
			continue
		}
		gi := s.Group(term.Categories)
		first, n := s.GroupColumns(gi)
		for i := range n {
			c := first + i*len(s.Groups[gi].Parts)
			if !used[c] && sc.Lone[c] {
				withConstant()
				for j, u := range all {
					out[j] = out[j] || u.term == t
				}
			}
		}
	}
	return out
}

// sizes counts clusters by their number of rows: there are at most sqrt(2 N)
// different ones.
type sizes struct {
	few  [256]int64
	many map[int64]int64
	all  int64
}

func (s *sizes) add(rows int64) {
	s.all++
	if rows < int64(len(s.few)) {
		s.few[rows]++
		return
	}
	if s.many == nil {
		s.many = map[int64]int64{}
	}
	s.many[rows]++
}

// spread describes the sizes; nil if there are none.
func (s *sizes) spread() *Spread {
	if s.all == 0 {
		return nil
	}
	r := &Spread{}
	var seen, low int64 // low is the size of the lower middle cluster
	add := func(rows, n int64) {
		if n == 0 {
			return
		}
		if seen == 0 {
			r.Min = rows
		}
		r.Max = rows
		if seen <= (s.all-1)/2 && seen+n > (s.all-1)/2 {
			low = rows
		}
		if seen <= s.all/2 && seen+n > s.all/2 {
			r.Median = Number((float64(low) + float64(rows)) / 2)
		}
		seen += n
	}
	for rows, n := range s.few {
		add(int64(rows), n)
	}
	for _, rows := range slices.Sorted(maps.Keys(s.many)) {
		add(rows, s.many[rows])
	}
	return r
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
	r.noise = make([]float64, k)
	floor := x.zeroVariance()
	worst := 0.0
	for j := range k {
		if math.IsNaN(x.est[j]) {
			continue
		}
		all := dot(l[j*k:(j+1)*k], size)
		r.noise[j] = (64 * 0x1p-53 * all) * (64 * 0x1p-53 * all)
		if net[j*k+j]/r.factor <= r.noise[j] && r.noise[j] <= harmless(floor[j]) {
			continue // zero
		}
		loss := all / math.Sqrt(max(net[j*k+j]/r.factor, floor[j]))
		if !(loss >= 0) {
			loss = math.Inf(1)
		}
		worst = max(worst, loss)
	}
	return 0x1p-53 * worst
}
