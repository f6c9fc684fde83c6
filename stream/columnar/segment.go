package columnar

import (
	"bytes"
	"cmp"
	"fmt"
	"io"
	"math"
	"runtime/debug"
	"slices"

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
	text    textState
	tmp     []byte
}

// badCell is a cell that does not fit, in row row of the batch.
type badCell struct {
	row, reader int
	found       string
}

// segment reads one row group, or from a row on to the end of the file.
type segment struct {
	f       *File
	number  int
	group   int // being read
	last    int // after which no more are read
	left    int64
	row     int64 // next row of the file
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
	done  int64 // rows of the group that are read
	err   error
}

func (f *File) newSegment(uses []stream.Use, number, group, last int) *segment {
	s := &segment{f: f, number: number, group: group, last: last, at: -1, readers: make([]reader, len(uses)), marks: make([]int64, stream.BatchRows)}
	for j, u := range uses {
		r := &s.readers[j]
		c := &f.cols[u.Column]
		r.col = c
		r.kind = c.kind
		if u.AsNumber {
			r.kind = stream.Float64
		}
		switch r.kind {
		case stream.Float64:
			r.asFloat = true
			r.f64 = make([]float64, stream.BatchRows)
		case stream.Text:
			r.codes = make([]int32, stream.BatchRows)
		default:
			r.i64 = make([]int64, stream.BatchRows)
		}
	}
	return s
}

// openGroup points the readers at the group and passes over its first rows.
func (s *segment) openGroup(skip int64) error {
	rg := &s.f.meta.RowGroups[s.group]
	s.left, s.done = rg.NumRows-skip, skip
	s.row = s.f.first[s.group] + skip
	for j := range s.readers {
		s.at = j
		r := &s.readers[j]
		r.open(s.f.file, r.col, &rg.Columns[r.col.leaf].MetaData, rg.NumRows, stream.Position{File: s.f.name, Group: s.group + 1})
		if err := r.skip(skip); err != nil {
			return err
		}
	}
	s.at = -1
	return nil
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
	}
	rows := 0
	for rows < stream.BatchRows {
		for s.left == 0 {
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
			if err := s.openGroup(0); err != nil {
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
		s.done += int64(n)
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

// finishGroup checks that the chunks end with the rows of the group.
func (s *segment) finishGroup() error {
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
	var bad []int
	switch {
	case r.asFloat:
		dst := r.f64[at : at+m]
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
		r.tmp = r.text.codes(dst, &r.chunk, p.val, at == 0, r.tmp)
		if def != nil {
			spreadCodes(r.codes[at:at+m], &s.packed.codes, def, r.col.maxDef)
		}
	default:
		dst := r.i64[at : at+m]
		if def != nil {
			dst = s.packed.i64[:present]
		}
		bad = r.integers(dst)
		if def != nil {
			if !r.hasNull {
				r.null = grow(r.null, stream.BatchRows)
				clear(r.null)
				r.hasNull = true
			}
			spreadInts(r.i64[at:at+m], r.null[at:at+m], &s.packed.i64, def, r.col.maxDef)
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
	for i, k := range idx {
		dst[i] = table[k]
	}
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
	for i, k := range idx {
		dst[i] = table[k]
	}
	return r.dict.badOf(idx)
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
func (s *segment) Locate(mark int64) stream.Position {
	g, _ := slices.BinarySearch(s.f.first, mark+1)
	return stream.Position{File: s.f.name, Group: g, Row: mark + 1}
}

// Tally implements stream.Segment. Bytes is the group's share of the file, by
// the rows read.
func (s *segment) Tally() stream.SegmentTally {
	t := s.tally
	if s.number >= 0 {
		share := s.f.share(s.group)
		if rows := s.f.meta.RowGroups[s.group].NumRows; rows > 0 {
			share = mulDiv(share, s.done, rows)
		}
		t.Bytes = share
	}
	return t
}

// Close implements stream.Segment.
func (s *segment) Close() error {
	if s.err == nil {
		s.err = fmt.Errorf("%s: read after Close", s.f.name)
	}
	for j := range s.readers {
		s.readers[j].chunk = chunk{col: s.readers[j].col}
	}
	return nil
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
