package accum

import (
	"fmt"
	"hash/maphash"
	"math"
	"sync/atomic"

	"github.com/tallrow/tallrow/stream"
)

// unitMeans are the means of all units, which pass two takes off the rows. They stay
// in memory.
type unitMeans struct {
	kind  stream.Kind
	count int
	width int // numbers of a unit: those of u and v, and one
	// mean has, by unit in order of key, the means of u and v, then 1/W_g, the leverage
	// of a row of weight 1 by the unit's own effect, or 0 for units of one row, which
	// are left out.
	mean  []float64
	low   []float64 // what mean leaves off, in extended arithmetic
	keys  []uint64  // bits, or hash of the text
	texts []byte
	ends  []int64  // of the texts
	slots []uint32 // place + 1, by hash
}

// KeepMeans keeps the means of the units for Second, which the state can make only
// until Close. They take about 8 P + 28 bytes a unit, twice the first part in extended
// arithmetic, and texts: beyond most bytes it fails with a *MemoryError.
func (s *State) KeepMeans(most int64) error {
	if s.means != nil {
		return nil
	}
	l := s.lay
	col := l.design.Keys[l.design.Sweep]
	kind := l.design.Spec.WeightKind
	count := s.Swept.Units + s.Swept.Singletons
	m := &unitMeans{kind: col.Kind, count: int(count), width: l.p0 + 2}
	size := 4
	for int64(size) < 2*count {
		size *= 2
	}
	each := int64(8*m.width + 8)
	if s.Extended {
		each += int64(8 * m.width)
	}
	if col.Kind == stream.Text {
		each += 8
	}
	fits := func() error {
		if need := count*each + int64(4*size) + int64(cap(m.texts)); need > most || count >= math.MaxUint32 {
			return &MemoryError{What: fmt.Sprintf("the means of %d values of %s", count, col.Text), Need: need, Have: most}
		}
		return nil
	}
	if err := fits(); err != nil {
		return err
	}
	n := int(count)
	m.mean, m.keys, m.slots = make([]float64, n*m.width), make([]uint64, n), make([]uint32, size)
	if s.Extended {
		m.low = make([]float64, n*m.width)
	}
	if col.Kind == stream.Text {
		m.ends = make([]int64, n)
	}
	i := 0
	err := s.eachUnit(func(u *unitSums) error {
		if !u.single(kind) {
			m.mean[(i+1)*m.width-1] = 1 / u.sums[0].Hi
		}
		for j, x := range u.sums[1:] {
			q := x.Div(u.sums[0])
			m.mean[i*m.width+j] = q.Hi
			if s.Extended {
				m.low[i*m.width+j] = q.Lo
			}
		}
		if col.Kind == stream.Text {
			m.texts = append(m.texts, u.text...)
			m.ends[i] = int64(len(m.texts))
			m.keys[i] = maphash.String(textSeed, u.text)
			if i%4096 == 0 {
				if err := fits(); err != nil {
					return err
				}
			}
		} else {
			m.keys[i] = keyOf(col.Kind, u.ord)
		}
		h := hashInt(int64(m.keys[i])) & uint64(size-1)
		for m.slots[h] != 0 {
			h = (h + 1) & uint64(size-1)
		}
		i++
		m.slots[h] = uint32(i)
		return nil
	})
	if err != nil {
		return err
	}
	s.means = m
	return fits()
}

// memory is what the means take, in bytes.
func (m *unitMeans) memory() int64 {
	return int64(8*(len(m.mean)+len(m.low)+len(m.keys)+len(m.ends)) + 4*len(m.slots) + cap(m.texts))
}

// inv is 1/W_g of a unit, or 0.
func (m *unitMeans) inv(id int32) float64 { return m.mean[(int(id)+1)*m.width-1] }

// is reports whether the text of unit i is this.
func (m *unitMeans) is(i uint32, text string) bool {
	from := int64(0)
	if i > 0 {
		from = m.ends[i-1]
	}
	return string(m.texts[from:m.ends[i]]) == text
}

// find returns the place of a key, -1 if it is not there.
func (m *unitMeans) find(key uint64, text string) int32 {
	mask := uint64(len(m.slots) - 1)
	for h := hashInt(int64(key)) & mask; ; h = (h + 1) & mask {
		i := m.slots[h]
		if i == 0 {
			return -1
		}
		if m.keys[i-1] == key && (m.kind != stream.Text || m.is(i-1, text)) {
			return int32(i - 1)
		}
	}
}

