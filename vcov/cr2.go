package vcov

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// Bias-reduced cluster errors. With M = (X'WX)^-1 = L L' and, for each cluster g,
// A_g = sum w x x' and s_g = sum w e x,
//
//	V = L [ sum_g F_g t_g t_g' F_g ] L',  t_g = L's_g,  H_g = L'A_g L
//
//	kind  F_g                source
//	cr2   (I - H_g)^(-1/2)   Bell & McCaffrey 2002; McCaffrey & Bell 2006
//	cr3   (I - H_g)^(-1)     Bell & McCaffrey 2002: the sum of the squared changes
//	                         of the estimates when one cluster is left out,
//	                         without (G-1)/G
//
// H_g has eigenvalues in [0, 1] that add up to the rank over all clusters; it
// stands for the block of the hat matrix of the cluster's rows without ever
// forming it. Under errors of equal spread that do not move together cr2 is
// unbiased. With precision weights the working variance is 1/w.
//
// t, p and intervals of cr2 take the degrees of freedom of Satterthwaite (1946) as
// in Bell & McCaffrey (2002), for each coefficient c'b with d = L'c,
//
//	u_g = F_g H_g d,  D_g = d'F_g H_g F_g d,  n_g = |u_g|^2
//	df = (sum D - sum n)^2 / (sum D^2 - 2 sum D n + |sum u u'|_F^2)
//
// cr3 takes G - 1. An eigenvalue 1 is a direction of the terms that lives in one
// cluster: its score is zero, and it is left out of F_g. A coefficient of which
// that direction decides a share has neither error nor p.
//
// The combinations of single restrictions have degrees of freedom of their own.
//
// Time O(G (m^3 + K m^2)) for K coefficients and combinations of rank m, memory
// O(K m^2).
type adjusted struct {
	x    *solution
	b    []float64 // P x m, M = B B' in internal columns
	m    int
	k    int       // coefficients, and combinations after them
	d    []float64 // m x K, column j is L'c_j
	size []float64 // K, c_j'M c_j
	lone []bool    // K

	clusters int64
	failed   bool      // an eigenvalue problem did not converge
	v2, v3   []float64 // m x m
	// For the degrees of freedom, by coefficient: sum d'H d = sum D - sum n,
	// sum D (d'H d - n) = sum D^2 - 2 sum D n, and sum u u' (lower triangle).
	sumDy, rest []float64
	uu          [][]float64

	// Of the present cluster: B'A B and what makes it, t = L's, F t of cr2 and cr3,
	// H d, d'H d, F H d, and room for powers.
	h, half, t, f, g, y, dy, u, pt, py, tmp, val []float64
	eig                                          mat.EigenSym
	vec                                          mat.Dense
}

// adjusts reports whether a kind is of this family.
func adjusts(kind string) bool { return kind == "cr2" || kind == "cr3" }

// loneEigen: an eigenvalue of H_g above 1 - loneEigen is 1 but for rounding.
const loneEigen = 1e-9

// seriesBelow is the trace of H_g up to which F_g is applied by its power series.
const seriesBelow = 0.01

func newAdjusted(x *solution) *adjusted {
	b, m := x.whitener()
	k := x.k() + len(x.combos)
	floats := func(n int) []float64 { return make([]float64, n) }
	a := &adjusted{x: x, b: b, m: m, k: k, d: floats(m * k), size: floats(k), lone: make([]bool, k),
		v2: floats(m * m), v3: floats(m * m), sumDy: floats(k), rest: floats(k),
		h: floats(m * m), half: floats(len(b)), t: floats(m), f: floats(m), g: floats(m), y: floats(m * k), dy: floats(k),
		u: floats(m * k), pt: floats(m), py: floats(m * k), tmp: floats(m * k), val: floats(m)}
	half := x.e.half() // K x m
	for j := range k {
		a.uu = append(a.uu, floats(m*m))
		var row []float64
		if j < x.k() {
			row = x.wAlias[j*x.k() : (j+1)*x.k()]
		} else {
			row = x.combos[j-x.k()]
		}
		for i, c := range row {
			if c != 0 {
				for q := range m {
					a.d[q*k+j] = math.FMA(c, half[i*m+q], a.d[q*k+j])
				}
			}
		}
		for q := range m {
			a.size[j] = math.FMA(a.d[q*k+j], a.d[q*k+j], a.size[j])
		}
	}
	return a
}

