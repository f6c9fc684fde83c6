package accum

import "github.com/tallrow/tallrow/accum/internal/kernel"

// denseMapWide is denseMap with twice the digits: the frames' coefficients are
// float64, but inverting a whitening and joining two of them costs digits that the
// sums have.
func denseMapWide(l *layout, from, to *Frame) []Wide {
	w, p := l.width, l.p0
	j := make([]Wide, w*w)
	if from == to {
		for i := range w {
			j[i*w+i] = Widen(1)
		}
		return j
	}
	j[0] = Widen(1)
	var back []Wide
	if from.White {
		back = InvertUpper(from.T, p)
	}
	shift := func(a, b, inv float64) Wide { return Widen(a).Sub(Widen(b)).Times(inv) }
	c := make([][]Wide, p)
	for i := range p {
		row := make([]Wide, p+1)
		r := to.Inv[i] / from.Inv[i] // powers of two
		row[0] = shift(from.Shift[i], to.Shift[i], to.Inv[i])
		if from.White {
			for a := 0; a <= i; a++ {
				row[1+a] = back[a*p+i].Times(r)
			}
		} else {
			row[1+i] = Widen(r)
		}
		c[i] = row
	}
	for k := range p {
		row := j[(1+k)*w:]
		for i := 0; i <= k; i++ {
			t := 0.0
			switch {
			case to.White:
				t = to.T[i*p+k]
			case i == k:
				t = 1
			}
			if t == 0 {
				continue
			}
			for a, x := range c[i] {
				row[a] = row[a].Add(x.Times(t))
			}
		}
	}
	r := to.YInv / from.YInv
	row := j[l.v()*w:]
	row[0] = shift(from.YShift, to.YShift, to.YInv)
	row[l.v()] = Widen(r)
	for a, h := range from.H {
		row[1+a] = Widen(h).Times(r)
	}
	for k, h := range to.H {
		for a := range p + 1 {
			row[a] = row[a].Sub(j[(1+k)*w+a].Times(h))
		}
	}
	for f, d := range l.factors {
		i := p + 2 + f
		j[i*w] = shift(from.Shift[d], to.Shift[d], to.Inv[d])
		j[i*w+i] = Widen(to.Inv[d] / from.Inv[d])
	}
	return j
}

// InvertUpper inverts an n x n upper triangle, given row by row.
func InvertUpper(a []float64, n int) []Wide {
	inv := make([]Wide, n*n)
	for j := range n {
		inv[j*n+j] = Widen(1).Div(Widen(a[j*n+j]))
		for i := j - 1; i >= 0; i-- {
			var s Wide
			for t := i + 1; t <= j; t++ {
				if x := a[i*n+t]; x != 0 {
					s = s.Add(inv[t*n+j].Times(x))
				}
			}
			inv[i*n+j] = s.Neg().Div(Widen(a[i*n+i]))
		}
	}
	return inv
}

// mapFrom is the map of the dense columns of a frame to those of the state's.
func (s *State) mapFrom(f *Frame) []float64 {
	if !s.Extended {
		return denseMap(s.lay, f, s.Frame)
	}
	j := denseMapWide(s.lay, f, s.Frame)
	out := make([]float64, len(j))
	for i, x := range j {
		out[i] = x.Float()
	}
	return out
}

// assembleWide fills Wide, and the dense part of S with its rounded values.
func (s *State) assembleWide() {
	l := s.lay
	d := l.p0 + 2
	s.Wide = make([]Wide, d*d)
	for _, e := range s.epochs {
		m := make([]Wide, d*d)
		for j := range d {
			for i := 0; i <= j; i++ {
				x := Wide{e.gram[j*(j+1)/2+i], e.gramLow[j*(j+1)/2+i]}
				m[i*d+j], m[j*d+i] = x, x
			}
		}
		if e.frame != s.Frame {
			m = congruenceWide(denseMapWide(l, e.frame, s.Frame), l.width, m, d)
		}
		for i, x := range m {
			s.Wide[i] = s.Wide[i].Add(x)
		}
	}
	at, n := s.denseAt(), len(s.Columns)+1
	for i := range d {
		for j := range d {
			s.S[at[i]*n+at[j]] = s.Wide[i*d+j].Float()
		}
	}
}

// congruenceWide returns J M J' for the leading d rows and columns of J, whose rows
// are ld long, and a symmetric M.
func congruenceWide(j []Wide, ld int, m []Wide, d int) []Wide {
	hi, lo := make([]float64, d*d), make([]float64, d*d)
	for i, x := range m {
		hi[i], lo[i] = x.Hi, x.Lo
	}
	for range 2 { // X becomes (J X)', so M becomes M J' and that J M J'
		toHi, toLo := make([]float64, d*d), make([]float64, d*d)
		for i := range d {
			for t := range d {
				if x := j[i*ld+t]; x.Hi != 0 {
					kernel.AxpyWide(x.Hi, x.Lo, hi[t*d:(t+1)*d], lo[t*d:(t+1)*d], toHi[i*d:(i+1)*d], toLo[i*d:(i+1)*d])
				}
			}
		}
		for i := range d {
			for t := range d {
				hi[t*d+i], lo[t*d+i] = toHi[i*d+t], toLo[i*d+t]
			}
		}
	}
	out := make([]Wide, d*d)
	for i := range d {
		for k := 0; k <= i; k++ {
			x := Wide{hi[i*d+k], lo[i*d+k]}
			out[i*d+k], out[k*d+i] = x, x
		}
	}
	return out
}
