package columnar

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"testing"

	"github.com/parquet-go/parquet-go"
	"github.com/tallrow/tallrow/stream"
)

// nineColumns are like a unit of real work: measures, small numbers, flags,
// a time and keys.
func nineColumns(rows int) ([]WriteColumn, []stream.Vector) {
	r := rand.New(rand.NewPCG(20, 1))
	cols := []WriteColumn{
		{Name: "minutes", Kind: stream.Float64}, {Name: "tonnes", Kind: stream.Float64, Optional: true},
		{Name: "pallets", Kind: stream.Int64}, {Name: "crew", Kind: stream.Int64, Optional: true},
		{Name: "wet", Kind: stream.Bool}, {Name: "night", Kind: stream.Bool},
		{Name: "t", Kind: stream.Time}, {Name: "barge", Kind: stream.Text}, {Name: "crane", Kind: stream.Int64},
	}
	vecs := make([]stream.Vector, len(cols))
	for j, c := range cols {
		v := &vecs[j]
		v.Kind = c.Kind
		v.F64, v.I64, v.Code, v.Null = make([]float64, rows), make([]int64, rows), make([]int32, rows), make([]bool, rows)
		v.Dict = &stream.Dict{Values: []string{"a", "b", "c", "d"}}
		for i := range rows {
			v.F64[i] = 30 + 10*r.NormFloat64()
			v.I64[i] = r.Int64N(2000)
			v.Code[i] = int32(r.IntN(4))
			if c.Optional && r.IntN(10) == 0 {
				v.F64[i], v.Null[i] = math.NaN(), true
			}
			switch {
			case c.Kind == stream.Time:
				v.I64[i] = int64(i) * 1e9
			case c.Kind == stream.Bool:
				v.I64[i] &= 1
			}
		}
	}
	return cols, vecs
}

func BenchmarkRead(b *testing.B) {
	const rows = 262144
	cols, vecs := nineColumns(rows)
	var buf bytes.Buffer
	w, err := NewWriter(&buf, cols, WriterOptions{})
	if err != nil {
		b.Fatal(err)
	}
	if err := w.WriteColumns(rows, vecs); err != nil {
		b.Fatal(err)
	}
	if err := w.Close(); err != nil {
		b.Fatal(err)
	}
	data := buf.Bytes()
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		b.Fatal(err)
	}
	lib, err := parquet.OpenFile(bytes.NewReader(data), int64(len(data)))
	if err != nil {
		b.Fatal(err)
	}
	ctx := context.Background()
	read := func(b *testing.B, uses []stream.Use) {
		b.SetBytes(8 * rows * int64(len(uses)))
		for b.Loop() {
			sc, err := f.Scan(ctx, uses)
			if err != nil {
				b.Fatal(err)
			}
			n := 0
			var batch stream.Batch
			for {
				seg, err := sc.Next(ctx)
				if err == io.EOF {
					break
				}
				for err == nil {
					if err = seg.Read(&batch); err == nil {
						n += batch.Rows
					}
				}
				if err != io.EOF {
					b.Fatal(err)
				}
			}
			if n != rows {
				b.Fatal(n)
			}
		}
		b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows, "ns/row")
	}
	for j, c := range cols {
		name := fmt.Sprintf("column=%s/impl=", c.Name)
		b.Run(name+"batches", func(b *testing.B) {
			read(b, []stream.Use{{Column: j, AsNumber: c.Kind.Numeric()}})
		})
		// The library's pages, decoded and thrown away: no batches are made.
		b.Run(name+"pages", func(b *testing.B) {
			b.SetBytes(8 * rows)
			for b.Loop() {
				for _, g := range lib.RowGroups() {
					readPages(b, g.ColumnChunks()[j])
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows, "ns/row")
		})
	}
	b.Run("column=all/impl=batches", func(b *testing.B) { read(b, allUses(f)) })
}

