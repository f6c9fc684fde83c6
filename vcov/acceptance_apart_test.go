package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// harbour is unloading data with a berth for every few rows: berths is the largest
// category, quays and crews are smaller; each berth belongs to a ward, and a few
// levels of lonely have one row.
func harbour(rows, berths, quays, crews int, seed uint64) *table {
	rng := rand.New(rand.NewPCG(seed, 1))
	tb := &table{}
	col := map[string][]float64{}
	var berth, quay, crew, gang, ward, lonely []int64
	for i := range rows {
		b := rng.IntN(berths)
		switch {
		case i < berths:
			b = i // all occur
		case i < berths+berths/2:
			b = i - berths
		}
		q, c := rng.IntN(quays), rng.IntN(crews)
		pallets := float64(1+rng.IntN(40)) + float64(b%5)
		tonnes := 1000 + pallets*0.7 + rng.NormFloat64()*3 + float64(q)
		wet := float64(rng.IntN(2))
		y := 30 + 2*pallets + 0.5*tonnes - 3*wet + float64(b%13) + 0.3*float64(q) + float64(c%3)*pallets*0.1 + rng.NormFloat64()*(1+0.1*pallets)
		for n, x := range map[string]float64{"pallets": pallets, "tonnes": tonnes, "wet": wet, "minutes": y,
			"w": 0.2 + 2*rng.Float64(), "f": float64(1 + rng.IntN(4))} {
			col[n] = append(col[n], x)
		}
		berth, quay, crew, gang = append(berth, int64(b)), append(quay, int64(q)), append(crew, int64(c)), append(gang, int64(rng.IntN(30)))
		ward, lonely = append(ward, int64(b/10)), append(lonely, int64(b%40))
		if i >= 100 && i < 105 {
			lonely[i] = int64(900 + i) // a level of one row
		}
	}
	for _, n := range []string{"minutes", "pallets", "tonnes", "wet", "w", "f"} {
		tb.float(n, col[n])
	}
	tb.int("berth", berth)
	tb.int("quay", quay)
	tb.int("crew", crew)
	tb.int("gang", gang)
	tb.int("ward", ward)
	tb.int("lonely", lonely)
	return tb
}

// A category whose levels are eliminated first gives what one dense solve gives.
func TestEliminationIsTheDenseSolve(t *testing.T) {
	tb := harbour(1500, 90, 7, 4, 5)
	specs := map[string]stream.Spec{
		"one":          {Terms: []string{"pallets", "tonnes", "wet", "each(berth)"}},
		"crossed":      {Terms: []string{"each(quay)", "pallets", "each(berth)", "tonnes", "each(crew)"}},
		"weights":      {Terms: []string{"pallets", "each(berth)", "each(quay)"}, Weight: "w", WeightKind: stream.Precision},
		"frequencies":  {Terms: []string{"pallets", "each(berth)", "each(quay)"}, Weight: "f", WeightKind: stream.Frequency},
		"sampling":     {Terms: []string{"pallets", "each(quay)", "each(berth)"}, Weight: "w", WeightKind: stream.Sampling},
		"product":      {Terms: []string{"pallets", "each(berth)", "each(berth) * wet", "each(quay)"}, Where: "berth < 30"},
		"offset":       {Terms: []string{"wet", "each(berth)", "each(berth) * tonnes"}, Where: "berth < 25"},
		"small":        {Terms: []string{"pallets", "each(berth)", "each(crew) * pallets", "each(crew)", "each(quay) * wet"}},
		"pairs":        {Terms: []string{"pallets", "each(quay) * each(crew)", "each(quay)", "each(crew)"}},
		"pairsAndMore": {Terms: []string{"pallets", "each(quay) * each(crew)", "each(gang)"}},
		"noConstant":   {Terms: []string{"pallets", "each(berth)", "each(quay)"}, NoConstant: true},
		"allLevels":    {Terms: []string{"pallets", "each(berth, base=\"none\")", "each(quay)"}, NoConstant: true},
		"base":         {Terms: []string{"pallets", "each(berth, base=\"17\")", "each(quay, base=\"3\")"}},
		"white":        {Terms: []string{"tonnes", "pow(tonnes, 2)", "pow(tonnes, 3)", "each(berth)", "each(quay)"}},
		"lone":         {Terms: []string{"pallets", "each(lonely)", "each(quay)"}},
		"loneProduct":  {Terms: []string{"pallets", "each(lonely)", "each(lonely) * wet"}},
		"loneBase":     {Terms: []string{"pallets", "each(lonely, base=\"1002\")", "each(quay)"}},
		"loneAll":      {Terms: []string{"pallets", "each(lonely, base=\"none\")"}, NoConstant: true},
		"loneInRest":   {Terms: []string{"pallets", "each(berth)", "each(lonely)"}, Where: "berth < 60"},
		"loneCluster":  {Terms: []string{"pallets", "each(berth, base=\"5\")", "each(quay)"}, Where: "berth < 10 || gang == berth - 10"},
		"nested":       {Terms: []string{"pallets", "each(berth)", "each(ward)"}},
		"slopesOnly":   {Terms: []string{"pallets", "each(berth)", "each(quay) * tonnes"}},
	}
	for name, spec := range specs {
		t.Run(name, func(t *testing.T) {
			spec.Outcome = "minutes"
			spec.Keys = []string{"gang", "quay"}
			o := vcov.Options{Errors: kinds("classical", "hc0", "hc1", "hc2", "hc3", "cr0", "cr1", "cr1:1"), Workers: 1}
			o.Dense = 1 << 20
			want := fit(t, tb.source(400), spec, o)
			o.Dense = 1
			got := fit(t, tb.source(400), spec, o)
			compareFits(t, got, want, 1e-10)
			if fixed(t, got) == fixed(t, want) {
				t.Error("both took the same route")
			}
			for _, workers := range []int{2, 3, 8} {
				o.Workers = workers
				if a, b := fixed(t, got), fixed(t, fit(t, tb.source(400), spec, o)); a != b {
					t.Fatalf("%d workers give other bits", workers)
				}
			}
		})
	}
}

