package main

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// Widths of the text result.
const (
	plainWidth  = 120 // into files and pipes, so that outputs compare
	narrowest   = 80
	widest      = 160
	termWidth   = 26 // of the term column
	shortTerm   = 14 // to which it may shrink
	maxWarnings = 12
	numberWidth = 13 // up to which numbers are aligned at the point
)

// renderText writes the result as text for a reader, width columns wide.
func renderText(v *view, width int) string {
	width = min(max(width, narrowest), widest)
	var b strings.Builder
	n := notes{&b, width}
	r := v.res
	head := fmt.Sprintf("%s explained by %s over %s.", r.Outcome, v.termCount(), plural(r.Rows.Used, "row", "rows"))
	if v.weighted("frequency") {
		head = strings.TrimSuffix(head, ".") + fmt.Sprintf(" that stand for %s.", count(r.N))
	}
	for _, l := range wrap(head, width) {
		b.WriteString(l + "\n")
	}
	b.WriteByte('\n')
	short := v.writeTerms(&b, width)
	b.WriteByte('\n')
	if v.writeLegend(&b, width) || len(short) > 0 {
		for _, s := range short {
			n.add("", s)
		}
		b.WriteByte('\n')
	}
	if v.writeHypotheses(&b, n) {
		b.WriteByte('\n')
	}
	v.writeFooter(n)
	v.writeDetail(&b, n)
	v.writeAudit(&b, n)
	if list := findings(v); len(list) > 0 {
		b.WriteString("\nWhat the errors say\n")
		for _, f := range list {
			n.point(f)
		}
	}
	b.WriteByte('\n')
	for _, l := range wrap(caution, width) {
		b.WriteString(l + "\n")
	}
	return b.String()
}

const caution = "Take care: these numbers describe how things go together in these rows, not what causes what, and no kind of error mends a bias of the estimates."

func (v *view) termCount() string {
	k := int64(len(v.res.Terms))
	if v.isConstant(0) {
		k--
		switch k {
		case 0:
			return "the constant alone"
		}
		return "the constant and " + plural(k, "term", "terms")
	}
	if s := v.res.Sweep; s != nil {
		return fmt.Sprintf("%s, the effects of %s swept out,", plural(k, "term", "terms"), oneLine(s.Units))
	}
	return plural(k, "term", "terms")
}

// writeTerms writes the table of terms: on one line each if that fits, with
// names cut shorter if need be, else in two or more tables. It returns lines
// that give cut names in full.
func (v *view) writeTerms(b *strings.Builder, width int) []string {
	v, cut := v.brief()
	est := v.estimateColumns()
	errs := v.errorColumns()
	ends := v.intervalColumns()
	join := func(groups ...[]column) []column {
		var cols []column
		for _, g := range groups {
			cols = append(cols, g...)
		}
		return cols
	}
	fits := func(cols []column) bool { return tableWidth(cols) <= width }
	rest := join(append([][]column{est}, append(errs[:len(errs):len(errs)], ends)...)...)
	for size := termWidth; size >= shortTerm; size -= 4 {
		n := v.termNames(size, cut)
		if cols := join(n.column(), rest); fits(cols) {
			writeTable(b, cols, n.between)
			return n.cut
		}
	}
	// Too many kinds of errors for one line: as many beside each other as fit,
	// the rest and the intervals in tables below.
	n := v.termNames(termWidth, cut)
	for size := termWidth - 4; size >= shortTerm && !fits(join(n.column(), est, ends)); size -= 4 {
		n = v.termNames(size, cut)
	}
	groups := errs
	if len(ends) > 0 {
		groups = append(groups[:len(groups):len(groups)], ends)
	}
	for len(groups) > 0 {
		cols := join(n.column(), est, groups[0])
		groups = groups[1:]
		for len(groups) > 0 && fits(join(cols, groups[0])) {
			cols = join(cols, groups[0])
			groups = groups[1:]
		}
		writeTable(b, cols, n.between)
		if len(groups) > 0 {
			b.WriteByte('\n')
		}
	}
	return n.cut
}

