package accum

import (
	"cmp"
	"fmt"
	"math"
	"sync"

	"github.com/tallrow/tallrow/stream"
)

// Clusters that hold all rows of each unit need no second pass: with the second moments
// A_c of their rows the moments within units are
//
//	A_c - sum_{g in c} s_g s_g' / W_g
//
// summed over the units of the cluster, and scores follow from these. So each unit keeps,
// beside its sums, the number of the cluster that its rows were met in, or that there
// were two: a fact of the data, in whatever order they are read. The subtraction costs
// digits as that of State.S does; Scores.Gross tells how many.

// An owner of a key is the number of the cluster that its rows lie in: 0 before any was
// seen, manyOwners after two. It stands behind the sums of a record and is joined where
// those are added.
var manyOwners = fixed{-1, math.MaxUint64}

func (f *fixed) joinOwner(o fixed) {
	switch {
	case o == fixed{} || o == *f:
	case *f == fixed{}:
		*f = o
	default:
		*f = manyOwners
	}
}

// addSums is addFixed for sums with owners behind them.
func addSums(dst []fixed, part []float64, unit, owners int) bool {
	n := len(dst) - owners
	good := addFixed(dst[:n], part[:n], unit)
	for i, x := range part[n:] {
		o := manyOwners
		if x >= 0 {
			o = fixed{lo: uint64(x)}
		}
		dst[n+i].joinOwner(o)
	}
	return good
}

// mergeSums is mergeFixed for sums with owners behind them.
func mergeSums(dst, src []fixed, owners int) {
	n := len(dst) - owners
	mergeFixed(dst[:n], src[:n])
	for i, o := range src[n:] {
		dst[n+i].joinOwner(o)
	}
}

// addOwned lets add see the numbers of a row, and joins the row's owners. It calls split
// where rows of a unit have two within a fold.
func addOwned(add rowAdder, owners int, split func()) rowAdder {
	if owners == 0 {
		return add
	}
	return func(part, rows []float64, base []int32, n int) {
		sums := len(part) - owners
		add(part[:sums], rows, nil, n)
		own := part[sums:]
		for ; len(base) > 0; base = base[owners:] {
			for i, c := range base[:owners] {
				switch x := float64(c); own[i] {
				case x:
				case 0:
					own[i] = x
				case -1:
				default:
					own[i] = -1
					split()
				}
			}
		}
	}
}

// sharedKeys numbers the values of a key for all workers, in order of first sight, which
// shows in no result.
type sharedKeys struct {
	key int
	mu  sync.Mutex
	in  *interner
}

func newSharedKeys(d *stream.Design, key int) *sharedKeys {
	return &sharedKeys{key: key, in: newInterner(d.Keys[key].Kind)}
}

// sharedView is one worker's: it has numbers of its own, and those of all.
type sharedView struct {
	*sharedKeys
	own    *interner
	ids    []int32
	common []int32
}

func (s *sharedKeys) view() *sharedView {
	return &sharedView{sharedKeys: s, own: newInterner(s.in.kind), ids: make([]int32, stride)}
}

// number gives the numbers of the first n cells, from 1.
func (v *sharedView) number(cells *stream.Vector, n int) []int32 {
	v.own.ids(cells, n, v.ids)
	if from := len(v.common); from < v.own.size() {
		v.mu.Lock()
		for id := from; id < v.own.size(); id++ {
			v.common = append(v.common, v.in.put(v.own.key(int32(id)))+1)
		}
		v.mu.Unlock()
	}
	ids := v.ids[:n]
	for r, id := range ids {
		ids[r] = v.common[id]
	}
	return ids
}

// split gives up the second moments of clusters where some do not hold whole units,
// unless there is no second pass. Folds are cut by the input, so that it hangs on that
// alone.
func (b *budget) split() {
	if !b.keep && !b.dropped.Swap(true) {
		b.giveUp()
	}
}

// numbersShare of the memory is what the numbers of clusters may take.
const numbersShare = 8

// check refuses numbers beyond their share of memory.
func (s *sharedKeys) check(d *stream.Design, b *budget) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	need := int64(b.workers+1) * s.in.memory()
	if need <= b.memory/numbersShare {
		return nil
	}
	return &MemoryError{What: fmt.Sprintf("the numbers of %d values of %s over %d workers", s.in.size(), d.Keys[s.key].Text, b.workers), Need: need * numbersShare, Have: b.memory}
}

// nest is what the units take off the second moments of the clusters of a key.
type nest struct {
	*sharedKeys
	split  bool // a unit has rows in two clusters
	idle   bool // nothing is summed
	p      int
	others unitFeed // units of more than one row; Rows of a cluster count them
	single unitFeed // units of one row
}

// unitFeed sums s_g s_g' / W_g by cluster, units in order of key.
type unitFeed struct {
	*groups
	z     []float64 // of a batch, by column
	cols  [][]float64
	keys  stream.Vector
	rows  int
	batch int
}

