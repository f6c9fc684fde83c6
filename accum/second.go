package accum

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// RowPass says what pass two sums. All vectors are over the internal columns of
// the state (P of them).
type RowPass struct {
	// Theta has P+1 entries; the residual of a row, in units 1/YInv, is
	// sum_c Theta_c z_c with v last. Columns of the group apart follow.
	Theta []float64
	// ThetaLow is what Theta leaves off, where the state is extended; nil for zeros.
	ThetaLow []float64
	// Eliminated is needed if there is a group apart: Whitener is then over what
	// is left of the other columns.
	Eliminated *Eliminated
	// Whitener is the P x K matrix W, row by row, with (X'X)^-1 = W W'. The
	// leverage of a row is h = |W'z|^2, times w for precision and sampling
	// weights. Nil if no leverage is wanted.
	Whitener []float64
	K        int
	// Weights asks for one meat sum e^2 g(h) z z' for each function g (with w^2
	// for precision and sampling weights, w for frequencies). g is called with
	// h = 0 when Whitener is nil.
	Weights []func(h float64) float64
	// Scores lists the keys whose clusters' scores sum w e z are wanted.
	Scores []int
	// Moments lists those of Scores whose clusters' second moments are wanted too (no
	// group apart).
	Moments []int
	// Heavy keeps rows of leverage above HeavyAt, but not those of leverage 1,
	// out of the meats and returns them one by one, with the second moments of
	// all other rows, so that 1-h can be formed without cancellation.
	Heavy bool
	// Spread asks for RowSums.Spread; not with a group apart.
	Spread bool
	// Over asks, if there are leverages, how many rows have one above each of these,
	// and which rows have the largest (HighestRows of them).
	Over []float64
	// Series asks for sums over rows near each other; nil for none.
	Series *SeriesPass
	// Retain keeps all sums as they were added up, for RowSums.Records; the source may
	// then be a part of that of pass one. Base is added to the numbers of its segments
	// to give those of the state.
	Retain bool
	Base   int
}

func (rp *RowPass) moments(key int) bool { return slices.Contains(rp.Moments, key) }

const (
	// HeavyAt is the leverage above which 1-h has lost digits worth saving.
	HeavyAt = 0.99
	// LoneGap: a row with 1-h below it alone determines a coefficient.
	LoneGap = 1e-10
	// maxHeavy bounds the rows that are returned one by one.
	maxHeavy = 1000
)

// meat sums z z' times a multiplier of each row squared.
type meat struct {
	gram   []float64
	gramX  superVec
	tables []*keyTable
	pairs  []*pairBuffer
	used   bool
}

func newMeat(l *layout, cols, unit int, pairs []*pairTable) *meat {
	m := &meat{gram: make([]float64, cols*(cols+1)/2)}
	for _, t := range pairs {
		m.pairs = append(m.pairs, &pairBuffer{t: t})
	}
	m.gramX = make(superVec, len(m.gram))
	for i := range l.tables {
		m.tables = append(m.tables, newKeyTable(len(l.tables[i].prods), unit))
	}
	return m
}

type secondWorker struct {
	*loader
	state *State
	pass  *RowPass
	unit  int
	all   *secondCommon

	meats []*meat
	lone  *meat
	light *meat

	cats *categories
	rowb [][]int32 // internal column of each row, by group

	scores []*groups
	loneT  []*loneTracker
	loneC  []*loneTracker // for the category columns, by raw value
	zcols  [][]float64    // what the scores take of a row, the multiplier first
	apart  []*apartScores // by key, where there is a group apart
	series *seriesWorker

	e, h, mult []float64
	ones       []float64
	zs         []float64
	idx        []int
	val        []float64

	spread  []float64 // see RowSums.Spread
	spreadX superVec
	squares []float64

	swept *sweeper // nil unless effects of units are swept out

	maxLever             float64
	loneRows, heavyCount int64
	heavy                []HeavyRow
	over                 []int64
	highest              []HighRow
	cells                *cellPass // nil for rows
}

