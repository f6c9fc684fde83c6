package delimited

import (
	"bytes"
	"fmt"
	"io"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

const (
	headBytes  = 1 << 20
	sampleRows = 1000
	sniffRows  = 100
)

// head is what the beginning of the text says about the rest.
type head struct {
	text   []byte // as read, from the first byte; kept for a pipe only
	start  int64  // offset of the first data row
	line   int64  // its line
	delim  byte
	schema stream.Schema
	// rowBytes is the mean length of the first rows.
	rowBytes float64
}

func readHead(r io.Reader, name string, o stream.Options, rules *rules, limit int) (*head, error) {
	h := &head{}
	var tidy []byte // whole rows, the last with a newline
	for size := headBytes; ; size *= 2 {
		end := false
		for len(h.text) < size && !end {
			old := len(h.text)
			n := min(max(old, 64<<10), size-old)
			h.text = append(h.text, make([]byte, n)...)
			n, err := io.ReadFull(r, h.text[old:])
			h.text = h.text[:old+n]
			end = err == io.EOF || err == io.ErrUnexpectedEOF
			if err != nil && !end {
				return nil, err
			}
			if err := notText(name, h.text[old:], h.text[:old]); err != nil {
				return nil, err
			}
		}
		if end {
			tidy = h.text[:len(h.text):len(h.text)]
			if len(tidy) > 0 && tidy[len(tidy)-1] != '\n' {
				tidy = append(tidy, '\n')
			}
			break
		}
		// The header and one row must be whole.
		var rows int
		if tidy, rows = wholeRows(h.text); rows >= 2 || size > limit {
			break
		}
	}
	return h, h.read(name, tidy, o, rules)
}

// notText refuses what a text in UTF-8 never holds.
func notText(name string, b, before []byte) error {
	pos := stream.Position{File: name}
	if len(before) == 0 && (bytes.HasPrefix(b, []byte{0xff, 0xfe}) || bytes.HasPrefix(b, []byte{0xfe, 0xff})) {
		return &stream.RowError{Pos: pos, Found: "text in UTF-16 (by its byte order mark)", Want: "text in UTF-8"}
	}
	if i := bytes.IndexByte(b, 0); i >= 0 {
		return &stream.RowError{Pos: pos, Found: fmt.Sprintf("a zero byte at offset %d (binary data?)", len(before)+i), Want: "CSV text in UTF-8"}
	}
	return nil
}

// wholeRows returns the rows that are complete in b and the number of those
// that are not empty lines, counted up to a few.
func wholeRows(b []byte) (rows []byte, n int) {
	end := 0
	for {
		e, _ := scan.RowEnd(b, end, false)
		if e < 0 {
			return b[:end:end], n
		}
		if e-end > 2 || (b[end] != '\n' && b[end] != '\r') {
			n++
		}
		end = e
	}
}

// mark is the byte order mark of UTF-8.
var mark = []byte{0xef, 0xbb, 0xbf}

func (h *head) read(name string, text []byte, o stream.Options, rules *rules) error {
	i := 0
	if bytes.HasPrefix(text, mark) {
		i = len(mark)
	}
	t := &tokens{text: text, delim: ','}
	i = skipBlank(t, i)
	if i >= len(text) {
		return h.nothing(name, text)
	}
	h.delim = sniff(text, i, o.DecimalComma)
	t.delim = h.delim
	cells, next, f := t.row(i, nil)
	if f != sound {
		return faultError(name, t, i, next, f, 0, lineAt(text, i))
	}
	h.start = int64(i)
	if o.NoHeader {
		for j := range cells {
			h.schema.Columns = append(h.schema.Columns, stream.Column{Name: fmt.Sprintf("c%d", j+1)})
		}
	} else {
		if err := h.names(name, cells, lineAt(text, i)); err != nil {
			return err
		}
		h.start = int64(min(next, len(h.text)))
	}
	h.line = lineAt(text, int(h.start))
	return h.kinds(name, t, o, rules)
}

// nothing says why there is no row at all.
func (h *head) nothing(name string, text []byte) error {
	found := "an empty file"
	switch {
	case len(h.text) > len(text)+1:
		found = fmt.Sprintf("no end of a row within the first %d bytes", len(h.text))
		if k := bytes.IndexByte(h.text, '"'); k >= 0 {
			found += fmt.Sprintf(" (a quote opened on line %d?)", lineAt(h.text, k))
		}
	case len(bytes.TrimPrefix(h.text, mark)) > 0:
		found = "only empty lines"
	}
	return &stream.RowError{Pos: stream.Position{File: name}, Found: found, Want: "a header line and rows"}
}

func skipBlank(t *tokens, i int) int {
	for i < len(t.text) {
		n := t.blank(i)
		if n == i {
			break
		}
		i = n
	}
	return i
}

// lineAt returns the 1-based line of index i.
func lineAt(text []byte, i int) int64 {
	_, n := scan.Count(text[:i])
	return int64(n) + 1
}

// sniff returns the delimiter of the rows from i on: the one that stands in the
// first row and equally often in most others, outside quotes; of equals, the one
// that makes more columns. With decimal commas, a comma only if nothing else
// separates; one that leaves quotes of the first row out of place only if all
// do. A text with none of them has one column.
func sniff(text []byte, i int, decimalComma bool) byte {
	type tally struct{ first, equal int }
	candidates := []byte{'\t', ';', ','}
	counts := make([]tally, len(candidates))
	t := tokens{text: text}
	first, rows := i, 0
	for rows < sniffRows {
		i = skipBlank(&t, i)
		end := -1
		if i < len(text) {
			end, _ = scan.RowEnd(text, i, false)
		}
		if end < 0 && rows > 0 || i >= len(text) {
			break
		}
		if end < 0 {
			end = len(text)
		}
		var n [3]int
		odd := false
		for _, c := range text[i:end] {
			if c == '"' {
				odd = !odd
			} else if !odd {
				if k := bytes.IndexByte(candidates, c); k >= 0 {
					n[k]++
				}
			}
		}
		for k := range counts {
			if rows == 0 {
				counts[k].first = n[k]
			}
			if n[k] == counts[k].first {
				counts[k].equal++
			}
		}
		rows++
		i = end
	}
	best := -1
	for k, c := range counts {
		t.delim = candidates[k]
		if _, _, f := t.row(first, nil); f != sound {
			c.equal = 0 // quotes of the first row are out of place
			counts[k] = c
		}
		switch {
		case c.first == 0, decimalComma && candidates[k] == ',' && best >= 0:
		case best < 0, c.equal > counts[best].equal,
			c.equal == counts[best].equal && c.first > counts[best].first:
			best = k
		}
	}
	if best < 0 {
		if decimalComma {
			return ';'
		}
		return ','
	}
	return candidates[best]
}

func (h *head) names(file string, cells []cell, line int64) error {
	seen := make(map[string]int, len(cells))
	for j, c := range cells {
		n := string(c.val)
		if !c.quoted {
			n = strings.Trim(n, " \t")
		}
		if strings.Contains(n, "\r") && !c.quoted {
			return &stream.RowError{Pos: stream.Position{File: file, Line: line}, Found: "lines that end in a carriage return alone", Want: "newlines"}
		}
		if n == "" {
			n = fmt.Sprintf("c%d", j+1)
		}
		if first, twice := seen[n]; twice {
			return &stream.RowError{Pos: stream.Position{File: file, Line: line},
				Found: fmt.Sprintf("the column name %s twice (columns %d and %d)", shorten([]byte(n)), first+1, j+1),
				Want:  "names that differ (or --no-header, if the first line is data)"}
		}
		seen[n] = j
		h.schema.Columns = append(h.schema.Columns, stream.Column{Name: n})
	}
	return nil
}

// kinds fixes the kinds of the columns from the first rows.
func (h *head) kinds(file string, t *tokens, o stream.Options, rules *rules) error {
	n := len(h.schema.Columns)
	guesses := make([]guess, n)
	var cells []cell
	var firstBad error
	good, seen := 0, 0
	i := int(h.start)
	for seen < sampleRows {
		i = skipBlank(t, i)
		if i >= len(t.text) {
			break
		}
		t.scratch = t.scratch[:0]
		row, next, f := t.row(i, cells)
		if cells = row; f == sound && len(row) != n {
			f = tooFew
			if len(row) > n {
				f = tooMany
			}
			next = i
		}
		seen++
		if f == sound {
			good++
			for j := range guesses {
				guesses[j].see(row[j].val, row[j].quoted, rules)
			}
			i = next
			continue
		}
		if firstBad == nil {
			firstBad = faultError(file, t, i, next, f, n, lineAt(t.text, i))
		}
		if i, _ = scan.RowEnd(t.text, i, false); i < 0 {
			i = len(t.text)
			break
		}
	}
	if good == 0 && firstBad != nil && !o.SkipBad {
		return firstBad
	}
	if seen > 0 {
		h.rowBytes = float64(int64(i)-h.start) / float64(seen)
	}
	for j := range guesses {
		c := &h.schema.Columns[j]
		guesses[j].decide(c, good == 0)
		if k, ok := o.Kinds[c.Name]; ok {
			guesses[j].force(c, k)
		}
	}
	return nil
}
