package accum

import (
	"math"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// Key is the value of a cluster or category, compared whole: two keys are equal
// if kind and value are.
type Key struct {
	Kind stream.Kind
	stream.KeyValue
}

// Compare orders keys: numbers and times by value, text bytewise.
func (k Key) Compare(o Key) int { return stream.CompareKeys(k.Kind, k.KeyValue, o.KeyValue) }

// interner numbers the keys of one column from 0 in order of first sight.
type interner struct {
	kind  stream.Kind
	ints  intMap
	strs  map[string]int32
	texts []string
	vals  []int64
	bytes int64 // of text held

	dict  *stream.Dict // whose codes cache maps to ids
	cache []int32
}

func newInterner(kind stream.Kind) *interner {
	in := &interner{kind: kind}
	if kind == stream.Text {
		in.strs = map[string]int32{}
	}
	return in
}

func (in *interner) size() int {
	if in.kind == stream.Text {
		return len(in.texts)
	}
	return len(in.vals)
}

// memory is about what the interner holds, in bytes.
func (in *interner) memory() int64 {
	if in.kind == stream.Text {
		return in.bytes + int64(len(in.texts))*56
	}
	return int64(len(in.vals))*8 + int64(len(in.ints.slots))*4
}

func (in *interner) key(id int32) Key {
	if in.kind == stream.Text {
		return Key{in.kind, stream.KeyValue{Text: in.texts[id]}}
	}
	return Key{in.kind, stream.KeyValue{Bits: uint64(in.vals[id])}}
}

// order lists the ids in order of key.
func (in *interner) order() []int32 {
	order := same(in.size())
	slices.SortFunc(order, func(a, b int32) int { return in.key(a).Compare(in.key(b)) })
	return order
}

// put returns the id of a key, giving out a new one if it was never seen.
func (in *interner) put(k Key) int32 {
	if in.kind == stream.Text {
		return in.text(k.Text)
	}
	return in.int(int64(k.Bits))
}

// find returns the id of a key, or -1.
func (in *interner) find(k Key) int32 {
	if in.kind == stream.Text {
		if id, ok := in.strs[k.Text]; ok {
			return id
		}
		return -1
	}
	return in.ints.get(int64(k.Bits), in.vals)
}

func (in *interner) text(s string) int32 {
	if id, ok := in.strs[s]; ok {
		return id
	}
	s = strings.Clone(s) // the reader's string may keep a whole page alive
	id := int32(len(in.texts))
	in.strs[s] = id
	in.texts = append(in.texts, s)
	in.bytes += int64(len(s))
	return id
}

func (in *interner) int(v int64) int32 {
	id, fresh := in.ints.put(v, in.vals)
	if fresh {
		in.vals = append(in.vals, v)
	}
	return id
}

// ids writes the ids of the first rows cells of v.
func (in *interner) ids(v *stream.Vector, rows int, dst []int32) {
	switch v.Kind {
	case stream.Text:
		if in.dict != v.Dict {
			in.dict = v.Dict
			in.cache = in.cache[:0]
		}
		for i, c := range v.Code[:rows] {
			for int(c) >= len(in.cache) {
				in.cache = append(in.cache, -1)
			}
			id := in.cache[c]
			if id < 0 {
				id = in.text(v.Dict.Values[c])
				in.cache[c] = id
			}
			dst[i] = id
		}
	case stream.Float64:
		for i, x := range v.F64[:rows] {
			dst[i] = in.int(int64(math.Float64bits(x)))
		}
	default:
		var last int64
		var lastID int32 = -1
		for i, x := range v.I64[:rows] {
			if lastID < 0 || x != last {
				last, lastID = x, in.int(x)
			}
			dst[i] = lastID
		}
	}
}

// intMap is an open-addressing map from int64 to its place in a list of values.
type intMap struct {
	slots []int32 // place + 1; 0 is free
	used  int
}

func hashInt(v int64) uint64 {
	x := uint64(v)
	x ^= x >> 32
	x *= 0x9E3779B97F4A7C15
	x ^= x >> 29
	x *= 0xBF58476D1CE4E5B9
	return x ^ x>>32
}

func (m *intMap) get(v int64, vals []int64) int32 {
	if len(m.slots) == 0 {
		return -1
	}
	mask := uint64(len(m.slots) - 1)
	for h := hashInt(v) & mask; ; h = (h + 1) & mask {
		s := m.slots[h]
		if s == 0 {
			return -1
		}
		if vals[s-1] == v {
			return s - 1
		}
	}
}

func (m *intMap) put(v int64, vals []int64) (int32, bool) {
	if m.used*2 >= len(m.slots) {
		m.grow(vals)
	}
	mask := uint64(len(m.slots) - 1)
	for h := hashInt(v) & mask; ; h = (h + 1) & mask {
		s := m.slots[h]
		if s == 0 {
			m.used++
			m.slots[h] = int32(m.used)
			return int32(m.used - 1), true
		}
		if vals[s-1] == v {
			return s - 1, false
		}
	}
}

func (m *intMap) grow(vals []int64) {
	m.slots = make([]int32, max(64, 2*len(m.slots)))
	mask := uint64(len(m.slots) - 1)
	for i, v := range vals {
		h := hashInt(v) & mask
		for m.slots[h] != 0 {
			h = (h + 1) & mask
		}
		m.slots[h] = int32(i + 1)
	}
}

// tuples numbers combinations of ids, as a chain of pairs.
type tuples struct {
	pair []pairMap // pair[i] joins the id so far with the id of category i+1
	cats int
}

// pairMap numbers pairs of ids.
type pairMap struct {
	m    intMap
	vals []int64 // a<<32 | b
}

func newTuples(cats int) *tuples {
	return &tuples{pair: make([]pairMap, max(0, cats-1)), cats: cats}
}

// join replaces the ids in dst (of the first category) by ids of the whole
// combination, given the ids of all categories of the rows.
func (t *tuples) join(ids [][]int32, dst []int32) {
	copy(dst, ids[0][:len(dst)])
	for p := range t.pair {
		pm := &t.pair[p]
		for i := range dst {
			v := int64(dst[i])<<32 | int64(ids[p+1][i])
			id, fresh := pm.m.put(v, pm.vals)
			if fresh {
				pm.vals = append(pm.vals, v)
			}
			dst[i] = id
		}
	}
}

// split writes the category ids of combination id.
func (t *tuples) split(id int32, dst []int32) {
	for p := len(t.pair) - 1; p >= 0; p-- {
		v := t.pair[p].vals[id]
		dst[p+1] = int32(v & math.MaxUint32)
		id = int32(v >> 32)
	}
	dst[0] = id
}

// size is the number of combinations; it needs two categories or more.
func (t *tuples) size() int { return len(t.pair[len(t.pair)-1].vals) }

func (t *tuples) memory() int64 {
	var n int64
	for i := range t.pair {
		n += int64(len(t.pair[i].vals))*8 + int64(len(t.pair[i].m.slots))*4
	}
	return n
}
