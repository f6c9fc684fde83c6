package accum

import (
	"cmp"
	"math"
	"math/bits"
	"slices"
	"sync"
	"sync/atomic"

	"github.com/tallrow/tallrow/stream"
)

// Unique rows. Where regressors take few values, rows with equal regressors are kept
// as one cell: their number n, the sums of v and of its powers. What depends on single
// rows follows from cells once the coefficients are known,
//
//	sum e^2 = SSE + n (mean of v + x'theta)^2,  SSE = sum v^2 - (sum v)^2 / n,
//	h = x'(X'X)^-1 x, the same for all rows of the cell,
//
// so that every meat sum e^2 g(h) x x' is exact after one pass (Wong, Forsell, Lewis,
// Mao, Wardrop 2021, arXiv:2102.11297). v is the outcome less the frame's provisional
// fit, so that little cancels in SSE.
//
// Two rows belong to one cell if the bits of their regressors are equal (-0 counts as
// 0), their levels of all categories, and under precision and sampling weights, which
// enter h, their weights. Frequencies f are summed: sum f, sum f v, ...
//
// Sums by cell are sums by key as in keyTable, so they do not depend on workers.

const (
	// cellUnit is the last binary place of sums by cell, in frame units: they reach
	// 2^40, and a spread of 1e-6 beside one of 1 keeps its digits.
	cellUnit = -86
	// Powers are scaled into that range.
	cubeScale, quartScale, freqScale = 0x1p-12, 0x1p-24, 0x1p-30

	mostCells = 1 << 20
	// A worker keeps up to localCells to itself, fewer if they took more than a share
	// of the memory, before it hands them to the common table.
	localCells, leastLocal = 1 << 17, 1 << 12
	// fewerCells is how often fewer cells than rows an input that cannot be sampled
	// must show in its first rows.
	fewerCells = 2
)

// cellSpec says what a cell is and what is summed.
type cellSpec struct {
	lay      *layout
	words    int // of a key
	width    int // sums
	kind     stream.WeightKind
	extended bool
	most     int         // cells
	local    int         // cells up to which a worker keeps them to itself
	blind    bool        // given up early, see fewerCells
	dropped  atomic.Bool // there were too many
	done     int         // cells of finished epochs
}

// newCellSpec plans cells; bytes bounds the table of them.
func newCellSpec(l *layout, extended, blind bool, bytes int64, workers int) *cellSpec {
	s := &cellSpec{lay: l, kind: stream.NoWeight, extended: extended, blind: blind}
	if l.design.Spec.Weight != "" {
		s.kind = l.design.Spec.WeightKind
	}
	s.words = l.nx + len(l.design.Categories)
	if extended {
		s.words += l.nx
	}
	switch s.kind {
	case stream.NoWeight:
		s.width = 4
	case stream.Frequency:
		s.width = 5
	default:
		s.words++
		s.width = 2
	}
	s.words = max(1, s.words)
	s.most = int(min(mostCells, bytes/s.bytes()))
	s.local = min(localCells, s.most, max(leastLocal, 2*s.most/max(1, workers)))
	return s
}

// bytes is about what a cell takes in a table.
func (s *cellSpec) bytes() int64 { return int64(8*s.words + 16*s.width + 12 + 16) }

// CellsHeld is the number of unique rows up to which pass one keeps them for a design,
// if they may take so many bytes; each takes about as many as it returns with it.
func CellsHeld(d *stream.Design, bytes int64) (most int, each int64) {
	s := newCellSpec(newLayout(d), false, false, bytes, 1)
	return s.most, 2 * s.bytes() // in the table, then in order
}

// cellTable finds cells by key.
type cellTable struct {
	words int
	keys  []uint64
	slots []int32 // number + 1
	sums  *keyTable
}

func newCellTable(s *cellSpec) *cellTable {
	return &cellTable{words: s.words, slots: make([]int32, 256), sums: newKeyTable(s.width, cellUnit)}
}

func (t *cellTable) size() int { return len(t.keys) / t.words }

func mixCell(h, x uint64) uint64 {
	hi, lo := bits.Mul64(h^x, 0x9E3779B97F4A7C15)
	return hi ^ lo
}

const cellSeed = 0x243F6A8885A308D3

func hashCell(key []uint64) uint64 {
	h := uint64(cellSeed)
	for _, x := range key {
		h = mixCell(h, x)
	}
	return h
}

