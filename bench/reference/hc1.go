package reference

import (
	"fmt"
	"math"

	"golang.org/x/sync/errgroup"
	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/mat"
)

// Table is complete rows in memory: a constant, the terms, the outcome, each
// column contiguous.
type Table struct {
	Rows int
	Cols [][]float64
}

// blockRows is how many rows are worked on at once: a block of ten columns
// fits the first cache.
const blockRows = 512

// HC1 gives the estimates and their standard errors
//
//	b = A X'y,  sqrt(diag(A M A) N/(N-k)),  A = (X'X)^-1,  M = sum of e_i^2 x_i x_i'
//
// with e = y - X b (White 1980, Econometrica 48, 817-838; the factor is common
// practice). Rows are taken in blocks that fit the cache, as nothing else is
// done to keep up with the memory; each worker has a part of them. X'X as it
// stands is factored by Cholesky, so its condition is what the digits pay.
func HC1(t *Table, workers int) (beta, se []float64, err error) {
	p := len(t.Cols)
	k := p - 1
	gram := t.sum(workers, p, nil)
	var chol mat.Cholesky
	if !chol.Factorize(gram.SliceSym(0, k)) {
		return nil, nil, fmt.Errorf("X'X of %d rows is not positive definite", t.Rows)
	}
	xy := mat.NewVecDense(k, nil)
	for j := range k {
		xy.SetVec(j, gram.At(j, k))
	}
	var b mat.VecDense
	if err := chol.SolveVecTo(&b, xy); err != nil {
		return nil, nil, err
	}
	beta = b.RawVector().Data
	residual := make([]float64, p)
	for j, v := range beta {
		residual[j] = -v
	}
	residual[k] = 1
	meat := t.sum(workers, k, residual)
	var bread mat.SymDense
	if err := chol.InverseTo(&bread); err != nil {
		return nil, nil, err
	}
	var half, v mat.Dense
	half.Mul(&bread, meat)
	v.Mul(&half, &bread)
	se = make([]float64, k)
	for j := range se {
		se[j] = math.Sqrt(v.At(j, j) * float64(t.Rows) / float64(t.Rows-k))
	}
	return beta, se, nil
}

// sum adds up the outer products of the first n columns, each row first
// multiplied by its product with the vector scale, if there is one.
func (t *Table) sum(workers, n int, scale []float64) *mat.SymDense {
	parts := make([]*mat.SymDense, workers)
	var g errgroup.Group
	for w := range workers {
		g.Go(func() error {
			parts[w] = t.part(t.Rows*w/workers, t.Rows*(w+1)/workers, n, scale)
			return nil
		})
	}
	g.Wait()
	for _, s := range parts[1:] {
		parts[0].AddSym(parts[0], s)
	}
	return parts[0]
}

func (t *Table) part(from, to, n int, scale []float64) *mat.SymDense {
	p := len(t.Cols)
	block := make([]float64, p*blockRows)
	z := blas64.General{Rows: p, Stride: blockRows, Data: block}
	c := blas64.Vector{N: p, Inc: 1, Data: scale}
	e := blas64.Vector{Inc: 1, Data: make([]float64, blockRows)}
	dst := mat.NewSymDense(n, nil)
	for ; from < to; from += blockRows {
		z.Rows, z.Cols = p, min(blockRows, to-from)
		for j, c := range t.Cols {
			copy(block[j*blockRows:], c[from:from+z.Cols])
		}
		if scale != nil {
			e.N = z.Cols
			blas64.Gemv(blas.Trans, 1, z, c, 0, e)
			for j := range n {
				x := block[j*blockRows:][:z.Cols]
				for i, r := range e.Data[:z.Cols] {
					x[i] *= r
				}
			}
		}
		z.Rows = n
		blas64.Syrk(blas.NoTrans, 1, z, 1, dst.RawSymmetric())
	}
	return dst
}
