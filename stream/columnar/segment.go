package columnar

import (
	"bytes"
	"cmp"
	"fmt"
	"io"
	"math"
	"runtime/debug"
	"slices"
	"sync"
	"unsafe"

	"github.com/tallrow/tallrow/stream"
)

// reader fills one vector of the batches.
type reader struct {
	chunk
	asFloat bool
	kind    stream.Kind
	f64     []float64
	i64     []int64
	codes   []int32
	null    []bool
	hasNull bool
	// view is the batch's cells where they lie in the page as they are to be
	// delivered, in place of f64; it holds until the page goes.
	view []float64
	text textState
	tmp  []byte
}

// badCell is a cell that does not fit, in row row of the batch.
type badCell struct {
	row, reader int
	found       string
}

// segment reads one part, or from a row on to the end of the file.
type segment struct {
	f       *File
	number  int
	group   int           // being read
	last    int           // before which the segment ends
	from    int64         // row of the first group at which it begins
	rows    int64         // that are still to be read, in all
	left    int64         // of these in the group that is open
	open    bool          // the readers are at the group
	row     int64         // next row of the file
	uses    []stream.Use  // of a sample
	where   stream.Filter // of a sample, nil for none
	readers []reader
	at      int // reader at work, for messages; -1 none
	marks   []int64
	bad     []badCell
	packed  struct {
		f64   [stream.BatchRows + 1]float64
		i64   [stream.BatchRows + 1]int64
		codes [stream.BatchRows + 1]int32
	}
	tally stream.SegmentTally
	err   error
}

// readerPool keeps the buffers of closed segments, as *[]reader: a page of each
// column is much to allocate anew for every row group.
var readerPool sync.Pool

func (f *File) newSegment(uses []stream.Use, number, group, last int) *segment {
	s := &segment{f: f, number: number, group: group, last: last, at: -1, marks: make([]int64, stream.BatchRows)}
	if old, ok := readerPool.Get().(*[]reader); ok && len(*old) == len(uses) {
		s.readers = *old
	} else {
		s.readers = make([]reader, len(uses))
	}
	for j, u := range uses {
		r := &s.readers[j]
		c := &f.cols[u.Column]
		r.col = c
		r.kind = c.kind
		if u.AsNumber {
			r.kind = stream.Float64
		}
		r.asFloat = r.kind == stream.Float64
		switch r.kind {
		case stream.Float64:
			r.f64 = grow(r.f64, stream.BatchRows)
			r.codes = nil
		case stream.Text:
			r.codes = grow(r.codes, stream.BatchRows)
		default:
			r.i64 = grow(r.i64, stream.BatchRows)
			r.codes = nil
		}
	}
	return s
}

// openGroup points the readers at row s.from of the group. Columns whose page is
// being decoded by another segment are left for the end; the error is that of the
// first column, whatever the order.
func (s *segment) openGroup() error {
	rg := &s.f.meta.RowGroups[s.group]
	s.left = min(rg.NumRows-s.from, s.rows)
	s.row = s.f.first[s.group] + s.from
	s.open = true
	for j := range s.readers {
		r := &s.readers[j]
		r.open(s.f.file, r.col, &rg.Columns[r.col.leaf], rg.NumRows, stream.Position{File: s.f.name, Group: s.group + 1})
		if rg.NumRows > hugeRows {
			r.group, r.pages = s.group, &s.f.pages
		}
	}
	errs := make([]error, len(s.readers))
	for _, wait := range []bool{false, true} {
		for j := range s.readers {
			if wait && errs[j] != errBusy {
				continue
			}
			errs[j] = s.seek(j, wait)
		}
	}
	for j, err := range errs {
		if s.at = j; err != nil {
			return err
		}
	}
	s.at = -1
	return nil
}

// seek points a reader at row s.from of the group.
func (s *segment) seek(j int, wait bool) (err error) {
	s.at = j
	defer s.guard(&err)
	r := &s.readers[j]
	return r.seek(s.from, s.f.walkOf(s.group, r.col.leaf), wait)
}

// guard turns a panic of the decoders into an error. The library is known to
// panic on some malformed input; what it panics with is part of the message.
func (s *segment) guard(err *error) {
	p := recover()
	if p == nil {
		return
	}
	pos := stream.Position{File: s.f.name, Group: s.group + 1}
	if s.at >= 0 {
		pos.Column = s.readers[s.at].col.name
	}
	if tracePanics {
		debug.PrintStack()
	}
	*err = damage(pos, "its values cannot be decoded: %v", p)
}

// tracePanics is for tests.
var tracePanics = false

func (s *segment) Number() int { return s.number }

