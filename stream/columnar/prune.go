package columnar

import (
	"context"
	"fmt"
	"io"
	"strings"

	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// Which statistics of the footer are believed:
//
//   - min_value and max_value where the footer says that they follow the order of
//     the type, or says nothing and the order is the signed one;
//   - the older min and max for signed numbers, booleans and times alone: for text
//     and unsigned numbers writers disagreed on their order;
//   - none where the lengths are wrong, the minimum is above the maximum, or one of
//     them is NaN;
//   - those of floats only of writers that are known to leave NaN, a missing cell
//     here, out of them: elsewhere a NaN may have hidden smaller and larger numbers
//     (parquet-go v0.32 does so in dictionaries). Whether a zero has a sign does not
//     matter to comparisons.
//
// Texts may be cut, the upper one to a larger one: they are bounds all the same.

// bounds of the stored values of a chunk; ok is false if there are none to be
// believed.
func (f *File) bounds(group int, c *column) (low, high []byte, ok bool) {
	st := &f.meta.RowGroups[group].Columns[c.leaf].Statistics
	signed := false
	switch c.conv {
	case convF16, convF32, convF64:
		if !f.floats {
			return nil, nil, false
		}
	}
	switch c.conv &^ convAsText {
	case convBool, convI32, convI64, convF32, convF64, convDec32, convDec64, convTime32, convTime64, convDate, convStamp:
		signed = true
	case convInt96:
		return nil, nil, false // its order was never settled
	}
	typeOrder := signed && len(f.meta.ColumnOrders) == 0
	if c.leaf < len(f.meta.ColumnOrders) {
		_, typeOrder = f.meta.ColumnOrders[c.leaf].Value.(*format.TypeDefinedOrder)
	}
	low, high = st.MinValue, st.MaxValue
	if len(low)+len(high) > 0 {
		ok = typeOrder
	} else if len(st.Min)+len(st.Max) > 0 {
		low, high, ok = st.Min, st.Max, signed
	}
	if !ok || c.width > 0 && (len(low) != c.width || len(high) != c.width) {
		return nil, nil, false
	}
	if c.conv&^convAsText == convBool && (len(low) != 1 || len(high) != 1 || low[0] > 1 || high[0] > 1) {
		return nil, nil, false
	}
	return low, high, true
}

// nanWriters are writers whose statistics of floats hold whatever NaN there are,
// with the version from which on.
var nanWriters = map[string][2]int{
	"tallrow":           {0, 0},
	"parquet-cpp-arrow": {0, 0},
	"parquet-mr":        {1, 10},
	"parquet-rs":        {30, 0},
	"DuckDB":            {1, 0},
	"Polars":            {0, 0},
}

// knowsNaN reports whether float statistics of the writer are believed: created is
// "NAME version 1.2.3 ...", or the name alone.
func knowsNaN(created string) bool {
	name, rest, _ := strings.Cut(created, " ")
	since, ok := nanWriters[name]
	if !ok || since == [2]int{} {
		return ok
	}
	var major, minor int
	if n, _ := fmt.Sscanf(rest, "version %d.%d", &major, &minor); n < 2 {
		if n, _ = fmt.Sscanf(rest, "version v%d.%d", &major, &minor); n < 2 {
			return false
		}
	}
	return major > since[0] || major == since[0] && minor >= since[1]
}

// cells bounds the cells of a column in a row group, as numbers or in its kind.
// sure tells that every cell fits its kind, so that no row is malformed.
func (f *File) cells(group int, c *column, asNumber bool) (r stream.Range, sure bool) {
	m := &f.meta.RowGroups[group].Columns[c.leaf]
	nulls := m.Statistics.NullCount
	r.AllMissing = c.maxDef > 0 && nulls == m.NumValues && nulls > 0
	switch c.conv {
	case convF16, convF32, convF64:
	default:
		r.NoneMissing = c.maxDef == 0
	}
	sure = r.AllMissing
	switch c.conv {
	case convDate, convInt96, convDecBytes:
	case convStamp:
		sure = sure || c.unit == 1
	case convDecFixed:
		sure = sure || c.width <= 128 // below 2^1023
	default:
		sure = true
	}
	low, high, ok := f.bounds(group, c)
	if !ok || c.conv&convAsText != 0 || nulls < 0 || nulls > m.NumValues {
		return r, sure
	}
	var v values
	switch {
	case c.conv == convText:
		r.Text = [2]string{string(low), string(high)}
		r.Bounded = r.Text[0] <= r.Text[1]
		return r, sure
	case c.conv == convBool:
		v.bools = []byte{low[0], high[0]}
	case c.width > 0:
		v = values{raw: append(append([]byte(nil), low...), high...), width: c.width}
	default:
		v = values{text: append(append([]byte(nil), low...), high...), off: []uint32{0, uint32(len(low)), uint32(len(low) + len(high))}}
	}
	var bad []int
	switch {
	case c.kind == stream.Text:
		r.Text = [2]string{string(c.appendText(nil, &v, 0)), string(c.appendText(nil, &v, 1))}
		r.Bounded = r.Text[0] <= r.Text[1]
		return r, sure
	case asNumber || c.kind == stream.Float64:
		bad = c.floats(r.F64[:], &v, 0, nil)
		r.Bounded = r.F64[0] <= r.F64[1] // not if one is NaN
	default:
		bad = c.ints(r.I64[:], &v, 0, nil)
		r.Bounded = r.I64[0] <= r.I64[1]
		if c.kind == stream.Uint64 {
			r.Bounded = uint64(r.I64[0]) <= uint64(r.I64[1])
		}
	}
	r.Bounded = r.Bounded && len(bad) == 0
	return r, sure || r.Bounded
}

// excludes reports whether the filter leaves no row of a group, and all would be
// counted as excluded. A column that may hold a cell that does not fit its kind
// keeps its group: such a row is an error, or counted as malformed.
func (f *File) excludes(group int, uses []stream.Use, where stream.Filter) bool {
	if f.meta.RowGroups[group].NumRows == 0 {
		return false
	}
	if !where(func(k int) stream.Range {
		r, _ := f.cells(group, &f.cols[uses[k].Column], uses[k].AsNumber)
		return r
	}) {
		return false
	}
	for _, u := range uses {
		if _, sure := f.cells(group, &f.cols[u.Column], u.AsNumber); !sure {
			return false
		}
	}
	return true
}

// excluded tells which row groups the filter excludes; nil if none.
func (f *File) excluded(uses []stream.Use, where stream.Filter) (out []bool) {
	if where == nil {
		return nil
	}
	for g := range f.meta.RowGroups {
		if f.excludes(g, uses, where) {
			if out == nil {
				out = make([]bool, len(f.meta.RowGroups))
			}
			out[g] = true
		}
	}
	return out
}

// wholly reports whether no row of the file is left.
func (f *File) wholly(out []bool) bool {
	for g := range out {
		if !out[g] && f.meta.RowGroups[g].NumRows > 0 {
			return false
		}
	}
	return out != nil
}

// Unread implements stream.Pruner.
func (f *File) Unread(_ context.Context, uses []stream.Use, where stream.Filter) (u stream.Unread, err error) {
	if err := f.checkUses(uses); err != nil {
		return u, err
	}
	out := f.excluded(uses, where)
	for i, p := range f.parts {
		if out != nil && out[p.group] {
			t := unreadPart{f, i, 0}.Tally()
			u.Add(stream.Unread{Segments: 1, Rows: t.Rows, Bytes: t.Bytes})
		}
	}
	if f.wholly(out) {
		u.Files = 1
	}
	return u, nil
}

// unreadPart is a segment that is not read.
type unreadPart struct {
	f      *File
	number int
	files  int64
}

func (s unreadPart) Number() int { return s.number }

func (s unreadPart) Read(b *stream.Batch) error {
	b.Rows = 0
	return io.EOF
}

func (s unreadPart) Locate(mark int64) stream.Position { return s.f.locate(mark) }

func (s unreadPart) Tally() stream.SegmentTally {
	p := s.f.parts[s.number]
	return stream.SegmentTally{Rows: p.rows, Excluded: p.rows, Bytes: s.f.partBytes(s.number, p.rows), Files: s.files}
}

func (s unreadPart) Close() error { return nil }

// passOver moves a sample behind the next batch if that lies in excluded groups.
func (s *segment) passOver() bool {
	groups := s.f.meta.RowGroups
	row := s.f.first[s.group] + s.from
	if s.open {
		row = s.row
	}
	n := min(stream.BatchRows, s.rows)
	if s.where == nil || n == 0 {
		return false
	}
	g := s.group
	for ; g < s.last && s.f.first[g] < row+n; g++ {
		if s.f.first[g]+groups[g].NumRows > row && !s.f.excludes(g, s.uses, s.where) {
			return false
		}
	}
	s.rows -= n
	row += n
	s.open, s.left, s.group = false, 0, min(g, s.last-1)
	if s.group > 0 && s.f.first[s.group] > row {
		s.group--
	}
	s.from = row - s.f.first[s.group]
	s.tally.Rows += n
	s.tally.Excluded += n
	return true
}