// compareFits compares results by the size of each error.
func compareFits(t *testing.T, got, want *vcov.Result, tol float64) {
	t.Helper()
	if len(got.Terms) != len(want.Terms) || got.Rank != want.Rank || got.Residual.DF != want.Residual.DF {
		t.Fatalf("%d terms, rank %d, df %d; want %d, %d, %d", len(got.Terms), got.Rank, got.Residual.DF, len(want.Terms), want.Rank, want.Residual.DF)
	}
	worst, where := 0.0, ""
	near := func(what string, a, b, size float64) {
		if math.IsNaN(a) || math.IsNaN(b) {
			if math.IsNaN(a) != math.IsNaN(b) {
				t.Errorf("%s: %v, want %v", what, a, b)
			}
			return
		}
		if d := math.Abs(a-b) / size; d > worst {
			worst, where = d, fmt.Sprintf("%s: %v, want %v", what, a, b)
		}
	}
	near("r2", float64(got.R2), float64(want.R2), 1)
	near("ss", float64(got.Residual.SS), float64(want.Residual.SS), float64(want.Residual.SS))
	for i := range want.Errors {
		e, f := &got.Errors[i], &want.Errors[i]
		if e.Status != f.Status {
			t.Fatalf("%s is %s, want %s", e.Name(), e.Status, f.Status)
		}
		for j, term := range want.Terms {
			if got.Terms[j] != term {
				t.Fatalf("term %d is %s, want %s", j, got.Terms[j], term)
			}
			size := float64(want.Errors[len(want.Errors)-1].SE[j])
			if !(size > 0) {
				size = math.Max(1e-3, math.Abs(float64(want.Estimates[j])))
			}
			near(term, float64(got.Estimates[j]), float64(want.Estimates[j]), size)
			near(e.Name()+" of "+term, float64(e.SE[j]), float64(f.SE[j]), math.Max(float64(f.SE[j]), 1e-9))
			near(e.Name()+" p of "+term, float64(e.P[j]), float64(f.P[j]), 1)
		}
		switch {
		case (e.Overall == nil) != (f.Overall == nil):
			t.Errorf("%s: one joint test only", e.Name())
		case e.Overall == nil || (!e.Overall.F.Exists() && e.Kind[:2] == "cr"):
		default:
			near(e.Name()+" joint F", float64(e.Overall.F), float64(f.Overall.F), math.Abs(float64(f.Overall.F)))
			near(e.Name()+" joint df", float64(e.Overall.DF1), float64(f.Overall.DF1), 1)
		}
	}
	if worst > tol {
		t.Errorf("differs by %.1e: %s", worst, where)
	} else {
		t.Logf("largest difference %.1e: %s", worst, where)
	}
}

