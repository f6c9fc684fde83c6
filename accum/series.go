package accum

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"
	"sync"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// SeriesPass asks pass two for sums over rows that lie near each other in order or
// in time. With s_t = w e z the score of a row over the P internal columns, it sums
//
//	sum_t s_t s_t' + sum_j k_j sum_t (s_t s_{t-j}' + s_{t-j} s_t')
//
// or, without Weights, the autocovariances sum_t u_t u_{t-j} of u_t = Direction's_t.
// Places that no row has are scores of zero. Not with a group apart.
//
// Each segment is summed by itself with a window of the last scores; it leaves its
// first and last ones, and what reaches over its border is added in segment order.
// All sums that meet are exact, so workers do not show.
//
// Time O(n P (L + P)) over the places n with gaps filled, L = Reach; O(n P (P + L/128))
// for linear weights. Memory
// O(P (L + 512)) for each worker, and twice P L for each segment that waits for one
// before it.
type SeriesPass struct {
	// Period and Unit are keys; -1 for none. Without a period rows follow each other
	// at distance 1. Rows of a unit must stand together, in rising order of period.
	Period, Unit int
	// Time gives the place in time of a period's key.
	Time func(stream.KeyValue) (int64, bool)
	// Reach is the largest lag; Weights are those of the lags 1 to Reach.
	Reach   int
	Weights []float64
	// Linear says that the weights are 1 - j/(Reach+1), for which running sums do.
	Linear bool
	// Direction has P entries.
	Direction []float64
}

// SeriesSums is what SeriesPass asks for.
type SeriesSums struct {
	Meat []float64 // (P+1) x (P+1), last row and column unused; nil without Weights
	Auto []float64 // Reach + 1 autocovariances; nil with Weights
	// Rows is of the unit with most of them, Span of the unit that reaches over most
	// periods, the first and the last counted.
	Rows, Span int64
	Units      int64 // 1 without units
}

// columns is the number of series.
func (sp *SeriesPass) columns(s *State) int {
	if sp.Weights == nil {
		return 1
	}
	return len(s.Columns)
}

// sums is how many numbers a pass leaves.
func (sp *SeriesPass) sums(cols int) int {
	if sp.Weights == nil {
		return sp.Reach + 1
	}
	return cols * (cols + 1) / 2
}

// SeriesBytes is about what a SeriesPass takes in memory.
func SeriesBytes(cols, reach, workers int) int64 {
	if reach > 1<<40 {
		return math.MaxInt64 / 4
	}
	c, l := int64(cols), int64(reach)
	window := c * (l + max(l, stride) + 2*stride)
	return 8 * (l + int64(workers)*(window+4*c*l))
}

// SeriesFits fails with *MemoryError if a SeriesPass does not fit into half of the
// memory.
func SeriesFits(cols, reach int, o *Options) error {
	if need := SeriesBytes(cols, reach, max(1, o.Workers)); need > o.Memory/2 {
		return &MemoryError{What: fmt.Sprintf("errors over %d lags and %d columns", reach, cols), Need: 2 * need, Have: o.Memory}
	}
	return nil
}

// seriesRun is the rows of one unit in one segment.
type seriesRun struct {
	key         Key
	row         int64 // of the segment's used rows
	rows        int64
	first, last int64 // periods
}

// seriesEdge is what a segment leaves for its neighbours. Scores are kept column by
// column, at places with gaps filled.
type seriesEdge struct {
	number     int
	runs       []seriesRun
	whole      bool      // head and tail are of one stretch without a break
	head, tail []float64 // at most Reach places
	heads      int
	tails      int
	length     int64 // places of the stretch that tail ends
	err        *orderError
}

// orderError is a row out of order.
type orderError struct {
	segment int
	row     int64 // of its used rows
	column  string
	found   string
	want    string
}

func (e *orderError) Error() string { return fmt.Sprintf("found %s, want %s", e.found, e.want) }

