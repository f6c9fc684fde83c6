package vcov_test

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"os"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// chosen is what auto makes of the sets: small inputs take extended arithmetic where
// that saves a last digit.
var chosen = map[string]string{
	"Norris": "extended", "Pontius": "extended", "NoInt1": "double", "NoInt2": "double",
	"Filip": "extended", "Longley": "double", "Wampler1": "extended", "Wampler2": "extended",
	"Wampler3": "extended", "Wampler4": "extended", "Wampler5": "extended",
}

// All sets come out to 13 digits, their errors to 12, from a file and through a pipe,
// in one pass and in two.
func TestNISTToTheLastDigits(t *testing.T) {
	for _, s := range nistSets(t) {
		e := s.exact(t)
		text, err := os.ReadFile(testdata("nist", s.File))
		if err != nil {
			t.Fatal(err)
		}
		for _, way := range []string{"auto", "extended", "pipe"} {
			for _, passes := range []int{1, 2} {
				if way == "pipe" && passes == 2 {
					continue // a pipe is read once
				}
				t.Run(fmt.Sprintf("%s/%s/passes=%d", s.Name, way, passes), func(t *testing.T) {
					names := []string{"classical", "hc0", "hc1"}
					if passes == 2 {
						names = append(names, "hc2", "hc3")
					}
					o := vcov.Options{Errors: kinds(names...), Passes: passes}
					var src stream.Source
					switch way {
					case "pipe":
						src = openPipe(t, text, stream.Options{})
					default:
						o.Arithmetic = way
						src = openFile(t, testdata("nist", s.File), stream.Options{})
					}
					r := fit(t, src, s.spec(), o)
					if (r.Run.Arithmetic == "extended") != (r.Run.ArithmeticReason != "") {
						t.Errorf("%s arithmetic because %q", r.Run.Arithmetic, r.Run.ArithmeticReason)
					}
					if want := chosen[s.Name]; way != "extended" && r.Run.Arithmetic != want {
						t.Errorf("arithmetic is %s, want %s", r.Run.Arithmetic, want)
					} else if way == "extended" && r.Run.Arithmetic != "extended" {
						t.Errorf("arithmetic is %s", r.Run.Arithmetic)
					}
					if s.ExactFit {
						exactFitHolds(t, &s, r, names)
						if d := least(floats(r.Estimates), parseAll(t, s.Certified.B)); d < 13 {
							t.Errorf("coefficients to %.2f digits", d)
						}
						return
					}
					atLeast(t, r, e, names, 13, 12)
				})
			}
		}
	}
}

// atLeast asks for digits of coefficients and of errors. hc1 has its factor.
func atLeast(t *testing.T, r *vcov.Result, e *exactFit, names []string, coef, se float64) {
	t.Helper()
	got := least(floats(r.Estimates), e.coefficients())
	text := fmt.Sprintf("digits: coefficients %.1f", got)
	if got < coef {
		t.Errorf("coefficients to %.2f digits, want %v: %v, exact %v", got, coef, r.Estimates, e.coefficients())
	}
	for _, name := range names {
		var want []float64
		switch name {
		case "classical":
			want = e.classical()
		case "hc0", "hc1":
			want = e.hc(0)
		case "hc2":
			want = e.hc(1)
		case "hc3":
			want = e.hc(2)
		}
		if name == "hc1" {
			for j := range want {
				want[j] *= math.Sqrt(float64(r.N) / float64(r.N-int64(e.k)))
			}
		}
		d := least(floats(errorsOf(t, r, name).SE), want)
		text += fmt.Sprintf(" %s %.1f", name, d)
		if d < se {
			t.Errorf("%s to %.2f digits, want %v", name, d, se)
		}
	}
	t.Logf("%s, %s arithmetic", text, r.Run.Arithmetic)
}

// steep is a design of nearly collinear terms with its columns in exact numbers.
type steep struct {
	name  string
	tb    *table
	terms []string
	x     [][]*big.Float
	y     []*big.Float
	w     []float64
}

func exactly(x float64) *big.Float { return wide().SetFloat64(x) }

