package vcov_test

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

func has(r *vcov.Result, code string) bool {
	return slices.ContainsFunc(r.Warnings, func(w vcov.Warning) bool { return w.Code == code })
}

// What cannot be swept is refused, and by name.
func TestSweepRefusals(t *testing.T) {
	tb := &table{}
	tb.float("minutes", []float64{1, 2, 4, 8})
	tb.float("tonnes", []float64{1, 3, 2, 5})
	tb.int("crane", []int64{1, 2, 3, 4})
	tb.text("barge", []string{"a", "b", "a", "b"})
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"tonnes"}, Sweep: "crane"}
	_, err := tryFit(tb.source(4), spec, vcov.Options{Errors: kinds("classical")})
	var alone *accum.SingletonsError
	if !errors.As(err, &alone) || alone.Rows != 4 || !strings.Contains(err.Error(), "crane") {
		t.Errorf("four units of one row: %v", err)
	}
	for _, c := range []struct {
		change func(*stream.Spec, *vcov.Options)
		want   string
	}{
		{func(s *stream.Spec, o *vcov.Options) { s.Terms = []string{"each(barge)"}; o.Passes = 1 }, "a reading of their levels"},
		{func(s *stream.Spec, o *vcov.Options) { s.Terms = nil }, "no terms beside the effects of crane"},
		{func(s *stream.Spec, o *vcov.Options) { s.Sweep = "1 + 2" }, "read no column"},
		{func(s *stream.Spec, o *vcov.Options) { s.Sweep = "each(crane)" }, "units are named by crane alone"},
		{func(s *stream.Spec, o *vcov.Options) { o.Shape = true }, "description of clusters"},
		{func(s *stream.Spec, o *vcov.Options) { o.Errors = kinds("hac") }, "hac is not for effects that are swept out"},
		{func(s *stream.Spec, o *vcov.Options) { o.Errors, o.Passes = kinds("hc1"), 1 }, "hc1 needs two passes"},
		{func(s *stream.Spec, o *vcov.Options) { o.Hypotheses = []string{"constant = 0"} }, "constant"},
	} {
		s, o := spec, vcov.Options{Errors: kinds("classical")}
		c.change(&s, &o)
		if _, err := tryFit(tb.source(4), s, o); !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v, want a use error with %q", err, c.want)
		}
	}
	p := drawPanel(rand.New(rand.NewPCG(1, 1)), 50, stream.NoWeight)
	_, err = tryFit(openPipe(t, p.table().csv(), stream.Options{}), p.spec(stream.NoWeight), vcov.Options{Errors: kinds("hc1")})
	if !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), "--passes 2") {
		t.Errorf("hc1 by a pipe: %v", err)
	}
}

// A row without its unit is dropped and counted; a row of frequency two is no
// singleton; units may be texts.
func TestSweepRows(t *testing.T) {
	tb := &table{}
	tb.float("minutes", []float64{1, 2, 4, 8, 3, 9, 5, 7})
	tb.float("tonnes", []float64{1, 3, 2, 5, 2, 7, 1, 1})
	tb.float("f", []float64{1, 1, 1, 1, 1, 1, 2, 1})
	tb.text("crane", []string{"a", "b", "a", "b", "", "b", "c", "d"})
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"tonnes"}, Sweep: "crane", Weight: "f", WeightKind: stream.Frequency}
	r := fit(t, tb.source(3), spec, vcov.Options{Errors: kinds("classical", "hc2")})
	if r.Rows.Read != 8 || r.Rows.Missing != 1 || r.Rows.MissingBy["crane"] != 1 || r.Rows.Singleton != 1 || r.Rows.Used != 6 || r.N != 7 || r.Sweep.Effects != 3 || r.Residual.DF != 3 || r.Weight.Sum != 7 {
		t.Errorf("%+v, N %d, %+v, df %d, weight %v", r.Rows, r.N, r.Sweep, r.Residual.DF, r.Weight.Sum)
	}
	// Within a: tonnes -.5, .5, minutes -1.5, 1.5; within b: -2, 0, 2 and -13/3, 5/3, 8/3.
	close2(t, "slope", r.Estimates[0], (0.5*1.5*2+2*13/3.+2*8/3.)/(0.5+8), 1e-14)
}