// seriesCommon joins the segments in order.
type seriesCommon struct {
	pass *SeriesPass
	cols int
	taps []float64 // weights of the lags Reach to 1
	unit *stream.KeyColumn
	time *stream.KeyColumn
	most int64 // bytes that units may take

	mu      sync.Mutex
	next    int
	waiting map[int]*seriesEdge
	last    seriesRun
	tail    []float64
	tails   int
	any     bool
	units   *interner
	out     SeriesSums
	sums    superVec
	err     error
}

func newSeriesCommon(s *State, sp *SeriesPass, o *Options) (*seriesCommon, error) {
	c := &seriesCommon{pass: sp, cols: sp.columns(s), most: o.Memory, waiting: map[int]*seriesEdge{}}
	if err := SeriesFits(c.cols, sp.Reach, o); err != nil {
		return nil, err
	}
	c.taps = slices.Clone(sp.Weights)
	slices.Reverse(c.taps)
	if sp.Period >= 0 {
		c.time = &s.Design.Keys[sp.Period]
	}
	if sp.Unit >= 0 {
		c.unit = &s.Design.Keys[sp.Unit]
		c.units = newInterner(c.unit.Kind)
	}
	c.sums = make(superVec, sp.sums(c.cols))
	return c, nil
}

// leave takes the edges of a segment and joins what can be joined.
func (c *seriesCommon) leave(e *seriesEdge) error {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.waiting[e.number] = e
	for c.err == nil {
		e, ok := c.waiting[c.next]
		if !ok {
			break
		}
		delete(c.waiting, c.next)
		c.next++
		c.err = c.join(e)
	}
	return c.err
}

// rest joins what is left, should numbers of segments leave gaps.
func (c *seriesCommon) rest() {
	var left []int
	for n := range c.waiting {
		left = append(left, n)
	}
	slices.Sort(left)
	for _, n := range left {
		if c.err == nil {
			c.err = c.join(c.waiting[n])
		}
	}
}

// finish gives the sums of all workers.
func (c *seriesCommon) finish(s *State, ws []*secondWorker) (*SeriesSums, error) {
	c.endUnit()
	for _, w := range ws {
		c.sums.merge(w.series.sumX)
	}
	out := c.out
	out.Units = 1
	if c.units != nil {
		out.Units = int64(c.units.size())
	}
	v := make([]float64, len(c.sums))
	c.sums.values(v)
	for _, x := range v {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return nil, errRange
		}
	}
	if c.pass.Weights == nil {
		out.Auto = v
		return &out, nil
	}
	n := len(s.Columns) + 1
	out.Meat = make([]float64, n*n)
	for i := range c.cols {
		for j := range i + 1 {
			x := v[i*(i+1)/2+j]
			out.Meat[i*n+j], out.Meat[j*n+i] = x, x
		}
	}
	return &out, nil
}

// endUnit counts the unit that ends.
func (c *seriesCommon) endUnit() {
	if !c.any {
		return
	}
	c.out.Rows = max(c.out.Rows, c.last.rows)
	c.out.Span = max(c.out.Span, c.spanOf(&c.last))
}

// spanOf is the number of periods from the first row of a unit to its last.
func (c *seriesCommon) spanOf(r *seriesRun) int64 {
	if c.time == nil {
		return r.rows
	}
	d := uint64(r.last) - uint64(r.first)
	return int64(min(d, math.MaxInt64-1)) + 1
}