func steepDesigns(n int) []steep {
	r := rand.New(rand.NewPCG(21, 22))
	var all []steep
	weights := func(tb *table) []float64 {
		w, f := make([]float64, n), make([]int64, n)
		for i := range w {
			f[i] = int64(1 + r.IntN(4))
			w[i] = 0.25 + r.Float64()
		}
		tb.float("w", w)
		tb.int("f", f)
		return w
	}
	poly := func(degree int, from, width float64) {
		s := steep{name: fmt.Sprintf("degree %d on [%v, %v]", degree, from, from+width), tb: &table{}}
		x, y := make([]float64, n), make([]float64, n)
		for i := range x {
			x[i] = from + width*r.Float64()
			row, p := []*big.Float{whole(1)}, whole(1)
			u := (x[i] - from) / width
			for range degree {
				p = mul(p, exactly(x[i]))
				row = append(row, p)
				u = 4 * u * (1 - u) // smooth, and no polynomial of the degree
			}
			y[i] = u + 0.1*r.NormFloat64()
			s.x, s.y = append(s.x, row), append(s.y, exactly(y[i]))
		}
		s.terms = []string{"x"}
		for d := 2; d <= degree; d++ {
			s.terms = append(s.terms, fmt.Sprintf("pow(x, %d)", d))
		}
		s.tb.float("x", x)
		s.tb.float("y", y)
		s.w = weights(s.tb)
		all = append(all, s)
	}
	poly(10, -1, 2)
	poly(7, 0, 3)
	poly(6, -8, 5)
	poly(3, 100, 10)
	for _, gap := range []float64{1e-9, 1e-6} {
		s := steep{name: fmt.Sprintf("columns %v apart", gap), tb: &table{}, terms: []string{"a", "b", "a*b"}}
		a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range a {
			a[i] = 3 + r.NormFloat64()
			b[i] = a[i] + gap*r.NormFloat64()
			y[i] = a[i] + (b[i]-a[i])/gap + r.NormFloat64()
			s.x = append(s.x, []*big.Float{whole(1), exactly(a[i]), exactly(b[i]), mul(exactly(a[i]), exactly(b[i]))})
			s.y = append(s.y, exactly(y[i]))
		}
		s.tb.float("a", a)
		s.tb.float("b", b)
		s.tb.float("y", y)
		s.w = weights(s.tb)
		all = append(all, s)
	}
	// A large offset, and quotients that no float64 holds.
	s := steep{name: "offset 1e6 and quotients", tb: &table{}, terms: []string{"a", "a/3 + b/7", "(a - b)*(a + b)"}}
	a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
	for i := range a {
		a[i], b[i] = 1e6+r.NormFloat64(), r.NormFloat64()
		y[i] = b[i] + 0.3*r.NormFloat64()
		xa, xb := exactly(a[i]), exactly(b[i])
		sum := wide().Add(quo(xa, whole(3)), quo(xb, whole(7)))
		s.x = append(s.x, []*big.Float{whole(1), xa, sum, sub(mul(xa, xa), mul(xb, xb))})
		s.y = append(s.y, exactly(y[i]))
	}
	s.tb.float("a", a)
	s.tb.float("b", b)
	s.tb.float("y", y)
	s.w = weights(s.tb)
	return append(all, s)
}

