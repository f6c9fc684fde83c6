package accum

import "math"

const (
	// extendBelow is the number of digits that coefficients of collinear terms must
	// keep in double arithmetic for Auto to take it.
	extendBelow = 11.0
	// extendSmallBelow is the same where the sample is the whole input: there
	// extended arithmetic costs nothing.
	extendSmallBelow = 13.0
)

// Lossy reports whether the terms are so collinear that double arithmetic would
// leave the coefficients fewer than eleven digits.
func (f *Frame) Lossy() bool { return f.White && f.Digits < extendBelow }

// NeedsExtended reports whether Auto takes extended arithmetic. It is false for a
// sample without frame.
func (s *Sample) NeedsExtended() bool {
	f := s.Frame
	if f != nil && s.Whole {
		return f.Lossy() || min(f.Digits, f.constantDigits) < extendSmallBelow
	}
	return f != nil && f.Lossy()
}

// predict sets the digits from the factorisation that made the frame: kept terms with
// orthogonal coordinates gamma, inv the inverse of their m x m triangle.
//
// Rounding is spread over rows like noise. What float64 rounds off terms (ell), in
// the rows u and v and in their sums acts on a coefficient b_j as errors of rms size
// s in the outcome would, by s root(M_jj), M = (X'X)^-1, apart from what the map from
// whitened coordinates cancels:
//
//	s = eps (8 sigma + |y'|) + sum_i |b_i| ell_i + ell_y + sigma sum_i root(n M_ii) ell_i
//
// with y' the fitted outcome, where rounding of terms disturbs X'e as well as Xb.
func (f *Frame) predict(r *frameRows, kept []int, inv, gamma []float64, ss, sigma, ymean float64, mean []float64) {
	const eps = 0x1p-53
	m := len(kept)
	f.Digits, f.constantDigits = 16, 16
	f.lowSquares, f.lowRows = r.lowSquares, r.lowRows
	if m == 0 || ss == 0 {
		return
	}
	ell := func(j int) float64 {
		if r.lowRows == 0 {
			return 0
		}
		return math.Sqrt(r.lowSquares[j] / r.lowRows)
	}
	plain := f.White && f.Cond <= carefulAbove
	var fitted float64
	for k := range m {
		t := 1.0
		if plain { // rounding of c is magnified
			t = 0
			for i := range k + 1 {
				t = math.Hypot(t, inv[i*m+k]*math.Sqrt(ss))
			}
		}
		fitted = math.Hypot(fitted, gamma[k]*t/math.Sqrt(ss))
	}
	b, root, gross := make([]float64, m), make([]float64, m), make([]float64, m)
	s := eps*(8*sigma+fitted) + ell(len(r.x))
	for a, j := range kept {
		for k := a; k < m; k++ {
			x := inv[a*m+k]
			b[a] += x * gamma[k]
			gross[a] += math.Abs(x * gamma[k])
			root[a] = math.Hypot(root[a], x)
		}
		b[a] *= f.Inv[j]
		gross[a] *= f.Inv[j]
		root[a] *= f.Inv[j]
		s += (math.Abs(b[a]) + sigma*math.Sqrt(ss)*root[a]) * ell(j)
	}
	worst, constant, size := 0.0, ymean, math.Abs(ymean)
	for a, j := range kept {
		// A coefficient that is next to nothing has no digits to keep.
		least := 1e-12 * (sigma + fitted) * f.Inv[j]
		loss := s * root[a] / math.Max(math.Abs(b[a]), least)
		if f.White {
			loss += eps * gross[a] / math.Max(math.Abs(b[a]), least)
		}
		if loss > worst {
			worst = loss
		}
		constant -= b[a] * mean[j]
		size += math.Abs(b[a] * mean[j])
	}
	f.Digits = digitsLeft(worst)
	f.constantDigits = digitsLeft(2 * eps * size / math.Max(math.Abs(constant), 1e-12*(sigma+fitted)))
	if f.White {
		// Coefficients that collinearity makes large leave little of the constant; with
		// offsets alone that is but the distance of zero from the data.
		f.Digits = min(f.Digits, f.constantDigits)
	}
}

func digitsLeft(loss float64) float64 {
	switch {
	case !(loss > 1e-16):
		return 16
	case loss >= 1:
		return 0
	}
	return -math.Log10(loss)
}

// addLow notes what the block's columns leave off.
func (r *frameRows) addLow(low [][]float64, rows int) {
	if len(low) == 0 {
		return
	}
	if r.lowSquares == nil {
		r.lowSquares = make([]float64, len(r.x)+1)
	}
	for j, x := range low {
		if x != nil {
			r.lowSquares[j] += dotp(x[:rows], x[:rows])
		}
	}
	r.lowRows += float64(rows)
}

// chooseAfter decides for Auto after the first rows of an input that cannot be
// sampled; ended says that there are no more.
func chooseAfter(l *layout, epochs []*epoch, shift, ended bool) bool {
	var n int64
	for _, e := range epochs {
		n += e.rows
	}
	s := Sample{Frame: buildFrame(previousRows(l, epochs), l.p0, shift), Whole: ended && n <= sampleRows}
	return s.NeedsExtended()
}
