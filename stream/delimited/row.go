package delimited

import (
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

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
	out     []*column
	columns int
	cut     bool // the text stops inside its last row
	index   scan.Index
	try     int // rows that block reads at once
	bad     trouble
	cells   []cell // of one
}

// one reads the row at i, whatever is in it, into row r of the columns and
// returns the index of the next row, or -1 and p.bad. A fault of the structure
// comes before a cell that does not fit: it may be misplaced only.
func (p *parser) one(i, r int) int {
	p.scratch = p.scratch[:0]
	cells, next, f := p.row(i, p.cells)
	p.cells = cells
	switch {
	case f != sound:
		return p.fail(trouble{fault: f, at: next})
	case len(cells) < p.columns:
		return p.fail(trouble{fault: tooFew})
	case len(cells) > p.columns:
		return p.fail(trouble{fault: tooMany})
	}
	for _, o := range p.out {
		c := cells[o.at]
		if status := o.store(r, c.val, c.quoted, p.rules); status != scan.OK {
			return p.fail(trouble{fault: misfit, at: c.at, out: o, status: status})
		}
	}
	return next
}

func (p *parser) fail(t trouble) int {
	p.bad = t
	return -1
}

// block reads plain rows from the one at i on, as many as marks has
// room for, into the columns from row r, and where they start, counted from
// base, into marks. It returns how many they
// were and the index of the next row; odd says that this one is not plain and
// must be read by itself.
//
// A row is plain if it has as many cells as there are columns, none of them a
// misfit. Rows that are read in vain, because one before them has a misfit in a
// later column, are read again: so after an odd row few are tried at a time.
func (p *parser) block(i, r int, marks []int64, base int64) (n, next int, odd bool) {
	x, c := &p.index, p.columns
	if !x.Seek(i) {
		x.Reset(i, c)
	}
	for len(x.Ends) <= c && x.More(p.text, p.delim) {
	}
	tried := min(len(marks), p.try, (len(x.Ends)-1)/c)
	n = p.sound(tried)
	if p.cut && n > 0 && int(x.Ends[n*c])+1 == len(p.text) {
		n--
	}
	for _, o := range p.out {
		if n > 0 {
			n = o.read(p, r, n)
		}
	}
	for k := range n {
		marks[k] = base + int64(x.Ends[k*c]) + 1
	}
	next = int(x.Ends[n*c]) + 1
	if odd = n < tried || tried == 0; odd {
		p.try = 4
	} else {
		p.try = min(2*p.try, stream.BatchRows)
	}
	return n, next, odd
}

// sound returns how many of the first n rows in the index have as many cells as
// there are columns.
func (p *parser) sound(n int) int {
	ends, c := p.index.Ends, p.columns
	for r := range n {
		if p.text[ends[(r+1)*c]] != '\n' {
			n = r
			break
		}
	}
	// No other newline may end a cell.
	if _, lines := scan.Count(p.text[ends[0]+1 : ends[n*c]+1]); lines == n && c > 1 {
		return n
	}
	for r := range n {
		for _, e := range ends[r*c+1 : (r+1)*c] {
			if p.text[e] == '\n' {
				return r
			}
		}
		if start := int(ends[r*c]) + 1; p.blank(start) != start {
			return r
		}
	}
	return n
}
