package accum

import (
	"math"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"gonum.org/v1/gonum/mat"
)

// Frame is the coordinate system in which rows are summed. With the raw dense
// columns x (numeric terms first, then factors of category products) and the
// outcome y,
//
//	c_j = (x_j - Shift_j) Inv_j
//	u_j = sum_{i<=j} T_ij c_i            numeric terms only; u = c without whitening
//	v   = (y - YShift) YInv - sum_j H_j u_j
//
// so that a row is z = (1, u, v): u has about unit spread and nearly no
// correlation, v is about the residual. Sums of products of z keep digits that
// sums of raw products lose (Chan, Golub, LeVeque 1983):
// raw fourth moments can give negative variances at an offset of 1e6.
//
// Inv and YInv are powers of two and shifts have few bits, so that subtracting
// and scaling are exact for most data.
type Frame struct {
	Terms  int       // p0, numeric terms
	Shift  []float64 // p0 + factors
	Inv    []float64
	White  bool
	T      []float64 // p0 x p0, T[i*p0+j], upper triangle; nil unless White
	YShift float64
	YInv   float64
	H      []float64 // p0
	// Sample is the number of rows (or sum of weights) the frame was made of.
	Sample float64
	// Cond is the condition number of the scaled terms in those rows.
	Cond float64
	// Digits is the number of decimal digits that the coefficients would keep in
	// double arithmetic, judged by those rows; of the constant only under White.
	Digits float64

	constantDigits float64 // of the constant
	lowSquares     []float64
	lowRows        float64
}

// frameRows are rows for a frame, relative to an origin: columns one, x - one*origin
// and y - one*yOrigin, each row times the square root of its weight.
type frameRows struct {
	one     []float64
	x       [][]float64 // p0 + factors columns
	y       []float64
	origin  []float64
	yOrigin float64
	fixed   int     // the first rows stand for many and are never dropped
	spread  float64 // of the outcome's residual in an earlier frame, 0 if unknown
	// lowSquares sums the squares of what float64 leaves off each column and the
	// outcome, over lowRows rows.
	lowSquares []float64
	lowRows    float64
}

const (
	whitenAbove = 30.0  // sample condition above which terms are whitened
	dependent   = 1e-11 // R_jj / norm at or below which a column depends on earlier ones
	heavyRow    = 0.99  // leverage above which a row must not shape the frame
	worthShift  = 8.0   // mean over spread up to which a factor is not shifted
)

func newFrameRows(nx int) *frameRows {
	return &frameRows{x: make([][]float64, nx), origin: make([]float64, nx)}
}

func (r *frameRows) rows() int { return len(r.one) }

// buildFrame makes a frame with terms numeric terms. With shift false (a model
// without a constant) nothing is shifted.
func buildFrame(r *frameRows, terms int, shift bool) *Frame {
	f, lever := frameOnce(r, terms, shift)
	// A row of leverage near 1 would set the scale of all others: leave such rows
	// out of the frame, as long as they are few.
	for try := 0; try < 4; try++ {
		drop := 0
		for i, h := range lever {
			if i >= r.fixed && h > heavyRow {
				drop++
			}
		}
		if drop == 0 || drop > len(lever)/4 {
			break
		}
		keep := newFrameRows(len(r.x))
		keep.origin, keep.yOrigin, keep.fixed, keep.spread = r.origin, r.yOrigin, r.fixed, r.spread
		keep.lowSquares, keep.lowRows = r.lowSquares, r.lowRows
		for i, h := range lever {
			if i >= r.fixed && h > heavyRow {
				continue
			}
			keep.one = append(keep.one, r.one[i])
			for j := range r.x {
				keep.x[j] = append(keep.x[j], r.x[j][i])
			}
			keep.y = append(keep.y, r.y[i])
		}
		r = keep
		f, lever = frameOnce(r, terms, shift)
	}
	return f
}

