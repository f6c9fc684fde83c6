package delimited

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"os"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// serialScan reads a compressed text or a pipe. One caller of Next at a time
// cuts whole rows off the text, by the same byte ranges as a plainScan; the
// segments parse them in parallel.
type serialScan struct {
	ctx   context.Context
	src   *source
	uses  []stream.Use
	text  *textReader
	r     io.Reader
	ahead *aheadReader // of compressed text, else nil
	spool *os.File

	turn   chan struct{} // holds one token; who has it may touch what follows
	number int
	carry  []byte // text that belongs to later segments
	at     int64  // offset of carry[0], where a row starts
	line   int64  // its line
	end    bool   // nothing comes after carry
	stored int64  // bytes of the input already told to a segment
	err    error
}

func newSerialScan(ctx context.Context, src *source, uses []stream.Use, text *textReader, spool *os.File) *serialScan {
	s := &serialScan{ctx: ctx, src: src, uses: uses, text: text, r: text, spool: spool, turn: make(chan struct{}, 1)}
	s.at, s.line = src.head.start, src.head.line
	if text.coding != plainText {
		s.ahead = &aheadReader{text.readAhead(ctx), ctx}
		s.r = s.ahead
	}
	if spool != nil {
		s.r = io.TeeReader(s.r, spoolWriter{spool, src.in.Name})
	}
	if text == src.text {
		s.r = io.MultiReader(bytes.NewReader(src.head.text[s.at:]), s.r)
	}
	s.turn <- struct{}{}
	return s
}

// aheadReader reads decoded text in the context of one caller of Next.
type aheadReader struct {
	pump *pump
	ctx  context.Context
}

func (r *aheadReader) Read(b []byte) (int, error) { return r.pump.read(r.ctx, b) }

// spoolWriter says of an error that it is one of the copy, not of the input.
type spoolWriter struct {
	f    *os.File
	name string
}

func (w spoolWriter) Write(b []byte) (int, error) {
	n, err := w.f.Write(b)
	if err != nil {
		err = fmt.Errorf("a copy of %s for the second pass: %w", w.name, err)
	}
	return n, err
}

func (s *serialScan) Next(ctx context.Context) (stream.Segment, error) {
	select {
	case <-s.turn:
	case <-ctx.Done():
		return nil, ctx.Err()
	}
	defer func() { s.turn <- struct{}{} }()
	if s.err == nil {
		s.err = s.ctx.Err()
	}
	if s.err == nil {
		s.err = ctx.Err()
	}
	if s.err != nil {
		return nil, s.err
	}
	if s.ahead != nil {
		s.ahead.ctx = ctx
	} else {
		s.text.raw.ctx = ctx
	}
	seg, err := s.take()
	if err != nil {
		s.err = err
		return nil, err
	}
	return seg, nil
}

func (s *serialScan) Close() error {
	<-s.turn
	defer func() { s.turn <- struct{}{} }()
	if s.err == nil || s.err == io.EOF {
		s.err = errScanClosed
	}
	s.src.release(s.carry)
	s.carry = nil
	if s.text != s.src.text {
		s.text.Close()
	}
	return nil
}

// fill reads up to n more bytes into buf.
func (s *serialScan) fill(buf []byte, n int) ([]byte, error) {
	old := len(buf)
	if cap(buf) < old+n {
		buf = append(buf, make([]byte, n)...)
	}
	buf = buf[:old+n]
	got, err := io.ReadFull(s.r, buf[old:])
	buf = buf[:old+got]
	if got < n && (err == io.EOF || err == io.ErrUnexpectedEOF) {
		s.end = true
		if s.spool != nil {
			s.src.spooled(s.at + int64(len(buf)))
		}
		return buf, nil
	}
	return buf, err
}

// take cuts off the next segment.
func (s *serialScan) take() (*segment, error) {
	n := int64(s.src.o.SegmentBytes)
	lo := s.src.head.start + int64(s.number)*n
	hi := lo + n
	seg := newSegment(s.ctx, s.src, s.uses, s.number)
	if s.at >= hi {
		s.number++
		return seg, nil
	}
	buf := s.src.buffer(int(n) + 1 + firstOverhang + scan.Pad)
	buf = append(buf, s.carry...)
	s.src.release(s.carry)
	s.carry = nil
	var err error
	if want := int(hi-s.at) - len(buf); want > 0 && !s.end {
		if buf, err = s.fill(buf, want); err != nil {
			return nil, err
		}
	}
	if s.end && s.at+int64(len(buf)) <= lo {
		s.src.release(buf)
		return nil, io.EOF
	}
	cut := len(buf)
	if i := int(hi - s.at); i <= len(buf) {
		if buf, cut, seg.parser.cut, err = s.rowEnd(buf, i); err != nil {
			return nil, err
		}
	}
	s.carry = append(s.src.buffer(int(n)+1+firstOverhang+scan.Pad), buf[cut:]...)
	buf = buf[:cut]
	if seg.parser.cut || (cut > 0 && buf[cut-1] != '\n') {
		buf = append(buf, '\n')
	}
	seg.setText(buf, 0, s.at, s.line)
	stored := s.text.raw.n.Load()
	seg.tally.Bytes = stored - s.stored
	s.stored = stored
	s.number++
	s.at += int64(cut)
	s.line += lineAt(buf, cut) - 1
	if seg.parser.cut {
		s.err = &stream.RowError{
			Pos:   stream.Position{File: s.src.in.Name, Line: s.line},
			Found: fmt.Sprintf("a row that does not end within %d bytes", s.src.overhang),
			Want:  "shorter rows (is a quote left open?)",
		}
	}
	return seg, nil
}

// rowEnd returns the index of the first row start at or after index i, reading
// on as far as needed; cut when the row is too long.
func (s *serialScan) rowEnd(buf []byte, i int) (_ []byte, end int, cut bool, err error) {
	quotes, _ := scan.Count(buf[:i])
	inside := quotes&1 == 1
	if !inside && buf[i-1] == '\n' {
		return buf, i, false, nil
	}
	limit := i + s.src.overhang
	for chunk := firstOverhang; ; chunk = min(2*chunk, 1<<20) {
		if i < len(buf) {
			to := min(len(buf), limit)
			if end, inside = scan.RowEnd(buf[:to], i, inside); end >= 0 {
				return buf, end, false, nil
			}
			i = to
		}
		switch {
		case i == limit && (i < len(buf) || !s.end):
			// A text that ends just here is not too long.
			if i == len(buf) {
				if buf, err = s.fill(buf, 1); err != nil {
					return buf, 0, false, err
				}
				if s.end {
					return buf, i, false, nil
				}
			}
			return buf, i, true, nil
		case s.end:
			return buf, len(buf), false, nil
		}
		if buf, err = s.fill(buf, chunk); err != nil {
			return buf, 0, false, err
		}
	}
}
