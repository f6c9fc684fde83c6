package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"gonum.org/v1/gonum/stat"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// profileData has one column of each kind, with missing cells; ids has more
// values than are counted.
func profileData(rows int) (stream.Schema, []stream.Vector) {
	rng := rand.New(rand.NewPCG(7, 7))
	dict := &stream.Dict{Values: []string{"never used", "deck", "hatch", "motor"}}
	x, big := make([]float64, rows), make([]float64, rows)
	ids, few, u, b, ts := make([]int64, rows), make([]int64, rows), make([]int64, rows), make([]int64, rows), make([]int64, rows)
	null := make([]bool, rows)
	code := make([]int32, rows)
	for i := range rows {
		x[i] = rng.NormFloat64()
		big[i] = 1e9 + float64(rng.IntN(7))
		ids[i] = int64(i*7919) % int64(2*maxDistinct)
		few[i] = int64(rng.IntN(5)) - 2
		top := uint64(math.MaxUint64)
		u[i] = int64(top - uint64(rng.IntN(3)))
		b[i] = int64(rng.IntN(2))
		ts[i] = int64(rng.IntN(40)) * 86_400e9
		null[i] = rng.IntN(10) == 0
		code[i] = int32(rng.IntN(4)) // 0 stands for missing below
		if code[i] == 0 {
			code[i] = -1
		}
		if rng.IntN(20) == 0 {
			x[i] = math.NaN()
		}
	}
	s := stream.Schema{Columns: []stream.Column{
		{Name: "x", Kind: stream.Float64}, {Name: "big", Kind: stream.Float64}, {Name: "ids", Kind: stream.Int64}, {Name: "few", Kind: stream.Int64},
		{Name: "u", Kind: stream.Uint64}, {Name: "b", Kind: stream.Bool}, {Name: "ts", Kind: stream.Time, DateOnly: true}, {Name: "barge", Kind: stream.Text},
	}}
	return s, []stream.Vector{
		{Kind: stream.Float64, F64: x}, {Kind: stream.Float64, F64: big}, {Kind: stream.Int64, I64: ids}, {Kind: stream.Int64, I64: few, Null: null},
		{Kind: stream.Uint64, I64: u}, {Kind: stream.Bool, I64: b}, {Kind: stream.Time, I64: ts}, {Kind: stream.Text, Code: code, Dict: dict},
	}
}

func profiled(t *testing.T, src stream.Source, workers int) (*columnsDoc, string) {
	t.Helper()
	p, err := profileSource(context.Background(), src, workers, new(accum.Meter))
	if err != nil {
		t.Fatal(err)
	}
	d := newColumnsDoc(src.Info(), p)
	text, err := json.Marshal(d)
	if err != nil {
		t.Fatal(err)
	}
	return d, string(text)
}

