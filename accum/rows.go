package accum

import (
	"context"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"math"
	"sync"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
	"golang.org/x/sync/errgroup"
)

// foldBatches is the length of a fold of keyed sums, in batches (65,536 rows).
const foldBatches = 128

// stride separates the columns of a block: not a multiple of 4 KiB, so that they
// do not compete for the same cache sets.
const stride = stream.BatchRows + 8

// loader turns batches into rows z in a frame. Each worker has one.
type loader struct {
	lay   *layout
	frame *Frame
	eval  *stream.Evaluator
	seg   stream.Segment // that the batch is of
	batch stream.Batch
	block stream.Block
	z     []float64 // width columns of stride rows
	root  []float64 // square roots of weights, nil without
	sums  []float64 // raw column sums of the present segment
	negH  []float64
	low   []float64 // p0 columns: what float64 leaves off c; nil unless the frame needs it
	wide  *wideRows // nil in double arithmetic
	rest  []float64
	watch stopwatch
}

// carefulAbove is the sample condition above which whitening is computed with
// twice the digits: it magnifies the rounding of c by about that much.
const carefulAbove = 1e4

func newLoader(l *layout, f *Frame) *loader {
	w := &loader{lay: l, frame: f, eval: l.design.NewEvaluator(), z: make([]float64, l.width*stride), sums: make([]float64, l.nx+2)}
	for r := range stride {
		w.z[r] = 1
	}
	if l.design.Spec.Weight != "" {
		w.root = make([]float64, stride)
	}
	return w
}

func (w *loader) col(j int) []float64 { return w.z[j*stride : j*stride+w.block.Rows] }

// load computes z for the block.
func (w *loader) load() {
	if w.wide != nil {
		w.placeWide()
	} else {
		w.place()
	}
	if n := w.block.Rows; w.root != nil {
		for r, x := range w.block.Weight[:n] {
			w.root[r] = math.Sqrt(x)
		}
		w.sums[w.lay.nx+1] += sum4(w.block.Weight[:n])
	}
	w.watch.lap(StageFrame)
}

// place sets the columns of z and adds to the raw sums.
func (w *loader) place() {
	l, f, n := w.lay, w.frame, w.block.Rows
	for j := range l.p0 {
		w.sums[j] += kernel.ShiftScale(w.col(1+j), w.block.X[j], f.Shift[j], f.Inv[j])
	}
	for i, d := range l.factors {
		sum := kernel.ShiftScale(w.col(l.p0+2+i), w.block.X[d], f.Shift[d], f.Inv[d])
		if d >= l.p0 { // else it is a term by itself too, and summed
			w.sums[d] += sum
		}
	}
	switch {
	case f.White && f.Cond > carefulAbove:
		w.whitenCarefully()
	case f.White:
		kernel.Whiten(f.T, l.p0, w.z[stride:], stride, n)
	}
	v := w.col(l.v())
	w.sums[l.nx] += kernel.ShiftScale(v, w.block.X[l.nx], f.YShift, f.YInv)
	w.negH = w.negH[:0]
	for _, h := range f.H {
		w.negH = append(w.negH, -h)
	}
	kernel.Combine(v, w.z[stride:], stride, n, len(w.negH), w.negH)
}

// whitenCarefully is u = T'c by compensated dot products (Ogita, Rump, Oishi
// 2005), with c = (x - Shift) Inv to twice the digits: u is then a linear map of x
// but for its own rounding. About eight times the work of the plain loop.
func (w *loader) whitenCarefully() {
	l, f, n := w.lay, w.frame, w.block.Rows
	if w.low == nil {
		w.low, w.rest = make([]float64, l.p0*stride), make([]float64, stride)
	}
	for j := range l.p0 {
		lo := w.low[j*stride : j*stride+n]
		m, inv := -f.Shift[j], f.Inv[j]
		for r, x := range w.block.X[j][:n] {
			s := x + m
			t := s - x
			lo[r] = ((x - (s - t)) + (m - t)) * inv
		}
	}
	rest := w.rest[:n]
	for j := l.p0 - 1; j >= 0; j-- {
		u := w.col(1 + j)
		lo := w.low[j*stride : j*stride+n]
		t := f.T[j*l.p0+j]
		for r, c := range u {
			p := float64(t * c) // rounded, not fused into the sum
			rest[r] = math.FMA(t, c, -p) + float64(t*lo[r])
			u[r] = p
		}
		for i := range j {
			t := f.T[i*l.p0+j]
			if t == 0 {
				continue
			}
			lo := w.low[i*stride : i*stride+n]
			for r, c := range w.col(1 + i) {
				p := float64(t * c)
				e := math.FMA(t, c, -p)
				s := u[r] + p
				b := s - u[r]
				e += (u[r] - (s - b)) + (p - b)
				u[r] = s
				rest[r] += math.FMA(t, lo[r], e)
			}
		}
		for r := range u {
			u[r] += rest[r]
		}
	}
}

