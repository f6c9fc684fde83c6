package streamtest

import (
	"context"
	"errors"
	"io"
	"slices"
	"sync"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// textAsNumber: AsNumber of a column that is no number is refused.
func (s *suite) textAsNumber(t *testing.T, src stream.Source) {
	for j, c := range s.want.Schema.Columns {
		if c.Kind.Numeric() {
			continue
		}
		if sc, err := src.Scan(context.Background(), []stream.Use{{Column: j, AsNumber: true}}); err == nil {
			sc.Close()
			t.Errorf("column %s of kind %s can be used as number", c.Name, c.Kind)
		}
	}
	// A refused use does not use up the one scan of a pipe.
	s.compare(t, src, s.all(), 1)
}

func (s *suite) again(t *testing.T, src stream.Source) {
	s.compare(t, src, s.all(), 1)
	if src.Info().Rewindable {
		s.compare(t, src, s.bothWays(), 2)
		s.compare(t, src, s.all(), 2)
		return
	}
	if sc, err := src.Scan(context.Background(), s.all()); err == nil {
		sc.Close()
		t.Error("a source that is not rewindable was scanned twice")
	}
}

// sampleBatches is how many batches of a sample are read.
const sampleBatches = 4

func (s *suite) readSample(src stream.Source, uses []stream.Use, at float64) ([]string, error) {
	seg, err := src.Sample(context.Background(), uses, at)
	if err != nil {
		return nil, err
	}
	var out []string
	var b stream.Batch
	for range sampleBatches {
		err := seg.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil {
			seg.Close()
			return nil, err
		}
		if msg := checkBatch(&b, &s.want.Schema, uses); msg != "" {
			seg.Close()
			return nil, errors.New(msg)
		}
		if seg.Locate(b.Marks[0]).File == "" {
			seg.Close()
			return nil, errors.New("a position names no file")
		}
		out = append(out, rows(&b)...)
	}
	return out, seg.Close()
}

func (s *suite) sample(t *testing.T, src stream.Source) {
	uses := s.bothWays()
	if !src.Info().Sampled {
		if _, err := src.Sample(context.Background(), uses, 0); !errors.Is(err, stream.ErrNoSample) {
			t.Errorf("Sample of a source that is not Sampled: %v, want ErrNoSample", err)
		}
		return
	}
	table := make(map[string]bool)
	for i := range s.want.Rows() {
		table[s.want.want(uses, i)] = true
	}
	for _, at := range []float64{0, 0.001, 0.25, 1. / 3, 0.5, 0.75, 0.999, 1} {
		got, err := s.readSample(src, uses, at)
		if err != nil {
			t.Fatalf("sample at %v: %v", at, err)
		}
		again, err := s.readSample(src, uses, at)
		if err != nil {
			t.Fatalf("sample at %v, second time: %v", at, err)
		}
		if !slices.Equal(got, again) {
			t.Fatalf("two samples at %v differ", at)
		}
		for i, r := range got {
			if !table[r] {
				t.Fatalf("sample at %v: row %d is not in the table: %s", at, i, r)
			}
		}
		if (at == 0 || at == 1) && len(got) == 0 && s.want.Rows() > 0 {
			t.Fatalf("sample at %v is empty", at)
		}
		if at == 0 {
			for i, r := range got {
				if i < stream.BatchRows && r != s.want.want(uses, i) {
					t.Fatalf("sample at 0: row %d\n%s, want\n%s", i, r, s.want.want(uses, i))
				}
			}
		}
	}
	// Sampling and scanning do not disturb each other.
	var wg sync.WaitGroup
	wg.Go(func() {
		if _, err := s.readSample(src, uses, 0.5); err != nil {
			t.Errorf("sample beside a scan: %v", err)
		}
	})
	s.compare(t, src, s.all(), 2)
	wg.Wait()
}

func (s *suite) earlyClose(t *testing.T, src stream.Source) {
	ctx := context.Background()
	sc, err := src.Scan(ctx, s.all())
	if err != nil {
		t.Fatalf("Scan: %v", err)
	}
	seg, err := sc.Next(ctx)
	if err != nil && err != io.EOF {
		t.Fatalf("Next: %v", err)
	}
	if err == nil {
		var b stream.Batch
		if err := seg.Read(&b); err != nil && err != io.EOF {
			t.Fatalf("Read: %v", err)
		}
		if err := seg.Close(); err != nil {
			t.Fatalf("Segment.Close: %v", err)
		}
	}
	if err := sc.Close(); err != nil {
		t.Fatalf("Scan.Close: %v", err)
	}
	if src.Info().Rewindable {
		s.compare(t, src, s.all(), 2)
	}
}

func (s *suite) cancel(t *testing.T, src stream.Source) {
	ctx, cancel := context.WithCancel(context.Background())
	defer cancel()
	sc, err := src.Scan(ctx, s.all())
	if err != nil {
		t.Fatalf("Scan: %v", err)
	}
	ended := func(err error) bool { return err == io.EOF || errors.Is(err, context.Canceled) }
	var wg sync.WaitGroup
	for range 3 {
		wg.Go(func() {
			var b stream.Batch
			for {
				seg, err := sc.Next(ctx)
				if err != nil {
					if !ended(err) {
						t.Errorf("Next after cancel: %v", err)
					}
					return
				}
				for err == nil {
					err = seg.Read(&b)
					cancel()
				}
				if !ended(err) {
					t.Errorf("Read after cancel: %v", err)
				}
				if err := seg.Close(); err != nil && !ended(err) {
					t.Errorf("Segment.Close after cancel: %v", err)
				}
			}
		})
	}
	wg.Wait()
	if err := sc.Close(); err != nil && !ended(err) {
		t.Errorf("Scan.Close after cancel: %v", err)
	}
	if src.Info().Rewindable {
		s.compare(t, src, s.all(), 2)
	}
}

func (s *suite) stamp(t *testing.T, src stream.Source) {
	first, err := src.Stamp()
	if err != nil {
		t.Fatalf("Stamp: %v", err)
	}
	if first == "" {
		t.Error("empty stamp")
	}
	s.compare(t, src, s.all(), 1)
	second, err := src.Stamp()
	if err != nil {
		t.Fatalf("Stamp after a scan: %v", err)
	}
	if first != second {
		t.Errorf("stamp %q became %q", first, second)
	}
}

func (s *suite) parts(t *testing.T, src stream.Source) {
	if !src.Info().Rewindable {
		return
	}
	ctx := context.Background()
	whole, err := s.scan(ctx, src, s.all(), 1)
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range []int{2, 3, 7} {
		seen := make([]bool, len(whole))
		for i := range n {
			sc, err := stream.Part(src, i, n).Scan(ctx, s.all())
			if err != nil {
				t.Fatalf("part %d of %d: %v", i, n, err)
			}
			for {
				seg, err := sc.Next(ctx)
				if err == io.EOF {
					break
				}
				var p part
				if err == nil {
					p, err = s.drain(seg, s.all())
				}
				if err != nil {
					t.Fatalf("part %d of %d: %v", i, n, err)
				}
				if p.number%n != i || p.number >= len(whole) || seen[p.number] {
					t.Fatalf("part %d of %d has segment %d of %d, or has it twice", i, n, p.number, len(whole))
				}
				seen[p.number] = true
				if !slices.Equal(p.rows, whole[p.number].rows) {
					t.Fatalf("part %d of %d: segment %d has other rows than in the whole", i, n, p.number)
				}
			}
			if err := sc.Close(); err != nil {
				t.Fatal(err)
			}
		}
		if k := slices.Index(seen, false); k >= 0 {
			t.Fatalf("segment %d is in none of %d parts", k, n)
		}
	}
}
