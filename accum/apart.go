package accum

import (
	"math"

	"github.com/tallrow/tallrow/accum/internal/kernel"
)

// DenseColumns is the default of Options.Dense.
const DenseColumns = 1000

// manyColumns is the size above which products of matrices are left to tiles and
// all processors.
const manyColumns = 256

// Apart is the group of categories with most columns, whose products are kept
// apart: levels exclude each other, so all its products with itself are Parts x
// Parts blocks, one for each combination of levels.
type Apart struct {
	Group  int
	Levels [][]int32 // of each combination, as in Column
	Rows   []int64
	Parts  int // columns of each combination, as in Group.Parts
	Blocks
}

// Blocks are sums of products with the columns of the group apart. For each of
// its combinations, D holds the Parts x Parts products within and B, Parts rows of
// P+1, those with the other internal columns and v.
type Blocks struct {
	D, B []float64
}

// sums are sums of products of all internal columns and v; P+1 = n.
type sums struct {
	n, q int
	m    []float64 // n x n
	Blocks
}

func (s *State) newSums() *sums {
	n := len(s.Columns) + 1
	m := &sums{n: n, m: make([]float64, n*n)}
	if a := s.Apart; a != nil {
		m.q = a.Parts
		m.D = make([]float64, len(a.Rows)*m.q*m.q)
		m.B = make([]float64, len(a.Rows)*m.q*n)
	}
	return m
}

// add2 adds x to the products of columns i and j, both ways. Columns beyond v are
// those of the group apart.
func (m *sums) add2(i, j int, x float64) {
	if i < j {
		i, j = j, i
	}
	switch i -= m.n; {
	case i < 0:
		i += m.n
		m.m[i*m.n+j] += x
		if i != j {
			m.m[j*m.n+i] += x
		}
	case j < m.n:
		m.B[i*m.n+j] += x
	default:
		p, q := i%m.q, (j-m.n)%m.q
		at := i / m.q * m.q * m.q
		m.D[at+p*m.q+q] += x
		if p != q {
			m.D[at+q*m.q+p] += x
		}
	}
}

func (m *sums) add(o *sums) {
	for _, v := range [][2][]float64{{m.m, o.m}, {m.D, o.D}, {m.B, o.B}} {
		for i, x := range v[1] {
			v[0][i] += x
		}
	}
}

// Eliminated is the ordered elimination of the columns of the group apart, before
// all others (block Gaussian elimination). With D_j and B_j the products of the
// used columns of combination j among themselves and with the rest,
//
//	Inv_j = D_j^-1,  G_j = D_j^-1 B_j,  S = S_rest - sum_j B_j'G_j,
//
// and what is left is a least-squares problem in the rest: a row there is
// x - G_j'z, z its cells in the block of its own combination j. The coefficients
// of j are the last column of G_j less the rest's coefficients times the others.
type Eliminated struct {
	Parts int
	Inv   []float64 // for each combination Parts x Parts; zero for columns left out
	G     []float64 // for each combination Parts rows of P+1
	Kept  []bool    // for each column: used and not dependent on those before it
	Rank  int       // number of those
	S     []float64 // (P+1) x (P+1)
	n     int
}

// Eliminate eliminates the first use[j] columns of combination j of the group
// apart. A column of a combination is left out if its share after those before it
// is at most tol. Time O(J (P^2 + P Parts^2)), memory two blocks like Apart.B.
func (s *State) Eliminate(use []int, tol float64) *Eliminated {
	return EliminateBlocks(s.S, s.Apart.Blocks, s.Apart.Parts, use, tol)
}

// EliminateBlocks is Eliminate for any positive semidefinite matrix that is made
// of the square matrix rest, and blocks of parts columns each.
func EliminateBlocks(rest []float64, b Blocks, parts int, use []int, tol float64) *Eliminated {
	q, n := parts, len(b.B)/(len(use)*parts)
	e := &Eliminated{Parts: q, Inv: make([]float64, len(b.D)), G: make([]float64, len(b.B)), Kept: make([]bool, len(use)*q), n: n}
	for j, u := range use {
		e.block(j, b.D[j*q*q:(j+1)*q*q], u, tol)
	}
	e.turn(b.B)
	e.S = append([]float64(nil), rest...)
	crossBlocks(e.G, b.B, n, func(i, k int, x float64) { e.S[i*n+k] -= x })
	symmetrise(e.S, n)
	return e
}

// block inverts one block, leaving out dependent columns.
func (e *Eliminated) block(j int, d []float64, use int, tol float64) {
	q := e.Parts
	inv := e.Inv[j*q*q : (j+1)*q*q]
	if use == 0 {
		return
	}
	if q == 1 {
		if d[0] > 0 {
			inv[0] = 1 / d[0]
			e.Kept[j] = true
			e.Rank++
		}
		return
	}
	// Cholesky with unit diagonal scale; t is the inverse of the factor.
	t := make([]float64, q*q)
	u := make([]float64, q*q)
	var kept []int
	for c := range use {
		if !(d[c*q+c] > 0) {
			continue
		}
		left := d[c*q+c]
		for _, k := range kept {
			x := d[k*q+c]
			for _, i := range kept {
				if i == k {
					break
				}
				x -= u[i*q+k] * u[i*q+c]
			}
			u[k*q+c] = x / u[k*q+k]
			left = math.FMA(-u[k*q+c], u[k*q+c], left)
		}
		if !(left > tol*d[c*q+c]) {
			for _, k := range kept {
				u[k*q+c] = 0
			}
			continue
		}
		u[c*q+c] = math.Sqrt(left)
		kept = append(kept, c)
		e.Kept[j*q+c] = true
		e.Rank++
	}
	for _, c := range kept {
		t[c*q+c] = 1 / u[c*q+c]
		for i := len(kept) - 1; i >= 0; i-- {
			r := kept[i]
			if r >= c {
				continue
			}
			var x float64
			for _, k := range kept {
				if k > r && k <= c {
					x += u[r*q+k] * t[k*q+c]
				}
			}
			t[r*q+c] = -x / u[r*q+r]
		}
	}
	for i := range q {
		for k := range q {
			inv[i*q+k] = dotp(t[i*q:(i+1)*q], t[k*q:(k+1)*q])
		}
	}
}

