package accum

import (
	"context"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// groupLoader puts sums into a store, key by key.
type groupLoader struct {
	store *groupStore
	part  [groupParts]*groupBatch
}

const loadKeys = 64 // keys of a partition that are put in at a time

func newGroupLoader(s *groupStore) *groupLoader { return &groupLoader{store: s} }

func (l *groupLoader) add(k Key, rows int64, sums []fixed) error {
	bits := k.Bits
	if l.store.text {
		bits = textHash(k.Text)
	}
	p := partOf(bits)
	b := l.part[p]
	if b == nil {
		b = new(groupBatch)
		l.part[p] = b
	}
	b.key = append(b.key, bits)
	if l.store.text {
		b.text = append(b.text, k.Text)
	}
	b.rows = append(b.rows, rows)
	b.fix = append(b.fix, sums...)
	if len(b.key) < loadKeys {
		return nil
	}
	defer b.reset()
	return l.store.add(p, b)
}

func (l *groupLoader) end() error {
	for p, b := range l.part {
		if b != nil && len(b.key) > 0 {
			if err := l.store.add(p, b); err != nil {
				return err
			}
			b.reset()
		}
	}
	return nil
}

// Load makes the state of a design from a header and its records, which next hands
// out in order until io.EOF is returned by it as nil. Of the sums only those in
// needs are taken. The state is the one that First would have left with
// Needs.Retain, up to what the records do not hold.
//
// Errors: those of next, *NoRowsError, *MemoryError, *ScratchError, and a
// description of records that do not fit the design.
func Load(ctx context.Context, d *stream.Design, h *Header, next func() (*Record, error), needs Needs, o Options) (s *State, err error) {
	l := newLayout(d)
	b := newBudget(l, &needs, &o, defaultUnit)
	b.keep = true
	b.pool = newGroupPool(&o)
	defer func() {
		if s == nil {
			b.pool.close()
		}
	}()
	ld := &sumsLoader{lay: l, num: b.num, needs: &needs}
	p := newPass(nil, nil)
	if need := ld.bytes(h); need > o.Memory {
		return nil, &MemoryError{What: fmt.Sprintf("%d frames of %d numeric columns", len(h.Sections), l.p0+1), Need: need, Have: o.Memory}
	}
	extended := len(h.Sections) > 0 && !slices.ContainsFunc(h.Sections, func(c *Section) bool { return !c.Extended })
	frames := map[string]*Frame{}
	for i, c := range h.Sections {
		e, err := ld.section(c, b, frames)
		if err != nil {
			return nil, fmt.Errorf("section %d: %w", i, err)
		}
		if extended {
			e.gramLow = make([]float64, len(e.gram))
		}
		ld.epochs = append(ld.epochs, e)
	}
	if err := takeAll(ctx, next, func(r *Record) error { return ld.take(r, p) }); err != nil {
		return nil, err
	}
	if err := ld.end(); err != nil {
		return nil, err
	}
	tally := h.Tally
	tally.Excluded -= h.Unread.Rows
	p.read, p.bad, p.bytes, p.segments, p.unread = h.Read, h.Malformed, h.Bytes, h.Segments, h.Unread
	for i, q := range h.Problems {
		p.problems = append(p.problems, problem{i, 0, q})
	}
	if len(ld.epochs) == 0 {
		return nil, &NoRowsError{Tally: tally, Malformed: h.Malformed}
	}
	ld.epochs[0].tally = tally
	s, refit, err := newState(l, &needs, p, ld.epochs, extended, b)
	if err != nil {
		return nil, err
	}
	s.pool = b.pool
	s.Coarse = s.Coarse || refit != b.unit
	if d.Sweep >= 0 && s.Rows > 0 {
		if err := s.sweep(); err != nil {
			return nil, err
		}
	}
	return s, nil
}

// takeAll takes every record that next hands out.
func takeAll(ctx context.Context, next func() (*Record, error), take func(*Record) error) error {
	for n := 0; ; n++ {
		r, err := next()
		if r == nil || err != nil {
			return err
		}
		if n%4096 == 0 && ctx.Err() != nil {
			return ctx.Err()
		}
		if err := take(r); err != nil {
			return fmt.Errorf("%s sums of table %d: %w", r.What, r.Table, err)
		}
	}
}

// sumsLoader puts records into epochs.
type sumsLoader struct {
	lay    *layout
	num    numberer
	needs  *Needs
	epochs []*epoch
	into   map[*groupStore]*groupLoader
	fix    []fixed
	one    superSum
}

// bytes bounds what the numbers of all sections take, before they are believed.
func (ld *sumsLoader) bytes(h *Header) int64 {
	each := 16.0
	if ld.needs.Retain {
		each += 8*superDigits + 8
	}
	n := float64(ld.lay.width) * float64(ld.lay.width+1) / 2
	if ld.needs.Fourth {
		p := float64(ld.lay.p0 + 2)
		n += p * (p + 1) * (p + 2) * (p + 3) / 24
	}
	return int64(min(each*n*float64(len(h.Sections)), 1<<60))
}

// errSweptFrames: sums of units cannot be moved to another frame.
var errSweptFrames = &AskError{"effects are swept out of sums in one frame; make the digests with --frame-from one of them"}

// frame is that of the sections so far, f if there is none.
func (ld *sumsLoader) frame(f *Frame) *Frame {
	if len(ld.epochs) > 0 {
		return ld.epochs[0].frame
	}
	return f
}

var errHeader = errors.New("the description of the sums does not fit the model")

func (ld *sumsLoader) section(c *Section, b *budget, frames map[string]*Frame) (*epoch, error) {
	l := ld.lay
	if c.Frame == nil || !c.Frame.fits(l) || len(c.NonZero) != l.p0 || len(c.Value) != l.p0 || len(c.Varied) != l.p0 ||
		len(c.Lone) != len(l.design.Keys) || len(c.Clusters) != len(l.design.Keys) || len(c.Tables) != len(l.tables) || len(c.Pairs) != len(l.pairs) {
		return nil, errHeader
	}
	text, err := json.Marshal(c.Frame)
	if err != nil {
		return nil, err
	}
	f := frames[string(text)]
	if f == nil {
		f = c.Frame
		frames[string(text)] = f
	}
	e := &epoch{frame: f, extended: c.Extended, unit: c.Unit, rows: c.Rows, freq: c.Freq, reach: float64(c.Reach),
		nonzero: c.NonZero, value: c.Value, varied: c.Varied, lone: c.Lone, clusters: make([]*groupStore, len(l.design.Keys))}
	e.gram = make([]float64, l.width*(l.width+1)/2)
	if ld.needs.Fourth {
		e.fourth = make([]float64, newQuartic(l.p0+2).size())
	}
	if ld.needs.Retain {
		e.gramX, e.fourX = make(superVec, len(e.gram)), make(superVec, len(e.fourth))
	}
	for i := range l.tables {
		t := newKeyTable(len(l.tables[i].prods), c.Unit)
		t.partials = c.Tables[i]
		e.tables = append(e.tables, t)
	}
	if k := l.design.Sweep; k >= 0 {
		if c.Units == nil || f != ld.frame(f) || len(ld.epochs) > 0 && c.Extended != ld.epochs[0].extended {
			return nil, errSweptFrames
		}
		n := l.p0 + 2
		if c.Extended {
			n *= 2
		}
		e.units = b.pool.store(l.design.Keys[k].Kind, n, c.Unit)
		e.units.seen = *c.Units
	}
	e.pairs = l.pairTables(c.Unit, l.design.Spec.Weight == "")
	for i, t := range e.pairs {
		t.max, t.bad = c.Pairs[i].max, c.Pairs[i].bad
	}
	w := l.p0 + 2
	for _, k := range ld.needs.Clusters {
		if c.Lone[k] == nil || len(c.Lone[k].nonzero) != l.p0 {
			return nil, errHeader
		}
		g := b.pool.store(l.design.Keys[k].Kind, w*(w+1)/2, c.Unit)
		g.seen = c.Clusters[k]
		e.clusters[k] = g
	}
	return e, nil
}

var errPlace = errors.New("a record has no place in the model")

func (ld *sumsLoader) take(r *Record, p *pass) error {
	if r.What == SegmentCheck {
		if len(r.Key) != 8 || len(r.Sums) < 1 || len(r.Sums) > 2 {
			return errPlace
		}
		// Runs after the first count on, so that numbers stay apart.
		n := int(binary.BigEndian.Uint64(r.Key)) + RunBase(r.Table)
		p.checks[n] = segCheck{r.Rows, r.Sums[0].fixed().lo}
		if len(r.Sums) == 2 {
			p.quotes[n] = stream.Quotes(r.Sums[1].fixed().lo)
		}
		return nil
	}
	if r.Section < 0 || r.Section >= len(ld.epochs) {
		return errPlace
	}
	e := ld.epochs[r.Section]
	number := func(v superVec, hi, lo []float64) error {
		if r.Table < 0 || r.Table >= len(hi) {
			return errPlace
		}
		x := &ld.one
		if v != nil {
			x = &v[r.Table]
		}
		if err := x.setLimbs(r); err != nil {
			return err
		}
		if lo == nil {
			hi[r.Table] = x.value()
		} else {
			w := x.wide()
			hi[r.Table], lo[r.Table] = w.Hi, w.Lo
		}
		return nil
	}
	switch r.What {
	case WeightSum:
		return e.weight.setLimbs(r)
	case SecondMoment:
		return number(e.gramX, e.gram, e.gramLow)
	case FourthMoment:
		if !ld.needs.Fourth {
			return nil
		}
		return number(e.fourX, e.fourth, nil)
	case LevelSums:
		if r.Table < 0 || r.Table >= len(e.tables) {
			return errPlace
		}
		t := e.tables[r.Table]
		id, rest, err := ld.combo(r.Table, r.Key)
		if err != nil {
			return err
		}
		return ld.level(t, id, rest, r)
	case PairSums:
		return ld.pair(e, r)
	case UnitSums:
		if e.units == nil || r.Table != ld.lay.design.Sweep {
			return errPlace
		}
		return ld.cluster(e.units, r)
	case ClusterSums:
		if r.Table < 0 || r.Table >= len(e.clusters) {
			return errPlace
		}
		g := e.clusters[r.Table]
		if g == nil {
			return nil
		}
		return ld.cluster(g, r)
	}
	return errPlace
}

// level adds a record to combination id of a table.
func (ld *sumsLoader) level(t *keyTable, id int32, rest []byte, r *Record) error {
	if len(rest) > 0 || len(r.Sums) != t.width || r.Unit != t.unit {
		return errPlace
	}
	t.grow(id)
	t.rows[id] += r.Rows
	mergeFixed(t.fix(id), ld.fixed(r.Sums))
	return nil
}

// cluster adds a record to a store.
func (ld *sumsLoader) cluster(g *groupStore, r *Record) error {
	if len(r.Sums) != g.width || r.Unit != g.unit {
		return errPlace
	}
	k, err := parseKey(g.kind, r.Key)
	if err != nil {
		return err
	}
	if ld.into == nil {
		ld.into = map[*groupStore]*groupLoader{}
	}
	if ld.into[g] == nil {
		ld.into[g] = newGroupLoader(g)
	}
	return ld.into[g].add(k, r.Rows, ld.fixed(r.Sums))
}

func (ld *sumsLoader) end() error {
	for _, in := range ld.into {
		if err := in.end(); err != nil {
			return err
		}
	}
	return nil
}

func (ld *sumsLoader) fixed(ws []Whole) []fixed {
	ld.fix = ld.fix[:0]
	for i := range ws {
		ld.fix = append(ld.fix, ws[i].fixed())
	}
	return ld.fix
}

// combo numbers the combination of a table that key starts with.
func (ld *sumsLoader) combo(table int, key []byte) (id int32, rest []byte, err error) {
	cats := ld.lay.tables[table].cats
	levels := make([]int32, len(cats))
	for i, c := range cats {
		var k Key
		if k, key, err = parsePart(ld.lay.design.Categories[c].Kind, key); err != nil {
			return 0, nil, err
		}
		if levels[i], err = ld.num.level(c, k); err != nil {
			return 0, nil, err
		}
	}
	if len(cats) == 1 {
		return levels[0], key, nil
	}
	id, err = ld.num.combo(table, levels)
	return id, key, err
}

func (ld *sumsLoader) pair(e *epoch, r *Record) error {
	if r.Table < 0 || r.Table >= len(e.pairs) {
		return errPlace
	}
	t, spec := e.pairs[r.Table], &ld.lay.pairs[r.Table]
	a, rest, err := ld.combo(spec.g, r.Key)
	if err != nil {
		return err
	}
	b, rest, err := ld.combo(spec.h, rest)
	if err != nil {
		return err
	}
	return ld.pairInto(t, a, b, rest, r)
}

// pairInto adds a record to a pair of a table.
func (ld *sumsLoader) pairInto(t *pairTable, a, b int32, rest []byte, r *Record) error {
	if len(rest) > 0 || len(r.Sums) != t.width || t.width > 0 && r.Unit != t.unit {
		return errPlace
	}
	key := pairKey(a, b)
	sh := &t.shards[key>>32%pairShards].pairStore
	at := t.place(sh, key)
	if t.width == 0 {
		sh.n[at] += r.Rows
	} else {
		mergeFixed(sh.sums[at*t.width:(at+1)*t.width], ld.fixed(r.Sums))
	}
	return nil
}
