package vcov_test

import (
	"context"
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// stopping cancels a run when it begins to read one segment too many.
type stopping struct {
	stream.Source
	left   atomic.Int64
	read   atomic.Int64 // segments, in all runs
	cancel func()
}

func (s *stopping) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	sc, err := s.Source.Scan(ctx, uses)
	return &stoppingScan{sc, s}, err
}

type stoppingScan struct {
	stream.Scan
	s *stopping
}

func (c *stoppingScan) Next(ctx context.Context) (stream.Segment, error) {
	seg, err := c.Scan.Next(ctx)
	if err != nil {
		return nil, err
	}
	return &stoppingSegment{Segment: seg, s: c.s}, nil
}

type stoppingSegment struct {
	stream.Segment
	s     *stopping
	begun bool
}

func (g *stoppingSegment) Read(b *stream.Batch) error {
	if !g.begun {
		g.begun = true
		g.s.read.Add(1)
		if g.s.left.Add(-1) < 0 {
			g.s.cancel()
			return context.Canceled
		}
	}
	return g.Segment.Read(b)
}

// stopAndGo fits with a checkpoint, over and over: each run is stopped when it begins
// the step-th segment of its own. It returns the result and the number of runs.
func stopAndGo(t *testing.T, src stream.Source, spec stream.Spec, o vcov.Options, step, segments int) (*vcov.Result, int, int64) {
	t.Helper()
	name := filepath.Join(t.TempDir(), "fit.ck")
	facts := []accum.Fact{{Name: "model", Value: "this"}}
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	s := &stopping{Source: src}
	for run := 1; ; run++ {
		if run > 500 {
			t.Fatal("500 runs did not bring it to an end")
		}
		c, err := accum.OpenCheckpoint(name, facts)
		if err != nil {
			t.Fatal(err)
		}
		c.Segments = segments
		c.Warn = func(err error) { t.Error(err) }
		o.Checkpoint = c
		ctx, cancel := context.WithCancel(t.Context())
		s.cancel = cancel
		s.left.Store(int64(step))
		r, err := vcov.Fit(ctx, s, d, o)
		cancel()
		if err == nil {
			if err := c.Remove(); err != nil {
				t.Fatal(err)
			}
			left, _ := os.ReadDir(filepath.Dir(name))
			if len(left) > 0 {
				t.Errorf("%s was left behind", left[0].Name())
			}
			return r, run, s.read.Load()
		}
		c.Close()
		if !errors.Is(err, context.Canceled) {
			t.Fatal(err)
		}
	}
}