// termNames are the names as they stand in the table.
type termNames struct {
	names   []string
	between map[int]string // lines before a run of levels
	cut     []string       // what the cut names are in full
}

func (n termNames) column() []column {
	return []column{{head: []string{"term"}, cells: n.names, left: true}}
}

// termNames cuts names to size. Runs of levels of one category stand indented
// under a line of their own, which says in cut what was left out.
func (v *view) termNames(size int, cut map[int]string) termNames {
	n := termNames{between: map[int]string{}}
	terms := v.res.Terms
	for j := 0; j < len(terms); {
		first := splitLevel(terms[j])
		end := j + 1
		for first.level != "" && end < len(terms) && splitLevel(terms[end]).group == first.group {
			end++
		}
		if end-j < minGroup {
			name := shorten(terms[j], size)
			n.names = append(n.names, name)
			if full := oneLine(terms[j]); name != full {
				n.cut = append(n.cut, name+" is "+full)
			}
			j++
			continue
		}
		n.between[j] = shorten(first.group, 60) + v.against(first.categories)
		if cut[j] != "" {
			for _, l := range wrap(cut[j], narrowest-2) {
				n.between[j] += "\n  " + l
			}
		}
		for ; j < end; j++ {
			n.names = append(n.names, "  "+shorten(splitLevel(terms[j]).level, size-2))
		}
	}
	return n
}

func (v *view) estimateColumns() []column {
	cells := make([]string, len(v.res.Terms))
	for j := range cells {
		se := math.NaN()
		if v.lead != nil {
			se = at(v.lead.SE, j)
		}
		cells[j] = fine(at(v.res.Estimates, j), se, 2, 5)
	}
	cells = align(cells, numberWidth)
	for j, t := range v.res.Terms {
		if v.aliasOf(t) != nil {
			cells[j] = "aliased"
		}
	}
	cols := []column{{head: []string{"estimate"}, cells: cells}}
	if v.truth != nil {
		cells := make([]string, len(v.res.Terms))
		for j, t := range v.res.Terms {
			if x, ok := v.truth[t]; ok {
				cells[j] = digits(x, 5)
			}
		}
		cols = append(cols, column{head: []string{"true"}, cells: align(cells, numberWidth)})
	}
	return cols
}

// errorColumns gives, for each kind shown, a column of errors and, but for the
// classical kind, one of ratios.
func (v *view) errorColumns() [][]column {
	var groups [][]column
	for _, e := range v.shown {
		se := make([]string, len(v.res.Terms))
		ratio := make([]string, len(v.res.Terms))
		some := false
		for j := range se {
			if x := at(e.SE, j); !math.IsNaN(x) {
				se[j] = digits(x, 4)
			} else if v.aliasOf(v.res.Terms[j]) == nil {
				se[j] = none
			}
			if ratio[j] = ratioText(v.ratio(e, j)); ratio[j] != "" {
				some = true
			}
		}
		c := column{head: []string{"error", shorten(e.Name(), 18)}, cells: align(se, numberWidth)}
		g := []column{c}
		if some {
			g = append(g, column{cells: ratio, left: true, gap: 1})
		}
		groups = append(groups, g)
	}
	return groups
}