func frameOnce(r *frameRows, p0 int, shift bool) (*Frame, []float64) {
	n, nx := r.rows(), len(r.x)
	f := &Frame{Terms: p0, Shift: make([]float64, nx), Inv: make([]float64, nx), YInv: 1, H: make([]float64, p0), Cond: 1}
	ss := dotp(r.one, r.one)
	f.Sample = ss
	c := make([][]float64, nx)
	mean := make([]float64, nx)
	constant := make([]bool, nx)
	for j := range nx {
		f.Shift[j], f.Inv[j], mean[j], c[j], constant[j] = centre(r.one, r.x[j], ss, r.origin[j], shift)
		// The shift of a factor costs the digits of levels with small values: it must
		// save more.
		if j >= p0 && !constant[j] && math.Abs(f.Shift[j])*f.Inv[j] <= worthShift {
			f.Shift[j] = 0
		}
	}
	if n == 0 || ss == 0 {
		return f, nil
	}

	// Orthogonalise (one, c_1 .. c_p0) in the user's order, twice for accuracy.
	type qcol struct {
		j int // -1 for the constant
		q []float64
	}
	var qs []qcol
	add := func(v []float64, coef []float64) float64 {
		for range 2 {
			for i := range qs {
				d := dotp(qs[i].q, v)
				coef[i] += d
				kernel.Axpy(-d, qs[i].q, v)
			}
		}
		return math.Sqrt(dotp(v, v))
	}
	normalised := func(v []float64, norm float64) []float64 {
		for i := range v {
			v[i] /= norm
		}
		return v
	}
	lead := 0
	if shift {
		qs = append(qs, qcol{-1, normalised(append([]float64(nil), r.one...), math.Sqrt(ss))})
		lead = 1
	}
	kept := make([]int, 0, p0)    // columns that are not dependent
	tri := make([]float64, p0*p0) // tri[a*p0+b]: c_kept[b] on q of kept[a]
	for j := range p0 {
		v := append([]float64(nil), c[j]...)
		norm := math.Sqrt(dotp(v, v))
		if len(qs) >= n || constant[j] {
			continue // what is left of a constant is rounding, not a direction
		}
		coef := make([]float64, len(qs))
		d := add(v, coef)
		// A column that is a combination of others but for the rounding of its own
		// cells is dependent too.
		ulp := 0x1p-52 * math.Abs(mean[j]) * f.Inv[j] * math.Sqrt(ss)
		if !(d > math.Max(dependent*norm, ulp)) || norm == 0 {
			continue
		}
		b := len(kept)
		for i := lead; i < len(qs); i++ {
			tri[(i-lead)*p0+b] = coef[i]
		}
		tri[b*p0+b] = d
		qs = append(qs, qcol{j, normalised(v, d)})
		kept = append(kept, j)
	}
	m := len(kept)
	lever := make([]float64, n)
	for i := range qs {
		for t, q := range qs[i].q {
			lever[t] += q * q
		}
	}

	// Outcome: shift, provisional fit, scale of what is left.
	ymean := 0.0
	if shift {
		ymean = dotp(r.one, r.y) / ss
	}
	yc := make([]float64, n)
	for i := range yc {
		yc[i] = r.y[i] - r.one[i]*ymean
	}
	ynorm := math.Sqrt(dotp(yc, yc))
	gamma := make([]float64, len(qs))
	rest := add(yc, gamma)
	if r.fixed == 0 && len(qs) >= n {
		// As many columns as rows: the fit says nothing of the spread, nor of others.
		clear(gamma)
		rest = ynorm
	}
	sd := rest / math.Sqrt(ss)
	var ymax float64
	for i, y := range r.y {
		ymax = math.Max(ymax, math.Abs(y))
		if r.one[i] != 0 {
			ymax = math.Max(ymax, math.Abs(r.yOrigin*r.one[i]))
		}
	}
	if floor := 0x1p-52 * math.Max(ymax, ynorm/math.Sqrt(ss)); sd < floor {
		sd = floor
	}
	if rest <= 1e-7*ynorm {
		sd = math.Max(sd, r.spread) // sums of squares of earlier rows cannot tell less
	}
	f.YInv = invPow2(sd)
	if shift {
		f.YShift = roundTo(r.yOrigin+ymean, sd)
	}

	// Condition of the kept columns, each scaled to norm 1.
	if m > 1 {
		s := mat.NewDense(m, m, nil)
		for b := range m {
			var norm float64
			for a := 0; a <= b; a++ {
				norm = math.Hypot(norm, tri[a*p0+b])
			}
			for a := 0; a <= b; a++ {
				s.Set(a, b, tri[a*p0+b]/norm)
			}
		}
		var svd mat.SVD
		if svd.Factorize(s, mat.SVDNone) {
			v := svd.Values(nil)
			f.Cond = v[0] / v[m-1]
		} else {
			f.Cond = math.Inf(1)
		}
	}
	f.White = m > 1 && f.Cond > whitenAbove
	root := math.Sqrt(ss)
	inv := invertUpper(tri, m, p0)
	f.predict(r, kept, inv, gamma[lead:], ss, rest/root, r.yOrigin+ymean, mean)
	if f.White {
		// Whitening magnifies what a rounded shift leaves of the mean.
		copy(f.Shift[:p0], mean[:p0])
		f.T = make([]float64, p0*p0)
		for j := range p0 {
			f.T[j*p0+j] = 1
		}
		for b, jb := range kept {
			for a, ja := range kept[:b+1] {
				f.T[ja*p0+jb] = inv[a*m+b] * root
			}
		}
		for a, j := range kept {
			f.H[j] = gamma[a+lead] / root * f.YInv
		}
		return f, lever
	}
	// Not whitened: solve the triangle for the coefficients on c.
	g := make([]float64, m)
	for a := m - 1; a >= 0; a-- {
		t := gamma[a+lead]
		for b := a + 1; b < m; b++ {
			t -= tri[a*p0+b] * g[b]
		}
		g[a] = t / tri[a*p0+a]
		f.H[kept[a]] = g[a] * f.YInv
	}
	return f, lever
}

