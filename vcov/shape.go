package vcov

import (
	"cmp"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Clustering describes the clusters of one clustering and what hangs on single ones.
// Slices run over Result.Terms; what does not exist is NaN (JSON null).
//
// With M = (X'WX)^-1, A_g and s_g as for cr2 and x~_j the part of a term that the
// others do not give, sum_i (M x_i)_j:
//
//   - Effective is G / (1 + cv^2) of gamma_g = (1-rho) (M A_g M)_jj + rho (sum_{i in g}
//     w_i (M x_i)_j)^2 with rho the intraclass correlation, not below 0, and
//     EffectiveWorst the same with rho 1 (Carter, Schnepel & Steigerwald 2017): where
//     it is much below G cr1 with t on G-1 is too sure.
//   - Leverage of a cluster is tr(M A_g), k/G in the mean; Partial is (M A_g M)_jj /
//     M_jj, 1/G in the mean (MacKinnon, Nielsen & Webb 2023).
//   - Influence lists the clusters whose deletion changes an estimate most, exactly,
//     b_(g) - b = -M (I - A_g M)^-1 s_g.
//   - Intraclass is the correlation of residuals within clusters from the analysis of
//     variance, n0 = (N - sum n_g^2/N)/(G-1), (MSB - MSW)/(MSB + (n0-1) MSW); Moulton
//     is 1 + (Var(n)/n- + n- - 1) rho_x rho_u for each term (Moulton 1986): the factor
//     of the classical variance under equal correlation. Neither under weights other
//     than frequencies.
type Clustering struct {
	Clusters       []string    `json:"clusters"`
	Groups         int64       `json:"groups"`
	GroupRows      *Spread     `json:"group_rows"`
	Effective      []Number    `json:"effective"`
	EffectiveWorst []Number    `json:"effective_worst"`
	MeanLeverage   Number      `json:"mean_leverage"`
	Leverage       Extreme     `json:"leverage"` // the largest
	Partial        []Extreme   `json:"partial"`  // the largest of each term
	Influence      [][]Extreme `json:"influence"`
	Intraclass     Number      `json:"intraclass"`
	Moulton        []Number    `json:"moulton"`
}

// Extreme is the value of one cluster, by its label.
type Extreme struct {
	Cluster string `json:"cluster"`
	Value   Number `json:"value"`
}

// mostInfluential is how many clusters are listed for a term.
const mostInfluential = 3

// shape gathers Clustering while cr2 and cr3 are summed.
type shape struct {
	a     *adjusted
	label func(accum.Key) string

	lever     Extreme
	partial   []Extreme
	influence [][]Extreme
	g2        []float64 // sum of (sum x~)^4 by term
	both, sq  []float64 // sums of (sum x~)^2 sum x~^2 and of (sum x~^2)^2
	own, all  []float64 // sums of (sum x~)^2 and of x~^2 by term
	n1, n2    float64   // sums of n and n^2
	pairs     float64   // sum n (n-1)
	between   float64   // sum of (sum e)^2 / n
	one       []float64
}

func newShape(a *adjusted, label func(accum.Key) string) *shape {
	k := a.x.k()
	s := &shape{a: a, label: label, partial: make([]Extreme, k), influence: make([][]Extreme, k), one: make([]float64, a.m)}
	for _, v := range []*[]float64{&s.g2, &s.both, &s.sq, &s.own, &s.all} {
		*v = make([]float64, k)
	}
	return s
}

// add takes in the cluster that a has just taken in.
func (s *shape) add(c *accum.Cluster) {
	a, m, k := s.a, s.a.m, s.a.k
	name := "" // labels are made for those that lead
	text := func() string {
		if name == "" {
			name = s.label(c.Key)
		}
		return name
	}
	trace := 0.0
	for q := range m {
		trace += a.h[q*m+q]
	}
	if trace > float64(s.lever.Value) {
		s.lever = Extreme{text(), Number(trace)}
	}
	clear(s.one)
	p := len(c.S)
	for i := range p {
		axpy(c.A[i*p], a.b[i*m:(i+1)*m], s.one)
	}
	n := float64(c.Rows)
	if s.a.x.kind == stream.Frequency {
		n = c.A[0]
	}
	s.n1 += n
	s.n2 += n * n
	s.pairs += n * (n - 1)
	s.between += c.S[0] * c.S[0] / n
	for j := range s.partial {
		var sum, change float64
		for q := range m {
			d := a.d[q*k+j]
			sum = math.FMA(d, s.one[q], sum)
			change = math.FMA(-d, a.g[q], change)
		}
		gamma := sum * sum
		s.both[j] += gamma * a.dy[j]
		s.sq[j] += a.dy[j] * a.dy[j]
		s.g2[j] += gamma * gamma
		s.own[j] += gamma
		s.all[j] += a.dy[j]
		if share := a.dy[j] / a.size[j]; share > float64(s.partial[j].Value) {
			s.partial[j] = Extreme{text(), Number(share)}
		}
		list := s.influence[j]
		if len(list) < mostInfluential || math.Abs(change) > math.Abs(float64(list[len(list)-1].Value)) {
			list = append(list, Extreme{text(), Number(change)})
			slices.SortStableFunc(list, func(a, b Extreme) int {
				return cmp.Compare(math.Abs(float64(b.Value)), math.Abs(float64(a.Value)))
			})
			s.influence[j] = list[:min(len(list), mostInfluential)]
		}
	}
}

// clustering is the description over all clusters.
func (s *shape) clustering() *Clustering {
	x, k := s.a.x, s.a.x.k()
	g := float64(s.a.clusters)
	c := &Clustering{Groups: s.a.clusters, Leverage: s.lever, MeanLeverage: Number(float64(x.rank()) / g), Intraclass: Number(nan)}
	icc := nan
	if x.kind == stream.NoWeight || x.kind == stream.Frequency {
		n0 := (s.n1 - s.n2/s.n1) / (g - 1)
		msb := s.between / (g - 1)
		msw := (x.rss - s.between) / (s.n1 - g)
		if s.n1 > g && g > 1 && !x.perfect {
			icc = (msb - msw) / (msb + (n0-1)*msw)
		}
		c.Intraclass = Number(icc)
	}
	mean := s.n1 / g
	spread := s.n2/g - mean*mean
	for j := range k {
		eff, worst, moulton := nan, nan, nan
		partial, list := Extreme{Value: Number(nan)}, []Extreme{}
		if !math.IsNaN(x.est[j]) && !s.a.lone[j] {
			// A term whose clusters' sums are rounding varies within them only.
			if s.own[j] > 1e-20*s.n1*s.all[j] {
				worst = s.own[j] * s.own[j] / s.g2[j]
			}
			if !math.IsNaN(icc) {
				r := min(max(icc, 0), 1)
				sum := (1-r)*s.all[j] + r*s.own[j]
				eff = sum * sum / ((1-r)*(1-r)*s.sq[j] + 2*r*(1-r)*s.both[j] + r*r*s.g2[j])
			}
			if s.pairs > 0 {
				rho := (s.own[j] - s.all[j]) / s.pairs / (s.all[j] / s.n1)
				moulton = 1 + (spread/mean+mean-1)*rho*icc
			}
			partial = s.partial[j]
			for _, e := range s.influence[j] {
				list = append(list, Extreme{e.Cluster, e.Value / Number(x.state.Frame.YInv)})
			}
		}
		c.Effective = append(c.Effective, Number(eff))
		c.EffectiveWorst = append(c.EffectiveWorst, Number(worst))
		c.Moulton = append(c.Moulton, Number(moulton))
		c.Partial = append(c.Partial, partial)
		c.Influence = append(c.Influence, list)
	}
	return c
}