// decodeFile has six float64 and three int64 columns, pages of 256 KiB, snappy.
func decodeFile(b *testing.B, rows int, dict bool, nulls string) []byte {
	r := rand.New(rand.NewPCG(20, 2))
	root := orderedGroup{Group: parquet.Group{}}
	for j := range 9 {
		node := parquet.Leaf(parquet.DoubleType)
		if j > 5 {
			node = parquet.Leaf(parquet.Int64Type)
		}
		if dict {
			node = parquet.Encoded(node, &parquet.RLEDictionary)
		}
		if nulls != "required" {
			node = parquet.Optional(node)
		}
		name := fmt.Sprint("x", j)
		root.Group[name] = node
		root.order = append(root.order, name)
	}
	var buf bytes.Buffer
	w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root), parquet.Compression(&parquet.Snappy), parquet.DataPageStatistics(false))
	vals := make([]parquet.Value, 1024)
	for at := 0; at < rows; at += len(vals) {
		for j, cw := range w.ColumnWriters() {
			for i := range vals {
				x := r.NormFloat64()
				if dict {
					x = float64(r.IntN(1000)) / 7
				}
				vals[i] = parquet.DoubleValue(x)
				if j > 5 {
					vals[i] = parquet.Int64Value(int64(x * 1000))
				}
				switch {
				case nulls == "required":
				case nulls == "few" && r.IntN(1000) == 0 || nulls == "tenth" && r.IntN(10) == 0:
					vals[i] = parquet.NullValue().Level(0, 0, j)
				default:
					vals[i] = vals[i].Level(0, 1, j)
				}
			}
			if _, err := cw.WriteRowValues(vals); err != nil {
				b.Fatal(err)
			}
		}
		if (at+len(vals))%131072 == 0 {
			if err := w.Flush(); err != nil {
				b.Fatal(err)
			}
		}
	}
	if err := w.Close(); err != nil {
		b.Fatal(err)
	}
	return buf.Bytes()
}

// Batches of nine numeric columns, beside the library's pages, decoded (of
// dictionaries only the indexes, of optional columns only the values that are
// there) and thrown away.
func BenchmarkDecode(b *testing.B) {
	const rows = 1 << 19
	ctx := context.Background()
	for _, enc := range []string{"plain", "dictionary"} {
		for _, nulls := range []string{"required", "none", "few", "tenth"} {
			data := decodeFile(b, rows, enc == "dictionary", nulls)
			name := fmt.Sprintf("encoding=%s/nulls=%s/impl=", enc, nulls)
			perCell := func(b *testing.B) {
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows/9, "ns/cell")
			}
			b.Run(name+"batches", func(b *testing.B) {
				f, err := openBytes(data, stream.Options{})
				if err != nil {
					b.Fatal(err)
				}
				uses := allUses(f)
				for j := range uses {
					uses[j].AsNumber = true
				}
				b.SetBytes(8 * rows * 9)
				var batch stream.Batch
				for b.Loop() {
					sc, err := f.Scan(ctx, uses)
					if err != nil {
						b.Fatal(err)
					}
					for {
						seg, err := sc.Next(ctx)
						if err == io.EOF {
							break
						}
						for err == nil {
							err = seg.Read(&batch)
						}
						if err != io.EOF {
							b.Fatal(err)
						}
						seg.Close()
					}
				}
				perCell(b)
			})
			b.Run(name+"pages", func(b *testing.B) {
				lib, err := parquet.OpenFile(bytes.NewReader(data), int64(len(data)))
				if err != nil {
					b.Fatal(err)
				}
				b.SetBytes(8 * rows * 9)
				for b.Loop() {
					for _, g := range lib.RowGroups() {
						for _, c := range g.ColumnChunks() {
							readPages(b, c)
						}
					}
				}
				perCell(b)
			})
		}
	}
}

// readPages decodes the pages of a chunk with the library.
func readPages(b *testing.B, c parquet.ColumnChunk) {
	pages := c.Pages()
	defer pages.Close()
	for {
		p, err := pages.ReadPage()
		if err == io.EOF {
			return
		}
		if err != nil {
			b.Fatal(err)
		}
		p.Data()
		parquet.Release(p)
	}
}

func BenchmarkWrite(b *testing.B) {
	const rows = 131072
	cols, vecs := nineColumns(rows)
	for _, codec := range []string{"none", "snappy", "zstd"} {
		b.Run("codec="+codec, func(b *testing.B) {
			b.SetBytes(8 * rows * int64(len(cols)))
			for b.Loop() {
				w, err := NewWriter(io.Discard, cols, WriterOptions{Codec: codec})
				if err != nil {
					b.Fatal(err)
				}
				if err := w.WriteColumns(rows, vecs); err != nil {
					b.Fatal(err)
				}
				if err := w.Close(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}
