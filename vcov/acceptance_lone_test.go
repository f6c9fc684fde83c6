package vcov_test

import (
	"math/rand/v2"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// A coefficient that one row or one cluster decides has no p and no interval
// under errors that rest on that row's or cluster's residual, whichever way the
// sums are taken; all others keep theirs. Expected from the algebra: the
// indicator of one row gives it leverage 1, and so does its complement beside a
// constant, where the constant is the fit of that row; the same with clusters.
func TestWhatOneRowOrClusterDecides(t *testing.T) {
	const n = 1300
	r := rand.New(rand.NewPCG(3, 1))
	x, y, row, rest, cell, only, others := make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n)
	quay, w := make([]int64, n), make([]int64, n)
	barge, base := make([]string, n), make([]string, n)
	for i := range n {
		x[i], y[i] = r.NormFloat64(), r.NormFloat64()
		quay[i] = int64(i % 7)
		w[i] = 1
		barge[i] = []string{"canal", "deck"}[r.IntN(2)]
		base[i] = barge[i]
		rest[i], others[i] = 1, 1
		cell[i] = r.NormFloat64()
		if quay[i] == 3 {
			only[i], others[i] = 1, 0
			if i%3 == 0 {
				barge[i], base[i] = "motor", "ark"
			}
		}
	}
	const lone = 700 // a row of quay 0
	row[lone], rest[lone], cell[lone] = 1, 0, 0
	w[lone] = 2
	tb := &table{}
	tb.float("x", x)
	tb.float("y", y)
	tb.float("row", row)
	tb.float("rest", rest)
	tb.float("cell", cell)
	tb.float("only", only)
	tb.float("others", others)
	tb.text("barge", barge)
	tb.text("base", base)
	tb.int("quay", quay)
	tb.int("w", w)
	for _, c := range []struct {
		name   string
		term   string
		weight bool
		byRow  []string // coefficients without p under hc0 and hc1
		byQuay []string // under cr0 and cr1
	}{
		{"indicator of a row", "row", false, []string{"row"}, []string{"row"}},
		{"indicator of a row that stands for two", "row", true, nil, []string{"row"}},
		{"indicator of all rows but one", "rest", false, []string{"constant", "rest"}, []string{"constant", "rest"}},
		{"a number that is zero in one row", "cell", false, nil, nil},
		{"indicator of a cluster", "only", false, nil, []string{"only"}},
		{"indicator of all clusters but one", "others", false, nil, []string{"constant", "others"}},
		{"a level in one cluster", "each(barge)", false, nil, []string{"barge = motor"}},
		{"the base level in one cluster", "each(base)", false, nil, []string{"constant", "base = canal", "base = deck"}},
	} {
		for _, passes := range []int{1, 2} {
			if passes == 1 && strings.HasPrefix(c.term, "each") {
				continue // categories take two
			}
			t.Run(c.name+map[int]string{1: "/one pass", 2: "/two passes"}[passes], func(t *testing.T) {
				spec := stream.Spec{Outcome: "y", Terms: []string{"x", c.term}, Keys: []string{"quay"}}
				if c.weight {
					spec.Weight, spec.WeightKind = "w", stream.Frequency
				}
				res := fit(t, tb.source(400), spec, vcov.Options{Errors: kinds("classical", "hc0", "hc1", "cr0", "cr1"), Passes: passes})
				for _, e := range res.Errors {
					if e.Status != "ok" {
						t.Errorf("%s is %s: %s", e.Kind, e.Status, *e.Reason)
						continue
					}
					want := map[string]bool{}
					switch e.Kind[:2] {
					case "hc":
						for _, name := range c.byRow {
							want[name] = true
						}
					case "cr":
						for _, name := range c.byQuay {
							want[name] = true
						}
					}
					for j, name := range res.Terms {
						if none := !e.P[j].Exists() && !e.Low[j].Exists() && !e.High[j].Exists(); none != want[name] {
							t.Errorf("%s %s: p %v, interval %v to %v, want none: %v", e.Kind, name, e.P[j], e.Low[j], e.High[j], want[name])
						}
						if !e.SE[j].Exists() {
							t.Errorf("%s %s has no error", e.Kind, name)
						}
					}
				}
			})
		}
	}
}
