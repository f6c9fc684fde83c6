package vcov_test

import (
	"math"
	"math/big"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// worked is one example of testdata/worked/expected.json, solved in exact
// rational arithmetic.
type worked struct {
	Letter, Name, File, Outcome string
	Terms                       []string
	Constant                    bool
	N, K, G                     int
	RSS                         string
	Coef                        []exactNumber
	Group                       []string
	WeightedFile                string          `json:"weighted_file"`
	ClassicalVar                [][]exactNumber `json:"classical_var"`
	ClassicalSE                 []exactNumber   `json:"classical_se"`
	HC0Var                      [][]exactNumber `json:"HC0_var"`
	HC0SE                       []exactNumber   `json:"HC0_se"`
	HC1Var                      [][]exactNumber `json:"HC1_var"`
	HC1SE                       []exactNumber   `json:"HC1_se"`
	HC2Var                      [][]exactNumber `json:"HC2_var"`
	HC2SE                       []exactNumber   `json:"HC2_se"`
	HC3Var                      [][]exactNumber `json:"HC3_var"`
	HC3SE                       []exactNumber   `json:"HC3_se"`
	CR0Var                      [][]exactNumber `json:"CR0_var"`
	CR0SE                       []exactNumber   `json:"CR0_se"`
	CR1Var                      [][]exactNumber `json:"CR1_var"`
	CR1SE                       []exactNumber   `json:"CR1_se"`
	Contrast                    struct {
		ClassicalSE []exactNumber `json:"classical_se"`
		HC0SE       []exactNumber `json:"HC0_se"`
		HC1SE       []exactNumber `json:"HC1_se"`
		HC2SE       []exactNumber `json:"HC2_se"`
		HC3SE       []exactNumber `json:"HC3_se"`
	} `json:"analytic_weight_contrast"`
}

type exactNumber struct{ Exact, Dec string }

func (n exactNumber) float(t testing.TB) float64 {
	if n.Exact != "" {
		r, ok := new(big.Rat).SetString(n.Exact)
		if !ok {
			t.Fatalf("figure %q", n.Exact)
		}
		f, _ := r.Float64()
		return f
	}
	return parse(t, n.Dec)
}

func decimals(t testing.TB, x []exactNumber) []float64 {
	f := make([]float64, len(x))
	for i := range x {
		f[i] = x[i].float(t)
	}
	return f
}

func workedExample(t testing.TB, letter string) *worked {
	t.Helper()
	var all struct{ Examples []worked }
	readJSON(t, &all, "worked", "expected.json")
	for i := range all.Examples {
		if all.Examples[i].Letter == letter {
			return &all.Examples[i]
		}
	}
	t.Fatalf("no example %s", letter)
	return nil
}

func (w *worked) of(kind string) (se []exactNumber, v [][]exactNumber) {
	switch kind {
	case "classical":
		return w.ClassicalSE, w.ClassicalVar
	case "hc0":
		return w.HC0SE, w.HC0Var
	case "hc1":
		return w.HC1SE, w.HC1Var
	case "hc2":
		return w.HC2SE, w.HC2Var
	case "hc3":
		return w.HC3SE, w.HC3Var
	case "cr0":
		return w.CR0SE, w.CR0Var
	}
	return w.CR1SE, w.CR1Var
}

func (w *worked) spec() stream.Spec {
	s := stream.Spec{Outcome: w.Outcome, Terms: w.Terms, NoConstant: !w.Constant}
	if w.Group != nil {
		s.Keys = []string{"g"}
	}
	return s
}

func (w *worked) kinds() []string {
	k := []string{"classical", "hc0", "hc1", "hc2", "hc3"}
	if w.Group != nil {
		k = append(k, "cr0", "cr1")
	}
	return k
}

// checkCovariance compares element (i, j) on the scale sqrt(V_ii V_jj).
func checkCovariance(t *testing.T, what string, got [][]vcov.Number, want [][]exactNumber, tol float64) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d rows of covariance, want %d", what, len(got), len(want))
	}
	for i := range want {
		for j := range want {
			scale := math.Sqrt(want[i][i].float(t) * want[j][j].float(t))
			if d := math.Abs(float64(got[i][j])-want[i][j].float(t)) / scale; !(d <= tol) {
				t.Errorf("%s covariance (%d, %d): %v, exact %v, off by %.1e", what, i, j, got[i][j], want[i][j].Dec, d)
			}
		}
	}
}

