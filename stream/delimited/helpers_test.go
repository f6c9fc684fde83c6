package delimited

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"
	"github.com/tallrow/tallrow/stream"
)

// How a text reaches the reader.
var ways = []string{"file", "pipe", "gzip", "zstd", "gzip pipe", "zstd pipe", "spool"}

func gz(t testing.TB, text string) []byte {
	t.Helper()
	var b bytes.Buffer
	w := gzip.NewWriter(&b)
	// Two members, as after joining two files.
	for _, part := range []string{text[:len(text)/2], text[len(text)/2:]} {
		w.Reset(&b)
		if _, err := io.WriteString(w, part); err != nil {
			t.Fatal(err)
		}
		if err := w.Close(); err != nil {
			t.Fatal(err)
		}
	}
	return b.Bytes()
}

func zs(t testing.TB, text string) []byte {
	t.Helper()
	w, err := zstd.NewWriter(nil)
	if err != nil {
		t.Fatal(err)
	}
	return w.EncodeAll([]byte(text), nil)
}

// slowPipe delivers a few bytes at a time.
type slowPipe struct {
	r    io.Reader
	step int
}

func (p *slowPipe) Read(b []byte) (int, error) {
	if p.step > 0 && len(b) > p.step {
		b = b[:p.step]
	}
	return p.r.Read(b)
}
func (p *slowPipe) Close() error { return nil }

func fileInput(t testing.TB, name string, data []byte) stream.Input {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, data, 0o600); err != nil {
		t.Fatal(err)
	}
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	return stream.Input{Name: path, File: f, Size: int64(len(data)), ModTime: time.Now()}
}

func pipeInput(data []byte, step int) stream.Input {
	return stream.Input{Name: "standard input", Pipe: &slowPipe{bytes.NewReader(data), step}}
}

func inputOf(t testing.TB, way, text string, o *stream.Options) stream.Input {
	switch way {
	case "file":
		return fileInput(t, "quay.csv", []byte(text))
	case "gzip":
		return fileInput(t, "quay.csv.gz", gz(t, text))
	case "zstd":
		return fileInput(t, "quay.csv.zst", zs(t, text))
	case "pipe":
		return pipeInput([]byte(text), 7)
	case "gzip pipe":
		return pipeInput(gz(t, text), 0)
	case "zstd pipe":
		return pipeInput(zs(t, text), 0)
	case "spool":
		o.Spool = filepath.Join(t.TempDir(), "copy")
		return pipeInput([]byte(text), 1000)
	}
	t.Fatal(way)
	panic("unreachable")
}

func openWay(t testing.TB, way, text string, o stream.Options) *source {
	t.Helper()
	src, err := tryOpen(t, way, text, o)
	if err != nil {
		t.Fatal(err)
	}
	return src
}

func tryOpen(t testing.TB, way, text string, o stream.Options) (*source, error) {
	t.Helper()
	in := inputOf(t, way, text, &o)
	src, err := Format{}.Open(context.Background(), in, o)
	if err != nil {
		return nil, err
	}
	t.Cleanup(func() { src.Close() })
	return src.(*source), nil
}

func allUses(s stream.Source) (uses []stream.Use) {
	for i := range s.Schema().Columns {
		uses = append(uses, stream.Use{Column: i})
	}
	return uses
}

// show writes a cell so that equal cells of equal kinds look equal.
func show(v stream.Vector, r int) string {
	switch {
	case v.Kind == stream.Float64:
		if math.IsNaN(v.F64[r]) {
			return "-"
		}
		return fmt.Sprintf("%x", v.F64[r])
	case v.Kind == stream.Text:
		if v.Code[r] < 0 {
			return "-"
		}
		return fmt.Sprintf("%q", v.Dict.Values[v.Code[r]])
	case v.Null != nil && v.Null[r]:
		return "-"
	case v.Kind == stream.Uint64:
		return fmt.Sprint(uint64(v.I64[r]))
	case v.Kind == stream.Time:
		return time.Unix(0, v.I64[r]).UTC().Format(time.RFC3339Nano)
	}
	return fmt.Sprint(v.I64[r])
}

// readSegment returns the rows of a segment, one string each.
func readSegment(t testing.TB, s stream.Segment, marks bool) (rows []string, err error) {
	t.Helper()
	var b stream.Batch
	short := false
	for {
		err := s.Read(&b)
		if err == io.EOF {
			if b.Rows != 0 {
				t.Fatalf("%d rows with io.EOF", b.Rows)
			}
			return rows, nil
		}
		if err != nil {
			return rows, err
		}
		if b.Rows == 0 || b.Rows > stream.BatchRows || short {
			t.Fatalf("a batch of %d rows, after a short one: %v", b.Rows, short)
		}
		short = b.Rows < stream.BatchRows
		for r := range b.Rows {
			var c []string
			if marks {
				c = append(c, fmt.Sprintf("@%d", b.Marks[r]))
			}
			for _, v := range b.Cols {
				c = append(c, show(v, r))
			}
			rows = append(rows, strings.Join(c, "|"))
		}
	}
}

// readAll reads a scan with one goroutine and returns rows headed by their
// segment numbers.
func readAll(t testing.TB, src stream.Source, uses []stream.Use, marks bool) (rows []string, tally stream.SegmentTally, err error) {
	t.Helper()
	ctx := context.Background()
	scan, err := src.Scan(ctx, uses)
	if err != nil {
		return nil, tally, err
	}
	defer scan.Close()
	for k := 0; ; k++ {
		seg, err := scan.Next(ctx)
		if err == io.EOF {
			return rows, tally, nil
		}
		if err != nil {
			return rows, tally, err
		}
		if seg.Number() != k {
			t.Fatalf("segment %d has number %d", k, seg.Number())
		}
		got, err := readSegment(t, seg, marks)
		for _, g := range got {
			if marks {
				g = fmt.Sprintf("%d:%s", k, g)
			}
			rows = append(rows, g)
		}
		ts := seg.Tally()
		tally.Rows += ts.Rows
		tally.Malformed += ts.Malformed
		tally.Bytes += ts.Bytes
		tally.Problems = append(tally.Problems, ts.Problems...)
		if err != nil {
			seg.Close()
			return rows, tally, err
		}
		if err := seg.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

func equalRows(t testing.TB, what string, got, want []string) {
	t.Helper()
	for i := range min(len(got), len(want)) {
		if got[i] != want[i] {
			t.Fatalf("%s: row %d is %s, want %s", what, i, got[i], want[i])
		}
	}
	if len(got) != len(want) {
		t.Fatalf("%s: %d rows, want %d", what, len(got), len(want))
	}
}

func asRowError(t testing.TB, err error) *stream.RowError {
	t.Helper()
	var e *stream.RowError
	if !errors.As(err, &e) {
		t.Fatalf("got %v, want a *stream.RowError", err)
	}
	return e
}
