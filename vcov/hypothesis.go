package vcov

import (
	"cmp"
	"fmt"
	"maps"
	"math"
	"math/big"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov/internal/tail"
)

// A hypothesis is q independent linear restrictions R b = r, tested under each kind
// of errors by
//
//	W = (R b - r)' (R V R')^-1 (R b - r)
//
// (Wald 1943). Under kinds with t on N - k, F = W/q on (q, N - k), which under the
// classical covariance is the F of the restricted sum of squares; under clusters
// (G-q)/((G-1) q) W on (q, G-q), none for q > G-1. A single restriction is also
// estimated: R b with error, t and interval on the kind's own degrees of freedom,
// those of Satterthwaite (1946) for that combination under cr2.
//
// Restrictions are numbers as written, so which of them follow from others, or
// contradict them, is decided exactly, and R is brought to reduced echelon form: the
// result does not depend on how a hypothesis is put. That is done, exactly too, over
// coefficients about the shifts of the frame, and R V R' is formed in solved
// coordinates: terms far from zero cost no digits.
type hypothesis struct {
	text   string
	rows   [][]float64 // q x K: R over coefficients about the shifts, independent
	values []float64   // r
	combos [][]float64 // q x K: R b = combo (g + offset) / YInv
	touch  []int       // coefficients that R reads
	only   float64     // R if it reads a single one
	why    string      // why there is no test under any kind
	single int         // place in solution.combos, -1 if q > 1
}

// asked is what a solution holds for the hypotheses that were asked for.
type asked struct {
	hypotheses []*hypothesis
	combos     [][]float64  // of single restrictions, see combination
	depend     []dependence // of the aliased columns, where it could be solved for
	judged     *estimate    // that the last Errors entry was made from
}

// dependence says how a dropped column is made of the kept ones.
type dependence struct {
	column int
	on     []float64 // over elimination.kept
}

// sparseRow is a restriction by coefficient.
type sparseRow[K cmp.Ordered] map[K]*big.Rat

// echelon brings restrictions to reduced echelon form: redundant are those that
// follow from the ones before, clash is one that contradicts them, or -1.
func echelon[K cmp.Ordered](rows []sparseRow[K], values []*big.Rat) (basis []sparseRow[K], rhs []*big.Rat, redundant []int, clash int) {
	pivot := map[K]int{}
	// subtract takes t times row b from a and rhs b from the value of a.
	subtract := func(a, b sparseRow[K], va, vb, t *big.Rat) {
		for k, x := range b {
			y := new(big.Rat).Mul(t, x)
			if old := a[k]; old != nil {
				y.Sub(old, y)
			} else {
				y.Neg(y)
			}
			if y.Sign() == 0 {
				delete(a, k)
			} else {
				a[k] = y
			}
		}
		va.Sub(va, new(big.Rat).Mul(t, vb))
	}
	for i := range rows {
		row, v := maps.Clone(rows[i]), new(big.Rat).Set(values[i])
		for _, k := range slices.Sorted(maps.Keys(row)) {
			if p, ok := pivot[k]; ok {
				subtract(row, basis[p], v, rhs[p], row[k])
			}
		}
		if len(row) == 0 {
			if v.Sign() != 0 {
				return nil, nil, nil, i
			}
			redundant = append(redundant, i)
			continue
		}
		first := slices.Min(slices.Collect(maps.Keys(row)))
		by := new(big.Rat).Inv(row[first])
		for k, x := range row {
			row[k] = new(big.Rat).Mul(x, by)
		}
		v.Mul(v, by)
		for p, b := range basis {
			if t := b[first]; t != nil {
				subtract(b, row, rhs[p], v, t)
			}
		}
		pivot[first] = len(basis)
		basis, rhs = append(basis, row), append(rhs, v)
	}
	return basis, rhs, redundant, -1
}

// parseHypotheses reads the hypotheses of the options and refuses those that
// contradict themselves whatever the data.
func (o *Options) parseHypotheses(d *stream.Design) ([][]stream.Restriction, error) {
	var out [][]stream.Restriction
	for _, text := range o.Hypotheses {
		list, err := d.ParseHypothesis(text)
		if err != nil {
			return nil, err
		}
		rows, values := make([]sparseRow[string], len(list)), make([]*big.Rat, len(list))
		for i, r := range list {
			rows[i], values[i] = sparseRow[string]{}, r.Value
			for _, p := range r.Parts {
				rows[i][partKey(p)] = p.Coef
			}
		}
		if _, _, _, clash := echelon(rows, values); clash >= 0 {
			return nil, contradiction(list, clash)
		}
		out = append(out, list)
	}
	return out, nil
}

