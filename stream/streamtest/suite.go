package streamtest

import (
	"context"
	"errors"
	"fmt"
	"io"
	"runtime"
	"slices"
	"sync"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// limit is how long one law may take before it counts as hanging.
const limit = 30 * time.Second

// TestSource checks that the sources which open returns obey these laws:
//
//  1. Schema and Info agree with the table and with what a scan delivers.
//  2. Segments are numbered from 0 without gaps and handed out in that order;
//     after the last one Next answers io.EOF for good.
//  3. A batch has BatchRows rows except at the end of a segment; its vectors and
//     marks have the promised shapes and hold until the next Read; after the
//     last batch Read answers io.EOF for good.
//  4. The rows of the segments in the order of their numbers are the table,
//     whatever the number of goroutines.
//  5. Columns come in the order of the uses, also none, also one column both
//     ways; AsNumber equals the conversion of the cells.
//  6. A rewindable source can be scanned again with equal rows, every other one
//     refuses.
//  7. Sample starts with the first row at 0, gives rows of the table, the same
//     ones every time; a source without it answers ErrNoSample.
//  8. Tallies add up, and never run backwards.
//  9. Locate names the file (and the row within it, if it knows).
//  10. A scan can be closed early, and a cancelled one ends.
//  11. Stamps of an unchanged input are equal.
//  12. Parts have the segments of the whole, with the same rows.
//
// open is called several times and must return a fresh source over the same
// input each time; the suite closes it.
func TestSource(t *testing.T, open func(t *testing.T) stream.Source, want Table) {
	t.Helper()
	if n := want.Rows(); len(want.Cols) != len(want.Schema.Columns) {
		t.Fatalf("table: %d columns for a schema of %d", len(want.Cols), len(want.Schema.Columns))
	} else {
		for j := range want.Cols {
			if l := cells(&want.Cols[j]); l != n {
				t.Fatalf("table: column %s has %d rows, files have %d", want.Schema.Columns[j].Name, l, n)
			}
		}
	}
	law := func(name string, f func(t *testing.T, src stream.Source)) {
		t.Run(name, func(t *testing.T) {
			src := open(t)
			within(t, func() { f(t, src) })
			if err := src.Close(); err != nil {
				t.Errorf("Close: %v", err)
			}
		})
	}
	s := suite{want}
	law("info", s.info)
	law("one by one", s.serial)
	for _, n := range []int{1, 2, 3, 8} {
		law(fmt.Sprintf("%d goroutines", n), func(t *testing.T, src stream.Source) { s.parallel(t, src, n) })
	}
	law("uses reversed", func(t *testing.T, src stream.Source) {
		uses := s.all()
		slices.Reverse(uses)
		s.compare(t, src, uses, 2)
	})
	law("uses none", func(t *testing.T, src stream.Source) { s.compare(t, src, nil, 2) })
	law("uses both ways", func(t *testing.T, src stream.Source) { s.compare(t, src, s.bothWays(), 2) })
	law("text as number", s.textAsNumber)
	law("again", s.again)
	law("sample", s.sample)
	law("early close", s.earlyClose)
	law("cancel", s.cancel)
	law("stamp", s.stamp)
	law("parts", s.parts)
}

func cells(v *stream.Vector) int {
	return max(len(v.F64), len(v.I64), len(v.Code))
}

// within fails the test with all stacks if f does not end in time. f runs in
// its own goroutine and may call FailNow there.
func within(t *testing.T, f func()) {
	t.Helper()
	done := make(chan struct{})
	go func() {
		defer close(done)
		f()
	}()
	select {
	case <-done:
	case <-time.After(limit):
		buf := make([]byte, 1<<20)
		t.Fatalf("hangs:\n%s", buf[:runtime.Stack(buf, true)])
	}
}

type suite struct{ want Table }

// all uses every column as it is.
func (s *suite) all() []stream.Use {
	uses := make([]stream.Use, len(s.want.Schema.Columns))
	for j := range uses {
		uses[j].Column = j
	}
	return uses
}

// bothWays uses every column as it is and every numeric one also as number.
func (s *suite) bothWays() []stream.Use {
	var uses []stream.Use
	for j, c := range s.want.Schema.Columns {
		if c.Kind.Numeric() {
			uses = append(uses, stream.Use{Column: j, AsNumber: true})
		}
		uses = append(uses, stream.Use{Column: j})
	}
	return uses
}

func (s *suite) info(t *testing.T, src stream.Source) {
	if got := src.Schema(); !slices.Equal(got.Columns, s.want.Schema.Columns) {
		t.Fatalf("schema\n%+v, want\n%+v", got.Columns, s.want.Schema.Columns)
	}
	info := src.Info()
	if info.Files != len(s.want.Files) {
		t.Errorf("Info.Files = %d, want %d", info.Files, len(s.want.Files))
	}
	if info.Rows != -1 && info.Rows != int64(s.want.Rows()) {
		t.Errorf("Info.Rows = %d, want %d or -1", info.Rows, s.want.Rows())
	}
	if info.Bytes < -1 || info.Segments < -1 || info.WorkerBytes < 0 {
		t.Errorf("Info has a negative size: %+v", info)
	}
	if info.Format == "" {
		t.Error("Info.Format is empty")
	}
}

// part is what one segment delivered.
type part struct {
	number int
	rows   []string
	places []stream.Position
	tally  stream.SegmentTally
}

// drain reads a segment to its end and closes it.
func (s *suite) drain(seg stream.Segment, uses []stream.Use) (part, error) {
	p := part{number: seg.Number()}
	fail := func(format string, args ...any) (part, error) {
		seg.Close()
		return p, fmt.Errorf("segment %d: %w", p.number, fmt.Errorf(format, args...))
	}
	var b stream.Batch
	var held []string // the last batch as it was when it came
	before := seg.Tally()
	short := false
	for {
		if held != nil && !slices.Equal(rows(&b), held) {
			return fail("a batch changed before the next Read")
		}
		err := seg.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil {
			return fail("Read: %w", err)
		}
		if msg := checkBatch(&b, &s.want.Schema, uses); msg != "" {
			return fail("%s", msg)
		}
		if short {
			return fail("a batch after a short one")
		}
		short = b.Rows < stream.BatchRows
		held = rows(&b)
		p.rows = append(p.rows, held...)
		// Locating may be slow: the first, a middle and the last row of a batch.
		at := make([]stream.Position, b.Rows)
		for _, i := range []int{0, b.Rows / 2, b.Rows - 1} {
			at[i] = seg.Locate(b.Marks[i])
		}
		p.places = append(p.places, at...)
		tally := seg.Tally()
		if tally.Rows < before.Rows || tally.Malformed < before.Malformed || tally.Bytes < before.Bytes {
			return fail("tally ran backwards: %+v after %+v", tally, before)
		}
		before = tally
		runtime.Gosched()
	}
	if b.Rows != 0 {
		return fail("a batch of %d rows with io.EOF", b.Rows)
	}
	if err := seg.Read(&b); err != io.EOF {
		return fail("Read after io.EOF: %v", err)
	}
	p.tally = seg.Tally()
	if want := int64(len(p.rows)) + p.tally.Malformed; p.tally.Rows != want {
		return fail("Tally.Rows = %d, want %d delivered and %d malformed", p.tally.Rows, len(p.rows), p.tally.Malformed)
	}
	if n := len(p.tally.Problems); int64(n) > p.tally.Malformed || n > stream.MaxProblems {
		return fail("%d problems described for %d malformed rows", n, p.tally.Malformed)
	}
	if err := seg.Close(); err != nil {
		return fail("Close: %w", err)
	}
	return p, nil
}

// scan reads everything with the given number of goroutines and returns the
// parts by number.
func (s *suite) scan(ctx context.Context, src stream.Source, uses []stream.Use, goroutines int) ([]part, error) {
	sc, err := src.Scan(ctx, uses)
	if err != nil {
		return nil, fmt.Errorf("starting a scan: %w", err)
	}
	var (
		mu    sync.Mutex
		parts []part
		errs  []error
		wg    sync.WaitGroup
	)
	for range goroutines {
		wg.Go(func() {
			for {
				seg, err := sc.Next(ctx)
				if err == io.EOF {
					break
				}
				var p part
				if err != nil {
					err = fmt.Errorf("asking for a segment: %w", err)
				} else {
					p, err = s.drain(seg, uses)
				}
				mu.Lock()
				parts = append(parts, p)
				if err != nil {
					errs = append(errs, err)
				}
				mu.Unlock()
				if err != nil {
					return
				}
			}
			if _, err := sc.Next(ctx); err != io.EOF {
				mu.Lock()
				errs = append(errs, fmt.Errorf("asking for a segment after io.EOF: %v", err))
				mu.Unlock()
			}
		})
	}
	wg.Wait()
	if err := sc.Close(); err != nil {
		errs = append(errs, fmt.Errorf("closing a scan: %w", err))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	slices.SortFunc(parts, func(a, b part) int { return a.number - b.number })
	for i, p := range parts {
		if p.number != i {
			return nil, fmt.Errorf("segment number %d where %d should be", p.number, i)
		}
	}
	return parts, nil
}

// compare scans and compares everything with the table.
func (s *suite) compare(t *testing.T, src stream.Source, uses []stream.Use, goroutines int) {
	t.Helper()
	if err := s.difference(src, uses, goroutines); err != nil {
		t.Fatal(err)
	}
}

// difference scans everything and says where it differs from the table.
func (s *suite) difference(src stream.Source, uses []stream.Use, goroutines int) error {
	parts, err := s.scan(context.Background(), src, uses, goroutines)
	if err != nil {
		return err
	}
	row := 0
	var tally stream.SegmentTally
	for _, p := range parts {
		for i, got := range p.rows {
			if row >= s.want.Rows() {
				return fmt.Errorf("more than %d rows", s.want.Rows())
			}
			if want := s.want.want(uses, row); got != want {
				return fmt.Errorf("row %d (segment %d row %d)\n%s, want\n%s", row, p.number, i, got, want)
			}
			file, n := s.want.fileOf(row)
			if at := p.places[i]; at != (stream.Position{}) && (at.File != file || at.Row != 0 && at.Row != n && s.want.Malformed == 0) {
				return fmt.Errorf("row %d is located at %q, want %s row %d", row, at, file, n)
			}
			row++
		}
		if len(p.rows) > 0 && (p.places[0].File == "" || p.places[len(p.rows)-1].File == "") {
			return fmt.Errorf("segment %d: Locate names no file", p.number)
		}
		tally.Rows += p.tally.Rows
		tally.Malformed += p.tally.Malformed
		tally.Bytes += p.tally.Bytes
	}
	if row != s.want.Rows() {
		return fmt.Errorf("%d rows, want %d", row, s.want.Rows())
	}
	if tally.Malformed != s.want.Malformed {
		return fmt.Errorf("%d malformed rows, want %d", tally.Malformed, s.want.Malformed)
	}
	info := src.Info()
	if info.Segments >= 0 && info.Segments != len(parts) {
		return fmt.Errorf("Info.Segments = %d, %d came", info.Segments, len(parts))
	}
	if info.Bytes >= 0 && tally.Bytes > info.Bytes {
		return fmt.Errorf("tallies add up to %d bytes, the input has %d", tally.Bytes, info.Bytes)
	}
	return nil
}

func (s *suite) parallel(t *testing.T, src stream.Source, goroutines int) {
	s.compare(t, src, s.all(), goroutines)
}

// serial checks that one caller gets the segments in order.
func (s *suite) serial(t *testing.T, src stream.Source) {
	ctx := context.Background()
	sc, err := src.Scan(ctx, s.all())
	if err != nil {
		t.Fatalf("Scan: %v", err)
	}
	for want := 0; ; want++ {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatalf("Next: %v", err)
		}
		if seg.Number() != want {
			t.Fatalf("segment %d came where %d should", seg.Number(), want)
		}
		if _, err := s.drain(seg, s.all()); err != nil {
			t.Fatal(err)
		}
	}
	for range 3 {
		if _, err := sc.Next(ctx); err != io.EOF {
			t.Fatalf("Next after io.EOF: %v", err)
		}
	}
	if err := sc.Close(); err != nil {
		t.Fatalf("Scan.Close: %v", err)
	}
}
