package accum

import (
	"fmt"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// AskError says what a state's sums cannot answer.
type AskError struct{ Msg string }

func (e *AskError) Error() string { return e.Msg }

// Ask returns the state that another model of the same rows would have left: terms
// of s fewer or in another order, and as outcome that of s or a numeric term. No row
// is read: with z' = B z, S' = B S B', and fourth moments and clusters go through B
// when they are used. s must stay open as long as the answer is used.
//
// The answer is in double arithmetic. Asked for the model of s, it is s. Time O(P^3).
//
// Errors: *AskError where a term or the outcome is not among those of s.
func (s *State) Ask(d *stream.Design) (*State, error) {
	if sameModel(s.Design, d) {
		return s, nil
	}
	if d.Sweep >= 0 || s.Design.Sweep >= 0 {
		return nil, &AskError{"where effects are swept out, only the whole model can be asked for"}
	}
	if s.Apart != nil {
		return nil, &AskError{"a category with too many levels stands apart; only the whole model can be asked for"}
	}
	full, l := s.lay, newLayout(d)
	if len(l.factors) > 0 {
		return nil, &AskError{"products of a number and a category are kept for the whole model only"}
	}
	// numeric[t] is the column u of the full layout that term t of the question is.
	place := func(text string) int {
		n := 0
		for i := range full.design.Terms {
			t := &full.design.Terms[i]
			if len(t.Categories) > 0 {
				continue
			}
			if t.Text == text {
				return n
			}
			n++
		}
		return -1
	}
	var from []int
	for i := range d.Terms {
		t := &d.Terms[i]
		if len(t.Categories) > 0 {
			if !slices.ContainsFunc(full.design.Terms, func(o stream.Term) bool { return o.Text == t.Text && o.Dense < 0 }) {
				return nil, &AskError{fmt.Sprintf("term %s was not kept", t.Text)}
			}
			continue
		}
		n := place(t.Text)
		if n < 0 {
			return nil, &AskError{fmt.Sprintf("term %s was not kept", t.Text)}
		}
		from = append(from, n)
	}
	outcome := -1 // the outcome of s
	if text := d.OutcomeText(); text != full.design.OutcomeText() {
		if outcome = place(text); outcome < 0 {
			return nil, &AskError{fmt.Sprintf("the outcome %s was not kept", text)}
		}
	}
	// What is shifted must stay so: the constant is in both or in none.
	if l.shifted() != full.shifted() || d.Spec.NoConstant != full.design.Spec.NoConstant {
		return nil, &AskError{"the sums are of a model with another constant"}
	}

	a := *s
	a.Design, a.lay, a.Extended, a.Wide, a.base = d, l, false, nil, s
	a.Frame = buildFrame(s.askedRows(l, from, outcome), l.p0, l.shifted())
	b := frameMap(full, s.Frame, l, a.Frame, from, outcome)
	a.maps = make([][]float64, len(s.epochs))
	for i := range s.epochs {
		a.maps[i] = rectangle(b, s.maps[i], l.width, full.width)
	}
	if s.quart != nil {
		a.quart = s.quart
	}
	a.from = from
	a.NonZero, a.Varied = nil, nil
	for _, n := range from {
		a.NonZero, a.Varied = append(a.NonZero, s.NonZero[n]), append(a.Varied, s.Varied[n])
	}
	// Categories: the same levels, in the order of the question.
	a.Levels, a.levels, a.Groups, a.Columns, a.combos, a.place = nil, nil, nil, nil, nil, nil
	for i := range d.Categories {
		at := slices.IndexFunc(full.design.Categories, func(c stream.Category) bool { return c.Text == d.Categories[i].Text })
		a.Levels, a.levels = append(a.Levels, s.Levels[at]), append(a.levels, s.levels[at])
	}
	a.Columns = append(a.Columns, Column{Group: -1})
	for j := range l.p0 {
		a.Columns = append(a.Columns, Column{Group: -1, Dense: 1 + j})
	}
	var cats []int // internal columns of s
	for gi := range l.groups {
		fg := s.groupOf(l, gi)
		g := s.Groups[fg]
		g.Categories, g.first, g.Parts = l.groups[gi].cats, len(a.Columns), []int{-1}
		index, places := s.combosFor(l, gi, fg)
		a.combos = append(a.combos, index)
		for i, k := range index.keys {
			from := s.Groups[fg].first + places[i]*len(s.Groups[fg].Parts)
			cats = append(cats, from)
			a.Columns = append(a.Columns, Column{Group: gi, Levels: k, Rows: s.Columns[from].Rows})
		}
		a.Groups = append(a.Groups, g)
	}
	a.askSums(b, cats)
	return &a, nil
}

// sameModel reports whether two designs have the same sums in the same order.
func sameModel(a, b *stream.Design) bool {
	if a.OutcomeText() != b.OutcomeText() || a.Spec.NoConstant != b.Spec.NoConstant || a.Spec.Sweep != b.Spec.Sweep || len(a.Terms) != len(b.Terms) {
		return false
	}
	for i := range a.Terms {
		if a.Terms[i].Text != b.Terms[i].Text {
			return false
		}
	}
	return true
}

// groupOf returns the group of s with the categories of group gi of l.
func (s *State) groupOf(l *layout, gi int) int {
	var cats []int
	for _, c := range l.groups[gi].cats {
		cats = append(cats, slices.IndexFunc(s.Design.Categories, func(x stream.Category) bool { return x.Text == l.design.Categories[c].Text }))
	}
	return s.Group(cats)
}

// combosFor gives the combinations of group gi of l, in its order of categories, and
// the place of each in group fg of s.
func (s *State) combosFor(l *layout, gi, fg int) (*comboIndex, []int) {
	had := s.Groups[fg].Categories
	perm := make([]int, len(had)) // place in had of each category of l
	for i, c := range l.groups[gi].cats {
		perm[i] = slices.IndexFunc(had, func(f int) bool { return s.Design.Categories[f].Text == l.design.Categories[c].Text })
	}
	type entry struct {
		key []int32
		at  int
	}
	var list []entry
	for i, k := range s.combos[fg].keys {
		e := entry{make([]int32, len(perm)), i}
		for j, p := range perm {
			e.key[j] = k[p]
		}
		list = append(list, e)
	}
	slices.SortFunc(list, func(a, b entry) int { return slices.Compare(a.key, b.key) })
	index := &comboIndex{}
	var places []int
	for _, e := range list {
		index.keys = append(index.keys, e.key)
		places = append(places, e.at)
	}
	return index, places
}

// askedRows stands for the rows of s in the raw columns of the question, see
// previousRows.
func (s *State) askedRows(l *layout, from []int, outcome int) *frameRows {
	all := previousRows(s.lay, s.epochs)
	r := newFrameRows(l.nx)
	r.one, r.fixed, r.lowRows = all.one, all.fixed, all.lowRows
	low := func(j int) float64 {
		if all.lowSquares == nil {
			return 0
		}
		return all.lowSquares[j]
	}
	if all.lowSquares != nil {
		r.lowSquares = make([]float64, l.nx+1)
	}
	for j, n := range from {
		r.x[j], r.origin[j] = all.x[n], all.origin[n]
		if r.lowSquares != nil {
			r.lowSquares[j] = low(n)
		}
	}
	if outcome < 0 {
		r.y, r.yOrigin, r.spread = all.y, all.yOrigin, all.spread
	} else {
		r.y, r.yOrigin = all.x[outcome], all.origin[outcome]
	}
	if r.lowSquares != nil {
		r.lowSquares[l.nx] = low(len(all.lowSquares) - 1)
		if outcome >= 0 {
			r.lowSquares[l.nx] = low(outcome)
		}
	}
	return r
}

// rectangle returns A B for A m x n and B n x n.
func rectangle(a, b []float64, m, n int) []float64 {
	out := make([]float64, m*n)
	for i := range m {
		for t := range n {
			if x := a[i*n+t]; x != 0 {
				for j := range n {
					out[i*n+j] += x * b[t*n+j]
				}
			}
		}
	}
	return out
}

// askSums fills S from that of the whole model. cats are the internal columns of
// that which follow the numeric ones.
func (a *State) askSums(b []float64, cats []int) {
	s, full, l := a.base, a.base.lay, a.lay
	n, m := len(s.Columns)+1, len(a.Columns)+1
	at, to := s.denseAt(), a.denseAt()
	rows := make([]sparseMap, m)
	for i := range l.p0 + 2 {
		for j := range full.p0 + 2 {
			if x := b[i*full.width+j]; x != 0 {
				rows[to[i]].col = append(rows[to[i]].col, at[j])
				rows[to[i]].val = append(rows[to[i]].val, x)
			}
		}
	}
	for i, c := range cats {
		rows[1+l.p0+i] = sparseMap{[]int{c}, []float64{1}}
	}
	half := make([]float64, m*n)
	for r, sp := range rows {
		for k, c := range sp.col {
			for q := range n {
				half[r*n+q] += sp.val[k] * s.S[c*n+q]
			}
		}
	}
	a.S = make([]float64, m*m)
	for r, sp := range rows {
		for k, c := range sp.col {
			for q := range m {
				a.S[q*m+r] += sp.val[k] * half[q*n+c]
			}
		}
	}
	// Rounding must not make it unsymmetric.
	for i := range m {
		for j := range i {
			a.S[i*m+j] = a.S[j*m+i]
		}
	}
}
