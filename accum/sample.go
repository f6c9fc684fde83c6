package accum

import (
	"cmp"
	"context"
	"errors"
	"io"
	"math"
	"slices"

	"github.com/tallrow/tallrow/stream"
	"golang.org/x/sync/errgroup"
)

const (
	sampleRows     = 4096 // used rows a frame wants
	sampleSpots    = 16   // places it looks at in a long input
	sampleFew      = 5    // at least, and one in four segments: each may cost a page of every column
	sampleMaxSpots = 256
	sampleMin      = 64 // fewer used rows make epochs the better way
)

// Sample is what places spread over an input say before the first pass. Frame is nil
// where they say too little, or the input cannot be looked into: then the frame is
// renewed while the input is read.
type Sample struct {
	Frame *Frame
	// Whole says that the sample is the whole input.
	Whole bool
	// Cells counts unique rows.
	Cells CellCount
}

// TakeSample samples the input for a design, at several places at a time if there
// are workers for it; what it finds does not depend on them. The errors are the
// source's.
func TakeSample(ctx context.Context, src stream.Source, d *stream.Design, workers int) (*Sample, error) {
	if !src.Info().Sampled {
		return &Sample{}, nil
	}
	l := newLayout(d)
	return sampleFrame(ctx, src, l, l.shifted(), workers)
}

// sampleFrame makes a frame, and counts unique rows, from the first batches at places spread over the
// input: start, end, middle, quarters, and so on. The frame is nil if
// too few rows were found there although the input is longer.
func sampleFrame(ctx context.Context, src stream.Source, l *layout, shift bool, workers int) (*Sample, error) {
	segments := src.Info().Segments
	spots := sampleSpots
	if segments >= 0 {
		spots = min(max(segments/4, sampleFew), sampleSpots)
	}
	batches := (sampleRows/stream.BatchRows + spots - 1) / spots
	look := func(from, to int) ([]*spot, error) {
		list := make([]*spot, to-from)
		errs := make([]error, len(list))
		var g errgroup.Group
		g.SetLimit(max(1, workers))
		for i := range list {
			list[i] = &spot{rows: newFrameRows(l.nx), cells: sampleCells{}}
			g.Go(func() error {
				errs[i] = list[i].look(ctx, src, l, spread(from+i), batches)
				return nil
			})
		}
		g.Wait()
		return list, cmp.Or(errs...) // that of the first place
	}
	first, err := look(0, 1)
	if err != nil {
		return nil, err
	}
	rows, seen := first[0].rows, first[0].cells
	if first[0].ended && segments <= 1 { // the end was reached from the start
		return &Sample{buildFrame(rows, l.p0, shift), true, seen.count()}, nil
	}
	for at, to := 1, spots; at < sampleMaxSpots && (at < spots || rows.rows() < sampleRows); to++ {
		list, err := look(at, to)
		if err != nil {
			return nil, err
		}
		for _, s := range list {
			rows.join(s.rows)
			seen.join(s.cells)
		}
		at = to
	}
	if rows.rows() < sampleMin {
		return &Sample{Cells: seen.count()}, nil
	}
	return &Sample{Frame: buildFrame(rows, l.p0, shift), Cells: seen.count()}, nil
}

// spot is what one place of the input holds.
type spot struct {
	rows  *frameRows
	cells sampleCells
	ended bool // the input ended there
}

func (s *spot) look(ctx context.Context, src stream.Source, l *layout, at float64, batches int) error {
	seg, err := l.design.Sample(ctx, src, at)
	if err != nil {
		return err
	}
	defer seg.Close()
	eval := l.design.NewEvaluator()
	eval.Extended(true) // to know what float64 leaves off
	var batch stream.Batch
	var block stream.Block
	for range batches {
		switch err := seg.Read(&batch); {
		case errors.Is(err, io.EOF):
			s.ended = true
			return nil
		case err != nil:
			return err
		case batch.Rows == 0:
			continue // excluded by metadata
		}
		// A row that cannot be used is reported by the scan, with its place.
		if eval.Eval(&batch, seg.Locate, &block) == nil {
			s.rows.addBlock(&block, l)
			s.cells.add(&block, l)
		}
	}
	return ctx.Err()
}

// join appends the rows of o, relative to the same origin.
func (r *frameRows) join(o *frameRows) {
	r.one = append(r.one, o.one...)
	for j := range r.x {
		r.x[j] = append(r.x[j], o.x[j]...)
	}
	r.y = append(r.y, o.y...)
	if r.lowSquares == nil {
		r.lowSquares = o.lowSquares
	} else {
		for j, q := range o.lowSquares {
			r.lowSquares[j] += q
		}
	}
	r.lowRows += o.lowRows
}