// sweeper takes the means of units off the rows of one worker of pass two.
type sweeper struct {
	*unitMeans
	key   string // expression
	ids   []int32
	dict  *stream.Dict
	cache []int32  // place by code, -1 unknown
	at    []uint64 // slots of the rows' keys
	warm  uint64   // keeps reads from being left out
	// Rows of units of one row are taken out: what is left of weights, keys and raw
	// columns goes here.
	keep   []int32
	x      [][]float64
	weight []float64
	keys   []stream.Vector
	marks  []int64
	owners []*ownerView // by key of RowPass.Scores
}

func newSweeper(s *State, owners []*owners) *sweeper {
	w := &sweeper{unitMeans: s.means, key: s.Design.Keys[s.Design.Sweep].Text, ids: make([]int32, stride)}
	for _, o := range owners {
		w.owners = append(w.owners, &ownerView{o, o.view()})
	}
	return w
}

// locate finds the unit of each row.
func (w *sweeper) locate(v *stream.Vector, n int) error {
	lost := false
	switch v.Kind {
	case stream.Text:
		if w.dict != v.Dict {
			w.dict, w.cache = v.Dict, w.cache[:0]
		}
		for r, c := range v.Code[:n] {
			for int(c) >= len(w.cache) {
				w.cache = append(w.cache, -1)
			}
			id := w.cache[c]
			if id < 0 {
				text := v.Dict.Values[c]
				id = w.find(maphash.String(textSeed, text), text)
				w.cache[c] = id
			}
			w.ids[r] = id
			lost = lost || id < 0
		}
	case stream.Float64:
		for r, x := range v.F64[:n] {
			w.ids[r] = w.find(math.Float64bits(x), "")
			lost = lost || w.ids[r] < 0
		}
	default:
		s := w.unitMeans
		// Slots, keys and means lie far apart in memory: they are read first for all
		// rows, so that these wait for them together and not in turn.
		mask, warm := uint64(len(s.slots)-1), uint64(0)
		w.at = grown(w.at, 0, n, stride)
		for r, x := range v.I64[:n] {
			h := hashInt(x) & mask
			w.at[r] = h
			warm ^= uint64(s.slots[h])
		}
		for _, h := range w.at {
			if id := uint64(s.slots[h]); id != 0 {
				warm ^= s.keys[id-1] ^ math.Float64bits(s.mean[(id-1)*uint64(s.width)])
			}
		}
		w.warm = warm
		for r, x := range v.I64[:n] {
			if r > 0 && x == v.I64[r-1] {
				w.ids[r] = w.ids[r-1]
				continue
			}
			w.ids[r] = w.find(uint64(x), "")
			lost = lost || w.ids[r] < 0
		}
	}
	if lost {
		return &ChangedError{fmt.Sprintf("%s has a value that was not there before", w.key)}
	}
	return nil
}

// sweep takes the means off z and rows of units of one row out of the block.
func (w *secondWorker) sweep() error {
	s := w.swept
	if err := s.locate(&w.block.Key[w.lay.design.Sweep], w.block.Rows); err != nil {
		return err
	}
	s.keep = s.keep[:0]
	for r, id := range s.ids[:w.block.Rows] {
		if s.inv(id) != 0 {
			s.keep = append(s.keep, int32(r))
		}
	}
	if len(s.keep) < w.block.Rows {
		w.compact()
	}
	n := w.block.Rows
	ids := s.ids[:n]
	for j := range s.width - 1 {
		z := w.col(1 + j)
		if w.wide != nil {
			low := w.lowCol(1 + j)
			for r, id := range ids {
				at := int(id)*s.width + j
				d := Wide{z[r], low[r]}.Sub(Wide{s.mean[at], s.low[at]})
				z[r], low[r] = d.Hi, d.Lo
			}
			continue
		}
		for r, id := range ids {
			z[r] -= s.mean[int(id)*s.width+j]
		}
	}
	for _, o := range s.owners {
		o.see(&w.block.Key[o.owners.key], ids)
	}
	return nil
}

