// Package streamtest holds the laws that every stream.Source obeys, as a test
// suite for readers inside and outside this module.
package streamtest

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// Table is what a source must deliver.
type Table struct {
	// Schema is compared whole.
	Schema stream.Schema
	// Cols holds all rows of each column of Schema, in the kinds of Schema.
	Cols []stream.Vector
	// Files are the inputs in order, with the number of rows of each; a position
	// must name the file of its row.
	Files []File
	// Malformed is the number of rows that the source passes over (SkipBad).
	Malformed int64
}

// File is a part of the rows of a Table.
type File struct {
	Name string
	Rows int
}

// Rows returns the number of rows of the table.
func (t *Table) Rows() int {
	n := 0
	for _, f := range t.Files {
		n += f.Rows
	}
	return n
}

// fileOf returns the name of the file with that row and the row's number in it,
// from 1.
func (t *Table) fileOf(row int) (string, int64) {
	for _, f := range t.Files {
		if row < f.Rows {
			return f.Name, int64(row) + 1
		}
		row -= f.Rows
	}
	return "", 0
}

// want returns the cells of one row as asked by uses.
func (t *Table) want(uses []stream.Use, row int) string {
	var b strings.Builder
	for _, u := range uses {
		b.WriteString(cell(&t.Cols[u.Column], row, u.AsNumber))
		b.WriteByte('|')
	}
	return b.String()
}

// cell writes one cell so that equal cells have equal texts: numbers by their
// shortest text, which tells all of them apart, every missing cell as "missing". With number set the cell is converted
// to float64 first.
func cell(v *stream.Vector, i int, number bool) string {
	float := func(x float64) string {
		if math.IsNaN(x) {
			return "missing"
		}
		return "float64 " + strconv.FormatFloat(x, 'g', -1, 64)
	}
	switch v.Kind {
	case stream.Float64:
		return float(v.F64[i])
	case stream.Text:
		if v.Code[i] == -1 {
			return "missing"
		}
		return "text " + strconv.Quote(v.Dict.Values[v.Code[i]])
	}
	if v.Null != nil && v.Null[i] {
		return "missing"
	}
	switch {
	case number && v.Kind == stream.Uint64:
		return float(float64(uint64(v.I64[i])))
	case number:
		return float(float64(v.I64[i]))
	case v.Kind == stream.Uint64:
		return "uint64 " + strconv.FormatUint(uint64(v.I64[i]), 10)
	}
	return v.Kind.String() + " " + strconv.FormatInt(v.I64[i], 10)
}

// checkBatch returns what is wrong with the shape of a batch, or "".
func checkBatch(b *stream.Batch, schema *stream.Schema, uses []stream.Use) string {
	if b.Rows < 1 || b.Rows > stream.BatchRows {
		return fmt.Sprintf("batch of %d rows", b.Rows)
	}
	if len(b.Cols) != len(uses) {
		return fmt.Sprintf("batch of %d columns, asked for %d", len(b.Cols), len(uses))
	}
	if len(b.Marks) != b.Rows {
		return fmt.Sprintf("%d marks for %d rows", len(b.Marks), b.Rows)
	}
	for j, u := range uses {
		c, v := &schema.Columns[u.Column], &b.Cols[j]
		kind := c.Kind
		if u.AsNumber {
			kind = stream.Float64
		}
		if v.Kind != kind {
			return fmt.Sprintf("column %s: vector of kind %s, want %s", c.Name, v.Kind, kind)
		}
		var n int
		switch kind {
		case stream.Float64:
			n = len(v.F64)
		case stream.Text:
			n = len(v.Code)
			for i, code := range v.Code {
				if code < -1 || code >= 0 && (v.Dict == nil || int(code) >= len(v.Dict.Values)) {
					return fmt.Sprintf("column %s: row %d has code %d outside the dictionary", c.Name, i, code)
				}
			}
		default:
			n = len(v.I64)
			if v.Null != nil && len(v.Null) != b.Rows {
				return fmt.Sprintf("column %s: %d null marks for %d rows", c.Name, len(v.Null), b.Rows)
			}
		}
		if n != b.Rows {
			return fmt.Sprintf("column %s: %d cells for %d rows", c.Name, n, b.Rows)
		}
	}
	return ""
}

// rows returns the cells of a batch, row by row.
func rows(b *stream.Batch) []string {
	out := make([]string, b.Rows)
	var s strings.Builder
	for i := range out {
		s.Reset()
		for j := range b.Cols {
			s.WriteString(cell(&b.Cols[j], i, false))
			s.WriteByte('|')
		}
		out[i] = s.String()
	}
	return out
}