// put returns the number of the cell with a key of that hash.
func (t *cellTable) put(h uint64, key []uint64) int32 {
	mask := uint64(len(t.slots) - 1)
	for h &= mask; ; h = (h + 1) & mask {
		s := t.slots[h]
		if s == 0 {
			break
		}
		own := t.keys[int(s-1)*t.words:][:len(key)]
		var differ uint64
		for i, x := range key {
			differ |= own[i] ^ x
		}
		if differ == 0 {
			return s - 1
		}
	}
	id := int32(t.size())
	t.keys = append(t.keys, key...)
	t.slots[h] = id + 1
	if 2*t.size() > len(t.slots) {
		t.slots = make([]int32, 2*len(t.slots))
		mask := uint64(len(t.slots) - 1)
		for i := range t.size() {
			h := hashCell(t.key(i)) & mask
			for t.slots[h] != 0 {
				h = (h + 1) & mask
			}
			t.slots[h] = int32(i + 1)
		}
	}
	return id
}

// reset empties the table; its memory is kept.
func (t *cellTable) reset() {
	t.keys = t.keys[:0]
	clear(t.slots)
	t.sums.reset()
}

func (t *cellTable) key(i int) []uint64 { return t.keys[i*t.words : (i+1)*t.words] }

// cellStore is the cells that the workers of an epoch share.
type cellStore struct {
	*cellSpec
	mu    sync.Mutex
	table *cellTable
	size  atomic.Int64
	folds atomic.Int64
}

// cells is one worker's.
type cells struct {
	store *cellStore
	table *cellTable
	keys  []uint64
	hash  []uint64
	ids   []int32
}

func newCells(st *cellStore) *cells {
	return &cells{store: st, table: newCellTable(st.cellSpec), keys: make([]uint64, stream.BatchRows*st.words),
		hash: make([]uint64, stream.BatchRows), ids: make([]int32, stream.BatchRows)}
}

// addWord mixes a column into the hashes and puts it at place at of the keys.
func (c *cells) addWord(at, n int, word func(r int) uint64) {
	w := c.store.words
	for r := range n {
		x := word(r)
		c.keys[r*w+at] = x
		c.hash[r] = mixCell(c.hash[r], x)
	}
}

// addNumbers is addWord for float64; -0 is 0.
func (c *cells) addNumbers(at int, x []float64) {
	w, keys, hash := c.store.words, c.keys[at:], c.hash[:len(x)]
	for r, v := range x {
		b := math.Float64bits(v + 0)
		keys[r*w] = b
		hash[r] = mixCell(hash[r], b)
	}
}

// add takes in the rows of a block: levels by category, v in the frame.
func (c *cells) add(b *stream.Block, levels [][]int32, v []float64) {
	st := c.store
	if st.dropped.Load() {
		return
	}
	n, at := b.Rows, 0
	for r := range n {
		c.hash[r] = cellSeed
	}
	for j := range st.lay.nx {
		c.addNumbers(at, b.X[j][:n])
		at++
	}
	if st.extended {
		for j := range st.lay.nx {
			if len(b.XLow) > 0 && b.XLow[j] != nil {
				c.addNumbers(at, b.XLow[j][:n])
			} else {
				c.addWord(at, n, func(int) uint64 { return 0 })
			}
			at++
		}
	}
	for _, ids := range levels {
		c.addWord(at, n, func(r int) uint64 { return uint64(ids[r]) })
		at++
	}
	if st.kind == stream.Precision || st.kind == stream.Sampling {
		c.addNumbers(at, b.Weight[:n])
		at++
	}
	for ; at < st.words; at++ {
		c.addWord(at, n, func(int) uint64 { return 0 })
	}
	ids := c.ids[:n]
	for r := range ids {
		ids[r] = c.table.put(c.hash[r], c.keys[r*st.words:(r+1)*st.words])
	}
	t := c.table.sums
	switch st.kind {
	case stream.NoWeight:
		for r, id := range ids {
			p := t.at(id)[:4]
			t.rows[id]++
			x := v[r]
			q := float64(x * x)
			p[0] += x
			p[1] += q
			p[2] = math.FMA(q, float64(x*cubeScale), p[2])
			p[3] = math.FMA(q, float64(q*quartScale), p[3])
		}
	case stream.Frequency:
		for r, id := range ids {
			p := t.at(id)[:5]
			t.rows[id]++
			x, f := v[r], b.Weight[r]
			q, fx := float64(x*x), float64(f*x)
			fq := float64(fx * x)
			p[0] += fx
			p[1] += fq
			p[2] = math.FMA(fq, float64(x*cubeScale), p[2])
			p[3] = math.FMA(fq, float64(q*quartScale), p[3])
			p[4] += f * freqScale
		}
	default:
		for r, id := range ids {
			p := t.at(id)[:2]
			t.rows[id]++
			x := v[r]
			p[0] += x
			p[1] = math.FMA(x, x, p[1])
		}
	}
}

