package quaydata

import (
	"bytes"
	"context"
	"encoding/csv"
	"errors"
	"math"
	"strconv"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// The text is read back with encoding/csv and strconv and must give every cell.
func TestCSVHoldsEveryCell(t *testing.T) {
	d := mustNew(t, Config{Rows: 20_000, Quays: 5, Cranes: 50, Days: 3, Seed: 8})
	var buf bytes.Buffer
	var seen int64
	if err := d.WriteCSV(context.Background(), &buf, func(n int64) { seen = n }); err != nil {
		t.Fatal(err)
	}
	if seen != 20_000 {
		t.Errorf("progress ended at %d", seen)
	}
	recs, err := csv.NewReader(&buf).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(recs) != 20_001 {
		t.Fatalf("%d lines", len(recs))
	}
	cols := d.Schema().Columns
	var b stream.Batch
	d.Fill(&b, 0, 20_000)
	empty := 0
	for j, c := range cols {
		if recs[0][j] != c.Name {
			t.Fatalf("header %q, want %q", recs[0][j], c.Name)
		}
		v := &b.Cols[j]
		for i, rec := range recs[1:] {
			cell := rec[j]
			if v.Null != nil && v.Null[i] || c.Kind == stream.Float64 && math.IsNaN(v.F64[i]) {
				if cell != "" {
					t.Fatalf("row %d %s: %q, want an empty cell", i, c.Name, cell)
				}
				empty++
				continue
			}
			ok := false
			switch c.Kind {
			case stream.Float64:
				f, err := strconv.ParseFloat(cell, 64)
				ok = err == nil && f == v.F64[i]
			case stream.Int64:
				n, err := strconv.ParseInt(cell, 10, 64)
				ok = err == nil && n == v.I64[i]
			case stream.Bool:
				ok = cell == map[int64]string{0: "false", 1: "true"}[v.I64[i]]
			case stream.Time:
				ts, err := time.Parse("2006-01-02T15:04:05", cell)
				ok = err == nil && ts.UnixNano() == v.I64[i]
			case stream.Text:
				ok = cell == v.Dict.Values[v.Code[i]]
			}
			if !ok {
				t.Fatalf("row %d %s: %q", i, c.Name, cell)
			}
		}
	}
	if empty == 0 {
		t.Error("no missing cell among 20,000 rows")
	}
}

func TestCSVStopsWhenToldTo(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	d := mustNew(t, Config{Rows: 1 << 40})
	err := d.WriteCSV(ctx, discard{}, func(int64) { cancel() })
	if !errors.Is(err, context.Canceled) {
		t.Errorf("error %v", err)
	}
}

type discard struct{}

func (discard) Write(p []byte) (int, error) { return len(p), nil }
