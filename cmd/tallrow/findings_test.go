package main

import (
	"math"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/vcov"
)

// has reports whether one finding contains all the parts.
func has(list []string, parts ...string) bool {
	for _, f := range list {
		all := true
		for _, p := range parts {
			all = all && strings.Contains(f, p)
		}
		if all {
			return true
		}
	}
	return false
}

// scaled is a result with one robust kind whose errors are the classical ones
// times the factors.
func scaled(kind string, clusters []string, times ...float64) *vcov.Result {
	r := sampleResult()
	r.Rows = vcov.Rows{Read: 100, Used: 100, MissingBy: map[string]int64{}}
	r.Terms = []string{"constant", "pallets", "tonnes"}
	r.Estimates = []vcov.Number{1, 0.25, -0.15}
	r.SpreadTest = vcov.SpreadTest{Statistic: 2, DF: 2, P: 0.37}
	mk := func(kind string, clusters []string, f []float64) vcov.Errors {
		e := vcov.Errors{Kind: kind, Clusters: clusters, Groups: []int64{}, Status: "ok"}
		for j, b := range r.Estimates {
			se := vcov.Number(0.1 * f[j])
			e.SE = append(e.SE, se)
			e.Low, e.High = append(e.Low, b-2*se), append(e.High, b+2*se)
			e.P, e.Log10P = append(e.P, 0.5), append(e.Log10P, vcov.Number(math.Log10(0.5)))
		}
		return e
	}
	r.Errors = []vcov.Errors{mk("classical", []string{}, []float64{1, 1, 1}), mk(kind, clusters, times)}
	if len(clusters) > 0 {
		r.Errors[1].Groups = []int64{60}
		r.Errors[1].GroupRows = &vcov.Spread{Min: 10, Median: 12, Max: 20}
	}
	return r
}

func TestFindings(t *testing.T) {
	quay := []string{"quay"}
	for _, c := range []struct {
		name string
		r    *vcov.Result
		want []string // parts of one finding
	}{
		{"error grows, interval gains zero", scaled("cr1", quay, 1, 2.4, 1),
			[]string{"Under quay clusters (cr1) the error of pallets is 2.4 times the classical one; its interval now contains zero."}},
		{"error shrinks, interval loses zero", scaled("hc1", nil, 1, 1, 0.5),
			[]string{"Under hc1 the error of tonnes is 0.50 times the classical one; its interval no longer contains zero."}},
		{"another interval gains zero", scaled("cr1", quay, 1, 1.5, 3),
			[]string{"Under quay clusters (cr1) the interval of pallets now contains zero, which the classical one did not."}},
		{"agreement", scaled("hc1", nil, 1.04, 0.97, 1),
			[]string{"The spread looks even: hc1 and classical errors agree within 5 % for all terms."}},
		{"agreement under clusters", scaled("cr1", quay, 1.04, 0.97, 1), []string{"Under quay clusters (cr1) and classically the errors agree within 5 %"}},
	} {
		if got := findings(newView(c.r, nil)); !has(got, c.want...) {
			t.Errorf("%s: got %q", c.name, got)
		}
	}
	// Only where the numbers carry them.
	if got := findings(newView(scaled("hc1", nil, 1.04, 1.06, 1), nil)); len(got) != 0 {
		t.Errorf("ratios between agreement and a tenth: got %q, want silence", got)
	}
}

func TestFindingsClusters(t *testing.T) {
	r := scaled("cr1", []string{"quay"}, 1, 1, 1)
	r.Errors[1].Groups = []int64{29}
	if got := findings(newView(r, nil)); !has(got, "only 29 clusters of quay", "too small") {
		t.Errorf("few clusters: got %q", got)
	}
	r.Errors[1].Groups = []int64{30}
	if got := findings(newView(r, nil)); has(got, "too small") {
		t.Errorf("30 clusters: got %q", got)
	}
	r.Errors[1].GroupRows.Max = 61 // median 12
	if got := findings(newView(r, nil)); !has(got, "5.08 times the rows of the median one", "may come out too small") {
		t.Errorf("unequal clusters: got %q", got)
	}
}

func TestFindingsRows(t *testing.T) {
	r := scaled("hc1", nil, 1, 1, 1)
	r.Rows = vcov.Rows{Read: 1000, Used: 940, Missing: 58, Malformed: 2, MissingBy: map[string]int64{"crew": 50, "wet": 20}}
	got := findings(newView(r, nil))
	if !has(got, "5.8 % of the rows read have a missing cell", "most of them for crew") || !has(got, "0.20 % of the rows could not be read") {
		t.Errorf("got %q", got)
	}
	r.Rows = vcov.Rows{Read: 10000, Used: 9490, Missing: 500, Malformed: 10, MissingBy: map[string]int64{"crew": 500}}
	if got := findings(newView(r, nil)); has(got, "missing cell") || has(got, "could not be read") {
		t.Errorf("5 %% and 0.1 %% exactly: got %q", got)
	}
}

// hc3 far above hc1 means leverage, and is not put down to spread alone.
func TestFindingsLeverage(t *testing.T) {
	r := scaled("hc1", nil, 1, 1, 1)
	e := r.Errors[1]
	e.Kind = "hc3"
	e.SE = []vcov.Number{0.1, 0.13, 0.1}
	r.Errors = append(r.Errors, e)
	if got := findings(newView(r, nil)); !has(got, "The error of pallets by hc3 is 1.30 times the one by hc1") {
		t.Errorf("got %q", got)
	}
}

// The test of equal spread and the errors need not say the same.
func TestFindingsSpread(t *testing.T) {
	r := scaled("hc1", nil, 1, 1, 1)
	r.SpreadTest.P = 0.001
	if got := findings(newView(r, nil)); !has(got, "The spread goes with the terms, but hc1 and classical errors agree") || has(got, "looks even") {
		t.Errorf("got %q", got)
	}
}

// A combination of terms is told of where it is much further off than any term.
func TestFindingsCombination(t *testing.T) {
	r := scaled("cr1", []string{"quay"}, 9, 1.2, 1.3)
	x := &vcov.Extremes{WorstRatio: 2.6, Worst: []vcov.Number{0, 1, -0.75}, BestRatio: 1, Best: []vcov.Number{0, 1, 0}}
	r.Errors[1].Extremes = x
	if got := findings(newView(r, nil)); !has(got, "that of pallets - 0.750 * tonnes is 2.6 times the classical one, that of a single term at most 1.30 times") {
		t.Errorf("got %q", got)
	}
	x.Worst[2] = 0.05
	if got := findings(newView(r, nil)); !has(got, "that of pallets and smaller parts of others is 2.6 times") {
		t.Errorf("got %q", got)
	}
	x.WorstRatio = 1.9
	if got := findings(newView(r, nil)); has(got, "combination") {
		t.Errorf("not much worse than a term: got %q", got)
	}
}

// No wording calls one kind of errors right or speaks of significance.
func TestFindingsNeverJudge(t *testing.T) {
	for _, r := range []*vcov.Result{sampleResult(), manyLevels(), troubled()} {
		text := strings.ToLower(renderText(newView(r, nil), 120))
		for _, word := range []string{"significan", "correct error", "true error", "***", "wrong"} {
			if strings.Contains(text, word) {
				t.Errorf("the text contains %q", word)
			}
		}
	}
}
