package columnar

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
	"time"

	"github.com/parquet-go/parquet-go"
	"github.com/tallrow/tallrow/stream"
)

// closer tells whether it was closed.
type closer struct {
	io.Reader
	closed *bool
}

func (c closer) Close() error { *c.closed = true; return nil }

func TestPipe(t *testing.T) {
	r := rand.New(rand.NewPCG(10, 1))
	vecs := quayTable(r, 700, nulls["few"])
	data := writeTable(t, quayColumns, vecs, 700, WriterOptions{RowsPerGroup: 300})
	dir := t.TempDir()
	closed := false
	open := func(data []byte) (stream.Source, error) {
		closed = false
		in := stream.Input{Name: "standard input", Pipe: closer{bytes.NewReader(data), &closed}}
		return Format{}.Open(context.Background(), in, stream.Options{Scratch: dir}.WithDefaults())
	}
	src, err := open(data)
	if err != nil {
		t.Fatal(err)
	}
	if !closed {
		t.Error("the pipe is not closed")
	}
	for range 2 {
		if rows, err := readAll(src.(*File), allUses(src.(*File))); err != nil || len(rows) != 700 {
			t.Errorf("%d rows, %v", len(rows), err)
		}
	}
	a, err1 := src.Stamp()
	b, err2 := src.Stamp()
	if a != b || err1 != nil || err2 != nil {
		t.Errorf("stamps %q %q %v %v", a, b, err1, err2)
	}
	if err := src.Close(); err != nil {
		t.Error(err)
	}
	for _, bad := range [][]byte{data[:len(data)/2], data[:3], nil, []byte("minutes,pallets\n")} {
		if _, err := open(bad); !errors.Is(err, stream.ErrDamaged) || !closed {
			t.Errorf("%d bytes: %v, closed %v", len(bad), err, closed)
		}
	}
	if left, _ := os.ReadDir(dir); len(left) != 0 {
		t.Errorf("%d temporary files are left", len(left))
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	in := stream.Input{Name: "standard input", Pipe: closer{bytes.NewReader(data), &closed}}
	if _, err := (Format{}).Open(ctx, in, stream.Options{Scratch: dir}); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func TestStamp(t *testing.T) {
	data := tinyFile(t)
	name, open := onDisk(t, data)
	src := open(t)
	defer src.Close()
	a, err := src.Stamp()
	if err != nil {
		t.Fatal(err)
	}
	if err := os.Chtimes(name, time.Time{}, time.Unix(1e9, 0)); err != nil {
		t.Fatal(err)
	}
	if b, err := src.Stamp(); err != nil || a == b {
		t.Errorf("the stamp did not notice a new time: %q, %v", b, err)
	}
	if err := os.Remove(name); err != nil {
		t.Fatal(err)
	}
	if _, err := src.Stamp(); err == nil {
		t.Error("the stamp did not notice that the file is gone")
	}
}

func TestKinds(t *testing.T) {
	data := tinyFile(t)
	f, err := openBytes(data, stream.Options{Kinds: map[string]stream.Kind{"crew": stream.Text, "night": stream.Float64, "quay": stream.Text, "nowhere": stream.Bool}})
	if err != nil {
		t.Fatal(err)
	}
	plain, err := tryRead(data)
	if err != nil {
		t.Fatal(err)
	}
	got, err := readAll(f, allUses(f))
	if err != nil {
		t.Fatal(err)
	}
	for i := range plain {
		want := []string{plain[i][0], plain[i][1], `"` + plain[i][2] + `"`, plain[i][3]}
		if fmt.Sprint(got[i]) != fmt.Sprint(want) {
			t.Errorf("row %d: %v, want %v", i, got[i], want)
		}
	}
	if k := f.Schema().Columns[2].Kind; k != stream.Text {
		t.Errorf("crew is %s", k)
	}
	for name, k := range map[string]stream.Kind{"quay": stream.Int64, "crew": stream.Time, "minutes": stream.Text} {
		_, err := openBytes(data, stream.Options{Kinds: map[string]stream.Kind{name: k}})
		if !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), "column "+name) {
			t.Errorf("%s as %s: %v", name, k, err)
		}
	}
}