// intervalColumns gives interval, strip and p under the leading errors.
func (v *view) intervalColumns() []column {
	if v.lead == nil {
		return nil
	}
	e := v.lead
	k := len(v.res.Terms)
	low, high, drawn, p := make([]string, k), make([]string, k), make([]string, k), make([]string, k)
	for j := range k {
		if v.aliasOf(v.res.Terms[j]) != nil {
			continue
		}
		l, h := at(e.Low, j), at(e.High, j)
		if math.IsNaN(l) || math.IsNaN(h) {
			low[j], high[j] = none, ""
		} else {
			low[j], high[j] = ends(l, h)
			drawn[j] = strip(at(v.res.Estimates, j), l, h)
		}
		p[j] = none
		if j < len(e.P) && j < len(e.Log10P) {
			p[j] = pText(e.P[j])
		}
	}
	low, high = align(low, numberWidth), align(high, numberWidth)
	span := make([]string, k)
	for j := range span {
		if strings.TrimSpace(low[j]) != "" {
			span[j] = low[j] + " to " + high[j]
			if strings.TrimSpace(high[j]) == "" {
				span[j] = low[j] + strings.Repeat(" ", runes(" to "+high[j]))
			}
		}
	}
	cols := []column{
		{head: []string{levelText(v.res.Model.Level) + " interval", "by " + shorten(e.Name(), 18)}, cells: span},
		{head: []string{"against", "zero"}, cells: drawn, left: true},
		{head: []string{"p"}, cells: p, left: true},
	}
	if len(e.PAdjusted) == k {
		adj := make([]string, k)
		for j := range k {
			if e.PAdjusted[j].Exists() {
				adj[j] = pText(e.PAdjusted[j])
			}
		}
		cols = append(cols, column{head: []string{"p by", v.res.Model.Adjust}, cells: adj, left: true})
	}
	return cols
}

// writeLegend explains the signs in the table, if there are any.
func (v *view) writeLegend(b *strings.Builder, width int) bool {
	var parts []string
	if v.anyRatio() {
		parts = append(parts, "x1.50 after an error: it is 1.50 times the classical one.")
	}
	if v.lead != nil {
		parts = append(parts, "The strip draws the interval (-) and the estimate (o) against zero (|, or + inside the interval), each line on a scale of its own.")
	}
	if len(parts) == 0 {
		return false
	}
	for _, l := range wrap(strings.Join(parts, " "), width) {
		b.WriteString(l + "\n")
	}
	return true
}

// writeFooter writes rows, clusters, fit, run and warnings.
func (v *view) writeFooter(n notes) {
	r := v.res
	n.add("rows", rowsText(r.Rows))
	for _, p := range r.Rows.Problems {
		n.add("", oneLine(p))
	}
	if more := r.Rows.Malformed - int64(len(r.Rows.Problems)); more > 0 && len(r.Rows.Problems) > 0 {
		n.add("", fmt.Sprintf("and %s more", count(more)))
	}
	if s := r.Sweep; s != nil {
		t := fmt.Sprintf("an effect of each of %s of %s", plural(s.Effects, "value", "values"), oneLine(s.Units))
		if n := r.Rows.Singleton; n > 0 {
			t += fmt.Sprintf("; %s left out, alone in their unit", plural(n, "row", "rows"))
		}
		n.add("swept out", t)
	}
	if r.Weight.Kind != nil {
		w := *r.Weight.Kind + " weights"
		if r.Model.Weight != nil {
			w += " " + *r.Model.Weight
		}
		n.add("weights", fmt.Sprintf("%s, sum %s", w, digits(float64(r.Weight.Sum), 6)))
	}
	seen := map[string]bool{}
	for _, e := range v.shown {
		c := strings.Join(e.Clusters, " and ")
		if len(e.Groups) == 0 || seen[c] {
			continue
		}
		seen[c] = true
		n.add("clusters", clustersText(c, e))
	}
	for _, e := range v.shown {
		if e.Lags != nil {
			n.add("lags", lagsText(e))
		}
	}
	n.add("fit", v.fitText())
	if t := v.adjustedText(); t != "" {
		n.add("adjusted", t)
	}
	if s := r.SpreadTest; s.P.Exists() {
		n.add("spread", fmt.Sprintf("test that the spread of the residuals does not go with the terms (Koenker): chi-square %s on %s, p %s",
			digits(float64(s.Statistic), 5), wholeOr(s.DF), pText(s.P)))
	}
	if l := r.Leverage; l != nil {
		n.add("leverage", leverageText(l))
	}
	if t := v.overallText(); t != "" {
		n.add("together", t)
	}
	for _, e := range v.shown {
		if e.Status != "ok" {
			why := "no reason given"
			if e.Reason != nil {
				why = *e.Reason
			}
			n.add("not given", fmt.Sprintf("%s: %s", e.Name(), oneLine(why)))
		}
	}
	if a := r.Audit; a != nil && a.Reason != nil {
		n.add("not given", "audit: "+oneLine(*a.Reason))
	}
	for i, a := range r.Aliased {
		if i == maxWarnings {
			n.add("", fmt.Sprintf("and %s more; --json has them all", count(int64(len(r.Aliased)-i))))
			break
		}
		if len(a.DependsOn) == 0 {
			why := " is zero in every row: it has no estimate"
			if r.Sweep != nil {
				why = fmt.Sprintf(" does not vary within %s: it has no estimate", oneLine(r.Sweep.Units))
			}
			n.add("aliased", oneLine(a.Term)+why)
		} else {
			n.add("aliased", fmt.Sprintf("%s follows exactly from %s: it has no estimate", oneLine(a.Term), both(shortList(a.DependsOn, 8))))
		}
	}
	n.add("run", runText(r))
	if len(r.Run.Timings) > 0 {
		n.add("time", timingsText(r))
	}
	told := 0
	for _, w := range r.Warnings {
		// What is aliased stands above already.
		if !v.tells(w) || w.Code == "aliased" {
			continue
		}
		if told++; told <= maxWarnings {
			n.add("warning", oneLine(w.Text))
		}
	}
	if told > maxWarnings {
		n.add("", fmt.Sprintf("and %d more; --json has them all", told-maxWarnings))
	}
	if bases := v.otherBases(); bases != "" {
		n.add("base", bases)
	}
}