// Read implements stream.Segment.
func (s *segment) Read(b *stream.Batch) error {
	if s.err == nil {
		s.err = s.read(b)
	}
	if s.err != nil {
		b.Rows = 0
		return s.err
	}
	return nil
}

func (s *segment) read(b *stream.Batch) (err error) {
	defer s.guard(&err)
	for j := range s.readers {
		s.readers[j].hasNull = false
		s.readers[j].view = nil
	}
	if s.passOver() {
		b.Rows = 0
		return nil
	}
	rows := 0
	for rows < stream.BatchRows {
		if rows > 0 {
			s.settle()
		}
		for s.left == 0 {
			if s.rows == 0 && !s.open && s.tally.Excluded > 0 {
				return io.EOF // passed over to the end
			}
			if s.open {
				if err := s.finishGroup(); err != nil {
					return err
				}
				if s.group+1 >= s.last {
					if rows > 0 {
						return s.deliver(b, rows)
					}
					return io.EOF
				}
				s.group++
				s.from = 0
			}
			if err := s.openGroup(); err != nil {
				return err
			}
		}
		n := int(min(int64(stream.BatchRows-rows), s.left))
		s.bad = s.bad[:0]
		for j := range s.readers {
			s.at = j
			if err := s.fill(j, rows, n); err != nil {
				return err
			}
		}
		s.at = -1
		for i := range n {
			s.marks[rows+i] = s.row + int64(i)
		}
		s.row += int64(n)
		s.left -= int64(n)
		s.rows -= int64(n)
		kept := n
		if len(s.bad) > 0 {
			if kept, err = s.dropBad(rows, n); err != nil {
				return err
			}
		}
		rows += kept
	}
	return s.deliver(b, rows)
}

// finishGroup checks that the chunks end with the rows of the group, if these are
// its last.
func (s *segment) finishGroup() error {
	if s.row < s.f.first[s.group]+s.f.meta.RowGroups[s.group].NumRows {
		return nil
	}
	for j := range s.readers {
		r := &s.readers[j]
		s.at = j
		if err := r.next(); err != io.EOF {
			if err == nil {
				err = r.damage("it has more rows than its row group")
			}
			return err
		}
	}
	s.at = -1
	return nil
}

func (s *segment) deliver(b *stream.Batch, rows int) error {
	b.Rows = rows
	b.Marks = s.marks[:rows]
	b.Cols = b.Cols[:0]
	for j := range s.readers {
		r := &s.readers[j]
		v := stream.Vector{Kind: r.kind}
		switch {
		case r.asFloat:
			v.F64 = r.f64[:rows]
			if r.view != nil {
				v.F64 = r.view[:rows:rows]
			}
		case r.codes != nil:
			v.Code, v.Dict = r.codes[:rows], r.text.dict
			if v.Dict == nil {
				r.text.restart(nil, r.col)
				v.Dict = r.text.dict
			}
		default:
			v.I64 = r.i64[:rows]
			if r.hasNull {
				v.Null = r.null[:rows]
			}
		}
		b.Cols = append(b.Cols, v)
	}
	s.tally.Rows += int64(rows)
	return nil
}

// fill reads n cells of column j to rows at..at+n of the batch.
func (s *segment) fill(j, at, n int) error {
	r := &s.readers[j]
	for n > 0 {
		p := &r.page
		if p.row == p.rows {
			if err := r.next(); err != nil {
				if err == io.EOF {
					err = r.damage("its pages end %d rows before the row group", s.left)
				}
				return err
			}
		}
		m := min(n, p.rows-p.row)
		if at == 0 && m == n && r.lookAt(m) {
			return nil
		}
		before := len(s.bad)
		s.block(j, at, m)
		for i := range s.bad[before:] {
			s.bad[before+i].reader = j
		}
		at += m
		n -= m
	}
	return nil
}

// lookAt makes the next m rows of a page of plain numbers the view. It reports false
// where they have to be copied.
func (r *reader) lookAt(m int) bool {
	p := &r.page
	if !r.asFloat || r.col.conv != convF64 || p.idx != nil || p.def != nil || !littleEndian {
		return false
	}
	raw := p.raw[8*p.val : 8*(p.val+m)]
	if uintptr(unsafe.Pointer(&raw[0]))%unsafe.Alignof(float64(0)) != 0 {
		return false
	}
	r.view = unsafe.Slice((*float64)(unsafe.Pointer(&raw[0])), m)
	p.row += m
	p.val += m
	return true
}

// settle copies views, before their pages go or rows move.
func (s *segment) settle() {
	for j := range s.readers {
		if r := &s.readers[j]; r.view != nil {
			copy(r.f64, r.view)
			r.view = nil
		}
	}
}

