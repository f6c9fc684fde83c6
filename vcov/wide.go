package vcov

import (
	"math"

	"github.com/tallrow/tallrow/accum"
)

// Extended arithmetic. The factors of G are float64, which is enough to improve a
// solution by what is left of the equations, formed from sums with twice the digits
// (iterative refinement, Wilkinson 1963): each step gains as many digits as the
// condition of G leaves float64. Coefficients are then mapped back with twice the
// digits, since that cancels where terms are nearly collinear. Inverse, errors and
// tests are float64: nothing in them cancels once W and the sums are right.

// refineSteps is the number of steps of refinement; a pivot of aliasPivot gains
// some seven digits a step.
const refineSteps = 5

// moments returns Q'S Q, Q's_v and s_vv with all their digits.
func (b *basis) moments() (g, c []accum.Wide, svv accum.Wide) {
	s := b.state
	k, p := b.k(), len(s.Columns)
	n, dense := p+1, s.Numeric()+2
	at := func(i, j int) accum.Wide {
		di, dj := i, j
		if i == p {
			di = dense - 1
		}
		if j == p {
			dj = dense - 1
		}
		if (i < dense-1 || i == p) && (j < dense-1 || j == p) {
			return s.Wide[di*dense+dj]
		}
		return accum.Widen(s.S[i*n+j])
	}
	g, c = make([]accum.Wide, k*k), make([]accum.Wide, k)
	svv = at(p, p)
	if b.sel != nil {
		for i, ci := range b.sel {
			c[i] = at(ci, p)
			for j, cj := range b.sel {
				g[i*k+j] = at(ci, cj)
			}
		}
		return g, c, svv
	}
	half := make([]accum.Wide, p*k) // S Q
	v := make([]accum.Wide, p)      // s_v + S beside
	q, beside := b.wide.q, b.wide.beside
	filled := make([][]int, p) // places of a row of Q that are not zero, mostly one
	for t := range p {
		for a, x := range q[t*k : (t+1)*k] {
			if x.Hi != 0 {
				filled[t] = append(filled[t], a)
			}
		}
	}
	for i := range p {
		v[i] = at(i, p)
		for t := range p {
			if x := at(i, t); x.Hi != 0 {
				for _, a := range filled[t] {
					half[i*k+a] = half[i*k+a].Add(x.Mul(q[t*k+a]))
				}
				v[i] = v[i].Add(x.Mul(beside[t]))
			}
		}
	}
	for i, x := range beside {
		svv = svv.Add(x.Mul(at(i, p).Add(v[i])))
	}
	for t := range p {
		for _, i := range filled[t] {
			x := q[t*k+i]
			c[i] = c[i].Add(x.Mul(v[t]))
			for a, y := range half[t*k : (t+1)*k] {
				g[i*k+a] = g[i*k+a].Add(x.Mul(y))
			}
		}
	}
	return g, c, svv
}

// wideBasis is a basis that does not select columns, with all digits: C W for the
// float64 W, and the provisional fit that its float64 offset leaves.
type wideBasis struct {
	q      []accum.Wide // P x K
	beside []accum.Wide // P
}

