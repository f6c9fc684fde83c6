package vcov

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// userColumn is one coefficient of the model as the user reads it.
type userColumn struct {
	label  string
	term   int // index into Design.Terms, -1 for the constant
	column int // the internal column it adds to those before it
}

// basis maps between the internal columns z of a state (P of them) and the
// coefficients of the model (K). The sums are solved in coordinates g of
// dimension K with X b = Z Q g; then b = W g / YInv.
//
// Where the model spans whole internal columns, Q only selects them and W undoes
// shift, scale and whitening. Otherwise (a category product without its category,
// say) X = Z C, C = Q R with orthonormal Q in the user's order, and W = R^-1.
type basis struct {
	state  *accum.State
	cols   []userColumn
	sel    []int     // Q as a selection; nil if q is used
	q      []float64 // P x K, row by row
	w      []float64 // K x K, row by row
	offset []float64 // K: coordinates of (provisional fit) of the outcome
	beside []float64 // P: what of that fit the model does not span; nil if nothing
	wide   *wideBasis
	bases  map[string]string
	notes  []Warning
	listed *listed   // categories beside a sweep, written out as numeric terms
	apart  *apart    // the group of categories kept apart, nil if there is none
	sums   []float64 // internal second moments, less what the group apart takes
}

func newBasis(s *accum.State) (*basis, error) {
	b := &basis{state: s, bases: map[string]string{}, sums: s.S}
	if s.Apart != nil {
		b.apart = newApart(s)
	}
	if err := b.columns(); err != nil {
		return nil, err
	}
	if b.apart != nil {
		b.apart.eliminate()
		b.sums = b.apart.elim.S
	}
	if b.plain() {
		b.selection()
	} else {
		b.factor()
	}
	return b, nil
}

// extended reports whether the solve has twice the digits; with a group apart only
// rows and dense sums have.
func (b *basis) extended() bool { return b.state.Extended && b.apart == nil }

func (b *basis) k() int { return len(b.cols) }

// columns lists the coefficients in the user's order.
func (b *basis) columns() error {
	s, d := b.state, b.state.Design
	base := make([]int, len(d.Categories))
	for c := range d.Categories {
		cat := &d.Categories[c]
		base[c] = -1
		if cat.NoBase {
			continue
		}
		base[c] = 0
		if cat.HasBase {
			v, err := stream.ParseKey(cat.KeyColumn, d.Spec.Zone, cat.Base)
			if err == nil {
				base[c] = slices.IndexFunc(s.Levels[c], func(k accum.Key) bool { return k.KeyValue == v })
			}
			if err != nil || base[c] < 0 {
				return stream.Usef("each(%s, base=%q): no used row has that level; levels are %s", cat.Text, cat.Base, b.someLevels(c))
			}
		}
		b.bases[cat.Text] = b.level(c, s.Levels[c][base[c]])
	}
	if b.apart != nil {
		b.apart.settle(base)
	}
	if !d.Spec.NoConstant {
		b.add(userColumn{"constant", -1, 0})
	}
	numeric := 0
	for t := range d.Terms {
		term := &d.Terms[t]
		if len(term.Categories) == 0 {
			numeric++
			b.add(userColumn{term.Text, t, numeric})
			continue
		}
		gi := s.Group(term.Categories)
		g := &s.Groups[gi]
		part := 0
		if term.Dense >= 0 {
			part = slices.Index(g.Parts, term.Dense)
		}
		before := b.count()
		possible := 1
		for _, c := range g.Categories {
			n := len(s.Levels[c])
			if base[c] >= 0 {
				n--
			}
			possible *= n
		}
		first, n := s.GroupColumns(gi)
		for i := range n {
			levels := s.Combination(gi, i)
			if slices.ContainsFunc(g.Categories, func(c int) bool {
				return base[c] >= 0 && int(levels[slices.Index(g.Categories, c)]) == base[c]
			}) {
				continue
			}
			b.add(userColumn{b.label(term, g, levels), t, first + i*len(g.Parts) + part})
		}
		switch n := b.count() - before; {
		case n == 0 && possible == 0:
			b.notes = append(b.notes, Warning{Code: "one-level", Term: &term.Text, Text: fmt.Sprintf("%s has a single level in the used rows and adds no term", term.Text)})
		case n < possible:
			b.notes = append(b.notes, Warning{Code: "empty-combinations", Term: &term.Text,
				Text: fmt.Sprintf("%s: %d of %d combinations of levels occur in no used row and have no term", term.Text, possible-n, possible)})
		}
	}
	return nil
}