// block converts m rows of the present page to rows at..at+m.
func (s *segment) block(j, at, m int) {
	r := &s.readers[j]
	p := &r.page
	var def []byte
	present := m
	if p.def != nil {
		def = p.def[p.row : p.row+m]
		if present = bytes.Count(def, []byte{r.col.maxDef}); present == m {
			def = nil
		}
	}
	// Levels of 0 and 1 are searched, others looked at one by one.
	few := def != nil && r.col.maxDef == 1 && m-present <= m/fewNulls
	var bad []int
	switch {
	case r.asFloat:
		dst := r.f64[at : at+m]
		if def != nil && few {
			bad = r.numbers(dst[:present])
			spreadRuns(dst, present, def, math.NaN())
			break
		}
		if def != nil {
			dst = s.packed.f64[:present]
		}
		bad = r.numbers(dst)
		if def != nil {
			spreadFloats(r.f64[at:at+m], &s.packed.f64, def, r.col.maxDef)
		}
	case r.codes != nil:
		dst := r.codes[at : at+m]
		if def != nil {
			dst = s.packed.codes[:present]
		}
		if few {
			dst = r.codes[at : at+present]
		}
		r.tmp = r.text.codes(dst, &r.chunk, p.val, at == 0, r.tmp)
		if few {
			spreadRuns(r.codes[at:at+m], present, def, -1)
		} else if def != nil {
			spreadCodes(r.codes[at:at+m], &s.packed.codes, def, r.col.maxDef)
		}
	default:
		dst := r.i64[at : at+m]
		if few {
			dst = dst[:present]
		} else if def != nil {
			dst = s.packed.i64[:present]
		}
		bad = r.integers(dst)
		if def != nil {
			if !r.hasNull {
				r.null = grow(r.null, stream.BatchRows)
				clear(r.null)
				r.hasNull = true
			}
			if few {
				spreadRuns(r.i64[at:at+m], present, def, 0)
				for i, d := range def {
					r.null[at+i] = d == 0
				}
			} else {
				spreadInts(r.i64[at:at+m], r.null[at:at+m], &s.packed.i64, def, r.col.maxDef)
			}
		} else if r.hasNull {
			clear(r.null[at : at+m])
		}
	}
	for _, k := range bad {
		s.addBad(r, at, k, def)
	}
	p.row += m
	p.val += present
}

// numbers converts the next len(dst) values.
func (r *reader) numbers(dst []float64) []int {
	p := &r.page
	if p.idx == nil {
		return r.col.floats(dst, &p.values, p.val, nil)
	}
	table := r.dict.asFloats(r.col)
	idx := p.idx[p.val : p.val+len(dst)]
	lookUp(dst, table, idx)
	return r.dict.badOf(idx)
}

// integers converts the next len(dst) values.
func (r *reader) integers(dst []int64) []int {
	p := &r.page
	if p.idx == nil {
		return r.col.ints(dst, &p.values, p.val, nil)
	}
	table := r.dict.asInts(r.col)
	idx := p.idx[p.val : p.val+len(dst)]
	lookUp(dst, table, idx)
	return r.dict.badOf(idx)
}

// lookUp translates indexes.
func lookUp[T float64 | int64](dst, table []T, idx []int32) {
	for len(idx) >= 4 && len(dst) >= 4 {
		i, d := (*[4]int32)(idx), (*[4]T)(dst)
		d[0], d[1], d[2], d[3] = table[i[0]], table[i[1]], table[i[2]], table[i[3]]
		idx, dst = idx[4:], dst[4:]
	}
	for i, k := range idx {
		dst[i] = table[k]
	}
}

// badOf lists the places of idx whose entries do not fit.
func (d *dictionary) badOf(idx []int32) (bad []int) {
	if len(d.bad) == 0 {
		return nil
	}
	for i, k := range idx {
		if d.bad[k] {
			bad = append(bad, i)
		}
	}
	return bad
}

// addBad records that value k of the block at row at does not fit.
func (s *segment) addBad(r *reader, at, k int, def []byte) {
	row := k
	for i, d := range def {
		if d == r.col.maxDef {
			if row == 0 {
				row = i
				break
			}
			row--
		}
	}
	p := &r.page
	v, i := &p.values, p.val+k
	if p.idx != nil {
		v, i = &r.dict.values, int(p.idx[i])
	}
	s.bad = append(s.bad, badCell{row: at + row, found: r.col.found(v, i)})
}