// factorWide takes W as it was rounded and makes Q from it, Q = C W: the map to the
// coefficients is then exact, and that Q is orthonormal only to the digits of W does
// no harm.
func (b *basis) factorWide(carry []int, empty []bool) {
	s, f, k, p := b.state, b.state.Frame, b.k(), len(b.state.Columns)
	var back []accum.Wide
	if f.White {
		back = accum.InvertUpper(f.T, f.Terms)
	}
	c := make([]accum.Wide, p*k) // X = Z C
	for a, u := range b.cols {
		col := &s.Columns[u.column]
		add := func(i int, x accum.Wide) { c[i*k+a] = c[i*k+a].Add(x) }
		switch {
		case col.Group < 0 && col.Dense == 0:
			for _, i := range carry {
				add(i, accum.Widen(1))
			}
		case col.Group < 0:
			j := col.Dense - 1
			for _, i := range carry {
				add(i, accum.Widen(f.Shift[j]))
			}
			for i := 0; i <= j; i++ {
				switch {
				case s.Constant(i): // only its shift is left
				case f.White:
					add(1+i, back[i*f.Terms+j].Times(1/f.Inv[j]))
				case i == j:
					add(1+i, accum.Widen(1/f.Inv[j]))
				}
			}
		case col.Part == 0:
			add(u.column, accum.Widen(1))
		default:
			d := s.Groups[col.Group].Parts[col.Part]
			add(u.column, accum.Widen(1/f.Inv[d]))
			add(u.column-col.Part, accum.Widen(f.Shift[d]))
		}
	}
	q := make([]accum.Wide, p*k)
	for i := range p {
		for t := range k {
			if x := c[i*k+t]; x.Hi != 0 {
				for a := t; a < k; a++ { // W is an upper triangle
					if w := b.w[t*k+a]; w != 0 && !empty[a] {
						q[i*k+a] = q[i*k+a].Add(x.Times(w))
					}
				}
			}
		}
	}
	for i, x := range q {
		b.q[i] = x.Float()
	}
	b.wide = &wideBasis{q: q}
}

// besideWide is what the offset leaves of the provisional fit, exactly: it is never
// quite nothing.
func (b *basis) besideWide(off []float64) {
	k := b.k()
	rest := make([]accum.Wide, len(off))
	b.beside = make([]float64, len(off))
	for i, x := range off {
		rest[i] = accum.Widen(x)
		for a, o := range b.offset {
			rest[i] = rest[i].Sub(b.wide.q[i*k+a].Times(o))
		}
		b.beside[i] = rest[i].Float()
	}
	b.wide.beside = rest
}

// refine improves gamma, inverse and the residual sum of squares, and sets the low
// parts of gamma.
func (x *solution) refine() {
	g, c, svv := x.moments()
	k := x.k()
	w := make([]accum.Wide, k)
	for i, v := range x.gamma {
		w[i] = accum.Widen(v)
	}
	rest := make([]float64, k)
	for range refineSteps {
		for _, i := range x.e.kept {
			r := c[i]
			for _, j := range x.e.kept {
				r = r.Sub(g[i*k+j].Mul(w[j]))
			}
			rest[i] = r.Float()
		}
		for i, d := range x.e.solve(rest) {
			w[i] = w[i].Add(accum.Widen(d))
		}
	}
	x.fine = w
	for i, v := range w {
		x.gamma[i] = v.Float()
	}
	rss := svv
	for _, i := range x.e.kept {
		rss = rss.Sub(w[i].Mul(c[i]))
	}
	x.svv, x.rss = svv.Float(), max(0, rss.Float())
	x.refineInverse(g)
}

// refinePivot: above it the inverse in float64 has lost no more than two digits.
// refineTerms bounds the terms for which it is refined, at K^3 of time.
const (
	refinePivot = 1e-2
	refineTerms = 300
)

// refineInverse improves the columns of the inverse where G is not well conditioned.
func (x *solution) refineInverse(g []accum.Wide) {
	k, worst := x.k(), 1.0
	for _, j := range x.e.kept {
		worst = min(worst, x.e.pivots[j])
	}
	if worst > refinePivot || k > refineTerms {
		return
	}
	rest := make([]float64, k)
	for _, col := range x.e.kept {
		v := make([]accum.Wide, k)
		for _, i := range x.e.kept {
			v[i] = accum.Widen(x.inverse[i*k+col])
		}
		for range 2 {
			for _, i := range x.e.kept {
				var r accum.Wide
				if i == col {
					r.Hi = 1
				}
				for _, j := range x.e.kept {
					r = r.Sub(g[i*k+j].Mul(v[j]))
				}
				rest[i] = r.Float()
			}
			for i, d := range x.e.solve(rest) {
				v[i] = v[i].Add(accum.Widen(d))
			}
		}
		for _, i := range x.e.kept {
			x.inverse[i*k+col] = v[i].Float()
		}
	}
	for _, i := range x.e.kept {
		for _, j := range x.e.kept {
			if j < i {
				x.inverse[j*k+i] = x.inverse[i*k+j]
			}
		}
	}
}

