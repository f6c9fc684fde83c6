package accum

import (
	"math"
	"math/bits"
	"sync"
	"sync/atomic"
)

// pairShards is the number of separately locked parts of a pairTable.
const pairShards = 64

// pairTable sums products by pairs of combinations of two groups (or of a cluster
// and a combination), for all workers together. With width 0 it counts rows; else
// it holds width fixed-point sums a pair, to which each row is rounded by itself.
// Both are associative, so the table does not depend on who came first.
//
// Each shard holds the pairs of every 64th first id: in an open-addressing table
// while they are few, as a dense array once that takes no more memory.
type pairTable struct {
	width  int
	unit   int
	expect pairCount // what is known of its size; zero if nothing is
	held   atomic.Int64
	shards [pairShards]pairShard

	mu  sync.Mutex
	max float64 // largest |value| of a row
	bad bool    // a value was not finite or too large for the unit
}

// pairCount is the number of pairs of a table, and of first and second ids.
type pairCount struct{ pairs, first, second int }

type pairShard struct {
	mu sync.Mutex
	pairStore
}

type pairStore struct {
	keys []uint64 // (first id / pairShards, second id) + 1, 0 is free; nil when dense
	used int
	na   int // first ids (over pairShards) and second ids seen or, when dense, held
	nb   int
	n    []int64
	sums []fixed
}

func newPairTable(width, unit int) *pairTable { return &pairTable{width: width, unit: unit} }

// memory is about what the table holds, in bytes.
func (t *pairTable) memory() int64 { return t.held.Load() }

// pairBuffer collects the pairs of one worker until a fold ends.
type pairBuffer struct {
	t     *pairTable
	keys  []uint64
	vals  []float64
	order []int32
}

func pairTablesOf(bs []*pairBuffer) []*pairTable {
	var ts []*pairTable
	for _, b := range bs {
		ts = append(ts, b.t)
	}
	return ts
}

func pairKey(a, b int32) uint64 { return uint64(uint32(a))<<32 | uint64(uint32(b)) }

// add takes in the products of columns of z for each row.
func (p *pairBuffer) add(a, b []int32, z []float64, prods [][2]int) {
	for r := range a {
		p.keys = append(p.keys, pairKey(a[r], b[r]))
	}
	switch p.t.width {
	case 0:
	case 1:
		x, y := z[prods[0][0]*stride:], z[prods[0][1]*stride:]
		for r := range a {
			p.vals = append(p.vals, x[r]*y[r])
		}
	default:
		for r := range a {
			for _, q := range prods {
				p.vals = append(p.vals, z[q[0]*stride+r]*z[q[1]*stride+r])
			}
		}
	}
}

// put takes in one pair with its values.
func (p *pairBuffer) put(a, b int32, vals ...float64) {
	p.keys = append(p.keys, pairKey(a, b))
	p.vals = append(p.vals, vals...)
}

// flush moves what was collected into the table.
func (p *pairBuffer) flush() {
	if len(p.keys) == 0 {
		return
	}
	var start [pairShards + 1]int
	for _, k := range p.keys {
		start[k>>32%pairShards+1]++
	}
	for s := range pairShards {
		start[s+1] += start[s]
	}
	if cap(p.order) < len(p.keys) {
		p.order = make([]int32, len(p.keys))
	}
	order, at := p.order[:len(p.keys)], start
	for i, k := range p.keys {
		s := k >> 32 % pairShards
		order[at[s]] = int32(i)
		at[s]++
	}
	t, w := p.t, p.t.width
	var most float64
	for _, x := range p.vals {
		if a := math.Abs(x); a > most || a != a {
			most = a
		}
	}
	bad := false
	for s := range pairShards {
		if start[s] == start[s+1] {
			continue
		}
		sh := &t.shards[s]
		sh.mu.Lock()
		for _, i := range order[start[s]:start[s+1]] {
			at := t.place(&sh.pairStore, p.keys[i])
			if w == 0 {
				sh.n[at]++
			} else if !addFixed(sh.sums[at*w:(at+1)*w], p.vals[int(i)*w:(int(i)+1)*w], t.unit) {
				bad = true
			}
		}
		sh.mu.Unlock()
	}
	t.mu.Lock()
	t.max = math.Max(t.max, most)
	t.bad = t.bad || bad
	t.mu.Unlock()
	p.keys, p.vals = p.keys[:0], p.vals[:0]
}