func newUnitFeed(pool *groupPool, kind stream.Kind, p, unit int) unitFeed {
	f := unitFeed{groups: newGroups(pool.store(kind, p*(p+1)/2, unit), p, 0, addSquares), z: make([]float64, p*stride), cols: make([][]float64, p)}
	f.keys.Kind = kind
	return f
}

// flush sums the batch.
func (f *unitFeed) flush() error {
	if f.rows == 0 {
		return nil
	}
	for j := range f.cols {
		f.cols[j] = f.z[j*stride:][:f.rows]
	}
	rows, _ := f.room(f.rows)
	transpose(rows, len(f.cols), 0, f.cols)
	f.take(&f.keys, f.rows)
	f.rows, f.keys.F64, f.keys.I64, f.keys.Code = 0, f.keys.F64[:0], f.keys.I64[:0], f.keys.Code[:0]
	if f.batch++; f.batch%foldBatches == 0 {
		return f.fold()
	}
	return nil
}

func (f *unitFeed) end() error {
	if err := f.flush(); err != nil {
		return err
	}
	if err := f.fold(); err != nil {
		return err
	}
	err := f.finish()
	f.z, f.cols = nil, nil
	return err
}

// newNests makes what the units of the state will be fed to, for each key of b.nested.
func (s *State) newNests(b *budget, o *Options) {
	if len(b.nested) == 0 {
		return
	}
	pool := newGroupPool(o)
	pool.bound = cmp.Or(o.heldMost, max(o.Memory/numbersShare, minHeld))
	s.nestPool = pool
	p := s.lay.p0 + 2
	for _, keys := range b.nested {
		kind := keys.in.kind
		s.nests = append(s.nests, &nest{sharedKeys: keys, p: p, others: newUnitFeed(pool, kind, p, b.unit), single: newUnitFeed(pool, kind, p, b.unit), idle: s.Dropped})
	}
}

// add takes in a unit, whose s_g / sqrt(W_g) stands in row r of the columns of z.
func (n *nest) add(owner int32, single bool, z []float64, r int) error {
	if n.split = n.split || owner < 0; n.split || n.idle {
		return nil
	}
	f := &n.others
	if single {
		f = &n.single
	}
	for j := range n.p {
		f.z[j*stride+f.rows] = z[j*stride+r]
	}
	switch id := owner - 1; n.in.kind {
	case stream.Text:
		if f.keys.Dict == nil {
			f.keys.Dict = &stream.Dict{Values: n.in.texts}
		}
		f.keys.Code = append(f.keys.Code, id)
	case stream.Float64:
		f.keys.F64 = append(f.keys.F64, math.Float64frombits(uint64(n.in.vals[id])))
	default:
		f.keys.I64 = append(f.keys.I64, n.in.vals[id])
	}
	if f.rows++; f.rows == stream.BatchRows {
		return f.flush()
	}
	return nil
}

// endNests ends what add began. size is that of the smallest second moment of the whole.
func (s *State) endNests(size float64) error {
	for _, n := range s.nests {
		for _, f := range []*unitFeed{&n.others, &n.single} {
			if err := f.end(); err != nil {
				return err
			}
			over, coarse := f.store.seen.fits(f.store.unit, size)
			s.Coarse = s.Coarse || !n.split && (over || coarse)
		}
	}
	return nil
}

// nest is that of a key, or nil.
func (s *State) nest(key int) *nest {
	for _, n := range s.nests {
		if n.key == key {
			return n
		}
	}
	return nil
}

// Nested reports whether all rows of each unit whose effects were swept out lie in one
// cluster of a key, which is Design.Sweep or one of Needs.Clusters. Else the sums of pass
// one give no scores of these clusters.
func (s *State) Nested(key int) bool {
	if s.Swept == nil {
		return false
	}
	n := s.nest(key)
	return key == s.lay.design.Sweep || n != nil && !n.split
}

// nestedScores forms the scores of clusters that hold whole units, and their second
// moments within, from the second moments of their rows and what units take off them.
func (s *State) nestedScores(sc *Scores, theta []float64, n *nest) {
	between, single := len(sc.stores), len(sc.stores)+1
	sc.stores = append(sc.stores, n.others.store, n.single.store)
	rows := func(parts []groupPart) (rows int64) {
		for i := range parts {
			switch parts[i].tag {
			case between:
			case single:
				rows -= parts[i].rows
			default:
				rows += parts[i].rows
			}
		}
		return rows
	}
	sc.skip = func(parts []groupPart) bool { return rows(parts) == 0 }
	s.withinScores(sc, theta, func(c *Cluster, parts []groupPart, within, gross []float64) {
		c.Rows = rows(parts)
		for i := range parts {
			sign, unit := 1.0, sc.stores[parts[i].tag].unit
			if parts[i].tag >= between {
				sign = -1
			}
			for q, f := range parts[i].sums {
				x := f.float(unit)
				within[q] += sign * x
				gross[q] += math.Abs(x)
			}
		}
	})
}