// secondCommon is what the workers of pass two share.
type secondCommon struct {
	workers int
	mem     int64
	quad    []float64      // W W' when there are categories
	lever   *apartLever    // for the group apart
	pairs   [][]*pairTable // by meat: of RowPass.Weights, lone, light
	stores  []*groupStore  // of scores, by key
	scores  []*apartCommon // by key, where there is a group apart
	series  *seriesCommon
	owners  []*owners // of units, where effects are swept out
	scales  []float64 // see State.sweptScales
}

func newSecondCommon(s *State, rp *RowPass, unit int, o *Options, pool *groupPool) *secondCommon {
	c := &secondCommon{workers: max(1, o.Workers), mem: o.Memory}
	if rp.Whitener != nil && len(s.Groups) > 0 {
		c.quad = outer(rp.Whitener, len(s.Columns), rp.K)
		if s.Apart != nil {
			c.lever = newApartLever(rp.Eliminated, c.quad)
		}
	}
	if s.means != nil {
		c.owners, c.scales = newOwners(s, rp.Scores), s.sweptScales()
	}
	for range len(rp.Weights) + 2 {
		ts := s.lay.pairTables(unit, false)
		for i, t := range ts {
			t.expect = s.pairCount[i]
		}
		c.pairs = append(c.pairs, ts)
	}
	for _, k := range rp.Scores {
		p := s.scoreWidth()
		if rp.moments(k) {
			p += p * (p + 1) / 2
		}
		c.stores = append(c.stores, pool.store(s.lay.design.Keys[k].Kind, p, unit))
		if s.Apart != nil {
			c.scores = append(c.scores, newApartCommon(s, k, unit))
		}
	}
	return c
}

func newSecondWorker(s *State, rp *RowPass, unit int, all *secondCommon) *secondWorker {
	l := s.lay
	ld := newLoader(l, s.Frame)
	if s.Extended {
		ld.extend()
	}
	w := &secondWorker{loader: ld, state: s, pass: rp, unit: unit, all: all}
	for i := range rp.Weights {
		w.meats = append(w.meats, newMeat(l, l.p0+1, unit, all.pairs[i]))
	}
	w.lone = newMeat(l, l.p0+1, unit, all.pairs[len(rp.Weights)])
	if rp.Heavy {
		w.light = newMeat(l, l.p0+2, unit, all.pairs[len(rp.Weights)+1])
	}
	w.cats = newCategories(l, places{s})
	for range l.groups {
		w.rowb = append(w.rowb, make([]int32, stride))
	}
	add, width, bases := rowAdder(addScaled), l.p0+2, 0
	var parts []int
	if len(l.groups) > 0 && s.Apart == nil {
		for i := range l.groups {
			parts = append(parts, len(l.groups[i].parts))
			width += len(l.groups[i].parts)
		}
		add, bases = addPlaced(l.p0+1, parts), len(l.groups)
	}
	for i, st := range all.stores {
		of, n := add, width
		if rp.moments(rp.Scores[i]) {
			columns := l.p0 + 1
			if parts != nil {
				columns = len(s.Columns)
			}
			of, n = addMoments(columns, l.p0+1, parts), width+1
		}
		w.scores = append(w.scores, newGroups(st, n, bases, of))
		w.loneT = append(w.loneT, newLoneTracker(l.p0))
		w.loneC = append(w.loneC, newLoneTracker(s.allColumns()))
	}
	for _, c := range all.scores {
		w.apart = append(w.apart, newApartScores(c))
	}
	if all.series != nil {
		w.series = newSeriesWorker(all.series)
	}
	if rp.Spread {
		w.spread, w.spreadX, w.squares = make([]float64, l.p0+2), make(superVec, l.p0+2), make([]float64, stride)
	}
	w.over = make([]int64, len(rp.Over))
	w.e, w.h, w.mult = make([]float64, stride), make([]float64, stride), make([]float64, stride)
	w.zs = make([]float64, len(w.z))
	if s.means != nil {
		w.swept = newSweeper(s, all.owners)
		clear(w.z[:stride]) // the constant is swept out too
	}
	return w
}