// Designs on which float64 keeps 4 to 10 digits, against exact least squares on the
// same cells, with every kind of weight.
func TestExtendedAgainstExact(t *testing.T) {
	const n = 160 // leverages stay off 1, where 1-h would cancel
	names := []string{"classical", "hc0", "hc1", "hc2", "hc3"}
	for _, s := range steepDesigns(n) {
		for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Precision, stream.Sampling, stream.Frequency} {
			t.Run(fmt.Sprintf("%s/weights=%d", s.name, kind), func(t *testing.T) {
				spec := stream.Spec{Outcome: "y", Terms: s.terms, WeightKind: kind}
				x, y, use := s.x, s.y, names
				switch kind {
				case stream.Precision, stream.Sampling:
					if kind == stream.Sampling {
						use = names[1:] // classical errors have no meaning
					}
					spec.Weight = "w"
					x, y = nil, nil
					for i, row := range s.x {
						root := wide().Sqrt(exactly(s.w[i]))
						var scaled []*big.Float
						for _, v := range row {
							scaled = append(scaled, mul(v, root))
						}
						x, y = append(x, scaled), append(y, mul(s.y[i], root))
					}
				case stream.Frequency:
					spec.Weight = "f"
					f := s.tb.cols[len(s.tb.cols)-1].I64
					x, y = nil, nil
					for i, row := range s.x {
						for range f[i] {
							x, y = append(x, row), append(y, s.y[i])
						}
					}
				}
				e := exact(t, x, y, true)
				for _, way := range []string{"file", "pipe"} {
					if way == "file" {
						atLeast(t, fit(t, s.tb.source(100), spec, vcov.Options{Errors: kinds(use...), Arithmetic: "extended"}), e, use, 15, 14)
						continue
					}
					// The first rows of a pipe may make a frame in which fourth moments, which
					// are float64, cancel: then the result says so.
					asked := use[:len(use)-2]
					r := fit(t, openPipe(t, s.tb.csv(), stream.Options{SegmentBytes: 8192}), spec, vcov.Options{Errors: kinds(asked...), Arithmetic: "extended"})
					se := 14.0
					for _, w := range r.Warnings {
						if n := 0; w.Code == "digits" {
							if _, err := fmt.Sscanf(w.Text, "hc0 and hc1 have about %d digits left", &n); err == nil {
								se = float64(n)
							}
						}
					}
					atLeast(t, r, e, asked, 15, se)
				}
				atLeast(t, fit(t, s.tb.source(1<<20), spec, vcov.Options{Errors: kinds(use...)}), e, use, 12.5, 12)
			})
		}
	}
}

// Categories beside nearly collinear terms, also where the model has the products of
// a category but not the category.
func TestExtendedWithLevels(t *testing.T) {
	r := rand.New(rand.NewPCG(31, 32))
	const n, levels = 400, 4
	tb := &table{}
	x, y := make([]float64, n), make([]float64, n)
	quay := make([]string, n)
	var full, products [][]*big.Float
	var ys []*big.Float
	for i := range x {
		x[i] = 100 + 10*r.Float64()
		g := r.IntN(levels)
		quay[i] = string(rune('a' + g))
		y[i] = math.Sin(x[i]) + float64(g) + 0.1*r.NormFloat64()
		row, p := []*big.Float{whole(1)}, whole(1)
		for range 5 {
			p = mul(p, exactly(x[i]))
			row = append(row, p)
		}
		with, only := append([]*big.Float(nil), row...), append([]*big.Float(nil), row...)
		for l := 1; l < levels; l++ {
			d := whole(0)
			if l == g {
				d = whole(1)
			}
			with = append(with, d)
			only = append(only, mul(d, exactly(x[i])))
		}
		full, products, ys = append(full, with), append(products, only), append(ys, exactly(y[i]))
	}
	tb.float("x", x)
	tb.float("y", y)
	tb.text("quay", quay)
	terms := []string{"x", "pow(x, 2)", "pow(x, 3)", "pow(x, 4)", "pow(x, 5)"}
	for _, c := range []struct {
		term string
		x    [][]*big.Float
	}{{"each(quay)", full}, {"each(quay) * x", products}} {
		t.Run(c.term, func(t *testing.T) {
			e := exact(t, c.x, ys, true)
			names := []string{"classical", "hc0", "hc3"}
			r := fit(t, tb.source(150), stream.Spec{Outcome: "y", Terms: append(terms[:5:5], c.term)}, vcov.Options{Errors: kinds(names...), Arithmetic: "extended"})
			// The sums by level are float64: what remains is their rounding.
			atLeast(t, r, e, names, 12, 12)
		})
	}
}

