package vcov

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// crt is t by cr1 of coefficient j against r, from rows.
func crt(x *mat.Dense, y []float64, group []int, groups, j int, r float64) (t, se float64) {
	n, k := x.Dims()
	var m, xy, b, fit mat.Dense
	m.Mul(x.T(), x)
	if err := m.Inverse(&m); err != nil {
		panic(err)
	}
	xy.Mul(x.T(), mat.NewDense(n, 1, y))
	b.Mul(&m, &xy)
	fit.Mul(x, &b)
	s := mat.NewDense(groups, k, nil)
	for i, g := range group {
		for a := range k {
			s.Set(g, a, s.At(g, a)+x.At(i, a)*(y[i]-fit.At(i, 0)))
		}
	}
	var sm mat.Dense
	sm.Mul(s, &m)
	var v float64
	for g := range groups {
		v += sm.At(g, j) * sm.At(g, j)
	}
	g := float64(groups)
	se = math.Sqrt(v * g / (g - 1) * float64(n-1) / float64(n-k))
	return (b.At(j, 0) - r) / se, se
}

// Draws from cluster sums are those of outcomes made anew row by row and fitted
// again (Cameron, Gelbach and Miller 2008, doi:10.1162/rest.90.3.414, section IV), with
// and without the hypothesis imposed, at several hypotheses from the same sums.
func TestWildDrawsAreRefits(t *testing.T) {
	for seed := range uint64(4) {
		r := rand.New(rand.NewPCG(seed, 31))
		groups := 5 + r.IntN(9)
		var group []int
		for g := range groups {
			for range 4 + r.IntN(4*(g+1)) {
				group = append(group, g)
			}
		}
		n := len(group)
		x := mat.NewDense(n, 3, nil)
		cols := make([][]float64, 3)
		effect := make([]float64, groups)
		for g := range effect {
			effect[g] = r.NormFloat64()
		}
		for i := range n {
			a, b := r.NormFloat64()+effect[group[i]], 3+r.ExpFloat64()
			y := 1 + a/2 - b + effect[group[i]] + r.NormFloat64()
			x.SetRow(i, []float64{1, a, b})
			for j, v := range []float64{y, a, b} {
				cols[j] = append(cols[j], v)
			}
		}
		s, sol := solveMemory(t, []string{"y", "a", "b"}, cols, stream.Spec{Outcome: "y", Terms: []string{"a", "b"}})
		adj, w := newAdjusted(sol), newWild(sol, 1<<30)
		for g := range groups {
			c := accum.Cluster{A: make([]float64, 9), S: make([]float64, 3)}
			for i := range n {
				if group[i] != g {
					continue
				}
				z := internalRow(s.Frame, []float64{cols[1][i], cols[2][i]}, cols[0][i])
				for a := range 3 {
					axpy(z[a], z[:3], c.A[a*3:(a+1)*3])
				}
				axpy(dot(sol.theta, z), z[:3], c.S)
			}
			adj.add(c.A, c.S)
			w.add(adj)
		}
		g := float64(groups)
		w.factor = g / (g - 1) * float64(n-1) / float64(n-3)
		for _, b := range []Bootstrap{{Draws: 40, Seed: seed, Weights: "six-point"}, {Draws: 40, Seed: 7, Weights: "signs"}} {
			for j := range 3 {
				d := make([]float64, w.m)
				for q := range d {
					d[q] = adj.d[q*adj.k+j]
				}
				cs, err := w.curves(t.Context(), &b, d, dot(d, d))
				if err != nil {
					t.Fatal(err)
				}
				est := sol.est[j]
				for _, null := range []float64{est, 0, est + 1.5} { // est: unrestricted
					// Restricted fit: c'b = null.
					var m mat.Dense
					m.Mul(x.T(), x)
					if err := m.Inverse(&m); err != nil {
						t.Fatal(err)
					}
					beta := make([]float64, 3)
					for a := range 3 {
						beta[a] = sol.est[a] - m.At(a, j)*(est-null)/m.At(j, j)
					}
					v := make([]float64, groups)
					for i := range 12 {
						b.weights(i, v)
						y := make([]float64, n)
						for row := range n {
							f := 0.0
							for a := range 3 {
								f += x.At(row, a) * beta[a]
							}
							y[row] = f + v[group[row]]*(cols[0][row]-f)
						}
						want, _ := crt(x, y, group, groups, j, null)
						delta := (est - null) * s.Frame.YInv
						c := cs[i]
						got := (c.n0 + c.n1*delta) / math.Sqrt(w.factor*(c.q0+delta*(c.q1+delta*c.q2)))
						if math.Abs(got-want) > 1e-8*(1+math.Abs(want)) {
							t.Errorf("seed %d, %s, coefficient %d against %v, draw %d: t* %v, by rows %v", seed, b.Weights, j, null, i, got, want)
						}
					}
				}
			}
		}
	}
}

// Weights have mean 0 and variance 1; patterns of signs are all there once.
func TestWildWeights(t *testing.T) {
	for _, kind := range []string{"signs", "six-point"} {
		b := Bootstrap{Draws: 40_000, Seed: 3, Weights: kind}
		v := make([]float64, 70)
		var sum, sq, cross float64
		for i := range b.Draws {
			b.weights(i, v)
			for g, x := range v {
				sum += x
				sq += x * x
				cross += x * v[(g+1)%len(v)]
			}
		}
		n := float64(b.Draws * len(v))
		for what, d := range map[string]float64{"mean": sum / n, "variance": sq/n - 1, "neighbours": cross / n} {
			if math.Abs(d) > 6/math.Sqrt(n) {
				t.Errorf("%s: %s off by %v", kind, what, d)
			}
		}
	}
	b := Bootstrap{All: true, Draws: 16, Weights: "signs"}
	seen := map[[4]float64]bool{}
	for i := range 16 {
		var v [4]float64
		b.weights(i, v[:])
		seen[v] = true
	}
	if len(seen) != 16 {
		t.Errorf("%d patterns of 16", len(seen))
	}
}