// badTimes has days far outside int64 nanoseconds, plain and in a dictionary,
// between missing ones.
func badTimes(t *testing.T, rows int, bad func(i int) bool, dict bool) []byte {
	t.Helper()
	node := parquet.Date()
	if dict {
		node = parquet.Encoded(node, &parquet.RLEDictionary)
	}
	root := orderedGroup{Group: parquet.Group{"day": parquet.Optional(node), "pallets": parquet.Optional(parquet.Int(64)), "quay": parquet.String()}, order: []string{"day", "pallets", "quay"}}
	var buf bytes.Buffer
	w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root), parquet.PageBufferSize(3000))
	for i := range rows {
		day := parquet.Int32Value(int32(i)).Level(0, 1, 0)
		if i%3 == 1 {
			day = parquet.NullValue().Level(0, 0, 0)
		}
		if bad(i) {
			day = parquet.Int32Value(2932896).Level(0, 1, 0) // 9999-12-31
		}
		row := parquet.Row{day, parquet.Int64Value(int64(i)).Level(0, 1, 1), parquet.ByteArrayValue(fmt.Append(nil, i)).Level(0, 0, 2)}
		if _, err := w.WriteRows([]parquet.Row{row}); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return buf.Bytes()
}

func TestBadTimes(t *testing.T) {
	const rows = 1500
	bad := func(i int) bool { return i == 3 || i == 700 || i > 900 && i < 960 }
	for _, dict := range []bool{false, true} {
		data := badTimes(t, rows, bad, dict)
		f, err := openBytes(data, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		_, err = readAll(f, allUses(f))
		var e *stream.RowError
		if !errors.As(err, &e) || err.Error() != `quay.parquet row group 1 row 4 column day: found "9999-12-31", want a time from 1677-09-21 to 2262-04-11` {
			t.Errorf("dict %v: %v", dict, err)
		}
		if got, err := readAll(f, []stream.Use{{Column: 1}}); err != nil || len(got) != rows {
			t.Errorf("other columns: %d rows, %v", len(got), err)
		}

		f, err = openBytes(data, stream.Options{SkipBad: true})
		if err != nil {
			t.Fatal(err)
		}
		ctx := context.Background()
		sc, _ := f.Scan(ctx, allUses(f))
		seg, err := sc.Next(ctx)
		if err != nil {
			t.Fatal(err)
		}
		i, full := 0, 0
		for {
			var b stream.Batch
			err := seg.Read(&b)
			if err == io.EOF {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
			if b.Rows == stream.BatchRows {
				full++
			}
			for k := range b.Rows {
				for bad(i) {
					i++
				}
				want := fmt.Sprintf("%d %d %q", int64(i)*86400e9, i, fmt.Sprint(i))
				if i%3 == 1 {
					want = fmt.Sprintf("- %d %q", i, fmt.Sprint(i))
				}
				if got := cell(&b.Cols[0], k) + " " + cell(&b.Cols[1], k) + " " + cell(&b.Cols[2], k); got != want {
					t.Fatalf("row %d: %s, want %s", i, got, want)
				}
				if p := seg.Locate(b.Marks[k]); p.Row != int64(i+1) || p.Group != 1 {
					t.Fatalf("row %d is located at %v", i, p)
				}
				i++
			}
		}
		tally := seg.Tally()
		if i != rows || full != 2 || tally.Rows != rows || tally.Malformed != 61 || len(tally.Problems) != stream.MaxProblems {
			t.Errorf("%d rows, %d full batches, %+v", i, full, tally)
		}
	}
}

func TestUses(t *testing.T) {
	f, err := openBytes(tinyFile(t), stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	if _, err := f.Scan(ctx, []stream.Use{{Column: 1, AsNumber: true}}); !errors.Is(err, stream.ErrUse) {
		t.Errorf("text as number: %v", err)
	}
	if _, err := f.Scan(ctx, []stream.Use{{Column: 99}}); err == nil {
		t.Error("column 99 is there")
	}
	if _, err := f.Sample(ctx, nil, math.NaN()); err == nil {
		t.Error("a sample at NaN")
	}
	// No column: the rows are counted.
	if got, err := readAll(f, nil); err != nil || len(got) != 10 {
		t.Errorf("%d rows, %v", len(got), err)
	}
}

// failing is a disk that fails beyond a place.
type failing struct {
	io.ReaderAt
	from int64
}

var errDisk = errors.New("disk on fire")

func (f failing) Close() error { return nil }
func (f failing) ReadAt(b []byte, off int64) (int, error) {
	if off < f.from && off > 4 {
		return 0, errDisk
	}
	return f.ReaderAt.ReadAt(b, off)
}

// A failing disk is not taken for a damaged file.
func TestReadFailure(t *testing.T) {
	data := tinyFile(t)
	in := stream.Input{Name: "quay.parquet", File: failing{bytes.NewReader(data), int64(footerStart(data))}, Size: int64(len(data))}
	src, err := Format{}.Open(context.Background(), in, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	f := src.(*File)
	_, err = readAll(f, allUses(f)[1:])
	if !errors.Is(err, errDisk) || errors.Is(err, stream.ErrDamaged) || !strings.HasPrefix(err.Error(), "quay.parquet row group 1 column quay: ") {
		t.Errorf("got %v", err)
	}
	// A file that was cut off since it was opened is.
	in.File = memFile{bytes.NewReader(data)}
	src, err = Format{}.Open(context.Background(), in, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	f = src.(*File)
	f.file = bytes.NewReader(data[:50])
	if _, err = readAll(f, allUses(f)); !errors.Is(err, stream.ErrDamaged) {
		t.Errorf("cut off: %v", err)
	}
}

// Sample begins at the row it promises, in the middle of groups and pages, and
// goes on across row groups.
func TestSamplePlace(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 1))
	const rows = 5000
	vecs := quayTable(r, rows, nulls["half"])
	data := writeTable(t, quayColumns, vecs, rows, WriterOptions{RowsPerGroup: 700, PageBytes: 1000, DictBytes: 2000})
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, at := range []float64{0, 0.0001, 0.13, 0.14, 0.5, 0.77, 0.9, 1} {
		first := min(int(at*rows), rows-stream.BatchRows)
		seg, err := f.Sample(context.Background(), allUses(f), at)
		if err != nil {
			t.Fatal(err)
		}
		if seg.Number() != -1 {
			t.Errorf("number %d", seg.Number())
		}
		i := first
		for {
			var b stream.Batch
			if err := seg.Read(&b); err == io.EOF {
				break
			} else if err != nil {
				t.Fatal(err)
			}
			if b.Rows != min(stream.BatchRows, rows-i) {
				t.Fatalf("at %v row %d: a batch of %d rows", at, i, b.Rows)
			}
			for k := range b.Rows {
				for j := range b.Cols {
					if got, want := cell(&b.Cols[j], k), cell(&vecs[j], i); got != want {
						t.Fatalf("at %v row %d column %s: %s, want %s", at, i, quayColumns[j].Name, got, want)
					}
				}
				if p := seg.Locate(b.Marks[k]); p.Row != int64(i+1) || p.Group != i/700+1 {
					t.Fatalf("row %d is located at %v", i, p)
				}
				i++
			}
		}
		if i != rows {
			t.Errorf("at %v: ends at row %d", at, i)
		}
	}
}

// A column with very many texts in plain pages gets a new Dict now and then, and
// no entry of a Dict ever changes.
func TestManyTexts(t *testing.T) {
	const rows = 150000
	v := stream.Vector{Kind: stream.Text, Dict: new(stream.Dict)}
	for i := range rows {
		v.Code = append(v.Code, int32(i))
		v.Dict.Values = append(v.Dict.Values, fmt.Sprint("crane ", i))
	}
	data := writeTable(t, []WriteColumn{{Name: "crane", Kind: stream.Text}}, []stream.Vector{v}, rows, WriterOptions{RowsPerGroup: rows, DictBytes: 1000})
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	sc, _ := f.Scan(ctx, allUses(f))
	seg, err := sc.Next(ctx)
	if err != nil {
		t.Fatal(err)
	}
	dicts := map[*stream.Dict]int{}
	var b stream.Batch
	i := 0
	for seg.Read(&b) == nil {
		d := b.Cols[0].Dict
		dicts[d]++
		if len(d.Values) > maxInterned+stream.BatchRows {
			t.Fatalf("a Dict of %d texts", len(d.Values))
		}
		for _, k := range b.Cols[0].Code {
			if d.Values[k] != v.Dict.Values[i] {
				t.Fatalf("row %d: %q", i, d.Values[k])
			}
			i++
		}
	}
	if i != rows || len(dicts) < 3 {
		t.Errorf("%d rows, %d Dicts", i, len(dicts))
	}
}

// Progress of a full scan adds up to the size of the file.
func TestTallyBytes(t *testing.T) {
	r := rand.New(rand.NewPCG(12, 1))
	data := writeTable(t, quayColumns, quayTable(r, 2000, nulls["few"]), 2000, WriterOptions{RowsPerGroup: 300})
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	sc, _ := f.Scan(ctx, []stream.Use{{Column: 0}})
	total := int64(0)
	for {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			break
		}
		var b stream.Batch
		for err == nil {
			err = seg.Read(&b)
		}
		if err != io.EOF {
			t.Fatal(err)
		}
		total += seg.Tally().Bytes
	}
	if total != int64(len(data)) {
		t.Errorf("%d bytes, the file has %d", total, len(data))
	}
	if w := f.Info().WorkerBytes; w < 1000 || w > 1<<20 {
		t.Errorf("a worker holds %d bytes", w)
	}
}

func TestMatch(t *testing.T) {
	for _, tc := range []struct {
		name, head string
		want       bool
	}{{"a.parquet", "", true}, {"a", "PAR1abc", true}, {"a.csv", "PARE", true}, {"a.csv", "PAR", false}, {"x.PARQUET", "a,b", true}, {"a", "", false}} {
		if got := (Format{}).Match(tc.name, []byte(tc.head)); got != tc.want {
			t.Errorf("%s %q: %v", tc.name, tc.head, got)
		}
	}
}

func TestWriterRefuses(t *testing.T) {
	one := []WriteColumn{{Name: "crew", Kind: stream.Int64}}
	for want, make := range map[string]func() error{
		`unknown codec "rar"`: func() error { _, err := NewWriter(io.Discard, one, WriterOptions{Codec: "rar"}); return err },
		"pages of 2097152 bytes": func() error {
			_, err := NewWriter(io.Discard, one, WriterOptions{PageBytes: 2 << 20})
			return err
		},
		"a file without columns": func() error { _, err := NewWriter(io.Discard, nil, WriterOptions{}); return err },
		`"crew" is empty or there twice`: func() error {
			_, err := NewWriter(io.Discard, append(one, one[0]), WriterOptions{})
			return err
		},
		"column crew row 2 is missing": func() error {
			w, _ := NewWriter(io.Discard, one, WriterOptions{})
			return w.WriteColumns(2, []stream.Vector{{Kind: stream.Int64, I64: []int64{1, 2}, Null: []bool{false, true}}})
		},
		"column crew is int64, got float64": func() error {
			w, _ := NewWriter(io.Discard, one, WriterOptions{})
			return w.WriteColumns(1, []stream.Vector{{Kind: stream.Float64, F64: []float64{1}}})
		},
		"fewer cells than the 3 rows": func() error {
			w, _ := NewWriter(io.Discard, one, WriterOptions{})
			return w.Write(&stream.Batch{Rows: 3, Cols: []stream.Vector{{Kind: stream.Int64, I64: []int64{1, 2}}}})
		},
		"code 4 is not in its dictionary": func() error {
			w, _ := NewWriter(io.Discard, []WriteColumn{{Name: "quay", Kind: stream.Text}}, WriterOptions{})
			return w.WriteColumns(1, []stream.Vector{{Kind: stream.Text, Code: []int32{4}, Dict: new(stream.Dict)}})
		},
		"is not a whole day": func() error {
			w, _ := NewWriter(io.Discard, []WriteColumn{{Name: "day", Kind: stream.Time, DateOnly: true}}, WriterOptions{})
			return w.WriteColumns(1, []stream.Vector{{Kind: stream.Time, I64: []int64{5}}})
		},
		"write after Close": func() error {
			w, _ := NewWriter(io.Discard, one, WriterOptions{})
			if err := w.Close(); err != nil {
				return err
			}
			return w.WriteColumns(0, []stream.Vector{{Kind: stream.Int64}})
		},
	} {
		if err := make(); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want %s", err, want)
		}
	}
}