// centre returns shift, scale, the shift before rounding, the scaled centred
// column, and whether the column is constant as far as doubles can tell.
func centre(one, x []float64, ss, origin float64, shift bool) (m, inv, exact float64, c []float64, constant bool) {
	inv = 1
	c = make([]float64, len(x))
	if ss == 0 {
		return 0, inv, 0, c, false
	}
	var mean float64
	if shift {
		mean = dotp(one, x) / ss
		var rest float64
		for i := range x {
			rest += one[i] * (x[i] - one[i]*mean)
		}
		mean += rest / ss
		exact = origin + mean
	}
	var s float64
	for i := range x {
		d := x[i] - one[i]*mean
		s += d * d
	}
	sd := math.Sqrt(s / ss)
	abs := math.Abs(origin + mean)
	if constant = sd <= constantShare*abs; constant {
		if shift {
			// Take a value that occurs, so that c is exactly zero there.
			m = origin + mean
			for i := range x {
				if one[i] == 1 {
					m = origin + x[i]
					break
				}
			}
			exact = m
		}
		inv = 1
		if abs > 0 {
			inv = invPow2(abs)
		}
	} else {
		if shift {
			m = roundTo(origin+mean, sd)
		}
		inv = invPow2(sd)
	}
	d := m - origin
	if !shift {
		d = 0
	}
	for i := range x {
		c[i] = (x[i] - one[i]*d) * inv
	}
	return m, inv, exact, c, constant
}

// constantShare of a column's size is the spread up to which it is constant.
const constantShare = 0x1p-45

// roundTo rounds m to a multiple of an eighth of the power of two below sd, so
// that x - m is exact for most columns.
func roundTo(m, sd float64) float64 {
	if sd <= 0 || math.IsInf(sd, 0) || math.IsNaN(sd) {
		return m
	}
	_, e := math.Frexp(sd)
	g := math.Ldexp(1, e-4)
	if g == 0 || math.Abs(m) > g*0x1p52 {
		return m
	}
	return math.RoundToEven(m/g) * g
}

// invPow2 returns the power of two nearest to 1/s, within the normal range.
func invPow2(s float64) float64 {
	if !(s > 0) || math.IsInf(s, 0) {
		return 1
	}
	e := int(math.Round(math.Log2(s)))
	return math.Ldexp(1, -min(max(e, -900), 900))
}

// invertUpper inverts the leading m x m upper triangle of a (row stride lda).
func invertUpper(a []float64, m, lda int) []float64 {
	inv := make([]float64, m*m)
	for j := range m {
		inv[j*m+j] = 1 / a[j*lda+j]
		for i := j - 1; i >= 0; i-- {
			var s float64
			for t := i + 1; t <= j; t++ {
				s += a[i*lda+t] * inv[t*m+j]
			}
			inv[i*m+j] = -s / a[i*lda+i]
		}
	}
	return inv
}

func dotp(a, b []float64) float64 {
	var s float64
	for i := range a {
		s = math.FMA(a[i], b[i], s)
	}
	return s
}
