package accum

import (
	"cmp"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"fmt"
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
	// Dense then has the second moments of (1, u, v), u the numeric terms, row by row.
	Extended bool
	Dense    []Wide
	// S is the (P+1) x (P+1) matrix of second moments of the internal columns and
	// v, row by row, P = len(Columns). Weighted.
	S []float64

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
	// Fingerprint identifies the used cells of the input.
	Fingerprint string
	// Dropped: cluster sums were wanted and outgrew their share of memory.
	Dropped bool
	// Coarse: keyed sums may have lost digits, since their sizes differ too much or
	// the input cannot be read again.
	Coarse bool
	// Repeated says why the pass was done more than once.
	Repeated []string

	lay    *layout
	epochs []*epoch
	maps   [][]float64 // from each epoch's dense columns to those of Frame
	checks map[int]segCheck
	stamp  string
	quart  *quartic
	levels []*interner // global ids = places in Levels
	combos []*comboIndex
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
// -1 if the combination does not occur.
func (s *State) Column(group int, levels []int32, part int) int {
	i := s.combos[group].find(levels)
	if i < 0 {
		return -1
	}
	return s.Groups[group].first + i*len(s.Groups[group].Parts) + part
}

// Group returns the index of the group with these categories.
func (s *State) Group(cats []int) int { return s.lay.groupIndex(sortedCopy(cats)) }

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
	s = &State{Design: l.design, lay: l, checks: p.checks, Segments: p.segments, Bytes: p.bytes,
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
	s.Weight = weight.value()
	if l.design.Spec.Weight == "" {
		s.Weight = float64(s.Rows)
	}
	epochs = slices.DeleteFunc(epochs, func(e *epoch) bool { return e.rows == 0 })
	if s.Rows == 0 {
		return nil, 0, &NoRowsError{Tally: s.Tally, Malformed: s.Malformed}
	}
	s.epochs = epochs
	s.Frame = epochs[len(epochs)-1].frame
	s.fingerprint()
	if needs.Fourth {
		s.quart = newQuartic(l.p0 + 2)
	}
	for _, e := range epochs { // one worker alone may not have seen how many there are
		if err := e.cats.check(e.tables, b.memory); err != nil {
			return nil, 0, err
		}
	}
	s.indexLevels()
	if err := s.assemble(); err != nil {
		return nil, 0, err
	}
	return s, s.refit(b.unit), nil
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

// indexLevels orders levels and combinations by value, over all epochs.
func (s *State) indexLevels() {
	l := s.lay
	for c := range l.design.Categories {
		seen := newInterner(l.design.Categories[c].Kind)
		for _, e := range s.epochs {
			joinKeys(seen, e.cats.levels[c])
		}
		keys := make([]Key, seen.size())
		for i := range keys {
			keys[i] = seen.key(int32(i))
		}
		slices.SortFunc(keys, Key.Compare)
		s.Levels = append(s.Levels, keys)
		sorted := newInterner(seen.kind)
		for _, k := range keys {
			sorted.put(k)
		}
		s.levels = append(s.levels, sorted)
	}
	s.Columns = append(s.Columns, Column{Group: -1})
	for j := range l.p0 {
		s.Columns = append(s.Columns, Column{Group: -1, Dense: 1 + j})
	}
	for gi := range l.groups {
		g := &l.groups[gi]
		ti := slices.IndexFunc(l.tables, func(t tableSpec) bool { return slices.Equal(t.cats, g.cats) })
		rows := map[string]int64{}
		index := &comboIndex{}
		for _, e := range s.epochs {
			for id, n := range e.tables[ti].rows {
				k := s.combo(e.cats, ti, int32(id))
				name := fmt.Sprint(k)
				if _, ok := rows[name]; !ok {
					index.keys = append(index.keys, k)
				}
				rows[name] += n
			}
		}
		slices.SortFunc(index.keys, func(a, b []int32) int { return slices.Compare(a, b) })
		s.combos = append(s.combos, index)
		out := Group{Categories: g.cats, first: len(s.Columns), n: len(index.keys)}
		for _, p := range g.parts {
			if p == 0 {
				out.Parts = append(out.Parts, -1)
			} else {
				out.Parts = append(out.Parts, l.factors[p-l.p0-2])
			}
		}
		s.Groups = append(s.Groups, out)
		for _, k := range index.keys {
			for p := range g.parts {
				s.Columns = append(s.Columns, Column{Group: gi, Levels: k, Part: p, Rows: rows[fmt.Sprint(k)]})
			}
		}
	}
}

// combo returns the levels of combination id of table ti, as places in Levels; -1
// for a level that the state does not have.
func (s *State) combo(c *categories, ti int, id int32) []int32 {
	keys := c.split(ti, id, nil)
	k := make([]int32, len(keys))
	for i, cat := range s.lay.tables[ti].cats {
		k[i] = s.levels[cat].find(keys[i])
	}
	return k
}

// assemble fills S in the last frame.
func (s *State) assemble() error {
	l := s.lay
	n := len(s.Columns) + 1
	s.S = make([]float64, n*n)
	s.maps = make([][]float64, len(s.epochs))
	for i, e := range s.epochs {
		m := make([]float64, n*n)
		s.placeDense(m, e.gram, l.p0+2)
		s.placeTables(m, e.cats, e.tables)
		s.maps[i] = s.mapFrom(e.frame)
		if e.frame != s.Frame {
			m = s.move(i, m, n)
		}
		for j, x := range m {
			s.S[j] += x
		}
	}
	if s.Extended {
		s.assembleWide()
	}
	for _, x := range s.S {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return fmt.Errorf("the sums of products leave the range of float64: values are too large; divide the outcome or a term by a power of ten")
		}
	}
	return nil
}

// placeDense puts the packed sums of the first cols of (1, u, v) into the matrix.
func (s *State) placeDense(m, gram []float64, cols int) {
	n := len(s.Columns) + 1
	at := s.denseAt()
	for j := range cols {
		for i := 0; i <= j; i++ {
			x := gram[j*(j+1)/2+i]
			m[at[i]*n+at[j]], m[at[j]*n+at[i]] = x, x
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

// placeTables puts the sums of all combinations into the matrix.
func (s *State) placeTables(m []float64, c *categories, tables []*keyTable) {
	for ti, t := range tables {
		vals := make([]float64, t.width)
		for id := range t.rows {
			for j, f := range t.fix(int32(id)) {
				vals[j] = f.float(t.unit)
			}
			s.placeTable(m, ti, s.combo(c, ti, int32(id)), vals)
		}
	}
}

// placeTable puts the sums of one combination of levels into the matrix.
func (s *State) placeTable(m []float64, ti int, combo []int32, vals []float64) {
	l := s.lay
	n := len(s.Columns) + 1
	spec := &l.tables[ti]
	at := s.denseAt()
	set := func(i, j int, a, b int) {
		k := spec.index(a, b)
		if k < 0 {
			return
		}
		m[i*n+j], m[j*n+i] = vals[k], vals[k]
	}
	pick := func(cats []int) []int32 {
		out := make([]int32, len(cats))
		for i, c := range cats {
			out[i] = combo[slices.Index(spec.cats, c)]
		}
		return out
	}
	for gi := range l.groups {
		g := &l.groups[gi]
		if slices.Equal(g.cats, spec.cats) {
			base := s.Column(gi, combo, 0)
			for p, a := range g.parts {
				for j, dst := range at {
					set(base+p, dst, a, j)
				}
				for q, b := range g.parts {
					set(base+p, base+q, a, b)
				}
			}
		}
		for hi := range gi {
			h := &l.groups[hi]
			if !slices.Equal(union(g.cats, h.cats), spec.cats) {
				continue
			}
			gb, hb := s.Column(gi, pick(g.cats), 0), s.Column(hi, pick(h.cats), 0)
			for p, a := range g.parts {
				for q, b := range h.parts {
					set(gb+p, hb+q, a, b)
				}
			}
		}
	}
}

// refit returns the unit that the keyed sums should have had.
func (s *State) refit(unit int) int {
	n := len(s.Columns) + 1
	size := math.Inf(1)
	for j := range n {
		if d := s.S[j*n+j]; d > 0 {
			size = math.Min(size, d)
		}
	}
	need, best := false, -1074
	see := func(t *keyTable) {
		over, coarse := t.fits(size)
		need = need || over || coarse
		best = max(best, t.betterUnit())
	}
	for _, e := range s.epochs {
		for _, t := range e.tables {
			see(t)
		}
		for _, t := range e.clusters {
			if t != nil && !s.Dropped {
				see(t)
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

// fullFrame makes a frame from all rows of the state.
func (s *State) fullFrame() *Frame {
	return buildFrame(previousRows(s.lay, s.epochs), s.lay.p0, s.lay.shifted())
}
