package tail

import (
	"bufio"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"
)

// table reads testdata/name, written by testdata/reference.py.
func table(t *testing.T, name string, columns, least int) [][]float64 {
	t.Helper()
	file, err := os.Open("testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	var rows [][]float64
	lines := bufio.NewScanner(file)
	for lines.Scan() {
		if strings.HasPrefix(lines.Text(), "#") {
			continue
		}
		var row []float64
		for _, word := range strings.Fields(lines.Text()) {
			v, err := strconv.ParseFloat(word, 64)
			if err != nil {
				t.Fatalf("%s: %v", name, err)
			}
			row = append(row, v)
		}
		if len(row) != columns {
			t.Fatalf("%s: a line of %d columns", name, len(row))
		}
		rows = append(rows, row)
	}
	if lines.Err() != nil || len(rows) < least {
		t.Fatalf("%s: %d rows, %v", name, len(rows), lines.Err())
	}
	return rows
}

func relative(got, want float64) float64 {
	if got == want {
		return 0
	}
	return math.Abs(got-want) / math.Abs(want)
}

// worst keeps the largest error and the case it came from.
type worst struct {
	err   float64
	where []float64
}

func (w *worst) see(t *testing.T, err, limit float64, where ...float64) {
	t.Helper()
	if !(err <= limit) {
		t.Errorf("%v: relative error %.2g", where, err)
	}
	if err > w.err {
		w.err, w.where = err, where
	}
}

func TestTTable(t *testing.T) {
	var p, l worst
	for _, r := range table(t, "t.txt", 4, 150) {
		df, x := r[0], r[1]
		for _, sign := range []float64{1, -1} {
			gotP, gotL := T(sign*x, df)
			if r[2] > 1e-300 {
				p.see(t, relative(gotP, r[2]), 1e-12, df, x)
			} else if gotP > 1e-299 {
				t.Errorf("df %v, t %v: p %v, want %v", df, x, gotP, r[2])
			}
			l.see(t, relative(gotL, r[3]), 1e-13, df, x)
		}
	}
	t.Logf("largest relative error of p %.2g at %v, of log10 p %.2g at %v", p.err, p.where, l.err, l.where)
}

func TestFTable(t *testing.T) {
	var p, l worst
	for _, r := range table(t, "f.txt", 5, 400) {
		gotP, gotL := F(r[2], r[0], r[1])
		if r[3] > 1e-300 {
			p.see(t, relative(gotP, r[3]), 1e-12, r[:3]...)
		} else if gotP > 1e-299 {
			t.Errorf("%v: p %v, want %v", r[:3], gotP, r[3])
		}
		if r[4] < -1e-15 {
			l.see(t, relative(gotL, r[4]), 1e-12, r[:3]...)
		} else if gotL > 0 || gotL < -1e-14 {
			t.Errorf("%v: log10 p %v, want %v", r[:3], gotL, r[4])
		}
	}
	t.Logf("largest relative error of p %.2g at %v, of log10 p %.2g at %v", p.err, p.where, l.err, l.where)
}

func TestTQuantileTable(t *testing.T) {
	var w worst
	for _, r := range table(t, "quantile.txt", 3, 200) {
		df, alpha, want := r[0], r[1], r[2]
		w.see(t, relative(TQuantileTail(alpha, df), want), 1e-12, df, alpha)
		if level := 1 - alpha; 1-level == alpha {
			w.see(t, relative(TQuantile(level, df), want), 1e-12, df, alpha)
		}
	}
	t.Logf("largest relative error %.2g at %v", w.err, w.where)
}

// TestTQuantilePublished: NIST/SEMATECH e-Handbook of Statistical Methods,
// 1.3.6.7.2, critical values of t for one-sided 0.95, 0.975, 0.995 (figures from
// memory).
func TestTQuantilePublished(t *testing.T) {
	for _, c := range []struct {
		df              float64
		t95, t975, t995 float64
	}{
		{1, 6.314, 12.706, 63.657},
		{5, 2.015, 2.571, 4.032},
		{10, 1.812, 2.228, 3.169},
		{30, 1.697, 2.042, 2.750},
		{100, 1.660, 1.984, 2.626},
		{math.Inf(1), 1.645, 1.960, 2.576},
	} {
		for level, want := range map[float64]float64{0.90: c.t95, 0.95: c.t975, 0.99: c.t995} {
			if got := TQuantile(level, c.df); math.Abs(got-want) > 0.00051 {
				t.Errorf("df %v, level %v: %v, want %v", c.df, level, got, want)
			}
		}
	}
}

// TestClosedForms: df 1 is the Cauchy distribution, df 2 has p = 1 - t/sqrt(2+t^2)
// = 2/(s(s+t)), s = sqrt(2+t^2), infinite df is the normal distribution;
// F on (2, d) has p = (1+2f/d)^(-d/2) and on (d, 2) 1-p = (d f/(d f+2))^(d/2).
func TestClosedForms(t *testing.T) {
	check := func(got, want, limit float64, where ...float64) {
		t.Helper()
		if want < 1e-300 {
			return
		}
		if err := relative(got, want); !(err <= limit) {
			t.Errorf("%v: %v, want %v (%.2g)", where, got, want, err)
		}
	}
	for e := -30.0; e <= 60; e += 0.37 {
		x := math.Pow(2, e)
		p, l := T(x, 1)
		check(p, 2/math.Pi*math.Atan(1/x), 1e-14, x, 1)
		check(l, math.Log1p(-2/math.Pi*math.Atan(x))/math.Ln10, 1e-7, x, 1)
		s := math.Sqrt(2 + x*x)
		p, _ = T(x, 2)
		check(p, 2/(s*(s+x)), 1e-14, x, 2)
		if p, _ = T(x, math.Inf(1)); x < 37 {
			check(p, math.Erfc(x/math.Sqrt2), 2e-13, x, math.Inf(1))
		}
		for _, d := range []float64{1, 3, 8, 1e3, 1e5} {
			p, l = F(x, 2, d)
			want := -d / 2 * math.Log1p(2*x/d)
			check(l, want/math.Ln10, 1e-13, x, 2, d)
			if want > -600 {
				check(p, math.Exp(want), 1e-12, x, 2, d)
			}
			p, _ = F(x, d, 2)
			check(p, -math.Expm1(-d/2*math.Log1p(2/(d*x))), 1e-12, x, d, 2)
		}
	}
}

// TestFarTails: the leading term at arguments whose square overflows or vanishes.
func TestFarTails(t *testing.T) {
	for _, x := range []float64{1e60, 1e74, 1e76, 1e140, 1e151, 1e160, 1e300} {
		p, l := T(x, 1)
		if relative(p, 2/math.Pi/x) > 1e-12 || relative(l, math.Log10(2/math.Pi)-math.Log10(x)) > 1e-14 {
			t.Errorf("df 1, t %g: %g, %v", x, p, l)
		}
		// df 3: p = 4 sqrt(3)/pi t^-3 + ...; from the density 2/(pi sqrt 3) (1+t^2/3)^-2.
		if _, l = T(x, 3); relative(l, math.Log10(4*math.Sqrt(3)/math.Pi)-3*math.Log10(x)) > 1e-14 {
			t.Errorf("df 3, t %g: log10 p %v", x, l)
		}
	}
	for _, alpha := range []float64{1e-80, 1e-150, 1e-200, 1e-300} {
		if got := TQuantileTail(alpha, 1); relative(got, 2/math.Pi/alpha) > 1e-12 {
			t.Errorf("df 1, alpha %g: %g", alpha, got)
		}
		if got := TQuantile(alpha, 1); relative(got, math.Pi/2*alpha) > 1e-12 {
			t.Errorf("df 1, level %g: %g", alpha, got)
		}
	}
	// Normal: log p = -t^2/2 + log(sqrt(2/pi)/t) + log(1 - 1/t^2 + ...)
	for _, x := range []float64{1e3, 1e8, 1e60, 1e74, 1e76, 1e150} {
		want := (-x*x/2 + math.Log(math.Sqrt(2/math.Pi)/x) + math.Log1p(-1/(x*x))) / math.Ln10
		if _, l := T(x, math.Inf(1)); relative(l, want) > 1e-13 {
			t.Errorf("normal, t %g: log10 p %v, want %v", x, l, want)
		}
	}
	if p, l := T(1e3, 1e9); p != 0 || !(l < -217000 && l > -217150.4) {
		t.Errorf("df 1e9, t 1e3: %v, %v", p, l)
	}
}

// TestRoundTrip: the tail at the quantile is the alpha asked for.
func TestRoundTrip(t *testing.T) {
	for _, df := range []float64{0.3, 1, 1.5, 4, 17.3, 59, 1e4, 1e5, 1e6, 1e9, 1e11, math.Inf(1)} {
		for _, alpha := range []float64{1 - 1e-9, 0.7, 0.4, 0.2, 0.05, 1e-3, 1e-8, 1e-30, 1e-120} {
			if math.Log10(alpha)/df < -300 {
				continue // beyond float64
			}
			x := TQuantileTail(alpha, df)
			if p, _ := T(x, df); relative(p, alpha) > 1e-12 {
				t.Errorf("df %v, alpha %g: t %v has p %g", df, alpha, x, p)
			}
		}
	}
}

// TestMonotone: p falls in t and in df across the places where the method changes.
func TestMonotone(t *testing.T) {
	for _, df := range []float64{0.7, 1, 3, 30, 1e5, 1e11} {
		last, lastL := 1.0, 0.0
		for x := 0.01; x < 300; x *= 1.01 {
			p, l := T(x, df)
			if p > last || l >= lastL {
				t.Fatalf("df %v, t %v: p %v after %v, log10 p %v after %v", df, x, p, last, l, lastL)
			}
			last, lastL = p, l
		}
	}
	for _, x := range []float64{0.5, 1.01, 2, 20} {
		last := 0.0
		for df := 0.9; df < 1e11; df *= 1.3 {
			_, l := T(x, df)
			if l > last {
				t.Fatalf("t %v, df %v: log10 p %v after %v", x, df, l, last)
			}
			last = l + 1e-14*math.Abs(l)
		}
	}
}

func TestEdges(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	same := func(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }
	for _, c := range []struct{ t, df, p, l float64 }{
		{0, 5, 1, 0}, {inf, 5, 0, -inf}, {-inf, 5, 0, -inf}, {inf, inf, 0, -inf},
		{nan, 5, nan, nan}, {1, nan, nan, nan}, {1, 0, nan, nan}, {1, -3, nan, nan}, {1, 1e-10, nan, nan}, {inf, -3, nan, nan},
	} {
		if p, l := T(c.t, c.df); !same(p, c.p) || !same(l, c.l) {
			t.Errorf("T(%v, %v) = %v, %v, want %v, %v", c.t, c.df, p, l, c.p, c.l)
		}
	}
	for _, c := range []struct{ f, a, b, p, l float64 }{
		{0, 2, 5, 1, 0}, {-1, 2, 5, 1, 0}, {inf, 2, 5, 0, -inf}, {-inf, 2, 5, 1, 0}, {inf, 2, inf, 0, -inf},
		{nan, 2, 5, nan, nan}, {1, nan, 5, nan, nan}, {1, 2, nan, nan, nan}, {1, 0, 5, nan, nan}, {1, 2, 0, nan, nan},
		{1, -2, 5, nan, nan}, {1, 2, -5, nan, nan}, {1, inf, 5, nan, nan},
	} {
		if p, l := F(c.f, c.a, c.b); !same(p, c.p) || !same(l, c.l) {
			t.Errorf("F(%v, %v, %v) = %v, %v, want %v, %v", c.f, c.a, c.b, p, l, c.p, c.l)
		}
	}
	for _, c := range []struct{ level, df, want float64 }{
		{0, 5, 0}, {1, 5, inf}, {-0.1, 5, nan}, {1.1, 5, nan}, {nan, 5, nan}, {0.95, nan, nan}, {0.95, 0, nan}, {0.95, -1, nan},
	} {
		if got := TQuantile(c.level, c.df); !same(got, c.want) {
			t.Errorf("TQuantile(%v, %v) = %v, want %v", c.level, c.df, got, c.want)
		}
		if got := TQuantileTail(1-c.level, c.df); !same(got, c.want) {
			t.Errorf("TQuantileTail(%v, %v) = %v, want %v", 1-c.level, c.df, got, c.want)
		}
	}
	if got := TQuantileTail(1e-10, 0.01); got != inf {
		t.Errorf("a quantile of 1e1000 is %v", got)
	}
}

// TestExtremesEnd: no argument makes the integration run away or leave [0, 1].
func TestExtremesEnd(t *testing.T) {
	values := []float64{math.SmallestNonzeroFloat64, 1e-300, 1e-200, 1e-100, 1e-9, 0.3, 1, 7, 1e9, 1e99, 1e101, 1e200, math.MaxFloat64}
	dfs := []float64{1e-9, 1e-4, 0.3, 1, 7, 1e9, 1e50, 1e99, 1e100, 1e101, math.MaxFloat64, math.Inf(1)}
	for _, x := range values {
		for _, df := range dfs {
			for _, df1 := range dfs {
				if df1 > 1e100 {
					continue
				}
				if p, l := F(x, df1, df); !(p >= 0 && p <= 1) || !(l <= 0) {
					t.Errorf("F(%g, %g, %g) = %v, %v", x, df1, df, p, l)
				}
			}
			if p, l := T(x, df); !(p >= 0 && p <= 1) || !(l <= 0) {
				t.Errorf("T(%g, %g) = %v, %v", x, df, p, l)
			}
			if x < 1 {
				if q := TQuantileTail(x, df); !(q >= 0) {
					t.Errorf("TQuantileTail(%g, %g) = %v", x, df, q)
				}
				if q := TQuantile(x, df); !(q >= 0) {
					t.Errorf("TQuantile(%g, %g) = %v", x, df, q)
				}
			}
		}
	}
}

func BenchmarkT(b *testing.B) {
	for b.Loop() {
		T(2.1, 1e6)
	}
}

func BenchmarkTQuantile(b *testing.B) {
	for b.Loop() {
		TQuantile(0.95, 1e6)
	}
}