// The category that is eliminated keeps its levels where terms depend on each
// other; the rest of the fit does not feel the choice.
func TestEliminationOrderOfAliases(t *testing.T) {
	tb := harbour(1500, 90, 7, 4, 6)
	for name, terms := range map[string][]string{
		"nested":   {"pallets", "each(ward)", "each(berth)"},
		"constant": {"pallets", "each(berth, base=\"none\")"},
		"number":   {"pallets", "ward", "tonnes", "each(berth)"},
		"white":    {"pallets", "tonnes", "pow(tonnes, 2)", "ward", "pow(tonnes, 3)", "each(berth)"},
		"slope":    {"pallets", "each(berth)", "each(berth) * ward"},
	} {
		t.Run(name, func(t *testing.T) {
			spec := stream.Spec{Outcome: "minutes", Terms: terms, Keys: []string{"gang"}}
			o := vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1"), Workers: 2, Dense: 1 << 20}
			want := fit(t, tb.source(400), spec, o)
			o.Dense = 1
			got := fit(t, tb.source(400), spec, o)
			if got.Rank != want.Rank || len(got.Aliased) != len(want.Aliased) || len(want.Aliased) == 0 {
				t.Fatalf("rank %d with %d aliased, want %d with %d", got.Rank, len(got.Aliased), want.Rank, len(want.Aliased))
			}
			zero := map[string]bool{} // in every row
			for _, a := range want.Aliased {
				zero[a.Term] = len(a.DependsOn) == 0
			}
			for _, a := range got.Aliased {
				if (len(a.DependsOn) == 0) != zero[a.Term] {
					t.Errorf("%s depends on %v", a.Term, a.DependsOn)
				}
			}
			if !warned(got, "eliminated") || warned(want, "eliminated") {
				t.Error("the order of elimination is told where it shows, and only there")
			}
			i := index(t, got, "pallets")
			for k := range want.Errors {
				e, f := &got.Errors[k], &want.Errors[k]
				if d := digits(float64(e.SE[i]), float64(f.SE[i])); d < 10 {
					t.Errorf("%s of pallets: %v, want %v", e.Name(), e.SE[i], f.SE[i])
				}
				if name == "slope" && k < 1 && e.Overall != nil {
					if d := digits(float64(e.Overall.F), float64(f.Overall.F)); d < 10 {
						t.Errorf("%s joint F %v, want %v", e.Name(), e.Overall.F, f.Overall.F)
					}
				}
			}
			if d := digits(float64(got.Estimates[i]), float64(want.Estimates[i])); d < 10 {
				t.Errorf("pallets %v, want %v", got.Estimates[i], want.Estimates[i])
			}
			// The fit of a row does not depend on which terms stand for it.
			fitted := func(r *vcov.Result) (sum float64) {
				for j, term := range r.Terms {
					x, ok := map[string]float64{"constant": 1, "pallets": 20, "tonnes": 1010, "ward": 3, "pow(tonnes, 2)": 1010 * 1010,
						"pow(tonnes, 3)": 1010 * 1010 * 1010, "berth = 35": 1, "ward = 3": 1, "(berth = 35) * ward": 3}[term]
					if ok && r.Estimates[j].Exists() {
						sum += x * float64(r.Estimates[j])
					}
				}
				return sum
			}
			if d := digits(fitted(got), fitted(want)); d < 8 {
				t.Errorf("fit %v, want %v", fitted(got), fitted(want))
			}
		})
	}
}

// cranes is a source with three categories of the given sizes and six numeric
// terms; every combination of seed and size is the same data.
func cranes(rows, barges, quays, cranes int) *table {
	rng := rand.New(rand.NewPCG(7, 8))
	tb := &table{}
	y := make([]float64, rows)
	x := make([][]float64, 6)
	ids := make([][]int64, 3)
	for i := range rows {
		ids[0], ids[1], ids[2] = append(ids[0], int64(rng.IntN(barges))), append(ids[1], int64(rng.IntN(quays))), append(ids[2], int64(rng.IntN(cranes)))
		y[i] = 10 + float64(ids[0][i]%5) + 0.3*float64(ids[1][i]%11) + 0.2*float64(ids[2][i]%17)
		for j := range x {
			v := rng.NormFloat64() + float64(ids[2][i]%7)*0.1
			x[j] = append(x[j], v)
			y[i] += float64(j+1) * v
		}
		y[i] += rng.NormFloat64() * (1 + 0.3*x[0][i]*x[0][i])
	}
	tb.float("minutes", y)
	for j := range x {
		tb.float(fmt.Sprintf("x%d", j+1), x[j])
	}
	for j, n := range []string{"barge", "quay", "crane"} {
		tb.int(n, ids[j])
	}
	return tb
}

func cranesModel() stream.Spec {
	return stream.Spec{Outcome: "minutes", Keys: []string{"quay"},
		Terms: []string{"x1", "x2", "x3", "x4", "x5", "x6", "each(barge)", "each(quay)", "each(crane)"}}
}

// A small form of three categories of 50, 500 and 20,000 levels, of which the last
// is eliminated, against one dense solve.
func TestThreeCategories(t *testing.T) {
	tb := cranes(6000, 10, 20, 330)
	o := vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1"), Workers: 2, Dense: 1 << 20}
	want := fit(t, tb.source(2000), cranesModel(), o)
	o.Dense = 100
	got := fit(t, tb.source(2000), cranesModel(), o)
	compareFits(t, got, want, 1e-10)
}

