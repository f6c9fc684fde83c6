package stream

import (
	"slices"
	"strings"
	"unicode/utf8"
)

// function describes a function of the expression language. Max 0 is any
// number of arguments.
type function struct {
	name     string
	min, max int
	usage    string
}

var functionList = []function{
	{"abs", 1, 1, "abs(x)"},
	{"col", 1, 1, `col("name")`},
	{"date", 1, 1, "date(t)"},
	{"each", 1, 2, `each(c) or each(c, base="label")`},
	{"exp", 1, 1, "exp(x)"},
	{"hinge", 2, 2, "hinge(x, knot)"},
	{"hour", 1, 1, "hour(t)"},
	{"log", 1, 1, "log(x)"},
	{"max", 2, 0, "max(x, y)"},
	{"min", 2, 0, "min(x, y)"},
	{"missing", 1, 1, "missing(x)"},
	{"month", 1, 1, "month(t)"},
	{"pow", 2, 2, "pow(x, 2)"},
	{"sqrt", 1, 1, "sqrt(x)"},
	{"weekday", 1, 1, "weekday(t)"},
}

func lookupFunction(name string) *function {
	for i := range functionList {
		if functionList[i].name == name {
			return &functionList[i]
		}
	}
	return nil
}

func functionNames() []string {
	names := make([]string, len(functionList))
	for i, f := range functionList {
		names[i] = f.name
	}
	return names
}

// nearest returns up to three of the names that are likely meant by word, the
// nearest first. Near is an edit distance (insert, delete, replace, swap of
// neighbours; letter case counts nothing) of at most a third of the longer
// name, or one name being the start of the other.
func nearest(word string, names []string) []string {
	type hit struct {
		name string
		d    int
	}
	var hits []hit
	w := strings.ToLower(word)
	for _, n := range names {
		l := strings.ToLower(n)
		limit := max(utf8.RuneCountInString(w), utf8.RuneCountInString(l), 3) / 3
		d := editDistance(w, l)
		prefix := len(w) >= 3 && strings.HasPrefix(l, w) || len(l) >= 3 && strings.HasPrefix(w, l)
		if d <= limit || prefix {
			hits = append(hits, hit{n, d})
		}
	}
	slices.SortStableFunc(hits, func(a, b hit) int { return a.d - b.d })
	var out []string
	for _, h := range hits {
		if out = append(out, h.name); len(out) == 3 {
			break
		}
	}
	return out
}

// editDistance counts the insertions, deletions, replacements and swaps of
// neighbours that turn a into b (optimal string alignment).
func editDistance(a, b string) int {
	s, t := []rune(a), []rune(b)
	if len(s) > 200 || len(t) > 200 {
		return max(len(s), len(t))
	}
	before, last, row := make([]int, len(t)+1), make([]int, len(t)+1), make([]int, len(t)+1)
	for j := range last {
		last[j] = j
	}
	for i := 1; i <= len(s); i++ {
		row[0] = i
		for j := 1; j <= len(t); j++ {
			cost := 1
			if s[i-1] == t[j-1] {
				cost = 0
			}
			row[j] = min(last[j]+1, row[j-1]+1, last[j-1]+cost)
			if i > 1 && j > 1 && s[i-1] == t[j-2] && s[i-2] == t[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
		before, last, row = last, row, before
	}
	return last[len(t)]
}

// oneOf joins names as "a, b or c".
func oneOf(names []string) string {
	switch n := len(names); n {
	case 0:
		return ""
	case 1:
		return names[0]
	default:
		return strings.Join(names[:n-1], ", ") + " or " + names[n-1]
	}
}