func checkSE(t *testing.T, what string, got []vcov.Number, want []exactNumber, tol float64) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d errors, want %d", what, len(got), len(want))
	}
	for j := range want {
		w := parse(t, want[j].Dec)
		if d := math.Abs(float64(got[j])/w - 1); !(d <= tol) {
			t.Errorf("%s error %d: %v, exact %s, off by %.1e", what, j, got[j], want[j].Dec, d)
		}
	}
}

func TestWorkedExamples(t *testing.T) {
	const tol = 1e-12
	for _, letter := range []string{"A", "B", "C", "D", "F", "H"} {
		for _, passes := range []int{0, 1, 2} {
			w := workedExample(t, letter)
			t.Run(w.Name+"/passes="+string(rune('0'+passes)), func(t *testing.T) {
				ks := w.kinds()
				if passes == 1 {
					ks = append([]string{"classical", "hc0", "hc1"}, ks[5:]...)
				}
				src := openFile(t, testdata("worked", w.File), stream.Options{})
				r := fit(t, src, w.spec(), vcov.Options{Errors: kinds(ks...), Passes: passes})
				for j, want := range decimals(t, w.Coef) {
					if d := digits(float64(r.Estimates[j]), want); d < 12 {
						t.Errorf("coefficient %d: %v, exact %s (%.1f digits)", j, r.Estimates[j], w.Coef[j].Exact, d)
					}
				}
				rss := exactNumber{Exact: w.RSS}.float(t)
				if d := digits(float64(r.Residual.SS), rss); d < 12 {
					t.Errorf("residual sum of squares %v, exact %s (%.1f digits)", r.Residual.SS, w.RSS, d)
				}
				for _, k := range ks {
					se, v := w.of(k)
					e := errorsOf(t, r, k)
					checkSE(t, k, e.SE, se, tol)
					vtol := tol
					if letter == "C" && k == "hc3" {
						// The last row's residual is -0.002 beside an outcome of 500 and
						// 1 - h is 5e-6: a variance feels both twice, an error once.
						vtol = 4 * tol
					}
					checkCovariance(t, k, e.Covariance, v, vtol)
					df := float64(w.N - w.K)
					if k[:2] == "cr" {
						df = float64(w.G - 1)
						if len(e.Groups) != 1 || e.Groups[0] != int64(w.G) {
							t.Errorf("%s: groups %v, want %d", k, e.Groups, w.G)
						}
					}
					for j := range e.DF {
						if float64(e.DF[j]) != df {
							t.Errorf("%s: df %v, want %v", k, e.DF[j], df)
						}
						if tj := float64(r.Estimates[j]) / float64(e.SE[j]); digits(float64(e.T[j]), tj) < 15 {
							t.Errorf("%s: t %v, want %v", k, e.T[j], tj)
						}
					}
				}
			})
		}
	}
}

// Two samples with unequal variances: HC2 of the difference is the textbook
// variance s0^2/n0 + s1^2/n1 with divisors n-1 (Welch 1938,
// doi:10.1093/biomet/29.3-4.350).
func TestHC2IsTheUnequalVarianceVariance(t *testing.T) {
	src := openFile(t, testdata("worked", "f.csv"), stream.Options{})
	r := fit(t, src, stream.Spec{Outcome: "y", Terms: []string{"x"}}, vcov.Options{Errors: kinds("hc2")})
	variance := func(x ...float64) float64 {
		m, s := 0.0, 0.0
		for _, v := range x {
			m += v / float64(len(x))
		}
		for _, v := range x {
			s += (v - m) * (v - m)
		}
		return s / float64(len(x)-1)
	}
	want := math.Sqrt(variance(1, 2, 3)/3 + variance(4, 10)/2)
	if got := float64(errorsOf(t, r, "hc2").SE[1]); digits(got, want) < 12 {
		t.Errorf("HC2 error of the difference %v, textbook %v", got, want)
	}
}

