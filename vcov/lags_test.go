package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// dayTable has rows on days that are far from all there, with errors that move
// together within a day and over neighbouring ones.
func dayTable(r *rand.Rand, days int, carry float64) (tb *table, a, b, y []float64, day []int64) {
	u := 0.0
	for d := range days {
		u = carry*u + r.NormFloat64()
		if r.Float64() < 0.2 {
			continue // a day without rows
		}
		for range 1 + r.IntN(4) {
			x1, x2 := r.NormFloat64()+u/2, 4+r.ExpFloat64()
			a, b, y = append(a, x1), append(b, x2), append(y, 1+x1-x2/2+u+r.NormFloat64())
			day = append(day, int64(20_000+d))
		}
	}
	// Rows need not stand in order of time.
	for i := range day {
		j := r.IntN(i + 1)
		a[i], a[j], b[i], b[j], y[i], y[j], day[i], day[j] = a[j], a[i], b[j], b[i], y[j], y[i], day[j], day[i]
	}
	tb = &table{}
	tb.float("y", y)
	tb.float("a", a)
	tb.float("b", b)
	tb.int("day", day)
	return tb, a, b, y, day
}

// kernelAt is a kernel by its formula (Andrews 1991, doi:10.2307/2938229, section 2).
func kernelAt(kernel string, x float64) float64 {
	x = math.Abs(x)
	switch kernel {
	case "bartlett":
		return math.Max(0, 1-x)
	case "parzen":
		switch {
		case x <= 0.5:
			return 1 - 6*x*x + 6*x*x*x
		case x <= 1:
			return 2 * math.Pow(1-x, 3)
		}
		return 0
	}
	if x == 0 {
		return 1
	}
	z := 6 * math.Pi * x / 5
	return 25 / (12 * math.Pi * math.Pi * x * x) * (math.Sin(z)/z - math.Cos(z))
}

// The errors are those of the sum over all pairs of rows of k(distance in days) s_i s_j'
// (Driscoll and Kraay 1998, doi:10.1162/003465398557825; distances by the calendar).
func TestDriscollKraayByPairsOfRows(t *testing.T) {
	for seed := range uint64(4) {
		tb, a, b, y, day := dayTable(rand.New(rand.NewPCG(seed, 51)), 90, 0.6)
		n := len(y)
		d := &dense{y: y}
		for i := range n {
			d.x, d.w = append(d.x, []float64{1, a[i], b[i]}), append(d.w, 1)
		}
		d.solve()
		spec := stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day"}}
		for _, c := range []struct {
			kernel string
			lags   int64
			width  float64
		}{{"bartlett", 0, 1}, {"bartlett", 5, 6}, {"parzen", 7, 8}, {"quadratic", 3, 3}} {
			v := d.pairs(func(i, j int) float64 { return kernelAt(c.kernel, float64(day[i]-day[j])/c.width) })
			for _, passes := range []int{1, 2} {
				res := fit(t, tb.source(37), spec, vcov.Options{Errors: []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}, Kernel: c.kernel, Lags: c.lags, Passes: passes})
				e := errorsOf(t, res, "driscoll-kraay")
				for i := range 3 {
					for j := range 3 {
						if s := math.Sqrt(v.At(i, i) * v.At(j, j)); !near(float64(e.Covariance[i][j]), v.At(i, j), s, 1e-10) {
							t.Errorf("seed %d, %s, %d lags, %d passes (%d, %d): %v, by pairs %v", seed, c.kernel, c.lags, passes, i, j, e.Covariance[i][j], v.At(i, j))
						}
					}
				}
				periods := map[int64]bool{}
				for _, d := range day {
					periods[d] = true
				}
				if float64(e.DF[1]) != float64(len(periods)-1) || e.Lags.Periods != int64(len(periods)) {
					t.Errorf("df %v, %+v for %d periods", e.DF[1], e.Lags, len(periods))
				}
			}
		}
	}
}

// Reach by the rule of Newey and West (1994): longer where errors carry over, and the
// same in other units.
func TestLagsAreChosen(t *testing.T) {
	chosen := func(carry float64, scale float64) int64 {
		tb, a, _, _, _ := dayTable(rand.New(rand.NewPCG(9, 52)), 3000, carry)
		other := &table{}
		for j, c := range tb.cols {
			if j == 1 {
				x := make([]float64, len(a))
				for i := range x {
					x[i] = a[i] * scale
				}
				other.float("a", x)
				continue
			}
			other.add(tb.schema.Columns[j], c)
		}
		res := fit(t, other.source(500), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day"}},
			vcov.Options{Errors: []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}, AutoLags: true})
		e := errorsOf(t, res, "driscoll-kraay")
		if !e.Lags.Chosen {
			t.Error("not told as chosen")
		}
		return e.Lags.Lags
	}
	some, much := chosen(0.5, 1), chosen(0.9, 1)
	if !(0 < some && some < much) {
		t.Errorf("lags %d and %d for errors that carry over by 0.5 and 0.9", some, much)
	}
	if got := chosen(0.5, 1<<20); got != some {
		t.Errorf("lags %d in other units, %d before", got, some)
	}
}

// However few periods there are, what is chosen stays within them: a longer reach would
// leave errors near zero.
func TestChosenLagsStayWithinTheData(t *testing.T) {
	most := int64(math.MinInt64)
	for seed := range uint64(60) {
		tb, _, _, _, day := dayTable(rand.New(rand.NewPCG(seed, 54)), 8, 0.9)
		span := slices.Max(day) - slices.Min(day) + 1
		if span < 4 {
			continue
		}
		for _, kernel := range []string{"bartlett", "parzen", "quadratic"} {
			res := fit(t, tb.source(50), stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day"}},
				vcov.Options{Errors: []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}, Kernel: kernel, AutoLags: true})
			l := errorsOf(t, res, "driscoll-kraay").Lags
			if l.Lags >= span || float64(l.Bandwidth) > float64(span) {
				t.Errorf("seed %d, %s: %d lags, bandwidth %v over %d periods", seed, kernel, l.Lags, l.Bandwidth, span)
			}
			most = max(most, l.Lags-span)
		}
	}
	if most != -1 {
		t.Errorf("no design asks for more than it spans; the longest reach is %d periods short of it", -most)
	}
}

func TestDriscollKraayRefusals(t *testing.T) {
	tb, _, _, _, _ := dayTable(rand.New(rand.NewPCG(1, 53)), 30, 0)
	tb.text("name", func() []string {
		names := make([]string, tb.rows())
		for i := range names {
			names[i] = fmt.Sprint("d", i%9)
		}
		return names
	}())
	for key, o := range map[string]vcov.Options{"name": {}, "day": {Kernel: "flat"}, "day ": {Lags: -1}} {
		o.Errors = []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}
		if _, err := tryFit(tb.source(50), stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{key}}, o); !errors.Is(err, stream.ErrUse) {
			t.Errorf("%s %+v: %v, want a refusal", key, o, err)
		}
	}
	o := vcov.Options{Errors: []vcov.Kind{{Name: "driscoll-kraay", Cluster: 0}}}
	if _, err := tryFit(tb.source(50), stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day / 7"}}, o); err == nil {
		t.Error("periods that are no whole numbers are taken")
	}
}
