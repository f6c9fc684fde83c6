package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// seriesTable is rows of quays in order of days that are not all there; errors carry
// over from row to row.
type seriesTable struct {
	tb        *table
	a, b, y   []float64
	day, quay []int64
	w         []float64
}

func newSeriesTable(r *rand.Rand, quays, rows int, carry, gaps float64) *seriesTable {
	s := &seriesTable{tb: &table{}}
	for q := range quays {
		u, day := 0.0, int64(20_000+r.IntN(9))
		for range rows/2 + r.IntN(rows) {
			u = carry*u + r.NormFloat64()
			x1, x2 := r.NormFloat64()+u/2, 4+r.ExpFloat64()
			s.a, s.b, s.y = append(s.a, x1), append(s.b, x2), append(s.y, 1+x1-x2/2+u+r.NormFloat64())
			s.day, s.quay = append(s.day, day), append(s.quay, int64(100-q)) // together, not in rising order
			s.w = append(s.w, 0.5+r.Float64())
			day++
			for r.Float64() < gaps {
				day += 1 + int64(r.IntN(7))
			}
		}
	}
	s.tb.float("y", s.y)
	s.tb.float("a", s.a)
	s.tb.float("b", s.b)
	s.tb.int("day", s.day)
	s.tb.int("quay", s.quay)
	s.tb.float("w", s.w)
	return s
}

func hacKind() []vcov.Kind { return []vcov.Kind{{Name: "hac", Cluster: -1}} }

// byPairs is N/(N-k) (X'WX)^-1 sum_ij k(distance) s_i s_j' (X'WX)^-1 over all pairs of
// rows of one unit (Newey & West 1987, doi:10.2307/1913610; Andrews 1991,
// doi:10.2307/2938229).
func (s *seriesTable) byPairs(order *vcov.RowOrder, weighted bool, kernel string, width float64) *mat.Dense {
	n := len(s.y)
	d := &dense{y: s.y}
	for i := range n {
		w := 1.0
		if weighted {
			w = s.w[i]
		}
		d.x, d.w = append(d.x, []float64{1, s.a[i], s.b[i]}), append(d.w, w)
	}
	d.solve()
	var sum, left [3][3]float64 // what rounding takes off the sums: most of them cancels
	for i := range n {
		for j := range n {
			at := float64(i - j)
			if order != nil && order.Period >= 0 {
				at = float64(s.day[i] - s.day[j])
			}
			if order != nil && order.Unit >= 0 && s.quay[i] != s.quay[j] {
				continue
			}
			k := kernelAt(kernel, at/width)
			if k == 0 {
				continue
			}
			k *= d.w[i] * d.e[i] * d.w[j] * d.e[j]
			for p := range 3 {
				for q := range 3 {
					x, s := k*d.x[i][p]*d.x[j][q], sum[p][q]
					t := s + x
					b := t - s
					sum[p][q] = t
					left[p][q] += (s - (t - b)) + (x - b)
				}
			}
		}
	}
	meat := mat.NewDense(3, 3, nil)
	for p := range 3 {
		for q := range 3 {
			meat.Set(p, q, sum[p][q]+left[p][q])
		}
	}
	var v mat.Dense
	v.Product(d.m, meat, d.m)
	v.Scale(float64(n)/float64(n-3), &v)
	return &v
}

var orders = []struct {
	name         string
	order        *vcov.RowOrder
	quays        int
	period, unit int
}{
	{"input", nil, 1, -1, -1},
	{"period", &vcov.RowOrder{Period: 0, Unit: -1}, 1, 0, -1},
	{"unit", &vcov.RowOrder{Period: -1, Unit: 1}, 7, -1, 1},
	{"unit and period", &vcov.RowOrder{Period: 0, Unit: 1}, 7, 0, 1},
}

