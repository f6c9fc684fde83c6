package delimited

import (
	"hash/maphash"
	"math"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// column is the output of one stream.Use.
type column struct {
	schema *stream.Column
	number bool        // Use.AsNumber
	kind   stream.Kind // of the vector

	f64  []float64
	i64  []int64
	code []int32
	null []bool
	// holes is true when a cell of this batch was missing.
	holes bool
	text  interner
}

func newColumn(c *stream.Column, asNumber bool) *column {
	o := &column{schema: c, number: asNumber, kind: c.Kind}
	if asNumber {
		o.kind = stream.Float64
	}
	switch o.kind {
	case stream.Float64:
		o.f64 = make([]float64, stream.BatchRows)
	case stream.Text:
		o.code = make([]int32, stream.BatchRows)
		o.text.start()
	default:
		o.i64 = make([]int64, stream.BatchRows)
		o.null = make([]bool, stream.BatchRows)
	}
	return o
}

// begin prepares for a batch.
func (o *column) begin() {
	if o.holes {
		clear(o.null)
		o.holes = false
	}
	if o.kind == stream.Text {
		o.text.limit()
	}
}

// vector returns the first n cells.
func (o *column) vector(n int) stream.Vector {
	v := stream.Vector{Kind: o.kind}
	switch o.kind {
	case stream.Float64:
		v.F64 = o.f64[:n]
	case stream.Text:
		v.Code = o.code[:n]
		v.Dict = o.text.dict
	default:
		v.I64 = o.i64[:n]
		if o.holes {
			for _, missing := range o.null[:n] {
				if missing {
					v.Null = o.null[:n]
					break
				}
			}
		}
	}
	return v
}

func (o *column) setInt(r int, v int64) {
	o.i64[r] = v
	if o.holes {
		o.null[r] = false
	}
}

func (o *column) setMissing(r int) {
	switch o.kind {
	case stream.Float64:
		o.f64[r] = math.NaN()
	case stream.Text:
		o.code[r] = -1
	default:
		o.i64[r] = 0
		o.null[r] = true
		o.holes = true
	}
}

// store reads a cell into row r.
func (o *column) store(r int, cell []byte, quoted bool, rules *rules) scan.Status {
	if o.kind == stream.Text {
		if !quoted && rules.missing(cell) {
			o.code[r] = -1
		} else {
			o.code[r] = o.text.intern(cell)
		}
		return scan.OK
	}
	cell = trim(cell)
	if !quoted && rules.missing(cell) {
		o.setMissing(r)
		return scan.OK
	}
	if o.kind != stream.Float64 && isNaN(cell) {
		o.setMissing(r)
		return scan.OK
	}
	status := scan.OK
	switch o.schema.Kind {
	case stream.Bool:
		v, ok := parseBool(cell)
		if !ok {
			return scan.Syntax
		}
		var n int64
		if v {
			n = 1
		}
		if o.number {
			o.f64[r] = float64(n)
		} else {
			o.setInt(r, n)
		}
	case stream.Time:
		ns, zoned, dateOnly, ok := parseTime(cell)
		if !ok || zoned != o.schema.Zoned || (o.schema.DateOnly && !dateOnly) {
			return scan.Syntax
		}
		o.setInt(r, ns)
	default:
		if o.kind == stream.Float64 {
			o.f64[r], status = scan.ParseFloat(cell, rules.point)
			break
		}
		var v int64
		if o.kind == stream.Int64 {
			v, status = scan.ParseInt(cell)
		} else {
			var u uint64
			u, status = scan.ParseUint(cell)
			v = int64(u)
		}
		o.setInt(r, v)
	}
	return status
}

const (
	maxDict      = 65536
	maxDictBytes = 4 << 20
)

// interner gives equal cells of a text column equal codes.
type interner struct {
	dict  *stream.Dict
	seed  maphash.Seed
	slots []int32 // code + 1, found by hash; 0 is free
	last  int32
	bytes int
	chunk strings.Builder // holds the bytes of many values
}

func (t *interner) start() {
	if t.slots == nil {
		t.seed = maphash.MakeSeed()
		t.slots = make([]int32, 128)
	} else {
		clear(t.slots)
	}
	t.dict = &stream.Dict{}
	t.last = -1
	t.bytes = 0
}

// limit begins a new dictionary when the old one could overflow in this batch.
func (t *interner) limit() {
	if len(t.dict.Values)+stream.BatchRows > maxDict || t.bytes > maxDictBytes {
		t.start()
	}
}

func (t *interner) intern(cell []byte) int32 {
	values := t.dict.Values
	if t.last >= 0 && values[t.last] == string(cell) {
		return t.last
	}
	mask := uint64(len(t.slots) - 1)
	h := maphash.Bytes(t.seed, cell) & mask
	for ; t.slots[h] != 0; h = (h + 1) & mask {
		if c := t.slots[h] - 1; values[c] == string(cell) {
			t.last = c
			return c
		}
	}
	c := int32(len(values))
	t.dict.Values = append(values, t.keep(cell))
	t.slots[h] = c + 1
	t.last = c
	if 2*len(t.dict.Values) > len(t.slots) {
		t.grow()
	}
	return c
}

// keep copies a cell into a chunk shared by many values.
func (t *interner) keep(cell []byte) string {
	t.bytes += len(cell)
	if t.chunk.Cap()-t.chunk.Len() < len(cell) {
		t.chunk = strings.Builder{}
		t.chunk.Grow(max(min(1<<16, 256+2*t.bytes), len(cell)))
	}
	from := t.chunk.Len()
	t.chunk.Write(cell)
	return t.chunk.String()[from:]
}

func (t *interner) grow() {
	t.slots = make([]int32, 2*len(t.slots))
	mask := uint64(len(t.slots) - 1)
	for c, v := range t.dict.Values {
		h := maphash.String(t.seed, v) & mask
		for t.slots[h] != 0 {
			h = (h + 1) & mask
		}
		t.slots[h] = int32(c) + 1
	}
}
