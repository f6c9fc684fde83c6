package stream_test

import (
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// textFormat reads small text files whole, with encoding/csv. It stands in for
// the real formats, guesses kinds from the first three rows and counts the open
// inputs.
type textFormat struct {
	name    string // "csv" when its kinds are guesses
	ending  string
	segment int
	open    *atomic.Int64
	most    *atomic.Int64
}

func newTextFormat(name, ending string) textFormat {
	return textFormat{name, ending, 600, new(atomic.Int64), new(atomic.Int64)}
}

func (f textFormat) Name() string { return f.name }

func (f textFormat) Match(name string, head []byte) bool {
	return strings.HasSuffix(name, f.ending) || !strings.Contains(name, ".") && strings.HasPrefix(string(head), "minutes")
}

func (f textFormat) Open(_ context.Context, in stream.Input, o stream.Options) (stream.Source, error) {
	var r io.Reader = in.Pipe
	if in.File != nil {
		r = io.NewSectionReader(in.File, 0, in.Size)
	}
	records, err := csv.NewReader(r).ReadAll()
	if err != nil {
		return nil, fmt.Errorf("%s: %w", in.Name, err)
	}
	if len(records) == 0 {
		return nil, fmt.Errorf("%s: found no header", in.Name)
	}
	header, records := records[0], records[1:]
	var schema stream.Schema
	var cols []stream.Vector
	for j, name := range header {
		var c stream.Column
		if kind, ok := o.Kinds[name]; ok {
			c.Kind = kind
		} else {
			c = guess(records[:min(3, len(records))], j)
		}
		c.Name = name
		v := stream.Vector{Kind: c.Kind}
		if c.Kind == stream.Text {
			v.Dict = &stream.Dict{}
		}
		for i := range records {
			if err := add(&v, records[i][j]); err != nil {
				return nil, fmt.Errorf("%s: row %d column %s: %w", in.Name, i+1, name, err)
			}
		}
		schema.Columns = append(schema.Columns, c)
		cols = append(cols, v)
	}
	f.most.Store(max(f.most.Load(), f.open.Add(1)))
	return &textSource{Source: stream.NewMemory(schema, cols, f.segment), in: in, format: f}, nil
}

func guess(records [][]string, j int) (c stream.Column) {
	kinds := []stream.Kind{stream.Int64, stream.Float64, stream.Time}
	for _, kind := range kinds {
		v := stream.Vector{Kind: kind}
		fits, some := true, false
		for i := range records {
			fits = fits && add(&v, records[i][j]) == nil
			some = some || records[i][j] != ""
		}
		if fits && some {
			return stream.Column{Kind: kind, DateOnly: kind == stream.Time}
		}
	}
	return stream.Column{Kind: stream.Text}
}

func add(v *stream.Vector, cell string) error {
	switch v.Kind {
	case stream.Float64:
		x := math.NaN()
		if cell != "" {
			var err error
			if x, err = strconv.ParseFloat(cell, 64); err != nil {
				return err
			}
		}
		v.F64 = append(v.F64, x)
		return nil
	case stream.Text:
		if cell == "" {
			v.Code = append(v.Code, -1)
			return nil
		}
		v.Code = append(v.Code, int32(len(v.Dict.Values)))
		v.Dict.Values = append(v.Dict.Values, cell)
		return nil
	}
	var n int64
	var err error
	if cell != "" && v.Kind == stream.Time {
		var t time.Time
		t, err = time.Parse(time.DateOnly, cell)
		n = t.UnixNano()
	} else if cell != "" {
		n, err = strconv.ParseInt(cell, 10, 64)
	}
	v.I64 = append(v.I64, n)
	v.Null = append(v.Null, cell == "")
	return err
}

type textSource struct {
	stream.Source
	in     stream.Input
	format textFormat
	once   atomic.Bool
	closed atomic.Bool
}

func (s *textSource) Info() stream.Info {
	info := s.Source.Info()
	info.Format = s.format.name
	if s.in.File == nil {
		info.Rewindable, info.Sampled, info.Rows, info.Segments, info.Bytes = false, false, -1, -1, -1
	}
	return info
}

func (s *textSource) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	sc, err := s.Source.Scan(ctx, uses)
	if err != nil {
		return nil, err
	}
	if s.in.File == nil && s.once.Swap(true) {
		return nil, fmt.Errorf("%s: a pipe can be read once", s.in.Name)
	}
	return textScan{sc, s}, nil
}

