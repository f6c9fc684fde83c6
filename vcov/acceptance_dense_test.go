package vcov_test

import (
	"math"
	"slices"
	"sort"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"github.com/tallrow/tallrow/stream"
)

// dense is a regression in memory: all rows, all columns, by QR of the whole
// design and the estimators' definitions.
type dense struct {
	x     [][]float64 // rows
	y, w  []float64   // w all 1 without weights
	kind  stream.WeightKind
	group []int // cluster of each row

	b            []float64
	m            *mat.Dense  // (X'WX)^-1
	l            [][]float64 // M x of each row
	e, h         []float64
	n            float64 // sum of frequency weights, else rows
	k            int
	rss, sumW    float64
	kappa, hMost float64
}

func (d *dense) solve() {
	rows := len(d.x)
	d.k = len(d.x[0])
	a := mat.NewDense(rows, d.k, nil)
	r := mat.NewDense(rows, 1, nil)
	for i := range d.x {
		s := math.Sqrt(d.w[i])
		for j, v := range d.x[i] {
			a.Set(i, j, s*v)
		}
		r.Set(i, 0, s*d.y[i])
	}
	var qr mat.QR
	qr.Factorize(a)
	d.kappa = qr.Cond()
	var b, tri, inv, q mat.Dense
	if err := qr.SolveTo(&b, false, r); err != nil {
		panic(err)
	}
	qr.RTo(&tri)
	if err := inv.Inverse(tri.Slice(0, d.k, 0, d.k)); err != nil {
		panic(err)
	}
	q.Mul(a, &inv) // the first k columns of the orthogonal factor
	d.m = mat.NewDense(d.k, d.k, nil)
	d.m.Mul(&inv, inv.T())
	d.b = mat.Col(nil, 0, &b)
	d.e, d.h, d.l = make([]float64, rows), make([]float64, rows), nil
	d.n = float64(rows)
	if d.kind == stream.Frequency {
		d.n = 0
	}
	for i, x := range d.x {
		fit := 0.0
		for j, v := range x {
			fit += v * d.b[j]
			d.h[i] += q.At(i, j) * q.At(i, j)
		}
		l := make([]float64, d.k)
		for p := range l {
			for j := range x {
				l[p] += inv.At(p, j) * q.At(i, j) / math.Sqrt(d.w[i])
			}
		}
		d.l = append(d.l, l)
		d.e[i] = d.y[i] - fit
		d.hMost = max(d.hMost, d.h[i])
		d.rss += d.w[i] * d.e[i] * d.e[i]
		d.sumW += d.w[i]
		if d.kind == stream.Frequency {
			d.n += d.w[i]
			d.h[i] /= d.w[i] // of one of the w equal rows
		}
	}
}

// outer is sum f v v' over the rows v of l: where these are M s it is M (sum f s s') M,
// with more digits left than if the meat were formed first.
func (d *dense) outer(l [][]float64, f []float64) *mat.Dense {
	out := mat.NewDense(d.k, d.k, nil)
	for i, r := range l {
		for p := range r {
			for q := range r {
				out.Set(p, q, out.At(p, q)+f[i]*r[p]*r[q])
			}
		}
	}
	return out
}

// covariance by the definitions: classical s^2 (X'WX)^-1; HC after MacKinnon and
// White (1985) with N - k; CR0 and CR1 with G/(G-1) (N-1)/(N-k) after Cameron and
// Miller (2015), doi:10.3368/jhr.50.2.317. Frequency weights are repeated rows,
// the others multiply the scores.
func (d *dense) covariance(kind string) *mat.Dense {
	k := float64(d.k)
	rows := len(d.x)
	switch kind {
	case "classical":
		var v mat.Dense
		v.Scale(d.rss/(d.n-k), d.m)
		return &v
	case "cr0", "cr1":
		sum := map[int][]float64{}
		for i, l := range d.l {
			s := sum[d.group[i]]
			if s == nil {
				s = make([]float64, d.k)
				sum[d.group[i]] = s
			}
			for j, v := range l {
				s[j] += d.w[i] * d.e[i] * v
			}
		}
		var s [][]float64
		var f []float64
		c, g := 1.0, float64(len(sum))
		if kind == "cr1" {
			c = g / (g - 1) * (d.n - 1) / (d.n - k)
		}
		for _, v := range sum {
			s, f = append(s, v), append(f, c)
		}
		return d.outer(s, f)
	}
	if kind == "cr2" || kind == "cr3" {
		return d.adjusted(kind)
	}
	f := make([]float64, rows)
	for i := range f {
		f[i] = d.w[i] * d.e[i] * d.e[i]
		if d.kind != stream.Frequency {
			f[i] *= d.w[i]
		}
		switch kind {
		case "hc1":
			f[i] *= d.n / (d.n - k)
		case "hc2":
			f[i] /= 1 - d.h[i]
		case "hc3":
			f[i] /= (1 - d.h[i]) * (1 - d.h[i])
		case "hc4", "hc4m", "hc5":
			f[i] *= math.Pow(1-d.h[i], -d.exponent(kind, d.n/k*d.h[i]))
		}
	}
	return d.outer(d.l, f)
}

