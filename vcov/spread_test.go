package vcov_test

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// koenker is N times the R2 of the squared residuals on a constant and the terms,
// over rows repeated by their frequency (Koenker 1981).
func (d *dense) koenker() (lm float64, df int) {
	var rows [][]float64
	var y []float64
	for i, x := range d.x {
		times := 1
		if d.kind == stream.Frequency {
			times = int(d.w[i])
		}
		for range times {
			rows, y = append(rows, append([]float64{1}, x...)), append(y, d.e[i]*d.e[i])
		}
	}
	// Columns of an orthonormal basis, those that depend on others left out.
	n := len(rows)
	mean := 0.0
	for _, v := range y {
		mean += v / float64(n)
	}
	var q [][]float64
	for j := range rows[0] {
		c := make([]float64, n)
		for i := range c {
			c[i] = rows[i][j]
		}
		size := math.Sqrt(mat.Dot(mat.NewVecDense(n, c), mat.NewVecDense(n, c)))
		for range 2 {
			for _, b := range q {
				t := mat.Dot(mat.NewVecDense(n, b), mat.NewVecDense(n, c))
				for i := range c {
					c[i] -= t * b[i]
				}
			}
		}
		left := math.Sqrt(mat.Dot(mat.NewVecDense(n, c), mat.NewVecDense(n, c)))
		if left < 1e-8*size {
			continue
		}
		for i := range c {
			c[i] /= left
		}
		q = append(q, c)
	}
	var explained, total float64
	for _, b := range q[1:] {
		t := 0.0
		for i := range b {
			t += b[i] * (y[i] - mean)
		}
		explained += t * t
	}
	for _, v := range y {
		total += (v - mean) * (v - mean)
	}
	return float64(n) * explained / total, len(q) - 1
}

func TestSpreadTestIsKoenkers(t *testing.T) {
	tested := 0
	forProblems(t, 60, func(t *testing.T, rng *rand.Rand, p *problem) {
		passes := 1 + rng.IntN(2)
		if p.categories() {
			passes = 2
		}
		r, err := tryFit(p.tb.source(700), p.spec, vcov.Options{Errors: kinds("hc1"), Passes: passes})
		if err != nil {
			t.Fatal(err)
		}
		s := r.SpreadTest
		if p.d.kind == stream.Precision || p.d.kind == stream.Sampling {
			if s.P.Exists() || s.Reason == nil || !strings.Contains(*s.Reason, "weights") {
				t.Errorf("under weights: %+v", s)
			}
			return
		}
		if s.Reason != nil {
			t.Fatalf("no test: %s", *s.Reason)
		}
		tested++
		if !p.categories() {
			o, err := tryFit(p.tb.source(700), p.spec, vcov.Options{Errors: kinds("hc1"), Passes: 3 - passes})
			if err != nil {
				t.Fatal(err)
			}
			if digits(float64(o.SpreadTest.Statistic), float64(s.Statistic)) < 11 {
				t.Errorf("%d passes: %v, %d: %v", passes, s.Statistic, 3-passes, o.SpreadTest.Statistic)
			}
		}
		lm, df := p.d.koenker()
		want := distuv.ChiSquared{K: float64(df)}.Survival(lm)
		if !near(float64(s.Statistic), lm, lm+1, 1e-8) || float64(s.DF) != float64(df) || !near(float64(s.P), want, want, 1e-6) {
			t.Errorf("%d passes: %+v, by rows %v on %d, p %v", passes, s, lm, df, want)
		}
	})
	if !testing.Short() && tested < 20 {
		t.Errorf("only %d problems had a test", tested)
	}
}

func TestSpreadTestWhereThereIsNone(t *testing.T) {
	tb, pallets, tonnes, _ := quayTable(300, 5)
	exact, even := make([]float64, len(pallets)), make([]float64, len(pallets))
	for i := range exact {
		exact[i] = pallets[i] - tonnes[i]
		even[i] = 5 + float64(1-2*(i%2))
	}
	tb.float("exact", exact)
	tb.float("even", even)
	for _, c := range []struct {
		outcome, terms, errors, want string
		passes                       int
	}{
		{"exact", "pallets,tonnes", "hc1", "exactly", 1},
		{"minutes", "", "hc1", "no term beside the constant", 1},
		{"even", "", "hc1", "no term", 1},
		{"minutes", "pallets", "classical", "hc0 or hc1 among the errors", 1},
		{"minutes", "pallets,each(barge)", "hc3", "with categories it needs hc0 or hc1", 2},
		{"minutes", "pallets", "hc3", "", 2},
		{"minutes", "pallets", "cr1", "", 2},
		{"minutes", "pallets,each(barge)", "hc1", "", 2},
	} {
		spec := stream.Spec{Outcome: c.outcome, Keys: []string{"quay"}}
		if c.terms != "" {
			spec.Terms = strings.Split(c.terms, ",")
		}
		s := fit(t, tb.source(100), spec, vcov.Options{Errors: kinds(c.errors), Passes: c.passes}).SpreadTest
		if (c.want == "") != (s.Reason == nil) || s.Reason != nil && (!strings.Contains(*s.Reason, c.want) || s.P.Exists()) || s.Reason == nil && !s.P.Exists() {
			t.Errorf("%+v: %+v", c, s)
			if s.Reason != nil {
				t.Log(*s.Reason)
			}
		}
	}
}