// join adds what reaches from the segments before into this one.
func (c *seriesCommon) join(e *seriesEdge) error {
	if len(e.runs) == 0 {
		if e.err != nil {
			return e.err
		}
		return nil
	}
	first := &e.runs[0]
	goesOn := c.any && first.key == c.last.key
	gap := uint64(1)
	if goesOn && c.time != nil {
		if first.first <= c.last.last {
			return c.disorder(e.number, first.row, first.first, c.last.last)
		}
		gap = uint64(first.first) - uint64(c.last.last)
	}
	for i := range e.runs {
		r := &e.runs[i]
		if i == 0 && goesOn {
			c.last.rows += r.rows
			c.last.last = r.last
			continue
		}
		if c.units != nil {
			if c.units.find(r.key) >= 0 {
				return &orderError{e.number, r.row, c.unit.Text, stream.FormatKey(*c.unit, nil, r.key.KeyValue) + " once more after another unit",
					"all rows of a unit together: sort by " + c.sorting()}
			}
			c.units.put(r.key)
			if need := c.units.memory(); need > c.most/2 {
				return &MemoryError{What: fmt.Sprintf("the names of %d units or more", c.units.size()), Need: 2 * need, Have: c.most}
			}
		}
		c.endUnit()
		c.last, c.any = *r, true
	}
	if e.err != nil {
		return e.err
	}
	l := c.pass.Reach
	if !goesOn || gap > uint64(l) {
		c.tail, c.tails = e.tail, e.tails
		return nil
	}
	c.seam(e, int(gap))
	if !e.whole || e.length >= int64(l) {
		c.tail, c.tails = e.tail, e.tails
		return nil
	}
	// The segment is shorter than the reach: scores before it still count.
	n := min(l, c.tails+int(gap)-1+e.tails)
	old := min(c.tails, max(0, n-e.tails-(int(gap)-1)))
	tail := make([]float64, c.cols*n)
	for j := range c.cols {
		to := tail[j*n : (j+1)*n]
		copy(to[n-e.tails:], e.tail[j*e.tails:(j+1)*e.tails])
		copy(to[:old], c.tail[(j+1)*c.tails-old:(j+1)*c.tails])
	}
	c.tail, c.tails = tail, n
	return nil
}

// seam adds the products of the segment's first scores with the last ones before it.
func (c *seriesCommon) seam(e *seriesEdge, gap int) {
	l, n := c.pass.Reach, e.heads
	if n == 0 || c.tails == 0 {
		return
	}
	// Place l of x is the first of the segment; what is of the segment itself stays 0.
	x := make([]float64, l+n)
	place := func(j int) {
		k := min(c.tails, l-gap+1)
		copy(x[l-gap+1-k:l-gap+1], c.tail[(j+1)*c.tails-k:(j+1)*c.tails])
	}
	if c.pass.Weights == nil {
		place(0)
		sums := make([]float64, l+1)
		kernel.Correlate(sums[:l], e.head[:n], x)
		slices.Reverse(sums) // lag 0 first
		c.sums.addVec(sums)
		return
	}
	near := make([]float64, c.cols*n)
	for j := range c.cols {
		place(j)
		kernel.Filter(near[j*n:(j+1)*n], x, c.taps)
	}
	both := make([]float64, c.cols*c.cols)
	kernel.Cross(both, c.cols, e.head, n, c.cols, near, n, c.cols, n)
	c.addBoth(c.sums, both)
}

// addBoth adds a product and its transpose.
func (c *seriesCommon) addBoth(to superVec, m []float64) {
	k := 0
	for i := range c.cols {
		for j := range i + 1 {
			to[k].add(m[i*c.cols+j] + m[j*c.cols+i])
			k++
		}
	}
}

func (c *seriesCommon) sorting() string {
	var by []string
	if c.unit != nil {
		by = append(by, c.unit.Text)
	}
	if c.time != nil {
		by = append(by, c.time.Text)
	}
	return strings.Join(by, ", then ")
}

// disorder is the error of a row at period t that follows one at period before.
func (c *seriesCommon) disorder(segment int, row, t, before int64) *orderError {
	e := &orderError{segment: segment, row: row, column: c.time.Text}
	if t == before {
		e.found = c.period(t) + " twice"
		e.want = "one row for each period"
		if c.unit != nil {
			e.want += " of a unit"
		} else {
			e.want += ": driscoll-kraay takes several, --unit parts them"
		}
		return e
	}
	e.found, e.want = c.period(t)+" after "+c.period(before), "rising periods: sort by "+c.sorting()
	return e
}

