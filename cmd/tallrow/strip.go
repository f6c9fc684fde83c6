package main

import "math"

// stripWidth is the number of characters of a strip; odd, so that zero has a
// character of its own in the middle.
const stripWidth = 17

// strip draws an interval against zero with plain characters: the interval as
// dashes, the estimate as o, zero as a bar in the middle or, where the
// interval holds it, as a plus. The end that lies farther from zero touches
// the edge, so every strip has a scale of its own.
func strip(estimate, low, high float64) string {
	far := math.Max(math.Abs(low), math.Abs(high))
	if math.IsNaN(estimate) || math.IsNaN(far) || math.IsInf(far, 0) {
		return ""
	}
	const mid = stripWidth / 2
	cells := make([]byte, stripWidth)
	for i := range cells {
		cells[i] = '.'
	}
	cells[mid] = '|'
	if far == 0 {
		cells[mid] = '+'
		return string(cells)
	}
	at := func(x float64) int { return mid + int(math.Round(x/far*mid)) }
	a, z, o := at(low), at(high), at(estimate)
	switch {
	case low > 0:
		a, z, o = max(a, mid+1), max(z, mid+1), max(o, mid+1)
	case high < 0:
		a, z, o = min(a, mid-1), min(z, mid-1), min(o, mid-1)
	}
	for i := a; i <= z; i++ {
		cells[i] = '-'
	}
	cells[o] = 'o'
	if low <= 0 && high >= 0 && o != mid {
		cells[mid] = '+'
	}
	return string(cells)
}