// The errors are those of the sum over all pairs of rows, whatever the segments: shorter
// than the reach, or longer.
func TestHACByPairsOfRows(t *testing.T) {
	keys := []string{"day", "quay"}
	for i, o := range orders {
		s := newSeriesTable(rand.New(rand.NewPCG(uint64(i), 61)), o.quays, 200/o.quays, 0.6, 0.15)
		n := len(s.y)
		for _, c := range []struct {
			kernel string
			lags   int64
			width  float64
		}{{"bartlett", 0, 1}, {"bartlett", 1, 2}, {"bartlett", 6, 7}, {"parzen", 11, 12}, {"quadratic", 3, 3}, {"quadratic", 0, 1e-3}} {
			for _, weighted := range []bool{false, true} {
				spec := stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: keys}
				if weighted {
					spec.Weight, spec.WeightKind = "w", stream.Precision
				}
				v := s.byPairs(o.order, weighted, c.kernel, c.width)
				for _, segment := range []int{1, 3, 17, 10_000} {
					res := fit(t, s.tb.source(segment), spec, vcov.Options{Errors: hacKind(), Order: o.order, Kernel: c.kernel, Lags: c.lags})
					e := errorsOf(t, res, "hac")
					for i := range 3 {
						for j := range 3 {
							if size := math.Sqrt(v.At(i, i) * v.At(j, j)); !near(float64(e.Covariance[i][j]), v.At(i, j), size, 1e-10) {
								t.Fatalf("%s, %s, %d lags, segments of %d (%d, %d): %v, by pairs %v", o.name, c.kernel, c.lags, segment, i, j, e.Covariance[i][j], v.At(i, j))
							}
						}
					}
					if float64(e.DF[0]) != float64(n-3) || float64(e.Factor) != float64(n)/float64(n-3) {
						t.Errorf("df %v, factor %v for %d rows", e.DF[0], e.Factor, n)
					}
				}
			}
		}
	}
}

// With the kernel at its longest reach a unit's scores nearly all count; with no lag it
// is hc1.
func TestHACWithoutLagsIsHC1(t *testing.T) {
	s := newSeriesTable(rand.New(rand.NewPCG(5, 62)), 1, 700, 0.6, 0)
	res := fit(t, s.tb.source(97), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}},
		vcov.Options{Errors: []vcov.Kind{{Name: "hc1", Cluster: -1}, {Name: "hac", Cluster: -1}}})
	if d := least(floats(errorsOf(t, res, "hac").SE), floats(errorsOf(t, res, "hc1").SE)); d < 13 {
		t.Errorf("%.1f digits", d)
	}
}

// L by the formulas of Newey and West (1994), doi:10.2307/2297912, on the sum of the
// scores of the standardised terms. One term, so that its scale and sign do not matter.
func TestHACLagsByTheRule(t *testing.T) {
	for _, c := range []struct {
		kernel     string
		q, c, rate float64
	}{{"bartlett", 1, 1.1447, 2.0 / 9}, {"parzen", 2, 2.6614, 4.0 / 25}, {"quadratic", 2, 1.3221, 2.0 / 25}} {
		for i, o := range orders {
			s := newSeriesTable(rand.New(rand.NewPCG(uint64(i), 63)), o.quays, 900/o.quays, 0.7, 0.1)
			n := len(s.y)
			d := &dense{y: s.y}
			mean := 0.0
			for i := range n {
				mean += s.a[i] / float64(n)
			}
			for i := range n {
				d.x, d.w = append(d.x, []float64{1, s.a[i] - mean}), append(d.w, 1)
			}
			d.solve()
			most := map[int64]int{}
			rows := 0
			for i := range n {
				k := int64(0)
				if o.unit >= 0 {
					k = s.quay[i]
				}
				most[k]++
				rows = max(rows, most[k])
			}
			T := float64(rows)
			reach := int(4 * math.Pow(T/100, c.rate))
			s0, sq := 0.0, 0.0
			for i := range n {
				for j := range i + 1 {
					at := i - j
					if o.period >= 0 {
						at = int(s.day[i] - s.day[j])
					}
					if o.unit >= 0 && s.quay[i] != s.quay[j] || at > reach {
						continue
					}
					g := d.e[i] * d.x[i][1] * d.e[j] * d.x[j][1]
					if at == 0 {
						s0 += g
						continue
					}
					s0 += 2 * g
					sq += 2 * math.Pow(float64(at), c.q) * g
				}
			}
			want := c.c * math.Pow(sq/s0*sq/s0*T, 1/(2*c.q+1))
			for _, segment := range []int{2, 31, 5000} {
				res := fit(t, s.tb.source(segment), stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day", "quay"}},
					vcov.Options{Errors: hacKind(), Order: o.order, Kernel: c.kernel, AutoLags: true})
				e := errorsOf(t, res, "hac")
				got := float64(e.Lags.Bandwidth)
				if c.kernel == "quadratic" {
					if math.Abs(got-want) > 1e-10*want {
						t.Errorf("%s, %s, segments of %d: bandwidth %v, want %v", c.kernel, o.name, segment, got, want)
					}
				} else if float64(e.Lags.Lags) != math.Floor(want) || got != math.Floor(want)+1 {
					t.Errorf("%s, %s, segments of %d: %+v, want %v", c.kernel, o.name, segment, e.Lags, want)
				}
				if !e.Lags.Chosen || e.Lags.Periods != int64(rows) {
					t.Errorf("%+v, want chosen from %d rows", e.Lags, rows)
				}
			}
		}
	}
}

