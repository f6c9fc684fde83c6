package main

import (
	"errors"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// exitCode maps an error to the exit status.
func exitCode(err error) int {
	switch {
	case err == nil:
		return exitDone
	case errors.Is(err, stream.ErrUse):
		return exitUse
	case incomplete(err):
		return exitIncomplete
	}
	return exitFailed
}

// oneLine keeps a message on one line whatever a file name or cell contains.
func oneLine(s string) string {
	s = strings.TrimSpace(s)
	if !strings.ContainsAny(s, "\r\n\t\x1b\x00") {
		return s
	}
	var b strings.Builder
	for _, r := range s {
		switch {
		case r == '\n':
			b.WriteString(`\n`)
		case r == '\r':
			b.WriteString(`\r`)
		case r == '\t':
			b.WriteString(`\t`)
		case r < 0x20 || r == 0x7f:
			b.WriteRune('\uFFFD')
		default:
			b.WriteRune(r)
		}
	}
	return b.String()
}

// nearest returns the known word with the fewest edits from word, "" if none
// is close enough to be meant.
func nearest(word string, known []string) string {
	best, bestD := "", 1+max(1, len([]rune(word))/3)
	for _, k := range known {
		if d := edits(strings.ToLower(word), strings.ToLower(k)); d < bestD {
			best, bestD = k, d
		}
	}
	if best == "" && len(word) >= 3 {
		for _, k := range known {
			if strings.HasPrefix(k, word) || strings.HasPrefix(word, k) {
				return k
			}
		}
	}
	return best
}

// edits counts insertions, deletions, replacements and swaps of neighbours
// that turn s into t.
func edits(s, t string) int {
	a, b := []rune(s), []rune(t)
	var prev2 []int
	prev := make([]int, len(b)+1)
	for j := range prev {
		prev[j] = j
	}
	for i := 1; i <= len(a); i++ {
		cur := make([]int, len(b)+1)
		cur[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			cur[j] = min(prev[j]+1, cur[j-1]+1, prev[j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				cur[j] = min(cur[j], prev2[j-2]+1)
			}
		}
		prev2, prev = prev, cur
	}
	return prev[len(b)]
}

// meant gives "; did you mean x?" or "".
func meant(word string, known []string) string {
	if n := nearest(word, known); n != "" {
		return "; did you mean " + n + "?"
	}
	return ""
}
