package vcov

import (
	"fmt"
	"math"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"gonum.org/v1/gonum/mat"
)

const (
	// aliasPivot is the share of a column's sum of squares, left after the columns
	// before it, at or below which it counts as a combination of them.
	aliasPivot = 1e-9
	// nearPivot: below it a term is kept with a warning (variance inflation 1e6).
	nearPivot = 1e-6
	// perfectShare: residuals below this share of the outcome are rounding.
	perfectShare = 64 * 0x1p-52
)

// solution is the least-squares fit in the coordinates of a basis.
//
//	G g = c,  G = Q'S Q,  c = Q's_v;  b = W (g + offset) / YInv
//
// with S the internal second moments. Time O(P K^2 + K^3).
type solution struct {
	*basis
	asked
	e        *elimination
	gamma    []float64    // solution for v
	fine     []accum.Wide // gamma with twice the digits; nil in double arithmetic
	thetaLow []float64    // what theta leaves off
	full     []float64    // with the provisional fit
	wAlias   []float64    // W with aliased columns expressed by kept ones
	inverse  []float64    // G^-1
	theta    []float64    // P+1: residual direction, see accum.RowPass
	rss      float64      // units 1/YInv^2
	svv      float64
	blur     float64 // bound of the relative error that forming and solving G costs
	est      []float64
	alias    []Alias
	n        int64 // sum of frequencies, or rows
	perfect  bool
	kind     stream.WeightKind
}

func solve(b *basis) *solution {
	s := b.state
	k, p := b.k(), len(s.Columns)
	x := &solution{basis: b, kind: s.Design.Spec.WeightKind, n: s.Rows}
	if s.Design.Spec.Weight == "" {
		x.kind = stream.NoWeight
	}
	if x.kind == stream.Frequency {
		x.n = s.Freq
	}
	g := b.project(b.sums)
	v, svv := b.outcome()
	c := make([]float64, k)
	b.projectVec(v, c)
	for a, u := range b.cols {
		if col := &s.Columns[u.column]; col.Group < 0 && col.Dense > 0 && s.Constant(col.Dense-1) {
			g[a*k+a] = 0 // nothing of its own beside the constant
		}
	}
	var gross []float64
	if b.sel == nil || b.apart != nil {
		gross = b.projectAbs(absolute(s.S))
	}
	limit := gross // what cancelled in float64
	if s.Swept != nil {
		gross = b.projectAbs(absolute(s.Swept.Total))
		limit = gross
		if s.Extended {
			limit = scaled(gross, 0x1p-50)
		}
	}
	x.e = eliminateGross(g, limit, k, aliasPivot)
	for _, j := range x.e.kept {
		r := x.e.pivots[j]
		if gross != nil {
			r *= g[j*k+j] / gross[j*k+j]
		}
		x.blur = max(x.blur, 0x1p-53/r)
	}
	x.gamma = x.e.solve(c)
	x.inverse = x.e.inverse()
	x.rss = max(0, svv-dot(x.gamma, c))
	x.svv = svv
	if b.apart != nil {
		x.svv = s.S[p*(p+1)+p] // what rounding in rss is measured by
	}
	if s.Swept != nil && !s.Extended {
		x.svv = s.Swept.Total[p*(p+1)+p]
	}
	if x.extended() {
		x.refine()
		if len(s.Groups) == 0 {
			x.blur *= 0x1p-50 // the sums have twice the digits
		}
	}
	x.full = make([]float64, k)
	for i := range k {
		x.full[i] = x.gamma[i] + b.offset[i]
	}
	x.theta = append(b.expand(x.gamma), -1)
	for i := range x.theta {
		x.theta[i] = -x.theta[i]
		if i < p && b.beside != nil {
			x.theta[i] += b.beside[i]
		}
	}
	if x.extended() {
		x.wideTheta()
	}
	x.estimates()
	if b.apart != nil {
		x.apartEstimates()
	}
	// rss has an error of some eps svv: only what is below the limit with that error
	// is known to be perfect.
	x.perfect = x.rss+8*0x1p-52*x.svv <= perfectShare*perfectShare*x.outcomeSquares(false)
	return x
}

func (x *solution) rank() int {
	if x.apart != nil {
		return len(x.e.kept) + x.apart.elim.Rank
	}
	return len(x.e.kept)
}

// df is N - k, with effects that are swept out among the k.
func (x *solution) df() int64 { return x.n - int64(x.rank()) - x.swept() }