// The choice does not hang on the units of the terms.
func TestHACLagsInOtherUnits(t *testing.T) {
	s := newSeriesTable(rand.New(rand.NewPCG(3, 64)), 1, 900, 0.8, 0)
	var first *vcov.Errors
	for _, terms := range [][]string{{"a", "b"}, {"a * 1000", "b / 7"}, {"a / 1048576", "b + 12"}} {
		res := fit(t, s.tb.source(100), stream.Spec{Outcome: "y", Terms: terms}, vcov.Options{Errors: hacKind(), Kernel: "quadratic", AutoLags: true})
		e := errorsOf(t, res, "hac")
		if first == nil {
			first = e
			if e.Lags.Bandwidth < 2 {
				t.Errorf("bandwidth %v tells nothing", e.Lags.Bandwidth)
			}
		}
		if d := digits(float64(e.Lags.Bandwidth), float64(first.Lags.Bandwidth)); d < 11 {
			t.Errorf("%q: bandwidth %v, %v before", terms, e.Lags.Bandwidth, first.Lags.Bandwidth)
		}
		if d := digits(float64(e.T[1]), float64(first.T[1])); d < 10 {
			t.Errorf("%q: t %v, %v before", terms, e.T[1], first.T[1])
		}
	}
}

// The covariance has no negative direction under any kernel (Newey & West 1987,
// theorem 1; Andrews 1991, section 2), gaps and units or not.
func TestHACIsNotNegative(t *testing.T) {
	for _, kernel := range []string{"bartlett", "parzen", "quadratic"} {
		for i, o := range orders {
			s := newSeriesTable(rand.New(rand.NewPCG(uint64(i), 65)), o.quays, 60, -0.95, 0.3)
			for _, lags := range []int64{1, 5, 20} {
				res := fit(t, s.tb.source(7), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day", "quay"}},
					vcov.Options{Errors: hacKind(), Order: o.order, Kernel: kernel, Lags: lags})
				e := errorsOf(t, res, "hac")
				sym := mat.NewSymDense(3, nil)
				for i := range 3 {
					for j := range i + 1 {
						sym.SetSym(i, j, float64(e.Covariance[i][j]))
					}
				}
				var eig mat.EigenSym
				if !eig.Factorize(sym, false) {
					t.Fatal("no eigenvalues")
				}
				if v := eig.Values(nil); v[0] < -1e-12*v[2] {
					t.Errorf("%s, %s, %d lags: eigenvalues %v", kernel, o.name, lags, v)
				}
			}
		}
	}
}