// dropBad takes the bad rows out of rows at..at+n, or gives the error of the
// first one. It returns how many rows are kept.
func (s *segment) dropBad(at, n int) (int, error) {
	s.settle()
	slices.SortStableFunc(s.bad, func(a, b badCell) int { return cmp.Compare(a.row, b.row) })
	drop := make([]bool, n)
	for _, c := range s.bad {
		if drop[c.row-at] {
			continue
		}
		drop[c.row-at] = true
		col := s.readers[c.reader].col
		pos := s.Locate(s.marks[c.row])
		pos.Column = col.name
		e := &stream.RowError{Pos: pos, Found: c.found, Want: col.wanted()}
		if !s.f.skipBad {
			return 0, e
		}
		s.tally.Rows++
		s.tally.Malformed++
		if len(s.tally.Problems) < stream.MaxProblems {
			s.tally.Problems = append(s.tally.Problems, e)
		}
	}
	kept := 0
	for i := range n {
		if drop[i] {
			continue
		}
		to, from := at+kept, at+i
		kept++
		if to == from {
			continue
		}
		s.marks[to] = s.marks[from]
		for j := range s.readers {
			r := &s.readers[j]
			switch {
			case r.asFloat:
				r.f64[to] = r.f64[from]
			case r.codes != nil:
				r.codes[to] = r.codes[from]
			default:
				r.i64[to] = r.i64[from]
				if r.hasNull {
					r.null[to] = r.null[from]
				}
			}
		}
	}
	return kept, nil
}

// Locate implements stream.Segment.
func (s *segment) Locate(mark int64) stream.Position { return s.f.locate(mark) }

func (f *File) locate(mark int64) stream.Position {
	g, _ := slices.BinarySearch(f.first, mark+1)
	return stream.Position{File: f.name, Group: g, Row: mark + 1}
}

// Tally implements stream.Segment.
func (s *segment) Tally() stream.SegmentTally {
	t := s.tally
	if s.number >= 0 {
		t.Bytes = s.f.partBytes(s.number, s.f.parts[s.number].rows-s.rows)
	}
	return t
}

// partBytes is the share of the file that the first rows of a part have in their
// group.
func (f *File) partBytes(number int, read int64) int64 {
	p := f.parts[number]
	share, rows := f.share(p.group), f.meta.RowGroups[p.group].NumRows
	if rows == 0 {
		return share
	}
	return mulDiv(share, p.first+read, rows) - mulDiv(share, p.first, rows)
}

// Close implements stream.Segment.
func (s *segment) Close() error {
	if s.err == nil {
		s.err = fmt.Errorf("%s: read after Close", s.f.name)
	}
	if s.readers != nil {
		for j := range s.readers {
			r := &s.readers[j]
			r.release()
			*r = reader{chunk: chunk{buf: r.buf}, f64: r.f64, i64: r.i64, codes: r.codes, null: r.null, tmp: r.tmp}
		}
		old := s.readers
		s.readers = nil
		readerPool.Put(&old)
	}
	return nil
}

// fewNulls: where at most one row in that many is missing, runs of values are
// moved as wholes.
const fewNulls = 24

// spreadRuns puts the values at the front of dst into the rows that have one, from
// the back, and null into the others. Levels are 0 or 1.
func spreadRuns[T float64 | int64 | int32](dst []T, present int, def []byte, null T) {
	end := len(dst)
	for end > present {
		i := bytes.LastIndexByte(def[:end], 0)
		n := end - i - 1
		copy(dst[i+1:end], dst[present-n:present])
		dst[i] = null
		present -= n
		end = i
	}
}

// The spread functions put packed values into the rows that have one and mark
// the others missing. Without a branch on the level: nulls at random would be
// mispredicted half of the time.

func spreadFloats(dst []float64, packed *[stream.BatchRows + 1]float64, def []byte, maxDef byte) {
	nan := math.Float64bits(math.NaN())
	k := 0
	for i, d := range def {
		m, p := present(d, maxDef)
		dst[i] = math.Float64frombits(math.Float64bits(packed[k])&m | nan&^m)
		k += p
	}
}

func spreadInts(dst []int64, null []bool, packed *[stream.BatchRows + 1]int64, def []byte, maxDef byte) {
	k := 0
	for i, d := range def {
		m, p := present(d, maxDef)
		dst[i] = packed[k] & int64(m)
		null[i] = d != maxDef
		k += p
	}
}

func spreadCodes(dst []int32, packed *[stream.BatchRows + 1]int32, def []byte, maxDef byte) {
	k := 0
	for i, d := range def {
		m, p := present(d, maxDef)
		dst[i] = packed[k]&int32(m) | ^int32(m)
		k += p
	}
}

// present returns all ones and 1 if the level says that there is a value, else
// zeros.
func present(d, maxDef byte) (mask uint64, one int) {
	// d <= maxDef <= 64, so the difference is negative exactly below the top.
	below := (int64(d) - int64(maxDef)) >> 63
	return ^uint64(below), int(1 + below)
}