// Against counts and moments made without segments; mean and standard deviation
// by gonum's two-pass MeanStdDev.
func TestProfile(t *testing.T) {
	const rows = 30_000
	schema, cols := profileData(rows)
	d, _ := profiled(t, stream.NewMemory(schema, cols, 3000), 2)
	if d.Rows.Read != rows {
		t.Errorf("%d rows", d.Rows.Read)
	}
	for j, c := range schema.Columns {
		got := d.Columns[j]
		v := &cols[j]
		var numbers []float64
		counts := map[string]int64{}
		missing := int64(0)
		for i := range rows {
			switch c.Kind {
			case stream.Float64:
				if math.IsNaN(v.F64[i]) {
					missing++
					continue
				}
				numbers = append(numbers, v.F64[i])
			case stream.Text:
				if v.Code[i] < 0 {
					missing++
					continue
				}
			default:
				if v.Null != nil && v.Null[i] {
					missing++
					continue
				}
				switch c.Kind {
				case stream.Uint64:
					numbers = append(numbers, float64(uint64(v.I64[i])))
				case stream.Time:
				default:
					numbers = append(numbers, float64(v.I64[i]))
				}
			}
			counts[stream.FormatKey(stream.KeyColumn{Kind: c.Kind, DateOnly: c.DateOnly}, nil, v.Key(i))]++
		}
		if got.Missing != missing {
			t.Errorf("%s: %d missing, want %d", c.Name, got.Missing, missing)
		}
		if exact := len(counts) <= maxDistinct; got.DistinctExact != exact || exact && got.Distinct != len(counts) {
			t.Errorf("%s: distinct %d (exact %t), want %d", c.Name, got.Distinct, got.DistinctExact, len(counts))
		}
		for _, f := range got.Frequent {
			if counts[f.Value] != f.Count {
				t.Errorf("%s: %s counted %d times, want %d", c.Name, f.Value, f.Count, counts[f.Value])
			}
			for v, n := range counts {
				if n > f.Count && !slices.ContainsFunc(got.Frequent, func(g frequentDoc) bool { return g.Value == v }) {
					t.Errorf("%s: %s is more frequent than %s", c.Name, v, f.Value)
				}
			}
		}
		if len(numbers) == 0 {
			if got.Mean.Exists() || got.SD.Exists() {
				t.Errorf("%s has a mean", c.Name)
			}
			continue
		}
		mean, sd := stat.MeanStdDev(numbers, nil)
		if math.Abs(float64(got.Mean)-mean) > 1e-12*(math.Abs(mean)+sd) || math.Abs(float64(got.SD)-sd) > 1e-12*sd && c.Kind != stream.Uint64 {
			t.Errorf("%s: mean %v sd %v, want %v %v", c.Name, got.Mean, got.SD, mean, sd)
		}
	}
	for name, want := range map[string][2]any{
		"few": {int64(-2), int64(2)}, "u": {uint64(math.MaxUint64 - 2), uint64(math.MaxUint64)}, "b": {"false", "true"},
		"ts": {"1970-01-01", "1970-02-09"}, "barge": {"deck", "motor"},
	} {
		i := schema.Lookup(name)
		if got := [2]any{d.Columns[i].Min, d.Columns[i].Max}; got != want {
			t.Errorf("%s: from %v to %v, want %v", name, got[0], got[1], want)
		}
	}
}

// The same bytes for any number of workers.
func TestProfileWorkers(t *testing.T) {
	schema, cols := profileData(20_000)
	_, want := profiled(t, stream.NewMemory(schema, cols, 700), 1)
	for _, workers := range []int{2, 3, 8} {
		if _, got := profiled(t, stream.NewMemory(schema, cols, 700), workers); got != want {
			t.Errorf("%d workers: %s", workers, cmp.Diff(want, got))
		}
	}
	// However the rows are cut, counts are equal.
	d1, _ := profiled(t, stream.NewMemory(schema, cols, 20_000), 1)
	d2, _ := profiled(t, stream.NewMemory(schema, cols, 513), 4)
	for j := range d1.Columns {
		a, b := d1.Columns[j], d2.Columns[j]
		a.Mean, a.SD, b.Mean, b.SD = 0, 0, 0, 0
		if d := cmp.Diff(a, b); d != "" {
			t.Errorf("%s: %s", a.Name, d)
		}
	}
}

// faulty fails in some segments, the later ones sooner.
type faulty struct {
	stream.Source
	bad map[int]bool
}

type faultyScan struct {
	stream.Scan
	f *faulty
}

type faultySegment struct {
	stream.Segment
	number int
}

func (f *faulty) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	s, err := f.Source.Scan(ctx, uses)
	return &faultyScan{s, f}, err
}

func (s *faultyScan) Next(ctx context.Context) (stream.Segment, error) {
	g, err := s.Scan.Next(ctx)
	if err == nil && s.f.bad[g.Number()] {
		return &faultySegment{g, g.Number()}, nil
	}
	return g, err
}

func (g *faultySegment) Read(b *stream.Batch) error {
	if g.number == 5 {
		panic("a reader's defect")
	}
	if g.number == 3 {
		// The first fault of the input shows only at the end of its segment.
		err := g.Segment.Read(b)
		if !errors.Is(err, io.EOF) {
			return err
		}
	}
	return fmt.Errorf("fault in segment %d", g.number)
}