func (w *secondWorker) loading() *loader { return w.loader }

func (w *secondWorker) add() error {
	w.load()
	if err := w.findColumns(); err != nil {
		return err
	}
	if w.swept != nil {
		if err := w.sweep(); err != nil || w.block.Rows == 0 {
			return err
		}
	}
	w.watch.lap(StageLevels)
	l, n, rp := w.lay, w.block.Rows, w.pass
	freq := w.root != nil && l.design.Spec.WeightKind == stream.Frequency
	e := w.e[:n]
	if w.wide != nil {
		w.residualsWide(e)
	} else {
		w.residuals(e)
	}
	if rp.Spread {
		sq, m := w.squares[:n], w.mult[:n]
		kernel.Scale(sq, e, e)
		copy(m, sq)
		if freq {
			kernel.Scale(m, sq, w.block.Weight[:n])
		}
		kernel.Cross(w.spread, l.p0+1, m, stride, 1, w.z, stride, l.p0+1, n)
		kernel.Cross(w.spread[l.p0+1:], 1, m, stride, 1, sq, stride, 1, n)
	}
	w.addRows(e)
	if w.series != nil {
		w.series.add(w, w.seriesFactors(e))
	}
	for i, k := range rp.Scores {
		w.loneT[i].add(&w.block.Key[k], w.block.X, n)
		w.addScores(w.scores[i], w.loneC[i], k)
		if w.apart != nil {
			w.apart[i].add(w, &w.block.Key[k])
		}
	}
	w.watch.lap(StageClusters)
	return nil
}

// addRows adds the rows of the block, with residuals e, to the meats. For unique rows
// e is the root of the sum of squares of all their residuals.
func (w *secondWorker) addRows(e []float64) {
	l, n, rp := w.lay, w.block.Rows, w.pass
	freq := w.root != nil && l.design.Spec.WeightKind == stream.Frequency
	h := w.h[:n]
	clear(h)
	anyLone := false
	if rp.Whitener != nil {
		w.leverages(h)
		for r := range h {
			if w.swept != nil {
				h[r] += w.swept.inv(w.swept.ids[r])
			}
			if w.root != nil && !freq {
				h[r] *= w.block.Weight[r]
			}
			w.noteLeverage(r, h[r])
			if 1-h[r] < LoneGap {
				anyLone = true
				w.loneRows++
				continue
			}
			if h[r] > HeavyAt {
				w.heavyCount++
			}
			w.maxLever = max(w.maxLever, h[r])
		}
	}
	heavy := func(r int) bool { return rp.Heavy && h[r] > HeavyAt && 1-h[r] >= LoneGap }
	for i, g := range rp.Weights {
		mult := w.mult[:n]
		if w.cells != nil && i >= len(rp.Weights)/2 {
			e = w.cells.gross[:n]
		}
		if rp.Whitener == nil {
			by := math.Sqrt(g(0))
			kernel.ShiftScale(mult, e, 0, by) // e by; the sum is of no use
		} else {
			for r, x := range e {
				if 1-h[r] < LoneGap || heavy(r) {
					mult[r] = 0
				} else {
					mult[r] = x * math.Sqrt(g(h[r]))
				}
			}
		}
		switch {
		case w.root == nil:
		case freq:
			if w.cells == nil { // theirs are summed with their frequencies
				kernel.Scale(mult, mult, w.root[:n])
			}
		default:
			kernel.Scale(mult, mult, w.block.Weight[:n])
		}
		w.addMeat(w.meats[i], l.p0+1)
	}
	rootOr1 := func(r int) float64 {
		if w.root != nil {
			return w.root[r]
		}
		return 1
	}
	if anyLone {
		for r := range h {
			w.mult[r] = 0
			if 1-h[r] < LoneGap {
				w.mult[r] = rootOr1(r)
			}
		}
		w.addMeat(w.lone, l.p0+1)
	}
	if rp.Heavy {
		for r := range h {
			w.mult[r] = rootOr1(r)
			if heavy(r) {
				w.keepHeavy(r, w.mult[r])
				w.mult[r] = 0
			} else if w.cells != nil {
				w.mult[r] *= math.Sqrt(float64(w.cells.rows(r)))
			}
		}
		w.addMeat(w.light, l.p0+2)
	}
	w.watch.lap(StageRows)
}