// The same bits for any number of workers, in extended arithmetic too; a pipe to
// 1e-13.
func TestExtendedBits(t *testing.T) {
	r := rand.New(rand.NewPCG(41, 42))
	n := 30_000
	if testing.Short() {
		n = 8_000
	}
	tb := &table{}
	x, y, w := make([]float64, n), make([]float64, n), make([]float64, n)
	quay := make([]int64, n)
	for i := range x {
		x[i], w[i], quay[i] = 1000+r.NormFloat64(), 0.5+r.Float64(), int64(r.IntN(50))
		y[i] = math.Sin(x[i]) + r.NormFloat64()
	}
	tb.float("x", x)
	tb.float("y", y)
	tb.float("w", w)
	tb.int("quay", quay)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x", "pow(x, 2)", "pow(x, 3)", "x/3 + pow(x, 4)"}, Keys: []string{"quay"}, Weight: "w", WeightKind: stream.Precision}
	for _, passes := range []int{1, 2} {
		var first string
		var file *vcov.Result
		for _, workers := range []int{1, 2, 3, 8} {
			o := vcov.Options{Errors: kinds("classical", "hc1", "cr1"), Passes: passes, Workers: workers}
			got := fit(t, tb.source(3000), spec, o)
			if got.Run.Arithmetic != "extended" {
				t.Fatalf("arithmetic %s", got.Run.Arithmetic)
			}
			if first == "" {
				first, file = fixed(t, got), got
			} else if b := fixed(t, got); b != first {
				t.Errorf("%d workers:\n%s\n1 worker:\n%s", workers, b, first)
			}
			if passes == 2 {
				continue
			}
			pipe := fit(t, openPipe(t, tb.csv(), stream.Options{SegmentBytes: 1 << 17}), spec, o)
			if pipe.Run.Arithmetic != "extended" || pipe.Run.Segments < 3 {
				t.Errorf("pipe: %s arithmetic, %d segments", pipe.Run.Arithmetic, pipe.Run.Segments)
			}
			if d := least(floats(pipe.Estimates), floats(file.Estimates)); d < 13 {
				t.Errorf("pipe: estimates agree to %.1f digits", d)
			}
			for k := range pipe.Errors {
				if d := least(floats(pipe.Errors[k].SE), floats(file.Errors[k].SE)); d < 12 {
					t.Errorf("pipe: %s agrees to %.1f digits", pipe.Errors[k].Kind, d)
				}
			}
		}
	}
}

// Auto leaves ordinary designs in double arithmetic, to the bit.
func TestAutoStaysDouble(t *testing.T) {
	check := func(name string, src func() stream.Source, spec stream.Spec) {
		t.Run(name, func(t *testing.T) {
			o := vcov.Options{Errors: kinds("classical", "hc1"), Passes: 1}
			auto := fit(t, src(), spec, o)
			o.Arithmetic = "double"
			double := fit(t, src(), spec, o)
			if a, d := fixed(t, auto), fixed(t, double); a != d {
				t.Errorf("auto:\n%s\ndouble:\n%s", a, d)
			}
			if auto.Run.Arithmetic != "double" {
				t.Errorf("arithmetic %s", auto.Run.Arithmetic)
			}
			for _, w := range auto.Warnings {
				if w.Code == "digits" {
					t.Errorf("warning: %s", w.Text)
				}
			}
		})
	}
	for _, h := range hardProblems(10_000) {
		check(h.name, func() stream.Source { return h.tb.source(3000) }, stream.Spec{Outcome: "y", Terms: h.terms})
	}
	check("quays", func() stream.Source { return openFile(t, testdata("quays", "unloading.csv"), stream.Options{}) },
		stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "crew", "wet", "pow(pallets, 2)", "pallets*tonnes"}})
}

// Double arithmetic says that digits are lost, and only where they are.
func TestDoubleTellsLostDigits(t *testing.T) {
	for _, s := range nistSets(t) {
		r := fit(t, openFile(t, testdata("nist", s.File), stream.Options{}), s.spec(), vcov.Options{Errors: kinds("hc1"), Arithmetic: "double"})
		told := false
		for _, w := range r.Warnings {
			told = told || strings.Contains(w.Text, "--arithmetic extended")
		}
		if want := s.Name == "Filip" || s.Name == "Wampler3" || s.Name == "Wampler4" || s.Name == "Wampler5"; told != want {
			t.Errorf("%s: told %v, want %v: %v", s.Name, told, want, r.Warnings)
		}
		if r.Run.Arithmetic != "double" {
			t.Errorf("%s: %s arithmetic", s.Name, r.Run.Arithmetic)
		}
	}
}

