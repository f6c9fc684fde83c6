package streamtest

import (
	"context"
	"io"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// broken spoils one thing of a source.
type broken struct {
	stream.Source
	read   func(seg stream.Segment, b *stream.Batch) error
	tally  func(stream.SegmentTally) stream.SegmentTally
	locate func(stream.Position) stream.Position
	number func(int) int
	info   func(stream.Info) stream.Info
}

func (s broken) Info() stream.Info {
	if s.info != nil {
		return s.info(s.Source.Info())
	}
	return s.Source.Info()
}

func (s broken) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	sc, err := s.Source.Scan(ctx, uses)
	return brokenScan{sc, s}, err
}

type brokenScan struct {
	stream.Scan
	s broken
}

func (s brokenScan) Next(ctx context.Context) (stream.Segment, error) {
	seg, err := s.Scan.Next(ctx)
	if err != nil {
		return nil, err
	}
	return brokenSegment{seg, s.s}, nil
}

type brokenSegment struct {
	stream.Segment
	s broken
}

func (g brokenSegment) Read(b *stream.Batch) error {
	if g.s.read != nil {
		return g.s.read(g.Segment, b)
	}
	return g.Segment.Read(b)
}

func (g brokenSegment) Tally() stream.SegmentTally {
	if g.s.tally != nil {
		return g.s.tally(g.Segment.Tally())
	}
	return g.Segment.Tally()
}

func (g brokenSegment) Locate(mark int64) stream.Position {
	if g.s.locate != nil {
		return g.s.locate(g.Segment.Locate(mark))
	}
	return g.Segment.Locate(mark)
}

func (g brokenSegment) Number() int {
	if g.s.number != nil {
		return g.s.number(g.Segment.Number())
	}
	return g.Segment.Number()
}

// Every kind of damage must be noticed by the suite.
func TestSuiteNotices(t *testing.T) {
	const rows = 1500
	columns, cols := quayTable(rows)
	table := Table{Schema: stream.Schema{Columns: columns}, Cols: cols, Files: []File{{"memory", rows}}}
	for _, c := range []struct {
		name, want string
		b          broken
	}{
		{"sound", "", broken{}},
		{"lost rows", "row 512", broken{
			read: func(seg stream.Segment, b *stream.Batch) error {
				err := seg.Read(b)
				if err == nil && b.Rows < stream.BatchRows {
					b.Rows = 0
					return io.EOF
				}
				return err
			},
			tally: func(t stream.SegmentTally) stream.SegmentTally {
				t.Rows = min(t.Rows, stream.BatchRows)
				return t
			},
		}},
		{"other cell", "row 700", broken{read: func(seg stream.Segment, b *stream.Batch) error {
			err := seg.Read(b)
			if err == nil && b.Marks[0] <= 700 && 700 < b.Marks[0]+int64(b.Rows) {
				b.Cols[1].I64 = append([]int64(nil), b.Cols[1].I64...)
				b.Cols[1].I64[700-b.Marks[0]]++
			}
			return err
		}}},
		{"long marks", "marks", broken{read: func(seg stream.Segment, b *stream.Batch) error {
			err := seg.Read(b)
			if err == nil {
				b.Marks = append([]int64{0}, b.Marks...)
			}
			return err
		}}},
		{"rows with the end", "with io.EOF", broken{read: func(seg stream.Segment, b *stream.Batch) error {
			err := seg.Read(b)
			if err != nil {
				b.Rows = 1
			}
			return err
		}}},
		{"columns exchanged", "kind", broken{read: func(seg stream.Segment, b *stream.Batch) error {
			err := seg.Read(b)
			if err == nil {
				b.Cols[0], b.Cols[1] = b.Cols[1], b.Cols[0]
			}
			return err
		}}},
		{"short tally", "Tally.Rows", broken{tally: func(t stream.SegmentTally) stream.SegmentTally {
			t.Rows /= 2
			return t
		}}},
		{"malformed", "Tally.Rows", broken{tally: func(t stream.SegmentTally) stream.SegmentTally {
			t.Malformed++
			return t
		}}},
		{"too many bytes", "bytes", broken{tally: func(t stream.SegmentTally) stream.SegmentTally {
			t.Bytes *= 2
			return t
		}}},
		{"no file", "Locate", broken{locate: func(stream.Position) stream.Position { return stream.Position{} }}},
		{"other row", "located", broken{locate: func(p stream.Position) stream.Position {
			p.Row++
			return p
		}}},
		{"gap in numbers", "segment number", broken{number: func(n int) int { return 2 * n }}},
		{"other number of segments", "Info.Segments", broken{info: func(i stream.Info) stream.Info {
			i.Segments++
			return i
		}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			c.b.Source = stream.NewMemory(table.Schema, cols, 750)
			s := suite{table}
			err := s.difference(c.b, s.all(), 2)
			switch {
			case c.want == "" && err != nil:
				t.Errorf("a sound source fails: %v", err)
			case c.want != "" && (err == nil || !strings.Contains(err.Error(), c.want)):
				t.Errorf("got %v, want an error with %q", err, c.want)
			}
		})
	}
}

// A buffer that segments share is noticed when it is overwritten while another
// segment's batch is held.
func TestSuiteNoticesSharing(t *testing.T) {
	columns, cols := quayTable(1500)
	schema := stream.Schema{Columns: columns[:1]}
	s := suite{Table{Schema: schema, Cols: cols[:1], Files: []File{{"memory", 1500}}}}
	buffer := make([]float64, stream.BatchRows)
	b := broken{
		Source: stream.NewMemory(schema, cols[:1], 1500),
		read: func(seg stream.Segment, b *stream.Batch) error {
			err := seg.Read(b)
			if err == nil {
				copy(buffer, b.Cols[0].F64)
				b.Cols[0].F64 = buffer[:b.Rows]
			}
			return err
		},
		// Tally comes between two Reads.
		tally: func(t stream.SegmentTally) stream.SegmentTally {
			buffer[0]++
			return t
		},
	}
	if err := s.difference(b, s.all(), 1); err == nil || !strings.Contains(err.Error(), "batch changed") {
		t.Errorf("got %v, want a changed batch", err)
	}
}
