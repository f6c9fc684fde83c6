package accum

import (
	"cmp"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"maps"
	"math"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// State is what pass one leaves: every sum in one frame, joined exactly over
// segments, with rows accounted for. It is plain data for estimators and does
// not change.
type State struct {
	Design *stream.Design
	Frame  *Frame
	// Columns describes the internal columns: 0 is the constant, then the numeric
	// terms, then category columns. The outcome v follows as column len(Columns).
	Columns []Column
	// Groups are the distinct sets of categories, Levels the keys of each
	// category that occur, in order of value.
	Groups []Group
	Levels [][]Key
	// Extended says that terms and second moments were made with twice the digits;
	// Wide then has the second moments of (1, u, v), u the numeric terms, row by row.
	Extended bool
	Wide     []Wide
	// S is the (P+1) x (P+1) matrix of second moments of the internal columns and
	// v, row by row, P = len(Columns). Weighted.
	S []float64
	// Swept is there where effects of units were swept out: S and Wide are then the
	// moments within units, in which the constant is zero, and Rows, Freq, Weight and
	// Tally.Used leave out units of one row.
	Swept *Swept
	// Apart is the group of categories whose columns are kept apart, since there
	// are too many for a dense matrix; nil if all are among Columns.
	Apart *Apart

	Tally     stream.Tally
	Malformed int64
	Read      int64
	Problems  []*stream.RowError
	Rows      int64   // used rows
	Freq      int64   // sum of the weights, as whole numbers
	Weight    float64 // sum of the weights, correctly rounded
	// NonZero counts used rows (or frequencies) in which each numeric term is not
	// zero. Where that are two or more and as many are zero, it is only known to
	// lie between 2 and all less 2.
	NonZero  []int64
	Varied   []bool // whether its nonzero values differ
	Segments int64
	Bytes    int64
	Unread   stream.Unread // counted as read and excluded, and among Segments, but not read
	// Fingerprint identifies the used cells of the input.
	Fingerprint string
	// Dropped: cluster sums were wanted and outgrew their share of memory, or are of no
	// use (see Nested).
	Dropped bool
	// Coarse: keyed sums may have lost digits, since their sizes differ too much or
	// the input cannot be read again.
	Coarse bool
	// CellsLost: unique rows were wanted, but were too many or too different in size.
	CellsLost bool
	// Repeated says why the pass was done more than once.
	Repeated []string

	lay    *layout
	needs  Needs
	epochs []*epoch
	maps   [][]float64 // from each epoch's dense columns to those of Frame
	checks map[int]segCheck
	quotes map[int]stream.Quotes
	stamp  string
	quart  *quartic
	cells  *cellRows
	levels []*interner // global ids = places in Levels
	combos []*comboIndex
	place  [][]int32 // place in combos, by the number in pass one
	// pairCount bounds the pairs of combinations of each table of pairs.
	pairCount []pairCount
	dense     int
	pool      *groupPool
	base      *State     // that this one was asked of, see Ask
	from      []int      // numeric terms of base that are those of this
	means     *unitMeans // see KeepMeans
	nests     []*nest    // keys whose clusters may hold whole units, see Nested
	nestPool  *groupPool
}

// epochWidth is the number of columns of z in the epochs, epochTerms that of numeric
// terms: those of base.
func (s *State) epochWidth() int {
	if s.base != nil {
		return s.base.lay.width
	}
	return s.lay.width
}

func (s *State) epochTerms() int {
	if s.base != nil {
		return s.base.lay.p0
	}
	return s.lay.p0
}

// Close gives back what the sums of clusters hold in memory and on scratch; Scores
// cannot be formed any more. It may be called again.
func (s *State) Close() {
	if s.pool != nil {
		s.pool.close()
	}
	if s.nestPool != nil {
		s.nestPool.close()
	}
}

// Column is one internal column.
type Column struct {
	Group  int     // index into State.Groups, or -1
	Dense  int     // for Group < 0: 0 the constant, j numeric term j-1
	Levels []int32 // for Group >= 0: place in Levels for each of its categories
	Part   int     // for Group >= 0: 0 the indicator, i the factor Parts[i]
	Rows   int64   // for Group >= 0: rows in which the indicator is 1
}

// Group is a set of categories whose indicators are multiplied.
type Group struct {
	Categories []int
	// Parts are the raw dense columns (indexes of Design.Dense) that multiply the
	// indicator; Parts[0] is -1, the indicator itself.
	Parts []int
	first int // internal column of the first combination
	n     int // combinations
}

// Column returns the internal column of a combination of levels and a part, or
// -1 if the combination does not occur. Columns of the group apart follow v:
// len(Columns) + 1 + combination * parts + part.
func (s *State) Column(group int, levels []int32, part int) int {
	i := s.combos[group].find(levels)
	if i < 0 {
		return -1
	}
	return s.Groups[group].first + i*len(s.Groups[group].Parts) + part
}

// Group returns the index of the group with these categories.
func (s *State) Group(cats []int) int { return s.lay.groupIndex(sortedCopy(cats)) }

// GroupColumns returns the first internal column of a group, as in Column, and its
// number of combinations.
func (s *State) GroupColumns(group int) (first, combos int) {
	return s.Groups[group].first, s.Groups[group].n
}

// Combination returns the levels of combination i of a group, as places in Levels.
func (s *State) Combination(group, i int) []int32 { return s.combos[group].keys[i] }

// Numeric is the number of numeric terms.
func (s *State) Numeric() int { return s.lay.p0 }

// Carrier returns the term whose indicators add up to the constant, when the
// design has none of its own; else -1.
func (s *State) Carrier() int { return s.lay.carrier() }

// Shifted reports whether numeric columns are shifted.
func (s *State) Shifted() bool { return s.lay.shifted() }

// Constant reports whether numeric term j has one value in all used rows, as far
// as doubles can tell, so that it repeats the constant. False without shifts.
func (s *State) Constant(j int) bool {
	f := s.Frame
	if s.Swept != nil {
		return s.Swept.Constant[j]
	}
	if !s.lay.shifted() || (f.White && f.T[j*f.Terms+j] != 1) {
		return false
	}
	n := len(s.Columns) + 1
	spread := math.Sqrt(s.S[(1+j)*(n+1)] / s.S[0])
	return spread <= constantShare*math.Abs(f.Shift[j]*f.Inv[j])
}

// comboIndex finds the place of a combination of levels.
type comboIndex struct {
	keys [][]int32
}

func (c *comboIndex) find(levels []int32) int {
	i, ok := slices.BinarySearchFunc(c.keys, levels, func(a, b []int32) int { return slices.Compare(a, b) })
	if !ok {
		return -1
	}
	return i
}

// newState joins the epochs. refit is the unit that keyed sums should have.
func newState(l *layout, needs *Needs, p *pass, epochs []*epoch, extended bool, b *budget) (s *State, refit int, err error) {
	s = &State{Design: l.design, lay: l, needs: *needs, checks: p.checks, quotes: p.quotes, Segments: p.segments, Bytes: p.bytes,
		Extended: extended, Read: p.read, Malformed: p.bad, Dropped: b.dropped.Load()}
	slices.SortFunc(p.problems, func(a, b problem) int {
		return cmp.Or(cmp.Compare(a.segment, b.segment), cmp.Compare(a.at, b.at))
	})
	for _, q := range p.problems[:min(len(p.problems), stream.MaxProblems)] {
		s.Problems = append(s.Problems, q.err)
	}
	var weight superSum
	s.NonZero, s.Varied = make([]int64, l.p0), make([]bool, l.p0)
	value := make([]float64, l.p0)
	for _, e := range epochs {
		s.Tally.Add(&e.tally)
		s.Rows += e.rows
		s.Freq += e.freq
		weight.merge(&e.weight)
		for j, n := range e.nonzero {
			s.NonZero[j] += n
		}
		joinVaried(value, s.Varied, e.value, e.varied)
	}
	s.Unread = p.unread
	s.Tally.Excluded += p.unread.Rows
	s.Weight = weight.value()
	if l.design.Spec.Weight == "" {
		s.Weight = float64(s.Rows)
	}
	epochs = slices.DeleteFunc(epochs, func(e *epoch) bool { return e.rows == 0 })
	if s.Rows == 0 && needs.Retain {
		return s, b.unit, nil
	}
	if s.Rows == 0 {
		return nil, 0, &NoRowsError{Tally: s.Tally, Malformed: s.Malformed}
	}
	s.epochs = epochs
	s.Frame = epochs[len(epochs)-1].frame
	s.fingerprint()
	if needs.Fourth {
		s.quart = newQuartic(l.p0 + 2)
	}
	s.dense = b.dense
	for _, e := range epochs {
		if err := b.num.check(e.tables, e.pairs, b); err != nil {
			return nil, 0, err
		}
	}
	level := s.indexLevels(b.num)
	if err := s.assemble(); err != nil {
		return nil, 0, err
	}
	s.gatherCells(b.cells, level)
	refit = s.refit(b.unit)
	if !needs.Retain {
		for _, e := range epochs {
			e.tables, e.pairs, e.gramX, e.fourX = nil, nil, nil, nil
		}
	}
	for _, e := range epochs {
		e.cells = nil
	}
	return s, refit, nil
}

func (s *State) fingerprint() {
	h := sha256.New()
	for _, n := range slices.Sorted(maps.Keys(s.checks)) {
		var b [24]byte
		c := s.checks[n]
		binary.LittleEndian.PutUint64(b[:], uint64(n))
		binary.LittleEndian.PutUint64(b[8:], uint64(c.rows))
		binary.LittleEndian.PutUint64(b[16:], c.sum)
		h.Write(b[:])
	}
	s.Fingerprint = hex.EncodeToString(h.Sum(nil)[:16])
}

// indexLevels orders levels and combinations by value. It returns the places of the
// levels of each category, by number in pass one.
func (s *State) indexLevels(num *numbering) (level [][]int32) {
	l := s.lay
	level = make([][]int32, len(num.levels))
	for c, in := range num.levels {
		order := in.order()
		level[c] = make([]int32, len(order))
		sorted := newInterner(in.kind)
		keys := make([]Key, len(order))
		for i, id := range order {
			level[c][id] = int32(i)
			keys[i] = in.key(id)
			sorted.put(keys[i])
		}
		s.Levels = append(s.Levels, keys)
		s.levels = append(s.levels, sorted)
	}
	sizes := num.sizes()
	for ti := range l.tables {
		cats := l.tables[ti].cats
		keys := make([][]int32, sizes[ti])
		flat := make([]int32, sizes[ti]*len(cats))
		order := make([]int32, sizes[ti])
		for id := range keys {
			k := flat[id*len(cats) : (id+1)*len(cats)]
			copy(k, num.split(ti, int32(id)))
			for i, c := range cats {
				k[i] = level[c][k[i]]
			}
			keys[id], order[id] = k, int32(id)
		}
		slices.SortFunc(order, func(a, b int32) int { return slices.Compare(keys[a], keys[b]) })
		index := &comboIndex{keys: make([][]int32, len(keys))}
		place := make([]int32, len(keys))
		for i, id := range order {
			index.keys[i] = keys[id]
			place[id] = int32(i)
		}
		s.combos = append(s.combos, index)
		s.place = append(s.place, place)
	}
	s.Columns = append(s.Columns, Column{Group: -1})
	for j := range l.p0 {
		s.Columns = append(s.Columns, Column{Group: -1, Dense: 1 + j})
	}
	apart, _ := l.apart(sizes, s.dense)
	for gi := range l.groups {
		g := &l.groups[gi]
		rows := make([]int64, sizes[gi])
		for _, e := range s.epochs {
			for id, n := range e.tables[gi].rows {
				rows[s.place[gi][id]] += n
			}
		}
		out := Group{Categories: g.cats, first: len(s.Columns), n: sizes[gi]}
		for _, p := range g.parts {
			if p == 0 {
				out.Parts = append(out.Parts, -1)
			} else {
				out.Parts = append(out.Parts, l.factors[p-l.p0-2])
			}
		}
		s.Groups = append(s.Groups, out)
		if gi == apart {
			s.Apart = &Apart{Group: gi, Levels: s.combos[gi].keys, Rows: rows, Parts: len(g.parts)}
			continue
		}
		for i, k := range s.combos[gi].keys {
			for p := range g.parts {
				s.Columns = append(s.Columns, Column{Group: gi, Levels: k, Part: p, Rows: rows[i]})
			}
		}
	}
	if s.Apart != nil { // its columns are numbered behind v
		s.Groups[apart].first = len(s.Columns) + 1
	}
	return level
}

// assemble fills S, and the sums of the group kept apart, in the last frame.
func (s *State) assemble() error {
	s.maps = make([][]float64, len(s.epochs))
	s.pairCount = make([]pairCount, len(s.lay.pairs))
	all := s.newSums()
	for i, e := range s.epochs {
		m := all
		if e.frame != s.Frame {
			m = s.newSums()
		}
		s.placeDense(m.m, e.gram, s.lay.p0+2)
		s.placeTables(m, e.tables, s.place)
		s.placePairs(m, e.pairs, s.place)
		s.maps[i] = s.mapFrom(e.frame)
		if e.frame != s.Frame {
			m = s.move(i, m)
		}
		if m != all {
			all.add(m)
		}
	}
	s.S = all.m
	if s.Apart != nil {
		s.Apart.Blocks = all.Blocks
	}
	if s.Extended {
		s.assembleWide()
	}
	for _, x := range s.S {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return errRange
		}
	}
	for _, x := range all.D {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return errRange
		}
	}
	return nil
}