// The first fault of the input is told, whichever worker is faster, and no
// worker is left waiting.
func TestProfileFaults(t *testing.T) {
	schema, cols := profileData(20_000)
	for _, workers := range []int{1, 2, 8} {
		src := &faulty{stream.NewMemory(schema, cols, 600), map[int]bool{3: true, 4: true, 6: true}}
		_, err := profileSource(context.Background(), src, workers, new(accum.Meter))
		if err == nil || err.Error() != "fault in segment 3" {
			t.Errorf("%d workers: %v", workers, err)
		}
		src.bad = map[int]bool{5: true}
		var in *internalError
		if _, err := profileSource(context.Background(), src, workers, new(accum.Meter)); !errors.As(err, &in) {
			t.Errorf("%d workers: %v", workers, err)
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := profileSource(ctx, stream.NewMemory(schema, cols, 600), 4, new(accum.Meter)); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

// A column without any row has no ends, mean or values.
func TestProfileEmpty(t *testing.T) {
	schema, cols := profileData(0)
	d, text := profiled(t, stream.NewMemory(schema, cols, 10), 2)
	if d.Rows.Read != 0 || strings.Contains(text, "NaN") || d.Columns[0].Min != nil || d.Columns[0].Mean.Exists() {
		t.Error(text)
	}
}

// Infinite cells are counted and leave mean and sd alone.
func TestProfileInfinite(t *testing.T) {
	schema := stream.Schema{Columns: []stream.Column{{Name: "x", Kind: stream.Float64}}}
	cols := []stream.Vector{{Kind: stream.Float64, F64: []float64{1, math.Inf(1), 3, math.Copysign(0, -1), 0}}}
	d, text := profiled(t, stream.NewMemory(schema, cols, 10), 1)
	c := d.Columns[0]
	if c.Infinite != 1 || c.Mean != 1 || c.Distinct != 4 || c.Note == nil {
		t.Error(text)
	}
}

// A spool lies in a folder of its own in the scratch folder.
func TestSpool(t *testing.T) {
	dir := t.TempDir()
	a := &app{}
	s := newSettings()
	s.scratch = dir
	one, err1 := a.newSpool(s)
	two, err2 := a.newSpool(s)
	if err1 != nil || err2 != nil || one == two || filepath.Dir(filepath.Dir(one)) != dir {
		t.Fatal(one, two, err1, err2)
	}
	a.cleanup()
	if list, err := os.ReadDir(dir); err != nil || len(list) != 0 {
		t.Error(list, err)
	}
	s.scratch = filepath.Join(dir, "none")
	if _, err := a.newSpool(s); err == nil {
		t.Error("a folder that does not exist was taken")
	}
}

func TestWantsSpool(t *testing.T) {
	a := &app{stdin: io.NopCloser(strings.NewReader(""))}
	for _, c := range []struct {
		words []string
		data  string
		want  bool
	}{
		{[]string{"terms", "x"}, "-", false},
		{[]string{"terms", "x", "passes", "2"}, "-", true},
		{[]string{"terms", "x", "passes", "2"}, "file.csv", false},
		{[]string{"terms", "x", "errors", "hc3"}, "-", true},
		{[]string{"terms", "x", "errors", "hc3", "passes", "1"}, "-", false},
		{[]string{"terms", "each(x)"}, "-", true},
		{[]string{"terms", "x", "sweep", "g"}, "-", false},
		{[]string{"terms", "x", "sweep", "g", "errors", "classical, cr1(g)"}, "-", false},
		{[]string{"terms", "x", "sweep", "g", "errors", "hc1"}, "-", true},
		{[]string{"terms", "x", "sweep", "g", "errors", "cr1(q)"}, "-", false},
		{[]string{"terms", "x", "sweep", "g", "errors", "cr1(q)", "passes", "2"}, "-", true},
		{[]string{"terms", "x", "sweep", "g", "errors", "cr1(q), hc1"}, "-", true},
		{[]string{"terms", "x", "sweep", "g", "errors", "driscoll-kraay(q)"}, "-", true},
		{[]string{"terms", "x", "sweep", "g", "errors", "cr1(g, q)"}, "-", true},
		{[]string{"terms", strings.Repeat("x, ", 25) + "x"}, "-", true},
	} {
		s := given(t, c.words...)
		s.data = []string{c.data}
		r, err := s.parseErrors()
		if err != nil {
			t.Fatal(err)
		}
		if got := a.wantsSpool(s, r); got != c.want {
			t.Errorf("%q %s: %t", c.words, c.data, got)
		}
	}
}