// add takes in a cluster: az is the P x P matrix A_g over internal columns, s its
// score over them.
func (a *adjusted) add(az, s []float64) {
	m, k := a.m, a.k
	p := len(s)
	a.clusters++
	// H = B'A B, t = B's.
	clear(a.half)
	for i := range p {
		row := a.half[i*m : (i+1)*m]
		for j, v := range az[i*p : (i+1)*p] {
			axpy(v, a.b[j*m:(j+1)*m], row)
		}
	}
	clear(a.h)
	clear(a.t)
	for i := range p {
		row := a.b[i*m : (i+1)*m]
		axpy(s[i], row, a.t)
		for q := range m {
			axpy(row[q], a.half[i*m:(i+1)*m], a.h[q*m:(q+1)*m])
		}
	}
	trace := 0.0
	for q := range m {
		for r := range q {
			v := (a.h[q*m+r] + a.h[r*m+q]) / 2
			a.h[q*m+r], a.h[r*m+q] = v, v
		}
		trace += a.h[q*m+q]
	}
	// y = H d for all coefficients, dy = d'H d.
	clear(a.y)
	clear(a.dy)
	for q := range m {
		y := a.y[q*k : (q+1)*k]
		for r, v := range a.h[q*m : (q+1)*m] {
			axpy(v, a.d[r*k:(r+1)*k], y)
		}
		for j, d := range a.d[q*k : (q+1)*k] {
			a.dy[j] = math.FMA(d, y[j], a.dy[j])
		}
	}
	if trace <= seriesBelow {
		a.series(trace)
	} else {
		a.spectrum()
	}
	for q := range m {
		axpy(a.f[q], a.f, a.v2[q*m:(q+1)*m])
		axpy(a.g[q], a.g, a.v3[q*m:(q+1)*m])
	}
	// F^2 H^2 = F^2 H - H, so D = n + d'H d: nothing cancels.
	for j := range k {
		var n float64
		for q := range m {
			u := a.u[q*k+j]
			n = math.FMA(u, u, n)
			row := a.uu[j][q*m : (q+1)*m]
			for r := range row[:q+1] {
				row[r] = math.FMA(u, a.u[r*k+j], row[r])
			}
		}
		d := n + a.dy[j]
		a.sumDy[j] += a.dy[j]
		a.rest[j] = math.FMA(d, a.dy[j]-n, a.rest[j])
	}
}

// series applies F to t and H d by powers of H:
//
//	(I - H)^(-1/2) = sum_i c_i H^i, c_0 = 1, c_i = c_{i-1} (2i-1)/(2i)
func (a *adjusted) series(trace float64) {
	m, k := a.m, a.k
	copy(a.f, a.t)
	copy(a.g, a.t)
	copy(a.u, a.y)
	pt, py := a.pt, a.py
	copy(pt, a.t)
	copy(py, a.y)
	c, left := 1.0, 1.0
	for i := 1; ; i++ {
		if left *= trace; left < 0x1p-56 {
			return
		}
		c *= float64(2*i-1) / float64(2*i)
		a.times(pt, 1)
		a.times(py, k)
		for q := range m {
			a.f[q] = math.FMA(c, pt[q], a.f[q])
			a.g[q] += pt[q]
		}
		axpy(c, py, a.u)
	}
}

// times replaces the m x n matrix x by H x.
func (a *adjusted) times(x []float64, n int) {
	m := a.m
	out := a.tmp[:m*n]
	clear(out)
	for q := range m {
		for r, v := range a.h[q*m : (q+1)*m] {
			axpy(v, x[r*n:(r+1)*n], out[q*n:(q+1)*n])
		}
	}
	copy(x, out)
}

// spectrum applies F by the eigenvalues of H.
func (a *adjusted) spectrum() {
	m, k := a.m, a.k
	if !a.eig.Factorize(mat.NewSymDense(m, a.h), true) {
		a.failed = true
		return
	}
	a.eig.Values(a.val)
	a.eig.VectorsTo(&a.vec)
	clear(a.f)
	clear(a.g)
	clear(a.u)
	clear(a.dy)
	for e, l := range a.val {
		v := a.pt
		for q := range m {
			v[q] = a.vec.At(q, e)
		}
		on := a.tmp[:k] // v'd of each coefficient
		clear(on)
		for q := range m {
			axpy(v[q], a.d[q*k:(q+1)*k], on)
		}
		gap := 1 - l
		if gap < loneEigen {
			for j, c := range on {
				a.lone[j] = a.lone[j] || c*c > loneShare*a.size[j]
			}
			continue
		}
		root := 1 / math.Sqrt(gap)
		t := dot(v, a.t)
		axpy(root*t, v, a.f)
		axpy(t/gap, v, a.g)
		for j, c := range on {
			a.dy[j] = math.FMA(l*c, c, a.dy[j])
		}
		for q := range m {
			axpy(root*l*v[q], on, a.u[q*k:(q+1)*k])
		}
	}
}

// estimate turns the sums into the covariance of a kind.
func (a *adjusted) estimate(kind string) *estimate {
	m, k := a.m, a.x.k()
	mid := a.v2
	if kind == "cr3" {
		mid = a.v3
	}
	half := a.x.e.half()
	v := make([]float64, k*k)
	t := make([]float64, k*m)
	for i := range k {
		for q := range m {
			axpy(half[i*m+q], mid[q*m:(q+1)*m], t[i*m:(i+1)*m])
		}
	}
	for i := range k {
		for j := range i + 1 {
			s := dot(t[i*m:(i+1)*m], half[j*m:(j+1)*m])
			v[i*k+j], v[j*k+i] = s, s
		}
	}
	g := float64(a.clusters)
	r := &estimate{v: v, factor: 1, df: g - 1, noP: a.lone[:k], noSE: a.lone[:k], joint: clusterJoint(int(a.clusters))}
	if kind == "cr2" {
		r.dfs = make([]float64, k)
		for j := range k {
			r.dfs[j] = a.df(j)
		}
		for j := k; j < a.k; j++ {
			df := nan
			if !a.lone[j] {
				df = a.df(j)
			}
			r.comboDFs = append(r.comboDFs, df)
		}
	}
	return r
}

// df is Satterthwaite's for coefficient or combination j, NaN where there is none.
func (a *adjusted) df(j int) float64 {
	var norm float64
	for q := range a.m {
		row := a.uu[j][q*a.m : (q+1)*a.m]
		for _, x := range row[:q] {
			norm = math.FMA(2*x, x, norm)
		}
		norm = math.FMA(row[q], row[q], norm)
	}
	return a.sumDy[j] * a.sumDy[j] / (a.rest[j] + norm)
}
