package main

import (
	"fmt"
	"slices"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// rowsWord in place of a clustering deals rows one by one.
const rowsWord = "rows"

// audit is what --audit says.
type audit struct {
	on      bool
	buckets int    // 0: auto
	by      string // clustering, rowsWord, or "" for that of the errors
}

func setAudit(s *settings, v value) error {
	count, by, inPlace, err := splitKind(v.text())
	wrong := fmt.Errorf("found %q, want auto or a number of buckets, and perhaps what they keep together: auto(quay), 40(quay), auto(%s)", v.text(), rowsWord)
	if err != nil || len(by) > 1 || inPlace && len(by) == 0 {
		return wrong
	}
	a := audit{on: true}
	if count != "auto" {
		n, err := strconv.Atoi(count)
		if err != nil {
			return wrong
		}
		if n < vcov.LeastBuckets || n > vcov.MostBuckets {
			return fmt.Errorf("found %d buckets, want %d to %d", n, vcov.LeastBuckets, vcov.MostBuckets)
		}
		a.buckets = n
	}
	if inPlace {
		a.by = by[0]
	}
	s.audit = a
	return nil
}

// deal adds to the request the cells that the audit deals rows to: by its own
// clustering, else that of the last kind that has one, else --cluster, else rows.
func (r *request) deal(a audit, cluster []string) {
	if !a.on {
		return
	}
	key := -1
	by := a.by
	if by == "" {
		for _, k := range r.kinds {
			switch {
			case k.Cluster >= 0:
				key = k.Cluster
			case k.Cluster <= several:
				key = r.crossed[several-k.Cluster][0]
			}
		}
		if key < 0 && len(cluster) > 0 {
			by = cluster[0]
		}
	}
	if by != "" && by != rowsWord {
		key = r.key(by)
	}
	r.buckets = &stream.Buckets{Key: key, Cells: vcov.AuditCells(a.buckets, key < 0)}
}

// auditText is what --audit comes to, nil without.
func (s *settings) auditText(req request) *string {
	if req.buckets == nil {
		return nil
	}
	by := ""
	if k := req.buckets.Key; k >= 0 {
		by = req.keys[k]
	}
	t := vcov.AuditText(s.audit.buckets, by)
	return &t
}

// audited are the comparisons with kinds that are shown, in order.
func (v *view) audited() []vcov.AuditedError {
	var list []vcov.AuditedError
	if a := v.res.Audit; a != nil {
		for _, g := range a.Against {
			if v.shows(g.Errors) {
				list = append(list, g)
			}
		}
	}
	return list
}

// bucketsText gives "50 buckets of whole clusters of quay".
func bucketsText(a *vcov.Audit) string {
	if len(a.Clusters) == 0 {
		return fmt.Sprintf("%d buckets of rows", a.Buckets)
	}
	return fmt.Sprintf("%d buckets of whole clusters of %s", a.Buckets, oneLine(a.Clusters[0]))
}

// writeAudit sets the errors beside those of replicates.
func (v *view) writeAudit(b *strings.Builder, n notes) {
	a := v.res.Audit
	if a == nil || a.Status != "ok" {
		return
	}
	fmt.Fprintf(b, "\nAudit by %s\n", bucketsText(a))
	var at []int
	left := 0
	for j, t := range v.res.Terms {
		switch {
		case v.aliasOf(t) != nil:
		case len(at) == detailTerms:
			left++
		default:
			at = append(at, j)
		}
	}
	pickTexts := func(text func(j int) string) []string {
		var list []string
		for _, j := range at {
			list = append(list, text(j))
		}
		return list
	}
	number := func(x vcov.Number) string {
		if !x.Exists() {
			return none
		}
		return digits(float64(x), 4)
	}
	first := []column{
		{head: []string{"", "term"}, cells: pickTexts(func(j int) string { return shorten(v.res.Terms[j], termWidth) }), left: true},
		{head: []string{"error by", "replicates"}, cells: align(pickTexts(func(j int) string { return number(a.DeleteGroup.SE[j]) }), numberWidth)},
	}
	if a.RandomGroups.Reason == nil {
		first = append(first, column{head: []string{"random", "groups"}, cells: align(pickTexts(func(j int) string { return number(a.RandomGroups.SE[j]) }), numberWidth)})
	}
	cols := first
	marked := false
	for _, g := range v.audited() {
		if g.Reason != nil {
			continue
		}
		c := column{head: []string{"over", shorten(g.Errors, 18)}, left: true, cells: pickTexts(func(j int) string {
			if !g.Ratio[j].Exists() {
				return ""
			}
			t := fmt.Sprintf("%s (%s to %s)", ratioText1(float64(g.Ratio[j])), ratioText1(float64(g.Low[j])), ratioText1(float64(g.High[j])))
			if term := v.res.Terms[j]; slices.Contains(g.TooSmall, term) || slices.Contains(g.TooLarge, term) {
				t += " *"
				marked = true
			}
			return strings.ReplaceAll(t, "x", "")
		})}
		if more := append(cols[:len(cols):len(cols)], c); len(cols) > len(first) && tableWidth(more) > n.width {
			writeTable(b, cols, nil)
			b.WriteByte('\n')
			cols = append(first[:len(first):len(first)], c)
		} else {
			cols = more
		}
	}
	writeTable(b, cols, nil)
	if left > 0 {
		n.add("", fmt.Sprintf("and %s more terms; --json has them all", count(int64(left))))
	}
	text := fmt.Sprintf("Error by replicates: from the changes of an estimate when each bucket in turn is left out (jackknife), whatever rows of a bucket have in common. Over: that error as a multiple of the one by each kind, with the %s interval of the true multiple.", levelText(a.Level))
	if marked {
		text += fmt.Sprintf(" *: outside what replication supports, at %s for all terms together.", levelText(a.Level))
	}
	if a.RandomGroups.Reason == nil {
		text += " Random groups: from the estimates of each bucket by itself."
	} else {
		text += " No error of random groups: " + *a.RandomGroups.Reason + "."
	}
	if len(a.Clusters) > 0 {
		text += fmt.Sprintf(" A bucket keeps rows of one %s together; what goes across is cut, and does not show.", oneLine(a.Clusters[0]))
	} else {
		text += " Rows were dealt one by one: that clusters move together does not show."
	}
	for _, l := range wrap(text, n.width) {
		b.WriteString(l + "\n")
	}
}

// auditSays puts into words which errors the replicates contradict.
func auditSays(v *view) []string {
	a := v.res.Audit
	if a == nil || a.Status != "ok" {
		return nil
	}
	type fault struct {
		kinds, terms []string
		small        bool
		most         float64
		instead      string
	}
	var faults []*fault
	var right []string
	for _, g := range v.audited() {
		if g.Reason != nil {
			continue
		}
		if len(g.TooSmall)+len(g.TooLarge) == 0 {
			right = append(right, oneLine(g.Errors))
		}
		for _, f := range []*fault{{terms: g.TooSmall, small: true}, {terms: g.TooLarge}} {
			if len(f.terms) == 0 {
				continue
			}
			if g.Instead != nil {
				f.instead = *g.Instead
			}
			for j, t := range v.res.Terms {
				if x := float64(g.Ratio[j]); slices.Contains(f.terms, t) && (f.most == 0 || f.small == (x > f.most)) {
					f.most = x
				}
			}
			same := slices.IndexFunc(faults, func(o *fault) bool {
				return o.small == f.small && o.instead == f.instead && slices.Equal(o.terms, f.terms)
			})
			if same < 0 {
				same = len(faults)
				faults = append(faults, f)
			}
			o := faults[same]
			o.kinds = append(o.kinds, oneLine(g.Errors))
			if f.small == (f.most > o.most) {
				o.most = f.most
			}
		}
	}
	var list []string
	for _, f := range faults {
		names := both(shortList(briefs(f.terms), 5))
		times := strings.TrimPrefix(ratioText1(f.most), "x")
		s := ""
		if f.small {
			s = fmt.Sprintf("Audit: the errors of %s by %s are too small; over %s they come out up to %s times as large", names, both(f.kinds), bucketsText(a), times)
		} else {
			s = fmt.Sprintf("Audit: the errors of %s by %s are larger than replicates support; over %s they come out down to %s times as large", names, both(f.kinds), bucketsText(a), times)
		}
		switch {
		case f.instead == "" && f.small:
			s += ". No kind over these buckets allows for more: look for what makes wider groups of rows move together"
		case f.instead == "":
		case slices.Contains(right, f.instead):
			s += ". Use " + oneLine(f.instead) + ", which replicates support"
		default:
			s += ". Use " + oneLine(f.instead)
		}
		list = append(list, s+".")
	}
	if len(right) > 0 && len(faults) == 0 {
		list = append(list, fmt.Sprintf("Audit: replicates over %s support the errors by %s.", bucketsText(a), both(right)))
	}
	return list
}
