package columnar

import (
	"sync"

	"github.com/tallrow/tallrow/stream"
)

// A row group of more than hugeRows rows is cut into parts of partRows rows, or
// the next power of two at which few pages are decoded twice, so that all workers
// have something to do. Variables for tests.
var (
	hugeRows int64 = 1 << 20
	partRows int64 = 1 << 19
)

// part is the rows of one segment: a row group, or a cut from a huge one.
type part struct {
	group int
	first int64 // row of the group
	rows  int64
}

// cut makes the segments. It depends on the file alone: pages is the number of
// rows in a page, on average over the columns (0: not known). A page that lies
// across a cut is decoded on both sides, so parts are at least four pages long; a
// group that would be one part then stays whole.
func (f *File) cut(pages int64) {
	for g := range f.meta.RowGroups {
		rows := f.meta.RowGroups[g].NumRows
		step := rows
		if rows > hugeRows && pages > 0 {
			step = partRows
			for step < 4*pages && step < rows {
				step *= 2
			}
		}
		f.parts = append(f.parts, part{group: g, rows: min(step, rows)})
		for at := step; at < rows; at += step {
			f.parts = append(f.parts, part{g, at, min(step, rows-at)})
		}
	}
}

// pageStart is the place of the header of a page, and how many rows of the group
// lie before it.
type pageStart struct{ off, row int64 }

// walk remembers pages of one column of a cut row group: the first, and one near
// the start of each part that was asked for. Each page header is read once, and
// the pages between are not: about a microsecond a page.
type walk struct {
	mu    sync.Mutex
	known []pageStart // ascending
}

type walkKey struct{ group, leaf int }

// walkOf returns the walk of a column, nil if the group is not cut.
func (f *File) walkOf(group, leaf int) *walk {
	if f.meta.RowGroups[group].NumRows <= hugeRows {
		return nil
	}
	f.walkMu.Lock()
	defer f.walkMu.Unlock()
	if f.walks == nil {
		f.walks = map[walkKey]*walk{}
	}
	k := walkKey{group, leaf}
	if f.walks[k] == nil {
		f.walks[k] = new(walk)
	}
	return f.walks[k]
}

// seek moves the chunk, which was just opened, to a row. Whole pages before it
// are passed over without being decoded, from the last page of w on that is not
// behind the row. w may be nil.
func (c *chunk) seek(row int64, w *walk) error {
	if row == 0 {
		return nil
	}
	rows := c.left
	c.walk = true
	defer func() { c.walk = false }()
	if w != nil {
		w.mu.Lock()
		defer w.mu.Unlock()
		if i := len(w.known) - 1; i >= 0 {
			for i > 0 && w.known[i].row > row {
				i--
			}
			if at := w.known[i]; at.row <= row && at.off > c.off {
				if err := c.jump(at); err != nil {
					return err
				}
			}
		}
	}
	for {
		before := pageStart{c.off, rows - c.left}
		h, err := c.dataHeader()
		if err != nil {
			return err
		}
		if n := int64(h.values); before.row+n <= row {
			c.left -= n
			c.off += int64(h.compressed)
			if before.row+n < row {
				continue
			}
			before = pageStart{c.off, row}
		} else if err := c.load(&h); err != nil {
			return err
		} else {
			c.page.advance(int(row-before.row), c.col.maxDef)
		}
		if w != nil {
			w.add(before)
		}
		return nil
	}
}

// jump goes on at a page that is known, with the dictionary in front loaded.
func (c *chunk) jump(to pageStart) error {
	h, err := c.header()
	if err != nil {
		return err
	}
	if h.typ == pageDictionary {
		if err := c.loadDictionary(&h); err != nil {
			return err
		}
	}
	c.off, c.left = to.off, c.left-to.row
	return nil
}

// add keeps a page in order.
func (w *walk) add(p pageStart) {
	i := len(w.known)
	for i > 0 && w.known[i-1].row > p.row {
		i--
	}
	if i > 0 && w.known[i-1].row == p.row {
		return
	}
	w.known = append(w.known, pageStart{})
	copy(w.known[i+1:], w.known[i:])
	w.known[i] = p
}

// probed is what the first pages of a chunk tell.
type probed struct {
	bytes int64 // memory for the chunk's pages and dictionary
	rows  int64 // in the first data page
}

// probe reads the headers of a chunk up to the first data page. Zero if they
// cannot be read: that is an error of the scan, if it comes so far.
func (f *File) probe(c *column, group int) (p probed) {
	m := &f.meta.RowGroups[group].Columns[c.leaf].MetaData
	if m.NumValues == 0 {
		return p
	}
	var ch chunk
	ch.open(f.file, c, m, m.NumValues, stream.Position{File: f.name})
	dict := int64(0)
	for range 4 {
		if ch.off >= ch.end {
			return p
		}
		h, err := ch.header()
		if err != nil {
			return p
		}
		switch h.typ {
		case pageDictionary:
			dict = 2 * int64(h.uncompressed)
		case pageData, pageDataV2:
			decoded := max(int64(h.uncompressed), 4*int64(h.values))
			return probed{int64(h.compressed) + int64(h.uncompressed) + decoded + dict, int64(h.values)}
		}
		ch.off += int64(h.compressed)
	}
	return p
}
