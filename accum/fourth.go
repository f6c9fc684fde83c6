package accum

import (
	"math"

	"github.com/tallrow/tallrow/accum/internal/kernel"
)

// quartic holds the sums of all distinct products of four entries of a row
// z_0 .. z_{p-1}: C(p+3, 4) numbers, z_a z_b z_c z_d with a <= b <= c <= d. For
// each b there is a matrix of b+1 rows (a = 0 .. b) and one column for each pair
// (c, d) with b <= c <= d.
//
// With them the meat of HC0 needs no second pass (White 1980):
// sum e^2 z_a z_b = sum_cd th_c th_d sum z_a z_b z_c z_d, e = sum_c th_c z_c.
type quartic struct {
	p    int
	off  []int
	pair []float64 // products of pairs, a block's worth
	left []float64
}

// quarticRows bounds the rows summed at once, so that the pairs fit the cache.
const (
	quarticRows   = 128
	quarticStride = quarticRows + 8 // not a power of two: see stride
)

func newQuartic(p int) *quartic {
	q := &quartic{p: p, off: make([]int, p+1)}
	for b := range p {
		q.off[b+1] = q.off[b] + (b+1)*q.pairs(b)
	}
	q.pair = make([]float64, q.pairs(0)*quarticStride)
	q.left = make([]float64, p*quarticStride)
	return q
}

// size is the number of sums.
func (q *quartic) size() int { return q.off[q.p] }

// pairs is the number of pairs (c, d) with b <= c <= d < p.
func (q *quartic) pairs(b int) int { return (q.p - b) * (q.p - b + 1) / 2 }

// at returns the place of the sum of z_a z_b z_c z_d in any order.
func (q *quartic) at(a, b, c, d int) int {
	if a > b {
		a, b = b, a
	}
	if c > d {
		c, d = d, c
	}
	if a > c {
		a, c = c, a
	}
	if b > d {
		b, d = d, b
	}
	if b > c {
		b, c = c, b
	}
	n := q.p - b
	c -= b
	d -= b
	return q.off[b] + a*q.pairs(b) + c*n - c*(c-1)/2 + d - c
}

// add adds the products of rows of z (column-major, columns stride apart).
func (q *quartic) add(dst, z []float64, rows int) {
	for r := 0; r < rows; r += quarticRows {
		n := min(quarticRows, rows-r)
		k := 0
		for c := range q.p {
			zc := z[c*stride+r:]
			kernel.ScaleColumns(q.pair[k*quarticStride:], quarticStride, zc, stride, n, q.p-c, zc)
			k += q.p - c
		}
		all := q.pairs(0)
		for b := range q.p {
			kernel.ScaleColumns(q.left, quarticStride, z[r:], stride, n, b+1, z[b*stride+r:])
			np := q.pairs(b)
			kernel.Cross(dst[q.off[b]:q.off[b+1]], np, q.left, quarticStride, b+1, q.pair[(all-np)*quarticStride:], quarticStride, np, n)
		}
	}
}

// contract returns, for a, b < m, sum_cd th_c th_d Q(a,b,c,d) as a dense m x m
// matrix; with abs set, of absolute values.
func (q *quartic) contract(sums, th []float64, m int, abs bool) []float64 {
	out := make([]float64, m*m)
	for a := range m {
		for b := a; b < m; b++ {
			var s float64
			for c := range q.p {
				for d := c; d < q.p; d++ {
					t := th[c] * th[d]
					if c != d {
						t *= 2
					}
					x := sums[q.at(a, b, c, d)]
					if abs {
						t, x = math.Abs(t), math.Abs(x)
					}
					s += t * x
				}
			}
			out[a*m+b] = s
			out[b*m+a] = s
		}
	}
	return out
}
