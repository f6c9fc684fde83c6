package vcov

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/accum"
)

// apart is the part of a model whose columns are too many for a dense matrix: the
// group of categories with most columns. They are eliminated first, block by block
// (see accum.Eliminated); what is left of the other columns is an ordinary problem
// in the coordinates g of a basis, and
//
//	gamma_j = D_j^-1 a_j - G_j Q g
//
// are the coefficients of the columns of combination j, a_j their products with
// the outcome. The constant, where it is a term and the group a category without
// one level, is the coefficient of the base level: then all levels are eliminated
// and the constant is not among what is left.
//
// The influence of a row (cluster) with scores s_j in the columns of j and s in
// what is left on a coefficient sum_i c_i gamma_i of columns i of j and the base
// level 0 is
//
//	alpha_j's_j + alpha_0's_0 - u's,  alpha = c'D^-1,  u = G^-1 (c'G Q)'
//
// from which all variances below follow.
type apart struct {
	state  *accum.State
	cols   []userColumn
	base   int  // combination whose coefficient is the constant, -1
	inside bool // the group's indicators add up to the constant
	use    []int
	elim   *accum.Eliminated

	coef []contrast
	u    []float64 // for each coefficient, K numbers
}

// contrast is a coefficient as a combination of internal columns of one
// combination of levels, less the base level.
type contrast struct {
	combo  int
	weight []float64 // of the columns of combo; nil for a coefficient that is aliased
	base   float64   // of the indicator of the base level
	shift  float64   // of the constant: what the shifts of numeric terms add
}

func newApart(s *accum.State) *apart {
	return &apart{state: s, base: -1, use: make([]int, len(s.Apart.Rows))}
}

func (a *apart) group() *accum.Group { return &a.state.Groups[a.state.Apart.Group] }

// settle learns the base levels of all categories.
func (a *apart) settle(base []int) {
	s, g := a.state, a.group()
	none := s.Design.Spec.NoConstant
	if t := s.Carrier(); none && t >= 0 && s.Group(s.Design.Terms[t].Categories) == s.Apart.Group {
		a.inside = true
	}
	if c := g.Categories[0]; !none && len(g.Categories) == 1 && base[c] >= 0 {
		a.base, a.inside = base[c], true
		a.use[a.base] = 1
	}
}

// add takes in a coefficient if it belongs here.
func (a *apart) add(u userColumn) bool {
	first := len(a.state.Columns) + 1
	switch {
	case u.term < 0 && a.base >= 0:
	case u.column >= first:
		a.use[(u.column-first)/a.state.Apart.Parts] = a.state.Apart.Parts
	default:
		return false
	}
	a.cols = append(a.cols, u)
	return true
}

func (a *apart) eliminate() { a.elim = a.state.Eliminate(a.use, aliasPivot) }

// column gives the combination and part of coefficient i.
func (a *apart) column(i int) (combo, part int) {
	if a.cols[i].term < 0 {
		return a.base, 0
	}
	c := a.cols[i].column - len(a.state.Columns) - 1
	return c / a.state.Apart.Parts, c % a.state.Apart.Parts
}

// text is the term that the group's indicators are.
func (a *apart) text() string {
	s := a.state
	for i := range s.Design.Terms {
		if t := &s.Design.Terms[i]; t.Dense < 0 && len(t.Categories) > 0 && s.Group(t.Categories) == s.Apart.Group {
			return t.Text
		}
	}
	return ""
}

// holds reports whether part of an internal column lies in the group's span.
func (a *apart) holds(column int) bool {
	n := len(a.state.Columns) + 1
	whole, left := a.state.S[column*(n+1)], a.elim.S[column*(n+1)]
	return whole-left > 1e-8*whole
}

// apartAliases names the columns that depend on others of their own combination.
func (x *solution) apartAliases() {
	a := x.apart
	for i, u := range a.cols {
		combo, part := a.column(i)
		q := a.elim.Parts
		if a.elim.Kept[combo*q+part] {
			continue
		}
		al := Alias{Term: u.label, DependsOn: []string{}}
		for k, o := range a.cols[:i] {
			c, p := a.column(k)
			if c == combo && p < part && a.elim.Kept[c*q+p] && a.state.Apart.D[(c*q+p)*q+part] != 0 {
				al.DependsOn = append(al.DependsOn, o.label)
			}
		}
		x.alias = append(x.alias, al)
	}
}

