package main

import (
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/tallrow/tallrow/vcov"
)

// none stands where a number does not exist.
const none = "-"

func runes(s string) int { return utf8.RuneCountInString(s) }

// digits writes x with n significant digits, in plain notation between 1e-4
// and 1e7. Digits before the point are never rounded away.
func digits(x float64, n int) string {
	switch {
	case math.IsNaN(x) || math.IsInf(x, 0):
		return none
	case x == 0:
		return "0"
	}
	e := strconv.FormatFloat(x, 'e', n-1, 64)
	exp, _ := strconv.Atoi(e[strings.IndexByte(e, 'e')+1:])
	if exp < -4 || exp >= 7 {
		return e
	}
	return strconv.FormatFloat(x, 'f', max(0, n-1-exp), 64)
}

// ratioText writes how many times one error is another: x1.02, x17.4, x230.
func ratioText(x float64) string {
	switch {
	case math.IsNaN(x) || math.IsInf(x, 0):
		return ""
	case x >= 1e5:
		return "x" + strconv.FormatFloat(x, 'e', 1, 64)
	case x >= 99.95:
		return "x" + strconv.FormatFloat(x, 'f', 0, 64)
	case x >= 9.995:
		return "x" + strconv.FormatFloat(x, 'f', 1, 64)
	case x < 0.005:
		return "x" + digits(x, 2)
	}
	return "x" + strconv.FormatFloat(x, 'f', 2, 64)
}

// pText writes a probability; very small ones only as a bound.
func pText(p vcov.Number) string {
	x := float64(p)
	switch {
	case !p.Exists():
		return none
	case x < 1e-99:
		return "<1e-99"
	case x > 0.9995:
		return "1.00"
	case x < 1e-4:
		return digits(x, 2)
	}
	return digits(x, 3)
}

// fine writes x so that a difference of the size of scale shows with n digits,
// and with at least least significant digits.
func fine(x, scale float64, n, least int) string {
	if math.IsNaN(scale) || scale <= 0 || x == 0 || math.IsNaN(x) || math.IsInf(scale, 0) {
		return digits(x, least)
	}
	// Significant digits from the first one of x down to the n-th of scale.
	need := int(math.Floor(math.Log10(math.Abs(x)))) - int(math.Floor(math.Log10(scale))) + n
	return digits(x, min(max(need, least), 15))
}

// ends writes the two ends of an interval with the same decimals, enough to
// show three digits of its half-width.
func ends(low, high float64) (string, string) {
	half := (high - low) / 2
	far := math.Max(math.Abs(low), math.Abs(high))
	if !(half > 0) || far >= 1e7 || far < 1e-4 || half < far*1e-11 {
		return fine(low, half, 3, 5), fine(high, half, 3, 5)
	}
	dec := max(0, 2-int(math.Floor(math.Log10(half))))
	return strconv.FormatFloat(low, 'f', dec, 64), strconv.FormatFloat(high, 'f', dec, 64)
}

// count writes a whole number with separators: 1,234,567.
func count(n int64) string {
	s := strconv.FormatInt(n, 10)
	neg := strings.HasPrefix(s, "-")
	s = strings.TrimPrefix(s, "-")
	var b strings.Builder
	if neg {
		b.WriteByte('-')
	}
	for i, r := range s {
		if i > 0 && (len(s)-i)%3 == 0 {
			b.WriteByte(',')
		}
		b.WriteRune(r)
	}
	return b.String()
}

// plural gives "1 row" or "2 rows".
func plural(n int64, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return count(n) + " " + many
}

// percent writes a share: 7.3 %, 0.02 %, below 0.01 %.
func percent(share float64) string {
	p := 100 * share
	switch {
	case p == 0 || p >= 10:
		return strconv.FormatFloat(p, 'f', 0, 64) + " %"
	case p >= 1:
		return strconv.FormatFloat(p, 'f', 1, 64) + " %"
	case p >= 0.01:
		return strconv.FormatFloat(p, 'f', 2, 64) + " %"
	}
	return "below 0.01 %"
}

// levelText writes 0.95 as "95 %".
func levelText(level vcov.Number) string {
	return strconv.FormatFloat(100*float64(level), 'g', 10, 64) + " %"
}

// sizeText writes bytes: 1.50 GiB.
func sizeText(n int64) string {
	x := float64(n)
	for _, u := range []string{"bytes", "KiB", "MiB", "GiB"} {
		if x < 1024 {
			if u == "bytes" {
				return count(n) + " bytes"
			}
			return three(x) + " " + u
		}
		x /= 1024
	}
	return three(x) + " TiB"
}

// three writes three significant digits in plain notation.
func three(x float64) string {
	switch {
	case x >= 99.95:
		return strconv.FormatFloat(x, 'f', 0, 64)
	case x >= 9.995:
		return strconv.FormatFloat(x, 'f', 1, 64)
	}
	return strconv.FormatFloat(x, 'f', 2, 64)
}

// rate writes a number of rows per second.
func rate(x float64) string {
	switch {
	case math.IsNaN(x) || math.IsInf(x, 0):
		return none
	case x >= 999.5e3:
		return three(x/1e6) + " million"
	}
	return count(int64(math.Round(x)))
}

// shorten cuts a name to width runes, keeping its beginning and end.
func shorten(name string, width int) string {
	r := []rune(oneLine(name))
	if len(r) <= width {
		return string(r)
	}
	if width < 4 {
		return string(r[:max(0, width-1)]) + "…"
	}
	tail := (width - 1) / 3
	return string(r[:width-1-tail]) + "…" + string(r[len(r)-tail:])
}

// align brings the decimal points of cells under each other; when the numbers
// are too far apart for that, it only pads them on the left.
func align(cells []string, limit int) []string {
	left, right := 0, 0
	for _, c := range cells {
		l, r := pointAt(c)
		left, right = max(left, l), max(right, r)
	}
	out := make([]string, len(cells))
	if left+right > limit {
		w := 0
		for _, c := range cells {
			w = max(w, runes(c))
		}
		for i, c := range cells {
			out[i] = strings.Repeat(" ", w-runes(c)) + c
		}
		return out
	}
	for i, c := range cells {
		l, r := pointAt(c)
		out[i] = strings.Repeat(" ", left-l) + c + strings.Repeat(" ", right-r)
	}
	return out
}

// pointAt counts the runes before the decimal point and from it on.
func pointAt(c string) (left, right int) {
	if i := strings.IndexAny(c, ".e"); i >= 0 && c != "" && (c[0] == '-' || c[0] >= '0' && c[0] <= '9') {
		return i, runes(c) - i
	}
	return runes(c), 0
}