// The same bits for any number of workers, with spans of lags over many segments.
func TestHACBitsOfWorkers(t *testing.T) {
	for i, o := range orders {
		s := newSeriesTable(rand.New(rand.NewPCG(uint64(i), 66)), 3*o.quays-2, 2000, 0.5, 0.05)
		for _, auto := range []bool{false, true} {
			var first string
			for _, workers := range []int{1, 2, 3, 8} {
				res := fit(t, s.tb.source(61), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day", "quay"}},
					vcov.Options{Errors: append(kinds("hc1", "hc3"), hacKind()...), Order: o.order, Lags: 150, AutoLags: auto, Workers: workers})
				errorsOf(t, res, "hac")
				got := fixed(t, res)
				if first == "" {
					first = got
				}
				if got != first {
					t.Errorf("%s, auto %v: other bits with %d workers", o.name, auto, workers)
				}
			}
		}
	}
}

// Levels as indicators and as numeric columns give the same errors.
func TestHACWithCategories(t *testing.T) {
	s := newSeriesTable(rand.New(rand.NewPCG(8, 67)), 5, 90, 0.6, 0.1)
	var names []string
	for q := range 5 {
		x := make([]float64, len(s.y))
		for i := range x {
			if s.quay[i] == int64(100-q) {
				x[i] = 1
			}
		}
		names = append(names, fmt.Sprint("q", q))
		s.tb.float(names[q], x)
	}
	for _, auto := range []bool{false, true} {
		o := vcov.Options{Errors: hacKind(), Order: &vcov.RowOrder{Period: 0, Unit: 1}, Lags: 9, AutoLags: auto}
		spec := stream.Spec{Outcome: "y", Terms: []string{"a", "each(quay)"}, Keys: []string{"day", "quay"}}
		e := errorsOf(t, fit(t, s.tb.source(50), spec, o), "hac")
		if auto {
			if !e.Lags.Chosen {
				t.Error("not told as chosen")
			}
			continue // the scales of indicators and columns differ, and so may the choice
		}
		spec.Terms = []string{"a", "q3", "q2", "q1", "q0"} // the lowest level is the base
		w := errorsOf(t, fit(t, s.tb.source(50), spec, o), "hac")
		if d := least(floats(e.SE), floats(w.SE)); d < 10 {
			t.Errorf("%.1f digits: %v and %v", d, e.SE, w.SE)
		}
		spec.Terms = []string{"a", "each(quay)"}
		o.Dense = 4
		res := fit(t, s.tb.source(50), spec, o)
		if a := res.Errors[0]; a.Status != "unavailable" || !strings.Contains(*a.Reason, "stands apart") {
			t.Errorf("with a group apart: %s", a.Status)
		}
	}
}

// With many lags bartlett takes running sums: they agree with all pairs of rows too.
func TestHACRunningSums(t *testing.T) {
	for i, o := range orders {
		s := newSeriesTable(rand.New(rand.NewPCG(uint64(i), 73)), (o.quays+1)/2, 1000, 0.9, 0.03)
		for _, lags := range []int64{63, 64, 200, 399} {
			v := s.byPairs(o.order, false, "bartlett", float64(lags+1))
			for segment, arithmetic := range map[int]string{90: "double", 1e6: "extended"} {
				res := fit(t, s.tb.source(segment), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day", "quay"}},
					vcov.Options{Errors: hacKind(), Order: o.order, Lags: lags, Arithmetic: arithmetic})
				e := errorsOf(t, res, "hac")
				for i := range 3 {
					for j := range 3 {
						if size := math.Sqrt(v.At(i, i) * v.At(j, j)); !near(float64(e.Covariance[i][j]), v.At(i, j), size, 1e-11) {
							t.Errorf("%s, %d lags, segments of %d (%d, %d): %v, by pairs %v", o.name, lags, segment, i, j, e.Covariance[i][j], v.At(i, j))
						}
					}
				}
			}
		}
	}
}

