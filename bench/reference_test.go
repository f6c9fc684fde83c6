package bench

import (
	"bufio"
	"context"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
)

func referenceCases(d *dataset) []benchCase {
	t := d.table()
	return []benchCase{
		{
			name:  "what=encoding-csv+strconv",
			bytes: d.sizes["csv"],
			run:   func(context.Context) (outcome, error) { return parseCSV(d.files["csv"]) },
		},
		{
			name:  "what=gonum-in-memory",
			bytes: int64(8 * len(t.cols) * t.rows),
			run: func(context.Context) (outcome, error) {
				out, err := gonumHC1(t)
				out.rows = d.rows
				return out, err
			},
		},
	}
}

// parseCSV reads the model's fields with encoding/csv, strconv.ParseFloat and
// strconv.ParseBool, and sums the rows in which none is empty.
func parseCSV(file string) (outcome, error) {
	out := outcome{sums: make([]float64, len(dense))}
	f, err := os.Open(file)
	if err != nil {
		return out, err
	}
	defer f.Close()
	r := csv.NewReader(bufio.NewReaderSize(f, 1<<20))
	r.ReuseRecord = true
	header, err := r.Read()
	if err != nil {
		return out, err
	}
	var at []int
	for _, name := range append(slices.Clone(terms), "minutes") {
		c := slices.Index(header, name)
		if c < 0 {
			return out, fmt.Errorf("%s has no column %s", file, name)
		}
		at = append(at, c)
	}
	row := make([]float64, len(at))
rows:
	for {
		rec, err := r.Read()
		if errors.Is(err, io.EOF) {
			return out, nil
		}
		if err != nil {
			return out, err
		}
		out.rows++
		full := true
		for j, c := range at {
			switch s := rec[c]; s {
			case "":
				full = false
			case "true", "false":
				v, err := strconv.ParseBool(s)
				if err != nil {
					return out, err
				}
				row[j] = 0
				if v {
					row[j] = 1
				}
			default:
				if row[j], err = strconv.ParseFloat(s, 64); err != nil {
					return out, err
				}
			}
		}
		if !full {
			continue rows
		}
		out.used++
		for j, x := range row {
			out.sums[j] += x
		}
	}
}

// gonumHC1 gives the standard errors
//
//	sqrt(diag(A M A) N/(N-k)),  A = (X'X)^-1,  M = sum of e_i^2 x_i x_i'
//
// with e = y - X A X'y (White 1980, Econometrica 48, 817-838; the factor is
// common practice). Rows are taken in blocks that fit the cache, as nothing else
// is done to keep up with the memory.
func gonumHC1(t *table) (outcome, error) {
	p := len(t.cols)
	k := p - 1
	block := make([]float64, p*stream.BatchRows)
	z := blas64.General{Rows: p, Stride: stream.BatchRows, Data: block}
	load := func(from int) {
		z.Cols = min(stream.BatchRows, t.rows-from)
		for j, c := range t.cols {
			copy(block[j*stream.BatchRows:], c[from:from+z.Cols])
		}
	}
	gram := mat.NewSymDense(p, nil)
	for from := 0; from < t.rows; from += stream.BatchRows {
		load(from)
		blas64.Syrk(blas.NoTrans, 1, z, 1, gram.RawSymmetric())
	}
	var chol mat.Cholesky
	if !chol.Factorize(gram.SliceSym(0, k)) {
		return outcome{}, fmt.Errorf("X'X of %d rows is not positive definite", t.rows)
	}
	xy := mat.NewVecDense(k, nil)
	for j := range k {
		xy.SetVec(j, gram.At(j, k))
	}
	var beta mat.VecDense
	if err := chol.SolveVecTo(&beta, xy); err != nil {
		return outcome{}, err
	}
	meat := mat.NewSymDense(k, nil)
	minus := append(make([]float64, 0, p), beta.RawVector().Data...)
	for j := range minus {
		minus[j] = -minus[j]
	}
	c := blas64.Vector{N: p, Inc: 1, Data: append(minus, 1)}
	e := blas64.Vector{Inc: 1, Data: make([]float64, stream.BatchRows)}
	for from := 0; from < t.rows; from += stream.BatchRows {
		load(from)
		e.N = z.Cols
		blas64.Gemv(blas.Trans, 1, z, c, 0, e)
		for j := range k {
			x := block[j*stream.BatchRows:][:z.Cols]
			for i, r := range e.Data[:z.Cols] {
				x[i] *= r
			}
		}
		x := z
		x.Rows = k
		blas64.Syrk(blas.NoTrans, 1, x, 1, meat.RawSymmetric())
	}
	var bread mat.SymDense
	if err := chol.InverseTo(&bread); err != nil {
		return outcome{}, err
	}
	var half, v mat.Dense
	half.Mul(&bread, meat)
	v.Mul(&half, &bread)
	out := outcome{used: int64(t.rows), se: make([]float64, k)}
	for j := range out.se {
		out.se[j] = math.Sqrt(v.At(j, j) * float64(t.rows) / float64(t.rows-k))
	}
	return out, nil
}