// fold ends a fold. Cells are given up once there are too many: that hangs on their
// number alone, since every table's is a lower bound of it.
func (c *cells) fold() {
	st := c.store
	if st.dropped.Load() {
		c.table = nil
		return
	}
	st.folds.Add(1)
	c.table.sums.flush()
	if c.table.size() > st.local {
		c.hand()
	}
	st.judge(st.size.Load())
}

func (s *cellSpec) judge(n int64) {
	if int64(s.done)+n > int64(s.most) {
		s.dropped.Store(true)
	}
}

// hand gives the cells to the store.
func (c *cells) hand() {
	st := c.store
	if st.dropped.Load() || c.table == nil {
		return
	}
	t := c.table
	hash := make([]uint64, t.size())
	for i := range hash {
		hash[i] = hashCell(t.key(i))
	}
	st.mu.Lock()
	defer st.mu.Unlock()
	to := make([]int32, len(hash))
	for i := range to {
		to[i] = st.table.put(hash[i], t.key(i))
	}
	st.table.sums.mergeFrom(t.sums, to)
	st.size.Store(int64(st.table.size()))
	t.reset()
}

// join ends an epoch: all workers hand over what they have.
func (st *cellStore) join(workers []*cells, rows int64) {
	for _, c := range workers {
		c.hand()
	}
	n := st.size.Load()
	st.judge(n)
	if st.blind && rows >= sampleRows && n*fewerCells > rows {
		st.dropped.Store(true)
	}
	st.done += int(n)
	if st.dropped.Load() {
		st.table = nil
	}
}

// cellRows are the cells of a state, in order of key, in its frame.
type cellRows struct {
	x      [][]float64 // raw dense columns without the outcome
	low    [][]float64 // what they leave off; nil in double arithmetic
	cats   [][]int32   // places of the levels, by category
	weight []float64   // of each row (precision, sampling), or all together (frequency); nil without
	rows   []int64
	size   []float64 // rows, or the sum of frequencies
	sum    [5][]float64
	// Sums of powers of v, 1 to 4; 0 is the size of what was added up for the
	// square, with what fixed point may have cost in units of rounding.
}

// CellRows is the number of unique rows that pass one kept; 0 if none were asked for
// or CellsLost.
func (s *State) CellRows() int {
	if s.cells == nil {
		return 0
	}
	return len(s.cells.rows)
}

func newCellRows(s *cellSpec, most int) *cellRows {
	columns := func(n int) [][]float64 {
		c := make([][]float64, n)
		for i := range c {
			c[i] = make([]float64, 0, most)
		}
		return c
	}
	c := &cellRows{x: columns(s.lay.nx), rows: make([]int64, 0, most), size: columns(1)[0]}
	copy(c.sum[:], columns(5))
	if s.extended {
		c.low = columns(s.lay.nx)
	}
	for range s.lay.design.Categories {
		c.cats = append(c.cats, make([]int32, 0, most))
	}
	return c
}