// residuals sets e to sum_c theta_c z_c.
func (w *secondWorker) residuals(e []float64) {
	l, rp := w.lay, w.pass
	copy(e, w.col(l.v()))
	kernel.Combine(e, w.z, stride, len(e), l.p0+1, rp.Theta)
	for g := range l.groups {
		for p, c := range l.groups[g].parts {
			z := w.col(c)
			for r, b := range w.rowb[g][:len(e)] {
				e[r] = math.FMA(rp.Theta[int(b)+p], z[r], e[r])
			}
		}
	}
}

// places is the numberer of pass two: the places in the state.
type places struct{ s *State }

func (p places) level(cat int, k Key) (int32, error) {
	id := p.s.levels[cat].find(k)
	if id < 0 {
		return 0, &ChangedError{fmt.Sprintf("each(%s) has a level that was not there before", p.s.Design.Categories[cat].Text)}
	}
	return id, nil
}

func (p places) combo(table int, levels []int32) (int32, error) {
	id := p.s.combos[table].find(levels)
	if id < 0 {
		return 0, &ChangedError{"levels occur together that did not before"}
	}
	return int32(id), nil
}

// findColumns finds, for each row and group, the internal column of its indicator.
func (w *secondWorker) findColumns() error {
	if err := w.cats.number(&w.block); err != nil {
		return err
	}
	w.groupColumns()
	return nil
}

// groupColumns is findColumns once combinations have their numbers.
func (w *secondWorker) groupColumns() {
	n := w.block.Rows
	for g := range w.state.Groups {
		first, parts := int32(w.state.Groups[g].first), int32(len(w.state.Groups[g].Parts))
		to := w.rowb[g][:n]
		for r, id := range w.cats.rows[g][:n] {
			to[r] = first + id*parts
		}
	}
}

func (w *secondWorker) leverages(h []float64) {
	l, n, rp := w.lay, len(h), w.pass
	if w.all.quad == nil {
		kernel.Leverage(h, w.z, stride, n, l.p0+1, rp.Whitener, rp.K)
		return
	}
	p := len(w.state.Columns)
	for r := range h {
		idx, val := w.sparse(r)
		var s float64
		for a, i := range idx {
			row := w.all.quad[i*p : (i+1)*p]
			var t float64
			for b := range a {
				t = math.FMA(row[idx[b]], val[b], t)
			}
			s = math.FMA(val[a], 2*t+row[i]*val[a], s)
		}
		if w.all.lever != nil {
			s += w.apartLeverage(r, idx, val)
		}
		h[r] = s
	}
}

// sparse lists the nonzero internal columns of row r, but for the group apart.
func (w *secondWorker) sparse(r int) ([]int, []float64) {
	l := w.lay
	w.idx, w.val = w.idx[:0], w.val[:0]
	for j := range l.p0 + 1 {
		w.idx = append(w.idx, j)
		w.val = append(w.val, w.z[j*stride+r])
	}
	for g := range l.groups {
		if w.state.isApart(g) {
			continue
		}
		for p, c := range l.groups[g].parts {
			w.idx = append(w.idx, int(w.rowb[g][r])+p)
			w.val = append(w.val, w.z[c*stride+r])
		}
	}
	return w.idx, w.val
}

func (w *secondWorker) addMeat(m *meat, cols int) {
	l, n := w.lay, w.block.Rows
	m.used = true
	if len(l.tables) == 0 {
		w.scaled(w.zs, w.mult, cols)
		kernel.Gram(m.gram, w.zs, stride, n, cols)
		return
	}
	w.scaled(w.zs, w.mult, l.width)
	kernel.Gram(m.gram, w.zs, stride, n, cols)
	for i := range l.tables {
		addProducts(m.tables[i], w.cats.rows[i][:n], w.zs, l.tables[i].prods)
	}
	for i, p := range m.pairs {
		s := &l.pairs[i]
		p.add(w.cats.rows[s.g][:n], w.cats.rows[s.h][:n], w.zs, s.prods)
	}
}

