package columnar

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/streamtest"
)

// cutAt makes groups of more than huge rows huge for a test.
func cutAt(t testing.TB, huge, part int64) {
	h, p := hugeRows, partRows
	hugeRows, partRows = huge, part
	t.Cleanup(func() { hugeRows, partRows = h, p })
}

// A huge row group gives the same rows as one that is not cut, by the laws of
// sources: any number of goroutines, samples, places.
func TestPartLaws(t *testing.T) {
	cutAt(t, 3000, 2048)
	r := rand.New(rand.NewPCG(14, 1))
	for _, tc := range []struct{ rows, group, page, dict, segments int }{
		{9000, 9000, 200, 0, 5},
		{9000, 4200, 300, 900, 3 + 3 + 1},
		{6500, 3000, 200, 0, 3},
		{9000, 9000, 1 << 20, 0, 5}, // one page a column
	} {
		t.Run(fmt.Sprint(tc), func(t *testing.T) {
			vecs := quayTable(r, tc.rows, nulls["half"])
			data := writeTable(t, quayColumns, vecs, tc.rows, WriterOptions{PageBytes: tc.page, RowsPerGroup: tc.group, DictBytes: tc.dict})
			name, open := onDisk(t, data)
			src := open(t)
			if n := src.Info().Segments; n != tc.segments {
				t.Errorf("%d segments, want %d", n, tc.segments)
			}
			src.Close()
			want := streamtest.Table{Cols: vecs, Files: []streamtest.File{{Name: name, Rows: tc.rows}}}
			for _, c := range quayColumns {
				want.Schema.Columns = append(want.Schema.Columns, stream.Column{Name: c.Name, Kind: c.Kind, Zoned: c.Zoned, DateOnly: c.DateOnly})
			}
			streamtest.TestSource(t, open, want)
		})
	}
}

// countReads counts the bytes that are read.
type countReads struct {
	*bytes.Reader
	bytes, calls *int64
}

func (countReads) Close() error { return nil }

func (c countReads) ReadAt(b []byte, off int64) (int, error) {
	*c.calls++
	*c.bytes += int64(len(b))
	return c.Reader.ReadAt(b, off)
}

// Segments in order pass over every header once: reading in parts takes little
// more from the file than reading whole. A sample in the middle reads a page of
// each column.
func TestPartReads(t *testing.T) {
	const rows = 131072
	r := rand.New(rand.NewPCG(15, 1))
	cols := quayColumns[7:9]
	all := quayTable(r, rows, nulls["none"])
	data := writeTable(t, cols, all[7:9], rows, WriterOptions{PageBytes: 16384, RowsPerGroup: rows, Codec: "none"})
	read := func() (n, calls int64, f *File) {
		in := stream.Input{Name: "quay.parquet", File: countReads{bytes.NewReader(data), &n, &calls}, Size: int64(len(data))}
		src, err := Format{}.Open(context.Background(), in, stream.Options{}.WithDefaults())
		if err != nil {
			t.Fatal(err)
		}
		f = src.(*File)
		n, calls = 0, 0
		got, err := readAll(f, allUses(f))
		if err != nil || len(got) != rows {
			t.Fatal(len(got), err)
		}
		return n, calls, f
	}
	whole, wholeCalls, _ := read()
	cutAt(t, 16384, 8192)
	parts, partCalls, f := read()
	if len(f.parts) < 10 {
		t.Fatalf("%d parts", len(f.parts))
	}
	if parts > whole*5/4 || partCalls > 3*wholeCalls {
		t.Errorf("%d bytes in %d reads in parts, %d in %d whole", parts, partCalls, whole, wholeCalls)
	}
	if len(f.pages.list) != 0 {
		t.Errorf("%d pages are left after the scan", len(f.pages.list))
	}
	before := parts
	in := countReads{bytes.NewReader(data), &before, new(int64)}
	f.file = in
	before = 0
	seg, err := f.Sample(context.Background(), allUses(f), 0.5)
	if err != nil {
		t.Fatal(err)
	}
	var b stream.Batch
	if err := seg.Read(&b); err != nil {
		t.Fatal(err)
	}
	if before > int64(len(data))/10 {
		t.Errorf("a sample read %d of %d bytes", before, len(data))
	}
}