func partKey(p stream.RestrictionPart) string {
	key := fmt.Sprint(p.Term)
	for _, v := range p.Levels {
		if v == nil {
			key += "\x00*"
		} else {
			key += fmt.Sprintf("\x00%d%q", v.Bits, v.Text)
		}
	}
	return key
}

func contradiction(list []stream.Restriction, at int) error {
	if len(list) == 1 {
		return stream.Usef("hypothesis %q: it contradicts itself for the levels that occur", list[0].Text)
	}
	return stream.Usef("hypothesis %q: %s contradicts what stands before it", hypothesisText(list), list[at].Text)
}

func hypothesisText(list []stream.Restriction) string {
	texts := make([]string, len(list))
	for i, r := range list {
		texts[i] = r.Text
	}
	return strings.Join(texts, ", ")
}

// resolve puts hypotheses into the coefficients of the solution. A level that does
// not occur is a UseError.
func (x *solution) resolve(all [][]stream.Restriction) error {
	x.hypotheses, x.combos = nil, nil
	for _, list := range all {
		h, err := x.hypothesis(list)
		if err != nil {
			return err
		}
		if h.why == "" && len(h.combos) == 1 {
			h.single = len(x.combos)
			x.combos = append(x.combos, h.combos[0])
		}
		x.hypotheses = append(x.hypotheses, h)
	}
	return nil
}

func (x *solution) hypothesis(list []stream.Restriction) (*hypothesis, error) {
	h := &hypothesis{text: hypothesisText(list), single: -1}
	var rows []sparseRow[int]
	var values []*big.Rat
	var from []int // restriction of each row
	for i, r := range list {
		fixed, every := sparseRow[int]{}, []sparseRow[int]{{}}
		for _, p := range r.Parts {
			cols, err := x.columnsOf(p)
			if err != nil {
				return nil, err
			}
			if !p.Every() {
				fixed[cols[0]] = p.Coef
				continue
			}
			if every = nil; len(cols) == 0 {
				h.why = fmt.Sprintf("%s has no coefficient: it has a single level in the used rows", p.Text)
			}
			for _, c := range cols {
				every = append(every, sparseRow[int]{c: p.Coef})
			}
		}
		for _, e := range every {
			for c, t := range fixed {
				if old := e[c]; old != nil { // each(barge) = each(barge, level="canal")
					t = new(big.Rat).Add(t, old)
				}
				if e[c] = t; t.Sign() == 0 {
					delete(e, c)
				}
			}
			rows, values, from = append(rows, e), append(values, r.Value), append(from, i)
		}
	}
	basis, rhs, redundant, clash := echelon(rows, values)
	if clash >= 0 {
		return nil, contradiction(list, from[clash])
	}
	if len(basis) == 0 {
		if h.why == "" {
			h.why = "it holds whatever the coefficients are"
		}
		return h, nil
	}
	if len(basis) == 1 {
		// As it was written, so that the estimate is of what was written.
		i := 0
		for slices.Contains(redundant, i) {
			i++
		}
		basis, rhs = rows[i:i+1], values[i:i+1]
	}
	said := map[int]bool{}
	for _, i := range redundant {
		if !said[from[i]] {
			said[from[i]] = true
			x.notes = append(x.notes, Warning{Code: "redundant-restriction", Text: fmt.Sprintf("hypothesis %s: %s follows from the others, at least in part, and is not counted again", h.text, list[from[i]].Text)})
		}
	}
	for c := range x.count() {
		if slices.ContainsFunc(basis, func(b sparseRow[int]) bool { return b[c] != nil }) {
			h.touch = append(h.touch, c)
		}
	}
	if len(basis) == 1 && len(h.touch) == 1 {
		h.only, _ = basis[0][h.touch[0]].Float64()
	}
	if h.why == "" {
		h.why = x.notEstimable(basis)
	}
	if last := h.touch[len(h.touch)-1]; last >= x.k() {
		return h, x.apartHypothesis(h, rhs, last)
	}
	for i, b := range basis {
		basis[i] = x.withoutAliased(x.aboutShifts(b, -1))
	}
	if len(basis) > 1 {
		basis, rhs, _, _ = echelon(basis, rhs)
	}
	for i, b := range basis {
		if len(x.e.drop) > 0 {
			b = x.aboutShifts(x.withAliased(x.aboutShifts(b, 1)), -1)
		}
		r := make([]float64, x.k())
		v, _ := rhs[i].Float64()
		finite := !math.IsInf(v, 0)
		for c, t := range b {
			r[c], _ = t.Float64()
			finite = finite && !math.IsInf(r[c], 0)
		}
		if !finite {
			return nil, stream.Usef("hypothesis %q: its numbers leave the range of float64", h.text)
		}
		h.rows, h.values, h.combos = append(h.rows, r), append(h.values, v), append(h.combos, x.combination(r))
	}
	return h, nil
}