// wideTheta sets theta and what it leaves off.
func (x *solution) wideTheta() {
	p, k := len(x.state.Columns), x.k()
	x.thetaLow = make([]float64, p+1)
	for i := range p {
		var t accum.Wide
		if x.sel == nil {
			t = x.wide.beside[i]
			for a, g := range x.fine {
				t = t.Sub(x.wide.q[i*k+a].Mul(g))
			}
		}
		x.theta[i], x.thetaLow[i] = t.Hi, t.Lo
	}
	for a, i := range x.sel {
		x.theta[i], x.thetaLow[i] = -x.fine[a].Hi, -x.fine[a].Lo
	}
}

// carrierRows makes the rows of W that belong to the constant anew: the shifts of
// whitened terms cancel there.
func (b *basis) carrierRows(carry, place []int) {
	s, k := b.state, b.k()
	for _, c := range carry {
		if place[c] < 0 {
			continue
		}
		sum := make([]accum.Wide, k)
		for a, u := range b.cols {
			col := &s.Columns[u.column]
			if col.Group >= 0 || col.Dense == 0 {
				continue
			}
			m := s.Frame.Shift[col.Dense-1]
			for i := range k {
				sum[i] = sum[i].Sub(accum.Widen(b.w[a*k+i]).Times(m))
			}
		}
		for a, u := range b.cols {
			if col := &s.Columns[u.column]; col.Group < 0 && col.Dense > 0 {
				b.w[place[c]*k+a] = sum[a].Float()
			}
		}
	}
}

// wideEstimates maps the solution to the coefficients with twice the digits. It
// returns false where that is not possible: W is then no exact map.
func (x *solution) wideEstimates() bool {
	k, s := x.k(), x.state
	f := s.Frame
	if x.fine == nil {
		return false
	}
	full := make([]accum.Wide, k)
	for i := range k {
		full[i] = x.fine[i].Add(accum.Widen(x.offset[i]))
	}
	for _, a := range x.e.drop {
		if x.full[a] != 0 {
			return false
		}
		for _, p := range x.e.kept {
			if x.w[a*k+p] != 0 {
				return false
			}
		}
	}
	dropped := make([]bool, k)
	for _, a := range x.e.drop {
		dropped[a] = true
	}
	est := make([]accum.Wide, k)
	for i := range k {
		if dropped[i] {
			continue
		}
		for j := range k {
			if w := x.w[i*k+j]; w != 0 {
				est[i] = est[i].Add(full[j].Times(w))
			}
		}
		est[i] = est[i].Times(1 / f.YInv)
	}
	if x.sel != nil && s.Shifted() {
		for _, c := range x.carriers() {
			for a, u := range x.cols {
				if u.column != c || dropped[a] {
					continue
				}
				v := full[a].Times(1 / f.YInv)
				for i, o := range x.cols {
					col := &s.Columns[o.column]
					switch {
					case col.Group < 0 && col.Dense > 0:
						v = v.Sub(est[i].Times(f.Shift[col.Dense-1]))
					case col.Group >= 0 && col.Part > 0 && o.column-col.Part == c:
						v = v.Sub(est[i].Times(f.Shift[s.Groups[col.Group].Parts[col.Part]]))
					}
				}
				est[a] = v
			}
		}
	}
	for i := range k {
		x.est[i] = est[i].Float()
		if dropped[i] {
			x.est[i] = math.NaN()
		}
	}
	return true
}