// A pipe is summed in epochs, each in a frame of its own.
func TestEliminationOnAPipe(t *testing.T) {
	tb := harbour(3000, 90, 7, 4, 9)
	for name, terms := range map[string][]string{
		"numbers":  {"pallets", "tonnes", "each(berth)", "each(quay)"},
		"products": {"pallets", "each(berth)", "each(berth) * tonnes", "each(quay) * tonnes", "each(quay)"},
	} {
		t.Run(name, func(t *testing.T) {
			spec := stream.Spec{Outcome: "minutes", Terms: terms, Where: "berth < 25"}
			o := vcov.Options{Errors: kinds("classical"), Workers: 2, Dense: 1 << 20}
			want := fit(t, tb.source(400), spec, o)
			o.Dense = 1
			got := fit(t, once{tb.source(400)}, spec, o)
			compareFits(t, got, want, 1e-10)
		})
	}
}

// Rows and sums of numeric terms keep their digits where the solve is of float64.
func TestEliminationOfExtendedSums(t *testing.T) {
	tb := harbour(1500, 90, 7, 4, 5)
	spec := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "each(berth)", "each(quay)"}, Keys: []string{"gang"}}
	o := vcov.Options{Errors: kinds("classical", "hc1", "hc3", "cr1"), Workers: 2, Dense: 1 << 20, Arithmetic: "double"}
	want := fit(t, tb.source(400), spec, o)
	o.Dense, o.Arithmetic = 1, "extended"
	compareFits(t, fit(t, tb.source(400), spec, o), want, 1e-10)
}

// What does not fit is refused with what takes the memory.
func TestTooManyLevels(t *testing.T) {
	tb := cranes(3000, 10, 20, 330)
	o := vcov.Options{Errors: kinds("classical"), Workers: 2, Memory: 320 << 10, Dense: 100}
	_, err := tryFit(tb.source(1000), cranesModel(), o)
	var m *accum.MemoryError
	if !errors.As(err, &m) || m.Need <= m.Have || m.Have != 320<<10 {
		t.Fatalf("error %v, want a *MemoryError", err)
	}
	for _, want := range []string{"each(crane) has 3", "each(quay) 20", "each(barge) 10", "37 columns", "may take 320 KiB"} {
		if !strings.Contains(err.Error(), want) {
			t.Errorf("error %q does not say %q", err, want)
		}
	}
	spec := cranesModel()
	spec.Terms = []string{"x1", "each(crane) * x2"} // no term by itself
	if _, err = tryFit(tb.source(1000), spec, o); !errors.As(err, &m) || !strings.Contains(err.Error(), "no category is a term by itself") {
		t.Errorf("error %v, want a *MemoryError that says why nothing is eliminated", err)
	}
}

// Many terms of one fate are told of in one warning.
func TestManyLoneLevels(t *testing.T) {
	tb := harbour(1500, 90, 7, 4, 5)
	o := vcov.Options{Errors: kinds("cr1"), Workers: 2, Dense: 50}
	r := fit(t, tb.source(400), stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "each(berth)"}, Keys: []string{"ward"}}, o)
	n := 0
	for _, w := range r.Warnings {
		if w.Code == "lone" {
			n++
			if w.Term != nil || !strings.Contains(w.Text, "constant, berth = 1, berth = 2") || !strings.Contains(w.Text, "84 more") {
				t.Errorf("warning %q", w.Text)
			}
		}
	}
	if n != 1 {
		t.Errorf("%d warnings", n)
	}
}

// The model in full, within half a gibibyte above the data; TALLROW_LEVELS=ROWS.
func TestThreeLargeCategories(t *testing.T) {
	rows, err := strconv.Atoi(os.Getenv("TALLROW_LEVELS"))
	if err != nil {
		t.Skip("set TALLROW_LEVELS to a number of rows, 1000000 or more")
	}
	tb := cranes(rows, 50, 500, 20000)
	o := vcov.Options{Errors: kinds("classical", "hc1", "hc2", "hc3", "cr1"), Workers: 2, Memory: 2 << 30}
	start := time.Now()
	r := fit(t, tb.source(1<<16), cranesModel(), o)
	t.Logf("%d rows, %d terms: %v", rows, len(r.Terms), time.Since(start))
	if r.Rank != 1+6+49+499+19999 {
		t.Fatalf("rank %d", r.Rank)
	}
	for _, e := range r.Errors {
		if e.Status != "ok" {
			t.Fatalf("%s is %s", e.Name(), e.Status)
		}
	}
	for j := range 6 {
		i := index(t, r, fmt.Sprintf("x%d", j+1))
		se := float64(errorsOf(t, r, "hc1").SE[i])
		if d := math.Abs(float64(r.Estimates[i]) - float64(j+1)); d > 5*se {
			t.Errorf("x%d %v, off by %.1f errors", j+1, r.Estimates[i], d/se)
		}
	}
}