// swept is the number of effects that are swept out.
func (x *solution) swept() int64 {
	if s := x.state.Swept; s != nil {
		return s.Units
	}
	return 0
}

// outcomeSquares is the weighted sum of squares of the outcome in units 1/YInv^2,
// about its mean if centred.
func (x *solution) outcomeSquares(centred bool) float64 {
	s := x.state
	p := len(s.Columns)
	n := p + 1
	a := make([]float64, n)
	a[p] = 1
	for j, h := range s.Frame.H {
		a[1+j] = h
	}
	if !centred {
		a[0] = s.Frame.YShift * s.Frame.YInv
	}
	var q, one float64
	for i := range n {
		if a[i] != 0 {
			q += a[i] * dot(s.S[i*n:(i+1)*n], a)
		}
	}
	one = dot(s.S[:n], a)
	if !centred {
		return max(0, q)
	}
	if s.Swept != nil {
		return max(0, q) // about the means of units
	}
	if s.Shifted() || x.apart != nil {
		return max(0, q-one*one/s.S[0])
	}
	// Without shifts the mean is large: take it out of the combination, not of the
	// sum of squares. The constant is a combination t of the terms.
	c := make([]float64, x.k())
	x.projectVec(s.S[:p], c)
	for i, t := range x.expand(x.e.solve(c)) {
		a[i] -= one / s.S[0] * t
	}
	q = (one / s.S[0]) * (one / s.S[0]) * x.besideConstant()
	for i := range n {
		if a[i] != 0 {
			q += a[i] * dot(s.S[i*n:(i+1)*n], a)
		}
	}
	return max(0, q)
}

// constantSpanned reports whether the constant is a combination of the terms.
func (x *solution) constantSpanned() bool {
	s := x.state
	if !s.Design.Spec.NoConstant || s.Carrier() >= 0 || s.Swept != nil {
		return true
	}
	return x.besideConstant() <= aliasPivot*s.S[0]
}

// besideConstant is the sum of squares that regressing the constant on the terms
// leaves, 0 if that is rounding.
func (x *solution) besideConstant() float64 {
	s := x.state
	c := make([]float64, x.k())
	x.projectVec(x.sums[:len(s.Columns)], c)
	r := x.sums[0] - dot(x.e.solve(c), c)
	if r <= noiseShare*s.S[0] {
		return 0
	}
	return r
}

func (x *solution) estimates() {
	k, s := x.k(), x.state
	x.wAlias = x.w
	x.est = make([]float64, k)
	if len(x.e.drop) > 0 {
		x.aliases()
		for i := range k {
			x.est[i] = dot(x.wAlias[i*k:(i+1)*k], x.full) / s.Frame.YInv
		}
		for _, a := range x.e.drop {
			x.est[a] = math.NaN()
		}
		x.wideEstimates()
		return
	}
	if x.wideEstimates() {
		return
	}
	for i := range k {
		x.est[i] = dot(x.w[i*k:(i+1)*k], x.full) / s.Frame.YInv
	}
	if x.sel == nil || !s.Shifted() {
		return
	}
	// The constant from the means: one subtraction for each term, instead of a sum
	// over whitened coordinates that cancel.
	f := s.Frame
	for _, c := range x.carriers() {
		for a, u := range x.cols {
			if u.column != c {
				continue
			}
			v := x.full[a] / f.YInv
			for i, o := range x.cols {
				col := &s.Columns[o.column]
				switch {
				case col.Group < 0 && col.Dense > 0:
					v = math.FMA(-f.Shift[col.Dense-1], x.est[i], v)
				case col.Group >= 0 && col.Part > 0 && o.column-col.Part == c:
					v = math.FMA(-f.Shift[s.Groups[col.Group].Parts[col.Part]], x.est[i], v)
				}
			}
			x.est[a] = v
		}
	}
}

// onKept moves the part of a combination of columns that dropped ones carry to
// the kept ones on which they depend.
func (x *solution) onKept(full []float64) []float64 {
	out := append([]float64(nil), full...)
	k := x.k()
	for _, a := range x.e.drop {
		out[a] = 0
		if x.e.d[a] == 0 || full[a] == 0 {
			continue
		}
		col := make([]float64, k)
		for i := range k {
			col[i] = x.e.g[i*k+a]
		}
		axpy(full[a], x.e.solve(col), out)
	}
	return out
}

