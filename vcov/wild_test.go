package vcov

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// byRows is the least squares fit and its covariance by cr1, from rows.
func byRows(x *mat.Dense, y []float64, group []int, groups int) (b, v *mat.Dense) {
	n, k := x.Dims()
	var m, xy, fit, sm mat.Dense
	b, v = new(mat.Dense), new(mat.Dense)
	m.Mul(x.T(), x)
	if err := m.Inverse(&m); err != nil {
		panic(err)
	}
	xy.Mul(x.T(), mat.NewDense(n, 1, y))
	b.Mul(&m, &xy)
	fit.Mul(x, b)
	s := mat.NewDense(groups, k, nil)
	for i, g := range group {
		for a := range k {
			s.Set(g, a, s.At(g, a)+x.At(i, a)*(y[i]-fit.At(i, 0)))
		}
	}
	sm.Mul(s, &m)
	v.Mul(sm.T(), &sm)
	g := float64(groups)
	v.Scale(g/(g-1)*float64(n-1)/float64(n-k), v)
	return b, v
}

// crt is t by cr1 of coefficient j against r, from rows.
func crt(x *mat.Dense, y []float64, group []int, groups, j int, r float64) float64 {
	b, v := byRows(x, y, group, groups)
	return (b.At(j, 0) - r) / math.Sqrt(v.At(j, j))
}

// crWald is the Wald statistic of R b = r by cr1, from rows.
func crWald(x *mat.Dense, y []float64, group []int, groups int, r *mat.Dense, value []float64) float64 {
	b, v := byRows(x, y, group, groups)
	var gap, mid, sol, w mat.Dense
	gap.Mul(r, b)
	gap.Sub(&gap, mat.NewDense(len(value), 1, value))
	mid.Product(r, v, r.T())
	if err := sol.Solve(&mid, &gap); err != nil {
		panic(err)
	}
	w.Mul(gap.T(), &sol)
	return w.At(0, 0)
}

// wildRows is a regression with clusters, as rows (cols: outcome first) and as what a
// bootstrap keeps of it.
func wildRows(t *testing.T, seed uint64) (x *mat.Dense, cols [][]float64, group []int, groups int, s *accum.State, sol *solution, adj *adjusted, w *wild) {
	t.Helper()
	r := rand.New(rand.NewPCG(seed, 31))
	groups = 5 + r.IntN(9)
	for g := range groups {
		for range 4 + r.IntN(4*(g+1)) {
			group = append(group, g)
		}
	}
	n := len(group)
	x = mat.NewDense(n, 3, nil)
	cols = make([][]float64, 3)
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
	s, sol = solveMemory(t, []string{"y", "a", "b"}, cols, stream.Spec{Outcome: "y", Terms: []string{"a", "b"}})
	adj, w = newAdjusted(sol), newWild(sol, 1<<30)
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
	return
}

