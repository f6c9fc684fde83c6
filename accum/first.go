package accum

import (
	"cmp"
	"context"
	"errors"
	"math"
	"sync/atomic"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// firstWorker sums second moments, and on request fourth moments and the second
// moments of clusters, in one frame.
type firstWorker struct {
	*loader
	needs  *Needs
	budget *budget

	gram    []float64 // of the present segment
	gramLow []float64 // what gram leaves off, in extended arithmetic
	gramX   superVec
	q       *quartic
	fourth  []float64
	fourX   superVec
	zs      []float64 // z times a root of the weight
	root4   []float64

	cats   *categories
	tables []*keyTable
	pairs  []*pairBuffer // into tables common to the workers of an epoch
	tid    []int32

	clusters []*groups     // nil for keys that are not wanted
	units    *groups       // sums by unit; nil unless effects are swept out
	owners   []*sharedView // of units, by budget.nested
	// What units take of the rows: columns, and room for weighted ones.
	unitCols, unitOrder [][]float64
	unitLow             []float64
	lone                []*loneTracker
	zcols               [][]float64
	cells               *cells // nil unless wanted

	reach   float64 // bound of the sum of w |(1, u)|^2 over any block
	weight  superSum
	freq    int64
	rows    int64
	nonzero []int64 // of each numeric term, see countNonzero
	zero    []int64
	value   []float64 // a nonzero cell of each numeric term
	varied  []bool    // its nonzero cells are not all equal
}

// budget watches the memory of the keyed tables of all workers, and holds what
// they share.
type budget struct {
	memory  int64
	cluster int64
	unit    int
	dense   int // Options.Dense
	workers int
	num     *numbering
	pool    *groupPool
	cells   *cellSpec   // nil unless unique rows are wanted
	keep    bool        // cluster sums are never dropped
	dropped atomic.Bool // cluster sums outgrew their share and were dropped
	// nested are the keys whose clusters may hold whole units of swept effects.
	nested []*sharedKeys
	// besideUnits are the stores of cluster sums where those of units are not dropped
	// with them.
	besideUnits []*groupStore
}

func newBudget(l *layout, needs *Needs, o *Options, unit int) *budget {
	b := &budget{memory: o.Memory, cluster: cmp.Or(o.Clusters, o.Memory/16), unit: unit,
		dense: cmp.Or(o.Dense, DenseColumns), workers: max(1, o.Workers), num: newNumbering(l), keep: needs.Keep}
	if d := l.design; d.Sweep >= 0 && !needs.Retain {
		for _, k := range needs.Clusters {
			if k != d.Sweep {
				b.nested = append(b.nested, newSharedKeys(d, k))
			}
		}
	}
	return b
}

// clusterStores makes the stores of the second moments of clusters in one frame.
// The sums of units follow those of the keys.
func (b *budget) clusterStores(l *layout, needs *Needs, extended bool) []*groupStore {
	stores := make([]*groupStore, len(l.design.Keys)+1)
	p := l.p0 + 2
	for _, k := range needs.Clusters {
		stores[k] = b.pool.store(l.design.Keys[k].Kind, p*(p+1)/2, b.unit)
	}
	if u := l.design.Sweep; u >= 0 && !b.keep {
		for _, k := range needs.Clusters {
			b.besideUnits = append(b.besideUnits, stores[k])
		}
	}
	if u := l.design.Sweep; u >= 0 && (extended || stores[u] == nil || !b.keep || needs.Retain || len(b.nested) > 0) {
		if extended {
			p *= 2
		}
		st := b.pool.store(l.design.Keys[u].Kind, p+len(b.nested), b.unit)
		st.owners = len(b.nested)
		stores[len(stores)-1] = st
	}
	return stores
}

// cellStore makes the store of the unique rows of an epoch.
func (b *budget) cellStore() *cellStore {
	if b.cells == nil {
		return nil
	}
	return &cellStore{cellSpec: b.cells, table: newCellTable(b.cells)}
}

// newFirstWorkers makes the workers of one epoch.
func newFirstWorkers(n int, l *layout, f *Frame, extended bool, needs *Needs, b *budget) []*firstWorker {
	pairs := l.pairTables(b.unit, l.design.Spec.Weight == "")
	stores := b.clusterStores(l, needs, extended)
	unique := b.cellStore()
	ws := make([]*firstWorker, n)
	for i := range ws {
		ld := newLoader(l, f)
		if extended {
			ld.extend()
		}
		ws[i] = newFirstWorker(l, ld, needs, b, pairs, stores, unique)
	}
	return ws
}

func newFirstWorker(l *layout, ld *loader, needs *Needs, b *budget, pairs []*pairTable, stores []*groupStore, unique *cellStore) *firstWorker {
	w := &firstWorker{loader: ld, needs: needs, budget: b}
	w.gram = make([]float64, l.width*(l.width+1)/2)
	w.gramX = make(superVec, len(w.gram))
	if w.wide != nil {
		w.gramLow = make([]float64, len(w.gram))
	}
	w.zs = w.z
	if w.root != nil {
		w.zs = make([]float64, len(w.z))
	}
	if needs.Fourth {
		w.q = newQuartic(l.p0 + 2)
		w.fourth = make([]float64, w.q.size())
		w.fourX = make(superVec, w.q.size())
		w.root4 = make([]float64, stride)
	}
	w.cats = newCategories(l, b.num)
	for _, t := range pairs {
		w.pairs = append(w.pairs, &pairBuffer{t: t})
	}
	w.tid = make([]int32, stride)
	for i := range l.tables {
		w.tables = append(w.tables, newKeyTable(len(l.tables[i].prods), b.unit))
	}
	w.clusters = make([]*groups, len(l.design.Keys))
	w.lone = make([]*loneTracker, len(l.design.Keys))
	for _, k := range needs.Clusters {
		w.clusters[k] = newGroups(stores[k], l.p0+2, 0, addSquares)
		w.lone[k] = newLoneTracker(l.p0)
	}
	w.zcols = make([][]float64, l.p0+2)
	if unique != nil {
		w.cells = newCells(unique)
	}
	if st := stores[len(stores)-1]; st != nil {
		w.units = newUnitGroups(ld, st, b)
		for _, k := range b.nested {
			w.owners = append(w.owners, k.view())
		}
		w.unitOrder = make([][]float64, 2*(l.p0+2))
		if w.wide != nil && w.root != nil {
			w.unitLow = make([]float64, 2*(l.p0+2)*stride)
		}
	}
	w.nonzero, w.zero = make([]int64, l.p0), make([]int64, l.p0)
	w.value, w.varied = make([]float64, l.p0), make([]bool, l.p0)
	return w
}

func (w *firstWorker) loading() *loader { return w.loader }

func (w *firstWorker) add() error {
	w.load()
	l, n := w.lay, w.block.Rows
	if w.root != nil {
		if w.wide != nil {
			w.weighWide(w.zs)
		} else {
			w.scaled(w.zs, w.root, l.width)
		}
		for _, x := range w.block.Weight[:n] {
			w.weight.add(x)
			w.freq += int64(x) // whole numbers when it matters
		}
	}
	w.rows += int64(n)
	before := w.trace()
	if w.wide != nil {
		kernel.GramWide(w.gram, w.gramLow, w.zs, w.wide.zsLow, stride, n, l.width)
	} else {
		kernel.Gram(w.gram, w.zs, stride, n, l.width)
	}
	after := w.trace()
	w.reach = max(w.reach, after-before+1e-12*after)
	for j := range l.p0 {
		w.countNonzero(j)
	}
	w.watch.lap(StageSecond)
	if len(l.tables) > 0 {
		if err := w.cats.number(&w.block); err != nil {
			return err
		}
		for i, t := range w.tables {
			addProducts(t, w.cats.rows[i][:n], w.zs, l.tables[i].prods)
		}
		for i, p := range w.pairs {
			s := &l.pairs[i]
			p.add(w.cats.rows[s.g][:n], w.cats.rows[s.h][:n], w.zs, s.prods)
		}
		w.watch.lap(StageLevels)
	}
	if w.units != nil {
		w.addUnits()
	}
	if !w.budget.dropped.Load() {
		for k, g := range w.clusters {
			if g == nil {
				continue
			}
			w.lone[k].add(&w.block.Key[k], w.block.X, n)
			for j := range w.zcols {
				w.zcols[j] = w.zs[j*stride : j*stride+n]
			}
			rows, _ := g.room(n)
			transpose(rows, len(w.zcols), 0, w.zcols)
			g.take(&w.block.Key[k], n)
		}
		w.watch.lap(StageClusters)
	}
	if w.cells != nil {
		levels := w.cats.ids
		w.cells.add(&w.block, levels, w.col(l.v()))
		w.watch.lap(StageCells)
	}
	// Last, since frequencies overwrite the scaled columns.
	if w.q != nil {
		z := w.zs
		if w.root != nil && l.design.Spec.WeightKind == stream.Frequency {
			// The meat takes a frequency once: each of four factors gets its fourth root.
			z = w.fourthRoots()
		}
		w.q.add(w.fourth, z, n)
		w.watch.lap(StageFourth)
	}
	return nil
}

// trace is the sum of squares of (1, u) in the present segment.
func (w *firstWorker) trace() (t float64) {
	for j := range w.lay.p0 + 1 {
		t += w.gram[j*(j+1)/2+j]
	}
	return t
}

// countNonzero counts nonzero cells of a term, frequencies as often as they say,
// and notes whether they differ. It stops where two cells are zero and two are
// not: all that is asked of the count is whether it is 1 or one less than all.
func (w *firstWorker) countNonzero(j int) {
	if w.nonzero[j] >= 2 && w.zero[j] >= 2 {
		return
	}
	x := w.block.X[j][:w.block.Rows]
	zero := int64(kernel.Zeros(x))
	if !w.varied[j] && zero < int64(len(x)) {
		for _, v := range x {
			if v == 0 {
				continue
			}
			if w.value[j] == 0 {
				w.value[j] = v
			}
			if v != w.value[j] {
				w.varied[j] = true
				break
			}
		}
	}
	all := int64(len(x))
	if w.root != nil && w.lay.design.Spec.WeightKind == stream.Frequency {
		all, zero = 0, 0
		for r, v := range x {
			all += int64(w.block.Weight[r])
			if v == 0 {
				zero += int64(w.block.Weight[r])
			}
		}
	}
	w.zero[j] += zero
	w.nonzero[j] += all - zero
}

func (w *firstWorker) fourthRoots() []float64 {
	n := w.block.Rows
	for r, x := range w.root[:n] {
		w.root4[r] = math.Sqrt(x)
	}
	w.scaled(w.zs, w.root4, w.lay.p0+2)
	return w.zs
}

// addProducts adds, for each row, the products of pairs of columns to the
// partial sums of its key.
func addProducts(t *keyTable, ids []int32, z []float64, prods [][2]int) {
	for r, id := range ids {
		part := t.at(id)
		t.rows[id]++
		for i, p := range prods {
			part[i] = math.FMA(z[p[0]*stride+r], z[p[1]*stride+r], part[i])
		}
	}
}

func (w *firstWorker) fold() error {
	for _, t := range w.tables {
		t.flush()
	}
	for _, p := range w.pairs {
		p.flush()
	}
	if err := w.budget.num.check(w.tables, pairTablesOf(w.pairs), w.budget); err != nil {
		return err
	}
	w.watch.lap(StageLevels)
	if w.cells != nil {
		w.cells.fold()
		w.watch.lap(StageCells)
	}
	if w.units != nil {
		if err := w.units.fold(); err != nil {
			return err
		}
		for _, v := range w.owners {
			if err := v.check(w.lay.design, w.budget); err != nil {
				return err
			}
		}
	}
	if w.budget.dropped.Load() {
		return nil
	}
	var held int64
	for _, g := range w.clusters {
		if g == nil {
			continue
		}
		if err := g.fold(); err != nil {
			return err
		}
		held += g.keys() * g.store.clusterBytes()
	}
	w.budget.drop(held)
	w.watch.lap(StageClusters)
	return nil
}

// drop gives up the second moments of clusters beyond their share. held must depend
// on the number of clusters alone, so that the same data always take the same route.
func (b *budget) drop(held int64) {
	if held > b.cluster && !b.keep && !b.dropped.Swap(true) {
		b.giveUp()
	}
}

func (b *budget) giveUp() {
	if b.besideUnits != nil {
		b.pool.drop(b.besideUnits)
	} else {
		b.pool.close()
	}
}

// clusterBytes is the size of the sums of a cluster proper.
func (s *groupStore) clusterBytes() int64 { return 16 * int64(s.width) }

func (w *firstWorker) segment(int) error {
	w.gramX.addVec(w.gram)
	clear(w.gram)
	if w.wide != nil {
		w.gramX.addVec(w.gramLow)
		clear(w.gramLow)
	}
	if w.q != nil {
		w.fourX.addVec(w.fourth)
		clear(w.fourth)
	}
	return nil
}

// First is pass one: it chooses the frame from fixed rows of the input, reads all
// segments with o.Workers goroutines and returns the state of the sums. Where the
// source cannot be sampled the frame is renewed in doubling epochs. The result
// does not depend on the number of workers.
//
// Errors are those of the source and the evaluator, *NoRowsError, *MemoryError,
// and the context's.
func First(ctx context.Context, src stream.Source, d *stream.Design, needs Needs, o Options) (*State, error) {
	return first(ctx, src, d, needs, o, nil, o.Arithmetic == Extended, defaultUnit)
}

// Again repeats pass one in a frame made from all rows that s has seen.
func Again(ctx context.Context, src stream.Source, s *State, needs Needs, o Options) (*State, error) {
	f := s.fullFrame()
	extended := s.Extended || o.Arithmetic == Extended || (o.Arithmetic == Auto && f.Lossy())
	return first(ctx, src, s.lay.design, needs, o, f, extended, defaultUnit)
}

func first(ctx context.Context, src stream.Source, d *stream.Design, needs Needs, o Options, f *Frame, extended bool, unit int) (s *State, err error) {
	l := newLayout(d)
	if len(l.groups) > 0 && (needs.Fourth || len(needs.Clusters) > 0) {
		return nil, errors.New("accum: fourth moments and cluster sums of categories need a second pass")
	}
	if d.Sweep >= 0 && len(l.groups) > 0 {
		return nil, errors.New("accum: effects are swept out of numeric terms only")
	}
	stamp, err := src.Stamp()
	if err != nil {
		return nil, err
	}
	shift := l.shifted()
	if f == nil {
		sample := o.Sample
		if sample == nil {
			if sample, err = TakeSample(ctx, src, d, o.Workers); err != nil {
				return nil, err
			}
		}
		f = sample.Frame
		if f != nil && o.Arithmetic == Auto {
			extended = sample.NeedsExtended()
		}
	}
	p := newPass(o.Meter, o.Timings)
	p.meter.Pass.Store(1)
	p.meter.Rows.Store(0)
	p.meter.Bytes.Store(0)
	p.meter.Total.Store(src.Info().Bytes)
	b := newBudget(l, &needs, &o, unit)
	b.pool, b.keep = newGroupPool(&o), needs.Keep || !src.Info().Rewindable
	if needs.Cells {
		// An input that is sampled has shown before that it suits; for one that can be
		// read once only there may be no other way.
		blind := f == nil && src.Info().Rewindable
		b.cells = newCellSpec(l, extended || f == nil && o.Arithmetic == Auto, blind, b.cluster, b.workers)
		if o.fewMost > 0 {
			b.cells.local = o.fewMost
		}
	}
	defer func() {
		if s == nil || s.pool != b.pool {
			b.pool.close()
		}
	}()
	scan, err := d.Scan(ctx, src)
	if err != nil {
		return nil, err
	}
	defer scan.Close()
	var epochs []*epoch
	if f != nil {
		ws := newFirstWorkers(b.workers, l, f, extended, &needs, b)
		bw := make([]blockWorker, len(ws))
		for i := range ws {
			bw[i] = ws[i]
		}
		if p.saves, err = o.Checkpoint.savesFirst(p, ws, &needs); err != nil {
			return nil, err
		}
		if err := p.run(ctx, bw, nil, scan.Next); err != nil {
			return nil, err
		}
		e, err := joinWorkers(ws)
		if err != nil {
			return nil, err
		}
		epochs = append(epochs, e)
	} else if o.Checkpoint != nil {
		return nil, o.Checkpoint.fail("the first rows of the input do not say how to sum it, so that sums cannot be taken up again; leave --checkpoint out")
	} else {
		if epochs, extended, err = runEpochs(ctx, p, scan, l, &needs, b, shift, !src.Info().Rewindable, o); err != nil {
			return nil, err
		}
	}
	if err := scan.Close(); err != nil {
		return nil, err
	}
	s, refit, err := newState(l, &needs, p, epochs, extended, b)
	if err != nil {
		return nil, err
	}
	s.stamp, s.pool = stamp, b.pool
	if refit != unit && src.Info().Rewindable && unit == defaultUnit {
		// The unit of the keyed sums did not suit the data: sum again with one that does.
		s.Close()
		s2, err := first(ctx, src, d, needs, o, f, extended, refit)
		if err == nil {
			s2.Repeated = append(s2.Repeated, "sums by level or cluster were far larger or smaller than its first rows announced")
		}
		return s2, err
	}
	if refit != unit {
		s.Coarse = true
	}
	if d.Sweep >= 0 && !needs.Retain { // what is retained is swept when it is loaded
		s.newNests(b, &o)
		if err := s.sweep(); err != nil {
			s.Close()
			return nil, err
		}
	}
	return s, nil
}
