package delimited

import (
	"bytes"
	"encoding/binary"
	"math"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// column is the output of one stream.Use.
type column struct {
	schema *stream.Column
	at     int         // index in the schema
	number bool        // Use.AsNumber
	kind   stream.Kind // of the vector

	f64  []float64
	i64  []int64
	code []int32
	null []bool
	// holes is true when a cell of this batch was missing.
	holes bool
	text  interner
	day   dayMemo
}

func newColumn(schema *stream.Schema, u stream.Use) *column {
	c := &schema.Columns[u.Column]
	o := &column{schema: c, at: u.Column, number: u.AsNumber, kind: c.Kind}
	if u.AsNumber {
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

// read reads the column's cells in the first n rows of the index into the rows
// from r on. It returns n or the number of the first row with a misfit.
func (o *column) read(p *parser, r, n int) int {
	c := scan.Column{Text: p.text, Ends: p.index.Ends[o.at:], Stride: p.columns, Last: o.at == p.columns-1}
	if o.holes {
		clear(o.null[r : r+n]) // of rows that were read before, in vain
	}
	for k := 0; k < n; k++ {
		switch {
		case o.kind == stream.Text:
			k = o.texts(&c, k, o.code[r:r+n], p.rules)
		case o.schema.Kind == stream.Bool:
			k = o.bools(&c, k, r, n)
		case o.kind == stream.Float64:
			k = c.Floats(k, o.f64[r:r+n], p.rules.point)
		case o.kind == stream.Int64:
			k = c.Ints(k, o.i64[r:r+n])
		case o.kind == stream.Time:
			k = o.times(&c, k, o.i64[r:r+n])
		}
		if k == n {
			break
		}
		// A cell in another form.
		start, end := c.Cell(k)
		cell, quoted := p.text[start:end], false
		if end > start && cell[0] == '"' {
			cell, quoted = cell[1:len(cell)-1], true
			if bytes.IndexByte(cell, '"') >= 0 {
				p.scratch = p.scratch[:0]
				cell = p.undouble(cell)
			}
		}
		if o.store(r+k, cell, quoted, p.rules) != scan.OK {
			n = k
			break
		}
	}
	if p.rules.readable && o.kind != stream.Text {
		for k := range n {
			if start, end := c.Cell(k); p.rules.missing(p.text[start:end]) {
				o.setMissing(r + k)
			}
		}
	}
	return n
}

// bools reads true and false. It returns the row of the first cell that is
// written otherwise, or n.
func (o *column) bools(c *scan.Column, k, r, n int) int {
	text := c.Text[:len(c.Text)+scan.Pad]
	for ; k < n; k++ {
		start, end := c.Cell(k)
		length := end - start
		if uint(length-4) > 1 {
			return k
		}
		// Without a branch on the value: nobody can foresee it.
		w := (binary.LittleEndian.Uint64(text[start:start+8]) | blanks) << (64 - 8*length&63)
		if w != truths[length-4] {
			return k
		}
		v := 5 - length
		if o.number {
			o.f64[r+k] = float64(v)
		} else {
			o.i64[r+k] = int64(v)
		}
	}
	return k
}

// truths are the words true and false in the highest bytes, blanks makes upper
// case lower.
var truths = [2]uint64{
	binary.LittleEndian.Uint64([]byte("\x00\x00\x00\x00true")),
	binary.LittleEndian.Uint64([]byte("\x00\x00\x00false")),
}

const blanks = 0x2020202020202020

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
