package main

import (
	"strings"
)

// minGroup is how many levels of a category stand under a line of their own.
const minGroup = 3

// levelName is the name of an indicator, or of a product of indicators and a
// number, in parts.
type levelName struct {
	group      string   // what the levels of one category have in common
	level      string   // "" if the term is no indicator
	categories []string // expressions of the categories
}

// splitLevel parts a name such as "barge = b", "(barge = b) * pallets" or
// "(barge = b) * (wet = true)".
func splitLevel(term string) levelName {
	if !strings.HasPrefix(term, "(") {
		c, l, ok := strings.Cut(term, " = ")
		if !ok || c == "" || l == "" {
			return levelName{group: term}
		}
		return levelName{group: c, level: l, categories: []string{c}}
	}
	var n levelName
	var levels, groups []string
	rest := term
	for strings.HasPrefix(rest, "(") {
		part, after, more := strings.Cut(rest[1:], ") * ")
		if !more {
			var closed bool
			if part, closed = strings.CutSuffix(part, ")"); !closed {
				break
			}
			after = ""
		}
		c, l, ok := strings.Cut(part, " = ")
		if !ok || c == "" || l == "" {
			break
		}
		n.categories = append(n.categories, c)
		groups = append(groups, c)
		levels = append(levels, l)
		rest = after
	}
	if len(levels) == 0 {
		return levelName{group: term}
	}
	if rest != "" {
		groups = append(groups, rest)
	}
	n.group, n.level = strings.Join(groups, " * "), strings.Join(levels, ", ")
	return n
}

// against names the base levels of the categories.
func (v *view) against(categories []string) string {
	var bases []string
	for _, c := range categories {
		base, ok := v.res.BaseLevels[c]
		if !ok {
			return ""
		}
		bases = append(bases, shorten(base, 30))
	}
	return ", against " + strings.Join(bases, ", ")
}