// scaled writes the columns of z times w to dst.
func (w *loader) scaled(dst, by []float64, cols int) {
	kernel.ScaleColumns(dst, stride, w.z, stride, w.block.Rows, cols, by)
}

func sum4(x []float64) float64 {
	var a, b, c, d float64
	i := 0
	for ; i+4 <= len(x); i += 4 {
		a += x[i]
		b += x[i+1]
		c += x[i+2]
		d += x[i+3]
	}
	for ; i < len(x); i++ {
		a += x[i]
	}
	return (a + b) + (c + d)
}

// segCheck identifies what a segment held: two passes must see the same.
type segCheck struct {
	rows int64
	sum  uint64
}

func (w *loader) check(rows int64) segCheck {
	h := fnv.New64a()
	var b [8]byte
	for j, s := range w.sums {
		u := math.Float64bits(s)
		for i := range b {
			b[i] = byte(u >> (8 * i))
		}
		h.Write(b[:])
		w.sums[j] = 0
	}
	return segCheck{rows, h.Sum64()}
}

// blockWorker sums the blocks of one worker's segments.
type blockWorker interface {
	loading() *loader
	// add sums the block of the loader.
	add() error
	// fold ends a fold; segment ends a segment.
	fold() error
	segment(number int) error
}

// pass drives workers over segments.
type pass struct {
	meter   *Meter
	timings *Timings
	saves   *saver // nil without a checkpoint

	mu       sync.Mutex
	errAt    int // number of the segment of the error, or maxInt
	err      error
	problems []problem
	read     int64
	bad      int64
	bytes    int64
	segments int64
	unread   stream.Unread
	checks   map[int]segCheck
	quotes   map[int]stream.Quotes // of segments of text
	lines    map[int]int64         // of the same
}

type problem struct {
	segment, at int
	err         *stream.RowError
}

func newPass(m *Meter, t *Timings) *pass {
	if m == nil {
		m = new(Meter)
	}
	return &pass{meter: m, timings: t, errAt: math.MaxInt, checks: map[int]segCheck{}, quotes: map[int]stream.Quotes{}, lines: map[int]int64{}}
}

func (p *pass) fail(segment int, err error) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if segment < p.errAt || p.err == nil {
		p.errAt, p.err = segment, err
	}
}

func (p *pass) failed(segment int) bool {
	p.mu.Lock()
	defer p.mu.Unlock()
	return p.err != nil && p.errAt < segment
}

