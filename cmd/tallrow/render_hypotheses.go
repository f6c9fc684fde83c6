package main

import (
	"fmt"
	"strings"
)

// writeHypotheses writes a table of the tests that were asked for: each hypothesis
// with a line for each kind of errors shown.
func (v *view) writeHypotheses(b *strings.Builder, n notes) bool {
	var names, est, se, span, f, on, p []string
	between := map[int]string{}
	var reasons [][2]string
	last, singles := "", false
	for _, h := range v.res.Hypotheses {
		if !v.shows(h.Errors) {
			continue
		}
		if text := oneLine(h.Text); len(names) == 0 || text != last {
			between[len(names)], last = shorten(text, n.width), text
		}
		names = append(names, "  "+shorten(h.Errors, termWidth-2))
		if h.Reason != nil {
			reasons = append(reasons, [2]string{last, oneLine(*h.Reason)})
		}
		single := [3]string{}
		if h.DF1 == 1 {
			singles = true
			single = [3]string{fine(float64(h.Estimate), float64(h.SE), 2, 5), digits(float64(h.SE), 4), none}
			if h.Low.Exists() && h.High.Exists() {
				low, high := ends(float64(h.Low), float64(h.High))
				single[2] = low + " to " + high
			}
		}
		est, se, span = append(est, single[0]), append(se, single[1]), append(span, single[2])
		f = append(f, digits(float64(h.F), 5))
		if h.F.Exists() {
			df := wholeOr(h.DF1) + " and " + wholeOr(h.DF2)
			if h.P.Exists() && !h.DF2.Exists() {
				df = "draws" // of a bootstrap
			}
			on = append(on, df)
		} else {
			on = append(on, none)
		}
		p = append(p, pText(h.P)) // a p of 0 is one too small for a float64
	}
	if len(names) == 0 {
		return false
	}
	cols := []column{{head: []string{"hypothesis"}, cells: names, left: true}}
	if singles {
		cols = append(cols, column{head: []string{"left side"}, cells: align(est, numberWidth)},
			column{head: []string{"error"}, cells: align(se, numberWidth)},
			column{head: []string{levelText(v.res.Model.Level) + " interval"}, cells: span})
	}
	cols = append(cols, column{head: []string{"F"}, cells: align(f, numberWidth)},
		column{head: []string{"on"}, cells: on, left: true}, column{head: []string{"p"}, cells: p, left: true})
	writeTable(b, cols, between)
	if singles {
		b.WriteString("left side: the terms of an equation, all brought to its left.\n")
	}
	said := map[string]bool{}
	for _, r := range reasons {
		if text := fmt.Sprintf("no test of %s: %s", r[0], r[1]); !said[text] {
			said[text] = true
			for _, l := range wrap(text, n.width) {
				b.WriteString(l + "\n")
			}
		}
	}
	return true
}
