package stream_test

import (
	"context"
	"errors"
	"fmt"
	"io"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/streamtest"
)

// counted is a column 0, 1, 2, ... in memory.
func counted(rows, segment int) (stream.Source, streamtest.Table) {
	table := streamtest.Table{
		Schema: stream.Schema{Columns: []stream.Column{{Name: "crane", Kind: stream.Int64}, {Name: "quay", Kind: stream.Text}}},
		Cols: []stream.Vector{
			{Kind: stream.Int64, I64: make([]int64, rows)},
			{Kind: stream.Text, Code: make([]int32, rows), Dict: &stream.Dict{Values: []string{"north"}}},
		},
		Files: []streamtest.File{{Name: "memory", Rows: rows}},
	}
	for i := range rows {
		table.Cols[0].I64[i] = int64(i)
		table.Cols[1].Code[i] = -int32(i % 2)
	}
	return stream.NewMemory(table.Schema, table.Cols, segment), table
}

func TestFirst(t *testing.T) {
	const rows, segment = 2000, 700
	for _, n := range []int64{0, 1, 511, 512, 513, 699, 700, 701, 1400, 1999, 2000, 5000} {
		t.Run(fmt.Sprint(n), func(t *testing.T) {
			_, table := counted(min(rows, int(n)), segment)
			streamtest.TestSource(t, func(t *testing.T) stream.Source {
				src, _ := counted(rows, segment)
				return stream.First(src, n)
			}, table)
		})
	}
}

func TestFirstOfUnion(t *testing.T) {
	want := quayFolder(t)
	const n = 1600 // in the middle of the third file
	for j := range want.Cols {
		v := &want.Cols[j]
		v.F64, v.I64, v.Code = v.F64[:min(n, len(v.F64))], v.I64[:min(n, len(v.I64))], v.Code[:min(n, len(v.Code))]
		if v.Null != nil {
			v.Null = v.Null[:n]
		}
	}
	want.Files[2].Rows, want.Files[3].Rows = n-1300, 0
	streamtest.TestSource(t, func(t *testing.T) stream.Source {
		src, err := open([]string{"d"}, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		return stream.First(src, n)
	}, want)
}

// A segment that nobody wants counts with all its rows, and the next one waits
// until that is known.
func TestFirstCountsUnread(t *testing.T) {
	inner, _ := counted(2000, 700)
	src := stream.First(inner, 1500)
	ctx := context.Background()
	sc, err := src.Scan(ctx, []stream.Use{{Column: 0}})
	if err != nil {
		t.Fatal(err)
	}
	skip, err := sc.Next(ctx)
	if err != nil {
		t.Fatal(err)
	}
	got := make(chan stream.Segment)
	go func() {
		seg, err := sc.Next(ctx)
		if err != nil {
			t.Error(err)
		}
		got <- seg
	}()
	select {
	case <-got:
		t.Fatal("a segment was handed out before the one before it was finished")
	case <-time.After(20 * time.Millisecond):
	}
	short, cancel := context.WithTimeout(ctx, 10*time.Millisecond)
	defer cancel()
	if _, err := sc.Next(short); !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("Next with a deadline: %v", err)
	}
	if err := skip.Close(); err != nil {
		t.Fatal(err)
	}
	second := <-got
	if err := second.Close(); err != nil {
		t.Fatal(err)
	}
	third, err := sc.Next(ctx)
	if err != nil {
		t.Fatal(err)
	}
	var b stream.Batch
	if err := third.Read(&b); err != nil || b.Rows != 100 || b.Cols[0].I64[0] != 1400 {
		t.Errorf("third segment: %v, %d rows from %v, want 100 from 1400", err, b.Rows, b.Cols[0].I64[:1])
	}
	if tally := third.Tally(); tally.Rows != 100 {
		t.Errorf("tally %+v", tally)
	}
	if err := third.Read(&b); err != io.EOF {
		t.Errorf("after the last row: %v", err)
	}
	if err := third.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := sc.Next(ctx); err != io.EOF {
		t.Errorf("Next at the end: %v", err)
	}
	if err := sc.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := sc.Next(ctx); err == nil {
		t.Error("a closed scan hands out segments")
	}
}

// An error in a segment ends the scan: the number of its rows is not known.
func TestFirstPassesErrorsOn(t *testing.T) {
	inner, _ := counted(2000, 700)
	bad := &stream.RowError{Pos: stream.Position{File: "memory", Row: 600}, Found: `"x"`, Want: "a number"}
	src := stream.First(failing{inner, bad}, 1500)
	ctx := context.Background()
	sc, err := src.Scan(ctx, nil)
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	seg, err := sc.Next(ctx)
	if err != nil {
		t.Fatal(err)
	}
	var b stream.Batch
	for range 3 {
		if err = seg.Read(&b); err != bad {
			t.Errorf("Read: %v", err)
		}
	}
	if _, err := sc.Next(ctx); err != bad {
		t.Errorf("Next: %v", err)
	}
	if err := seg.Close(); err != nil {
		t.Error(err)
	}
	if _, err := src.Sample(ctx, nil, 0); !errors.Is(err, stream.ErrNoSample) {
		t.Errorf("Sample: %v", err)
	}
}

// failing is a source whose segments cannot be read.
type failing struct {
	stream.Source
	err error
}

func (f failing) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	sc, err := f.Source.Scan(ctx, uses)
	return failingScan{sc, f.err}, err
}

type failingScan struct {
	stream.Scan
	err error
}

func (f failingScan) Next(ctx context.Context) (stream.Segment, error) {
	seg, err := f.Scan.Next(ctx)
	return failingSegment{seg, f.err}, err
}

type failingSegment struct {
	stream.Segment
	err error
}

func (f failingSegment) Read(*stream.Batch) error { return f.err }
