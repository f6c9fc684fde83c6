package vcov

import (
	"context"
	"fmt"
	"math"
	"math/bits"
	"runtime"
	"slices"
	"sync"
	"sync/atomic"

	"github.com/tallrow/tallrow/stream"
)

// The wild cluster bootstrap of t (Cameron, Gelbach & Miller 2008; Djogbenou,
// MacKinnon & Nielsen 2019), from cluster sums alone. The scores of a cluster are
// multiplied by a random weight of mean 0 and variance 1, the model is solved anew
// and t by cr1 computed, again and again:
//
//	kind  scores                                  interval
//	wcr   with the hypothesis c'b = r imposed     all r with p(r) > 1 - level
//	wcu   of the fit itself                       b -+ q se, q the quantile of |t*|
//
// With d = L'c, H_g = L'A_g L and t_g = L's_g as for cr2, M = (X'WX)^-1 = L L' and
// delta = c'b - r, the scores under the hypothesis are t_g + H_g d delta / d'd; with
// weights v_g and w = sum v_g t_g(r)
//
//	t* = d'w / sqrt(c sum_g (v_g d't_g(r) - d'H_g w)^2)
//
// so that t* of a draw is a ratio of polynomials in delta: five numbers for each draw
// answer for every r. p is (1 + #{|t*| >= |t|}) / (draws + 1); if all sign patterns
// are run through, the share of patterns, the identity among them.
//
// Weights are signs (Rademacher) or the six points +-sqrt(1/2), +-1, +-sqrt(3/2) of
// Webb (2023), which suit fewer than 12 clusters. They follow from the seed, the draw
// and the place of the cluster in order of key, so that nothing hangs on workers.
// Several equations at once are tested by the same draws, see joint.
//
// Time O(draws G m K), memory O(G m^2 + draws).
type wild struct {
	x      *solution
	m, g   int
	h, t   []float64 // of each cluster: m x m, m
	factor float64   // of cr1
	most   int64     // numbers kept
}

// Bootstrap says how a wild bootstrap was done.
type Bootstrap struct {
	Draws   int    `json:"draws"`
	Seed    uint64 `json:"seed"`
	Weights string `json:"weights"` // "signs" or "six-point"
	// All tells that every pattern of signs was run through once.
	All bool `json:"all"`
}

const (
	defaultDraws = 9999
	fewForSigns  = 12 // clusters below which six-point weights are used
	mostPatterns = 20 // clusters up to which patterns are counted
)

// bootstraps reports whether a kind is of this family.
func bootstraps(kind string) bool { return kind == "wcr" || kind == "wcu" }

// keptShare is the part of the memory, counted in numbers of 8 bytes, that scores and
// second moments kept for all clusters or periods may take while their lists grow.
const keptShare = 64

func newWild(x *solution, memory int64) *wild {
	return &wild{x: x, m: x.rank(), most: memory / keptShare}
}

// add takes in the cluster that a has just taken in; false if that is too much to keep.
func (w *wild) add(a *adjusted) bool {
	if int64(len(w.h)+len(w.t)+len(a.h)+len(a.t)) > w.most {
		return false
	}
	w.g++
	w.h = append(w.h, a.h...)
	w.t = append(w.t, a.t...)
	return true
}

// curve is t* of a draw as a function of delta: (n0 + n1 delta) / sqrt(c (q0 + q1
// delta + q2 delta^2)).
type curve struct{ n0, n1, q0, q1, q2 float64 }

// exceeds reports whether |t*| >= |t| at delta.
func (c *curve) exceeds(delta, size, factor float64) bool {
	n := c.n0 + c.n1*delta
	q := factor * (c.q0 + delta*(c.q1+delta*c.q2))
	return n*n*(1+2e-12) >= size*size*max(q, 0)
}

// plan chooses weights and number of draws.
func (w *wild) plan(o *Options) Bootstrap {
	b := Bootstrap{Draws: o.Draws, Seed: o.Seed, Weights: o.BootWeights}
	if b.Draws == 0 {
		b.Draws = defaultDraws
	}
	if b.Weights == "" || b.Weights == "auto" {
		b.Weights = "signs"
		if w.g < fewForSigns {
			b.Weights = "six-point"
		}
	}
	if b.Weights == "signs" && w.g <= mostPatterns && 1<<w.g <= b.Draws+1 {
		b.All, b.Draws = true, 1<<w.g
	}
	return b
}

// sixPoint are the weights of Webb (2023).
var sixPoint = [6]float64{-math.Sqrt(1.5), -1, -math.Sqrt(0.5), math.Sqrt(0.5), 1, math.Sqrt(1.5)}