var errRange = errors.New("the sums of products leave the range of float64: values are too large; divide the outcome or a term by a power of ten")

// placeDense puts the packed sums of the first cols of (1, u, v) into the matrix.
func (s *State) placeDense(m, gram []float64, cols int) {
	n := len(s.Columns) + 1
	at := s.denseAt()
	for j := range cols {
		for i := 0; i <= j; i++ {
			x := gram[j*(j+1)/2+i]
			m[at[i]*n+at[j]] += x
			if i != j {
				m[at[j]*n+at[i]] += x
			}
		}
	}
}

// denseAt gives the internal column of each of (1, u, v).
func (s *State) denseAt() []int {
	at := make([]int, s.lay.p0+2)
	for i := range at {
		at[i] = i
	}
	at[s.lay.v()] = len(s.Columns)
	return at
}

// placeTables puts the sums of all combinations into m. place gives the place of
// each number of a table; nil if numbers are places.
func (s *State) placeTables(m *sums, tables []*keyTable, place [][]int32) {
	l := s.lay
	at := s.denseAt()
	for gi, t := range tables {
		spec, g := &l.tables[gi], &l.groups[gi]
		// Where in the table the products of the group itself stand, and those with
		// the groups that its categories hold.
		type entry struct{ from, p, q, group int } // group -1: q is a column; gi: a part
		var list []entry
		for p, a := range g.parts {
			for j, dst := range at {
				if k := spec.index(a, j); k >= 0 {
					list = append(list, entry{k, p, dst, -1})
				}
			}
			for q, b := range g.parts {
				if q <= p {
					list = append(list, entry{spec.index(a, b), p, q, gi})
				}
			}
		}
		var inner []int
		for hi := range l.groups {
			h := &l.groups[hi]
			if hi == gi || !slices.Equal(union(g.cats, h.cats), g.cats) {
				continue
			}
			inner = append(inner, hi)
			for p, a := range g.parts {
				for q, b := range h.parts {
					list = append(list, entry{spec.index(a, b), p, q, hi})
				}
			}
		}
		between := s.innerPairs(gi)
		vals := make([]float64, t.width)
		base := make([]int, len(l.groups))
		pick := make([]int32, 0, len(g.cats))
		for id, n := range t.rows {
			if n == 0 {
				continue
			}
			for j, f := range t.fix(int32(id)) {
				vals[j] = f.float(t.unit)
			}
			to := int32(id)
			if place != nil {
				to = place[gi][id]
			}
			combo := s.combos[gi].keys[to]
			base[gi] = s.Groups[gi].first + int(to)*len(g.parts)
			for _, hi := range inner {
				pick = s.pick(pick[:0], combo, gi, hi)
				base[hi] = s.Column(hi, pick, 0)
			}
			for _, e := range list {
				if e.group < 0 {
					m.add2(base[gi]+e.p, e.q, vals[e.from])
				} else {
					m.add2(base[gi]+e.p, base[e.group]+e.q, vals[e.from])
				}
			}
			for _, b := range between {
				for p, a := range l.groups[b[0]].parts {
					for q, c := range l.groups[b[1]].parts {
						m.add2(base[b[0]]+p, base[b[1]]+q, vals[spec.index(a, c)])
					}
				}
			}
		}
	}
}