func (w *secondWorker) keepHeavy(r int, root float64) {
	if len(w.heavy) > maxHeavy {
		return
	}
	p := len(w.state.Columns)
	z := make([]float64, p+1)
	idx, val := w.sparse(r)
	for i, c := range idx {
		z[c] = val[i] * root
	}
	z[p] = w.z[w.lay.v()*stride+r] * root
	wt := 1.0
	if w.root != nil {
		wt = w.block.Weight[r]
	}
	w.heavy = append(w.heavy, HeavyRow{Z: z, Weight: wt, segment: -1, at: len(w.heavy)})
}

// addScores adds w e z of each row to its cluster.
func (w *secondWorker) addScores(g *groups, lone *loneTracker, key int) {
	l, n, keys := w.lay, w.block.Rows, &w.block.Key[key]
	mult := w.e[:n]
	if w.root != nil {
		mult = w.mult[:n]
		kernel.Scale(mult, w.e[:n], w.block.Weight[:n])
	}
	by := w.all.scales
	if by != nil {
		scaleColumn(w.mult[:n], mult, by[l.v()])
		mult = w.mult[:n]
	}
	w.zcols = append(w.zcols[:0], mult)
	if w.pass.moments(key) {
		w.zcols = append(w.zcols, w.weights())
	}
	for j := range l.p0 + 1 {
		z := w.col(j)
		if by != nil && by[j] != 1 {
			z = w.zs[j*stride:][:n]
			scaleColumn(z, w.col(j), by[j])
		}
		w.zcols = append(w.zcols, z)
	}
	for i := range l.groups {
		for p, c := range l.groups[i].parts {
			if w.apart == nil {
				w.zcols = append(w.zcols, w.col(c))
			}
			for r, b := range w.rowb[i][:n] {
				if to := &lone.nonzero[int(b)+p]; to.in != inMany && (p == 0 || w.block.X[l.factors[c-l.p0-2]][r] != 0) {
					lone.see(to, keys, r)
				}
			}
		}
	}
	rows, base := g.room(n)
	transpose(rows, len(w.zcols), 0, w.zcols)
	for i := range g.bases {
		for r, b := range w.rowb[i][:n] {
			base[r*g.bases+i] = b
		}
	}
	g.take(keys, n)
}

// weights are those of the block's rows, 1 without.
func (w *secondWorker) weights() []float64 {
	if w.root != nil {
		return w.block.Weight[:w.block.Rows]
	}
	for len(w.ones) < w.block.Rows {
		w.ones = append(w.ones, 1)
	}
	return w.ones[:w.block.Rows]
}

func (w *secondWorker) allMeats() []*meat {
	ms := append(slices.Clone(w.meats), w.lone)
	if w.light != nil {
		ms = append(ms, w.light)
	}
	return ms
}

func (w *secondWorker) fold() error {
	var held int64
	for _, m := range w.allMeats() {
		for _, t := range m.tables {
			t.flush()
			held += t.memory() * int64(w.all.workers)
		}
		for _, p := range m.pairs {
			p.flush()
			held += p.t.memory()
		}
	}
	for _, a := range w.apart {
		held += a.flush()
	}
	if a := w.state.Apart; a != nil {
		// Each meat has products like the state's, and one of them is turned twice.
		each := int64(8 * len(a.B))
		held += w.all.lever.memory() + (apartMatrices+int64(len(w.pass.Weights)+2))*each
	}
	if held > w.all.mem {
		return &MemoryError{What: "the second pass over " + w.state.levelCounts(), Need: held, Have: w.all.mem}
	}
	w.watch.lap(StageRows)
	for _, g := range w.scores {
		if err := g.fold(); err != nil {
			return err
		}
	}
	w.watch.lap(StageClusters)
	return nil
}

