package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// Categories beside a sweep are those of the model in which the units are a category
// too: the same labels, estimates, errors and tests, for keys of every kind.
func TestSweepBesideCategories(t *testing.T) {
	r := rand.New(rand.NewPCG(12, 5))
	tb := &table{}
	var y, x, half []float64
	var crane, day, wet []int64
	var barge []string
	kindsOf := []string{"motor", `deck "b"`, "canal, west", "hatch"}
	for c := range 60 {
		for range 3 + r.IntN(5) {
			b := r.IntN(4)
			d := int64(r.IntN(3))
			v := r.NormFloat64() + float64(c%4)
			w := int64(r.IntN(2))
			x, half = append(x, v), append(half, float64(r.IntN(3))/2-0.5)
			barge, day, wet, crane = append(barge, kindsOf[b]), append(day, (100+d)*24*3600*1e9), append(wet, w), append(crane, int64(c))
			y = append(y, float64(c)/3+2*v+float64(b)*half[len(half)-1]+float64(d*w)+v*float64(b)+r.NormFloat64()*(1+math.Abs(v)))
		}
	}
	barge[5], x[7] = "", math.NaN()
	tb.float("minutes", y)
	tb.float("tonnes", x)
	tb.float("half", half)
	tb.int("crane", crane)
	tb.text("barge", barge)
	tb.add(stream.Column{Name: "t", Kind: stream.Time}, stream.Vector{I64: day})
	tb.add(stream.Column{Name: "wet", Kind: stream.Bool}, stream.Vector{I64: wet})
	spec := stream.Spec{Outcome: "minutes", Keys: []string{"crane", "half"}, Sweep: "crane",
		Terms: []string{"tonnes", `each(barge, base="hatch")`, "each(half)", "each(date(t)) * each(wet)", `each(barge, base="hatch") * tonnes`}}
	o := vcov.Options{Errors: append(kinds("classical", "hc1", "hc3"), vcov.Kind{Name: "cr0", Cluster: 0}, vcov.Kind{Name: "cr0", Cluster: 1}),
		Hypotheses: []string{"each(half) = 0", `each(barge, level="motor") - each(barge, level="canal, west") = 1`, "each(date(t)) * each(wet) = 0"}}
	got := fit(t, tb.source(61), spec, o)
	plain := spec
	plain.Sweep, plain.NoConstant = "", true
	plain.Terms = append(slices.Clone(spec.Terms), `each(crane, base="none")`)
	want := fit(t, tb.source(61), plain, o)
	k := len(got.Terms)
	if k != 11 || !slices.Equal(got.Terms, want.Terms[:k]) || !strings.HasPrefix(want.Terms[k], "crane = ") {
		t.Fatalf("terms %q, want %q", got.Terms, want.Terms)
	}
	if fmt.Sprint(got.BaseLevels) != fmt.Sprint(want.BaseLevels) || !slices.Equal(got.Model.Terms, want.Model.Terms[:len(spec.Terms)]) {
		t.Errorf("bases %v, model %q; want %v", got.BaseLevels, got.Model.Terms, want.BaseLevels)
	}
	if got.N != want.N || got.Rows.MissingBy["barge"] != 1 || got.Run.Passes != 3 {
		t.Errorf("N %d, want %d; %+v; %d passes", got.N, want.N, got.Rows, got.Run.Passes)
	}
	for j := range k {
		close2(t, got.Terms[j], got.Estimates[j], float64(want.Estimates[j]), 1e-9)
		for i := range got.Errors {
			close2(t, got.Errors[i].Name()+" of "+got.Terms[j], got.Errors[i].SE[j], float64(want.Errors[i].SE[j]), 1e-9)
		}
	}
	for i := range got.Hypotheses {
		if w := want.Hypotheses[i]; got.Hypotheses[i].DF1 != w.DF1 || w.F.Exists() != got.Hypotheses[i].F.Exists() {
			t.Errorf("%+v, want %+v", got.Hypotheses[i], w)
		} else if w.F.Exists() {
			close2(t, w.Text+" by "+w.Errors, got.Hypotheses[i].F, float64(w.F), 1e-8)
		}
	}

	for _, c := range []struct {
		change func(*stream.Spec, *vcov.Options)
		want   string
	}{
		{func(s *stream.Spec, _ *vcov.Options) { s.Terms = []string{`each(barge, base="tug")`} }, "no used row has that level"},
		{func(s *stream.Spec, _ *vcov.Options) { s.Terms = []string{"each(tonnes)"} }, "too many levels"},
		{func(_ *stream.Spec, o *vcov.Options) { o.Hypotheses = []string{`each(barge, level="tug") = 1`} }, "no used row has that level"},
	} {
		s, p := spec, o
		c.change(&s, &p)
		if s.Terms[0] != "tonnes" {
			p.Hypotheses = nil
		}
		if _, err := tryFit(tb.source(61), s, p); !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v, want a use error with %q", err, c.want)
		}
	}
	_, err := tryFit(openPipe(t, tb.csv(), stream.Options{}), stream.Spec{Outcome: "minutes", Terms: []string{"each(barge)"}, Sweep: "crane"}, vcov.Options{Errors: kinds("classical")})
	if !errors.Is(err, stream.ErrUse) || !strings.Contains(err.Error(), "--passes 2") {
		t.Errorf("categories by a pipe: %v", err)
	}
}