// What is collinear stays so with more digits: rank does not hang on arithmetic.
func TestExtendedAliases(t *testing.T) {
	r := rand.New(rand.NewPCG(51, 52))
	tb := &table{}
	n := 500
	x, z, y := make([]float64, n), make([]float64, n), make([]float64, n)
	for i := range x {
		x[i], z[i] = 7+r.NormFloat64(), r.NormFloat64()
		y[i] = x[i] - z[i] + r.NormFloat64()
	}
	tb.float("x", x)
	tb.float("z", z)
	tb.float("y", y)
	spec := stream.Spec{Outcome: "y", Terms: []string{"x", "z", "x/3 + z/7", "pow(x, 2)", "(x + z)*(x - z) + z*z"}}
	var all []*vcov.Result
	for _, a := range []string{"double", "extended"} {
		all = append(all, fit(t, tb.source(200), spec, vcov.Options{Errors: kinds("classical", "hc1"), Arithmetic: a}))
	}
	d, e := all[0], all[1]
	if e.Rank != 4 || d.Rank != 4 || len(e.Aliased) != 2 || e.Aliased[0].Term != e.Terms[3] || e.Aliased[1].Term != e.Terms[5] {
		t.Fatalf("rank %d, aliased %v; double %d, %v", e.Rank, e.Aliased, d.Rank, d.Aliased)
	}
	for j := range e.Terms {
		if e.Estimates[j].Exists() != d.Estimates[j].Exists() {
			t.Errorf("%s: %v, double %v", e.Terms[j], e.Estimates[j], d.Estimates[j])
		}
		if !e.Estimates[j].Exists() {
			continue
		}
		if c := digits(float64(e.Estimates[j]), float64(d.Estimates[j])); c < 11 {
			t.Errorf("%s: %v, double %v", e.Terms[j], e.Estimates[j], d.Estimates[j])
		}
		for k := range e.Errors {
			if c := digits(float64(e.Errors[k].SE[j]), float64(d.Errors[k].SE[j])); c < 11 {
				t.Errorf("%s: %s %v, double %v", e.Terms[j], e.Errors[k].Kind, e.Errors[k].SE[j], d.Errors[k].SE[j])
			}
		}
	}
}

// sequential hides that a source can be sampled, as that of a compressed file.
type sequential struct{ stream.Source }

func (s sequential) Info() stream.Info {
	i := s.Source.Info()
	i.Sampled = false
	return i
}

// The first rows do not show how collinear the rest is. What can be read again is
// summed again; a pipe says how many digits are left.
func TestExtendedAtSecondSight(t *testing.T) {
	r := rand.New(rand.NewPCG(61, 62))
	tb := &table{}
	const n = 3000
	a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
	var rows [][]*big.Float
	var ys []*big.Float
	for i := range a {
		a[i], b[i] = r.NormFloat64(), r.NormFloat64()
		if i >= 500 {
			a[i] *= 1e8
			b[i] += a[i]
		}
		y[i] = 2*(b[i]-a[i]) + 0.3*r.NormFloat64()
		rows = append(rows, []*big.Float{whole(1), quo(exactly(a[i]), whole(3)), quo(exactly(b[i]), whole(7))})
		ys = append(ys, exactly(y[i]))
	}
	tb.float("a", a)
	tb.float("b", b)
	tb.float("y", y)
	spec := stream.Spec{Outcome: "y", Terms: []string{"a/3", "b/7"}}
	e := exact(t, rows, ys, true)
	names := []string{"classical", "hc0", "hc1"}
	again := fit(t, sequential{tb.source(500)}, spec, vcov.Options{Errors: kinds(names...)})
	atLeast(t, again, e, names, 15, 13)
	if again.Run.Arithmetic != "extended" || !strings.Contains(fmt.Sprint(again.Warnings), "repeated in extended arithmetic") {
		t.Errorf("%s arithmetic, warnings %v", again.Run.Arithmetic, again.Warnings)
	}
	pipe := fit(t, openPipe(t, tb.csv(), stream.Options{SegmentBytes: 1 << 14}), spec, vcov.Options{Errors: kinds(names...)})
	told := 0
	for _, w := range pipe.Warnings {
		if w.Code == "digits" {
			fmt.Sscanf(w.Text, "terms are nearly collinear: some estimates may have only about %d digits", &told)
		}
	}
	if got := least(floats(pipe.Estimates), e.coefficients()); pipe.Run.Arithmetic != "double" || told == 0 || got < float64(told)-0.5 || got > float64(told)+4 {
		t.Errorf("pipe: %s arithmetic, %.1f digits, told %d", pipe.Run.Arithmetic, got, told)
	}
}
