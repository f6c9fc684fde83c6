package accum

import (
	"bufio"
	"encoding/binary"
	"encoding/json"
	"errors"
	"hash/crc32"
	"math"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// archive writes sums or reads them again: the same calls do both, so that the two
// cannot differ. Numbers are little-endian. The first error stays, and later calls do
// nothing. What is read has been checked for damage before.
type archive struct {
	w   *bufio.Writer // nil while reading
	r   *bufio.Reader
	err error
	buf [16]byte
	blk []byte
}

var errArchive = errors.New("the sums in it do not fit the model")

func (a *archive) reading() bool { return a.w == nil }

func (a *archive) raw(p []byte) {
	switch {
	case a.err != nil:
	case a.reading():
		a.err = readAll(a.r, p)
	default:
		_, a.err = a.w.Write(p)
	}
	if a.err != nil && a.reading() {
		clear(p)
	}
}

func readAll(r *bufio.Reader, p []byte) error {
	for len(p) > 0 {
		n, err := r.Read(p)
		if p = p[n:]; err != nil && len(p) > 0 {
			return errArchive
		}
	}
	return nil
}

func (a *archive) word(x *uint64) {
	p := a.buf[:8]
	binary.LittleEndian.PutUint64(p, *x)
	a.raw(p)
	*x = binary.LittleEndian.Uint64(p)
}

func (a *archive) int64(x *int64) {
	u := uint64(*x)
	a.word(&u)
	*x = int64(u)
}

func (a *archive) int(x *int) {
	u := uint64(*x)
	a.word(&u)
	*x = int(u)
}

func (a *archive) float(x *float64) {
	u := math.Float64bits(*x)
	a.word(&u)
	*x = math.Float64frombits(u)
}

func (a *archive) bool(x *bool) {
	p := a.buf[:1]
	p[0] = 0
	if *x {
		p[0] = 1
	}
	a.raw(p)
	*x = p[0] != 0
}

// size is a length that what is read must have had when it was written.
func (a *archive) size(n int) {
	m := n
	if a.int(&m); m != n && a.err == nil {
		a.err = errArchive
	}
}

// count is a length that is not known while reading.
func (a *archive) count(n int) int {
	a.int(&n)
	if a.err != nil || n < 0 {
		return 0
	}
	return n
}

func (a *archive) int64s(x []int64) {
	a.size(len(x))
	for i := range x {
		a.int64(&x[i])
	}
}

func (a *archive) floats(x []float64) {
	a.size(len(x))
	for i := range x {
		a.float(&x[i])
	}
}

func (a *archive) fixed(x []fixed) {
	for i := range x {
		p := a.buf[:16]
		binary.LittleEndian.PutUint64(p, x[i].lo)
		binary.LittleEndian.PutUint64(p[8:], uint64(x[i].hi))
		a.raw(p)
		x[i] = fixed{int64(binary.LittleEndian.Uint64(p[8:])), binary.LittleEndian.Uint64(p)}
	}
}

// bytes is a run of any length.
func (a *archive) bytes(b *[]byte) {
	n := a.count(len(*b))
	if a.reading() {
		var p []byte
		for len(p) < n && a.err == nil { // by pieces: a wrong length fails before it takes memory
			k := min(n-len(p), 1<<20)
			p = append(p, make([]byte, k)...)
			a.raw(p[len(p)-k:])
		}
		*b = p
		return
	}
	a.raw(*b)
}

// doc is plain data, by pointer.
func (a *archive) doc(v any) {
	var b []byte
	if !a.reading() && a.err == nil {
		b, a.err = json.Marshal(v)
	}
	if a.bytes(&b); a.reading() && a.err == nil {
		if json.Unmarshal(b, v) != nil {
			a.err = errArchive
		}
	}
}

func (a *archive) partials(p *partials) {
	a.float(&p.max)
	a.int64(&p.count)
	a.bool(&p.bad)
}

// super is exact sums.
func (a *archive) super(v ...superSum) {
	a.size(len(v))
	r := &Record{}
	for i := range v {
		if !a.reading() {
			r.Unit, r.Sums = v[i].limbs(r.Sums[:0])
		}
		special := int(v[i].special)
		a.int(&special)
		a.int(&r.Unit)
		n := a.count(len(r.Sums))
		if a.reading() {
			if n > superDigits {
				a.err = errArchive
				return
			}
			r.Sums = make([]Whole, n)
		}
		for j := range r.Sums {
			a.raw(r.Sums[j][:])
		}
		if !a.reading() || a.err != nil {
			continue
		}
		if v[i].setLimbs(r) != nil {
			a.err = errArchive
		}
		v[i].special = uint8(special)
	}
}

// table is sums by key, between folds.
func (a *archive) table(t *keyTable) {
	n := a.count(len(t.rows))
	a.size(t.width)
	a.size(t.unit)
	for id := 0; id < n && a.err == nil; id++ {
		if a.reading() {
			t.grow(int32(id))
		}
		if a.int64(&t.rows[id]); t.rows[id] != 0 {
			a.fixed(t.fix(int32(id)))
		}
	}
	a.partials(&t.partials)
}

// pairTable is sums by pairs of keys, between folds.
func (a *archive) pairTable(t *pairTable) {
	a.size(t.width)
	a.size(t.unit)
	entry := func(st *pairStore, i int) {
		if t.width == 0 {
			a.int64(&st.n[i])
		} else {
			a.fixed(st.sums[i*t.width : (i+1)*t.width])
		}
	}
	for s := range t.shards {
		st := &t.shards[s].pairStore
		more := true
		if a.reading() {
			for a.bool(&more); more && a.err == nil; a.bool(&more) {
				var key uint64
				if a.word(&key); a.err == nil {
					entry(st, t.place(st, key))
				}
			}
			continue
		}
		st.each(t.width, func(x, y, i int) {
			key := pairKey(int32(x*pairShards+s), int32(y))
			a.bool(&more)
			a.word(&key)
			entry(st, i)
		})
		more = false
		a.bool(&more)
	}
	a.float(&t.max)
	a.bool(&t.bad)
}

// store is the sums of clusters, as blocks of runs: those on scratch as they are, then
// those in memory, in no order.
func (a *archive) store(s *groupStore) {
	a.size(s.width)
	a.size(s.unit)
	a.partials(&s.seen)
	if a.reading() {
		a.readStore(s)
		return
	}
	var end int64
	for _, r := range s.runs {
		for i := range len(r.blocks) - 1 {
			n := r.blocks[i+1] - r.blocks[i]
			a.blk = grown(a.blk, 0, int(n), 0)
			if _, err := r.file.ReadAt(a.blk, r.blocks[i]); err != nil && a.err == nil {
				a.err = r.failed(err)
			}
			a.int64(&n)
			a.raw(a.blk)
		}
	}
	e := blockEncoder{buf: a.blk[:0]}
	write := func() {
		b := e.end()
		n := int64(len(b))
		a.int64(&n)
		a.raw(b)
	}
	var g groupSums
	per := s.blockKeys()
	for p := range s.tables {
		t := &s.tables[p]
		for id := range t.n {
			s.read(ref{ordOf(s.kind, t.record(s, id)[0].lo), uint64(p)<<32 | uint64(id)}, &g)
			if e.add(&g, s.text); e.keys == per {
				write()
			}
		}
	}
	if e.keys > 0 {
		write()
	}
	a.blk = e.buf[:0]
	a.int64(&end)
}

func (a *archive) readStore(s *groupStore) {
	in := newGroupLoader(s)
	var b block
	for a.err == nil {
		var n int64
		if a.int64(&n); n == 0 {
			break
		}
		if n < blockHead || n > math.MaxInt32 {
			a.err = errArchive
			return
		}
		b.raw = grown(b.raw, 0, int(n)+readSlack, 0)
		clear(b.raw[n:])
		a.raw(b.raw[:n])
		p := b.raw[blockHead:n]
		keys := int(binary.LittleEndian.Uint32(b.raw[8:]))
		if a.err != nil {
			return
		}
		if binary.LittleEndian.Uint32(b.raw[4:]) != crc32.Checksum(p, castagnoli) || keys > len(p) || b.decode(s, b.raw[blockHead:], len(p), keys, s.width) != nil {
			a.err = errArchive
			return
		}
		for i := range b.recs {
			g := &b.recs[i]
			k := Key{Kind: s.kind}
			if s.text {
				k.Text = strings.Clone(g.text) // the block's goes with the next
			} else {
				k.Bits = keyOf(s.kind, g.ord)
			}
			if err := in.add(k, g.rows, g.sums); err != nil {
				a.err = err
				return
			}
		}
	}
	if err := in.end(); a.err == nil {
		a.err = err
	}
}

// interner is keys in the order of their numbers.
func (a *archive) interner(in *interner) {
	n := a.count(in.size())
	for i := 0; i < n && a.err == nil; i++ {
		var b []byte
		if !a.reading() {
			b = appendKey(nil, in.key(int32(i)))
		}
		if a.bytes(&b); a.reading() && a.err == nil {
			k, err := parseKey(in.kind, b)
			if err != nil || in.put(k) != int32(i) {
				a.err = errArchive
			}
		}
	}
}

// numbering is levels and combinations in the order of their numbers.
func (a *archive) numbering(n *numbering) {
	for _, in := range n.levels {
		a.interner(in)
	}
	for ti, t := range n.combos {
		if t == nil {
			continue
		}
		size := a.count(t.size())
		for id := 0; id < size && a.err == nil; id++ {
			levels := make([]int32, t.cats)
			if !a.reading() {
				t.split(int32(id), levels)
			}
			for i := range levels {
				x := int(levels[i])
				a.int(&x)
				levels[i] = int32(x)
			}
			if a.reading() && a.err == nil {
				if to, err := n.combo(ti, levels); err != nil || to != int32(id) {
					a.err = errArchive
				}
			}
		}
	}
}

// lone replaces a tracker that has seen nothing, while reading.
func (a *archive) lone(t *loneTracker) {
	n := len(t.nonzero)
	if a.doc(t); a.err == nil && len(t.nonzero) != n {
		a.err = errArchive
	}
}

// cells is unique rows, of which every worker has handed over its own.
func (a *archive) cells(st *cellStore) {
	dropped := st.dropped.Load()
	if a.bool(&dropped); dropped {
		st.dropped.Store(true)
		return
	}
	a.size(st.words)
	n := a.count(st.table.size())
	for i := 0; i < n && a.err == nil; i++ {
		key := make([]uint64, st.words)
		if !a.reading() {
			copy(key, st.table.key(i))
		}
		for j := range key {
			a.word(&key[j])
		}
		if a.reading() && a.err == nil && st.table.put(hashCell(key), key) != int32(i) {
			a.err = errArchive
		}
	}
	a.table(st.table.sums)
	folds := st.folds.Load()
	a.int64(&folds)
	st.folds.Store(folds)
	st.size.Store(int64(st.table.size()))
}

// first is the sums of pass one, which the workers have joined in w.
func (a *archive) first(w *firstWorker) {
	b := w.budget
	a.super(w.gramX...)
	if w.q != nil {
		a.super(w.fourX...)
	}
	a.numbering(b.num)
	for _, s := range b.nested {
		a.interner(s.in)
	}
	for _, t := range w.tables {
		a.table(t)
	}
	for _, p := range w.pairs {
		a.pairTable(p.t)
	}
	if w.cells != nil {
		a.cells(w.cells.store)
	}
	for _, t := range w.lone {
		if t != nil {
			a.lone(t)
		}
	}
	dropped := b.dropped.Load()
	a.bool(&dropped)
	if dropped && a.reading() && a.err == nil {
		b.dropped.Store(true)
		b.giveUp()
	}
	for _, g := range w.keyed() {
		a.store(g.store)
	}
	a.float(&w.reach)
	one := []superSum{w.weight}
	a.super(one...)
	w.weight = one[0]
	a.int64(&w.freq)
	a.int64(&w.rows)
	a.int64s(w.nonzero)
	a.int64s(w.zero)
	a.floats(w.value)
	for j := range w.varied {
		a.bool(&w.varied[j])
	}
	a.doc(&w.eval.Tally)
}

// second is the sums of pass two, which the workers have joined in w.
func (a *archive) second(w *secondWorker) {
	for _, m := range w.allMeats() {
		a.bool(&m.used)
		a.super(m.gramX...)
		for _, t := range m.tables {
			a.table(t)
		}
		for _, p := range m.pairs {
			a.pairTable(p.t)
		}
	}
	a.super(w.spreadX...)
	for i, g := range w.scores {
		a.store(g.store)
		a.lone(w.loneT[i])
		a.lone(w.loneC[i])
	}
	for _, c := range w.all.scores {
		a.interner(c.keys)
		for _, t := range c.sums {
			a.pairTable(t)
		}
	}
	for _, o := range w.all.owners {
		a.interner(o.in)
		for i := range o.of {
			x := uint64(o.of[i].Load())
			a.word(&x)
			o.of[i].Store(int32(x))
		}
		split := o.split.Load()
		a.bool(&split)
		o.split.Store(split)
	}
	a.float(&w.maxLever)
	a.int64(&w.loneRows)
	a.int64(&w.heavyCount)
	a.int64s(w.over)
	n := a.count(len(w.heavy))
	for i := 0; i < n && a.err == nil; i++ {
		if a.reading() {
			w.heavy = append(w.heavy, HeavyRow{Z: make([]float64, len(w.state.Columns)+1)})
		}
		h := &w.heavy[i]
		a.floats(h.Z)
		a.float(&h.Weight)
		a.int(&h.segment)
		a.int(&h.at)
	}
	n = a.count(len(w.highest))
	for i := 0; i < n && a.err == nil; i++ {
		if a.reading() {
			w.highest = append(w.highest, HighRow{})
		}
		h := &w.highest[i]
		a.float(&h.Leverage)
		a.doc(&h.Position)
		a.int(&h.segment)
		a.int64(&h.mark)
	}
	a.doc(&w.eval.Tally)
}

// problemDoc is a problem as plain data.
type problemDoc struct {
	Segment int              `json:"segment"`
	At      int              `json:"at"`
	Row     *stream.RowError `json:"row"`
}

// pass is what is known of the segments that are done.
func (a *archive) pass(p *pass) {
	a.int64(&p.read)
	a.int64(&p.bad)
	a.int64(&p.bytes)
	a.int64(&p.segments)
	a.doc(&p.unread)
	var list []problemDoc
	for _, q := range p.problems {
		list = append(list, problemDoc{q.segment, q.at, q.err})
	}
	if a.doc(&list); a.reading() {
		p.problems = nil
		for _, q := range list {
			p.problems = append(p.problems, problem{q.Segment, q.At, q.Row})
		}
	}
	n := a.count(len(p.checks))
	one := func(number int, c segCheck, q stream.Quotes, lines int64) {
		quotes := uint64(q)
		a.int(&number)
		a.int64(&c.rows)
		a.word(&c.sum)
		a.word(&quotes)
		a.int64(&lines)
		if a.reading() && a.err == nil {
			p.checks[number] = c
			if quotes != 0 {
				p.quotes[number], p.lines[number] = stream.Quotes(quotes), lines
			}
		}
	}
	if !a.reading() {
		for number, c := range p.checks {
			one(number, c, p.quotes[number], p.lines[number])
		}
		return
	}
	for i := 0; i < n && a.err == nil; i++ {
		one(0, segCheck{}, 0, 0)
	}
}