// aliases names each dropped column with the kept ones it depends on, and
// changes W so that its part of the fit goes to those.
func (x *solution) aliases() {
	k, m := x.k(), len(x.e.kept)
	g := x.e.g
	// alpha: q_a = sum alpha_i q_i on the data.
	alpha := map[int][]float64{}
	for _, a := range x.e.drop {
		col := make([]float64, k)
		if x.e.d[a] > 0 {
			for i := range k {
				col[i] = g[i*k+a]
			}
			col = x.e.solve(col)
		}
		alpha[a] = col
	}
	// Columns of the model on the kept coordinates: rho = R + alpha R_drop.
	var r mat.Dense
	if err := r.Inverse(mat.NewDense(k, k, x.w)); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			return
		}
	}
	rho := func(j int) []float64 {
		v := make([]float64, m)
		for i, p := range x.e.kept {
			v[i] = r.At(p, j)
			for _, a := range x.e.drop {
				v[i] += alpha[a][p] * r.At(a, j)
			}
		}
		return v
	}
	size := func(v []float64) float64 {
		var q float64
		for i, p := range x.e.kept {
			for t, o := range x.e.kept {
				q += v[i] * g[p*k+o] * v[t]
			}
		}
		return math.Sqrt(max(0, q))
	}
	kept := mat.NewDense(max(m, 1), max(m, 1), nil)
	norms := make([]float64, m)
	for t, p := range x.e.kept {
		v := rho(p)
		kept.SetCol(t, v)
		norms[t] = size(v)
	}
	w := append([]float64(nil), x.w...)
	for _, a := range x.e.drop {
		al := Alias{Term: x.cols[a].label, DependsOn: []string{}}
		if m > 0 {
			v := rho(a)
			var c mat.VecDense
			if err := c.SolveVec(kept, mat.NewVecDense(m, v)); err != nil {
				if _, ok := err.(mat.Condition); !ok {
					continue
				}
			}
			x.depend = append(x.depend, dependence{a, mat.Col(nil, 0, &c)})
			whole := size(v)
			if x.state.Swept != nil && whole <= 1e-9*x.sizeBefore(mat.Col(nil, a, &r)) {
				whole = 0 // it does not vary within units
			}
			for t, p := range x.e.kept {
				ct := c.AtVec(t)
				if math.Abs(ct)*norms[t] > 1e-8*whole && whole > 0 {
					al.DependsOn = append(al.DependsOn, x.cols[p].label)
				}
				axpy(ct, x.w[a*k:(a+1)*k], w[p*k:(p+1)*k])
			}
		}
		if x.apart != nil && x.apart.holds(x.cols[a].column) {
			al.DependsOn = append(al.DependsOn, x.apart.text())
		}
		clear(w[a*k : (a+1)*k])
		x.alias = append(x.alias, al)
	}
	x.wAlias = w
}

// covariance maps a covariance of g (units of v) to the coefficients.
func (x *solution) covariance(v []float64) []float64 {
	c := sandwich(x.wAlias, v, x.k())
	s := 1 / x.state.Frame.YInv
	for i := range c {
		c[i] = c[i] * s * s
	}
	return c
}

// spread maps G^-1 A G^-1 to the coefficients and returns its diagonal over the
// diagonal of the inverse: how much of each coefficient A decides.
func (x *solution) share(internal []float64, b accum.Blocks) []float64 {
	k := x.k()
	var group *apartMeat
	var meat []float64
	if x.apart != nil {
		group = x.rowMeat(internal, b)
		meat = group.rest
	} else {
		meat = x.project(internal)
	}
	v := sandwichDiagonal(x.wAlias, sandwich(x.inverse, meat, k), k)
	unit := sandwichDiagonal(x.wAlias, x.inverse, k)
	if x.apart != nil {
		more, _ := x.apartVariances(group)
		v, unit = append(v, more...), append(unit, x.apartUnit()...)
	}
	out := make([]float64, len(v))
	for j, d := range unit {
		if d > 0 {
			out[j] = v[j] / d
		}
	}
	return out
}

// whitener is the P x m matrix with G^-1 = W W' in internal columns.
func (x *solution) whitener() ([]float64, int) {
	h := x.e.half()
	m, k, p := len(x.e.kept), x.k(), len(x.state.Columns)
	out := make([]float64, p*m)
	if x.sel != nil {
		for i, c := range x.sel {
			copy(out[c*m:(c+1)*m], h[i*m:(i+1)*m])
		}
		return out, m
	}
	for i := range p {
		for a := range k {
			axpy(x.q[i*k+a], h[a*m:(a+1)*m], out[i*m:(i+1)*m])
		}
	}
	return out, m
}

