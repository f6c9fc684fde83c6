package accum

import (
	"cmp"
	"math"
	"slices"
	"sync"
	"sync/atomic"
	"unsafe"

	"github.com/tallrow/tallrow/stream"
)

const (
	groupParts = 256
	firstRecs  = 8         // records of a partition's first page
	pageBytes  = 16 << 10  // of all others, or eight records
	chunkBytes = 16 << 10  // of texts
	sortBytes  = 2*16 + 8  // for each key: while a store is brought into order, and beside it
	minHeld    = 256 << 10 // sums that are always let into memory
)

// partOf is the partition of a key.
func partOf(k uint64) int { return int(hashInt(int64(k)) >> 56) }

// groupPool bounds what the stores of a pass hold in memory and writes them to
// scratch when that is exceeded. Adding is associative, so the sums do not depend
// on when that happens.
type groupPool struct {
	bound   int64
	few     int // keys that a worker numbers; 0 for as many as stay in the cache
	workers int
	scratch *scratch

	mu     sync.RWMutex // read: sums are being added; write: stores are written out
	held   atomic.Int64
	stores []*groupStore
	turns  int
	closed bool // sums are no longer wanted

	idleMu sync.Mutex
	idle   map[int][][]fixed // pages to use again, by length
}

// HeldClusters is the share of Options.Memory up to which sums of clusters stay in
// memory; beyond it they go to scratch. The rest is for folds, for merging, and for
// what a garbage-collected heap holds beside its content.
func HeldClusters(memory int64) int64 { return max(memory/8*5, minHeld) }

// ClusterBytes is what a cluster with sums of n numbers takes in memory.
func ClusterBytes(n int) int64 { return 16*int64(n+1) + sortBytes + 8 }

func newGroupPool(o *Options) *groupPool {
	return &groupPool{bound: cmp.Or(o.heldMost, HeldClusters(o.Memory)), few: o.fewMost, workers: max(1, o.Workers), scratch: newScratch(o), idle: map[int][][]fixed{}}
}

// turn spreads the partitions that workers start with.
func (p *groupPool) turn() int {
	p.turns++
	return p.turns * 101 % groupParts
}

func (p *groupPool) page(n int) []fixed {
	p.idleMu.Lock()
	defer p.idleMu.Unlock()
	list := p.idle[n]
	if len(list) == 0 {
		return make([]fixed, n)
	}
	page := list[len(list)-1]
	p.idle[n] = list[:len(list)-1]
	clear(page)
	return page
}

// close gives everything back. It may be called again.
func (p *groupPool) close() {
	p.mu.Lock()
	defer p.mu.Unlock()
	for _, s := range p.stores {
		s.closeRuns()
		s.tables = [groupParts]groupTable{}
		s.keys.Store(0)
	}
	p.stores, p.idle, p.closed = nil, nil, true
}

// drop gives back what the sums of some stores hold; what is added to them later is
// forgotten.
func (p *groupPool) drop(stores []*groupStore) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.closed {
		return
	}
	for _, s := range stores {
		s.closeRuns()
		for i := range s.tables {
			p.held.Add(-s.tables[i].empty(s))
		}
		s.tables = [groupParts]groupTable{}
		s.keys.Store(0)
		s.texts.Store(0)
		s.dropped = true
	}
	p.stores = slices.DeleteFunc(p.stores, func(s *groupStore) bool { return s.dropped })
	p.idleMu.Lock()
	defer p.idleMu.Unlock()
	clear(p.idle)
}

// relieve writes stores to scratch until half of the bound is free.
func (p *groupPool) relieve() error {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.closed || p.held.Load() <= p.bound {
		return nil // another worker did
	}
	for p.held.Load() > p.bound/2 {
		s := slices.MaxFunc(p.stores, func(a, b *groupStore) int { return cmp.Compare(a.held(), b.held()) })
		if s.keys.Load() == 0 {
			return nil
		}
		if err := s.spill(); err != nil {
			return err
		}
	}
	return nil
}

// groupStore holds, for each key of a clustering, the number of rows and a vector
// of fixed-point sums. Keys are spread over partitions by their hash.
type groupStore struct {
	pool  *groupPool
	kind  stream.Kind
	text  bool
	width int // of the sums, owners included
	unit  int
	// owners is the number of elements behind the sums that are no sums, see owner.
	owners int
	head   int // elements of a record before the sums
	shift  int // records of a page, as a power of two

	tables  [groupParts]groupTable
	keys    atomic.Int64 // in memory
	texts   atomic.Int64 // their bytes
	dropped bool         // under pool.mu
	runs    []*run
	file    *runFile      // that the next run goes to
	seen    partials      // of all workers that have finished
	warmed  atomic.Uint64 // see groupTable
}