// leverageText tells which rows pull the fit most.
func leverageText(l *vcov.LeverageSummary) string {
	t := fmt.Sprintf("mean %s, largest %s", digits(float64(l.Mean), 3), digits(float64(l.Largest), 3))
	if len(l.Highest) > 0 {
		t += " (" + oneLine(l.Highest[0].Row) + ")"
	}
	t += fmt.Sprintf("; above twice the mean %s, above three times %s, above 0.5 %s", plural(l.AboveTwice, "row", "rows"), count(l.AboveThreeTimes), count(l.AboveHalf))
	if l.Above99 > 0 {
		t += fmt.Sprintf(", above 0.99 %s", count(l.Above99))
	}
	return t
}

// otherBases names the base levels of categories too small for a group line.
func (v *view) otherBases() string {
	counts := map[string]int{}
	for _, t := range v.res.Terms {
		counts[splitLevel(t).group]++
	}
	var list []string
	for c, base := range v.res.BaseLevels {
		if counts[c] < minGroup {
			list = append(list, fmt.Sprintf("%s against %s", oneLine(c), oneLine(base)))
		}
	}
	sort.Strings(list)
	return strings.Join(list, "; ")
}

func rowsText(r vcov.Rows) string {
	t := fmt.Sprintf("%s read, %s used", count(r.Read), count(r.Used))
	var lost []string
	if r.Malformed > 0 {
		lost = append(lost, count(r.Malformed)+" could not be read")
	}
	if r.Excluded > 0 {
		lost = append(lost, count(r.Excluded)+" outside --where")
	}
	if r.Missing > 0 {
		lost = append(lost, fmt.Sprintf("%s with a missing cell%s", count(r.Missing), missingBy(r.MissingBy)))
	}
	if r.ZeroWeight > 0 {
		lost = append(lost, count(r.ZeroWeight)+" with weight zero")
	}
	if r.Singleton > 0 {
		lost = append(lost, count(r.Singleton)+" alone in their unit")
	}
	if len(lost) == 0 {
		return t + ", none lost"
	}
	return t + "; not used: " + strings.Join(lost, ", ")
}

