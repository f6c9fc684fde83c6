package accum

import (
	"bytes"
	"cmp"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// Header is what goes with a table of records: how to read it, and all that is not
// a sum. Headers of tables over disjoint rows are joined by Join.
type Header struct {
	Sections []*Section `json:"sections"`
	// Fourth and Clusters say which sums there are: fourth moments, and the second
	// moments of the clusters of which keys of the design.
	Fourth   bool  `json:"fourth"`
	Clusters []int `json:"clusters"`

	Tally     stream.Tally       `json:"tally"`
	Read      int64              `json:"read"`
	Malformed int64              `json:"malformed"`
	Segments  int64              `json:"segments"`
	Bytes     int64              `json:"bytes"`
	Unread    stream.Unread      `json:"unread"`
	Problems  []*stream.RowError `json:"problems,omitempty"`
}

// Section is the rows that were summed in one frame.
type Section struct {
	Frame    *Frame `json:"frame"`
	Extended bool   `json:"extended"`
	Unit     int    `json:"unit"` // of keyed sums

	Rows    int64   `json:"rows"`
	Freq    int64   `json:"frequencies"`
	All     int64   `json:"all"` // of which NonZero are counted: rows, or frequencies
	Reach   real    `json:"reach"`
	NonZero []int64 `json:"nonzero"`
	Value   reals   `json:"value"`
	Varied  []bool  `json:"varied"`

	Lone     []*loneTracker `json:"lone"` // by key
	Tables   []partials     `json:"tables"`
	Pairs    []partials     `json:"pairs"`
	Clusters []partials     `json:"clusters"` // by key
	Units    *partials      `json:"units,omitempty"`

	id string // see ID
}

// plain leaves nothing in the description that hangs on which worker saw which rows:
// counts that are only known to be two or more of both kinds, cells that stand for
// many.
func (s *Section) plain() {
	for j, n := range s.NonZero {
		if n >= 2 && n <= s.All-2 {
			s.NonZero[j], s.Varied[j] = 2, true // nothing hangs on their values
		}
	}
	settleVaried(s.Value, s.Varied)
	for i, t := range s.Lone {
		s.Lone[i] = t.plain()
	}
}

// plain is t without cells that are of no more use: which came first is chance.
func (t *loneTracker) plain() *loneTracker {
	if t == nil {
		return nil
	}
	u := *t
	u.value = slices.Clone(t.value)
	for j := range u.value {
		if u.zero[j].in == inMany {
			u.value[j] = 0
		}
	}
	return &u
}

// ID identifies the frame, the unit and the arithmetic of a section, which must not be
// changed afterwards: sections with one ID are added.
func (s *Section) ID() string {
	if s.id != "" {
		return s.id
	}
	b, err := json.Marshal(struct {
		F *Frame
		X bool
		U int
	}{s.Frame, s.Extended, s.Unit})
	if err != nil {
		panic(err) // plain data
	}
	h := sha256.Sum256(b)
	s.id = hex.EncodeToString(h[:16])
	return s.id
}

// real is a float64 that keeps its value in JSON, NaN and infinities included.
type real float64

func (x real) MarshalJSON() ([]byte, error) {
	f := float64(x)
	if math.IsNaN(f) || math.IsInf(f, 0) {
		return json.Marshal(strconv.FormatFloat(f, 'g', -1, 64))
	}
	return strconv.AppendFloat(nil, f, 'g', -1, 64), nil
}

func (x *real) UnmarshalJSON(b []byte) error {
	f, err := strconv.ParseFloat(string(bytes.Trim(b, `"`)), 64)
	*x = real(f)
	return err
}

type reals []float64

func (v reals) MarshalJSON() ([]byte, error) {
	if v == nil {
		return []byte("null"), nil
	}
	out := []byte{'['}
	for i, x := range v {
		if i > 0 {
			out = append(out, ',')
		}
		b, _ := real(x).MarshalJSON()
		out = append(out, b...)
	}
	return append(out, ']'), nil
}

func (v *reals) UnmarshalJSON(b []byte) error {
	var list []real
	if err := json.Unmarshal(b, &list); err != nil {
		return err
	}
	*v = nil
	if list != nil {
		*v = make(reals, len(list))
	}
	for i, x := range list {
		(*v)[i] = float64(x)
	}
	return nil
}

type frameDoc struct {
	Terms          int   `json:"terms"`
	Shift          reals `json:"shift"`
	Scale          reals `json:"scale"`
	White          bool  `json:"white"`
	T              reals `json:"triangle"`
	YShift         real  `json:"outcome_shift"`
	YScale         real  `json:"outcome_scale"`
	H              reals `json:"fit"`
	Sample         real  `json:"sample"`
	Cond           real  `json:"condition"`
	Digits         real  `json:"digits"`
	ConstantDigits real  `json:"constant_digits"`
	LowSquares     reals `json:"low_squares"`
	LowRows        real  `json:"low_rows"`
}

// MarshalJSON writes the frame so that UnmarshalJSON gives the same bits.
func (f *Frame) MarshalJSON() ([]byte, error) {
	return json.Marshal(frameDoc{f.Terms, f.Shift, f.Inv, f.White, f.T, real(f.YShift), real(f.YInv), f.H,
		real(f.Sample), real(f.Cond), real(f.Digits), real(f.constantDigits), f.lowSquares, real(f.lowRows)})
}

// UnmarshalJSON is the inverse of MarshalJSON.
func (f *Frame) UnmarshalJSON(b []byte) error {
	var d frameDoc
	if err := json.Unmarshal(b, &d); err != nil {
		return err
	}
	*f = Frame{d.Terms, d.Shift, d.Scale, d.White, d.T, float64(d.YShift), float64(d.YScale), d.H,
		float64(d.Sample), float64(d.Cond), float64(d.Digits), float64(d.ConstantDigits), d.LowSquares, float64(d.LowRows)}
	return nil
}

// fits reports whether the lengths of the frame are those of a layout.
func (f *Frame) fits(l *layout) bool {
	white := 0
	if f.White {
		white = l.p0 * l.p0
	}
	return f.Terms == l.p0 && len(f.Shift) == l.nx && len(f.Inv) == l.nx && len(f.H) == l.p0 && len(f.T) == white
}

type partialsDoc struct {
	Max   real  `json:"max"`
	Count int64 `json:"count"`
	Bad   bool  `json:"bad,omitempty"`
}

func (p partials) MarshalJSON() ([]byte, error) {
	return json.Marshal(partialsDoc{real(p.max), p.count, p.bad})
}

func (p *partials) UnmarshalJSON(b []byte) error {
	var d partialsDoc
	err := json.Unmarshal(b, &d)
	*p = partials{float64(d.Max), d.Count, d.Bad}
	return err
}

type whereDoc struct {
	In   uint8  `json:"in"`
	Bits uint64 `json:"bits,omitempty"`
	Text []byte `json:"text,omitempty"`
}

type loneDoc struct {
	NonZero []whereDoc `json:"nonzero"`
	Zero    []whereDoc `json:"zero"`
	Value   reals      `json:"value"`
}

func (t *loneTracker) MarshalJSON() ([]byte, error) {
	list := func(ws []where) []whereDoc {
		out := make([]whereDoc, len(ws))
		for i, w := range ws {
			out[i] = whereDoc{w.in, w.key.Bits, []byte(w.key.Text)}
		}
		return out
	}
	return json.Marshal(loneDoc{list(t.nonzero), list(t.zero), t.value})
}

func (t *loneTracker) UnmarshalJSON(b []byte) error {
	var d loneDoc
	if err := json.Unmarshal(b, &d); err != nil {
		return err
	}
	if len(d.NonZero) != len(d.Zero) || len(d.Zero) != len(d.Value) {
		return errors.New("lengths differ")
	}
	*t = *newLoneTracker(len(d.Zero))
	t.value = d.Value
	fill := func(ws []where, ds []whereDoc) {
		for i, w := range ds {
			ws[i] = where{w.In, stream.KeyValue{Bits: w.Bits, Text: string(w.Text)}}
			if w.In == inMany {
				t.open--
			}
		}
	}
	fill(t.nonzero, d.NonZero)
	fill(t.zero, d.Zero)
	return nil
}

// Header describes the sums of a state that was made with Needs.Retain.
func (s *State) Header() *Header {
	h := &Header{Fourth: s.needs.Fourth, Clusters: slices.Clone(s.needs.Clusters), Tally: s.Tally, Read: s.Read, Malformed: s.Malformed, Segments: s.Segments,
		Bytes: s.Bytes, Unread: s.Unread, Problems: s.Problems}
	for _, e := range s.retained() {
		c := &Section{Frame: e.frame, Extended: e.extended, Unit: e.unit, Rows: e.rows, Freq: e.freq, Reach: real(e.reach),
			NonZero: slices.Clone(e.nonzero), Value: slices.Clone(e.value), Varied: e.varied, Lone: slices.Clone(e.lone)}
		if c.All = e.rows; s.Design.Spec.WeightKind == stream.Frequency && s.Design.Spec.Weight != "" {
			c.All = e.freq
		}
		c.plain()
		for _, t := range e.tables {
			c.Tables = append(c.Tables, t.partials)
		}
		for _, t := range e.pairs {
			c.Pairs = append(c.Pairs, partials{max: t.max, bad: t.bad})
		}
		for _, g := range e.clusters {
			if g == nil {
				c.Clusters = append(c.Clusters, partials{})
			} else {
				c.Clusters = append(c.Clusters, g.seen)
			}
		}
		if e.units != nil {
			seen := e.units.seen
			c.Units = &seen
		}
		h.Sections = append(h.Sections, c)
	}
	return h
}

// retained lists the epochs in the order of their IDs.
func (s *State) retained() []*epoch {
	ids := map[*epoch]string{}
	for _, e := range s.epochs {
		ids[e] = (&Section{Frame: e.frame, Extended: e.extended, Unit: e.unit}).ID()
	}
	return slices.SortedFunc(maps.Keys(ids), func(a, b *epoch) int { return cmp.Compare(ids[a], ids[b]) })
}

// Records calls f with every record of a state that was made with Needs.Retain, in
// order. hide, if not nil, gives what is put in place of a cluster's key: the state
// is of no more use then. The record is valid until f returns.
func (s *State) Records(f func(*Record) error, hide Hide) error {
	var r Record
	for _, n := range slices.Sorted(maps.Keys(s.checks)) {
		q := s.quotes[n]
		c, run, n := s.checks[n], n>>runShift, n&(RunBase(1)-1)
		r = Record{What: SegmentCheck, Table: run, Key: binary.BigEndian.AppendUint64(nil, uint64(n)), Label: strconv.Itoa(n), Rows: c.rows, Sums: []Whole{fixed{0, c.sum}.whole()}}
		if q != 0 {
			r.Sums = append(r.Sums, fixed{0, uint64(q)}.whole())
		}
		if err := f(&r); err != nil {
			return err
		}
	}
	es := s.retained()
	number := func(what What, section, table int, x *superSum) error {
		if x.special != 0 {
			return errRange
		}
		r = Record{What: what, Section: section, Table: table, Sums: r.Sums[:0]}
		r.Unit, r.Sums = x.limbs(r.Sums)
		return f(&r)
	}
	for i, e := range es {
		if err := number(WeightSum, i, 0, &e.weight); err != nil {
			return err
		}
	}
	for i, e := range es {
		for j := range e.gramX {
			if err := number(SecondMoment, i, j, &e.gramX[j]); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for j := range e.fourX {
			if err := number(FourthMoment, i, j, &e.fourX[j]); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for ti, t := range e.tables {
			if err := tableRecords(LevelSums, i, ti, t, s.combination, f); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for pi, t := range e.pairs {
			if err := pairTableRecords(PairSums, i, pi, t, &s.lay.pairs[pi], s.combination, f); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for k, g := range e.clusters {
			if g == nil {
				continue
			}
			if err := s.clusterRecords(ClusterSums, i, k, g, f, hide); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		if e.units == nil {
			continue
		}
		if err := s.clusterRecords(UnitSums, i, s.lay.design.Sweep, e.units, f, hide); err != nil {
			return err
		}
	}
	return nil
}

// combination encodes a combination of a table, as numbered in pass one;
// combinationAt as numbered in the state.
func (s *State) combination(table int, id int32) (key []byte, label string) {
	return s.combinationAt(table, s.place[table][id])
}

func (s *State) combinationAt(table int, id int32) (key []byte, label string) {
	levels := s.combos[table].keys[id]
	for i, c := range s.lay.tables[table].cats {
		k := s.Levels[c][levels[i]]
		key = appendPart(key, k)
		if i > 0 {
			label += " and "
		}
		label += stream.FormatKey(s.Design.Categories[c].KeyColumn, s.Design.Spec.Zone, k.KeyValue)
	}
	return key, label
}

func sortRecords(rs []*Record, f func(*Record) error) error {
	slices.SortFunc(rs, func(a, b *Record) int { return compareBytes(a.Key, b.Key) })
	for _, r := range rs {
		if err := f(r); err != nil {
			return err
		}
	}
	return nil
}

func wholes(dst []Whole, fs []fixed) []Whole {
	for _, x := range fs {
		dst = append(dst, x.whole())
	}
	return dst
}

// tableRecords hands out the sums of a table; place encodes the key of a number.
func tableRecords(what What, section, table int, t *keyTable, place func(int, int32) ([]byte, string), f func(*Record) error) error {
	var rs []*Record
	for id, n := range t.rows {
		if n == 0 {
			continue
		}
		r := &Record{What: what, Section: section, Table: table, Rows: n, Unit: t.unit, Sums: wholes(nil, t.fix(int32(id)))}
		r.Key, r.Label = place(table, int32(id))
		rs = append(rs, r)
	}
	return sortRecords(rs, f)
}

func pairTableRecords(what What, section, table int, t *pairTable, spec *pairSpec, place func(int, int32) ([]byte, string), f func(*Record) error) error {
	var rs []*Record
	for sh := range t.shards {
		st := &t.shards[sh].pairStore
		st.each(t.width, func(a, b, i int) {
			r := &Record{What: what, Section: section, Table: table, Unit: t.unit}
			ka, la := place(spec.g, int32(a*pairShards+sh))
			kb, lb := place(spec.h, int32(b))
			r.Key, r.Label = append(ka, kb...), la+" with "+lb
			if t.width == 0 {
				r.Rows = st.n[i]
			} else {
				r.Sums = wholes(nil, st.sums[i*t.width:(i+1)*t.width])
			}
			rs = append(rs, r)
		})
	}
	return sortRecords(rs, f)
}

// Hide puts a text in place of a cluster's key; ok is false for keys that stay.
type Hide func(key int, k Key) (text string, ok bool)

// storeRecords hands out the sums of a store in order of key; label may be nil.
func storeRecords(what What, section, table int, g *groupStore, label func(Key) string, f func(*Record) error) error {
	r := Record{What: what, Section: section, Table: table, Unit: g.unit}
	return mergeGroups([]*groupStore{g}, func(parts []groupPart) error {
		k := partKey(g.kind, parts)
		r.Key, r.Label = appendKey(r.Key[:0], k), ""
		if label != nil {
			r.Label = strings.Clone(label(k)) // the text of k is overwritten
		}
		r.Rows, r.Sums = parts[0].rows, wholes(r.Sums[:0], parts[0].sums)
		return f(&r)
	})
}

func partKey(kind stream.Kind, parts []groupPart) Key {
	k := Key{Kind: kind}
	if kind == stream.Text {
		k.Text = parts[0].text
	} else {
		k.Bits = keyOf(kind, parts[0].ord)
	}
	return k
}

// clusterRecords is storeRecords of the clusters of a key.
func (s *State) clusterRecords(what What, section, key int, g *groupStore, f func(*Record) error, hide Hide) error {
	label := func(k Key) string { return s.Design.KeyLabel(key, k.KeyValue) }
	if hide == nil {
		return storeRecords(what, section, key, g, label, f)
	}
	if _, ok := hide(key, Key{Kind: g.kind}); !ok {
		return storeRecords(what, section, key, g, label, f)
	}
	// Hidden keys sort in another order.
	to := g.pool.store(stream.Text, g.width, g.unit)
	in := newGroupLoader(to)
	err := mergeGroups([]*groupStore{g}, func(parts []groupPart) error {
		text, _ := hide(key, partKey(g.kind, parts))
		return in.add(Key{stream.Text, stream.KeyValue{Text: text}}, parts[0].rows, parts[0].sums)
	})
	if err == nil {
		err = in.end()
	}
	if err != nil {
		return err
	}
	return storeRecords(what, section, key, to, nil, f)
}

// Conceal puts hidden keys into what the header knows of single clusters, and leaves out
// what was found in rows that could not be read.
func (h *Header) Conceal(kinds []stream.Kind, hide Hide) {
	h.Problems = slices.Clone(h.Problems)
	for i, p := range h.Problems {
		h.Problems[i] = &stream.RowError{Pos: p.Pos, Found: "(hidden)", Want: p.Want}
	}
	for _, c := range h.Sections {
		for key, t := range c.Lone {
			c.Lone[key] = t.conceal(key, kinds[key], hide)
		}
	}
}

func (t *loneTracker) conceal(key int, kind stream.Kind, hide Hide) *loneTracker {
	if t == nil {
		return nil
	}
	if _, ok := hide(key, Key{Kind: kind}); !ok {
		return t
	}
	n := *t
	n.nonzero, n.zero = slices.Clone(t.nonzero), slices.Clone(t.zero)
	for _, ws := range [][]where{n.nonzero, n.zero} {
		for i := range ws {
			if ws[i].in == inOne {
				text, _ := hide(key, Key{kind, ws[i].key})
				ws[i].key = stream.KeyValue{Text: text}
			}
		}
	}
	return &n
}

// Join adds what o knows of other rows. Sections are in the order of their IDs.
func (h *Header) Join(o *Header) error {
	if h.Fourth != o.Fourth || !slices.Equal(h.Clusters, o.Clusters) {
		return errors.New("they hold different sums")
	}
	h.Tally.Add(&o.Tally)
	h.Read += o.Read
	h.Malformed += o.Malformed
	h.Segments += o.Segments
	h.Bytes += o.Bytes
	h.Unread.Add(o.Unread)
	// Whatever the order of joining, the first ones by place are kept.
	h.Problems = slices.Concat(h.Problems, o.Problems)
	slices.SortStableFunc(h.Problems, func(a, b *stream.RowError) int {
		p, q := &a.Pos, &b.Pos
		return cmp.Or(cmp.Compare(p.File, q.File), cmp.Compare(p.Group, q.Group), cmp.Compare(p.Line, q.Line), cmp.Compare(p.Offset, q.Offset),
			cmp.Compare(p.Row, q.Row), cmp.Compare(p.Column, q.Column), cmp.Compare(a.Found, b.Found))
	})
	h.Problems = h.Problems[:min(len(h.Problems), stream.MaxProblems)]
	for _, c := range o.Sections {
		i, ok := slices.BinarySearchFunc(h.Sections, c.ID(), func(s *Section, id string) int { return cmp.Compare(s.ID(), id) })
		if !ok {
			h.Sections = slices.Insert(h.Sections, i, c)
		} else if err := h.Sections[i].join(c); err != nil {
			return err
		}
	}
	return nil
}

var errSections = errors.New("their frames are alike and their sums are not")

func (s *Section) join(o *Section) error {
	if len(s.NonZero) != len(o.NonZero) || len(s.Value) != len(o.Value) || len(s.Varied) != len(o.Varied) || len(s.Lone) != len(o.Lone) ||
		len(s.Tables) != len(o.Tables) || len(s.Pairs) != len(o.Pairs) || len(s.Clusters) != len(o.Clusters) {
		return errSections
	}
	s.Rows += o.Rows
	s.Freq += o.Freq
	s.All += o.All
	s.Reach = max(s.Reach, o.Reach)
	s.NonZero = slices.Clone(s.NonZero)
	for j, n := range o.NonZero {
		s.NonZero[j] += n
	}
	s.Value, s.Varied = slices.Clone(s.Value), slices.Clone(s.Varied)
	joinVaried(s.Value, s.Varied, o.Value, o.Varied)
	for k, t := range o.Lone {
		switch {
		case t == nil:
		case s.Lone[k] == nil || len(s.Lone[k].nonzero) != len(t.nonzero):
			return errSections
		default:
			s.Lone[k].mergeFrom(t)
		}
	}
	if (s.Units == nil) != (o.Units == nil) {
		return errSections
	} else if s.Units != nil {
		s.Units.join(o.Units)
	}
	for _, p := range [][2][]partials{{s.Tables, o.Tables}, {s.Pairs, o.Pairs}, {s.Clusters, o.Clusters}} {
		for i := range p[1] {
			p[0][i].join(&p[1][i])
		}
	}
	s.plain()
	return nil
}

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
	for n := 0; ; n++ {
		r, err := next()
		if err != nil {
			return nil, err
		}
		if r == nil {
			break
		}
		if n%4096 == 0 && ctx.Err() != nil {
			return nil, ctx.Err()
		}
		if err := ld.take(r, p); err != nil {
			return nil, fmt.Errorf("%s sums of table %d: %w", r.What, r.Table, err)
		}
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

// sumsLoader puts records into epochs.
type sumsLoader struct {
	lay    *layout
	num    *numbering
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