// warnings says what the order of elimination meant for aliased terms.
func (a *apart) warnings(aliased bool) []Warning {
	if !aliased {
		return nil
	}
	text := a.text()
	return []Warning{{Code: "eliminated", Term: &text,
		Text: fmt.Sprintf("%s was eliminated first: where terms depend on each other, it keeps its levels and the others are aliased", text)}}
}

// apartEstimates adds the coefficients of the group apart to the estimates, and its
// part to theta.
func (x *solution) apartEstimates() {
	a, s, f, k := x.apart, x.state, x.state.Frame, x.k()
	e, n, q := a.elim, len(s.Columns)+1, a.elim.Parts
	// Residual direction: theta over the rest and v, then over the group.
	theta := x.theta[:n:n]
	for i := range e.Kept {
		x.theta = append(x.theta, -dot(e.G[i*n:(i+1)*n], theta))
	}
	// Coordinates of the fit in the terms that are kept, without the provisional
	// part: T gamma + (T - 1) offset, T = W^-1 W_alias.
	turn := x.turn()
	delta := append([]float64(nil), x.gamma...)
	if turn != nil {
		for i := range k {
			delta[i] = dot(turn[i*k:(i+1)*k], x.gamma) + dot(turn[i*k:(i+1)*k], x.offset) - x.offset[i]
		}
	}
	rest := x.expand(delta)
	if x.beside != nil {
		for i, b := range x.beside {
			rest[i] -= b
		}
	}
	gamma := make([]float64, len(e.Kept))
	for i := range gamma {
		g := e.G[i*n : (i+1)*n]
		gamma[i] = g[n-1] - dot(g[:n-1], rest)
	}
	// What the shifts of the numeric terms add to the constant.
	constant := f.YShift
	sigma := make([]float64, k)
	for i, u := range x.cols {
		if col := &s.Columns[u.column]; col.Group < 0 && col.Dense > 0 && !math.IsNaN(x.est[i]) {
			constant = math.FMA(-f.Shift[col.Dense-1], x.est[i], constant)
			axpy(f.Shift[col.Dense-1], x.wAlias[i*k:(i+1)*k], sigma)
		}
	}
	parts := a.group().Parts
	for i := range a.cols {
		combo, part := a.column(i)
		c := contrast{combo: combo}
		if e.Kept[combo*q+part] {
			c.weight = make([]float64, q)
			if part > 0 {
				c.weight[part] = f.Inv[parts[part]]
			} else {
				c.weight[0] = 1
				for p := 1; p < q; p++ {
					if e.Kept[combo*q+p] {
						c.weight[p] = -f.Shift[parts[p]] * f.Inv[parts[p]]
					}
				}
				switch {
				case a.cols[i].term >= 0 && a.base >= 0:
					c.base = -1
				case a.inside:
					c.shift = 1
				}
			}
		}
		a.coef = append(a.coef, c)
		x.est = append(x.est, nan)
		if c.weight != nil {
			v := dot(c.weight, gamma[combo*q:(combo+1)*q])
			if c.base != 0 {
				v += c.base * gamma[a.base*q]
			}
			v /= f.YInv
			if c.shift != 0 {
				v += constant
			}
			x.est[k+i] = v
		}
	}
	x.apartAliases()
	x.apartDirections(turn, sigma)
}

// turn is W^-1 W_alias; nil if no column was dropped.
func (x *solution) turn() []float64 {
	k := x.k()
	if len(x.e.drop) == 0 || k == 0 {
		return nil
	}
	var t mat.Dense
	if err := t.Solve(mat.NewDense(k, k, x.w), mat.NewDense(k, k, x.wAlias)); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			return nil
		}
	}
	return t.RawMatrix().Data
}

