package vcov

import (
	"math"
	"slices"
	"testing"
)

// The 15 p of Benjamini & Hochberg 1995 (J. R. Stat. Soc. B 57, section 4): at 0.05
// their procedure rejects the four smallest, Bonferroni's the three smallest, and so
// does Holm's.
func TestAdjustedPPublished(t *testing.T) {
	p := []Number{0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0000}
	for method, want := range map[string]int{"bh": 4, "holm": 3} {
		rejected := 0
		for i, x := range adjustP(method, p) {
			if x <= 0.05 {
				rejected++
			}
			if x < p[i] || x > 1 {
				t.Errorf("%s: %v of %v", method, x, p[i])
			}
		}
		if rejected != want {
			t.Errorf("%s rejects %d, want %d", method, rejected, want)
		}
	}
}

// The adjusted p is the smallest level at which the step-wise procedure, run as it is
// described, rejects.
func TestAdjustedPIsWhereTheProcedureRejects(t *testing.T) {
	nan := Number(math.NaN())
	p := []Number{0.03, nan, 0.001, 0.5, 0.03, 0.012, nan, 0.8, 1e-30, 0}
	procedures := map[string]func(sorted []float64, level float64) int{
		"holm": func(s []float64, level float64) int { // the first that is not small enough stops it
			for j, x := range s {
				if x > level/float64(len(s)-j) {
					return j
				}
			}
			return len(s)
		},
		"bh": func(s []float64, level float64) int { // the last that is small enough counts
			for j := len(s); j > 0; j-- {
				if s[j-1] <= float64(j)/float64(len(s))*level {
					return j
				}
			}
			return 0
		},
	}
	for method, reject := range procedures {
		got := adjustP(method, p)
		var sorted []float64
		for _, x := range p {
			if x.Exists() {
				sorted = append(sorted, float64(x))
			}
		}
		slices.Sort(sorted)
		for i, x := range p {
			if !x.Exists() {
				if got[i].Exists() {
					t.Errorf("%s: a p that does not exist became %v", method, got[i])
				}
				continue
			}
			rank := 0
			for _, s := range sorted {
				if s <= float64(x) {
					rank++
				}
			}
			at := float64(got[i])
			if reject(sorted, at*(1+1e-12)) < rank || at > 0 && reject(sorted, at*(1-1e-9)) >= rank {
				t.Errorf("%s: %v of %v is not where it is rejected first", method, at, x)
			}
		}
	}
}