// apartHypothesis is a hypothesis about a coefficient of the group apart, whose
// covariances with others are not formed: it must be the only one.
func (x *solution) apartHypothesis(h *hypothesis, rhs []*big.Rat, j int) error {
	h.rows = make([][]float64, len(rhs)) // they count
	if h.only == 0 && h.why == "" {
		h.why = fmt.Sprintf("%s is one of so many levels that only single coefficients of them are tested", x.coefficient(j).label)
		if x.coefficient(j).term < 0 {
			h.why = "the constant is the base of a category of very many levels: it is tested by itself only"
		}
	}
	if h.why == "" && math.IsNaN(x.est[j]) {
		h.why = fmt.Sprintf("%s is aliased: the data do not tell it apart from the terms it depends on", x.coefficient(j).label)
	}
	v, _ := rhs[0].Float64()
	if math.IsInf(v, 0) || math.IsInf(h.only, 0) {
		return stream.Usef("hypothesis %q: its numbers leave the range of float64", h.text)
	}
	h.values = []float64{v}
	return nil
}

// columnsOf lists the coefficients that a part of a restriction stands for.
func (x *solution) columnsOf(p stream.RestrictionPart) ([]int, error) {
	if x.listed != nil {
		return x.listed.columnsOf(p)
	}
	s, d := x.state, x.state.Design
	levels := make([]int32, len(p.Levels))
	for i, v := range p.Levels {
		if levels[i] = -1; v == nil {
			continue
		}
		c := d.Terms[p.Term].Categories[i]
		for at, k := range s.Levels[c] {
			if k.KeyValue == *v {
				levels[i] = int32(at)
			}
		}
		cat := &d.Categories[c]
		if levels[i] < 0 {
			return nil, stream.Usef("hypothesis: %s: no used row has that level; levels are %s", p.Text, x.someLevels(c))
		}
		if base, ok := x.bases[cat.Text]; ok && base == x.level(c, s.Levels[c][levels[i]]) {
			return nil, stream.Usef("hypothesis: %s: %s is the base level of %s: it has no coefficient, the others are differences to it", p.Text, base, cat.Text)
		}
	}
	var out []int
	for j := range x.count() {
		u := x.coefficient(j)
		if u.term != p.Term {
			continue
		}
		match := true
		if len(levels) > 0 {
			cats := d.Terms[p.Term].Categories
			gi := s.Group(cats)
			first, _ := s.GroupColumns(gi)
			have := s.Combination(gi, (u.column-first)/len(s.Groups[gi].Parts))
			for i, want := range levels {
				match = match && (want < 0 || have[slices.Index(s.Groups[gi].Categories, cats[i])] == want)
			}
		}
		if match {
			out = append(out, j)
		}
	}
	if len(out) == 0 && !p.Every() {
		return nil, stream.Usef("hypothesis: %s: no used row has that combination of levels", p.Text)
	}
	return out, nil
}

// notEstimable says which restriction in echelon form asks for what the data cannot
// tell: an aliased coefficient apart from those it depends on. Aliased columns stand
// behind those they depend on, so that without them rows stay independent.
func (x *solution) notEstimable(rows []sparseRow[int]) string {
	for _, row := range rows {
		for _, a := range x.e.drop {
			if row[a] == nil {
				continue
			}
			left, _ := row[a].Float64()
			size := math.Abs(left)
			known := false
			for _, dep := range x.depend {
				if dep.column != a {
					continue
				}
				known = true
				for i, p := range x.e.kept {
					if t := row[p]; t != nil {
						w, _ := t.Float64()
						left -= dep.on[i] * w
						size += math.Abs(dep.on[i] * w)
					}
				}
			}
			if !known || math.Abs(left) > 1e-8*size {
				return fmt.Sprintf("%s is aliased: the data do not tell it apart from the terms it depends on", x.cols[a].label)
			}
		}
	}
	return ""
}

