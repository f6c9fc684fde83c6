package delimited

import (
	"bytes"
	"context"
	"io"
	"math"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// window is how much text a sample reads at a time, and how far it looks to
// find out whether it began inside quotes.
const window = 256 << 10

// Sample begins at the first row after the offset of that fraction of the text,
// at the latest about a batch of rows before the end. Whether the offset is
// inside quotes is guessed from the text behind it: the assumption that is first
// contradicted by the place of a quote is dropped; if neither is, the one with
// more sound rows stays; if there is nothing to tell, the offset is outside.
func (s *source) Sample(ctx context.Context, uses []stream.Use, at float64) (stream.Segment, error) {
	ra, size := s.plain()
	if ra == nil {
		return nil, stream.ErrNoSample
	}
	if err := s.check(uses); err != nil {
		return nil, err
	}
	first := s.head.start
	offset := first
	if at > 0 {
		last := size - int64(math.Ceil(s.head.rowBytes*stream.BatchRows))
		offset = max(first, min(first+int64(at*float64(size-first)), last))
	}
	g := newSegment(ctx, s, uses, -1)
	g.skipBad, g.silent = true, true
	p := &samplePlace{src: s, ra: ra, size: size, at: offset}
	if offset > first {
		if err := p.rowStart(); err != nil {
			return nil, err
		}
	}
	g.more = p.more
	return g, nil
}

// samplePlace is where a sample reads on.
type samplePlace struct {
	src  *source
	ra   io.ReaderAt
	size int64
	at   int64
}

// more brings in the rows that start in the next window.
func (p *samplePlace) more(g *segment) error {
	if p.at >= p.size {
		return io.EOF
	}
	n := int(min(window, p.size-p.at))
	buf := g.buf[:0]
	if cap(buf) < n {
		buf = make([]byte, 0, n+1+firstOverhang+scan.Pad)
	}
	buf = buf[:n]
	if err := readAt(p.src.in.Name, p.ra, buf, p.at); err != nil {
		return err
	}
	quotes, _ := scan.Count(buf)
	buf, cut, err := p.src.finish(p.ra, buf, p.at+int64(n), p.size, quotes&1 == 1)
	if err != nil {
		return err
	}
	g.parser.cut = cut
	g.setText(buf, 0, p.at, 0)
	g.tally.Bytes += int64(len(buf))
	p.at += int64(len(buf))
	return nil
}

// rowStart moves to the first row start at or after the place.
func (p *samplePlace) rowStart() error {
	from := p.at - 1
	buf := make([]byte, min(window, p.size-from))
	if err := readAt(p.src.in.Name, p.ra, buf, from); err != nil {
		return err
	}
	inside := p.src.guessInside(buf)
	if !inside && buf[0] == '\n' {
		return nil
	}
	buf = buf[1:]
	from++
	for {
		var end int
		if end, inside = scan.RowEnd(buf, 0, inside); end >= 0 {
			p.at = from + int64(end)
			return nil
		}
		from += int64(len(buf))
		if from == p.size {
			p.at = p.size
			return nil
		}
		buf = buf[:min(int64(cap(buf)), p.size-from)]
		if err := readAt(p.src.in.Name, p.ra, buf, from); err != nil {
			return err
		}
	}
}

// guessInside reports whether b[1] is inside quotes.
func (s *source) guessInside(b []byte) bool {
	in, out := s.suppose(b, true), s.suppose(b, false)
	if in.contradiction != out.contradiction {
		return in.contradiction > out.contradiction
	}
	return in.good > out.good || (out.good == 0 && out.bad > 0)
}

// evidence is what follows from an assumption about b[1].
type evidence struct {
	contradiction int // index of the first quote that cannot stand there
	good, bad     int // rows before it that fit the schema and others
}

// contradiction returns the index of the first quote that cannot stand where it does
// if b[1] is inside quotes or not, math.MaxInt if there is none.
func (s *source) contradiction(b []byte, inside bool) int {
	delim := s.head.delim
	for i := 1; ; {
		k := bytes.IndexByte(b[i:], '"')
		if k < 0 || i+k+1 >= len(b) {
			return math.MaxInt
		}
		i += k + 1 // after the quote
		if inside {
			if b[i] == '"' {
				if i++; i == len(b) {
					return math.MaxInt
				}
				continue
			}
			if c := b[i]; c != delim && c != '\n' && c != '\r' {
				return i - 1
			}
		} else if c := b[i-2]; c != delim && c != '\n' && (i > 2 || c != '"') {
			// Between the two quotes of a doubled one the state is outside.
			return i - 1
		}
		inside = !inside
	}
}

func (s *source) suppose(b []byte, inside bool) evidence {
	e := evidence{contradiction: s.contradiction(b, inside)}
	rows := b[1:]
	end, _ := scan.RowEnd(rows, 0, inside)
	var cells []cell
	for end >= 0 && e.good+e.bad < sampleRows {
		start := end
		if end, _ = scan.RowEnd(rows, start, false); end < 0 || end >= e.contradiction {
			break
		}
		t := tokens{text: rows[start:end], delim: s.head.delim}
		if t.blank(0) != 0 {
			continue
		}
		var f fault
		if cells, _, f = t.row(0, cells); f == sound && s.fits(cells) {
			e.good++
		} else {
			e.bad++
		}
	}
	return e
}

// fits reports whether a row has as many cells as there are columns, none of them
// a misfit.
func (s *source) fits(cells []cell) bool {
	if len(cells) != len(s.head.schema.Columns) {
		return false
	}
	for j, c := range s.head.schema.Columns {
		if c.Kind == stream.Text {
			continue
		}
		val, ok := trim(cells[j].val), true
		switch {
		case !cells[j].quoted && s.rules.missing(val), isNaN(val):
		case c.Kind == stream.Bool:
			_, ok = parseBool(val)
		case c.Kind == stream.Time:
			_, _, _, ok = parseTime(val)
		default:
			_, status := scan.ParseFloat(val, s.rules.point)
			ok = status == scan.OK
		}
		if !ok {
			return false
		}
	}
	return true
}
