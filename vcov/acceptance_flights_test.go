package vcov_test

import (
	"os"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// Three million real rows against figures computed in exact integers and
// extended precision (testdata/flights/reference.json).
func TestFlights(t *testing.T) {
	file := os.Getenv("TALLROW_FLIGHTS")
	if file == "" {
		t.Skip("no flights file: npm pack vega-datasets@3.2.1, unpack it, and set TALLROW_FLIGHTS to package/data/flights-3m.parquet")
	}
	var ref struct {
		N    int64
		Coef []string
		RSS  string
		R2   float64
		SE   map[string][]string
	}
	readJSON(t, &ref, "flights", "reference.json")
	spec := stream.Spec{
		Outcome: "delay",
		Terms:   []string{"distance", "hour(date)", "pow(hour(date), 2)", "weekday(date) >= 5"},
		Keys:    []string{"origin"},
	}
	for _, passes := range []int{1, 2} {
		r := fit(t, openFile(t, file, stream.Options{}), spec, vcov.Options{Errors: kinds("classical", "hc0", "hc1", "cr0", "cr1"), Passes: passes})
		if r.N != ref.N || r.Rows.Read != ref.N {
			t.Fatalf("n %d of %d rows, want %d", r.N, r.Rows.Read, ref.N)
		}
		check := func(what string, d, want float64) {
			t.Logf("%d passes: %s to %.1f digits", r.Run.Passes, what, d)
			if d < want {
				t.Errorf("%d passes: %s to %.1f digits, want %.1f", passes, what, d, want)
			}
		}
		check("coefficients", least(floats(r.Estimates), parseAll(t, ref.Coef)), 12)
		check("residual sum of squares", digits(float64(r.Residual.SS), parse(t, ref.RSS)), 12)
		check("R2", digits(float64(r.R2), ref.R2), 12)
		// The file gives 15 digits of these.
		for kind, key := range map[string]string{"classical": "classical", "hc0": "hc0", "hc1": "hc1", "cr0": "cr0 by origin (229 groups)", "cr1": "cr1 by origin"} {
			e := errorsOf(t, r, kind)
			check(kind, least(floats(e.SE), parseAll(t, ref.SE[key])), 12)
			if kind == "cr1" && (len(e.Groups) != 1 || e.Groups[0] != 229) {
				t.Errorf("clusters %v, want 229", e.Groups)
			}
		}
	}
}