// compact leaves only the rows that are kept in the block. The block's own columns may
// be the reader's and are not written to.
func (w *secondWorker) compact() {
	s, b, n := w.swept, &w.block, len(w.swept.keep)
	for i, r := range s.keep {
		s.ids[i] = s.ids[r]
	}
	take := func(dst, src []float64) {
		for i, r := range s.keep {
			dst[i] = src[r]
		}
	}
	for j := 1; j < w.lay.width; j++ {
		take(w.col(j), w.col(j))
		if w.wide != nil {
			take(w.lowCol(j), w.lowCol(j))
		}
	}
	if w.root != nil {
		take(w.root, w.root)
		s.weight = grown(s.weight, 0, n, stride)
		take(s.weight, b.Weight)
		b.Weight = s.weight
	}
	s.marks = grown(s.marks, 0, n, stride)
	for i, r := range s.keep {
		s.marks[i] = b.Marks[r]
	}
	b.Marks = s.marks
	if s.x == nil {
		s.x, s.keys = make([][]float64, len(b.X)), make([]stream.Vector, len(b.Key))
	}
	for j := range b.X {
		s.x[j] = grown(s.x[j], 0, n, stride)
		take(s.x[j], b.X[j])
		b.X[j] = s.x[j]
	}
	for k := range b.Key {
		v, to := &b.Key[k], &s.keys[k]
		to.Kind, to.Dict = v.Kind, v.Dict
		switch v.Kind {
		case stream.Text:
			to.Code = grown(to.Code, 0, n, stride)
			for i, r := range s.keep {
				to.Code[i] = v.Code[r]
			}
		case stream.Float64:
			to.F64 = grown(to.F64, 0, n, stride)
			take(to.F64, v.F64)
		default:
			to.I64 = grown(to.I64, 0, n, stride)
			for i, r := range s.keep {
				to.I64[i] = v.I64[r]
			}
		}
		b.Key[k] = *to
	}
	b.Rows = n
}

// owners remembers for each unit the first cluster that it was met in, and whether any
// unit was met in two: that is a fact of the data, in whatever order they are read.
type owners struct {
	*sharedKeys
	of    []atomic.Int32 // number of the cluster, by unit
	split atomic.Bool
}

// newOwners makes the owners for the keys of scores, but for crossed keys and the unit
// itself.
func newOwners(s *State, keys []int) (list []*owners) {
	d := s.Design
	for _, k := range keys {
		if k != d.Sweep && d.Parts[k] == nil {
			list = append(list, &owners{sharedKeys: newSharedKeys(d, k), of: make([]atomic.Int32, s.means.count)})
		}
	}
	return list
}

// ownerView is one worker's.
type ownerView struct {
	*owners
	*sharedView
}

func (o *ownerView) see(v *stream.Vector, units []int32) {
	if o.split.Load() {
		return
	}
	ids := o.number(v, len(units))
	for r, u := range units {
		c := ids[r]
		if of := o.of[u].Load(); of != c && (of != 0 || !o.of[u].CompareAndSwap(0, c) && o.of[u].Load() != c) {
			o.split.Store(true)
			return
		}
	}
}

// nested reports whether every unit lies in one cluster of a key.
func (c *secondCommon) nested(s *State, key int) bool {
	if key == s.Design.Sweep {
		return true
	}
	for _, o := range c.owners {
		if o.key == key {
			return !o.split.Load()
		}
	}
	return false
}

// sweptScales are powers of two that bring what is left of each column of (1, u, v)
// within units to a size of about 1 where it is far smaller: the fixed-point sums of
// clusters would cut off its digits. Nil where nothing is.
func (s *State) sweptScales() []float64 {
	p := s.lay.p0 + 2
	by, any := make([]float64, p), false
	for j := range by {
		by[j] = 1
		size := math.Sqrt(s.S[j*p+j] / float64(max(s.Rows, 1)))
		if size > 0 && size < 0x1p-8 && (j == 0 || j > s.lay.p0 || !s.Swept.Constant[j-1]) {
			by[j], any = invPow2(size), true
		}
	}
	if !any {
		return nil
	}
	return by
}

func scaleColumn(dst, src []float64, by float64) {
	for i, x := range src {
		dst[i] = by * x
	}
}

// unscale takes scales off the clusters' sums; that of the residuals stands at v.
func (sc *Scores) unscale(by []float64, v int) {
	form, p := sc.form, sc.P
	sc.form = func(c *Cluster, parts []groupPart) {
		form(c, parts)
		for j := range p {
			c.S[j] /= by[j] * by[v]
		}
		for i := range c.A {
			c.A[i] /= by[i/p] * by[i%p]
		}
	}
}