// mix is the finaliser of splitmix64 (Steele, Lea & Flood 2014).
func mix(z uint64) uint64 {
	z += 0x9E3779B97F4A7C15
	z = (z ^ z>>30) * 0xBF58476D1CE4E5B9
	z = (z ^ z>>27) * 0x94D049BB133111EB
	return z ^ z>>31
}

// weights fills v for a draw.
func (b *Bootstrap) weights(draw int, v []float64) {
	key := mix(b.Seed ^ mix(uint64(draw)))
	switch {
	case b.All:
		for g := range v {
			v[g] = float64(1 - 2*(draw>>g&1))
		}
	case b.Weights == "signs":
		var u uint64
		for g := range v {
			if g%64 == 0 {
				u = mix(key + uint64(g))
			}
			v[g] = float64(1 - 2*int(u>>(g%64)&1))
		}
	default:
		for g := range v {
			hi, _ := bits.Mul64(mix(key+uint64(g)), 6)
			v[g] = sixPoint[hi]
		}
	}
}

// curves computes every draw for the coefficient with d = L'c.
func (w *wild) curves(ctx context.Context, b *Bootstrap, d []float64, size float64) ([]curve, error) {
	m, n := w.m, w.g
	q := make([]float64, n*m) // H_g d
	alpha, beta := make([]float64, n), make([]float64, n)
	for g := range n {
		h := w.h[g*m*m : (g+1)*m*m]
		for i := range m {
			q[g*m+i] = dot(h[i*m:(i+1)*m], d)
		}
		alpha[g] = dot(d, w.t[g*m:(g+1)*m])
		beta[g] = dot(d, q[g*m:(g+1)*m]) / size
	}
	out := make([]curve, b.Draws)
	err := b.each(ctx, n, func() func(int, []float64) {
		w0, w1 := make([]float64, m), make([]float64, m)
		return func(draw int, v []float64) {
			clear(w0)
			clear(w1)
			for g, x := range v {
				axpy(x, w.t[g*m:(g+1)*m], w0)
				axpy(x/size, q[g*m:(g+1)*m], w1)
			}
			c := curve{n0: dot(d, w0), n1: dot(d, w1)}
			for g, x := range v {
				a0 := x*alpha[g] - dot(q[g*m:(g+1)*m], w0)
				a1 := x*beta[g] - dot(q[g*m:(g+1)*m], w1)
				c.q0 = math.FMA(a0, a0, c.q0)
				c.q1 = math.FMA(2*a0, a1, c.q1)
				c.q2 = math.FMA(a1, a1, c.q2)
			}
			out[draw] = c
		}
	})
	return out, err
}

// each calls for every draw, with its weights of n clusters, a function of the worker
// that has taken it.
func (b *Bootstrap) each(ctx context.Context, n int, worker func() func(draw int, v []float64)) error {
	const part = 64
	var next atomic.Int64
	var workers sync.WaitGroup
	for range runtime.GOMAXPROCS(0) {
		workers.Go(func() {
			do, v := worker(), make([]float64, n)
			for ctx.Err() == nil {
				from := int(next.Add(part)) - part
				if from >= b.Draws {
					return
				}
				for i := from; i < min(from+part, b.Draws); i++ {
					b.weights(i, v)
					do(i, v)
				}
			}
		})
	}
	workers.Wait()
	return ctx.Err()
}

// share is p where n draws are beyond what was observed.
func (b *Bootstrap) share(n int) float64 {
	if b.All {
		return float64(n) / float64(b.Draws)
	}
	return float64(1+n) / float64(b.Draws+1)
}

// chance is p of |t| at delta.
func (b *Bootstrap) chance(cs []curve, delta, at, se, factor float64) float64 {
	t := delta / se
	n := 0
	for i := range cs {
		if cs[i].exceeds(at, t, factor) {
			n++
		}
	}
	return b.share(n)
}

// ends returns the interval of all delta with p(delta) > alpha that holds 0, as
// distances; infinite where it has no end.
func (b *Bootstrap) ends(cs []curve, se, factor, alpha float64) (low, high float64) {
	in := func(delta float64) bool { return b.chance(cs, delta, delta, se, factor) > alpha }
	find := func(sign float64) float64 {
		lo, hi := 0.0, 2*se
		for in(sign * hi) {
			lo, hi = hi, 2*hi
			if hi > 1e6*se {
				return math.Inf(1)
			}
		}
		for range 60 {
			mid := lo + (hi-lo)/2
			if in(sign * mid) {
				lo = mid
			} else {
				hi = mid
			}
		}
		return lo
	}
	return find(-1), find(1)
}