func (w *secondWorker) segment(number int) error {
	for _, m := range w.allMeats() {
		if m.used {
			m.gramX.addVec(m.gram)
			clear(m.gram)
		}
	}
	w.spreadX.addVec(w.spread)
	clear(w.spread)
	for i := range w.heavy {
		if w.heavy[i].segment < 0 {
			w.heavy[i].segment = number
		}
	}
	if w.series != nil {
		return w.series.segment(number)
	}
	return nil
}

// Second is pass two over the same input: it sums what depends on single rows.
// It fails with *ChangedError if the input is not the one that pass one saw:
// sizes and times, and the column sums of every segment bit for bit.
func Second(ctx context.Context, src stream.Source, s *State, rp RowPass, o Options) (*RowSums, error) {
	if s.Extended && rp.ThetaLow == nil {
		rp.ThetaLow = make([]float64, len(rp.Theta))
	}
	out, retry, err := second(ctx, src, s, rp, o, defaultUnit)
	if err == nil && retry != defaultUnit {
		// The unit of the keyed sums did not suit the data: sum again with one that does.
		first := out.Bytes
		out.Close()
		if out, _, err = second(ctx, src, s, rp, o, retry); err == nil {
			out.Passes++
			out.Bytes += first
		}
	}
	return out, err
}

func second(ctx context.Context, src stream.Source, s *State, rp RowPass, o Options, unit int) (out *RowSums, retry int, err error) {
	if stamp, err := src.Stamp(); err != nil {
		return nil, 0, err
	} else if stamp != s.stamp && src.Info().Sampled && !rp.Retain {
		return nil, 0, &ChangedError{"a file has another size or time"}
	}
	p := newPass(o.Meter, o.Timings)
	p.meter.Pass.Store(2)
	p.meter.Rows.Store(0)
	p.meter.Bytes.Store(0)
	scan, err := s.Design.Scan(ctx, src)
	if err != nil {
		return nil, 0, err
	}
	defer scan.Close()
	if s.Swept != nil {
		if s.means == nil {
			return nil, 0, errors.New("accum: pass two takes the means of units, and KeepMeans was not called")
		}
		o.Memory -= min(o.Memory/2, s.means.memory())
	}
	pool := newGroupPool(&o)
	defer func() {
		if out == nil {
			pool.close()
		}
	}()
	common := newSecondCommon(s, &rp, unit, &o, pool)
	if rp.Series != nil {
		if common.series, err = newSeriesCommon(s, rp.Series, &o); err != nil {
			return nil, 0, err
		}
	}
	ws := make([]*secondWorker, max(1, o.Workers))
	bw := make([]blockWorker, len(ws))
	for i := range ws {
		ws[i] = newSecondWorker(s, &rp, unit, common)
		bw[i] = ws[i]
	}
	if p.saves, err = o.Checkpoint.savesSecond(p, ws); err != nil {
		return nil, 0, err
	}
	err = p.run(ctx, bw, nil, scan.Next)
	if c := common.series; c != nil && ctx.Err() == nil {
		if err == nil {
			c.rest()
		}
		if c.err != nil {
			err = c.err // of the first segment that does not join
		}
	}
	if cerr := scan.Close(); err == nil {
		err = cerr
	}
	if disorder := new(orderError); errors.As(err, &disorder) {
		err = disorder.locate(ctx, src, s.Design)
	}
	if err != nil {
		return nil, 0, err
	}
	check := s.unchanged
	if rp.Retain {
		p.number(rp.Base)
		check = s.unchangedPart
	}
	if err := check(p); err != nil {
		return nil, 0, err
	}
	if out, retry, err = s.joinSecond(ws, &rp, p, unit, common); err != nil {
		return nil, 0, err
	}
	if common.series != nil {
		if out.Series, err = common.series.finish(s, ws); err != nil {
			return nil, 0, err
		}
	}
	out.pool = pool
	if rp.Retain {
		out.kept, out.checks, out.read = ws[0], p.checks, p.read
	}
	return out, retry, nil
}