// spread gives 0, 1, 1/2, 1/4, 3/4, 1/8, ...: bit-reversed order.
func spread(i int) float64 {
	switch i {
	case 0:
		return 0
	case 1:
		return 1
	}
	i--
	var x, f float64 = 0, 0.5
	for ; i > 0; i >>= 1 {
		if i&1 == 1 {
			x += f
		}
		f /= 2
	}
	return x
}

// addBlock appends the rows of a block.
func (r *frameRows) addBlock(b *stream.Block, l *layout) {
	r.addLow(b.XLow, b.Rows)
	for i := range b.Rows {
		s := 1.0
		if b.Weight != nil {
			s = math.Sqrt(b.Weight[i])
		}
		r.one = append(r.one, s)
		for j := range r.x {
			r.x[j] = append(r.x[j], (b.X[j][i]-r.origin[j])*s)
		}
		r.y = append(r.y, (b.X[l.nx][i]-r.yOrigin)*s)
	}
}

func trivialFrame(l *layout) *Frame {
	f := &Frame{Terms: l.p0, Shift: make([]float64, l.nx), Inv: make([]float64, l.nx), YInv: 1, H: make([]float64, l.p0), Cond: 1}
	for j := range f.Inv {
		f.Inv[j] = 1
	}
	return f
}

// shifted reports whether numeric terms may be shifted: the constant must lie in
// the span of the terms as they are written.
func (l *layout) shifted() bool {
	return !l.design.Spec.NoConstant || l.design.Sweep >= 0 || l.carrier() >= 0
}

// carrier returns the term that is a single category with all its levels, whose
// indicators add up to the constant; -1 if there is none.
func (l *layout) carrier() int {
	for i, t := range l.design.Terms {
		if len(t.Categories) == 1 && t.Dense < 0 && l.design.Categories[t.Categories[0]].NoBase {
			return i
		}
	}
	return -1
}

// previousRows stands for all rows of the epochs so far by as many pseudo-rows as
// there are columns: the triangle of the Cholesky factor of their sums.
func previousRows(l *layout, epochs []*epoch) *frameRows {
	r := newFrameRows(l.nx)
	if len(epochs) == 0 {
		return r
	}
	last := epochs[len(epochs)-1].frame
	w := l.width
	sum := make([]float64, w*w)
	for _, e := range epochs {
		g := unpack(e.gram, w)
		if e.frame != last {
			g = congruence(denseMap(l, e.frame, last), g, w)
		}
		for i, x := range g {
			sum[i] += x
		}
	}
	copy(r.origin, last.Shift)
	r.yOrigin = last.YShift
	r.spread = 1 / last.YInv
	r.lowSquares, r.lowRows = slices.Clone(last.lowSquares), last.lowRows
	tri := looseCholesky(sum, w)
	// Row i of the factor is a pseudo-row in z; back to shifted raw columns.
	var back []float64
	if last.White {
		back = invertUpper(last.T, l.p0, l.p0)
	}
	for i := range w {
		z := tri[i*w : (i+1)*w]
		r.one = append(r.one, z[0])
		for j := range l.p0 {
			c := z[1+j]
			if last.White {
				c = 0
				for a := 0; a <= j; a++ {
					c += back[a*l.p0+j] * z[1+a]
				}
			}
			r.x[j] = append(r.x[j], c/last.Inv[j])
		}
		for f, d := range l.factors {
			if d >= l.p0 {
				r.x[d] = append(r.x[d], z[l.p0+2+f]/last.Inv[d])
			}
		}
		v := z[l.v()]
		for j, h := range last.H {
			v += h * z[1+j]
		}
		r.y = append(r.y, v/last.YInv)
	}
	r.fixed = w
	return r
}

// looseCholesky returns the upper factor of a positive semidefinite matrix, with
// zero rows where a pivot has no digits left.
func looseCholesky(a []float64, n int) []float64 {
	u := make([]float64, n*n)
	for j := range n {
		for i := 0; i <= j; i++ {
			s := a[i*n+j]
			for t := range i {
				s -= u[t*n+i] * u[t*n+j]
			}
			if i < j {
				if u[i*n+i] != 0 {
					u[i*n+j] = s / u[i*n+i]
				}
			} else if s > 1e-14*a[j*n+j] {
				u[j*n+j] = math.Sqrt(s)
			}
		}
	}
	return u
}

func unpack(p []float64, n int) []float64 {
	a := make([]float64, n*n)
	for j := range n {
		for i := 0; i <= j; i++ {
			x := p[j*(j+1)/2+i]
			a[i*n+j], a[j*n+i] = x, x
		}
	}
	return a
}
