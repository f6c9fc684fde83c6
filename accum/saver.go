package accum

import (
	"bufio"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"io"
	"slices"
	"sync"
	"sync/atomic"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// saver has a pass saved. Its methods do nothing on nil.
type saver struct {
	c      *Checkpoint
	number int    // of the pass, from 0
	sums   string // identifies what is summed
	done   map[int]stream.SegmentTally
	join   func() error   // brings all sums to the first worker
	visit  func(*archive) // writes or reads those

	world   sync.RWMutex // read: a segment is being summed; write: all are between segments
	spoiled atomic.Bool  // a segment was left in the middle: what is held fits no set of segments
	saving  atomic.Bool
	since   atomic.Int64 // segments since the last save
}

// saves begins a pass. It reads the sums of the segments that were done already.
func (c *Checkpoint) saves(p *pass, what any, join func() error, visit func(*archive)) (*saver, error) {
	if c == nil {
		return nil, nil
	}
	text, err := json.Marshal(what)
	if err != nil {
		return nil, err
	}
	h := sha256.Sum256(text)
	k := &saver{c: c, number: c.passes, sums: hex.EncodeToString(h[:16]), join: join, visit: visit}
	c.passes++
	if k.number >= len(c.index.Passes) {
		return k, nil
	}
	x := &c.index.Passes[k.number]
	if x.Sums != k.sums {
		return nil, c.fail("is of another run: the sums of pass %d are others, or in another frame"+startAgain, k.number+1)
	}
	a := &archive{r: bufio.NewReaderSize(io.NewSectionReader(c.file, x.At, x.Bytes), 1<<20)}
	a.pass(p)
	visit(a)
	if a.err != nil {
		var s *ScratchError
		if errors.As(a.err, &s) {
			return nil, a.err
		}
		return nil, c.fail("%v"+startAgain, a.err)
	}
	k.done = map[int]stream.SegmentTally{}
	for n := range p.checks {
		k.done[n] = stream.SegmentTally{Quotes: p.quotes[n], Lines: p.lines[n]}
	}
	p.meter.Rows.Store(p.read)
	p.meter.Bytes.Store(p.bytes)
	return k, nil
}

// finished reports whether the pass was done before this run.
func (k *saver) finished() bool {
	return k != nil && k.number < len(k.c.index.Passes) && k.c.index.Passes[k.number].Done
}

// skip leaves out the segments that are done; they are not read.
func (k *saver) skip(next func(context.Context) (stream.Segment, error)) func(context.Context) (stream.Segment, error) {
	if k == nil || len(k.done) == 0 {
		return next
	}
	return func(ctx context.Context) (stream.Segment, error) {
		for {
			seg, err := next(ctx)
			if err != nil {
				return nil, err
			}
			known, ok := k.done[seg.Number()]
			if !ok {
				return seg, nil
			}
			if err := stream.PassOver(seg, known); err != nil {
				return nil, err
			}
		}
	}
}

// enter is called before a segment is taken, leave when it is summed; clean says that
// it was summed to its end.
func (k *saver) enter() {
	if k != nil {
		k.world.RLock()
	}
}

func (k *saver) leave(clean bool) {
	if k == nil {
		return
	}
	if !clean {
		k.spoiled.Store(true)
	}
	k.since.Add(1)
	k.world.RUnlock()
}

// save saves the pass if it is time to, or last is set. The error is one of the sums;
// of one that concerns the file Warn is told.
func (k *saver) save(p *pass, last bool) error {
	if k == nil || !last && !k.due() || !k.saving.CompareAndSwap(false, true) {
		return nil
	}
	defer k.saving.Store(false)
	fatal, err := k.write(p, last)
	k.since.Store(0)
	c := k.c
	c.next.Store(int64(time.Since(c.begun) + max(c.Every, savingShare*c.cost.Pause)))
	if err != nil && c.Warn != nil {
		c.Warn(c.fail("not saved: %s; the run goes on", plain(err)))
	}
	return fatal
}

func (k *saver) due() bool {
	if k.saving.Load() {
		return false
	}
	if n := k.c.Segments; n > 0 {
		return k.since.Load() >= int64(n)
	}
	return int64(time.Since(k.c.begun)) >= max(int64(k.c.Every), k.c.next.Load())
}

// settle gives everything to the store, between folds; the worker may go on.
func (g *groups) settle() error {
	if g.few != nil {
		if err := g.hand(); err != nil {
			return err
		}
		g.n = 0
	}
	g.store.seen.join(&g.seen)
	g.seen = partials{}
	return nil
}

// keyed lists the sums of clusters and units that are not given up.
func (w *firstWorker) keyed() (list []*groups) {
	for _, g := range w.clusters {
		if g != nil && !w.budget.dropped.Load() {
			list = append(list, g)
		}
	}
	if w.units != nil {
		list = append(list, w.units)
	}
	return list
}

// gatherFirst brings the sums of all workers to the first, between segments. The others
// begin anew.
func gatherFirst(ws []*firstWorker) error {
	w := ws[0]
	for _, o := range ws {
		for _, g := range o.keyed() {
			if err := g.settle(); err != nil {
				return err
			}
		}
		if o.cells != nil {
			o.cells.hand()
		}
	}
	for _, o := range ws[1:] {
		w.join(o)
		clear(o.gramX)
		clear(o.fourX)
		for _, t := range o.tables {
			t.reset()
		}
		for k, t := range o.lone {
			if t != nil {
				o.lone[k] = newLoneTracker(len(t.nonzero))
			}
		}
		o.reach, o.weight, o.freq, o.rows = 0, superSum{}, 0, 0
		clear(o.nonzero)
		clear(o.zero)
		clear(o.value)
		clear(o.varied)
		o.eval.Tally = stream.Tally{}
	}
	return nil
}

func gatherSecond(ws []*secondWorker) error {
	w := ws[0]
	for _, o := range ws {
		for _, g := range o.scores {
			if err := g.settle(); err != nil {
				return err
			}
		}
	}
	for _, o := range ws[1:] {
		w.join(o)
		for _, m := range o.allMeats() {
			m.used = false
			clear(m.gramX)
			for _, t := range m.tables {
				t.reset()
			}
		}
		for i := range o.scores {
			o.loneT[i], o.loneC[i] = newLoneTracker(len(o.loneT[i].nonzero)), newLoneTracker(len(o.loneC[i].nonzero))
		}
		clear(o.spreadX)
		o.maxLever, o.loneRows, o.heavyCount, o.heavy, o.highest = 0, 0, 0, nil, nil
		clear(o.over)
		o.eval.Tally = stream.Tally{}
	}
	w.highest = highest(w.highest)
	return nil
}

// savesFirst begins pass one.
func (c *Checkpoint) savesFirst(p *pass, ws []*firstWorker, needs *Needs) (*saver, error) {
	w := ws[0]
	var clusters int64 // a bound that decides what is given up
	if len(needs.Clusters) > 0 && !needs.Keep || needs.Cells {
		clusters = w.budget.cluster
	}
	spec := &w.lay.design.Spec
	return c.saves(p, struct {
		Model    []string
		Frame    *Frame
		Extended bool
		Unit     int
		Needs    Needs
		Clusters int64
	}{slices.Concat([]string{spec.Outcome, spec.Weight, spec.Where, spec.Sweep, ""}, spec.Terms, []string{""}, spec.Keys), w.frame, w.wide != nil, w.budget.unit, *needs, clusters},
		func() error { return gatherFirst(ws) }, func(a *archive) { a.first(w) })
}

// savesSecond begins pass two.
func (c *Checkpoint) savesSecond(p *pass, ws []*secondWorker) (*saver, error) {
	w, rp := ws[0], ws[0].pass
	if c != nil && rp.Series != nil {
		return nil, c.fail("sums over rows in order of time cannot be saved; leave --checkpoint out for hac")
	}
	return c.saves(p, struct {
		Frame                        *Frame
		Extended                     bool
		Unit                         int
		Of                           string
		Theta, ThetaLow, Whitener    reals
		Weights                      int
		Scores, Moments              []int
		Heavy, Spread, Retain, Apart bool
		Over                         reals
		Base                         int
	}{w.frame, w.state.Extended, w.unit, w.state.Fingerprint, rp.Theta, rp.ThetaLow, rp.Whitener,
		len(rp.Weights), rp.Scores, rp.Moments, rp.Heavy, rp.Spread, rp.Retain, w.state.Apart != nil, rp.Over, rp.Base},
		func() error { return gatherSecond(ws) }, func(a *archive) { a.second(w) })
}