// A run that is stopped again and again ends with the bits of one that never was, for
// every kind of sums and any number of workers; it reads no segment twice but for those
// that were under way.
func TestStopAndGo(t *testing.T) {
	type model struct {
		name string
		src  stream.Source
		spec stream.Spec
		o    vcov.Options
		two  bool // a second pass
	}
	tb := harbour(6000, 40, 7, 5, 3)
	wide := harbour(6000, 700, 7, 5, 4)
	units := drawPanel(rand.New(rand.NewPCG(8, 8)), 1700, stream.NoWeight).table()
	x := []string{"pallets", "tonnes", "wet", "pallets * wet"}
	keys := []string{"quay", "berth"}
	models := []model{
		{"fourth moments, clusters", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Keys: keys, Crossed: [][]int{{0, 1}}}, vcov.Options{Errors: kinds("classical", "hc1", "cr1", "cr2", "cr3:1", "cr1:2"), Passes: 1}, false},
		{"frequencies", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Weight: "f", WeightKind: stream.Frequency, Where: "tonnes > 1005", Keys: keys}, vcov.Options{Errors: kinds("hc1", "cr1"), Passes: 1}, false},
		{"rows", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Keys: keys}, vcov.Options{Errors: kinds("hc0", "hc2", "hc3", "hc4", "hc5", "cr1", "cr2:1"), Passes: 2}, true},
		{"weights", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Weight: "w", WeightKind: stream.Sampling, Keys: keys}, vcov.Options{Errors: kinds("hc1", "hc3", "cr1"), Passes: 2}, true},
		{"extended", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "pow(pallets, 2)", "pow(pallets, 3)"}, Keys: keys}, vcov.Options{Errors: kinds("hc1", "hc3", "cr1"), Arithmetic: "extended", Passes: 2}, true},
		{"extended unique rows", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "pow(pallets, 2)", "pow(pallets, 3)"}, Keys: keys}, vcov.Options{Errors: kinds("hc1", "hc3", "cr1"), Arithmetic: "extended"}, false},
		{"categories", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(crew)", "each(quay) * wet"}, Keys: keys}, vcov.Options{Errors: kinds("hc1", "hc3", "cr1"), Passes: 2}, true},
		{"category of many levels", wide.source(1024), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(berth)", "each(quay)"}, Keys: []string{"ward"}}, vcov.Options{Errors: kinds("hc1", "hc3", "cr1"), Dense: 100}, true},
		{"unique rows", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: []string{"wet", "each(crew)", "each(quay)"}}, vcov.Options{Errors: kinds("hc1", "hc3")}, false},
		{"clusters given up", tb.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Keys: []string{"berth"}}, vcov.Options{Errors: kinds("cr1"), ClusterMemory: 2000, Passes: 0}, true},
		{"spilled", wide.source(1024), stream.Spec{Outcome: "minutes", Terms: x, Keys: []string{"berth", "crew"}, Crossed: [][]int{{0, 1}}}, vcov.Options{Errors: kinds("cr1:2"), Memory: 600 << 10, ClusterMemory: 1 << 23, Passes: 1}, false},
		{"swept, clusters given up", units.source(512), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wet"}, Sweep: "crane", Keys: []string{"crane", "quay"}}, vcov.Options{Errors: kinds("classical", "cr1"), ClusterMemory: 20 << 10}, true},
		{"swept, clusters of whole units", units.source(512), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wet"}, Sweep: "crane", Keys: []string{"crane", "quay"}}, vcov.Options{Errors: kinds("classical", "cr2:1", "cr1:1", "cr1"), Passes: 1}, false},
		{"swept, clusters that split units", units.source(512), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wet"}, Sweep: "crane", Keys: []string{"crane", "night", "quay"}}, vcov.Options{Errors: kinds("classical", "cr1:1", "cr1:2")}, true},
		{"swept, with categories", units.source(512), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(night)"}, Sweep: "crane", Keys: []string{"crane", "quay"}}, vcov.Options{Errors: kinds("classical", "hc1", "cr1:1")}, true},
		{"swept", units.source(512), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wet"}, Sweep: "crane", Keys: []string{"crane", "quay"}}, vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1", "cr1:1")}, true},
	}
	for _, m := range models {
		t.Run(m.name, func(t *testing.T) {
			m.o.Workers = 2
			whole := fit(t, m.src, m.spec, m.o)
			want := fixed(t, whole)
			if two := strings.Contains(want, `"passes":1`); two == m.two {
				t.Fatalf("the model takes another route than it is here for: %.300s", want[strings.Index(want, `"passes"`):])
			}
			if (whole.Run.SpilledRuns > 0) != (m.name == "spilled") {
				t.Fatalf("%d runs went to scratch", whole.Run.SpilledRuns)
			}
			steps := []struct{ step, segments, workers int }{{1000, 1, 2}, {4, 1, 3}, {3, 2, 1}, {1, 1, 1}, {11, 3, 8}}
			if testing.Short() {
				steps = steps[1:3]
			}
			for _, s := range steps {
				m.o.Workers = s.workers
				got, runs, read := stopAndGo(t, m.src, m.spec, m.o, s.step, s.segments)
				if g := fixed(t, got); g != want {
					t.Errorf("stopped after %d segments, saved every %d, %d workers, in %d runs:\n%s\nwithout stops:\n%s", s.step, s.segments, s.workers, runs, g, want)
				}
				if s.step < 5 && runs < 2 {
					t.Error("it was never stopped")
				}
				if per := int64(got.Run.Segments) * int64(got.Run.Passes); s.workers == 1 && s.segments == 1 && read > per+int64(runs) {
					t.Errorf("%d segments were begun in %d runs, want %d and one for each stop", read, runs, per)
				}
			}
		})
	}
}
