package main

import (
	"math"
	"strings"

	"github.com/tallrow/tallrow/vcov"
)

// view is a result as it is shown: which errors in which order, which of them
// leads, and what they are compared with.
type view struct {
	res *vcov.Result
	// shown are the kinds asked for, in order.
	shown []*vcov.Errors
	// classical is the yardstick; nil if it was neither asked for nor possible.
	classical *vcov.Errors
	// lead gives intervals and p: the last kind asked for that exists.
	lead *vcov.Errors
	// truth holds known coefficients of made-up data, by term.
	truth map[string]float64
}

// newView shows the kinds of errors in the result whose names are in shown, in
// that order; nil shows all.
func newView(res *vcov.Result, shown []string) *view {
	v := &view{res: res}
	for i := range res.Errors {
		e := &res.Errors[i]
		if e.Kind == "classical" && e.Status == "ok" {
			v.classical = e
		}
		if shown == nil {
			v.shown = append(v.shown, e)
		}
	}
	for _, name := range shown {
		for i := range res.Errors {
			if sameName(res.Errors[i].Name(), name) {
				v.shown = append(v.shown, &res.Errors[i])
				break
			}
		}
	}
	for _, e := range v.shown {
		if e.Status == "ok" {
			v.lead = e
		}
	}
	return v
}

// sameName compares names of error kinds; spaces in a clustering expression do
// not matter, and the engine may have written it anew.
func sameName(a, b string) bool {
	return strings.Join(strings.Fields(a), "") == strings.Join(strings.Fields(b), "")
}

// document is the result with only the errors that were asked for, for JSON.
func (v *view) document() *vcov.Result {
	r := *v.res
	r.Errors = make([]vcov.Errors, 0, len(v.shown))
	for _, e := range v.shown {
		r.Errors = append(r.Errors, *e)
	}
	r.Hypotheses = []vcov.Hypothesis{}
	for _, h := range v.res.Hypotheses {
		if v.shows(h.Errors) {
			r.Hypotheses = append(r.Hypotheses, h)
		}
	}
	if r.Audit != nil {
		a := *r.Audit
		a.Against = append([]vcov.AuditedError{}, v.audited()...)
		r.Audit = &a
	}
	r.Warnings = []vcov.Warning{}
	for _, w := range v.res.Warnings {
		if v.tells(w) {
			r.Warnings = append(r.Warnings, w)
		}
	}
	return &r
}

// tells reports whether a warning is about something that is shown.
func (v *view) tells(w vcov.Warning) bool {
	return w.Kind == nil || v.shows(*w.Kind)
}

// shows reports whether a kind of errors is among those shown.
func (v *view) shows(name string) bool {
	for _, e := range v.shown {
		if sameName(e.Name(), name) {
			return true
		}
	}
	return false
}

// ratio is how many times the classical error of term j the error e is; NaN
// if there is no such ratio.
func (v *view) ratio(e *vcov.Errors, j int) float64 {
	if v.classical == nil || e == v.classical || e.Status != "ok" {
		return math.NaN()
	}
	a, c := at(e.SE, j), at(v.classical.SE, j)
	if !(c > 0) {
		return math.NaN()
	}
	return a / c
}

func (v *view) anyRatio() bool {
	for _, e := range v.shown {
		for j := range v.res.Terms {
			if !math.IsNaN(v.ratio(e, j)) {
				return true
			}
		}
	}
	return false
}

// at reads a number that may not be there.
func at(s []vcov.Number, j int) float64 {
	if j >= len(s) || !s[j].Exists() {
		return math.NaN()
	}
	return float64(s[j])
}

// holdsZero reports whether the interval of term j under e holds zero; ok is
// false if there is no interval.
func holdsZero(e *vcov.Errors, j int) (holds, ok bool) {
	if e == nil || e.Status != "ok" {
		return false, false
	}
	low, high := at(e.Low, j), at(e.High, j)
	if math.IsNaN(low) || math.IsNaN(high) {
		return false, false
	}
	return low <= 0 && high >= 0, true
}

// isConstant reports whether term j is the constant.
func (v *view) isConstant(j int) bool {
	return j == 0 && v.res.Model.Constant && len(v.res.Terms) > 0 && v.res.Terms[0] == "constant"
}

// aliasOf returns the alias entry of a term.
func (v *view) aliasOf(term string) *vcov.Alias {
	for i := range v.res.Aliased {
		if v.res.Aliased[i].Term == term {
			return &v.res.Aliased[i]
		}
	}
	return nil
}

// weighted reports whether the fit used weights of that kind.
func (v *view) weighted(kind string) bool {
	return v.res.Weight.Kind != nil && *v.res.Weight.Kind == kind
}
