package delimited

import (
	"context"
	"errors"
	"fmt"
	"io"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// segment parses the rows that start in one byte range.
type segment struct {
	src    *source
	ctx    context.Context
	number int
	parser parser
	uses   []stream.Use
	vecs   []stream.Vector
	marks  []int64

	// load fetches the text when it is first needed; nil if it is there.
	load func(*segment) error
	// more fetches further text of a sample; nil for a segment of a scan.
	more func(*segment) error
	// pass takes what is known of the range of a segment that is not read; may be nil.
	pass func(stream.SegmentTally)
	// verify counts the quotes and lines before the segment, if it was only guessed
	// that it begins outside or inside of quotes: an error if that was wrong.
	verify func() error
	buf    []byte
	base   int64 // offset of the first byte of the text
	line   int64 // its line; 0 if unknown
	pos    int

	skipBad bool
	silent  bool // malformed rows are not counted
	tally   stream.SegmentTally
	err     error
}

func newSegment(ctx context.Context, src *source, uses []stream.Use, number int) *segment {
	s := &segment{src: src, ctx: ctx, number: number, skipBad: src.o.SkipBad}
	s.parser.rules = src.rules
	s.parser.delim = src.head.delim
	s.parser.columns = len(src.head.schema.Columns)
	s.parser.try = stream.BatchRows
	s.uses = uses
	s.vecs = make([]stream.Vector, len(uses))
	return s
}

func (s *segment) Number() int { return s.number }

func (s *segment) Tally() stream.SegmentTally { return s.tally }

var errClosed = errors.New("delimited: the segment is closed")

// setText takes the rows in buf[first:], the first of which begins at the offset
// base on that line.
func (s *segment) setText(buf []byte, first int, base, line int64) {
	n := len(buf)
	s.buf = append(buf, pad[:]...)
	s.parser.text, s.base, s.line, s.pos = s.buf[first:n], base, line, 0
	s.parser.index.Ends = nil
}

// pad follows every text; see scan.Pad.
var pad [scan.Pad]byte

// Read delivers the rows before a malformed one first and the error with the
// next call, so that faults of earlier rows can come to light first.
func (s *segment) Read(b *stream.Batch) error {
	b.Rows, b.Cols, b.Marks = 0, s.vecs, s.marks[:0]
	n := 0
	if s.err == nil {
		n = s.fill()
	}
	for i, o := range s.parser.out {
		s.vecs[i] = o.vector(n)
	}
	if n == 0 {
		return s.err
	}
	s.tally.Rows += int64(n)
	b.Rows, b.Marks = n, s.marks[:n]
	return nil
}

// fill reads up to a batch of rows; with fewer it has set s.err.
func (s *segment) fill() int {
	if s.err = s.ctx.Err(); s.err != nil {
		return 0
	}
	if s.load != nil {
		load := s.load
		s.load = nil
		if s.err = load(s); s.err != nil {
			return 0
		}
	}
	p := &s.parser
	if s.marks == nil && (len(p.text) > 0 || s.more != nil) {
		// Not before: segments without rows, or never read, need no columns.
		for _, u := range s.uses {
			p.out = append(p.out, newColumn(&s.src.head.schema, u))
		}
		s.marks = make([]int64, stream.BatchRows)
	}
	for _, o := range s.parser.out {
		o.begin()
	}
	n := 0
	for n < stream.BatchRows {
		i := s.pos
		if i >= len(p.text) {
			if s.more == nil {
				s.err = io.EOF
				return n
			}
			if s.err = s.more(s); s.err != nil {
				return n
			}
			continue
		}
		k, next, odd := p.block(i, n, s.marks[n:], s.base)
		n += k
		if s.pos = next; !odd || next >= len(p.text) {
			continue
		}
		i = next
		if s.pos = p.blank(i); s.pos != i {
			continue
		}
		next = p.one(i, n)
		if next < 0 || (p.cut && next == len(p.text)) {
			if !s.malformed(i, next) {
				return n
			}
			continue
		}
		s.marks[n] = s.base + int64(i)
		n++
		s.pos = next
	}
	return n
}

// malformed deals with the row at i. It returns false when reading ends there.
func (s *segment) malformed(i, next int) bool {
	p := &s.parser
	end, _ := scan.RowEnd(p.text, i, false)
	// A row without end swallows all the rest, which is never passed over.
	endless := end < 0 || (s.parser.cut && end == len(p.text))
	if s.silent {
		if s.pos = end; endless {
			s.err = io.EOF
		}
		return !endless
	}
	switch {
	case !s.parser.cut || !endless || (next < 0 && (p.bad.fault == bareQuote || p.bad.fault == afterQuote)):
	case next < 0 && p.bad.fault == openQuote:
		p.bad.fault = tooLongQuote
	default:
		p.bad = trouble{fault: tooLong, at: i}
	}
	if endless || !s.skipBad {
		if s.verify != nil {
			// The row may be sound, and the guess at fault.
			if s.err = s.verify(); s.err != nil {
				return false
			}
		}
		s.err = s.describe(i, end)
		return false
	}
	s.tally.Rows++
	s.tally.Malformed++
	if len(s.tally.Problems) < stream.MaxProblems {
		s.tally.Problems = append(s.tally.Problems, s.describe(i, end))
	}
	s.pos = end
	return true
}

// describe makes the message about the row at i, which ends at end or, by its
// quotes, nowhere.
func (s *segment) describe(i, end int) *stream.RowError {
	p, b := &s.parser, s.parser.bad
	pos := s.Locate(s.base + int64(i))
	line := pos.Line
	if b.fault == misfit {
		p.scratch = p.scratch[:0]
		val, _, _, _ := p.cell(b.at)
		pos.Column = b.out.schema.Name
		return &stream.RowError{
			Pos:   pos,
			Found: shorten(val),
			Want:  want(b.out.schema, b.out.number, b.status, p.rules),
		}
	}
	e := faultError(s.src.in.Name, &p.tokens, i, b.at, b.fault, p.columns, line)
	e.Pos = pos
	if b.fault != bareQuote && b.fault != afterQuote {
		return e
	}
	// Other rows may hide in a row whose quotes are out of step.
	if end < 0 {
		e.Found += " (by its quotes the row has no end)"
	} else if more := lineAt(p.text[i:], end-i) - 2; more > 0 && line == 0 {
		e.Found += fmt.Sprintf(" (by its quotes the row runs on over %d lines)", more+1)
	} else if last := line + more; more > 0 {
		e.Found += fmt.Sprintf(" (by its quotes the row runs on to line %d)", last)
	}
	return e
}

// Locate finds the line of a mark; its offset if the segment's start was guessed.
func (s *segment) Locate(mark int64) stream.Position {
	pos := stream.Position{File: s.src.in.Name}
	if i := mark - s.base; s.line > 0 && i >= 0 && i <= int64(len(s.parser.text)) {
		pos.Line = s.line + lineAt(s.parser.text, int(i)) - 1
	} else if s.verify != nil && s.line == 0 {
		pos.Offset = mark // to count lines is to read the file
	} else if ra, size := s.src.plain(); ra != nil && mark <= size {
		pos.Line = lineIn(ra, mark)
	}
	return pos
}

// lineIn counts the lines before an offset of a file; 0 if it cannot be read.
func lineIn(ra io.ReaderAt, offset int64) int64 {
	r := io.NewSectionReader(ra, 0, offset)
	buf := make([]byte, 256<<10)
	line := int64(1)
	for {
		n, err := r.Read(buf)
		_, k := scan.Count(buf[:n])
		line += int64(k)
		if err == io.EOF {
			return line
		}
		if err != nil {
			return 0
		}
	}
}

func (s *segment) Close() error {
	if s.err == nil || s.err == io.EOF {
		s.err = errClosed
	}
	s.src.release(s.buf)
	s.buf, s.parser.text = nil, nil
	s.load, s.more, s.pass = nil, nil, nil
	return nil
}

// Pass implements stream.Passer.
func (s *segment) Pass(t stream.SegmentTally) error {
	if s.pass != nil && t.Quotes != 0 {
		s.pass(t)
	}
	return s.Close()
}
