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
					pages := g.ColumnChunks()[j].Pages()
					for {
						p, err := pages.ReadPage()
						if err == io.EOF {
							break
						}
						if err != nil {
							b.Fatal(err)
						}
						parquet.Release(p)
					}
					pages.Close()
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows, "ns/row")
		})
	}
	b.Run("column=all/impl=batches", func(b *testing.B) { read(b, allUses(f)) })
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
