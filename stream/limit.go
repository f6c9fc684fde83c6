package stream

import (
	"context"
	"fmt"
	"io"
)

// First returns a source of the first n rows of src, in the order of the
// segments; src belongs to it. Malformed rows that are passed over do not count
// towards n.
//
// How many rows of a segment are wanted is known only when all earlier ones are
// read, so the segments are worked one after another: Next waits until the
// segment handed out before has been read to its end or closed (the rest of a
// segment that is closed early is read then, to count its rows). A goroutine
// that holds an unread segment must therefore not call Next itself. The last
// segment is cut after row n. A bad cell that stands within the same batch after
// row n is still an error.
//
// The source is not sampled; it is rewindable if src is. First panics if n is
// negative.
func First(src Source, n int64) Source {
	if n < 0 {
		panic("stream: negative number of rows")
	}
	return &first{src: src, n: n}
}

type first struct {
	src Source
	n   int64
}

func (f *first) Schema() *Schema { return f.src.Schema() }

func (f *first) Info() Info {
	info := f.src.Info()
	if info.Rows >= 0 {
		info.Rows = min(info.Rows, f.n)
	}
	info.Segments = -1
	info.Sampled = false
	return info
}

func (f *first) Scan(ctx context.Context, uses []Use) (Scan, error) {
	return f.ScanWhere(ctx, uses, nil)
}

// ScanWhere counts rows that are not read as if they were.
func (f *first) ScanWhere(ctx context.Context, uses []Use, where Filter) (Scan, error) {
	sc, err := scanWhere(ctx, f.src, uses, where)
	if err != nil {
		return nil, err
	}
	s := &firstScan{scan: sc, ctx: ctx, left: f.n, turn: make(chan struct{}, 1), closed: make(chan struct{})}
	s.turn <- struct{}{}
	return s, nil
}

func (f *first) Sample(context.Context, []Use, float64) (Segment, error) {
	return nil, fmt.Errorf("the first %d rows: %w", f.n, ErrNoSample)
}

func (f *first) SampleWhere(ctx context.Context, uses []Use, at float64, _ Filter) (Segment, error) {
	return f.Sample(ctx, uses, at)
}

// Unread is not known: malformed rows that are passed over do not count towards n.
func (f *first) Unread(context.Context, []Use, Filter) (Unread, error) { return Unread{}, nil }

func (f *first) Stamp() (string, error) {
	s, err := f.src.Stamp()
	if err != nil {
		return "", err
	}
	return fmt.Sprintf("%s\nfirst %d rows", s, f.n), nil
}

func (f *first) Close() error { return f.src.Close() }

// firstScan gives one token to whoever may go on with the input: a caller of
// Next, then the segment that it got, until that is finished. The holder owns
// left, unread and err.
type firstScan struct {
	scan   Scan
	ctx    context.Context
	turn   chan struct{}
	closed chan struct{}

	left   int64
	unread Segment // closed by its reader before its end
	err    error
}

func (s *firstScan) Next(ctx context.Context) (Segment, error) {
	select {
	case <-s.turn:
	case <-ctx.Done():
		return nil, ctx.Err()
	case <-s.ctx.Done():
		return nil, s.ctx.Err()
	case <-s.closed:
		return nil, errClosed
	}
	if s.err == nil {
		s.err = s.countUnread()
	}
	if s.err == nil && s.left == 0 {
		s.err = io.EOF
	}
	var seg Segment
	if s.err == nil {
		seg, s.err = s.scan.Next(ctx)
	}
	if s.err != nil {
		err := s.err
		s.turn <- struct{}{}
		return nil, err
	}
	g := &firstSegment{Segment: seg, s: s}
	if g.excluded = min(seg.Tally().Excluded, s.left); g.excluded > 0 {
		s.left -= g.excluded
	}
	return g, nil
}

// countUnread takes the rows that the reader of the last segment did not want
// off what is left.
func (s *firstScan) countUnread() error {
	if s.unread == nil {
		return nil
	}
	var b Batch
	for s.left > 0 {
		err := s.unread.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil {
			return err
		}
		s.left -= min(s.left, int64(b.Rows))
	}
	seg := s.unread
	s.unread = nil
	return seg.Close()
}

func (s *firstScan) Close() error {
	var err error
	select {
	case <-s.turn:
		if s.unread != nil {
			err = s.unread.Close()
			s.unread = nil
		}
		close(s.closed) // the token is gone: Next has this instead
	default:
	}
	return firstErr(err, s.scan.Close())
}

type firstSegment struct {
	Segment
	s         *firstScan
	delivered int64
	excluded  int64
	done      bool // the token is given back
	failed    error
	closed    bool
	cols      []Vector
}

func (g *firstSegment) finish() {
	if !g.done {
		g.done = true
		g.s.turn <- struct{}{}
	}
}

func (g *firstSegment) Read(b *Batch) error {
	if g.done {
		b.Rows, b.Cols, b.Marks = 0, nil, nil
		return firstErr(g.failed, io.EOF)
	}
	if err := g.Segment.Read(b); err != nil {
		if err != io.EOF {
			g.failed, g.s.err = err, err
		}
		g.finish()
		return err
	}
	if int64(b.Rows) > g.s.left {
		n := int(g.s.left)
		g.cols = g.cols[:0]
		for j := range b.Cols {
			g.cols = append(g.cols, cutVector(&b.Cols[j], 0, n))
		}
		b.Rows, b.Cols, b.Marks = n, g.cols, b.Marks[:n]
	}
	g.delivered += int64(b.Rows)
	g.s.left -= int64(b.Rows)
	if g.s.left == 0 {
		g.finish()
	}
	return nil
}

// Tally counts the rows up to the cut.
func (g *firstSegment) Tally() SegmentTally {
	t := g.Segment.Tally()
	if g.excluded < t.Excluded {
		t.Bytes = int64(float64(t.Bytes) * float64(g.excluded) / float64(t.Excluded))
		t.Excluded = g.excluded
	}
	t.Rows = g.delivered + t.Malformed + t.Excluded
	return t
}

func (g *firstSegment) Close() error {
	if g.closed {
		return nil
	}
	g.closed = true
	if !g.done {
		g.s.unread = g.Segment
		g.finish()
		return nil
	}
	return g.Segment.Close()
}