// add takes in the next coefficient of the model.
func (b *basis) add(u userColumn) {
	if b.apart != nil && b.apart.add(u) {
		return
	}
	b.cols = append(b.cols, u)
}

// count is the number of coefficients so far, wherever they are solved.
func (b *basis) count() int {
	if b.apart != nil {
		return len(b.cols) + len(b.apart.cols)
	}
	return len(b.cols)
}

func (b *basis) level(c int, k accum.Key) string {
	return keyLabel(b.state.Design.Categories[c].KeyColumn, b.state.Design.Spec, k)
}

func keyLabel(c stream.KeyColumn, spec stream.Spec, k accum.Key) string {
	return stream.FormatKey(c, spec.Zone, k.KeyValue)
}

func (b *basis) someLevels(c int) string {
	var names []string
	for i, k := range b.state.Levels[c] {
		if i == 8 {
			names = append(names, "...")
			break
		}
		names = append(names, b.level(c, k))
	}
	return strings.Join(names, ", ")
}

// label gives "barge = b" or "(barge = b) * (wet = true) * pallets".
func (b *basis) label(term *stream.Term, g *accum.Group, levels []int32) string {
	var parts []string
	for _, c := range term.Categories {
		k := b.state.Levels[c][levels[slices.Index(g.Categories, c)]]
		parts = append(parts, b.state.Design.Categories[c].Text+" = "+b.level(c, k))
	}
	if len(parts) == 1 && term.Dense < 0 {
		return parts[0]
	}
	for i, p := range parts {
		parts[i] = "(" + p + ")"
	}
	if term.Dense >= 0 {
		parts = append(parts, b.state.Design.Dense[term.Dense])
	}
	return strings.Join(parts, " * ")
}

// plain reports whether the model spans whole internal columns: every category
// product with a number comes with its category.
func (b *basis) plain() bool {
	s := b.state
	have := map[int]bool{}
	for _, u := range b.cols {
		have[u.column] = true
	}
	for _, u := range b.cols {
		c := &s.Columns[u.column]
		if c.Group >= 0 && c.Part > 0 && !have[u.column-c.Part] {
			return false
		}
	}
	return true
}

// carriers lists the internal columns that add up to the constant.
func (b *basis) carriers() []int {
	s := b.state
	if b.apart != nil && b.apart.inside {
		return nil
	}
	if !s.Design.Spec.NoConstant {
		return []int{0}
	}
	t := s.Carrier()
	if t < 0 {
		return nil
	}
	gi := s.Group(s.Design.Terms[t].Categories)
	var out []int
	for c := range s.Columns {
		if s.Columns[c].Group == gi && s.Columns[c].Part == 0 {
			out = append(out, c)
		}
	}
	return out
}

// spanningLevels is carriers, but prefers the indicators of a category of which
// the model uses every level in products: on the data they add up to the constant,
// and coordinates must not hold the same direction twice.
func (b *basis) spanningLevels() []int {
	s := b.state
	carry := b.carriers()
	if len(carry) != 1 || carry[0] != 0 {
		return carry
	}
	used := map[int]bool{}
	for _, u := range b.cols {
		if c := &s.Columns[u.column]; c.Group >= 0 {
			used[u.column-c.Part] = true
		}
	}
	for gi := range s.Groups {
		if len(s.Groups[gi].Categories) != 1 {
			continue
		}
		var all []int
		for c := range s.Columns {
			if s.Columns[c].Group == gi && s.Columns[c].Part == 0 {
				if !used[c] {
					all = nil
					break
				}
				all = append(all, c)
			}
		}
		if all != nil {
			return all
		}
	}
	return carry
}