// Frequency weights are repeated rows; precision weights are not.
func TestWorkedWeights(t *testing.T) {
	w := workedExample(t, "H")
	spec := w.spec()
	spec.Weight = "w"
	for _, passes := range []int{0, 2} {
		spec.WeightKind = stream.Frequency
		r := fit(t, openFile(t, testdata("worked", w.WeightedFile), stream.Options{}), spec, vcov.Options{Errors: kinds(w.kinds()...), Passes: passes})
		if r.N != int64(w.N) || r.Rows.Used != 4 {
			t.Errorf("n %d from %d rows, want %d from 4", r.N, r.Rows.Used, w.N)
		}
		for j, want := range decimals(t, w.Coef) {
			if d := digits(float64(r.Estimates[j]), want); d < 12 {
				t.Errorf("coefficient %d: %v, exact %s", j, r.Estimates[j], w.Coef[j].Exact)
			}
		}
		for _, k := range w.kinds() {
			se, v := w.of(k)
			e := errorsOf(t, r, k)
			checkSE(t, "frequency weights "+k, e.SE, se, 1e-12)
			checkCovariance(t, "frequency weights "+k, e.Covariance, v, 1e-12)
		}
		spec.WeightKind = stream.Precision
		r = fit(t, openFile(t, testdata("worked", w.WeightedFile), stream.Options{}), spec, vcov.Options{Errors: kinds("classical", "hc0", "hc1", "hc2", "hc3"), Passes: passes})
		if r.N != 4 {
			t.Errorf("n %d under precision weights, want 4", r.N)
		}
		for k, se := range map[string][]exactNumber{"classical": w.Contrast.ClassicalSE, "hc0": w.Contrast.HC0SE, "hc1": w.Contrast.HC1SE, "hc2": w.Contrast.HC2SE, "hc3": w.Contrast.HC3SE} {
			checkSE(t, "precision weights "+k, errorsOf(t, r, k).SE, se, 1e-12)
		}
	}
}

// The last row alone has x2 = 1: its leverage is 1, its residual 0. The
// coefficient of x2 then rests on one row: no p, no interval, and no HC2 or HC3
// error. HC2 and HC3 of the others are those of the other four rows.
func TestWorkedLoneRow(t *testing.T) {
	w := workedExample(t, "C2")
	// Four rows x = 0..3 with residuals 1/10, 1/5, -7/10, 2/5 and leverages 7/10,
	// 3/10, 3/10, 7/10; M x has the entries 7/10, 4/10, 1/10, -2/10 for the
	// constant and -3/10, -1/10, 1/10, 3/10 for the slope.
	e := []float64{0.1, 0.2, -0.7, 0.4}
	h := []float64{0.7, 0.3, 0.3, 0.7}
	l := [][]float64{{0.7, 0.4, 0.1, -0.2}, {-0.3, -0.1, 0.1, 0.3}}
	want := map[string][]float64{"hc2": make([]float64, 2), "hc3": make([]float64, 2)}
	for j := range l {
		var v2, v3 float64
		for i := range e {
			u := l[j][i] * l[j][i] * e[i] * e[i] / (1 - h[i])
			v2 += u
			v3 += u / (1 - h[i])
		}
		want["hc2"][j], want["hc3"][j] = math.Sqrt(v2), math.Sqrt(v3)
	}
	src := openFile(t, testdata("worked", w.File), stream.Options{})
	r := fit(t, src, w.spec(), vcov.Options{Errors: kinds(w.kinds()...)})
	for j, c := range decimals(t, w.Coef) {
		if digits(float64(r.Estimates[j]), c) < 12 {
			t.Errorf("coefficient %d: %v, exact %s", j, r.Estimates[j], w.Coef[j].Exact)
		}
	}
	for _, k := range []string{"classical", "hc0", "hc1", "cr0", "cr1"} {
		se, v := w.of(k)
		en := errorsOf(t, r, k)
		checkSE(t, k, en.SE, se, 1e-12)
		checkCovariance(t, k, en.Covariance, v, 1e-12)
		for j := range en.P {
			lone := j == 2 && k != "classical"
			if en.P[j].Exists() == lone || en.Low[j].Exists() == lone || en.High[j].Exists() == lone {
				t.Errorf("%s %s: p %v, interval %v to %v", k, r.Terms[j], en.P[j], en.Low[j], en.High[j])
			}
		}
	}
	for k, se := range want {
		en := errorsOf(t, r, k)
		for j := range se {
			if d := digits(float64(en.SE[j]), se[j]); d < 12 {
				t.Errorf("%s error %d: %v, without the lone row %v (%.1f digits)", k, j, en.SE[j], se[j], d)
			}
			if !en.P[j].Exists() || !en.Low[j].Exists() {
				t.Errorf("%s %s has no p or interval, but does not rest on the lone row", k, r.Terms[j])
			}
		}
		if en.SE[2].Exists() || en.P[2].Exists() || en.Low[2].Exists() || en.High[2].Exists() {
			t.Errorf("%s %s: se %v p %v low %v, want none: one row decides it", k, r.Terms[2], en.SE[2], en.P[2], en.Low[2])
		}
	}
	if len(r.Warnings) == 0 {
		t.Error("no warning about the row that decides x2 alone")
	}
}