// quadratic is L m L' for the rows of l and a K x K matrix.
func (x *solution) quadratic(l [][]float64, m []float64) []float64 {
	k, q := x.k(), len(l)
	out := make([]float64, q*q)
	t := make([]float64, k)
	used := make([][]int, q) // most rows read few coordinates
	for i := range q {
		clear(t)
		for a, c := range l[i] {
			if c != 0 {
				used[i] = append(used[i], a)
				axpy(c, m[a*k:(a+1)*k], t)
			}
		}
		for j := range i + 1 {
			var v float64
			for _, a := range used[j] {
				v = math.FMA(t[a], l[j][a], v)
			}
			out[i*q+j], out[j*q+i] = v, v
		}
	}
	return out
}

// aboutShifts rewrites a restriction over coefficients for columns less the shifts
// of the frame (sign -1) or back (1): what the constant (or an indicator) gets, times
// the shift, leaves the columns that are shifted.
func (x *solution) aboutShifts(row sparseRow[int], sign float64) sparseRow[int] {
	row = maps.Clone(row)
	if !x.shifts() {
		return row
	}
	s := x.state
	place := map[int]int{}
	for a, u := range x.cols {
		place[u.column] = a
	}
	carry := x.carriers()
	for a, u := range x.cols {
		col := &s.Columns[u.column]
		switch {
		case col.Group < 0 && col.Dense > 0:
			for _, c := range carry {
				if from, ok := place[c]; ok {
					row.add(a, from, sign*s.Frame.Shift[col.Dense-1])
				}
			}
		case col.Group >= 0 && col.Part > 0:
			row.add(a, place[u.column-col.Part], sign*s.Frame.Shift[s.Groups[col.Group].Parts[col.Part]])
		}
	}
	return row
}

// add adds by times an entry to another one.
func (row sparseRow[K]) add(to, from K, by float64) {
	t := row[from]
	if t == nil || by == 0 {
		return
	}
	y := new(big.Rat).SetFloat64(by)
	y.Mul(y, t)
	if old := row[to]; old != nil {
		y.Add(y, old)
	}
	if row[to] = y; y.Sign() == 0 {
		delete(row, to)
	}
}

// withoutAliased leaves out aliased columns, and withAliased gives them what of the
// kept coefficients they carry.
func (x *solution) withoutAliased(row sparseRow[int]) sparseRow[int] {
	for _, a := range x.e.drop {
		delete(row, a)
	}
	return row
}

func (x *solution) withAliased(row sparseRow[int]) sparseRow[int] {
	for _, dep := range x.depend {
		for i, p := range x.e.kept {
			row.add(dep.column, p, dep.on[i])
		}
	}
	return row
}

// shifts reports whether coefficients and solved coordinates differ by shifts, and
// moves whether a column has one.
func (x *solution) shifts() bool { return x.sel != nil && x.state.Shifted() }

func (x *solution) moves(u userColumn) bool {
	col := &x.state.Columns[u.column]
	return col.Group < 0 && col.Dense > 0 || col.Group >= 0 && col.Part > 0
}

// combination turns weights r of coefficients about the shifts into weights l of the
// solved coordinates: r'b = l'(g + offset) / YInv.
func (x *solution) combination(r []float64) []float64 {
	k := x.k()
	out := make([]float64, k)
	for a, u := range x.cols {
		if x.shifts() && !x.moves(u) {
			out[a] += r[a]
		} else {
			axpy(r[a], x.w[a*k:(a+1)*k], out)
		}
	}
	return out
}

// valueOf is R b of a restriction.
func (x *solution) valueOf(h *hypothesis, i int) float64 {
	if h.only != 0 {
		return h.only * x.est[h.touch[0]]
	}
	k := x.k()
	var v float64
	for a, u := range x.cols {
		t := h.rows[i][a]
		switch {
		case t == 0:
		case x.shifts() && !x.moves(u):
			v = math.FMA(t, x.full[a]/x.state.Frame.YInv, v)
		case len(x.e.drop) == 0:
			v = math.FMA(t, x.est[a], v)
		default:
			v = math.FMA(t, dot(x.w[a*k:(a+1)*k], x.full)/x.state.Frame.YInv, v)
		}
	}
	return v
}