// period spells a place in time.
func (c *seriesCommon) period(t int64) string {
	v := stream.KeyValue{Bits: uint64(t)}
	switch c.time.Kind {
	case stream.Time:
		v.Bits *= 86_400_000_000_000
	case stream.Float64:
		v.Bits = math.Float64bits(float64(t))
	}
	return stream.FormatKey(*c.time, nil, v)
}

// seriesWorker sums the segments of one worker.
type seriesWorker struct {
	all  *seriesCommon
	size int       // of a column of the window
	win  []float64 // cols columns of size: Reach places before the stretch at least, then its places
	end  int       // of the window
	todo int       // places at the end that are not summed yet
	used bool      // the first Reach places are not zero
	len  int64     // places of the stretch
	near []float64
	half []float64
	sums []float64
	sumX superVec
	edge *seriesEdge
	rows int64 // of the segment
	open bool  // places go to the head
	cols []float64
}

func newSeriesWorker(c *seriesCommon) *seriesWorker {
	l := c.pass.Reach
	w := &seriesWorker{all: c, size: l + max(l, stream.BatchRows) + stream.BatchRows, end: l}
	w.win = make([]float64, c.cols*w.size)
	if c.pass.Weights == nil {
		w.sums = make([]float64, l+1)
	} else {
		w.sums = make([]float64, c.cols*c.cols)
		w.near, w.half = make([]float64, c.cols*stride), slices.Repeat([]float64{0.5}, stride)
	}
	w.sumX = make(superVec, len(c.sums))
	w.cols = make([]float64, c.cols*stride)
	w.begin()
	return w
}

// begin makes ready for a segment.
func (w *seriesWorker) begin() {
	w.edge, w.rows, w.open = &seriesEdge{whole: true, head: make([]float64, w.all.cols*w.all.pass.Reach)}, 0, true
	w.stretch()
}

// stretch begins a stretch of places that nothing before reaches.
func (w *seriesWorker) stretch() {
	l := w.all.pass.Reach
	if w.used {
		for j := range w.all.cols {
			clear(w.win[j*w.size : j*w.size+l])
		}
		w.used = false
	}
	w.end, w.todo, w.len = l, 0, 0
}

// cut ends the stretch within a segment.
func (w *seriesWorker) cut() {
	w.flush()
	w.edge.whole, w.open = false, false
	w.stretch()
}

// scores sets the columns of the series for the block.
func (w *seriesWorker) scores(sw *secondWorker, mult []float64) {
	l, n := sw.lay, len(mult)
	if d := w.all.pass.Direction; w.all.pass.Weights == nil {
		u := w.cols[:n]
		clear(u)
		kernel.Combine(u, sw.z, stride, n, l.p0+1, d)
		for g := range l.groups {
			for p, c := range l.groups[g].parts {
				z := sw.col(c)
				for r, b := range sw.rowb[g][:n] {
					u[r] = math.FMA(d[int(b)+p], z[r], u[r])
				}
			}
		}
		kernel.Scale(u, u, mult)
		return
	}
	sw.scaled(w.cols, mult, l.p0+1)
	if len(l.groups) == 0 {
		return
	}
	clear(w.cols[(l.p0+1)*stride:])
	for g := range l.groups {
		for p, c := range l.groups[g].parts {
			z := sw.col(c)
			for r, b := range sw.rowb[g][:n] {
				w.cols[(int(b)+p)*stride+r] = z[r] * mult[r]
			}
		}
	}
}

// seriesFactors are what turns the rows z of the block into scores; 0 where a row alone
// decides a coefficient.
func (w *secondWorker) seriesFactors(e []float64) []float64 {
	mult := w.mult[:len(e)]
	for r, x := range e {
		mult[r] = x
		if 1-w.h[r] < LoneGap {
			mult[r] = 0
		}
	}
	if w.root != nil {
		kernel.Scale(mult, mult, w.block.Weight[:len(mult)])
	}
	return mult
}

