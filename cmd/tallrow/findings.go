package main

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"

	"github.com/tallrow/tallrow/vcov"
)

// Thresholds of the findings, common practice rather than theory.
const (
	unevenSpread   = 0.01 // p of the test of equal spread
	evenSpread     = 1.05 // ratios up to this count as agreement
	tellRatio      = 1.10 // a ratio worth a sentence
	fewClusters    = 30
	unequalSize    = 5.0  // largest over median cluster
	worseTogether  = 1.5  // ratio of a combination of terms over that of any single one
	missingShare   = 0.05 // of rows read
	malformedShare = 0.001
)

// findings puts into words what the numbers carry. None of them calls one kind
// of error the right one.
func findings(v *view) []string {
	var list []string
	seen := map[*vcov.Errors]bool{}
	for _, e := range representatives(v.shown) {
		seen[e] = true
		list = append(list, againstClassical(v, e)...)
		list = append(list, worstCombination(v, e)...)
	}
	list = append(list, heavyRows(v)...)
	list = append(list, clusterShape(v)...)
	list = append(list, clusterDetail(v)...)
	list = append(list, auditSays(v)...)
	list = append(list, lostRows(v.res.Rows)...)
	if v.truth != nil {
		list = append(list, againstTruth(v)...)
	}
	return list
}

// representatives picks, among the kinds shown, the last row-wise robust one
// and the last one of each clustering: sentences for every one would repeat
// each other.
func representatives(shown []*vcov.Errors) []*vcov.Errors {
	last := map[string]int{}
	for i, e := range shown {
		if e.Status == "ok" && e.Kind != "classical" {
			last[strings.Join(e.Clusters, ",")] = i
		}
	}
	var at []int
	for _, i := range last {
		at = append(at, i)
	}
	sort.Ints(at)
	var list []*vcov.Errors
	for _, i := range at {
		list = append(list, shown[i])
	}
	return list
}

// under names a kind of errors inside a sentence.
func under(e *vcov.Errors) string {
	if len(e.Clusters) > 0 {
		return fmt.Sprintf("%s clusters (%s)", strings.Join(e.Clusters, " and "), e.Kind)
	}
	return e.Kind
}

// againstClassical tells how far e is from the classical errors and which
// intervals gain or lose zero by it.
func againstClassical(v *view, e *vcov.Errors) []string {
	if v.classical == nil {
		return nil
	}
	type change struct {
		term  string
		ratio float64
	}
	var all []change
	var gain, lose []string
	far, farSize := -1, 0.0
	agree := true
	for j, t := range v.res.Terms {
		x := v.ratio(e, j)
		if !(x > 0) {
			continue
		}
		size := math.Abs(math.Log(x))
		if size > math.Log(evenSpread) {
			agree = false
		}
		all = append(all, change{t, x})
		if v.isConstant(j) {
			continue
		}
		if size > farSize {
			far, farSize = len(all)-1, size
		}
		was, ok1 := holdsZero(v.classical, j)
		is, ok2 := holdsZero(e, j)
		if ok1 && ok2 && !was && is {
			gain = append(gain, t)
		}
		if ok1 && ok2 && was && !is {
			lose = append(lose, t)
		}
	}
	if len(all) == 0 {
		return nil
	}
	var list []string
	if agree {
		s := fmt.Sprintf("Under %s and classically the errors agree within 5 %% for all terms", under(e))
		if len(e.Clusters) == 0 {
			s = fmt.Sprintf("The spread looks even: %s and classical errors agree within 5 %% for all terms", e.Name())
			if p := v.res.SpreadTest.P; p.Exists() && p < unevenSpread {
				s = fmt.Sprintf("The spread goes with the terms, but %s and classical errors agree within 5 %% for all of them", e.Name())
			}
		}
		list = append(list, s+".")
	} else if far >= 0 && farSize > math.Log(tellRatio) {
		c := all[far]
		s := fmt.Sprintf("Under %s the error of %s is %s times the classical one", under(e), brief(c.term), strings.TrimPrefix(ratioText1(c.ratio), "x"))
		switch {
		case remove(&gain, c.term):
			s += "; its interval now contains zero"
		case remove(&lose, c.term):
			s += "; its interval no longer contains zero"
		}
		list = append(list, s+".")
	}
	if len(gain) > 0 {
		list = append(list, fmt.Sprintf("Under %s the %s of %s now %s zero, which the classical %s not.", under(e),
			form2(gain, "interval", "intervals"), both(shortList(briefs(gain), 5)), form2(gain, "contains", "contain"), form2(gain, "one did", "ones did")))
	}
	if len(lose) > 0 {
		list = append(list, fmt.Sprintf("Under %s the %s of %s no longer %s zero, which the classical %s.", under(e),
			form2(lose, "interval", "intervals"), both(shortList(briefs(lose), 5)), form2(lose, "contains", "contain"), form2(lose, "one did", "ones did")))
	}
	return list
}

