package accum

import "github.com/tallrow/tallrow/accum/internal/kernel"

// denseMap returns the width x width matrix J with z_to = J z_from for the same
// row in two frames.
func denseMap(l *layout, from, to *Frame) []float64 {
	w := l.width
	if from == to {
		j := make([]float64, w*w)
		for i := range w {
			j[i*w+i] = 1
		}
		return j
	}
	every := make([]int, l.p0)
	for i := range every {
		every[i] = i
	}
	j := frameMap(l, from, l, to, every, -1)
	for f, d := range l.factors {
		i := l.p0 + 2 + f
		j[i*w] = (from.Shift[d] - to.Shift[d]) * to.Inv[d]
		j[i*w+i] = to.Inv[d] / from.Inv[d]
	}
	return j
}

// frameMap is the l.width x full.width matrix B with z' = B z for the same row: z in
// frame f of layout full, z' in frame to of layout l, whose numeric terms are terms
// from of full and whose outcome is that of full (outcome -1) or a term of it. The rows
// of factors are left zero.
func frameMap(full *layout, f *Frame, l *layout, to *Frame, from []int, outcome int) []float64 {
	w := full.width
	b := make([]float64, l.width*w)
	b[0] = 1
	var back []float64
	if f.White {
		back = invertUpper(f.T, full.p0, full.p0)
	}
	// scaled is the raw column n less shift, times inv, over (1, u) of the full frame.
	scaled := func(n int, shift, inv float64) []float64 {
		row := make([]float64, w)
		r := inv / f.Inv[n]
		row[0] = (f.Shift[n] - shift) * inv
		if f.White {
			for a := 0; a <= n; a++ {
				row[1+a] = back[a*full.p0+n] * r
			}
		} else {
			row[1+n] = r
		}
		return row
	}
	c := make([][]float64, l.p0)
	for j, n := range from {
		c[j] = scaled(n, to.Shift[j], to.Inv[j])
	}
	for k := range l.p0 {
		row := b[(1+k)*w : (2+k)*w]
		for i := 0; i <= k; i++ {
			t := 0.0
			switch {
			case to.White:
				t = to.T[i*l.p0+k]
			case i == k:
				t = 1
			}
			if t != 0 {
				for a, x := range c[i] {
					row[a] += t * x
				}
			}
		}
	}
	row := b[l.v()*w : (l.v()+1)*w]
	if outcome >= 0 {
		copy(row, scaled(outcome, to.YShift, to.YInv))
	} else {
		r := to.YInv / f.YInv
		row[0] = (f.YShift - to.YShift) * to.YInv
		row[full.v()] = r
		for a, h := range f.H {
			row[1+a] = r * h
		}
	}
	for k, h := range to.H {
		for a := range w {
			row[a] -= h * b[(1+k)*w+a]
		}
	}
	return b
}

// congruence returns J A J' for n x n matrices.
func congruence(j, a []float64, n int) []float64 {
	t := matmul(j, a, n, false)
	return matmul(t, j, n, true)
}

// matmul returns A B or A B' for n x n matrices.
func matmul(a, b []float64, n int, transposed bool) []float64 {
	out := make([]float64, n*n)
	for i := range n {
		if transposed {
			for k := range n {
				out[i*n+k] = dotp(a[i*n:(i+1)*n], b[k*n:(k+1)*n])
			}
			continue
		}
		for t := range n {
			if x := a[i*n+t]; x != 0 {
				kernel.Axpy(x, b[t*n:(t+1)*n], out[i*n:(i+1)*n])
			}
		}
	}
	return out
}

// sparseMap lists the nonzero entries of one row of the map between the internal
// columns of two frames.
type sparseMap struct {
	col []int
	val []float64
}

// internalMap gives, for each internal column of the last frame and v, its
// combination of the columns of epoch i.
func (s *State) internalMap(i int) []sparseMap {
	l, w := s.lay, s.lay.width
	j := s.maps[i]
	at := s.denseAt()
	out := make([]sparseMap, len(s.Columns)+1)
	for a, dst := range at {
		for b, src := range at {
			if x := j[a*w+b]; x != 0 {
				out[dst].col = append(out[dst].col, src)
				out[dst].val = append(out[dst].val, x)
			}
		}
	}
	for c := range s.Columns {
		col := &s.Columns[c]
		if col.Group < 0 {
			continue
		}
		if col.Part == 0 {
			out[c] = sparseMap{[]int{c}, []float64{1}}
			continue
		}
		f := l.groups[col.Group].parts[col.Part]
		out[c] = sparseMap{[]int{c - col.Part, c}, []float64{j[f*w], j[f*w+f]}}
	}
	return out
}

// move maps the second moments of epoch i to the last frame.
func (s *State) move(i int, m *sums) *sums {
	rows := s.internalMap(i)
	n := m.n
	out := s.newSums()
	half := make([]float64, n*n)
	for r, sp := range rows {
		for k, c := range sp.col {
			kernel.Axpy(sp.val[k], m.m[c*n:(c+1)*n], half[r*n:(r+1)*n])
		}
	}
	for r, sp := range rows {
		for k, c := range sp.col {
			for q := range n {
				out.m[q*n+r] += sp.val[k] * half[q*n+c]
			}
		}
	}
	if s.Apart == nil {
		return out
	}
	// Parts of the group apart: f_to = j_0 + j_f f_from.
	l, w, q := s.lay, s.lay.width, m.q
	part := make([]float64, q*q)
	for p, f := range l.groups[s.Apart.Group].parts {
		part[p*q+p] = 1
		if p > 0 {
			part[p*q], part[p*q+p] = s.maps[i][f*w], s.maps[i][f*w+f]
		}
	}
	turned := make([]float64, q*n)
	for c := range len(s.Apart.Rows) {
		copy(out.D[c*q*q:(c+1)*q*q], congruence(part, m.D[c*q*q:(c+1)*q*q], q))
		clear(turned)
		for p := range q {
			for o := range q {
				if x := part[p*q+o]; x != 0 {
					kernel.Axpy(x, m.B[(c*q+o)*n:(c*q+o+1)*n], turned[p*n:(p+1)*n])
				}
			}
			dst := out.B[(c*q+p)*n : (c*q+p+1)*n]
			for r, sp := range rows {
				for k, from := range sp.col {
					dst[r] += sp.val[k] * turned[p*n+from]
				}
			}
		}
	}
	return out
}