// add takes in a block of scores, each row times mult.
func (w *seriesWorker) add(sw *secondWorker, mult []float64) {
	if w.edge.err != nil {
		return
	}
	c, n := w.all, len(mult)
	w.scores(sw, mult)
	if c.time == nil && c.unit == nil {
		if w.rows == 0 {
			w.edge.runs = append(w.edge.runs, seriesRun{})
		}
		w.edge.runs[0].rows += int64(n)
		w.rows += int64(n)
		w.push(0, n)
		return
	}
	var times, units *stream.Vector
	if c.time != nil {
		times = &sw.block.Key[c.pass.Period]
	}
	if c.unit != nil {
		units = &sw.block.Key[c.pass.Unit]
	}
	from := 0
	for r := range n {
		var t int64
		if times != nil {
			v := times.Key(r)
			var ok bool
			if t, ok = c.pass.Time(v); !ok {
				w.edge.err = &orderError{row: w.rows, column: c.time.Text, found: stream.FormatKey(*c.time, nil, v), want: "days or whole numbers that count periods"}
				break
			}
		}
		var key Key
		if units != nil {
			key = Key{units.Kind, units.Key(r)}
		}
		k := len(w.edge.runs) - 1
		switch {
		case k < 0 || w.edge.runs[k].key != key:
			w.push(from, r-from)
			from = r
			if k >= 0 {
				w.cut()
			}
			key.Text = strings.Clone(key.Text) // the reader's string may keep a whole page alive
			w.edge.runs = append(w.edge.runs, seriesRun{key: key, row: w.rows, first: t, last: t})
			k++
		case times != nil:
			last := w.edge.runs[k].last
			if t <= last {
				w.edge.err = c.disorder(0, w.rows, t, last)
				break
			}
			if gap := uint64(t) - uint64(last); gap > 1 {
				w.push(from, r-from)
				from = r
				if gap > uint64(c.pass.Reach) {
					w.cut()
				} else {
					w.push(-1, int(gap)-1)
				}
			}
		}
		if w.edge.err != nil {
			return
		}
		run := &w.edge.runs[k]
		run.last = t
		run.rows++
		w.rows++
	}
	if w.edge.err == nil {
		w.push(from, n-from)
	}
}

// push appends n rows of the block from row from on, or n zeros with from -1.
func (w *seriesWorker) push(from, n int) {
	l := w.all.pass.Reach
	for n > 0 {
		if w.todo == stream.BatchRows {
			w.flush()
		}
		if w.end == w.size {
			w.flush()
			for j := range w.all.cols {
				col := w.win[j*w.size : (j+1)*w.size]
				copy(col[:l], col[w.end-l:])
			}
			w.used = w.used || l > 0
			w.end = l
		}
		m := min(n, stream.BatchRows-w.todo, w.size-w.end)
		head := 0
		if w.open {
			head = min(m, l-w.edge.heads)
		}
		for j := range w.all.cols {
			to := w.win[j*w.size+w.end:][:m]
			if from < 0 {
				clear(to)
			} else {
				copy(to, w.cols[j*stride+from:])
			}
			copy(w.edge.head[j*l+w.edge.heads:][:head], to)
		}
		w.edge.heads += head
		w.end += m
		w.todo += m
		w.len += int64(m)
		n -= m
		if from >= 0 {
			from += m
		}
	}
}