// worstCombination tells of a linear combination of terms for which the classical
// error is much further off than for any single term.
func worstCombination(v *view, e *vcov.Errors) []string {
	x := e.Extremes
	if v.classical == nil || x == nil || !x.WorstRatio.Exists() {
		return nil
	}
	most := 0.0
	type part struct {
		weight, size float64
		name         string
	}
	var parts []part
	for j, t := range v.res.Terms {
		if v.isConstant(j) || at(x.Worst, j) == 0 {
			continue
		}
		most = math.Max(most, v.ratio(e, j))
		parts = append(parts, part{at(x.Worst, j), math.Abs(at(x.Worst, j)) * at(v.classical.SE, j), t})
	}
	worst := float64(x.WorstRatio)
	if !(most > 0) || worst < worseTogether*most {
		return nil
	}
	slices.SortStableFunc(parts, func(a, b part) int { return cmp.Compare(b.size, a.size) })
	text := ""
	for i, p := range parts {
		if i == 4 || p.size < 0.1*parts[0].size {
			text += " and smaller parts of others"
			break
		}
		name := brief(p.name)
		if strings.ContainsAny(name, " +-") {
			name = "(" + name + ")"
		}
		if w := digits(math.Abs(p.weight), 3); math.Abs(p.weight) != 1 {
			name = w + " * " + name
		}
		switch {
		case i > 0 && p.weight < 0:
			text += " - "
		case i > 0:
			text += " + "
		case p.weight < 0:
			text += "-"
		}
		text += name
	}
	return []string{fmt.Sprintf("Under %s the classical error is most in doubt for a combination of terms: that of %s is %s times the classical one, that of a single term at most %s times.",
		under(e), text, strings.TrimPrefix(ratioText1(worst), "x"), strings.TrimPrefix(ratioText1(most), "x"))}
}

// ratioText1 is ratioText with one decimal where that tells enough.
func ratioText1(x float64) string {
	if x >= 1.95 && x < 9.95 {
		return fmt.Sprintf("%.1f", x)
	}
	return ratioText(x)
}

func remove(list *[]string, s string) bool {
	for i, t := range *list {
		if t == s {
			*list = append((*list)[:i:i], (*list)[i+1:]...)
			return true
		}
	}
	return false
}

func form2(list []string, one, many string) string {
	if len(list) == 1 {
		return one
	}
	return many
}

// brief is a name short enough for a sentence.
func brief(name string) string { return shorten(name, 40) }

func briefs(list []string) []string {
	out := make([]string, len(list))
	for i, s := range list {
		out[i] = brief(s)
	}
	return out
}

func oneLines(list []string) []string {
	out := make([]string, len(list))
	for i, s := range list {
		out[i] = oneLine(s)
	}
	return out
}

// heavyRows compares hc3 with hc1 or hc0: they part where single rows have
// much leverage.
func heavyRows(v *view) []string {
	var plain, careful *vcov.Errors
	for i := range v.res.Errors {
		e := &v.res.Errors[i]
		if e.Status != "ok" {
			continue
		}
		switch e.Kind {
		case "hc0", "hc1":
			plain = e
		case "hc3":
			careful = e
		}
	}
	if plain == nil || careful == nil {
		return nil
	}
	far, size := -1, tellRatio
	for j := range v.res.Terms {
		if x := at(careful.SE, j) / at(plain.SE, j); x > size {
			far, size = j, x
		}
	}
	if far < 0 {
		return nil
	}
	return []string{fmt.Sprintf("The error of %s by hc3 is %.2f times the one by %s: single rows weigh heavily on it.", brief(v.res.Terms[far]), size, plain.Kind)}
}