// A term that does not vary within units has no estimate, also beside an offset; the
// others are as without it.
func TestSweepTermOfTheUnit(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(4, 4)), 50, stream.NoWeight)
	tb := p.table()
	own := make([]float64, len(p.y))
	for i, c := range p.crane {
		own[i] = 1e4 + math.Sin(float64(c))
	}
	tb.float("reach", own)
	spec := p.spec(stream.NoWeight)
	o := vcov.Options{Errors: append(kinds("classical", "hc1"), vcov.Kind{Name: "cr1", Cluster: 0})}
	want := fit(t, tb.source(40), spec, o)
	for _, terms := range [][]string{
		{"reach", "pallets", "tonnes", "wet"}, {"pallets", "tonnes", "wet", "reach"}, {"pallets", "reach", "tonnes", "wet", "log(reach)"},
		{"pallets", "tonnes", "wet", "pallets + reach"},
	} {
		for _, arithmetic := range []string{"auto", "double", "extended"} {
			spec.Terms = terms
			o.Arithmetic = arithmetic
			r := fit(t, tb.source(40), spec, o)
			if len(r.Aliased) != len(terms)-3 || r.Rank != 3 {
				t.Errorf("%v, %s: aliased %+v, rank %d", terms, arithmetic, r.Aliased, r.Rank)
				continue
			}
			if a := r.Aliased[0]; (len(a.DependsOn) > 0) != (terms[3] == "pallets + reach") {
				t.Errorf("%v: %+v", terms, a)
			}
			for j, name := range want.Terms {
				at := slices.Index(r.Terms, name)
				close2(t, name, r.Estimates[at], float64(want.Estimates[j]), 1e-9)
				for i := range want.Errors {
					close2(t, name, r.Errors[i].SE[at], float64(want.Errors[i].SE[j]), 1e-9)
				}
			}
		}
	}
}

// The terms and the units together may give the outcome exactly, or it may not vary
// within units.
func TestSweepPerfectAndConstant(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(6, 4)), 40, stream.NoWeight)
	for i, c := range p.crane {
		p.x[0][i] = float64(i % 7)
		p.y[i] = 3*p.x[0][i] + float64(c)
	}
	spec := p.spec(stream.NoWeight)
	spec.Terms = []string{"pallets"}
	ks := append(kinds("classical", "hc1"), vcov.Kind{Name: "cr1", Cluster: 0})
	r := fit(t, p.table().source(50), spec, vcov.Options{Errors: ks})
	if !has(r, "perfect-fit") || math.Abs(float64(r.Estimates[0])-3) > 1e-12 || r.R2 != 1 {
		t.Errorf("%v, R2 %v, %+v", r.Estimates, r.R2, r.Warnings)
	}
	for i, c := range p.crane {
		p.y[i] = math.Sqrt(float64(c))
	}
	if r = fit(t, p.table().source(50), spec, vcov.Options{Errors: ks}); r.R2.Exists() || math.Abs(float64(r.Estimates[0])) > 1e-12 {
		t.Errorf("R2 %v, %v, %+v", r.R2, r.Estimates, r.Warnings)
	}
}