// groupTable is a partition: an open-addressing table of records. The first
// element of a record holds the number of rows and the key's bits or, for a text,
// its hash; then a text has its length and place.
type groupTable struct {
	mu    sync.Mutex
	slots []uint32 // number of the record + 1; 0 is free
	keys  []uint64 // of the records, so that these need not be looked at
	n     int
	first []fixed
	pages [][]fixed
	texts [][]byte

	warmed uint64 // keeps reads in warm from being left out
}

func (p *groupPool) store(kind stream.Kind, width, unit int) *groupStore {
	s := &groupStore{pool: p, kind: kind, text: kind == stream.Text, width: width, unit: unit, head: 1}
	if s.text {
		s.head = 2
	}
	for s.shift = 3; s.rec()<<(s.shift+1)*16 <= pageBytes; s.shift++ {
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	p.stores = append(p.stores, s)
	return s
}

func (s *groupStore) rec() int { return s.head + s.width }

// held is about what the keys in memory take.
func (s *groupStore) held() int64 {
	return s.keys.Load()*int64(16*s.rec()+sortBytes+8) + s.texts.Load()
}

// groupBatch is sums of keys of one partition: in float64 or, if part is empty, in
// fixed point.
type groupBatch struct {
	key  []uint64
	text []string
	rows []int64
	part []float64
	fix  []fixed
	ids  []uint32

	order, next []uint32
}

func (b *groupBatch) reset() {
	clear(b.text)
	b.key, b.text, b.rows, b.part, b.fix = b.key[:0], b.text[:0], b.rows[:0], b.part[:0], b.fix[:0]
}

// add adds a batch to partition p.
func (s *groupStore) add(p int, b *groupBatch) error {
	s.pool.mu.RLock()
	var grew int64
	if !s.pool.closed && !s.dropped {
		grew = s.tables[p].add(s, b)
	}
	s.pool.mu.RUnlock()
	if grew != 0 && s.pool.held.Add(grew) > s.pool.bound {
		return s.pool.relieve()
	}
	return nil
}

func (t *groupTable) add(s *groupStore, b *groupBatch) (grew int64) {
	t.mu.Lock()
	defer t.mu.Unlock()
	before := t.n
	var texts int64
	b.ids = grown(b.ids, 0, len(b.key), 0)
	for i, k := range b.key {
		if 2*(t.n+1) > len(t.slots) {
			grew += t.grow()
		}
		mask := uint64(len(t.slots) - 1)
		for h := hashInt(int64(k)) & mask; ; h = (h + 1) & mask {
			id := t.slots[h]
			if id == 0 {
				grew += t.fresh(s, k)
				if s.text {
					texts += t.keep(t.record(s, t.n-1), b.text[i])
				}
				id = uint32(t.n)
				t.slots[h] = id
			} else if t.keys[id-1] != k || s.text && t.str(t.record(s, int(id-1))) != b.text[i] {
				continue
			}
			b.ids[i] = id - 1
			break
		}
	}
	t.byPage(s, b)
	w := s.width
	for from := 0; from < len(b.order); from += warmRecs {
		order := b.order[from:min(from+warmRecs, len(b.order))]
		t.warm(s, b.ids, order)
		for _, i := range order {
			rec := t.record(s, int(b.ids[i]))
			rec[0].hi += b.rows[i]
			if len(b.part) > 0 {
				addSums(rec[s.head:], b.part[int(i)*w:int(i+1)*w], s.unit, s.owners) // partials know what did not fit
			} else {
				mergeSums(rec[s.head:], b.fix[int(i)*w:int(i+1)*w], s.owners)
			}
		}
	}
	s.keys.Add(int64(t.n - before))
	s.texts.Add(texts)
	return grew + texts + int64(t.n-before)*sortBytes
}

// byPage orders a batch by page of the records, so that each page is visited once.
func (t *groupTable) byPage(s *groupStore, b *groupBatch) {
	n := len(b.ids)
	b.order = grown(b.order, 0, n, 0)
	b.next = grown(b.next, 0, len(t.pages)+2, 0)
	clear(b.next)
	page := func(id uint32) int {
		if id < firstRecs {
			return 0
		}
		return int(id-firstRecs)>>s.shift + 1
	}
	for _, id := range b.ids {
		b.next[page(id)+1]++
	}
	for p := 1; p < len(b.next); p++ {
		b.next[p] += b.next[p-1]
	}
	for i, id := range b.ids {
		p := page(id)
		b.order[b.next[p]] = uint32(i)
		b.next[p]++
	}
}

// warm reads what add will look at, without a branch that hangs on it, so that the
// processor waits for many places at once and not for one after the other.
func (t *groupTable) warm(s *groupStore, ids, order []uint32) {
	if t.n <= warmRecs {
		return
	}
	var x uint64
	for _, i := range order {
		x ^= lines(t.record(s, int(ids[i])))
	}
	t.warmed = x
}

// lines reads the start of a record line by line of the cache: what follows comes
// by itself.
func lines(rec []fixed) (x uint64) {
	for i := 0; i < min(len(rec), 16); i += 4 {
		x ^= rec[i].lo
	}
	return x ^ rec[len(rec)-1].lo
}

// warmRecs is how many records are read ahead of their use: as many as stay in the
// first-level cache.
const warmRecs = 64

// warm reads records that lie far apart, see groupTable.warm.
func (s *groupStore) warm(refs []ref) {
	var x uint64
	for _, r := range refs {
		_, rec := s.record(r)
		x ^= lines(rec)
	}
	s.warmed.Store(x)
}

// fresh makes the next record.
func (t *groupTable) fresh(s *groupStore, k uint64) (grew int64) {
	switch at := t.n - firstRecs; {
	case t.n == 0:
		t.first = s.pool.page(firstRecs * s.rec())
		grew = int64(16 * len(t.first))
	case at >= 0 && at&(1<<s.shift-1) == 0:
		page := s.pool.page(s.rec() << s.shift)
		t.pages = append(t.pages, page)
		grew = int64(16 * len(page))
	}
	t.n++
	t.keys = append(t.keys, k)
	t.record(s, t.n-1)[0].lo = k
	return grew
}

func (t *groupTable) record(s *groupStore, id int) []fixed {
	r := s.rec()
	if id < firstRecs {
		return t.first[id*r : (id+1)*r]
	}
	id -= firstRecs
	o := id & (1<<s.shift - 1) * r
	return t.pages[id>>s.shift][o : o+r]
}

// keep stores the text of a record's key.
func (t *groupTable) keep(rec []fixed, text string) int64 {
	last := len(t.texts) - 1
	var grew int64
	if last < 0 || len(t.texts[last])+len(text) > cap(t.texts[last]) {
		chunk := make([]byte, 0, max(len(text), min(chunkBytes, 64<<len(t.texts))))
		t.texts = append(t.texts, chunk)
		last++
		grew = int64(cap(chunk))
	}
	at := len(t.texts[last])
	t.texts[last] = append(t.texts[last], text...)
	rec[1] = fixed{int64(len(text)), uint64(last)<<32 | uint64(at)}
	return grew
}

// str is the text of a record's key; it lives as long as the table.
func (t *groupTable) str(rec []fixed) string {
	n, at := rec[1].hi, rec[1].lo
	b := t.texts[at>>32][at&math.MaxUint32:]
	return unsafe.String(unsafe.SliceData(b), n)
}

// grow doubles the slots.
func (t *groupTable) grow() (grew int64) {
	n := max(16, 2*len(t.slots))
	grew = int64(n-len(t.slots)) * 4
	t.slots = make([]uint32, n)
	mask := uint64(n - 1)
	for id := range t.n {
		h := hashInt(int64(t.keys[id])) & mask
		for t.slots[h] != 0 {
			h = (h + 1) & mask
		}
		t.slots[h] = uint32(id + 1)
	}
	return grew
}

// empty forgets all records and returns what that frees.
func (t *groupTable) empty(s *groupStore) (freed int64) {
	p := s.pool
	p.idleMu.Lock()
	defer p.idleMu.Unlock()
	for _, page := range append(t.pages, t.first) {
		if page != nil {
			freed += int64(16 * len(page))
			p.idle[len(page)] = append(p.idle[len(page)], page)
		}
	}
	for _, c := range t.texts {
		freed += int64(cap(c))
	}
	freed += int64(t.n) * sortBytes
	t.n, t.first, t.pages, t.texts, t.keys = 0, nil, nil, nil, t.keys[:0]
	clear(t.slots)
	return freed
}

// ref is a record with the order of its key.
type ref struct {
	ord uint64
	at  uint64 // partition << 32 | record
}

func (s *groupStore) record(r ref) (*groupTable, []fixed) {
	t := &s.tables[r.at>>32]
	return t, t.record(s, int(r.at&math.MaxUint32))
}

// ordOf gives numbers in the order of keys of a kind; for a text those of its first
// eight bytes.
func ordOf(kind stream.Kind, bits uint64) uint64 {
	switch kind {
	case stream.Uint64, stream.Bool, stream.Text:
		return bits
	case stream.Float64:
		if bits>>63 != 0 {
			return ^bits
		}
	}
	return bits ^ 1<<63
}

// keyOf is the inverse of ordOf.
func keyOf(kind stream.Kind, ord uint64) uint64 {
	switch kind {
	case stream.Uint64, stream.Bool, stream.Text:
		return ord
	case stream.Float64:
		if ord>>63 == 0 {
			return ^ord
		}
	}
	return ord ^ 1<<63
}

// prefix is the first eight bytes of a text as a number.
func prefix(s string) (x uint64) {
	for i := range min(8, len(s)) {
		x |= uint64(s[i]) << (56 - 8*i)
	}
	return x
}

// sorted returns the records in memory in order of key. ord is that of the key; of
// texts it is not set.
func (s *groupStore) sorted() []ref {
	refs := make([]ref, 0, s.keys.Load())
	skip := 0
	if s.text {
		skip = s.commonPrefix()
	}
	for p := range s.tables {
		t := &s.tables[p]
		for id := range t.n {
			rec := t.record(s, id)
			r := ref{at: uint64(p)<<32 | uint64(id)}
			if s.text {
				r.ord = prefix(t.str(rec)[skip:])
			} else {
				r.ord = ordOf(s.kind, rec[0].lo)
			}
			refs = append(refs, r)
		}
	}
	refs = radixSort(refs)
	if s.text {
		for i := 0; i < len(refs); {
			from := i
			for i++; i < len(refs) && refs[i].ord == refs[from].ord; i++ {
			}
			if i-from > 1 {
				slices.SortFunc(refs[from:i], func(a, b ref) int {
					ta, ra := s.record(a)
					tb, rb := s.record(b)
					return cmp.Compare(ta.str(ra)[skip:], tb.str(rb)[skip:])
				})
			}
		}
	}
	return refs
}

// commonPrefix is the length of the start that all texts share.
func (s *groupStore) commonPrefix() int {
	var one string
	n := -1
	for p := range s.tables {
		t := &s.tables[p]
		for id := range t.n {
			x := t.str(t.record(s, id))
			if n < 0 {
				one, n = x, len(x)
			}
			n = min(n, len(x))
			for n > 0 && x[:n] != one[:n] {
				n--
			}
		}
	}
	return max(0, n)
}

// radixSort sorts by ord, from the last byte to the first; bytes that all share are
// passed over. It returns the sorted slice, which may be another.
func radixSort(a []ref) []ref {
	var count [8][256]int
	for i := range a {
		x := a[i].ord
		for d := range 8 {
			count[d][byte(x>>(8*d))]++
		}
	}
	var b []ref
	for d := range 8 {
		at := 0
		whole := false
		for v, n := range count[d] {
			whole = whole || n == len(a)
			count[d][v] = at
			at += n
		}
		if whole {
			continue
		}
		if b == nil {
			b = make([]ref, len(a))
		}
		for _, r := range a {
			v := byte(r.ord >> (8 * d))
			b[count[d][v]] = r
			count[d][v]++
		}
		a, b = b, a
	}
	return a
}

// groupSums is the sums of one key.
type groupSums struct {
	ord  uint64 // order of the key, see ordOf
	text string // of a text key; lives until the next is asked for
	rows int64
	sums []fixed
}

// distinct counts the keys, in memory and on scratch.
func (s *groupStore) distinct() (int64, error) {
	if len(s.runs) == 0 {
		return s.keys.Load(), nil
	}
	var n int64
	err := mergeGroups([]*groupStore{s}, func([]groupPart) error {
		n++
		return nil
	})
	return n, err
}

// partials watches what is rounded to fixed point. Nothing wraps unnoticed: the sum
// of count x max over all partial sums bounds every intermediate sum, and does not
// depend on order.
type partials struct {
	max   float64 // largest magnitude
	count int64
	bad   bool // one was not finite or too large for the unit
}

// see counts the partial sums of one key.
func (p *partials) see(part []float64) {
	m := p.max
	for _, x := range part {
		if a := math.Abs(x); a > m {
			m = a
		} else if !(a <= m) {
			p.bad = true // NaN
		}
	}
	p.max = m
	p.count++
}

func (p *partials) join(o *partials) {
	p.max = math.Max(p.max, o.max)
	p.count += o.count
	p.bad = p.bad || o.bad
}

// fits reports whether no sum can have left the range of the unit, and whether
// rounding to it can have cost digits: want is the size of sums that must keep
// 1e-14 relative.
func (p *partials) fits(unit int, want float64) (overflow, coarse bool) {
	if p.count == 0 {
		return false, false
	}
	if p.bad || p.max*float64(p.count) >= math.Ldexp(1, 126+unit) {
		return true, false
	}
	return false, want > 0 && math.Ldexp(float64(p.count), unit-1) > 1e-14*want
}

// betterUnit chooses the unit from what was seen, order-free.
func (p *partials) betterUnit() int {
	if p.max == 0 && !p.bad {
		return -1074 // nothing to hold
	}
	bound := p.max * float64(max(p.count, 1))
	if !(bound > 0) || math.IsInf(bound, 0) {
		bound = math.MaxFloat64
	}
	_, e := math.Frexp(bound)
	return e - 125
}
