package delimited

import (
	"bytes"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// How a column of the text is read.
const (
	opSkip = iota
	opFloat
	opInt
	opText
	opCell // any kind, or several uses of one column
)

// step reads one column of the text, or passes over run columns.
type step struct {
	op  int
	run int
	out *column
	all []*column // opCell
}

// program lists the steps for one row.
func program(schema *stream.Schema, uses []stream.Use) (steps []step, out []*column) {
	by := make([][]*column, len(schema.Columns))
	for _, u := range uses {
		c := newColumn(&schema.Columns[u.Column], u.AsNumber)
		by[u.Column] = append(by[u.Column], c)
		out = append(out, c)
	}
	for _, cs := range by {
		s := step{op: opCell, run: 1, all: cs}
		switch {
		case len(cs) == 0:
			if k := len(steps) - 1; k >= 0 && steps[k].op == opSkip {
				steps[k].run++
				continue
			}
			s.op = opSkip
		case len(cs) > 1:
		default:
			s.out = cs[0]
			switch {
			case s.out.kind == stream.Float64 && s.out.schema.Kind != stream.Bool:
				s.op = opFloat
			case s.out.kind == stream.Int64:
				s.op = opInt
			case s.out.kind == stream.Text:
				s.op = opText
			}
		}
		steps = append(steps, s)
	}
	return steps, out
}

// trouble is what was wrong with a row.
type trouble struct {
	fault  fault
	at     int     // index of the cell
	out    *column // misfit
	status scan.Status
}

// parser reads rows of text into columns.
type parser struct {
	tokens
	rules   *rules
	steps   []step
	columns int
	bad     trouble
	cells   []cell // of recheck
}

// read reads the row at i into row r of the columns and returns the index of
// the next row, or -1 and p.bad.
func (p *parser) read(i, r int) int {
	text, delim, point := p.text, p.delim, p.rules.point
	left := p.columns
	for k := range p.steps {
		s := &p.steps[k]
		switch s.op {
		case opSkip:
			at, more := scan.Skip(text, i, delim, s.run)
			if more > 0 && text[at] == '"' {
				if at, more = p.skipQuoted(i, at, more); at < 0 {
					return -1
				}
			}
			left -= s.run - more
			if more == 0 {
				// All of the run had a delimiter behind it.
				if left == 0 {
					return p.fail(trouble{fault: tooMany})
				}
				i = at
				continue
			}
			// text[at] is the newline: the run must end with the row.
			if left != 1 {
				return p.fail(trouble{fault: tooFew})
			}
			return at + 1
		case opFloat:
			v, end := scan.Float(text, i, point)
			if end > 0 && p.atEnd(end) {
				s.out.f64[r] = v
				i = end
			} else if i = p.slow(s, i, r); i < 0 {
				return -1
			}
		case opInt:
			v, end := scan.Int(text, i)
			if end > 0 && p.atEnd(end) {
				s.out.setInt(r, v)
				i = end
			} else if i = p.slow(s, i, r); i < 0 {
				return -1
			}
		case opText:
			if text[i] == '"' {
				if i = p.slow(s, i, r); i < 0 {
					return -1
				}
				break
			}
			end := scan.Stop(text, i, delim)
			val := text[i:end]
			switch text[end] {
			case '"':
				return p.fail(trouble{fault: bareQuote, at: i})
			case '\n':
				if n := len(val); n > 0 && val[n-1] == '\r' {
					val = val[:n-1]
				}
			}
			if p.rules.missing(val) {
				s.out.code[r] = -1
			} else {
				s.out.code[r] = s.out.text.intern(val)
			}
			i += len(val)
		default:
			if i = p.slow(s, i, r); i < 0 {
				return -1
			}
		}
		left--
		if text[i] == delim {
			if left == 0 {
				return p.fail(trouble{fault: tooMany})
			}
			i++
			continue
		}
		if left != 0 {
			return p.fail(trouble{fault: tooFew})
		}
		if text[i] == '\r' {
			i++
		}
		return i + 1
	}
	panic("delimited: a row program without end")
}

func (p *parser) fail(t trouble) int {
	p.bad = t
	return -1
}

// recheck looks at the whole row at i, which has a cell that does not fit: if
// its structure is at fault too, that is what to report (a cell may be misplaced
// only).
func (p *parser) recheck(i int) {
	p.scratch = p.scratch[:0]
	cells, at, f := p.row(i, p.cells)
	p.cells = cells
	switch {
	case f != sound:
		p.bad = trouble{fault: f, at: at}
	case len(cells) < p.columns:
		p.bad = trouble{fault: tooFew}
	case len(cells) > p.columns:
		p.bad = trouble{fault: tooMany}
	}
}

// slow reads the cell at i in the general way and returns the index of what
// ends it.
func (p *parser) slow(s *step, i, r int) int {
	p.scratch = p.scratch[:0]
	val, quoted, end, f := p.cell(i)
	if f != sound {
		return p.fail(trouble{fault: f, at: i})
	}
	for _, out := range s.all {
		if status := out.store(r, val, quoted, p.rules); status != scan.OK {
			return p.fail(trouble{fault: misfit, at: i, out: out, status: status})
		}
	}
	return end
}

// skipQuoted goes on where Skip, sent off at index from, met a quote with left
// delimiters to go. It returns what Skip would, or -1 and p.bad.
func (p *parser) skipQuoted(from, at, left int) (int, int) {
	text := p.text
	for text[at] == '"' {
		if at != from && text[at-1] != p.delim {
			begin := max(from, bytes.LastIndexByte(text[:at], p.delim)+1)
			return p.fail(trouble{fault: bareQuote, at: begin}), 0
		}
		end, _, f := p.close(at)
		if f != sound {
			return p.fail(trouble{fault: f, at: at}), 0
		}
		switch text[end] {
		case p.delim:
			at = end + 1
			if left--; left == 0 {
				return at, 0
			}
			from = at
			if at, left = scan.Skip(text, at, p.delim, left); left == 0 {
				return at, 0
			}
		case '\r':
			return end + 1, left
		default:
			return end, left
		}
	}
	return at, left
}