// Errors of one pass over a pipe, and over a compressed file, whose first rows make the
// frame, are those of a file; hypotheses are tested as everywhere.
func TestSweepByPipe(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 4))
	p := drawPanel(r, 48_000, stream.NoWeight)
	order := make([]int, len(p.y)) // sorted by a term: the first rows stand for nothing
	for i := range order {
		order[i] = i
	}
	slices.SortFunc(order, func(a, b int) int { return int(math.Copysign(1, p.x[0][a]-p.x[0][b])) })
	q := &panel{}
	for _, i := range order {
		for j := range q.x {
			q.x[j] = append(q.x[j], p.x[j][i])
		}
		q.y, q.w = append(q.y, p.y[i]), append(q.w, 1)
		q.crane, q.quay, q.night = append(q.crane, p.crane[i]), append(q.quay, p.quay[i]), append(q.night, p.night[i])
	}
	text := q.table().csv()
	if len(text) < 9<<20 {
		t.Fatalf("%d bytes are too few for several segments", len(text))
	}
	spec := p.spec(stream.NoWeight)
	o := vcov.Options{Errors: append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 0}), Hypotheses: []string{"pallets = 2, tonnes = -1"}}
	want := fit(t, openText(t, text, stream.Options{}), spec, o)
	var zip bytes.Buffer
	w := gzip.NewWriter(&zip)
	if _, err := w.Write(text); err != nil || w.Close() != nil {
		t.Fatal(err)
	}
	zipped := write(t, "rows.csv.gz", zip.Bytes())
	for _, workers := range []int{1, 3} {
		o.Workers = workers
		for name, got := range map[string]*vcov.Result{
			"pipe": fit(t, openPipe(t, text, stream.Options{}), spec, o),
			"gzip": fit(t, openFile(t, zipped, stream.Options{}), spec, o),
		} {
			if name == "pipe" && (got.Run.Passes != 1 || got.Run.Arithmetic != "extended") {
				t.Errorf("%d passes, %s", got.Run.Passes, got.Run.Arithmetic)
			}
			for j := range 3 {
				close2(t, name, got.Estimates[j], float64(want.Estimates[j]), 1e-12)
				for i := range got.Errors {
					close2(t, fmt.Sprint(name, " ", got.Errors[i].Name()), got.Errors[i].SE[j], float64(want.Errors[i].SE[j]), 1e-11)
				}
			}
			for i := range want.Hypotheses {
				close2(t, name, got.Hypotheses[i].F, float64(want.Hypotheses[i].F), 1e-9)
			}
		}
	}
}

// Stock and Watson (2008, doi:10.1111/j.0012-9682.2008.00821.x): with effects of many
// units of T rows hc1 does not tend to the variance of the estimates if the spread goes
// with the terms; errors by units do. Units of three rows, the spread of the outcome
// growing with the square of the term: hc1 is too small. The fit says so.
func TestSweepFewRowsPerUnit(t *testing.T) {
	const units, rows, reps = 300, 3, 200
	r := rand.New(rand.NewPCG(2008, 3))
	var sum, square, hc, cr float64
	for range reps {
		var x, y []float64
		var crane []int64
		for c := range units {
			for range rows {
				v := r.NormFloat64()
				x, crane = append(x, v), append(crane, int64(c))
				y = append(y, float64(c%5)+v*v*r.NormFloat64())
			}
		}
		tb := &table{}
		tb.float("minutes", y)
		tb.float("tonnes", x)
		tb.int("crane", crane)
		f := fit(t, tb.source(1000), stream.Spec{Outcome: "minutes", Terms: []string{"tonnes"}, Sweep: "crane", Keys: []string{"crane"}},
			vcov.Options{Errors: kinds("hc1", "cr1"), Workers: 1})
		b, h, c := float64(f.Estimates[0]), float64(f.Errors[0].SE[0]), float64(f.Errors[1].SE[0])
		sum, square, hc, cr = sum+b, square+b*b, hc+h*h, cr+c*c
		if !has(f, "few-rows-per-unit") {
			t.Fatal("no warning")
		}
	}
	v := square/reps - sum*sum/reps/reps
	// The standard deviation of a variance over 200 draws is a tenth of it.
	if hc, cr = hc/reps/v, cr/reps/v; hc > 0.85 || cr < 0.75 || cr > 1.25 || hc > cr-0.1 {
		t.Errorf("hc1 %.3f and cr1 %.3f of the variance", hc, cr)
	}
}