// missingBy gives " (crew 12, wet 3)", the most frequent first.
func missingBy(m map[string]int64) string {
	names := make([]string, 0, len(m))
	for c, n := range m {
		if n > 0 {
			names = append(names, c)
		}
	}
	if len(names) == 0 {
		return ""
	}
	sort.Slice(names, func(i, j int) bool {
		if m[names[i]] != m[names[j]] {
			return m[names[i]] > m[names[j]]
		}
		return names[i] < names[j]
	})
	for i, c := range names {
		names[i] = fmt.Sprintf("%s %s", oneLine(c), count(m[c]))
	}
	return " (" + strings.Join(shortList(names, 8), ", ") + ")"
}

// shortList keeps the first n of a list and says how many more there are.
func shortList(list []string, n int) []string {
	if len(list) <= n+1 {
		return list
	}
	return append(list[:n:n], fmt.Sprintf("%d more", len(list)-n))
}

func clustersText(name string, e *vcov.Errors) string {
	var g []string
	for _, x := range e.Groups {
		g = append(g, count(x))
	}
	t := fmt.Sprintf("%s: %s", oneLine(name), strings.Join(g, " and "))
	if s := e.GroupRows; s != nil {
		t += fmt.Sprintf("; rows in the smallest %s, in the median one %s, in the largest %s",
			count(s.Min), halves(float64(s.Median)), count(s.Max))
	}
	return t
}

// lagsText says how far errors over time reach.
func lagsText(e *vcov.Errors) string {
	l := e.Lags
	per := "rows in the order of the input"
	if e.Kind != "hac" || l.Period != nil {
		per = "periods"
	}
	t := fmt.Sprintf("%s: lags up to %s, %s, %s kernel", oneLine(e.Name()), count(l.Lags), per, l.Kernel)
	if l.Kernel == "quadratic" {
		t = fmt.Sprintf("%s: bandwidth %s, %s, quadratic spectral kernel", oneLine(e.Name()), digits(float64(l.Bandwidth), 4), per)
	}
	if l.Reach != nil {
		t += fmt.Sprintf(" summed up to %s", count(*l.Reach))
	}
	if l.Chosen {
		t += ", chosen by the data"
	}
	if l.Unit != nil {
		t += fmt.Sprintf("; within %s of %s", count(l.Units), oneLine(*l.Unit))
	}
	return t
}

// halves writes a median of counts: 12 or 12.5.
func halves(x float64) string {
	switch {
	case math.IsNaN(x):
		return none
	case x == math.Trunc(x):
		return count(int64(x))
	}
	return count(int64(x)) + ".5"
}

func (v *view) fitText() string {
	r := v.res
	var parts []string
	if r.R2.Exists() {
		t := fmt.Sprintf("R2 %s", digits(float64(r.R2), 5))
		if r.R2Adjusted.Exists() {
			t += fmt.Sprintf(" (%s; adjusted %s)", r.R2Kind, digits(float64(r.R2Adjusted), 5))
		} else {
			t += fmt.Sprintf(" (%s)", r.R2Kind)
		}
		parts = append(parts, t)
	} else {
		parts = append(parts, "no R2")
	}
	if r.Residual.SD.Exists() {
		parts = append(parts, fmt.Sprintf("residual sd %s on %s degrees of freedom", digits(float64(r.Residual.SD), 5), count(r.Residual.DF)))
	} else {
		parts = append(parts, fmt.Sprintf("no residual sd: %s degrees of freedom are left", count(r.Residual.DF)))
	}
	return strings.Join(parts, "; ")
}