// internalOffset is YInv (y - residual direction v) as internal coordinates:
// the provisional fit that the frame has taken out of the outcome.
func (b *basis) internalOffset(carry []int) []float64 {
	s := b.state
	off := make([]float64, len(s.Columns))
	for j, h := range s.Frame.H {
		off[1+j] = h
	}
	for _, c := range carry {
		off[c] += s.Frame.YShift * s.Frame.YInv
	}
	return off
}

func (b *basis) selection() {
	s, f, k := b.state, b.state.Frame, b.k()
	b.w = make([]float64, k*k)
	b.sel = make([]int, k)
	place := make([]int, len(s.Columns))
	for i := range place {
		place[i] = -1
	}
	for a, u := range b.cols {
		b.sel[a] = u.column
		place[u.column] = a
	}
	carry := b.carriers()
	off := b.internalOffset(carry)
	b.offset = make([]float64, k)
	for a, c := range b.sel {
		b.offset[a] = off[c]
	}
	for a, u := range b.cols {
		col := &s.Columns[u.column]
		switch {
		case col.Group < 0 && col.Dense == 0, col.Group >= 0 && col.Part == 0:
			b.w[a*k+a]++
		case col.Group < 0:
			j := col.Dense - 1
			for i := j; i < f.Terms; i++ {
				t := 0.0
				if f.White {
					t = f.T[j*f.Terms+i]
				} else if i == j {
					t = 1
				}
				if t == 0 || place[1+i] < 0 {
					continue
				}
				b.w[a*k+place[1+i]] += f.Inv[j] * t
			}
			// x = Shift 1 + ...: the shift goes to what adds up to the constant.
			for _, c := range carry {
				if f.Shift[j] != 0 && place[c] >= 0 {
					for i := range k {
						if i != place[c] && b.w[a*k+i] != 0 {
							b.w[place[c]*k+i] -= f.Shift[j] * b.w[a*k+i]
						}
					}
				}
			}
		default:
			d := s.Groups[col.Group].Parts[col.Part]
			b.w[a*k+a] += f.Inv[d]
			b.w[place[u.column-col.Part]*k+a] -= f.Shift[d] * f.Inv[d]
		}
	}
	if b.extended() {
		b.carrierRows(carry, place)
	}
}

// factor handles the general case by an orthonormal basis of the model's span.
func (b *basis) factor() {
	s, f, k, p := b.state, b.state.Frame, b.k(), len(b.state.Columns)
	carry := b.spanningLevels()
	var back []float64
	if f.White {
		back = inverseUpper(f.T, f.Terms)
	}
	q := make([][]float64, k) // columns
	place := make([]int, p)   // of numeric columns
	for a, u := range b.cols {
		place[u.column] = a
	}
	r := make([]float64, k*k)
	empty := make([]bool, k) // in the span of earlier ones
	for a, u := range b.cols {
		col := &s.Columns[u.column]
		v := make([]float64, p)
		switch {
		case col.Group < 0 && col.Dense == 0:
			for _, c := range carry {
				v[c] = 1
			}
		case col.Group >= 0 && col.Part == 0:
			v[u.column] = 1
		case col.Group < 0:
			j := col.Dense - 1
			if len(carry) > 0 && !s.Design.Spec.NoConstant && !s.Constant(j) {
				// The constant and the numeric terms before it are there already: the
				// column's own direction is its coordinate, without any cancelling.
				for i := 0; i <= j; i++ {
					t := 0.0
					if f.White {
						t = back[i*f.Terms+j]
					} else if i == j {
						t = 1
					}
					r[place[1+i]*k+a] = t / f.Inv[j]
				}
				r[a] = f.Shift[j] * math.Sqrt(float64(len(carry)))
				v[1+j] = 1
				q[a] = v
				continue
			}
			for _, c := range carry {
				v[c] += f.Shift[j]
			}
			for i := 0; i <= j; i++ {
				t := 0.0
				if f.White {
					t = back[i*f.Terms+j]
				} else if i == j {
					t = 1
				}
				if s.Constant(i) {
					continue // only its shift is left
				}
				v[1+i] += t / f.Inv[j]
			}
		default:
			d := s.Groups[col.Group].Parts[col.Part]
			v[u.column] = 1 / f.Inv[d]
			v[u.column-col.Part] = f.Shift[d]
		}
		norm := math.Sqrt(dot(v, v))
		for range 2 {
			for i := range a {
				t := dot(q[i], v)
				r[i*k+a] += t
				axpy(-t, q[i], v)
			}
		}
		d := math.Sqrt(dot(v, v))
		if d <= 1e-13*norm {
			empty[a] = true
			clear(v) // the column is in the span of earlier ones whatever the data
			d = 1
			if r[a*k+a] = norm; norm == 0 {
				r[a*k+a] = 1
			}
		} else {
			for i := range v {
				v[i] /= d
			}
			r[a*k+a] = d
		}
		q[a] = v
	}
	b.q = make([]float64, p*k)
	for a := range q {
		for i, x := range q[a] {
			b.q[i*k+a] = x
		}
	}
	b.w = inverseUpper(r, k)
	if b.extended() {
		b.factorWide(carry, empty)
	}
	off := b.internalOffset(carry)
	b.offset = make([]float64, k)
	rest := append([]float64(nil), off...)
	for a := range q {
		b.offset[a] = dot(q[a], off)
		axpy(-b.offset[a], q[a], rest)
	}
	if b.extended() {
		b.besideWide(off)
	} else if size := math.Sqrt(dot(off, off)); math.Sqrt(dot(rest, rest)) > 1e-14*size {
		b.beside = rest
	}
}