// adjusted is CR2 or CR3 by the definition of Bell and McCaffrey (2002) over rows:
// scores X_g' (I - H_gg)^p e_g with p = -1/2 (symmetric root) or -1, in rows times
// the root of a precision weight; frequencies are repeated rows.
func (d *dense) adjusted(kind string) *mat.Dense {
	member := map[int][]int{}
	for i, g := range d.group {
		times := 1
		if d.kind == stream.Frequency {
			times = int(d.w[i])
		}
		for range times {
			member[g] = append(member[g], i)
		}
	}
	root := func(i int) float64 {
		if d.kind == stream.Frequency {
			return 1
		}
		return math.Sqrt(d.w[i])
	}
	var scores [][]float64
	var ones []float64
	for _, rows := range member {
		n := len(rows)
		x := mat.NewDense(n, d.k, nil)
		e := mat.NewVecDense(n, nil)
		for a, i := range rows {
			for j, v := range d.x[i] {
				x.Set(a, j, v*root(i))
			}
			e.SetVec(a, d.e[i]*root(i))
		}
		var xm, h mat.Dense
		xm.Mul(x, d.m)
		h.Mul(&xm, x.T())
		gap := mat.NewSymDense(n, nil)
		for a := range n {
			for b := range a + 1 {
				v := -(h.At(a, b) + h.At(b, a)) / 2
				if a == b {
					v++
				}
				gap.SetSym(a, b, v)
			}
		}
		var eig mat.EigenSym
		if !eig.Factorize(gap, true) {
			panic("no eigenvalues")
		}
		var vec mat.Dense
		eig.VectorsTo(&vec)
		s := make([]float64, d.k)
		for q, l := range eig.Values(nil) {
			if l < 1e-9 {
				continue // a column lives in the cluster: the pseudo-inverse
			}
			p := -0.5
			if kind == "cr3" {
				p = -1
			}
			t := math.Pow(l, p) * mat.Dot(vec.ColView(q), e)
			for a, i := range rows {
				for j, v := range d.l[i] {
					s[j] += v * root(i) * vec.At(a, q) * t
				}
			}
		}
		scores, ones = append(scores, s), append(ones, 1)
	}
	return d.outer(scores, ones)
}

// pairs is M [sum_ij k(i, j) s_i s_j'] M over all pairs of rows, s_i = w_i e_i x_i.
func (d *dense) pairs(k func(i, j int) float64) *mat.Dense {
	out := mat.NewDense(d.k, d.k, nil)
	for i, x := range d.l {
		for j, z := range d.l {
			t := k(i, j)
			if t == 0 {
				continue
			}
			t *= d.w[i] * d.e[i] * d.w[j] * d.e[j]
			for p := range d.k {
				for q := range d.k {
					out.Set(p, q, out.At(p, q)+t*x[p]*z[q])
				}
			}
		}
	}
	return out
}

// exponent of HC4 (Cribari-Neto 2004, doi:10.1016/S0167-9473(02)00366-3), HC4m
// (Cribari-Neto and da Silva 2011) and HC5 (Cribari-Neto, Souza and Vasconcellos
// 2007) for a row whose leverage is r times the mean.
func (d *dense) exponent(kind string, r float64) float64 {
	switch kind {
	case "hc4":
		return math.Min(4, r)
	case "hc4m":
		return math.Min(1, r) + math.Min(1.5, r)
	}
	most := slices.Max(d.h) * d.n / float64(d.k)
	return math.Min(r, math.Max(4, 0.7*most)) / 2
}

func (d *dense) groups() int {
	seen := map[int]bool{}
	for _, g := range d.group {
		seen[g] = true
	}
	return len(seen)
}

// sizes gives the smallest and largest cluster and the median, in rows.
func (d *dense) sizes() (least, most int64, median float64) {
	count := map[int]int64{}
	for _, g := range d.group {
		count[g]++
	}
	var c []int64
	for _, v := range count {
		c = append(c, v)
	}
	sort.Slice(c, func(i, j int) bool { return c[i] < c[j] })
	m := len(c)
	return c[0], c[m-1], float64(c[(m-1)/2]+c[m/2]) / 2
}

// r2 is centred or not, weighted.
func (d *dense) r2(centred bool) (r2, adjusted float64) {
	mean, tss := 0.0, 0.0
	free := d.n
	if centred {
		for i, y := range d.y {
			mean += d.w[i] * y / d.sumW
		}
		free--
	}
	for i, y := range d.y {
		tss += d.w[i] * (y - mean) * (y - mean)
	}
	return 1 - d.rss/tss, 1 - d.rss/tss*free/(d.n-float64(d.k))
}

// wald is b'V^-1 b over the coefficients from the given one on.
func (d *dense) wald(v *mat.Dense, from int) float64 {
	q := d.k - from
	var inv mat.Dense
	if err := inv.Inverse(v.Slice(from, d.k, from, d.k)); err != nil {
		return math.NaN()
	}
	w := 0.0
	for i := range q {
		for j := range q {
			w += d.b[from+i] * inv.At(i, j) * d.b[from+j]
		}
	}
	return w
}

// quantile of Student's t, good to about 1e-12 at these degrees of freedom.
func tQuantile(p, df float64) float64 { return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: df}.Quantile(p) }
