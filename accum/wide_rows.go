package accum

import "github.com/tallrow/tallrow/accum/internal/kernel"

// Arithmetic says with how many digits terms and second moments are made.
type Arithmetic uint8

// The arithmetics.
const (
	// Double is float64 throughout.
	Double Arithmetic = iota
	// Extended makes terms of + - * / and whole powers, rows in the frame, and the
	// second moments of dense columns with about 106 bits. What is summed by level
	// or cluster, and fourth moments, take those rows rounded to float64.
	Extended
	// Auto is Extended where the frame says that Double would lose digits: see
	// Frame.Digits.
	Auto
)

// wideRows is what the rows of a loader leave off float64, in extended arithmetic.
type wideRows struct {
	low     []float64 // of z
	zsLow   []float64 // of z times root weights; low itself without weights
	rootLow []float64 // of the roots
	zero    []float64
	rest    []float64 // of residuals
}

// extend makes the loader compute rows with twice the digits.
func (w *loader) extend() {
	w.eval.Extended(true)
	x := &wideRows{low: make([]float64, len(w.z)), zero: make([]float64, stride), rest: make([]float64, stride)}
	x.zsLow = x.low
	if w.root != nil {
		x.zsLow, x.rootLow = make([]float64, len(w.z)), make([]float64, stride)
	}
	w.wide = x
}

func (w *loader) lowCol(j int) []float64 { return w.wide.low[j*stride : j*stride+w.block.Rows] }

// rawLow returns what column j of the block leaves off.
func (w *loader) rawLow(j int) []float64 {
	if x := w.block.XLow[j]; x != nil {
		return x
	}
	return w.wide.zero[:w.block.Rows]
}

// placeWide is place, raw sums included, with twice the digits: shift, scale, whitening and
// provisional fit are linear maps with exactly these float64 coefficients.
func (w *loader) placeWide() {
	l, f, n := w.lay, w.frame, w.block.Rows
	centred := func(to, j int, m, inv float64) {
		kernel.ShiftScaleWide(w.col(to), w.lowCol(to), w.block.X[j][:n], w.rawLow(j), m, 0, inv)
	}
	for j := range l.p0 {
		centred(1+j, j, f.Shift[j], f.Inv[j])
	}
	for i, d := range l.factors {
		centred(l.p0+2+i, d, f.Shift[d], f.Inv[d])
	}
	if f.White {
		for j := l.p0 - 1; j >= 0; j-- {
			kernel.ScaleWide(w.col(1+j), w.lowCol(1+j), w.col(1+j), w.lowCol(1+j), f.T[j*l.p0+j])
			for i := range j {
				if t := f.T[i*l.p0+j]; t != 0 {
					kernel.AxpyWide(t, 0, w.col(1+i), w.lowCol(1+i), w.col(1+j), w.lowCol(1+j))
				}
			}
		}
	}
	v := l.v()
	centred(v, l.nx, f.YShift, f.YInv)
	for j, h := range f.H {
		if h != 0 {
			kernel.AxpyWide(-h, 0, w.col(1+j), w.lowCol(1+j), w.col(v), w.lowCol(v))
		}
	}
	for j, x := range w.block.X { // as kernel.ShiftScale adds them up
		w.sums[j] += sum4(x[:n])
	}
}

// weighWide sets dst and the low parts of the scaled rows to z times the root of
// the weight. The weight itself is a float64.
func (w *loader) weighWide(dst []float64) {
	x, n := w.wide, w.block.Rows
	for r, wt := range w.block.Weight[:n] {
		s := Widen(wt).Sqrt()
		w.root[r], x.rootLow[r] = s.Hi, s.Lo
	}
	for j := range w.lay.width {
		to, toLow := dst[j*stride:][:n], x.zsLow[j*stride:][:n]
		z, low := w.col(j), w.lowCol(j)
		for r := range to {
			p := Wide{z[r], low[r]}.Mul(Wide{w.root[r], x.rootLow[r]})
			to[r], toLow[r] = p.Hi, p.Lo
		}
	}
}

// residualsWide sets e to sum_j theta_j z_j over all internal columns, rounded once.
func (w *secondWorker) residualsWide(e []float64) {
	l, n, rp := w.lay, w.block.Rows, w.pass
	low := w.wide.rest[:n]
	copy(e, w.col(l.v()))
	copy(low, w.lowCol(l.v()))
	for j := range l.p0 + 1 {
		kernel.AxpyWide(rp.Theta[j], rp.ThetaLow[j], w.col(j), w.lowCol(j), e, low)
	}
	for g := range l.groups {
		for p, c := range l.groups[g].parts {
			z, zLow := w.col(c), w.lowCol(c)
			for r, b := range w.rowb[g][:n] {
				at := int(b) + p
				s := Wide{e[r], low[r]}.Add(Wide{rp.Theta[at], rp.ThetaLow[at]}.Mul(Wide{z[r], zLow[r]}))
				e[r], low[r] = s.Hi, s.Lo
			}
		}
	}
}
