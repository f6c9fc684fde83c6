package main

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"sort"

	"github.com/tallrow/tallrow/vcov"
)

const (
	briefAbove  = 50 // up to which all levels of a category stand in the text
	shownLevels = 10 // of a larger one
)

// brief is the view for a table of terms: of a category with many levels it keeps
// those that are furthest from zero. cut says, by the first term of such a
// category that is kept, what stands there.
func (v *view) brief() (b *view, cut map[int]string) {
	terms := v.res.Terms
	var keep []int
	cut = map[int]string{}
	for j := 0; j < len(terms); {
		first := splitLevel(terms[j])
		end := j + 1
		for first.level != "" && end < len(terms) && splitLevel(terms[end]).group == first.group {
			end++
		}
		if end-j <= briefAbove {
			for ; j < end; j++ {
				keep = append(keep, j)
			}
			continue
		}
		cut[len(keep)] = v.levelsText(j, end)
		keep = append(keep, v.furthest(j, end)...)
		j = end
	}
	if len(cut) == 0 {
		return v, nil
	}
	r := *v.res
	r.Terms, r.Estimates = pick(terms, keep), pick(v.res.Estimates, keep)
	b = &view{res: &r, truth: v.truth}
	short := func(e *vcov.Errors) *vcov.Errors {
		if e == nil {
			return nil
		}
		s := *e
		for _, l := range []*[]vcov.Number{&s.SE, &s.DF, &s.T, &s.P, &s.Log10P, &s.Low, &s.High} {
			*l = pick(*l, keep)
		}
		if e == v.lead {
			b.lead = &s
		}
		if e == v.classical {
			b.classical = &s
		}
		return &s
	}
	for _, e := range v.shown {
		b.shown = append(b.shown, short(e))
	}
	if b.classical == nil {
		b.classical = short(v.classical)
	}
	return b, cut
}

// pick returns the elements of list at the places in keep that it has.
func pick[T any](list []T, keep []int) []T {
	var out []T
	for _, j := range keep {
		if j < len(list) {
			out = append(out, list[j])
		}
	}
	return out
}

// furthest lists the terms between from and to with the largest |t| under the
// leading errors, in their order; without any those with the largest estimates.
func (v *view) furthest(from, to int) []int {
	size := func(j int) float64 { return math.Abs(at(v.res.Estimates, j)) }
	if v.anyT(from, to) {
		size = func(j int) float64 { return math.Abs(at(v.lead.T, j)) }
	}
	var all []int
	for j := from; j < to; j++ {
		all = append(all, j)
	}
	// cmp.Compare holds NaN for less than any number.
	slices.SortStableFunc(all, func(a, b int) int { return cmp.Compare(size(b), size(a)) })
	all = all[:shownLevels]
	sort.Ints(all)
	return all
}

// anyT reports whether a term between from and to has a t under the leading errors.
func (v *view) anyT(from, to int) bool {
	if v.lead == nil {
		return false
	}
	for j := from; j < to; j++ {
		if !math.IsNaN(at(v.lead.T, j)) {
			return true
		}
	}
	return false
}

// levelsText describes the levels between from and to.
func (v *view) levelsText(from, to int) string {
	var est []float64
	for j := from; j < to; j++ {
		if x := at(v.res.Estimates, j); !math.IsNaN(x) {
			est = append(est, x)
		}
	}
	sort.Float64s(est)
	text := plural(int64(to-from), "level", "levels")
	if n := len(est); n > 0 {
		text += fmt.Sprintf(", estimates %s to %s, median %s", digits(est[0], 5), digits(est[n-1], 5), digits((est[(n-1)/2]+est[n/2])/2, 5))
	}
	what := "the largest estimates"
	if v.anyT(from, to) {
		what = "the largest |t| by " + shorten(v.lead.Name(), 18)
	}
	return fmt.Sprintf("%s; the %d with %s (--json has all):", text, shownLevels, what)
}