// adjustedText says what the adjusted p are.
func (v *view) adjustedText() string {
	if v.lead == nil || len(v.lead.PAdjusted) == 0 {
		return ""
	}
	tests := 0
	for _, p := range v.lead.PAdjusted {
		if p.Exists() {
			tests++
		}
	}
	what := "the chance of any false finding among them"
	if v.res.Model.Adjust == "bh" {
		what = "the expected share of false findings among all findings"
	}
	return fmt.Sprintf("p by %s is p for %s looked at together: calling those below a value findings keeps %s below that value", v.res.Model.Adjust, plural(int64(tests), "term", "terms"), what)
}

func (v *view) overallText() string {
	if v.lead == nil || v.lead.Overall == nil {
		return ""
	}
	o := v.lead.Overall
	if !o.F.Exists() {
		return fmt.Sprintf("no joint test of all terms by %s", v.lead.Name())
	}
	t := fmt.Sprintf("test that all terms but the constant are zero, by %s: F %s on %s and %s, p %s", v.lead.Name(),
		digits(float64(o.F), 5), wholeOr(o.DF1), wholeOr(o.DF2), pText(o.P))
	if !v.isConstant(0) {
		t = strings.Replace(t, "all terms but the constant", "all terms", 1)
	}
	return t
}

// wholeOr writes degrees of freedom.
func wholeOr(n vcov.Number) string {
	x := float64(n)
	if n.Exists() && x == math.Trunc(x) && math.Abs(x) < 1e15 {
		return count(int64(x))
	}
	return digits(x, 5)
}

// unreadText says what --where spared of all segments.
func unreadText(u stream.Unread, segments int64) string {
	t := fmt.Sprintf("%s of %s not read: --where excludes them by statistics or folder names (%s, %s", count(u.Segments), plural(segments, "segment", "segments"),
		plural(u.Rows, "row", "rows"), sizeText(u.Bytes))
	if u.Files > 0 {
		t += ", " + plural(u.Files, "whole file", "whole files")
	}
	return t + ")"
}

func runText(r *vcov.Result) string {
	run := r.Run
	t := fmt.Sprintf("%s (%s, %s arithmetic), %s, %s", plural(int64(run.Passes), "pass", "passes"), run.Route, run.Arithmetic,
		plural(int64(run.Workers), "worker", "workers"), plural(run.Segments, "segment", "segments"))
	sec := float64(run.Seconds)
	if run.Seconds.Exists() && sec > 0 {
		t += fmt.Sprintf("; %s s, %s rows a second", three(sec), rate(float64(r.Rows.Read)/sec))
	}
	if run.Bytes > 0 {
		t += fmt.Sprintf("; %s read", sizeText(run.Bytes))
	}
	if u := run.Unread; u.Segments > 0 {
		t += "; " + unreadText(u, run.Segments)
	}
	if run.PeakBytes > 0 {
		t += fmt.Sprintf(", memory at most %s", sizeText(run.PeakBytes))
	}
	if run.SpilledRuns > 0 {
		t += fmt.Sprintf("; sums of clusters beyond --memory went to scratch: %s in %s", sizeText(run.SpilledBytes), plural(run.SpilledRuns, "sorted run", "sorted runs"))
	}
	return t
}

// timingsText shares out the time of all workers over the stages, largest first.
func timingsText(r *vcov.Result) string {
	list := slices.Clone(r.Run.Timings)
	slices.SortStableFunc(list, func(a, b vcov.Timing) int { return cmp.Compare(b.Seconds, a.Seconds) })
	var all float64
	for _, t := range list {
		all += float64(t.Seconds)
	}
	parts := make([]string, len(list))
	for i, t := range list {
		parts[i] = fmt.Sprintf("%s %.1f %%", t.Stage, 100*float64(t.Seconds)/all)
		if rows := r.Rows.Read; rows > 0 {
			parts[i] += fmt.Sprintf(" (%s ns a row)", digits(float64(t.Seconds)*1e9/float64(rows), 3))
		}
	}
	return fmt.Sprintf("%s s of all workers: %s", digits(all, 3), strings.Join(parts, ", "))
}
