package accum

import (
	"context"
	"errors"
	"io"
	"math"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// epoch is the sums of a run of rows in one frame.
type epoch struct {
	frame    *Frame
	gram     []float64 // packed, width columns
	gramLow  []float64 // what gram leaves off, in extended arithmetic
	fourth   []float64
	gramX    superVec // gram and fourth, exact
	fourX    superVec
	extended bool
	unit     int // of keyed sums
	tables   []*keyTable
	pairs    []*pairTable
	clusters []*groupStore
	cells    *cellStore
	units    *groupStore // sums by unit, where effects are swept out
	lone     []*loneTracker
	reach    float64
	weight   superSum
	freq     int64
	rows     int64
	nonzero  []int64
	value    []float64
	varied   []bool
	tally    stream.Tally
}

// joinWorkers joins the sums of workers exactly: the order does not show.
func joinWorkers(ws []*firstWorker) (*epoch, error) {
	w := ws[0]
	for _, o := range ws[1:] {
		w.join(o)
	}
	e := &epoch{frame: w.frame, tables: w.tables, pairs: pairTablesOf(w.pairs), clusters: make([]*groupStore, len(w.clusters)),
		lone: w.lone, reach: w.reach, weight: w.weight, freq: w.freq, rows: w.rows, nonzero: w.nonzero, value: w.value, varied: w.varied}
	e.tally.Add(&w.eval.Tally)
	if w.cells != nil {
		e.cells = w.cells.store
		var all []*cells
		for _, o := range ws {
			all = append(all, o.cells)
		}
		e.cells.join(all, e.rows)
	}
	if !w.budget.dropped.Load() {
		var held int64
		for k, g := range w.clusters {
			if g == nil {
				continue
			}
			for _, o := range ws {
				if err := o.clusters[k].finish(); err != nil {
					return nil, err
				}
			}
			e.clusters[k] = g.store
			if !w.budget.keep {
				// One worker alone may not have seen how many there are.
				n, err := g.store.distinct()
				if err != nil {
					return nil, err
				}
				held += n * g.store.clusterBytes()
			}
		}
		w.budget.drop(held)
	}
	e.gramX, e.fourX, e.extended, e.unit = w.gramX, w.fourX, w.wide != nil, w.budget.unit
	if w.units != nil {
		for _, o := range ws {
			if err := o.units.finish(); err != nil {
				return nil, err
			}
		}
		e.units = w.units.store
	}
	e.gram = make([]float64, len(w.gram))
	if w.wide != nil {
		e.gramLow = make([]float64, len(w.gram))
		w.gramX.wides(e.gram, e.gramLow)
	} else {
		w.gramX.values(e.gram)
	}
	if w.q != nil {
		e.fourth = make([]float64, len(w.fourth))
		w.fourX.values(e.fourth)
	}
	return e, nil
}

// join adds the sums that o keeps to itself, but those of clusters and unique rows.
func (w *firstWorker) join(o *firstWorker) {
	w.gramX.merge(o.gramX)
	if w.q != nil {
		w.fourX.merge(o.fourX)
	}
	for i, t := range o.tables {
		w.tables[i].mergeFrom(t, same(len(t.rows)))
	}
	for k, t := range o.lone {
		if t != nil {
			w.lone[k].mergeFrom(t)
		}
	}
	w.reach = max(w.reach, o.reach)
	w.weight.merge(&o.weight)
	w.freq += o.freq
	w.rows += o.rows
	for j, n := range o.nonzero {
		w.nonzero[j] += n
		w.zero[j] += o.zero[j]
	}
	joinVaried(w.value, w.varied, o.value, o.varied)
	w.eval.Tally.Add(&o.eval.Tally)
}

// joinVaried joins what is known of the nonzero cells of numeric terms: whether they
// differ, and if not their value (0: there is none, or it is of no more use).
func joinVaried(value []float64, varied []bool, v []float64, d []bool) {
	for j, x := range v {
		if value[j] == 0 {
			value[j] = x
		}
		varied[j] = varied[j] || d[j] || (x != 0 && x != value[j])
	}
	settleVaried(value, varied)
}

// settleVaried forgets the cells that came first where others differ: which those were
// depends on workers and on the order of joining.
func settleVaried(value []float64, varied []bool) {
	for j, d := range varied {
		if d {
			value[j] = 0
		}
	}
}

// epochWorker sums the first segment of a source that cannot be sampled, in
// epochs of 1, 1, 2, 4, ... blocks.
type epochWorker struct {
	*firstWorker
	shift  bool
	blocks int
	next   int
	epochs []*epoch
}

func (w *epochWorker) add() error {
	if w.blocks == w.next {
		if err := w.end(); err != nil {
			return err
		}
		rows := previousRows(w.lay, w.epochs)
		rows.addBlock(&w.block, w.lay)
		w.frame = buildFrame(rows, w.lay.p0, w.shift)
		w.next = max(1, 2*w.next)
		if w.lay.design.Sweep >= 0 {
			w.next = math.MaxInt // sums of units are of one frame
		}
	}
	w.blocks++
	return w.firstWorker.add()
}

// end closes the present epoch.
func (w *epochWorker) end() error {
	if w.blocks == 0 {
		return nil
	}
	if err := w.fold(); err != nil {
		return err
	}
	if err := w.segment(0); err != nil {
		return err
	}
	e, err := joinWorkers([]*firstWorker{w.firstWorker})
	if err != nil {
		return err
	}
	w.epochs = append(w.epochs, e)
	w.firstWorker = newFirstWorker(w.lay, w.loader, w.needs, w.budget, w.lay.pairTables(w.budget.unit, w.lay.design.Spec.Weight == ""), w.budget.clusterStores(w.lay, w.needs, w.wide != nil), w.budget.cellStore())
	w.eval.Tally = stream.Tally{}
	return nil
}

// runEpochs reads a source that cannot be sampled. Within the first segment an
// epoch is 1, 1, 2, 4, ... blocks, later 1, 2, 4, ... segments; each has a frame
// from all rows before it and its own first block, so that a file sorted by a
// term cannot spoil the sums. Where effects of units are swept out, all epochs have the
// frame of the first: sums of units cannot be moved without losing digits, which
// extended arithmetic has to spare. Under Auto the first segment with used rows is
// summed in extended arithmetic and decides about the rest.
func runEpochs(ctx context.Context, p *pass, scan stream.Scan, l *layout, needs *Needs, b *budget, shift, once bool, o Options) (_ []*epoch, extended bool, err error) {
	workers := max(1, o.Workers)
	decided := o.Arithmetic != Auto || once && l.design.Sweep >= 0
	extended = o.Arithmetic != Double
	seg, err := scan.Next(ctx)
	if errors.Is(err, io.EOF) {
		return nil, false, nil
	}
	if err != nil {
		return nil, false, err
	}
	ew := &epochWorker{shift: shift}
	ew.firstWorker = newFirstWorkers(1, l, trivialFrame(l), extended, needs, b)[0]
	ew.eval.Extended(true) // to know what float64 leaves off
	none := func(context.Context) (stream.Segment, error) { return nil, io.EOF }
	if err := p.run(ctx, []blockWorker{ew}, &begun{seg: seg}, none); err != nil {
		return nil, false, err
	}
	tail := ew.eval.Tally // rows that were read but not used still count
	if err := ew.end(); err != nil {
		return nil, false, err
	}
	epochs := ew.epochs
	if len(epochs) == 0 {
		e, err := joinWorkers([]*firstWorker{ew.firstWorker})
		if err != nil {
			return nil, false, err
		}
		e.tally = tail
		epochs = append(epochs, e)
	}
	for size := 1; ; size *= 2 {
		seg, err := scan.Next(ctx)
		if errors.Is(err, io.EOF) {
			if !decided {
				extended = chooseAfter(l, epochs, shift, true)
			}
			return epochs, extended, nil
		}
		if err != nil {
			return nil, false, err
		}
		waiting := !slices.ContainsFunc(epochs, func(e *epoch) bool { return e.rows > 0 })
		if !decided && !waiting {
			extended, decided = chooseAfter(l, epochs, shift, false), true
		}
		ws := newFirstWorkers(workers, l, nil, extended, needs, b)
		bw := make([]blockWorker, workers)
		for i := range ws {
			bw[i] = ws[i]
		}
		// The first block of the epoch takes part in its frame. As long as no row was
		// used, the frame waits for the first that is.
		rows := previousRows(l, epochs)
		ld := ws[0].loader
		start := &begun{seg: seg}
		for {
			err = seg.Read(&ld.batch)
			if err == nil {
				ld.eval.Segment = seg.Number()
				err = ld.eval.Eval(&ld.batch, seg.Locate, &ld.block)
			}
			if err != nil {
				break
			}
			if start.loaded = ld.block.Rows > 0 || !waiting; start.loaded {
				rows.addBlock(&ld.block, l)
				break
			}
			start.batches++
			start.seen += int64(ld.batch.Rows)
			p.meter.Rows.Add(int64(ld.batch.Rows))
			if err = ctx.Err(); err != nil {
				break
			}
		}
		if err != nil && !errors.Is(err, io.EOF) {
			seg.Close()
			return nil, false, err
		}
		if waiting && !start.loaded {
			size = 1 // still nothing to make a frame of
		}
		f := buildFrame(rows, l.p0, shift)
		if i := slices.IndexFunc(epochs, func(e *epoch) bool { return e.rows > 0 }); i >= 0 && l.design.Sweep >= 0 {
			f = epochs[i].frame
		}
		for _, w := range ws {
			w.frame = f
		}
		left := size - 1
		next := func(ctx context.Context) (stream.Segment, error) {
			if left == 0 {
				return nil, io.EOF
			}
			left--
			return scan.Next(ctx)
		}
		if err := p.run(ctx, bw, start, next); err != nil {
			return nil, false, err
		}
		e, err := joinWorkers(ws)
		if err != nil {
			return nil, false, err
		}
		epochs = append(epochs, e)
	}
}
