package vcov

import (
	"math"

	"github.com/tallrow/tallrow/accum"
)

func dot(a, b []float64) float64 {
	var s float64
	for i := range a {
		s = math.FMA(a[i], b[i], s)
	}
	return s
}

func axpy(t float64, x, y []float64) {
	if t == 0 {
		return
	}
	for i := range x {
		y[i] = math.FMA(t, x[i], y[i])
	}
}

// inverseUpper inverts an n x n upper triangle given row by row.
func inverseUpper(a []float64, n int) []float64 {
	inv := make([]float64, n*n)
	for i := n - 1; i >= 0; i-- {
		row := inv[i*n : (i+1)*n]
		for t := i + 1; t < n; t++ {
			axpy(a[i*n+t], inv[t*n+t:(t+1)*n], row[t:])
		}
		for j := i + 1; j < n; j++ {
			row[j] = -row[j] / a[i*n+i]
		}
		row[i] = 1 / a[i*n+i]
	}
	return inv
}

// manyColumns is the size above which products of matrices are left to tiles and
// all processors.
const manyColumns = 256

// sandwich returns A B A' for k x k matrices, B symmetric, exactly symmetric.
func sandwich(a, b []float64, k int) []float64 {
	out := make([]float64, k*k)
	if k > manyColumns {
		p := accum.RowProducts(accum.RowProducts(a, b, k), a, k)
		for i := range k {
			for j := 0; j <= i; j++ {
				out[i*k+j], out[j*k+i] = p[i*k+j], p[i*k+j]
			}
		}
		return out
	}
	t := make([]float64, k*k)
	for i := range k {
		for j, x := range a[i*k : (i+1)*k] {
			axpy(x, b[j*k:(j+1)*k], t[i*k:(i+1)*k])
		}
	}
	for i := range k {
		for j := 0; j <= i; j++ {
			x := dot(t[i*k:(i+1)*k], a[j*k:(j+1)*k])
			out[i*k+j], out[j*k+i] = x, x
		}
	}
	return out
}

// sandwichDiagonal is the diagonal of sandwich.
func sandwichDiagonal(a, b []float64, k int) []float64 {
	if k > manyColumns {
		return accum.QuadraticForms(a, b, k)
	}
	out := make([]float64, k)
	t := make([]float64, k)
	for i := range k {
		clear(t)
		row := a[i*k : (i+1)*k]
		for j, x := range row {
			axpy(x, b[j*k:(j+1)*k], t)
		}
		out[i] = dot(t, row)
	}
	return out
}

// elimination is the ordered Cholesky factorisation of a positive semidefinite
// matrix with unit-scaled diagonal, leaving out each column whose pivot is at most
// tol: it depends on the columns before it.
type elimination struct {
	k    int
	kept []int
	drop []int
	u    []float64 // upper factor over kept columns, m x m
	d    []float64 // scales: G = D U'U D on kept columns
	inv  []float64 // inverse of U, m x m
	// pivots are 1 - R^2 of each column on the kept ones before it.
	pivots []float64
	g      []float64
}

func eliminate(g []float64, k int, tol float64) *elimination {
	return eliminateGross(g, nil, k, tol)
}

// noiseShare of what was added up to form a diagonal entry is rounding.
const noiseShare = 1e-13

// eliminateGross is eliminate for a matrix whose diagonal is what is left of sums
// of size gross: what is down to rounding is no column of its own, however much of
// it the columns before leave.
func eliminateGross(g, gross []float64, k int, tol float64) *elimination {
	e := &elimination{k: k, d: make([]float64, k), pivots: make([]float64, k), g: g}
	for j := range k {
		if x := g[j*k+j]; x > 0 && (gross == nil || x > noiseShare*gross[j*k+j]) {
			e.d[j] = math.Sqrt(x)
		}
	}
	cols := make([][]float64, 0, k) // column of U for each kept column
	for j := range k {
		if e.d[j] == 0 {
			e.drop = append(e.drop, j)
			continue
		}
		c := make([]float64, len(e.kept)+1)
		s := 1.0
		for i, p := range e.kept {
			x := g[p*k+j]/e.d[p]/e.d[j] - dot(cols[i][:i], c[:i])
			c[i] = x / cols[i][i]
			s = math.FMA(-c[i], c[i], s)
		}
		e.pivots[j] = s
		if !(s > tol) || (gross != nil && s*g[j*k+j] <= noiseShare*gross[j*k+j]) {
			e.drop = append(e.drop, j)
			continue
		}
		c[len(e.kept)] = math.Sqrt(s)
		cols = append(cols, c)
		e.kept = append(e.kept, j)
	}
	m := len(e.kept)
	e.u = make([]float64, m*m)
	for j, c := range cols {
		for i, x := range c {
			e.u[i*m+j] = x
		}
	}
	e.inv = inverseUpper(e.u, m)
	return e
}

// solve returns x with G x = b on the kept columns, 0 elsewhere.
func (e *elimination) solve(b []float64) []float64 {
	m := len(e.kept)
	y := make([]float64, m)
	for i, p := range e.kept {
		s := b[p] / e.d[p]
		for t := range i {
			s = math.FMA(-e.u[t*m+i], y[t], s)
		}
		y[i] = s / e.u[i*m+i]
	}
	for i := m - 1; i >= 0; i-- {
		s := y[i]
		for t := i + 1; t < m; t++ {
			s = math.FMA(-e.u[i*m+t], y[t], s)
		}
		y[i] = s / e.u[i*m+i]
	}
	x := make([]float64, e.k)
	for i, p := range e.kept {
		x[p] = y[i] / e.d[p]
	}
	return x
}

// half returns the k x m matrix H with G^-1 = H H' on the kept columns.
func (e *elimination) half() []float64 {
	m := len(e.kept)
	h := make([]float64, e.k*m)
	for i, p := range e.kept {
		for t := i; t < m; t++ {
			h[p*m+t] = e.inv[i*m+t] / e.d[p]
		}
	}
	return h
}

// inverse returns G^-1 on the kept columns, zero elsewhere, k x k.
func (e *elimination) inverse() []float64 {
	m, k := len(e.kept), e.k
	h := e.half()
	out := make([]float64, k*k)
	if m > manyColumns {
		kept := make([]float64, 0, m*m)
		for _, i := range e.kept {
			kept = append(kept, h[i*m:(i+1)*m]...)
		}
		p := accum.RowProducts(kept, kept, m)
		for a, i := range e.kept {
			for b, j := range e.kept[:a+1] {
				out[i*k+j], out[j*k+i] = p[a*m+b], p[a*m+b]
			}
		}
		return out
	}
	for _, i := range e.kept {
		for _, j := range e.kept {
			if j <= i {
				x := dot(h[i*m:(i+1)*m], h[j*m:(j+1)*m])
				out[i*k+j], out[j*k+i] = x, x
			}
		}
	}
	return out
}