// test is the hypothesis under the errors e, of which r is the covariance (nil if
// there is none).
func (x *solution) test(h *hypothesis, e *Errors, r *estimate, level float64) Hypothesis {
	n := Number(nan)
	out := Hypothesis{Text: h.text, Errors: e.Name(), DF1: n, DF2: n, F: n, P: n, Estimate: n, SE: n, T: n, Low: n, High: n}
	none := func(format string, args ...any) Hypothesis {
		out.Reason = ptr(fmt.Sprintf(format, args...))
		return out
	}
	q := len(h.rows)
	if q > 0 {
		out.DF1 = Number(q)
	}
	if q == 1 && h.why == "" {
		out.Estimate = Number(x.valueOf(h, 0))
	}
	switch {
	case h.why != "":
		return none("%s", h.why)
	case e.Status != "ok" || r == nil:
		why := "it cannot be given"
		if e.Reason != nil {
			why = *e.Reason
		}
		return none("%s: %s", e.Name(), why)
	case x.perfect:
		return none("the terms give the outcome exactly: errors are 0")
	}
	for _, j := range h.touch {
		switch {
		case math.IsNaN(x.est[j]):
		case r.noSE != nil && r.noSE[j], r.noP != nil && r.noP[j]:
			return none("%s has no p by %s", x.coefficient(j).label, e.Name())
		case r.zero[j]:
			return none("%s has the error 0 by %s", x.coefficient(j).label, e.Name())
		}
	}
	if j := h.touch[0]; j >= x.k() {
		at := j
		if order := x.order(); order != nil {
			at = slices.Index(order, j)
		}
		out.single(h.values[0], math.Abs(h.only)*float64(e.SE[at]), float64(e.DF[at]), level)
		return out
	}
	v := x.quadratic(h.combos, r.v)
	floor := x.quadratic(h.combos, x.inverse)
	gross := r.gross
	if gross == nil && r.meat != nil {
		gross = absolute(r.meat)
	}
	for i, l := range h.combos {
		if v[i*q+i] <= zeroShare*x.rss/float64(x.df())*floor[i*q+i] {
			return none("its error is 0 by %s", e.Name())
		}
		if gross != nil && r.factor*x.rounding(gross, l) > lossRefuse*v[i*q+i] {
			return none("what forms its error cancels by %s", e.Name())
		}
	}
	unit := x.state.Frame.YInv
	if q == 1 {
		se := math.Sqrt(v[0]) / unit
		df := x.combinationDF(h, r)
		if !(df > 0) {
			return none("it has no degrees of freedom by %s", e.Name())
		}
		out.single(h.values[0], se, df, level)
		return out
	}
	d := make([]float64, q)
	for i := range d {
		d[i] = x.valueOf(h, i) - h.values[i]
	}
	el := eliminate(v, q, 1e-12)
	if len(el.kept) < q {
		if _, _, ok, reason := r.joint(1, q); !ok {
			return none("%s", reason)
		}
		return none("the covariance by %s is singular for these restrictions", e.Name())
	}
	for i := range d {
		d[i] *= unit
	}
	f, df2, ok, reason := r.joint(dot(d, el.solve(d)), q)
	if !ok {
		return none("%s", reason)
	}
	p, _ := tail.F(f, float64(q), df2)
	out.DF2, out.F, out.P = Number(df2), Number(f), Number(p)
	return out
}

// single fills in the t test of the estimate against value.
func (h *Hypothesis) single(value, se, df, level float64) {
	t := (float64(h.Estimate) - value) / se
	p, _ := tail.T(t, df)
	half := Number(tail.TQuantileTail(1-level, df) * se)
	h.SE, h.DF2, h.T, h.F, h.P = Number(se), Number(df), Number(t), Number(t*t), Number(p)
	h.Low, h.High = h.Estimate-half, h.Estimate+half
}

// combinationDF is the degrees of freedom of t for a single restriction.
func (x *solution) combinationDF(h *hypothesis, r *estimate) float64 {
	switch {
	case h.single >= 0 && h.single < len(r.comboDFs):
		return r.comboDFs[h.single]
	case r.dfs == nil:
		return r.df
	case len(h.touch) == 1:
		return r.dfs[h.touch[0]]
	}
	return nan
}

// rounding bounds what rounding may have done to the variance of the combination l,
// but for the kind's factor: gross is the size of what was added up for its meat.
func (x *solution) rounding(gross, l []float64) float64 {
	k := x.k()
	b := make([]float64, k)
	for a, c := range l {
		axpy(c, x.inverse[a*k:(a+1)*k], b)
	}
	return 0x1p-53 * x.quadratic([][]float64{absolute(b)}, gross)[0]
}