// turn sets G = Inv B block by block.
func (e *Eliminated) turn(b []float64) {
	q, n := e.Parts, e.n
	for i := range len(e.Kept) {
		j := i / q
		for k := range q {
			if x := e.Inv[i*q+k]; x != 0 {
				kernel.Axpy(x, b[(j*q+k)*n:(j*q+k+1)*n], e.G[i*n:(i+1)*n])
			}
		}
	}
}

// Within returns, for sums m z z' of any multipliers m of the rows (a meat), the
// sums m z x' of the cells z of each combination and the rest x less what was
// eliminated: B_j - D_j G_j, Parts rows of P+1.
func (e *Eliminated) Within(b Blocks) []float64 {
	q, n := e.Parts, e.n
	out := append([]float64(nil), b.B...)
	for i := range len(e.Kept) {
		j := i / q
		for k := range q {
			if x := b.D[i*q+k]; x != 0 {
				kernel.Axpy(-x, e.G[(j*q+k)*n:(j*q+k+1)*n], out[i*n:(i+1)*n])
			}
		}
	}
	return out
}

// Reduce returns the sums m x x' of the rest x less what was eliminated, from
// those of the rest as it stands and the blocks:
// M - sum_j G_j'(B_j - D_j G_j) - sum_j B_j'G_j. within is Within(b).
func (e *Eliminated) Reduce(m []float64, b Blocks, within []float64) []float64 {
	n := e.n
	out := append([]float64(nil), m...)
	crossBlocks(e.G, within, n, func(i, k int, x float64) { out[i*n+k] -= x })
	crossBlocks(b.B, e.G, n, func(i, k int, x float64) { out[i*n+k] -= x })
	symmetrise(out, n)
	return out
}

func symmetrise(m []float64, n int) {
	for i := range n {
		for k := range i {
			x := (m[i*n+k] + m[k*n+i]) / 2
			m[i*n+k], m[k*n+i] = x, x
		}
	}
}

// crossBlocks calls sub with each element of a'b for matrices of rows of n.
func crossBlocks(a, b []float64, n int, sub func(i, k int, x float64)) {
	const rows = 256
	ca, cb := make([]float64, n*(rows+8)), make([]float64, n*(rows+8))
	out := make([]float64, n*n)
	for at := 0; at < len(a)/n; at += rows {
		m := min(rows, len(a)/n-at)
		columns(ca, a[at*n:(at+m)*n], n, m, rows+8)
		columns(cb, b[at*n:(at+m)*n], n, m, rows+8)
		kernel.Cross(out, n, ca, rows+8, n, cb, rows+8, n, m)
	}
	for i := range n {
		for k := range n {
			sub(i, k, out[i*n+k])
		}
	}
}

// columns writes m rows of n as columns stride apart.
func columns(dst, src []float64, n, m, stride int) {
	const tile = 16
	for i0 := 0; i0 < n; i0 += tile {
		for r := range m {
			row := src[r*n : (r+1)*n]
			for i := i0; i < min(n, i0+tile); i++ {
				dst[i*stride+r] = row[i]
			}
		}
	}
}

// TimesMatrix replaces each of the rows of k numbers in a by itself times the
// symmetric k x k matrix m, on all processors. Time O(rows k^2).
func TimesMatrix(a, m []float64, k int) {
	timesMatrix(a, k, k, m, func(i int, row []float64) { copy(a[i*k:], row) })
}

// RowProducts returns A B', the products of the rows of a with those of b, k numbers
// each, on all processors. Time O(rows k) for each row of a.
func RowProducts(a, b []float64, k int) []float64 {
	if k == 0 {
		return nil
	}
	const chunk = 32
	rows, cols := len(a)/k, len(b)/k
	out := make([]float64, rows*cols)
	parallel((rows+chunk-1)/chunk, func(c int) {
		at := c * chunk
		n := min(chunk, rows-at)
		kernel.Cross(out[at*cols:], cols, a[at*k:], k, n, b, k, cols, k)
	})
	return out
}

// QuadraticForms returns x'M x for each of the rows x of k numbers in a, M
// symmetric and k x k, on all processors. Time O(rows k^2).
func QuadraticForms(a, m []float64, k int) []float64 {
	if k == 0 {
		return nil
	}
	out := make([]float64, len(a)/k)
	timesMatrix(a, k, k, m, func(i int, row []float64) { out[i] = dotp(row, a[i*k:(i+1)*k]) })
	return out
}

// timesMatrix calls f, for each row of a (lda apart, k numbers), with the row times
// the symmetric k x k matrix m. Calls come from several goroutines.
func timesMatrix(a []float64, lda, k int, m []float64, f func(i int, row []float64)) {
	if k == 0 {
		return
	}
	const chunk = 32
	rows := (len(a) + lda - k) / lda
	parallel((rows+chunk-1)/chunk, func(c int) {
		at := c * chunk
		n := min(chunk, rows-at)
		out := make([]float64, n*k)
		kernel.Cross(out, k, a[at*lda:], lda, n, m, k, k, k)
		for i := range n {
			f(at+i, out[i*k:(i+1)*k])
		}
	})
}