// gatherCells brings the cells of all epochs together, in the last frame.
func (s *State) gatherCells(spec *cellSpec, level [][]int32) {
	if spec == nil {
		return
	}
	if spec.dropped.Load() {
		s.CellsLost = true
		return
	}
	type place struct{ epoch, id int32 }
	nx, cats := s.lay.nx, len(s.lay.design.Categories)
	at := nx // of categories in keys
	if spec.extended {
		at += nx
	}
	var most int
	for _, e := range s.epochs {
		most += e.cells.table.size()
	}
	order := make([]place, 0, most)
	for i, e := range s.epochs {
		t := e.cells.table
		seen := &t.sums.partials
		if over := seen.bad || seen.max*float64(e.cells.folds.Load()) >= math.Ldexp(1, 126+cellUnit); over {
			s.CellsLost = true
			return
		}
		for id := range t.size() {
			key := t.key(id)
			for c := range cats {
				key[at+c] = uint64(level[c][key[at+c]])
			}
			order = append(order, place{int32(i), int32(id)})
		}
	}
	keyOf := func(p place) []uint64 { return s.epochs[p.epoch].cells.table.key(int(p.id)) }
	slices.SortFunc(order, func(a, b place) int {
		return cmp.Or(slices.Compare(keyOf(a), keyOf(b)), cmp.Compare(a.epoch, b.epoch))
	})
	out := newCellRows(spec, most)
	fits := make([]wideFit, len(s.epochs))
	for i, e := range s.epochs {
		fits[i] = newWideFit(e.frame)
	}
	last := newWideFit(s.Frame)
	var prev []uint64
	x := make([]Wide, nx)
	for _, p := range order {
		key, e := keyOf(p), s.epochs[p.epoch]
		for j := range x {
			x[j] = Wide{math.Float64frombits(key[j]), 0}
			if spec.extended {
				x[j].Lo = math.Float64frombits(key[nx+j])
			}
		}
		if prev == nil || !slices.Equal(prev, key) {
			prev = key
			for j := range x {
				out.x[j] = append(out.x[j], x[j].Hi)
				if spec.extended {
					out.low[j] = append(out.low[j], x[j].Lo)
				}
			}
			for c := range cats {
				out.cats[c] = append(out.cats[c], int32(key[at+c]))
			}
			if spec.kind == stream.Precision || spec.kind == stream.Sampling {
				out.weight = append(out.weight, math.Float64frombits(key[at+cats]))
			}
			out.rows, out.size = append(out.rows, 0), append(out.size, 0)
			for k := range out.sum {
				out.sum[k] = append(out.sum[k], 0)
			}
		}
		i := len(out.rows) - 1
		t := e.cells.table.sums
		rows := t.rows[p.id]
		var m [5]float64 // sums of v^k, with m[0] their weight
		for k, f := range t.fix(p.id)[:min(4, t.width)] {
			m[k+1] = f.float(cellUnit)
		}
		m[0] = float64(rows)
		if t.width > 2 {
			m[3] /= cubeScale
			m[4] /= quartScale
		}
		if spec.kind == stream.Frequency {
			m[0] = t.fix(p.id)[4].float(cellUnit) / freqScale
		}
		folds := float64(min(rows, e.cells.folds.Load()))
		gross := m[2]
		if e.frame != s.Frame {
			a := s.Frame.YInv / e.frame.YInv
			c := fits[p.epoch].at(x).Sub(last.at(x)).Float() * s.Frame.YInv
			m, gross = movePowers(m, a, c)
			folds *= a * a
		}
		out.rows[i] += rows
		out.size[i] += m[0]
		out.sum[0][i] += gross + folds*math.Ldexp(1, cellUnit-1+53)
		for k := 1; k < 5; k++ {
			out.sum[k][i] += m[k]
		}
	}
	if spec.kind == stream.Frequency {
		out.weight = out.size
	}
	s.cells = out
}

// movePowers turns sums of powers of v into those of a v + c, and gives the size of
// what was added up for the square.
func movePowers(m [5]float64, a, c float64) (out [5]float64, gross float64) {
	for k := range out {
		for j, binomial := 0, 1.0; j <= k; j++ {
			out[k] += binomial * math.Pow(a, float64(j)) * math.Pow(c, float64(k-j)) * m[j]
			binomial *= float64(k-j) / float64(j+1)
		}
	}
	return out, a*a*m[2] + 2*math.Abs(a*c*m[1]) + c*c*m[0]
}

// wideFit is what a frame takes out of the outcome, YShift + H'u / YInv.
type wideFit struct {
	f    *Frame
	coef []Wide // of (x - Shift) Inv
}

func newWideFit(f *Frame) wideFit {
	w := wideFit{f: f, coef: make([]Wide, f.Terms)}
	for j, h := range f.H {
		if !f.White {
			w.coef[j] = Widen(h)
			continue
		}
		for i := range j + 1 {
			w.coef[i] = w.coef[i].Add(Widen(f.T[i*f.Terms+j]).Times(h))
		}
	}
	return w
}

func (w *wideFit) at(x []Wide) Wide {
	var s Wide
	for j, c := range w.coef {
		s = s.Add(c.Mul(x[j].Sub(Widen(w.f.Shift[j])).Times(w.f.Inv[j])))
	}
	return s.Times(1 / w.f.YInv).Add(Widen(w.f.YShift)) // YInv is a power of two
}
