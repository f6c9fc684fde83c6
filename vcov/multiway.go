package vcov

import (
	"math"
	"math/bits"
	"slices"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
)

// ways is the clusterings that a multiway kind adds up: one for each non-empty set
// of its dimensions, rows being in one cluster if they agree in all of the set.
type ways struct {
	dims []int     // keys of the dimensions
	keys []int     // key of each set
	sign []float64 // +1 for sets of odd size, -1 for even
}

// waysOf lists the clusterings of a key: itself, or for a crossed key those of its
// parts. ok is false if the design lacks one.
func waysOf(d *stream.Design, key int) (w ways, ok bool) {
	dims := d.Parts[key]
	if dims == nil {
		return ways{[]int{key}, []int{key}, []float64{1}}, true
	}
	w.dims = dims
	for set := uint(1); set < 1<<len(dims); set++ {
		var parts []int
		for i, p := range dims {
			if set>>i&1 == 1 {
				parts = append(parts, p)
			}
		}
		at := parts[0]
		if len(parts) > 1 {
			at = slices.IndexFunc(d.Parts, func(p []int) bool { return slices.Equal(p, parts) })
			if at < 0 {
				return w, false
			}
		}
		w.keys = append(w.keys, at)
		w.sign = append(w.sign, float64(2*(bits.OnesCount(set)%2)-1))
	}
	return w, true
}

// multiway is the covariance when rows that agree in any of several dimensions may
// move together, by inclusion and exclusion over the non-empty sets of dimensions,
//
//	V = sum_S (-1)^(|S|+1) c_S M [ sum_g s_g s_g' ] M
//
// with g over the clusters of rows that agree in all of S, M = (X'WX)^-1 and c_S the
// factor of cr0 or cr1 with the clusters of S; t on the smallest number of clusters
// of a dimension less 1 (Cameron, Gelbach & Miller 2011; Thompson 2011).
//
// The sum need not be positive semidefinite. Negative eigenvalues are set to zero in
// coordinates in which X'WX is the identity, so that the result does not hang on
// units. clipped is the number of them; reach is the size of the largest one over the
// largest eigenvalue. A coefficient whose variance was not positive before has no
// error. Time O(2^d K^3).
func (x *solution) multiway(kind string, w ways, sums []*clusterSums) (r *estimate, clipped int, reach float64) {
	k, m := x.k(), x.rank()
	half := x.e.half() // K x m
	mid := mat.NewDense(m, m, nil)
	h := mat.NewDense(k, m, half)
	fewest := math.MaxInt
	var noP []bool
	// Effects that are swept out count in the factors of all sets or of none.
	nested := false
	for i, c := range sums {
		nested = nested || c.nested && slices.Contains(w.dims, w.keys[i])
	}
	for i, c := range sums {
		f := x.clusterFactor(kind, c.groups, nested)
		var t, s mat.Dense
		t.Mul(mat.NewDense(k, k, c.meat), h)
		s.Mul(h.T(), &t)
		s.Scale(w.sign[i]*f, &s)
		mid.Add(mid, &s)
		if slices.Contains(w.dims, w.keys[i]) {
			fewest = min(fewest, c.groups)
			if lone := x.loneClusters(c.scores); noP == nil {
				noP = lone
			} else {
				for j, l := range lone {
					noP[j] = noP[j] || l
				}
			}
		}
	}
	sym := mat.NewSymDense(m, nil)
	for i := range m {
		for j := i; j < m; j++ {
			sym.SetSym(i, j, (mid.At(i, j)+mid.At(j, i))/2)
		}
	}
	r = &estimate{factor: 1, df: float64(fewest - 1), joint: clusterJoint(fewest), noP: noP}
	before := x.backed(half, sym)
	var eig mat.EigenSym
	if !eig.Factorize(sym, true) {
		return nil, 0, 0
	}
	val := eig.Values(nil)
	most := math.Abs(val[m-1])
	for _, l := range val {
		most = max(most, math.Abs(l))
	}
	var vec mat.Dense
	eig.VectorsTo(&vec)
	fixed := mat.NewSymDense(m, nil)
	for q, l := range val {
		if l < 0 {
			if l < -1e-12*most { // below is rounding of zero
				clipped++
				reach = max(reach, -l/most)
			}
			continue
		}
		fixed.SymRankOne(fixed, l, vec.ColView(q))
	}
	r.v = before
	if clipped > 0 {
		r.v = x.backed(half, fixed)
		v := x.covariance(before)
		now := x.covariance(r.v)
		r.noSE = make([]bool, k)
		for j := range k {
			r.noSE[j] = !(v[j*k+j] > 1e-12*now[j*k+j])
		}
	}
	return r, clipped, reach
}

// backed is H E H' for the K x m matrix H.
func (x *solution) backed(half []float64, e *mat.SymDense) []float64 {
	k, m := x.k(), x.rank()
	h := mat.NewDense(k, m, half)
	var t, v mat.Dense
	t.Mul(h, e)
	v.Mul(&t, h.T())
	out := make([]float64, k*k)
	for i := range k {
		for j := range i + 1 {
			out[i*k+j], out[j*k+i] = v.At(i, j), v.At(i, j)
		}
	}
	return out
}