// Draws from cluster sums are those of outcomes made anew row by row and fitted
// again (Cameron, Gelbach and Miller 2008, doi:10.1162/rest.90.3.414, section IV), with
// and without the hypothesis imposed, at several hypotheses from the same sums.
func TestWildDrawsAreRefits(t *testing.T) {
	for seed := range uint64(4) {
		x, cols, group, groups, s, sol, adj, w := wildRows(t, seed)
		n := len(group)
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
						want := crt(x, y, group, groups, j, null)
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

// Several equations at once: W of a draw is that of the outcome made anew row by row
// from the restricted least squares fit (or the fit itself) and fitted again, and W of
// the fit itself is the Wald statistic by cr1 (Djogbenou, MacKinnon and Nielsen 2019,
// doi:10.1016/j.jeconom.2019.04.035, section 2).
func TestWildJointDrawsAreRefits(t *testing.T) {
	for seed := range uint64(4) {
		x, cols, group, groups, s, sol, _, w := wildRows(t, seed)
		n := len(group)
		for _, c := range []struct {
			text  string
			r     []float64
			value []float64
		}{
			{"a = 0.25, b = -1", []float64{0, 1, 0, 0, 0, 1}, []float64{0.25, -1}},
			{"a - 1000 * b = 1000, constant + a = 2", []float64{0, 1, -1000, 1, 1, 0}, []float64{1000, 2}},
			{"constant = 0, a = 0, b = 0", []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, []float64{0, 0, 0}},
			{"a + b = 3", []float64{0, 1, 1}, []float64{3}},
		} {
			q := len(c.value)
			restrict := mat.NewDense(q, 3, c.r)
			list, err := s.Design.ParseHypothesis(c.text)
			if err != nil {
				t.Fatal(err)
			}
			if err := sol.resolve([][]stream.Restriction{list}); err != nil {
				t.Fatal(err)
			}
			h := sol.hypotheses[0]
			rows, distance := make([][]float64, q), make([]float64, q)
			for i, l := range h.combos {
				rows[i], distance[i] = sol.whitened(l), (sol.valueOf(h, i)-h.values[i])*s.Frame.YInv
			}
			// b - M R'(R M R')^-1 (R b - r)
			var m, rm, rmr, gap, mult, step mat.Dense
			m.Mul(x.T(), x)
			if err := m.Inverse(&m); err != nil {
				t.Fatal(err)
			}
			b, _ := byRows(x, cols[0], group, groups)
			rm.Mul(restrict, &m)
			rmr.Mul(&rm, restrict.T())
			gap.Mul(restrict, b)
			free := mat.Col(nil, 0, &gap) // R b
			gap.Sub(&gap, mat.NewDense(q, 1, c.value))
			if err := mult.Solve(&rmr, &gap); err != nil {
				t.Fatal(err)
			}
			step.Mul(rm.T(), &mult)
			for _, imposed := range []bool{true, false} {
				j := w.newJoint(rows, distance, imposed)
				close := func(what string, got, want float64) {
					t.Helper()
					if !(math.Abs(got-want) <= 1e-8*want+1e-20) { // weights all 1: W is 0 of wcu
						t.Errorf("seed %d, %s, imposed %v, %s: W %v, by rows %v", seed, c.text, imposed, what, got, want)
					}
				}
				close("the data", j.observed(), crWald(x, cols[0], group, groups, restrict, c.value))
				beta, null := mat.DenseCopyOf(b), free
				if imposed {
					beta.Sub(b, &step)
					null = c.value
				}
				var fitted mat.Dense
				fitted.Mul(x, beta)
				v, y, room := make([]float64, groups), make([]float64, n), j.room()
				for _, b := range []Bootstrap{{Draws: 40, Seed: seed, Weights: "six-point"}, {Draws: 40, Seed: 7, Weights: "signs"}} {
					for i := range 12 {
						b.weights(i, v)
						for row := range n {
							y[row] = fitted.At(row, 0) + v[group[row]]*(cols[0][row]-fitted.At(row, 0))
						}
						close(fmt.Sprintf("%s, draw %d", b.Weights, i), j.statistic(v, room), crWald(x, y, group, groups, restrict, null))
					}
				}
			}
		}
	}
}

// One equation tested as several are has the p of the test of t, to the last bit;
// equations that follow from each other, or a covariance that is singular, have none.
func TestWildJointOfOneEquation(t *testing.T) {
	for seed := range uint64(6) {
		x, cols, group, groups, s, sol, adj, w := wildRows(t, seed)
		_, v := byRows(x, cols[0], group, groups)
		for _, b := range []Bootstrap{{Draws: 499, Seed: seed, Weights: "six-point"}, {Draws: 499, Seed: seed, Weights: "signs"}, {All: true, Draws: 1 << w.g, Weights: "signs"}} {
			for k := range 3 {
				for kind, imposed := range map[string]bool{"wcr": true, "wcu": false} {
					for _, null := range []float64{0, sol.est[k] + 1.5*math.Sqrt(v.At(k, k))} {
						want, _, _, err := w.judge(t.Context(), kind, &b, adj.along(k), sol.est[k], null, math.Sqrt(v.At(k, k)), 0.95)
						if err != nil {
							t.Fatal(err)
						}
						j := w.newJoint([][]float64{adj.along(k)}, []float64{(sol.est[k] - null) * s.Frame.YInv}, imposed)
						if got, err := j.chance(t.Context(), &b); got != want || err != nil {
							t.Errorf("seed %d, %+v, %s of coefficient %d against %v: p %v, by t %v (%v)", seed, b, kind, k, null, got, want, err)
						}
					}
				}
			}
		}
		if w.newJoint([][]float64{adj.along(1), adj.along(1)}, []float64{0, 0}, true) != nil {
			t.Error("an equation twice is taken for two")
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