// apartDirections fills u.
func (x *solution) apartDirections(turn, sigma []float64) {
	a, k := x.apart, x.k()
	e, n, q := a.elim, len(x.state.Columns)+1, a.elim.Parts
	a.u = make([]float64, len(a.coef)*k)
	full, row := make([]float64, n-1), make([]float64, k)
	for i, c := range a.coef {
		if c.weight == nil || k == 0 {
			continue
		}
		clear(full)
		for p, w := range c.weight {
			g := (c.combo*q + p) * n
			axpy(w, e.G[g:g+n-1], full)
		}
		if c.base != 0 {
			g := a.base * q * n
			axpy(c.base, e.G[g:g+n-1], full)
		}
		u := a.u[i*k : (i+1)*k]
		x.projectVec(full, u)
		if turn != nil {
			clear(row)
			for j, t := range u {
				axpy(t, turn[j*k:(j+1)*k], row)
			}
			copy(u, row)
		}
		axpy(c.shift, sigma, u)
	}
	accum.TimesMatrix(a.u, x.inverse, k)
}

// alpha writes c'D^-1 for the columns of the combination.
func (a *apart) alpha(c *contrast, dst []float64) {
	q := a.elim.Parts
	clear(dst)
	for p, w := range c.weight {
		axpy(w, a.elim.Inv[(c.combo*q+p)*q:(c.combo*q+p+1)*q], dst)
	}
}

// apartMeat is the meat of an estimate where there is a group apart: products of
// scores in what is left of the other columns (K x K), within each combination,
// with those of the base level (nil if no score has both), and of the group with
// what is left (nil if they are zero). The covariance is scale times the sandwich.
type apartMeat struct {
	rest, own, base, within []float64
	scale                   float64
	gross                   []float64 // of the coefficients of the group, see apartVariances
}

// apartVariances are the variances of the coefficients of the group apart, in
// units of v and without scale; gross is the size of what was added up for each.
func (x *solution) apartVariances(m *apartMeat) (v, gross []float64) {
	a, k := x.apart, x.k()
	n, q := len(x.state.Columns)+1, a.elim.Parts
	v, gross = accum.QuadraticForms(a.u, m.rest, k), make([]float64, len(a.coef))
	if v == nil {
		v = make([]float64, len(a.coef))
	}
	alpha, full, w := make([]float64, q), make([]float64, n), make([]float64, k)
	var alpha0 float64 // of the base level's indicator, times c.base
	for i := range a.coef {
		c := &a.coef[i]
		if c.weight == nil {
			continue
		}
		a.alpha(c, alpha)
		clear(full)
		var own, cross float64
		for p, y := range alpha {
			at := c.combo*q + p
			own += y * dot(alpha, m.own[at*q:(at+1)*q])
			if m.within != nil {
				axpy(y, m.within[at*n:(at+1)*n], full)
			}
		}
		if c.base != 0 {
			at := a.base * q
			alpha0 = c.base * a.elim.Inv[at*q]
			own += alpha0 * alpha0 * m.own[at*q]
			if m.within != nil {
				axpy(alpha0, m.within[at*n:(at+1)*n], full)
			}
			if m.base != nil {
				for p, y := range alpha {
					cross += 2 * alpha0 * y * m.base[(c.combo*q+p)*q]
				}
			}
		}
		gross[i] = own + math.Abs(cross) + v[i]
		if m.within != nil && k > 0 {
			x.projectVec(full[:n-1], w)
			t := 2 * dot(w, a.u[i*k:(i+1)*k])
			gross[i] += math.Abs(t)
			cross -= t
		}
		v[i] += own + cross
	}
	return v, gross
}

// apartUnit is apartVariances for residuals of equal spread 1.
func (x *solution) apartUnit() []float64 {
	v, _ := x.apartVariances(&apartMeat{rest: x.e.g, own: x.state.Apart.D})
	return v
}

// rowMeat turns sums over rows into a meat of what is left of the other columns and
// of the group apart.
func (x *solution) rowMeat(meat []float64, b accum.Blocks) *apartMeat {
	within := x.apart.elim.Within(b)
	return &apartMeat{rest: x.project(x.apart.elim.Reduce(meat, b, within)), own: b.D, within: within, scale: 1}
}

