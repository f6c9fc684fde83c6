package delimited

import (
	"bytes"
	"fmt"
	"strconv"
	"unicode/utf8"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// rules say how cells are written.
type rules struct {
	point  byte
	tokens [][]byte
	first  [256]bool // first bytes of tokens
	// readable is true if a token reads as a value too, such as -999.
	readable bool
}

func newRules(o stream.Options) *rules {
	r := &rules{point: '.'}
	if o.DecimalComma {
		r.point = ','
	}
	for _, t := range o.Null {
		if t != "" {
			r.tokens = append(r.tokens, []byte(t))
			r.first[t[0]] = true
			r.readable = r.readable || readable(r.tokens[len(r.tokens)-1], r.point)
		}
	}
	return r
}

// readable reports whether a cell is a number other than nan, a time or true or
// false.
func readable(cell []byte, point byte) bool {
	cell = trim(cell)
	if v, s := scan.ParseFloat(cell, point); s == scan.OK && v == v {
		return true
	}
	if _, ok := parseBool(cell); ok {
		return true
	}
	_, _, _, ok := parseTime(cell)
	return ok
}

// missing reports whether an unquoted cell stands for nothing.
func (r *rules) missing(cell []byte) bool {
	if len(cell) == 0 {
		return true
	}
	if !r.first[cell[0]] {
		return false
	}
	for _, t := range r.tokens {
		if bytes.Equal(cell, t) {
			return true
		}
	}
	return false
}

// trim cuts blanks off a cell of a number, truth or time column.
func trim(cell []byte) []byte {
	for len(cell) > 0 && (cell[0] == ' ' || cell[0] == '\t') {
		cell = cell[1:]
	}
	for n := len(cell); n > 0 && (cell[n-1] == ' ' || cell[n-1] == '\t'); n-- {
		cell = cell[:n-1]
	}
	return cell
}

// isWord reports whether b is the lower-case ASCII word in any case.
func isWord(b []byte, word string) bool {
	if len(b) != len(word) {
		return false
	}
	for i, c := range b {
		if c|0x20 != word[i] {
			return false
		}
	}
	return true
}

// isNaN accepts nan in any case, with or without sign.
func isNaN(b []byte) bool {
	if len(b) == 4 && (b[0] == '-' || b[0] == '+') {
		b = b[1:]
	}
	return isWord(b, "nan")
}

// parseBool reads true and false in any case, and what is commonly written for
// them in a column that was declared to be of kind bool.
func parseBool(b []byte) (v, ok bool) {
	switch {
	case isWord(b, "true"), isWord(b, "t"), isWord(b, "yes"), isWord(b, "y"), len(b) == 1 && b[0] == '1':
		return true, true
	case isWord(b, "false"), isWord(b, "f"), isWord(b, "no"), isWord(b, "n"), len(b) == 1 && b[0] == '0':
		return false, true
	}
	return false, false
}

// want says what a cell of a column should look like.
func want(c *stream.Column, asNumber bool, s scan.Status, r *rules) string {
	other := func(k stream.Kind) string {
		return fmt.Sprintf(" (--kinds \"%s=%v\" reads others)", c.Name, k)
	}
	switch c.Kind {
	case stream.Time:
		switch {
		case c.DateOnly:
			return "a date such as 2006-01-02, years 1678 to 2261" + other(stream.Text)
		case c.Zoned:
			return "a time with its zone such as 2006-01-02T15:04:05Z, years 1678 to 2261" + other(stream.Text)
		}
		return "a time without zone such as 2006-01-02 15:04:05, years 1678 to 2261" + other(stream.Text)
	case stream.Bool:
		return "true or false" + other(stream.Text)
	case stream.Int64, stream.Uint64:
		if asNumber {
			break
		}
		switch s {
		case scan.Zeros:
			return "a whole number without leading zeros" + other(stream.Text)
		case scan.Range:
			return fmt.Sprintf("a whole number within the range of %v", c.Kind) + other(stream.Text)
		}
		return "a whole number" + other(stream.Float64)
	}
	switch {
	case s == scan.Range:
		return "a number within the range of float64 (up to 1.8e308)"
	case r.point == ',':
		return "a number with a decimal comma" + other(stream.Text)
	}
	return "a number" + other(stream.Text)
}

// shorten quotes a cell for a message, at most some 40 bytes of it.
func shorten(cell []byte) string {
	const most = 40
	if len(cell) <= most {
		return strconv.Quote(string(cell))
	}
	n := most
	for n > most-utf8.UTFMax && !utf8.RuneStart(cell[n]) {
		n--
	}
	return strconv.Quote(string(cell[:n])) + "..."
}

// faultError describes the row at start, which stands on that line, whose cell
// at index at is at fault. want is the number of columns.
func faultError(file string, t *tokens, start, at int, f fault, want int, line int64) *stream.RowError {
	e := &stream.RowError{Pos: stream.Position{File: file, Line: line}}
	switch f {
	case bareQuote:
		end := at
		for end < len(t.text) && !t.atEnd(end) {
			end++
		}
		e.Found = "a quote inside the unquoted cell " + shorten(t.text[at:end])
		e.Want = "the whole cell in quotes and quotes in it doubled"
	case afterQuote:
		end, _, _ := t.close(at)
		rest := t.text[end:]
		if k := bytes.IndexByte(rest, '\n'); k >= 0 {
			rest = rest[:k]
		}
		e.Found = fmt.Sprintf("%s after the closing quote of a cell", shorten(rest))
		e.Want = "a delimiter or the end of the row (quotes inside a cell doubled)"
	case openQuote:
		e.Found = fmt.Sprintf("a quote opened on line %d and never closed", line+lineAt(t.text[start:], at-start)-1)
		e.Want = "a closing quote"
	case tooLong:
		e.Found = fmt.Sprintf("a row of more than %d bytes", len(t.text)-start-1)
		e.Want = "a shorter row"
	case tooLongQuote:
		e.Found = fmt.Sprintf("a quote opened on line %d and not closed for %d bytes", line+lineAt(t.text[start:], at-start)-1, len(t.text)-at-1)
		e.Want = "a closing quote"
	default:
		cells, _, f := t.row(start, nil)
		more := ""
		if f != sound {
			more = "at least "
		}
		e.Found = fmt.Sprintf("%s%s", more, fields(len(cells)))
		e.Want = fields(want)
	}
	return e
}

func fields(n int) string {
	if n == 1 {
		return "1 field"
	}
	return fmt.Sprintf("%d fields", n)
}