// Rows out of order are found with their place, wherever segments end, and always the
// first of them.
func TestHACRowsOutOfOrder(t *testing.T) {
	const n = 400
	make1 := func(change func(day, quay []int64)) stream.Source {
		s := newSeriesTable(rand.New(rand.NewPCG(1, 68)), 4, n/4, 0, 0)
		for i := range s.day {
			s.day[i], s.quay[i] = int64(i%50), int64(i/50)
		}
		change(s.day, s.quay)
		return s.tb.source(30)
	}
	for _, c := range []struct {
		name   string
		change func(day, quay []int64)
		order  vcov.RowOrder
		want   string
	}{
		{"falling", func(d, q []int64) { d[77], d[78] = d[78], d[77]; d[290] = 0 }, vcov.RowOrder{Period: 0, Unit: 1}, "row 79 column day: found 27 after 28, want rising periods: sort by quay, then day"},
		{"falling at a seam", func(d, q []int64) { d[120] = 3; d[290] = 0 }, vcov.RowOrder{Period: 0, Unit: 1}, "row 121 column day: found 3 after 19, want rising periods"},
		{"twice", func(d, q []int64) { d[33] = d[32] }, vcov.RowOrder{Period: 0, Unit: 1}, "row 34 column day: found 32 twice, want one row for each period of a unit"},
		{"twice without units", func(d, q []int64) {
			for i := range d {
				d[i] = int64(i)
			}
			d[90] = 89
		}, vcov.RowOrder{Period: 0, Unit: -1}, "row 91 column day: found 89 twice, want one row for each period: driscoll-kraay takes several"},
		{"unit again", func(d, q []int64) { q[210] = 1; q[260] = 0 }, vcov.RowOrder{Period: -1, Unit: 1}, "row 211 column quay: found 1 once more after another unit, want all rows of a unit together: sort by quay"},
	} {
		for _, workers := range []int{1, 3} {
			_, err := tryFit(make1(c.change), stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day", "quay"}},
				vcov.Options{Errors: hacKind(), Order: &c.order, Lags: 2, Workers: workers})
			if e := new(stream.RowError); !errors.As(err, &e) || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%s: %v, want %s", c.name, err, c.want)
			}
		}
	}
}

func TestHACRefusals(t *testing.T) {
	s := newSeriesTable(rand.New(rand.NewPCG(1, 69)), 2, 30, 0, 0.2)
	n := len(s.y)
	s.tb.text("name", slices.Repeat([]string{"x"}, n))
	s.tb.int("f", slices.Repeat([]int64{2}, n))
	spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day", "quay", "name", "day / 7"}}
	for want, c := range map[string]struct {
		o      vcov.Options
		weight string
	}{
		"needs two passes":               {vcov.Options{Passes: 1}, ""},
		"want bartlett":                  {vcov.Options{Kernel: "flat"}, ""},
		"name is text":                   {vcov.Options{Order: &vcov.RowOrder{Period: 2, Unit: -1}}, ""},
		"want days or whole numbers":     {vcov.Options{Order: &vcov.RowOrder{Period: 3, Unit: 1}}, ""},
		"no meaning under frequency":     {vcov.Options{}, "f"},
		"finds no key 9":                 {vcov.Options{Order: &vcov.RowOrder{Period: 9, Unit: 1}}, ""},
		"errors over 2000000000000 lags": {},
	} {
		if c.weight != "" {
			spec.Weight, spec.WeightKind = c.weight, stream.Frequency
		} else {
			spec.Weight, spec.WeightKind = "", stream.NoWeight
		}
		c.o.Errors = hacKind()
		if strings.HasPrefix(want, "errors over") {
			wide := newSeriesTable(rand.New(rand.NewPCG(2, 69)), 1, 30, 0, 0)
			wide.day[len(wide.day)-1] = 1 << 50
			c.o.Order, c.o.Lags = &vcov.RowOrder{Period: 0, Unit: -1}, 2_000_000_000_000
			spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"day"}}
			_, err := tryFit(wide.tb.source(10), spec, c.o)
			if e := new(accum.MemoryError); !errors.As(err, &e) {
				t.Errorf("%v, want a refusal for memory", err)
			}
			continue
		}
		if _, err := tryFit(s.tb.source(10), spec, c.o); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want %s", err, want)
		}
	}
	spec.Weight, spec.WeightKind = "", stream.NoWeight
	for _, c := range []struct {
		order *vcov.RowOrder
		lags  int64
		want  string
	}{
		{nil, int64(n), fmt.Sprintf("%d lags reach beyond the data: the data have %d rows, so that at most %d are possible", n, n, n-1)},
		{nil, 1 << 62, "reach beyond the data"},
		{nil, int64(n - 1), ""},
		{&vcov.RowOrder{Period: -1, Unit: 1}, int64(n - 2), "the longest unit has"},
		{&vcov.RowOrder{Period: 0, Unit: 1}, 1 << 62, "periods, so that at most"},
	} {
		res := fit(t, s.tb.source(10), spec, vcov.Options{Errors: append(kinds("classical"), hacKind()...), Order: c.order, Lags: c.lags})
		e := res.Errors[1]
		switch {
		case c.want == "" && e.Status != "ok":
			t.Errorf("%d lags: %s", c.lags, *e.Reason)
		case c.want != "" && (e.Status == "ok" || !strings.Contains(*e.Reason, c.want)):
			t.Errorf("%d lags: %v, want %s", c.lags, e.Reason, c.want)
		}
	}
}

