package delimited

import (
	"context"
	"errors"
	"fmt"
	"io"
	"sync"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// readChunk is how much is read before it is counted: it stays in the
// second-level cache.
const readChunk = 256 << 10

// plainScan reads byte ranges of a file in parallel. Whether a range starts
// inside quotes depends on the parity of the quotes in all ranges before it. Each
// segment, when it is first read, reads its range, counts its quotes and
// publishes the parity; then it needs those of its predecessors. Of these it
// waits only for ranges that another goroutine is counting at that moment, which
// needs nobody else; ranges that nobody has begun it counts itself. So no order
// of reading or closing segments can block.
//
// With guess set the ranges before a segment are counted only if its own text does
// not say whether it starts inside quotes, see startInside.
type plainScan struct {
	ctx   context.Context
	src   *source
	uses  []stream.Use
	ra    io.ReaderAt
	size  int64
	count int
	guess bool

	mu      sync.Mutex
	next    int
	closed  bool
	ranges  []byteRange
	known   int           // the start states of ranges up to this one are known
	changed chan struct{} // closed and replaced when a count is done
}

type byteRange struct {
	state uint8 // rangeOpen and so on
	odd   bool  // number of its quotes
	lines int   // its newlines
	err   error
	start startState
}

// startState is what a range depends on.
type startState struct {
	inside bool  // its first byte is inside quotes
	line   int64 // its first byte's line
}

const (
	rangeOpen uint8 = iota
	rangeTaken
	rangeDone
)

var errScanClosed = errors.New("delimited: the scan is closed")

func newPlainScan(ctx context.Context, src *source, uses []stream.Use, ra io.ReaderAt, size int64) *plainScan {
	p := &plainScan{ctx: ctx, src: src, uses: uses, ra: ra, size: size, changed: make(chan struct{})}
	p.count = int(segments(src.head.start, size, src.o.SegmentBytes))
	p.ranges = make([]byteRange, p.count+1)
	p.ranges[0].start.line = src.head.line
	return p
}

func (p *plainScan) Next(ctx context.Context) (stream.Segment, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.closed {
		return nil, errScanClosed
	}
	if p.next >= p.count {
		return nil, io.EOF
	}
	s := newSegment(p.ctx, p.src, p.uses, p.next)
	s.load = p.load
	k := p.next
	s.pass = func(t stream.SegmentTally) {
		if p.take(k) {
			p.publish(k, t.Quotes&stream.QuotesOdd != 0, int(t.Lines), nil)
		}
	}
	p.next++
	return s, nil
}

func (p *plainScan) Close() error {
	p.mu.Lock()
	p.closed = true
	p.mu.Unlock()
	return nil
}

// bounds returns the byte range of segment k.
func (p *plainScan) bounds(k int) (lo, hi int64) {
	n := int64(p.src.o.SegmentBytes)
	lo = p.src.head.start + int64(k)*n
	return lo, min(lo+n, p.size)
}

// take reports whether the caller must count range k now.
func (p *plainScan) take(k int) bool {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.ranges[k].state != rangeOpen {
		return false
	}
	p.ranges[k].state = rangeTaken
	return true
}

func (p *plainScan) publish(k int, odd bool, lines int, err error) {
	p.mu.Lock()
	defer p.mu.Unlock()
	r := &p.ranges[k]
	r.state, r.odd, r.lines, r.err = rangeDone, odd, lines, err
	for p.known < p.count && p.ranges[p.known].state == rangeDone && p.ranges[p.known].err == nil {
		r := &p.ranges[p.known]
		p.ranges[p.known+1].start = startState{r.start.inside != r.odd, r.start.line + int64(r.lines)}
		p.known++
	}
	close(p.changed)
	p.changed = make(chan struct{})
}

// start returns the start state of range k.
func (p *plainScan) start(k int) (startState, error) {
	for {
		p.mu.Lock()
		if p.known >= k {
			st := p.ranges[k].start
			p.mu.Unlock()
			return st, nil
		}
		j := p.known
		r := p.ranges[j]
		changed := p.changed
		if r.state == rangeOpen {
			p.ranges[j].state = rangeTaken
		}
		p.mu.Unlock()
		switch r.state {
		case rangeDone:
			return startState{}, r.err
		case rangeOpen:
			lo, hi := p.bounds(j)
			buf := p.src.buffer(readChunk)
			var c counts
			err := c.read(p.src.in.Name, p.ra, lo, hi, func(n int) []byte { return buf[:n] })
			p.src.release(buf)
			p.publish(j, c.quotes&1 == 1, c.lines, err)
		default:
			select {
			case <-changed:
			case <-p.ctx.Done():
				return startState{}, p.ctx.Err()
			}
		}
	}
}

// counts adds up quotes and newlines while a range is read.
type counts struct{ quotes, lines int }

// read reads [lo, hi) by chunks, each into the slice that room returns.
func (c *counts) read(name string, ra io.ReaderAt, lo, hi int64, room func(n int) []byte) error {
	for lo < hi {
		b := room(int(min(hi-lo, readChunk)))
		if err := readAt(name, ra, b, lo); err != nil {
			return err
		}
		q, n := scan.Count(b)
		c.quotes += q
		c.lines += n
		lo += int64(len(b))
	}
	return nil
}

func readAt(name string, ra io.ReaderAt, b []byte, at int64) error {
	n, err := ra.ReadAt(b, at)
	switch {
	case n == len(b):
		return nil
	case err == io.EOF:
		return &stream.DamageError{Pos: stream.Position{File: name}, What: fmt.Sprintf("the file ends after %d bytes; it was longer when it was opened", at+int64(n))}
	}
	return fmt.Errorf("%s: %w", name, err)
}

// load brings in the rows that start in the range of segment s.
func (p *plainScan) load(s *segment) error {
	k := s.number
	lo, hi := p.bounds(k)
	s.tally.Bytes = hi - lo
	if k == 0 {
		s.tally.Bytes = hi
	}
	buf := p.src.buffer(int(hi-lo) + 2 + firstOverhang + scan.Pad)
	mine := p.take(k)
	var c counts
	var err error
	if k > 0 {
		// A row starts at lo if the byte before is a newline outside quotes.
		buf = buf[:1]
		err = readAt(p.src.in.Name, p.ra, buf, lo-1)
	}
	if err == nil {
		err = c.read(p.src.in.Name, p.ra, lo, hi, func(n int) []byte {
			buf = buf[:len(buf)+n]
			return buf[len(buf)-n:]
		})
	}
	if mine {
		p.publish(k, c.quotes&1 == 1, c.lines, err)
	}
	s.buf = buf
	if err != nil {
		return err
	}
	var st startState
	guessed := false
	if p.guess && k > 0 {
		if st.inside, guessed, err = p.guessStart(lo, buf); err != nil {
			return err
		}
	}
	if !guessed {
		if st, err = p.start(k); err != nil {
			return err
		}
	}
	s.tally.Quotes, s.tally.Lines = quotesOf(k, st.inside, c.quotes), int64(c.lines)
	from, first, lines := lo, 0, int64(0)
	if k > 0 {
		from, first = lo-1, 1
		if st.inside || buf[0] != '\n' {
			if first, _ = scan.RowEnd(buf, 1, st.inside); first < 0 || first == len(buf) {
				return nil
			}
		}
		lines = lineAt(buf[1:], first-1) - 1
	}
	buf, s.parser.cut, err = p.src.finish(p.ra, buf, hi, p.size, st.inside != (c.quotes&1 == 1))
	s.setText(buf, first, from+int64(first), st.line+lines)
	if guessed {
		s.line = 0
		s.verify = func() error {
			counted, err := p.start(k)
			if err == nil && counted.inside != st.inside {
				err = p.src.guessedWrong(lo, counted.inside)
			}
			s.line = counted.line + lines
			return err
		}
	}
	return err
}

const firstOverhang = 4 << 10

// finish appends to buf, which ends at offset at, what the last row in it lacks,
// and a newline if the text ends without. inside is the state at that offset. It
// reports a cut when the row runs on too far.
func (s *source) finish(ra io.ReaderAt, buf []byte, at, size int64, inside bool) (_ []byte, cut bool, err error) {
	last := len(buf) - 1
	if !inside && buf[last] == '\n' {
		return buf, false, nil
	}
	over := 0
	for chunk := firstOverhang; ; chunk = min(2*chunk, 1<<20) {
		n := int(min(int64(chunk), size-at, int64(s.overhang-over)))
		if n == 0 {
			if at == size && buf[len(buf)-1] == '\n' {
				return buf, false, nil // inside quotes: the parser will say so
			}
			return append(buf, '\n'), at < size, nil
		}
		old := len(buf)
		buf = append(buf, make([]byte, n)...)
		if err := readAt(s.in.Name, ra, buf[old:], at); err != nil {
			return buf[:old], false, err
		}
		var end int
		if end, inside = scan.RowEnd(buf, old, inside); end >= 0 {
			return buf[:end], false, nil
		}
		at += int64(n)
		over += n
	}
}
