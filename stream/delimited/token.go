package delimited

import (
	"bytes"

	"github.com/tallrow/tallrow/stream/internal/scan"
)

// fault says why a row is malformed.
type fault uint8

const (
	sound fault = iota
	bareQuote
	afterQuote
	openQuote
	tooFew
	tooMany
	misfit
	tooLong
	tooLongQuote
)

// tokens cuts cells from text, whose last byte is a newline.
type tokens struct {
	text    []byte
	delim   byte
	scratch []byte
}

// atEnd reports whether a cell may end before index i: there is a delimiter, a
// newline, or a carriage return before a newline.
func (t *tokens) atEnd(i int) bool {
	c := t.text[i]
	return c == t.delim || c == '\n' || (c == '\r' && t.text[i+1] == '\n')
}

// cell returns the cell that begins at i and the index of what ends it. The
// value of a quoted cell with doubled quotes lies in scratch.
func (t *tokens) cell(i int) (val []byte, quoted bool, end int, f fault) {
	text := t.text
	if text[i] == '"' {
		end, doubled, f := t.close(i)
		if f != sound {
			return nil, true, end, f
		}
		val = text[i+1 : end-1]
		if doubled {
			val = t.undouble(val)
		}
		return val, true, end, sound
	}
	end = scan.Stop(text, i, t.delim)
	switch text[end] {
	case '"':
		return text[i:end], false, end, bareQuote
	case '\n':
		if end > i && text[end-1] == '\r' {
			end--
		}
	}
	return text[i:end], false, end, sound
}

// close returns the index after the quote that closes the one at i.
func (t *tokens) close(i int) (end int, doubled bool, f fault) {
	text := t.text
	for j := i + 1; ; {
		k := bytes.IndexByte(text[j:], '"')
		if k < 0 {
			return len(text), doubled, openQuote
		}
		j += k + 1 // below the length: the text ends in a newline
		if text[j] != '"' {
			if !t.atEnd(j) {
				return j, doubled, afterQuote
			}
			return j, doubled, sound
		}
		doubled = true
		j++
	}
}

func (t *tokens) undouble(val []byte) []byte {
	from := len(t.scratch)
	for {
		k := bytes.IndexByte(val, '"')
		if k < 0 {
			t.scratch = append(t.scratch, val...)
			return t.scratch[from:]
		}
		t.scratch = append(t.scratch, val[:k+1]...)
		val = val[k+2:]
	}
}

// blank returns the index after the empty line at i, or i if a row begins there.
func (t *tokens) blank(i int) int {
	switch c := t.text[i]; {
	case c == '\n':
		return i + 1
	case c == '\r' && t.text[i+1] == '\n':
		return i + 2
	}
	return i
}

// cell is a field of a row.
type cell struct {
	val    []byte
	quoted bool
	at     int // index of its first byte
}

// row splits the row at i. On a fault, next is the index of the cell at fault.
func (t *tokens) row(i int, into []cell) (cells []cell, next int, f fault) {
	cells = into[:0]
	for {
		val, quoted, end, f := t.cell(i)
		if f != sound {
			return cells, i, f
		}
		cells = append(cells, cell{val, quoted, i})
		switch t.text[end] {
		case t.delim:
			i = end + 1
			continue
		case '\r':
			end++
		}
		return cells, end + 1, sound
	}
}