// clusterShape warns of few or very unequal clusters.
func clusterShape(v *view) []string {
	var list []string
	if v.res.Residual.SD == 0 {
		return nil // a perfect fit: errors are 0 under any clusters
	}
	seen := map[string]bool{}
	for _, e := range v.shown {
		name := strings.Join(e.Clusters, " and ")
		if len(e.Groups) == 0 || e.Status != "ok" || seen[name] {
			continue
		}
		seen[name] = true
		var kinds, careful []string // all that rest on these clusters
		for _, o := range v.shown {
			switch {
			case o.Status != "ok" || !slices.Equal(o.Clusters, e.Clusters):
			case slices.Contains([]string{"cr2", "cr3", "wcr"}, o.Kind):
				careful = append(careful, o.Name())
			default:
				kinds = append(kinds, o.Name())
			}
		}
		if kinds == nil {
			continue
		}
		advice := ""
		switch {
		case careful != nil:
			advice = "; lean on " + both(careful)
		case len(e.Clusters) == 1:
			advice = fmt.Sprintf("; cr2(%s) and wcr(%s) allow for that", oneLine(name), oneLine(name))
		}
		few := e.Groups[0]
		for _, g := range e.Groups {
			few = min(few, g)
		}
		switch s := e.GroupRows; {
		case few < fewClusters:
			list = append(list, fmt.Sprintf("There are only %s clusters of %s: with so few, errors by %s tend to come out too small%s.", count(few), oneLine(name), both(kinds), advice))
		case s != nil && float64(s.Median) > 0 && float64(s.Max) > unequalSize*float64(s.Median):
			list = append(list, fmt.Sprintf("The largest cluster of %s has %s times the rows of the median one: with sizes so unequal errors by %s may come out too small%s.", oneLine(name), three(float64(s.Max)/float64(s.Median)), both(kinds), advice))
		}
	}
	return list
}

// lostRows tells of rows that are gone in numbers that matter.
func lostRows(r vcov.Rows) []string {
	var list []string
	if r.Read == 0 {
		return nil
	}
	if share := float64(r.Missing) / float64(r.Read); share > missingShare {
		s := fmt.Sprintf("%s of the rows read have a missing cell and were left out", percent(share))
		most, name := int64(0), ""
		for c, n := range r.MissingBy {
			if n > most || n == most && c < name {
				most, name = n, c
			}
		}
		if name != "" {
			s += fmt.Sprintf(", most of them for %s", oneLine(name))
		}
		list = append(list, s+": if they differ from the others, the estimates speak only for those that are left.")
	}
	if share := float64(r.Malformed) / float64(r.Read); share > malformedShare {
		list = append(list, fmt.Sprintf("%s of the rows could not be read and were passed over.", percent(share)))
	}
	return list
}

// againstTruth counts, for made-up data, the intervals that hold the true
// coefficient.
func againstTruth(v *view) []string {
	var parts []string
	total := 0
	for _, e := range v.shown {
		if e.Status != "ok" {
			continue
		}
		holds, n := 0, 0
		for j, t := range v.res.Terms {
			x, known := v.truth[t]
			low, high := at(e.Low, j), at(e.High, j)
			if !known || math.IsNaN(low) || math.IsNaN(high) {
				continue
			}
			n++
			if low <= x && x <= high {
				holds++
			}
		}
		total = max(total, n)
		parts = append(parts, fmt.Sprintf("%d by %s", holds, e.Name()))
	}
	if len(parts) == 0 {
		return nil
	}
	return []string{fmt.Sprintf("Of %s, the %s intervals hold %s.", plural(int64(total), "true coefficient", "true coefficients"), levelText(v.res.Model.Level), both(parts))}
}
