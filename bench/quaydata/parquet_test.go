package quaydata

import (
	"bytes"
	"context"
	"errors"
	"io"
	"math"
	"testing"

	"github.com/parquet-go/parquet-go"

	"github.com/tallrow/tallrow/stream"
)

// The file is read back by the Parquet library's own row reader.
func TestParquetHoldsEveryCell(t *testing.T) {
	const rows = 130_000 // a full row group and a part of one
	d := mustNew(t, Config{Rows: rows, Quays: 5, Cranes: 50, Days: 3, Seed: 8})
	var buf bytes.Buffer
	var seen int64
	if err := d.WriteParquet(context.Background(), &buf, func(n int64) { seen = n }); err != nil {
		t.Fatal(err)
	}
	if seen != rows {
		t.Errorf("progress ended at %d", seen)
	}
	f, err := parquet.OpenFile(bytes.NewReader(buf.Bytes()), int64(buf.Len()))
	if err != nil {
		t.Fatal(err)
	}
	groups := f.RowGroups()
	if len(groups) != 2 || groups[0].NumRows() != groupRows {
		t.Fatalf("%d row groups", len(groups))
	}
	var b stream.Batch
	d.Fill(&b, 0, rows)
	at := 0
	buffer := make([]parquet.Row, 1000)
	for _, g := range groups {
		r := g.Rows()
		for {
			n, err := r.ReadRows(buffer)
			for _, row := range buffer[:n] {
				for j, v := range row {
					c := &b.Cols[j]
					ok := false
					switch {
					case c.Null != nil && c.Null[at], c.Kind == stream.Float64 && math.IsNaN(c.F64[at]):
						ok = v.IsNull()
					case v.IsNull():
					case c.Kind == stream.Float64:
						ok = v.Double() == c.F64[at]
					case c.Kind == stream.Bool:
						ok = v.Boolean() == (c.I64[at] == 1)
					case c.Kind == stream.Text:
						ok = string(v.ByteArray()) == c.Dict.Values[c.Code[at]]
					default:
						ok = v.Int64() == c.I64[at]
					}
					if !ok {
						t.Fatalf("row %d column %d: %v", at, j, v)
					}
				}
				at++
			}
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		r.Close()
	}
	if at != rows {
		t.Errorf("%d rows", at)
	}
}

func TestParquetStopsWhenToldTo(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	d := mustNew(t, Config{Rows: 1 << 40})
	if err := d.WriteParquet(ctx, discard{}, func(int64) { cancel() }); !errors.Is(err, context.Canceled) {
		t.Errorf("error %v", err)
	}
}

func BenchmarkWriteParquet(b *testing.B) {
	d := mustNew(b, Config{Rows: 500_000})
	for b.Loop() {
		if err := d.WriteParquet(context.Background(), discard{}, nil); err != nil {
			b.Fatal(err)
		}
	}
}