// apartOverall is the joint test of overall for kinds whose meat is a sum over
// rows, where one more elimination gives the inverse: with A the bread's inverse,
//
//	W = u'M^-1 u - (u'M^-1 r)^2 / (r'M^-1 r),  u = A b,  r = A 1,
//
// 1 the coefficients that make the constant: it may be anything. meat is
// made of sums over rows.
func (x *solution) apartOverall(m *apartMeat) (w float64, q int, ok bool) {
	a, s, k := x.apart, x.state, x.k()
	e, n, parts := a.elim, len(s.Columns)+1, a.elim.Parts
	constant := !s.Design.Spec.NoConstant
	// What is left, kept columns only, with u and r.
	width := len(x.e.kept) + 2
	rest := make([]float64, width*width)
	u, r := make([]float64, k), make([]float64, k)
	fit := x.onKept(x.full)
	for i := range k {
		u[i] = dot(x.e.g[i*k:(i+1)*k], fit)
	}
	x.projectVec(x.sums[:n-1], r)
	for i, p := range x.e.kept {
		for j, o := range x.e.kept {
			rest[i*width+j] = m.rest[p*k+o]
		}
		rest[i*width+width-2], rest[(width-2)*width+i] = u[p], u[p]
		rest[i*width+width-1], rest[(width-1)*width+i] = r[p], r[p]
	}
	off := x.internalOffset(x.carriers())
	if a.inside {
		off[0] += s.Frame.YShift * s.Frame.YInv // B holds products with the constant
	}
	b := accum.Blocks{D: append([]float64(nil), m.own...), B: make([]float64, len(e.Kept)*width)}
	w1, products := make([]float64, k), make([]float64, parts)
	for j := range len(e.Kept) / parts {
		for p := range parts {
			i := j*parts + p
			products[p] = 0
			if !e.Kept[i] {
				// Not a column: its cells must not count.
				for o := range parts {
					b.D[i*parts+o], b.D[(j*parts+o)*parts+p] = 0, 0
				}
				continue
			}
			row := b.B[i*width : (i+1)*width]
			x.projectVec(m.within[i*n:i*n+n-1], w1)
			for t, c := range x.e.kept {
				row[t] = w1[c]
			}
			sums := s.Apart.B[i*n : (i+1)*n]
			row[width-2] = sums[n-1] + dot(sums[:n-1], off)
			row[width-1] = sums[0]
		}
	}
	use := make([]int, len(e.Kept)/parts)
	for j := range use {
		use[j] = parts
	}
	i := accum.EliminateBlocks(rest, b, parts, use, 1e-12)
	if i.Rank < e.Rank {
		return 0, 0, false
	}
	g := make([]float64, (width-2)*(width-2))
	cu, cr := make([]float64, width-2), make([]float64, width-2)
	for t := range width - 2 {
		copy(g[t*(width-2):(t+1)*(width-2)], i.S[t*width:t*width+width-2])
		cu[t], cr[t] = i.S[t*width+width-2], i.S[t*width+width-1]
	}
	el := eliminate(g, width-2, 1e-12)
	if len(el.kept) < width-2 {
		return 0, 0, false
	}
	uu := dot(cu, el.solve(cu)) - i.S[(width-2)*(width+1)]
	q = x.rank()
	if !constant {
		return uu, q, q > 0
	}
	sr := el.solve(cr)
	ur, rr := dot(cu, sr)-i.S[(width-2)*width+width-1], dot(cr, sr)-i.S[width*width-1]
	return uu - ur*ur/rr, q - 1, q > 1 && rr > 0
}

// order puts what runs over the rest and then the group apart into the order of
// the model.
func (b *basis) order() []int {
	if b.apart == nil {
		return nil
	}
	all := make([]int, b.count())
	for i := range all {
		all[i] = i
	}
	at := func(i int) (term, column int) {
		u := b.coefficient(i)
		return u.term, u.column
	}
	slices.SortStableFunc(all, func(i, j int) int {
		t, c := at(i)
		u, d := at(j)
		if t != u {
			return t - u
		}
		return c - d
	})
	return all
}

// coefficient is the i-th of all coefficients, those of the group apart last.
func (b *basis) coefficient(i int) userColumn {
	if i < len(b.cols) {
		return b.cols[i]
	}
	return b.apart.cols[i-len(b.cols)]
}

// carriers lists the columns of coefficients that add up to the constant, as
// basis.carriers does: the constant itself if it is the base level's coefficient.
func (a *apart) carriers() []int {
	switch {
	case a.base >= 0:
		return []int{0}
	case a.inside:
		first, n := a.state.GroupColumns(a.state.Apart.Group)
		var out []int
		for i := range n {
			out = append(out, first+i*a.state.Apart.Parts)
		}
		return out
	}
	return nil
}