// condition is the 2-norm condition number of the kept dense columns, each scaled
// to norm 1, as the sums hold them.
func (x *solution) condition() float64 {
	s := x.state
	n := len(s.Columns) + 1
	dense := 1 + s.Numeric()
	from := 0
	if !s.Shifted() {
		from = 1
	}
	var idx []int
	for c := from; c < dense; c++ {
		if s.S[c*n+c] > 0 {
			idx = append(idx, c)
		}
	}
	if len(idx) < 2 {
		return 1
	}
	// Leave out columns that depend on others.
	g := make([]float64, len(idx)*len(idx))
	for i, c := range idx {
		for j, d := range idx {
			g[i*len(idx)+j] = s.S[c*n+d]
		}
	}
	e := eliminate(g, len(idx), aliasPivot)
	m := len(e.kept)
	if m < 2 {
		return 1
	}
	sym := mat.NewSymDense(m, nil)
	for i, p := range e.kept {
		for j := i; j < m; j++ {
			q := e.kept[j]
			sym.SetSym(i, j, g[p*len(idx)+q]/e.d[p]/e.d[q])
		}
	}
	var eig mat.EigenSym
	if !eig.Factorize(sym, false) {
		return math.Inf(1)
	}
	v := eig.Values(nil)
	if v[0] <= 0 {
		return math.Inf(1)
	}
	return math.Sqrt(v[m-1] / v[0])
}

// settle calls a fit perfect whose residuals are rounding of what is left of the
// outcome in a frame that fits the data.
func (x *solution) settle() {
	x.perfect = x.perfect || x.rss <= 8*0x1p-52*x.svv
}

// needsFrame reports whether the frame fits the whole data so badly that digits
// are lost, and a pass in a frame made from all rows would save them.
func (x *solution) needsFrame() bool {
	if x.perfect || x.state.Swept != nil {
		return false // see sweepLossy
	}
	most := 1e3
	if x.state.Extended {
		most = 30 // errors are float64 and square the condition: they shall keep up
	}
	return x.condition() > most || x.svv > 1e4*x.rss
}

func (x *solution) warnings() []Warning {
	ws := append([]Warning(nil), x.notes...)
	if len(x.alias) > maxAlike {
		var names []string
		for _, a := range x.alias {
			names = append(names, a.Term)
		}
		ws = append(ws, Warning{Code: "aliased", Text: fmt.Sprintf("%s are linear combinations of others or zero in every used row%s; they have no estimate", list(names, 6),
			map[bool]string{true: " less the means of units"}[x.state.Swept != nil])})
	}
	for _, a := range x.alias {
		if len(x.alias) > maxAlike {
			break
		}
		text := fmt.Sprintf("%s is zero in every used row; it has no estimate", a.Term)
		if x.state.Swept != nil {
			text = fmt.Sprintf("%s does not vary within %s, whose effects are swept out; it has no estimate", a.Term, x.unit())
		}
		if len(a.DependsOn) > 0 {
			text = fmt.Sprintf("%s is a linear combination of %s; it has no estimate", a.Term, list(a.DependsOn, 6))
		}
		ws = append(ws, Warning{Code: "aliased", Term: ptr(a.Term), Text: text})
	}
	if x.apart != nil {
		ws = append(ws, x.apart.warnings(len(x.alias) > 0)...)
	}
	for i, p := range x.e.pivots {
		if p > aliasPivot && p < nearPivot && !x.state.Frame.White {
			ws = append(ws, Warning{Code: "nearly-aliased", Term: ptr(x.cols[i].label),
				Text: fmt.Sprintf("%s is almost a linear combination of the terms before it (share left %.1e)", x.cols[i].label, p)})
		}
	}
	return ws
}

func list(names []string, most int) string {
	s := ""
	for i, n := range names {
		switch {
		case i == most:
			return fmt.Sprintf("%s and %d more", s, len(names)-most)
		case i > 0 && i == len(names)-1:
			s += " and "
		case i > 0:
			s += ", "
		}
		s += n
	}
	return s
}

func ptr[T any](v T) *T { return &v }