func (s *textSource) Sample(ctx context.Context, uses []stream.Use, at float64) (stream.Segment, error) {
	if s.in.File == nil {
		return nil, stream.ErrNoSample
	}
	seg, err := s.Source.Sample(ctx, uses, at)
	if err != nil {
		return nil, err
	}
	return textSegment{seg, s}, nil
}

func (s *textSource) Close() error {
	if s.closed.Swap(true) {
		return fmt.Errorf("%s: closed twice", s.in.Name)
	}
	s.format.open.Add(-1)
	if s.in.File != nil {
		return s.in.File.Close()
	}
	return s.in.Pipe.Close()
}

type textScan struct {
	stream.Scan
	s *textSource
}

func (s textScan) Next(ctx context.Context) (stream.Segment, error) {
	seg, err := s.Scan.Next(ctx)
	if err != nil {
		return nil, err
	}
	return textSegment{seg, s.s}, nil
}

type textSegment struct {
	stream.Segment
	s *textSource
}

func (g textSegment) Read(b *stream.Batch) error {
	if g.s.closed.Load() {
		return fmt.Errorf("%s: read after close", g.s.in.Name)
	}
	return g.Segment.Read(b)
}

func (g textSegment) Locate(mark int64) stream.Position {
	return stream.Position{File: g.s.in.Name, Row: mark + 1}
}

// write makes files below a new folder and changes into it.
func write(t *testing.T, files map[string]string) {
	t.Helper()
	t.Chdir(t.TempDir())
	for name, content := range files {
		if err := os.MkdirAll(filepath.Dir(name), 0o777); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(name, []byte(content), 0o666); err != nil {
			t.Fatal(err)
		}
	}
}

// open opens paths in two formats: .csv with guessed kinds, .fix with fixed ones.
func open(paths []string, o stream.Options) (stream.Source, error) {
	return stream.Open(context.Background(), paths, nil,
		[]stream.Format{newTextFormat("csv", ".csv"), newTextFormat("fixed", ".fix")}, o)
}

// dump reads everything with one goroutine: "file:row a b c" for each row.
func dump(t *testing.T, src stream.Source, names ...string) []string {
	t.Helper()
	var uses []stream.Use
	for _, name := range names {
		uses = append(uses, stream.Use{Column: src.Schema().Lookup(name)})
	}
	ctx := context.Background()
	sc, err := src.Scan(ctx, uses)
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	var out []string
	var b stream.Batch
	for {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			return out
		}
		if err != nil {
			t.Fatal(err)
		}
		for {
			err := seg.Read(&b)
			if err == io.EOF {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
			for i := range b.Rows {
				at := seg.Locate(b.Marks[i])
				line := fmt.Sprintf("%s:%d", at.File, at.Row)
				for j := range b.Cols {
					line += " " + text(&b.Cols[j], i)
				}
				out = append(out, line)
			}
		}
		if err := seg.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

func text(v *stream.Vector, i int) string {
	switch {
	case v.Kind == stream.Float64:
		return strconv.FormatFloat(v.F64[i], 'g', -1, 64)
	case v.Kind == stream.Text && v.Code[i] < 0, v.Null != nil && v.Null[i]:
		return "-"
	case v.Kind == stream.Text:
		return v.Dict.Values[v.Code[i]]
	case v.Kind == stream.Time:
		return time.Unix(0, v.I64[i]).UTC().Format(time.RFC3339)
	}
	return strconv.FormatInt(v.I64[i], 10)
}
