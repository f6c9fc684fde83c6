package main

import (
	"fmt"
	"math"
	"strings"

	"github.com/tallrow/tallrow/vcov"
)

// detailTerms is how many terms the description of clusters shows.
const detailTerms = 40

// writeDetail describes the clusters of each clustering, if that was asked for.
func (v *view) writeDetail(b *strings.Builder, n notes) {
	for _, c := range v.res.Clusterings {
		name := strings.Join(c.Clusters, " and ")
		fmt.Fprintf(b, "\nClusters of %s\n", oneLine(name))
		var terms, eff, share, who, move, without, even []string
		for j, t := range v.res.Terms {
			if len(terms) == detailTerms {
				n.add("", fmt.Sprintf("and %s more terms; --json has them all", count(int64(len(v.res.Terms)-j))))
				break
			}
			if v.aliasOf(t) != nil {
				continue
			}
			terms = append(terms, shorten(t, termWidth))
			eff = append(eff, blank(c.Effective[j], 3))
			share = append(share, percentOrBlank(c.Partial[j].Value))
			who = append(who, shorten(c.Partial[j].Cluster, 16))
			m, w := "", ""
			if list := c.Influence[j]; len(list) > 0 {
				w = shorten(list[0].Cluster, 16)
				if se := v.errorOf(c, j); se > 0 {
					m = fmt.Sprintf("%+.2f", float64(list[0].Value)/se)
				}
			}
			move, without = append(move, m), append(without, w)
			even = append(even, blank(c.Moulton[j], 3))
		}
		writeTable(b, []column{
			{head: []string{"", "term"}, cells: terms, left: true},
			{head: []string{"effective", "clusters"}, cells: eff},
			{head: []string{"largest", "share"}, cells: share},
			{head: []string{"", "of"}, cells: who, left: true, gap: 1},
			{head: []string{"moves by", "(errors)"}, cells: move},
			{head: []string{"", "without"}, cells: without, left: true, gap: 1},
			{head: []string{"design", "effect"}, cells: even},
		}, nil)
		text := fmt.Sprintf("Effective clusters: as many of equal weight would say as much. Share: part of what decides the estimate that lies in one cluster, %s in the mean. Moves: the largest change of the estimate when one cluster is left out, in errors by %s.",
			percent(1/float64(c.Groups)), v.errorName(c))
		if c.Intraclass.Exists() {
			text += fmt.Sprintf(" Design effect: factor of the classical variance (Moulton) at the correlation within clusters of the residuals, %s.", digits(float64(c.Intraclass), 3))
		}
		text += fmt.Sprintf(" Leverage: %s in the mean, %s at most (%s).", digits(float64(c.MeanLeverage), 3), digits(float64(c.Leverage.Value), 3), oneLine(c.Leverage.Cluster))
		for _, l := range wrap(text, n.width) {
			b.WriteString(l + "\n")
		}
	}
}

// errorsBy is the last kind shown that rests on a clustering.
func (v *view) errorsBy(c *vcov.Clustering) *vcov.Errors {
	var last *vcov.Errors
	for _, e := range v.shown {
		if e.Status == "ok" && len(e.Clusters) == 1 && e.Clusters[0] == c.Clusters[0] {
			last = e
		}
	}
	return last
}

func (v *view) errorOf(c *vcov.Clustering, term int) float64 {
	if e := v.errorsBy(c); e != nil {
		return at(e.SE, term)
	}
	return math.NaN()
}

func (v *view) errorName(c *vcov.Clustering) string {
	if e := v.errorsBy(c); e != nil {
		return e.Name()
	}
	return "no kind that exists"
}

func blank(x vcov.Number, n int) string {
	if !x.Exists() {
		return ""
	}
	return digits(float64(x), n)
}

func percentOrBlank(x vcov.Number) string {
	if !x.Exists() {
		return ""
	}
	return percent(float64(x))
}

// loneInfluence is the change of an estimate, in errors, that is worth a sentence.
const loneInfluence = 1.0

// clusterDetail says in words where errors by cr1 are too sure, or an estimate hangs
// on one cluster.
func clusterDetail(v *view) []string {
	var list []string
	for _, c := range v.res.Clusterings {
		name := oneLine(strings.Join(c.Clusters, " and "))
		worst, moved := -1, -1
		for j := range v.res.Terms {
			if v.isConstant(j) {
				continue
			}
			if e := float64(c.Effective[j]); e < fewClusters && e < float64(c.Groups)/2 && (worst < 0 || e < float64(c.Effective[worst])) {
				worst = j
			}
			if len(c.Influence[j]) > 0 {
				if r := v.moved(c, j); r > loneInfluence && (moved < 0 || r > v.moved(c, moved)) {
					moved = j
				}
			}
		}
		if worst >= 0 {
			list = append(list, fmt.Sprintf("What decides %s lies so unevenly in the %s clusters of %s that they count for about %s: cr1 is too sure there; cr2(%s) and cr3(%s) allow for that.",
				brief(v.res.Terms[worst]), count(c.Groups), name, digits(float64(c.Effective[worst]), 2), name, name))
		}
		if moved >= 0 {
			i := c.Influence[moved][0]
			list = append(list, fmt.Sprintf("Without the cluster %s of %s the estimate of %s would move by %s of its errors.", oneLine(i.Cluster), name, brief(v.res.Terms[moved]), digits(v.moved(c, moved), 2)))
		}
	}
	return list
}

// moved is the largest change of an estimate by one cluster, in errors.
func (v *view) moved(c *vcov.Clustering, term int) float64 {
	return math.Abs(float64(c.Influence[term][0].Value)) / v.errorOf(c, term)
}