// flush sums the places that are not summed yet.
func (w *seriesWorker) flush() {
	c, l, n := w.all, w.all.pass.Reach, w.todo
	if n == 0 {
		return
	}
	at := w.end - n
	reach := int(min(int64(l), w.len-1)) // nothing lies further back
	if c.pass.Weights == nil {
		kernel.Correlate(w.sums[l-reach:], w.win[at:w.end], w.win[at-reach:w.end])
	} else {
		for j := range c.cols {
			// s m' + m s' + s s' is (m + s/2) s' and its transpose.
			near, s := w.near[j*stride:][:n], w.win[j*w.size:(j+1)*w.size]
			kernel.Scale(near, s[at:w.end], w.half)
			if c.pass.Linear && l >= linearFrom {
				c.addLinear(near, s, at)
			} else {
				kernel.Filter(near, s[at-reach:w.end], c.taps[l-reach:])
			}
		}
		kernel.Cross(w.sums, c.cols, w.win[at:], w.size, c.cols, w.near, stride, c.cols, n)
	}
	w.todo = 0
}

const (
	// linearFrom is the reach from which running sums are faster.
	linearFrom = 64
	// linearRows is how long they run until they start anew, so that no rounding
	// gathers in them.
	linearRows = 128
)

// addLinear adds to near[r] the weighted sum m of the scores before place at+r, by
//
//	m += (L s - R)/(L+1),  R += s - s_{-L}
//
// with R the plain sum of the last L scores.
func (c *seriesCommon) addLinear(near, s []float64, at int) {
	l := c.pass.Reach
	fresh, old := float64(l)/float64(l+1), 1/float64(l+1)
	for len(near) > 0 {
		n := min(len(near), linearRows)
		var m [1]float64
		kernel.Correlate(m[:], c.taps, s[at-l:at])
		sum := sum4(s[at-l : at])
		for r, v := range s[at : at+n] {
			near[r] += m[0]
			m[0] += float64(fresh*v) - float64(old*sum)
			sum += v - s[at-l+r]
		}
		near, at = near[n:], at+n
	}
}

// segment ends a segment.
func (w *seriesWorker) segment(number int) error {
	w.flush()
	e, c := w.edge, w.all
	l := c.pass.Reach
	if c.pass.Weights == nil {
		slices.Reverse(w.sums) // lag 0 first
		w.sumX.addVec(w.sums)
	} else {
		c.addBoth(w.sumX, w.sums)
	}
	clear(w.sums)
	if e.err != nil {
		e.err.segment = number
	}
	e.number, e.length = number, w.len
	e.tails = int(min(int64(l), w.len))
	e.tail = make([]float64, c.cols*e.tails)
	for j := range c.cols {
		copy(e.tail[j*e.tails:(j+1)*e.tails], w.win[j*w.size+w.end-e.tails:])
	}
	if e.heads < l { // close the columns up
		for j := range c.cols {
			copy(e.head[j*e.heads:(j+1)*e.heads], e.head[j*l:])
		}
		e.head = e.head[:c.cols*e.heads]
	}
	w.begin()
	return c.leave(e)
}

// locate finds the place of a row that is out of order: it reads the segment again.
func (e *orderError) locate(ctx context.Context, src stream.Source, d *stream.Design) error {
	pos := stream.Position{Column: e.column}
	scan, err := d.Scan(ctx, src)
	if err != nil {
		return err
	}
	defer scan.Close()
	for {
		seg, err := scan.Next(ctx)
		if err != nil {
			if errors.Is(err, io.EOF) {
				err = &ChangedError{fmt.Sprintf("segment %d is gone", e.segment)}
			}
			return err
		}
		if seg.Number() != e.segment {
			if err := seg.Close(); err != nil {
				return err
			}
			continue
		}
		defer seg.Close()
		eval := d.NewEvaluator()
		var b stream.Batch
		var block stream.Block
		for row := e.row; ; row -= int64(block.Rows) {
			if err := seg.Read(&b); err != nil {
				if errors.Is(err, io.EOF) {
					err = &ChangedError{fmt.Sprintf("segment %d has fewer rows", e.segment)}
				}
				return err
			}
			if err := eval.Eval(&b, seg.Locate, &block); err != nil {
				return err
			}
			if row < int64(block.Rows) {
				pos = seg.Locate(block.Marks[row])
				pos.Column = e.column
				return &stream.RowError{Pos: pos, Found: e.found, Want: e.want}
			}
		}
	}
}