// judge gives p of the hypothesis that the combination with d = L'c is null, and the
// interval of the combination, given its estimate and error by cr1.
func (w *wild) judge(ctx context.Context, kind string, b *Bootstrap, d []float64, estimate, null, se, level float64) (p, low, high float64, err error) {
	unit := w.x.state.Frame.YInv // in units of v
	est, delta := estimate*unit, (estimate-null)*unit
	se *= unit
	cs, err := w.curves(ctx, b, d, dot(d, d))
	if err != nil {
		return 0, 0, 0, err
	}
	if kind == "wcr" {
		p = b.chance(cs, delta, delta, se, w.factor)
		// delta = estimate - r: the largest delta is the lower end.
		left, right := b.ends(cs, se, w.factor, 1-level)
		return p, (est - right) / unit, (est + left) / unit, nil
	}
	p = b.chance(cs, delta, 0, se, w.factor)
	ts := make([]float64, len(cs))
	for i, c := range cs {
		ts[i] = math.Abs(c.n0) / math.Sqrt(w.factor*c.q0)
		if math.IsNaN(ts[i]) {
			ts[i] = 0
		}
	}
	slices.Sort(ts)
	q := math.Inf(1)
	if at := int(math.Ceil(level*float64(len(ts)+1))) - 1; at < len(ts) {
		q = ts[at]
	}
	return p, (est - q*se) / unit, (est + q*se) / unit, nil
}

// along is d = L'c of coefficient j, or of a combination behind the coefficients.
func (a *adjusted) along(j int) []float64 {
	d := make([]float64, a.m)
	for q := range d {
		d[q] = a.d[q*a.k+j]
	}
	return d
}

// bootstrap fills the entry of wcr or wcu, which holds the errors and t of cr1.
func (f *fitter) bootstrap(e *Errors, kind string, c *clusterSums) error {
	x, w := f.sol, c.wild
	b := w.plan(&f.o)
	e.Bootstrap = &b
	w.factor = float64(e.Factor)
	unbounded := false
	for j := range x.k() {
		if !e.T[j].Exists() {
			continue
		}
		if c.adjusted.lone[j] {
			for _, l := range []*[]Number{&e.T, &e.P, &e.Log10P, &e.Low, &e.High} {
				(*l)[j] = Number(nan)
			}
			continue
		}
		p, low, high, err := w.judge(f.ctx, kind, &b, c.adjusted.along(j), x.est[j], 0, float64(e.SE[j]), f.o.Level)
		if err != nil {
			return err
		}
		e.P[j], e.Log10P[j], e.DF[j] = Number(p), Number(math.Log10(p)), Number(nan)
		e.Low[j], e.High[j] = Number(low), Number(high)
		unbounded = unbounded || !e.Low[j].Exists() || !e.High[j].Exists()
	}
	if unbounded {
		f.note("unbounded", "%s: no value far enough from some estimates is refuted; those intervals have no end", e.Name())
	}
	if o := e.Overall; o != nil {
		e.Overall = nil // it would be that of cr1
	}
	return nil
}

// bootstrapTest puts draws in the place of t or F in the test of a hypothesis.
func (f *fitter) bootstrapTest(out *Hypothesis, h *hypothesis, k Kind, e *Errors) error {
	if out.Reason != nil || e.Bootstrap == nil {
		return nil
	}
	if h.single < 0 {
		return f.bootstrapJoint(out, h, k, e)
	}
	c := f.groups[k.Cluster]
	j := f.sol.k() + h.single
	n := Number(nan)
	if out.DF2 = n; c.adjusted.lone[j] {
		out.F, out.P, out.T, out.Low, out.High = n, n, n, n, n
		out.Reason = ptr(fmt.Sprintf("a single cluster decides it: it has no p by %s", e.Name()))
		return nil
	}
	p, low, high, err := c.wild.judge(f.ctx, k.Name, e.Bootstrap, c.adjusted.along(j), float64(out.Estimate), h.values[0], float64(out.SE), f.o.Level)
	out.P, out.Low, out.High = Number(p), Number(low), Number(high)
	return err
}

// checkBootstrap refuses what cannot be drawn.
func (o *Options) checkBootstrap() error {
	switch o.BootWeights {
	case "", "auto", "signs", "six-point":
	default:
		return stream.Usef("draw-weights: found %q, want auto, signs or six-point", o.BootWeights)
	}
	if o.Draws < 0 || o.Draws > 0 && o.Draws < 99 || o.Draws > 1_000_000 {
		return stream.Usef("draws: found %d, want 99 to 1,000,000", o.Draws)
	}
	return nil
}