// run lets the workers take segments from next until io.EOF. Segments come in
// order, so when one fails all lower ones are done or under way: those are
// finished, and the error of the lowest segment is returned. With start set the
// first worker starts with that segment.
func (p *pass) run(ctx context.Context, workers []blockWorker, start *begun, next func(context.Context) (stream.Segment, error)) error {
	if p.saves.finished() {
		return nil
	}
	next = p.saves.skip(next)
	g, ctx := errgroup.WithContext(ctx)
	var nextMu sync.Mutex
	done := false
	take := func() (stream.Segment, error) {
		nextMu.Lock()
		defer nextMu.Unlock()
		p.mu.Lock()
		stop := p.err != nil
		p.mu.Unlock()
		if done || stop {
			return nil, io.EOF
		}
		seg, err := next(ctx)
		if err != nil {
			done = true
		}
		return seg, err
	}
	for i, w := range workers {
		g.Go(func() (err error) {
			defer func() {
				if x := recover(); x != nil {
					err = fmt.Errorf("internal error while summing: %v", x)
				}
			}()
			one := func(from begun) (more, clean bool, err error) {
				p.saves.enter()
				defer func() { p.saves.leave(clean) }()
				seg := from.seg
				if seg == nil {
					if seg, err = take(); errors.Is(err, io.EOF) {
						return false, true, nil
					}
				}
				if err == nil {
					if err = p.segment(ctx, w, seg, from); err == nil {
						return true, !p.failed(seg.Number()), nil
					}
				}
				if ctx.Err() != nil {
					return false, false, ctx.Err()
				}
				if seg == nil {
					p.fail(math.MaxInt-1, err)
					return false, false, nil
				}
				p.fail(seg.Number(), err)
				return true, false, nil
			}
			var from begun
			if i == 0 && start != nil {
				from = *start
			}
			for more := true; more; from = (begun{}) {
				if more, _, err = one(from); err != nil {
					return err
				}
				if err := p.saves.save(p, false); err != nil {
					return err
				}
			}
			return nil
		})
	}
	if err := g.Wait(); err != nil {
		return err
	}
	if p.err != nil {
		return p.err
	}
	return p.saves.save(p, true)
}

// begun is a segment that was opened and perhaps read into: some batches without
// used rows, then one that the worker's block holds.
type begun struct {
	seg     stream.Segment
	loaded  bool
	batches int
	seen    int64 // rows in those batches
}

// segment sums one segment, from where it was begun.
func (p *pass) segment(ctx context.Context, w blockWorker, seg stream.Segment, from begun) (err error) {
	defer func() {
		if cerr := seg.Close(); err == nil {
			err = cerr
		}
	}()
	ld := w.loading()
	ld.seg = seg
	ld.watch.to = p.timings
	ld.watch.start()
	defer ld.watch.hand()
	var bytes int64
	seen, loaded := from.seen, from.loaded
	for b := from.batches + 1; ; b++ {
		if err := ctx.Err(); err != nil {
			return err
		}
		if p.failed(seg.Number()) {
			return nil
		}
		if !loaded {
			err := seg.Read(&ld.batch)
			ld.watch.lap(StageRead)
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				return err
			}
			ld.eval.Segment = seg.Number()
			if err := ld.eval.Eval(&ld.batch, seg.Locate, &ld.block); err != nil {
				return err
			}
			ld.watch.lap(StageTerms)
		}
		loaded = false
		seen += int64(ld.batch.Rows)
		p.meter.Rows.Add(int64(ld.batch.Rows))
		if t := seg.Tally().Bytes; t != bytes {
			p.meter.Bytes.Add(t - bytes)
			bytes = t
		}
		if ld.block.Rows > 0 {
			if err := w.add(); err != nil {
				return err
			}
		}
		if b%foldBatches == 0 {
			if err := w.fold(); err != nil {
				return err
			}
			ld.watch.lap(StageJoin)
		}
	}
	if err := w.fold(); err != nil {
		return err
	}
	if err := w.segment(seg.Number()); err != nil {
		return err
	}
	ld.watch.lap(StageJoin)
	t := seg.Tally()
	seen += t.Excluded
	p.meter.Rows.Add(t.Excluded)
	p.meter.Bytes.Add(t.Bytes - bytes)
	p.mu.Lock()
	defer p.mu.Unlock()
	p.checks[seg.Number()] = ld.check(seen)
	if t.Quotes != 0 {
		p.quotes[seg.Number()], p.lines[seg.Number()] = t.Quotes, t.Lines
	}
	p.read += t.Rows
	p.bad += t.Malformed
	p.segments++
	if t.Excluded > 0 {
		p.unread.Add(stream.Unread{Files: t.Files, Segments: 1, Rows: t.Excluded, Bytes: t.Bytes})
	} else {
		p.bytes += t.Bytes
	}
	for i, e := range t.Problems {
		p.problems = append(p.problems, problem{seg.Number(), i, e})
	}
	return nil
}
