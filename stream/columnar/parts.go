package columnar

import (
	"errors"
	"slices"
	"sync"
)

// A row group of more than hugeRows rows is cut into parts of partRows rows, so
// that all workers have something to do. Variables for tests.
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

// cut makes the segments. They depend on the numbers of rows alone.
func (f *File) cut() {
	for g := range f.meta.RowGroups {
		rows := f.meta.RowGroups[g].NumRows
		step := rows
		if rows > hugeRows {
			step = partRows
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
// behind the row. w may be nil. With wait unset errBusy is returned if another
// segment is decoding the page of the row; then seek can be called again.
func (c *chunk) seek(row int64, w *walk, wait bool) error {
	if row == 0 {
		return nil
	}
	h, err := c.find(row, w)
	if err != nil || h.values == 0 {
		return err
	}
	before := c.rows - c.left
	if err := c.loadPage(&h, wait); err != nil {
		if err == errBusy {
			c.off -= h.size
		}
		return err
	}
	c.page.advance(int(row-before), c.col.maxDef)
	return nil
}

// find reads on to the header of the page in which a row lies. The header of no
// values says that the row is the first of the page that comes next.
func (c *chunk) find(row int64, w *walk) (pageHeader, error) {
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
					return pageHeader{}, err
				}
			}
		}
	}
	for {
		before := pageStart{c.off, c.rows - c.left}
		if before.row == row {
			if w != nil {
				w.add(before)
			}
			return pageHeader{}, nil
		}
		h, err := c.dataHeader()
		if err != nil {
			return h, err
		}
		if n := int64(h.values); before.row+n > row {
			if w != nil {
				w.add(before)
			}
			return h, nil
		} else {
			c.left -= n
			c.off += int64(h.compressed)
		}
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

// errBusy says that another segment is decoding a page.
var errBusy = errors.New("columnar: the page is being decoded")

// sharedPages are decoded pages that lie across cuts: some writers put millions of
// rows into one page, which all parts of a group then read. Those that nobody
// reads are kept until other pages of their column come, or the scan ends.
type sharedPages struct {
	mu   sync.Mutex
	list []*sharedPage
}

type sharedPage struct {
	group, leaf int
	off         int64
	refs        int // under sharedPages.mu

	mu     sync.Mutex // held while the page is decoded
	loaded bool
	page   page
}

// take returns the page at a place, perhaps not loaded yet.
func (s *sharedPages) take(group, leaf int, off int64) *sharedPage {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, p := range s.list {
		if p.group == group && p.leaf == leaf && p.off == off {
			p.refs++
			return p
		}
	}
	s.list = slices.DeleteFunc(s.list, func(p *sharedPage) bool { return p.refs == 0 && (p.group != group || p.leaf == leaf) })
	p := &sharedPage{group: group, leaf: leaf, off: off, refs: 1}
	s.list = append(s.list, p)
	return p
}

func (s *sharedPages) give(p *sharedPage) {
	s.mu.Lock()
	defer s.mu.Unlock()
	p.refs--
}

// clear forgets the pages that nobody reads.
func (s *sharedPages) clear() {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.list = slices.DeleteFunc(s.list, func(p *sharedPage) bool { return p.refs == 0 })
}

// release gives back the shared page that the chunk reads.
func (c *chunk) release() {
	if c.shared != nil {
		c.pages.give(c.shared)
		c.shared = nil
	}
}

// loadPage decodes the data page whose header was just read, or takes it from
// another part of the row group.
func (c *chunk) loadPage(h *pageHeader, wait bool) error {
	c.release()
	first := c.rows - c.left
	if c.pages == nil || first/partRows == (first+int64(h.values)-1)/partRows {
		return c.load(h)
	}
	s := c.pages.take(c.group, c.col.leaf, c.off)
	defer func() {
		if c.shared == nil {
			c.pages.give(s)
		}
	}()
	if wait {
		s.mu.Lock()
	} else if !s.mu.TryLock() {
		return errBusy
	}
	defer s.mu.Unlock()
	if !s.loaded {
		// With memory of its own.
		own := *c
		own.buf, own.win = chunkBuffers{}, nil
		if err := own.load(h); err != nil {
			return err
		}
		s.page, s.loaded = own.page, true
	}
	c.shared, c.page = s, s.page
	c.off += int64(h.compressed)
	c.left -= int64(h.values)
	return nil
}