// The share of rejections at 5 % where the spread is the same for all rows and the
// errors have heavy tails: 1,000 samples have a standard error of 0.7 %.
func TestSpreadTestSize(t *testing.T) {
	if testing.Short() {
		t.Skip("1,000 fits")
	}
	rng := rand.New(rand.NewPCG(8, 8))
	tail := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: 8, Src: rng}
	const reps, n = 1000, 400
	rejected := 0
	for range reps {
		tb := &table{}
		a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range n {
			a[i], b[i] = rng.NormFloat64(), float64(rng.IntN(2))
			y[i] = 1 + a[i] + b[i] + tail.Rand()
		}
		tb.float("a", a)
		tb.float("b", b)
		tb.float("y", y)
		r := fit(t, tb.source(n), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}}, vcov.Options{Errors: kinds("hc1"), Passes: 1, Workers: 1})
		if r.SpreadTest.P < 0.05 {
			rejected++
		}
	}
	if share := float64(rejected) / reps; share < 0.03 || share > 0.07 {
		t.Errorf("rejects %.1f %%, want about 5", 100*share)
	}
}

// The worst and best combinations solve V c = ratio^2 V_classical c, and no other
// combination lies outside.
func TestExtremes(t *testing.T) {
	seen := 0
	forProblems(t, 40, func(t *testing.T, rng *rand.Rand, p *problem) {
		r, err := tryFit(p.tb.source(700), p.spec, vcov.Options{Errors: kinds(p.names...)})
		if err != nil {
			t.Fatal(err)
		}
		from := 1
		if p.spec.NoConstant {
			from = 0
		}
		k := p.d.k
		for _, name := range p.names {
			x := errorsOf(t, r, name).Extremes
			if name == "classical" || p.d.kind == stream.Sampling || k-from < 2 {
				if x != nil {
					t.Errorf("%s of %d terms has extremes", name, k-from)
				}
				continue
			}
			if x == nil {
				t.Errorf("%s has no extremes", name)
				continue
			}
			seen++
			v, cl := p.d.covariance(name), p.d.covariance("classical")
			ratio := func(c *mat.VecDense) float64 { return math.Sqrt(math.Max(0, mat.Inner(c, v, c)) / mat.Inner(c, cl, c)) }
			vector := func(w []vcov.Number) *mat.VecDense { return mat.NewVecDense(k, floats(w)) }
			worst := ratio(vector(x.Worst))
			if !near(float64(x.WorstRatio), worst, worst, 1e-7) {
				t.Errorf("%s: worst ratio %v, its combination has %v", name, x.WorstRatio, worst)
			}
			if best := ratio(vector(x.Best)); !near(float64(x.BestRatio), best, worst, 1e-6) {
				t.Errorf("%s: best ratio %v, its combination has %v", name, x.BestRatio, best)
			}
			if from == 1 && (x.Worst[0] != 0 || x.Best[0] != 0) {
				t.Errorf("%s: the constant is part of a combination", name)
			}
			for range 300 {
				c := mat.NewVecDense(k, nil)
				for j := from; j < k; j++ {
					c.SetVec(j, rng.NormFloat64()/math.Sqrt(cl.At(j, j)))
				}
				if q := ratio(c); q > worst*(1+1e-9) || q < float64(x.BestRatio)-1e-9*worst {
					t.Errorf("%s: ratio %v of %v lies outside %v to %v", name, q, mat.Col(nil, 0, c), x.BestRatio, worst)
				}
			}
			// The eigenvector's own equation.
			var l, rt mat.VecDense
			l.MulVec(v.Slice(from, k, from, k), vector(x.Worst).SliceVec(from, k))
			rt.MulVec(cl.Slice(from, k, from, k), vector(x.Worst).SliceVec(from, k))
			for j := range k - from {
				if want := worst * worst * rt.AtVec(j); math.Abs(l.AtVec(j)-want) > 1e-6*worst*worst*math.Sqrt(cl.At(from+j, from+j)*mat.Inner(vector(x.Worst), cl, vector(x.Worst))) {
					t.Errorf("%s: entry %d is %v, want %v", name, j, l.AtVec(j), want)
				}
			}
		}
	})
	if seen == 0 {
		t.Error("no problem had extremes")
	}
}