// place finds the entry of a pair in its shard, making room for it.
func (t *pairTable) place(sh *pairStore, key uint64) int {
	a, b := int(key>>32/pairShards), int(key&math.MaxUint32)
	for {
		if sh.keys == nil && a < sh.na && b < sh.nb {
			return a*sh.nb + b
		}
		if sh.keys != nil && (sh.used+1)*5 <= len(sh.keys)*4 {
			break
		}
		t.grow(sh, a, b)
	}
	sh.na, sh.nb = max(sh.na, a+1), max(sh.nb, b+1)
	key = uint64(a)<<32 | uint64(b)
	at := sh.find(key)
	if sh.keys[at] == 0 {
		sh.keys[at] = key + 1
		sh.used++
	}
	return at
}

// find returns the place of a key in a sparse shard, or the free one it may take.
func (sh *pairStore) find(key uint64) int {
	hi, _ := bits.Mul64(hashInt(int64(key)), uint64(len(sh.keys)))
	for i := int(hi); ; i++ {
		if i == len(sh.keys) {
			i = 0
		}
		if k := sh.keys[i]; k == key+1 || k == 0 {
			return i
		}
	}
}

// grow makes room for one more pair: as a dense array or a sparse table, whichever
// is smaller. A dense array stays one up to twice that.
func (t *pairTable) grow(sh *pairStore, a, b int) {
	old := *sh
	if old.keys == nil {
		old.used = 0
		old.each(t.width, func(int, int, int) { old.used++ })
	}
	each := 8
	if t.width > 0 {
		each = 16 * t.width
	}
	// One and a third times what is expected in a shard, for a table four fifths full.
	size := max(old.used+old.used/2, t.expect.pairs/pairShards*4/3) + 32
	na := max(sh.na, (t.expect.first+pairShards-1)/pairShards)
	nb := max(sh.nb, t.expect.second)
	if a >= na {
		na = a + 1 + a/8
	}
	if b >= nb {
		nb = b + 1 + b/8
	}
	limit := size * (8 + each)
	if old.keys == nil {
		limit *= 2
	}
	dense := na*nb*each <= limit
	*sh = pairStore{na: na, nb: nb, used: old.used}
	if dense {
		size = na * nb
	} else {
		sh.keys = make([]uint64, size)
	}
	if t.width == 0 {
		sh.n = make([]int64, size)
	} else {
		sh.sums = make([]fixed, size*t.width)
	}
	old.each(t.width, func(a, b, i int) {
		at := a*sh.nb + b
		if !dense {
			key := uint64(a)<<32 | uint64(b)
			at = sh.find(key)
			sh.keys[at] = key + 1
		}
		if t.width == 0 {
			sh.n[at] = old.n[i]
		} else {
			copy(sh.sums[at*t.width:(at+1)*t.width], old.sums[i*t.width:(i+1)*t.width])
		}
	})
	t.held.Add(sh.bytes() - old.bytes())
}

func (sh *pairStore) bytes() int64 {
	return int64(8*len(sh.keys) + 8*len(sh.n) + 16*len(sh.sums))
}

// each calls f with every pair of a shard that is not all zero: its first id over
// pairShards, its second id and its place.
func (sh *pairStore) each(width int, f func(a, b, i int)) {
	some := func(i int) bool {
		if width == 0 {
			return sh.n[i] != 0
		}
		for _, x := range sh.sums[i*width : (i+1)*width] {
			if x != (fixed{}) {
				return true
			}
		}
		return false
	}
	if sh.keys == nil {
		for i := range sh.na * sh.nb {
			if some(i) {
				f(i/sh.nb, i%sh.nb, i)
			}
		}
		return
	}
	for i, k := range sh.keys {
		if k != 0 && some(i) {
			k--
			f(int(k>>32), int(k&math.MaxUint32), i)
		}
	}
}

// each calls f with every pair that is not all zero, in no order. vals is reused.
func (t *pairTable) each(f func(a, b int32, vals []float64)) {
	w := t.width
	vals := make([]float64, max(1, w))
	for s := range t.shards {
		sh := &t.shards[s].pairStore
		sh.each(w, func(a, b, i int) {
			if w == 0 {
				vals[0] = float64(sh.n[i])
			}
			for j := range w {
				vals[j] = sh.sums[i*w+j].float(t.unit)
			}
			f(int32(a*pairShards+s), int32(b), vals)
		})
	}
}

// fits is partials.fits for sums of at most rows values each.
func (t *pairTable) fits(want float64, rows int64) (overflow, coarse bool) {
	if t.width == 0 {
		return false, false
	}
	if t.bad || t.max*float64(rows) >= math.Ldexp(1, 126+t.unit) {
		return true, false
	}
	return false, want > 0 && math.Ldexp(float64(rows), t.unit-1) > 1e-14*want
}

// betterUnit is partials.betterUnit for sums of at most rows values each.
func (t *pairTable) betterUnit(rows int64) int {
	k := partials{max: t.max, count: rows, bad: t.bad}
	return k.betterUnit()
}