// Of one page a column each part reads its rows, and the page is decoded once;
// samples too share it.
func TestPartsShareAPage(t *testing.T) {
	const rows = 40960
	r := rand.New(rand.NewPCG(15, 2))
	cols := quayColumns[7:10]
	all := quayTable(r, rows, nulls["none"])
	data := writeTable(t, cols, all[7:10], rows, WriterOptions{PageBytes: 1 << 20, RowsPerGroup: rows})
	cutAt(t, 4096, 2048)
	var n, calls int64
	in := stream.Input{Name: "quay.parquet", File: countReads{bytes.NewReader(data), &n, &calls}, Size: int64(len(data))}
	src, err := Format{}.Open(context.Background(), in, stream.Options{}.WithDefaults())
	if err != nil {
		t.Fatal(err)
	}
	f := src.(*File)
	if len(f.parts) != 20 {
		t.Fatalf("%d parts", len(f.parts))
	}
	n = 0
	for _, at := range []float64{0.3, 1, 0.5} {
		seg, err := f.Sample(context.Background(), allUses(f), at)
		if err != nil {
			t.Fatal(err)
		}
		var b stream.Batch
		if err := seg.Read(&b); err != nil {
			t.Fatal(err)
		}
		if got, want := cell(&b.Cols[0], 0), cell(&all[7], min(int(at*rows), rows-stream.BatchRows)); got != want {
			t.Errorf("at %v: %s, want %s", at, got, want)
		}
		seg.Close()
	}
	got, err := readAll(f, allUses(f))
	if err != nil || len(got) != rows {
		t.Fatal(len(got), err)
	}
	if n > int64(len(data))*5/4 {
		t.Errorf("%d bytes were read of %d", n, len(data))
	}
}

// Damaged pages and headers of a cut group: an error or the right rows.
func TestPartDamage(t *testing.T) {
	cutAt(t, 200, 64) // less than a page: several parts begin in one
	r := rand.New(rand.NewPCG(16, 1))
	const rows = 512
	cols := []WriteColumn{quayColumns[0], quayColumns[6], quayColumns[8]}
	all := quayTable(r, rows, nulls["half"])
	data := writeTable(t, cols, []stream.Vector{all[0], all[6], all[8]}, rows, WriterOptions{RowsPerGroup: rows, PageBytes: 50})
	want, err := tryRead(data)
	if err != nil {
		t.Fatal(err)
	}
	step := 11
	if testing.Short() {
		step *= 10
	}
	damaged := 0
	for k := 32; k < 8*footerStart(data); k += step {
		bad := bytes.Clone(data)
		bad[k/8] ^= 1 << (k % 8)
		got, err := tryParts(bad)
		if err != nil {
			checkDamageError(t, fmt.Sprint("bit ", k), err)
			damaged++
		} else if !slices.EqualFunc(got, want, slices.Equal[[]string]) {
			t.Fatalf("bit %d: no error and other rows", k)
		}
	}
	if damaged == 0 {
		t.Error("no flip was noticed")
	}
}

// tryParts reads the file; the error is that of the first part that has one.
func tryParts(data []byte) (rows [][]string, err error) {
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		return nil, err
	}
	ctx := context.Background()
	sc, err := f.Scan(ctx, allUses(f))
	if err != nil {
		return nil, err
	}
	var first error
	for {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			return rows, first
		}
		if err != nil {
			return nil, err
		}
		for {
			var b stream.Batch
			err := seg.Read(&b)
			if err == io.EOF {
				break
			}
			if err != nil {
				if first == nil {
					first = err
				}
				break
			}
			for i := range b.Rows {
				row := make([]string, len(b.Cols))
				for j := range b.Cols {
					row[j] = cell(&b.Cols[j], i)
				}
				rows = append(rows, row)
			}
		}
	}
}