// outcome returns the sums of products of the internal columns with the outcome
// about the part of the provisional fit that the model spans, and its square.
func (b *basis) outcome() (v []float64, svv float64) {
	s := b.state
	p := len(s.Columns)
	n := p + 1
	v, svv = b.sums[p*n:p*n+p], b.sums[p*n+p]
	if b.beside == nil {
		return v, svv
	}
	v = append([]float64(nil), v...)
	svv += dot(b.beside, v)
	for i, x := range b.beside {
		axpy(x, b.sums[i*n:i*n+p], v)
	}
	return v, svv + dot(b.beside, v)
}

// project returns Q' m Q for a (P+1) x (P+1) internal matrix (its last row and
// column are left out).
func (b *basis) project(m []float64) []float64 {
	k, n := b.k(), len(b.state.Columns)+1
	out := make([]float64, k*k)
	if b.sel != nil {
		for i, ci := range b.sel {
			for j, cj := range b.sel {
				out[i*k+j] = m[ci*n+cj]
			}
		}
		return out
	}
	half := make([]float64, (n-1)*k) // m Q
	for i := range n - 1 {
		for t := range n - 1 {
			if x := m[i*n+t]; x != 0 {
				axpy(x, b.q[t*k:(t+1)*k], half[i*k:(i+1)*k])
			}
		}
	}
	for t := range n - 1 {
		for i := range k {
			if x := b.q[t*k+i]; x != 0 {
				axpy(x, half[t*k:(t+1)*k], out[i*k:(i+1)*k])
			}
		}
	}
	return out
}

// projectVec returns Q' v for an internal vector (entries beyond P ignored).
func (b *basis) projectVec(v, dst []float64) {
	k := b.k()
	if b.sel != nil {
		for i, c := range b.sel {
			dst[i] = v[c]
		}
		return
	}
	clear(dst)
	for i := range len(b.state.Columns) {
		axpy(v[i], b.q[i*k:(i+1)*k], dst)
	}
}

// projectVecAbs is projectVec with the absolute values of Q.
func (b *basis) projectVecAbs(v, dst []float64) {
	if b.sel != nil {
		b.projectVec(v, dst)
		return
	}
	clear(dst)
	k := b.k()
	for i := range len(b.state.Columns) {
		for a, q := range b.q[i*k : (i+1)*k] {
			dst[a] += math.Abs(q) * v[i]
		}
	}
}

// expand returns Q g as internal coordinates, P entries.
func (b *basis) expand(g []float64) []float64 {
	k, p := b.k(), len(b.state.Columns)
	out := make([]float64, p)
	if b.sel != nil {
		for i, c := range b.sel {
			out[c] = g[i]
		}
		return out
	}
	for i := range p {
		out[i] = dot(b.q[i*k:(i+1)*k], g)
	}
	return out
}