// innerPairs lists the pairs of groups, neither of them gi, whose categories
// together are those of gi.
func (s *State) innerPairs(gi int) [][2]int {
	l := s.lay
	var out [][2]int
	for i := range l.groups {
		for j := range i {
			if i != gi && j != gi && slices.Equal(union(l.groups[i].cats, l.groups[j].cats), l.groups[gi].cats) {
				out = append(out, [2]int{i, j})
			}
		}
	}
	return out
}

// pick appends the levels of group h to dst, from a combination of group g.
func (s *State) pick(dst, combo []int32, g, h int) []int32 {
	for _, c := range s.lay.groups[h].cats {
		dst = append(dst, combo[slices.Index(s.lay.groups[g].cats, c)])
	}
	return dst
}

// placePairs puts the sums of pairs of combinations into m.
func (s *State) placePairs(m *sums, tables []*pairTable, place [][]int32) {
	l := s.lay
	for i, t := range tables {
		spec := &l.pairs[i]
		g, h := &s.Groups[spec.g], &s.Groups[spec.h]
		if place != nil {
			s.pairCount[i].first, s.pairCount[i].second = g.n, h.n
		}
		t.each(func(a, b int32, vals []float64) {
			if place != nil {
				a, b = place[spec.g][a], place[spec.h][b]
				s.pairCount[i].pairs++
			}
			gb, hb := g.first+int(a)*len(g.Parts), h.first+int(b)*len(h.Parts)
			k := 0
			for p := range g.Parts {
				for q := range h.Parts {
					m.add2(gb+p, hb+q, vals[k])
					k++
				}
			}
		})
	}
}