// Beyond the bound of work the weights of the quadratic kernel are cut off, which is
// told and hardly shows.
func TestHACQuadraticIsCut(t *testing.T) {
	if testing.Short() {
		t.Skip("sums all pairs of 30,000 rows")
	}
	s := newSeriesTable(rand.New(rand.NewPCG(3, 74)), 1, 40_000, 0.5, 0)
	n := len(s.y)
	if n < 24_000 {
		t.Fatalf("%d rows are too few to be cut", n)
	}
	d := &dense{y: s.y}
	mean := 0.0
	for i := range n {
		mean += s.a[i] / float64(n)
	}
	for i := range n {
		d.x, d.w = append(d.x, []float64{1, s.a[i] - mean}), append(d.w, 1)
	}
	d.solve()
	sums := make([]float64, n) // by lag
	var size float64
	for i := range n {
		size += d.x[i][1] * d.x[i][1]
		for j := range i + 1 {
			sums[i-j] += d.e[i] * d.x[i][1] * d.e[j] * d.x[j][1]
		}
	}
	v := sums[0]
	for j := 1; j < n; j++ {
		v += 2 * kernelAt("quadratic", float64(j)/7) * sums[j]
	}
	want := math.Sqrt(v*float64(n)/float64(n-2)) / size
	res := fit(t, s.tb.source(5000), stream.Spec{Outcome: "y", Terms: []string{"a"}}, vcov.Options{Errors: hacKind(), Kernel: "quadratic", Lags: 7})
	e := errorsOf(t, res, "hac")
	if e.Lags.Reach == nil || *e.Lags.Reach >= int64(n) || *e.Lags.Reach < 140 {
		t.Fatalf("reach %+v of %d rows", e.Lags, n)
	}
	if got := float64(e.SE[1]); math.Abs(got-want) > 2e-4*want {
		t.Errorf("%v, from all lags %v", got, want)
	}
}

// Rows that are dropped count as no lag without a period, and as a gap with one.
func TestHACDroppedRows(t *testing.T) {
	s := newSeriesTable(rand.New(rand.NewPCG(2, 70)), 1, 300, 0.6, 0)
	less := &seriesTable{tb: &table{}}
	for i := range s.y {
		if i%5 == 3 {
			s.y[i] = math.NaN()
			continue
		}
		less.a, less.b, less.y = append(less.a, s.a[i]), append(less.b, s.b[i]), append(less.y, s.y[i])
		less.day, less.quay = append(less.day, s.day[i]), append(less.quay, s.quay[i])
	}
	for _, order := range []*vcov.RowOrder{nil, {Period: 0, Unit: -1}} {
		v := less.byPairs(order, false, "bartlett", 8)
		res := fit(t, s.tb.source(40), stream.Spec{Outcome: "y", Terms: []string{"a", "b"}, Keys: []string{"day"}}, vcov.Options{Errors: hacKind(), Order: order, Lags: 7})
		e := errorsOf(t, res, "hac")
		for j := range 3 {
			if d := digits(float64(e.SE[j]), math.Sqrt(v.At(j, j))); d < 10 {
				t.Errorf("%+v: %v, want %v", order, e.SE[j], math.Sqrt(v.At(j, j)))
			}
		}
	}
}