// refit returns the unit that the keyed sums should have had.
func (s *State) refit(unit int) int {
	size := s.smallest()
	if a := s.Apart; a != nil {
		for i := 0; i < len(a.D); i += a.Parts * a.Parts {
			for p := range a.Parts {
				if d := a.D[i+p*(a.Parts+1)]; d > 0 {
					size = math.Min(size, d)
				}
			}
		}
	}
	need, best := false, -1074
	see := func(t *partials, unit int) {
		over, coarse := t.fits(unit, size)
		need = need || over || coarse
		best = max(best, t.betterUnit())
	}
	for _, e := range s.epochs {
		for _, t := range e.tables {
			see(&t.partials, t.unit)
		}
		for i, t := range e.pairs {
			if t.width > 0 {
				over, coarse := t.fits(size, s.pairRows(i))
				need = need || over || coarse
				best = max(best, t.betterUnit(s.pairRows(i)))
			}
		}
		if e.units != nil {
			see(&e.units.seen, e.units.unit)
		}
		for _, t := range e.clusters {
			if t != nil && !s.Dropped {
				see(&t.seen, t.unit)
			}
		}
	}
	if need && unit != defaultUnit {
		s.Coarse = true // the best unit was not good enough
	} else if need {
		return best
	}
	return unit
}

// smallest is the smallest second moment of an internal column.
func (s *State) smallest() float64 {
	n := len(s.Columns) + 1
	size := math.Inf(1)
	for j := range n {
		if d := s.S[j*n+j]; d > 0 {
			size = math.Min(size, d)
		}
	}
	return size
}

// pairRows bounds the rows of one pair of combinations.
func (s *State) pairRows(i int) int64 {
	most := func(g int) int64 {
		var n int64
		for _, e := range s.epochs {
			for _, r := range e.tables[g].rows {
				n = max(n, r)
			}
		}
		return n * int64(len(s.epochs))
	}
	return min(most(s.lay.pairs[i].g), most(s.lay.pairs[i].h))
}

// fullFrame makes a frame from all rows of the state.
func (s *State) fullFrame() *Frame {
	return buildFrame(previousRows(s.lay, s.epochs), s.lay.p0, s.lay.shifted())
}
