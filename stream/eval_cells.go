package stream

import (
	"cmp"
	"math"
	"strings"
	"time"
)

// Kernels that read columns in their own kind: whole numbers, times, text.

const (
	secondsPerDay = 86400
	nsPerSecond   = 1_000_000_000
)

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b < 0 {
		q--
	}
	return q
}

func floorMod(a, b int64) int64 {
	if m := a % b; m < 0 {
		return m + b
	} else {
		return m
	}
}

// cellsToNumbers converts a vector that is not Float64.
func cellsToNumbers(dst []float64, v *Vector) (bad bool) {
	cells := v.I64[:len(dst)]
	if v.Kind == Uint64 {
		for i, c := range cells {
			dst[i] = float64(uint64(c))
		}
	} else {
		for i, c := range cells {
			dst[i] = float64(c)
		}
	}
	return setMissing(dst, v.Null)
}

// setMissing makes the marked cells NaN and reports whether there are any.
func setMissing(dst []float64, null []bool) (bad bool) {
	if null == nil {
		return false
	}
	for i, m := range null[:len(dst)] {
		if m {
			dst[i], bad = math.NaN(), true
		}
	}
	return bad
}

// evalBound compares whole numbers exactly with a number beyond 2^53.
func evalBound(in *instr, dst []float64, v *Vector) bool {
	for i, cell := range v.I64[:len(dst)] {
		c := in.bound.side
		if c == 0 {
			if v.Kind == Uint64 {
				c = cmp.Compare(uint64(cell), in.bound.value)
			} else {
				c = cmp.Compare(cell, int64(in.bound.value))
			}
		}
		dst[i] = truthOf(in.cmp, c)
	}
	return setMissing(dst, v.Null)
}

// seconds since 1970, the fraction rounded once.
func evalSeconds(dst []float64, ns []int64, null []bool) bool {
	for i, t := range ns[:len(dst)] {
		s := floorDiv(t, nsPerSecond)
		dst[i] = float64(s) + float64(t-s*nsPerSecond)/nsPerSecond
	}
	return setMissing(dst, null)
}

func evalTimeConst(in *instr, dst []float64, a []int64, null []bool) bool {
	for i, t := range a[:len(dst)] {
		dst[i] = truthOf(in.cmp, cmp.Compare(t, in.ns))
	}
	return setMissing(dst, null)
}

func evalTimeTime(in *instr, dst []float64, a, b []int64, anull, bnull []bool) bool {
	for i, t := range a[:len(dst)] {
		dst[i] = truthOf(in.cmp, cmp.Compare(t, b[i]))
	}
	bad := setMissing(dst, anull)
	return setMissing(dst, bnull) || bad
}

// zoneClock turns instants into wall-clock seconds. It remembers the span of
// time over which the last offset holds.
type zoneClock struct {
	zone   *time.Location
	lo, hi int64 // seconds since 1970, lo <= s < hi
	offset int64
}

func (z *zoneClock) wall(s int64) int64 {
	if s < z.lo || s >= z.hi {
		t := time.Unix(s, 0).In(z.zone)
		_, off := t.Zone()
		z.offset = int64(off)
		start, end := t.ZoneBounds()
		z.lo, z.hi = math.MinInt64, math.MaxInt64
		if !start.IsZero() {
			z.lo = start.Unix()
		}
		if !end.IsZero() {
			z.hi = end.Unix()
		}
	}
	return s + z.offset
}

// wallSeconds is the wall-clock time of a cell.
func (e *Evaluator) wallSeconds(in *instr, ns int64) int64 {
	s := floorDiv(ns, nsPerSecond)
	if in.zoned {
		s = e.clock.wall(s)
	}
	return s
}

func (e *Evaluator) evalHour(in *instr, dst []float64, ns []int64, null []bool) bool {
	for i, t := range ns[:len(dst)] {
		dst[i] = float64(floorMod(e.wallSeconds(in, t), secondsPerDay) / 3600)
	}
	return setMissing(dst, null)
}

// evalWeekday counts from Monday; 1970-01-01 was a Thursday.
func (e *Evaluator) evalWeekday(in *instr, dst []float64, ns []int64, null []bool) bool {
	for i, t := range ns[:len(dst)] {
		dst[i] = float64(floorMod(floorDiv(e.wallSeconds(in, t), secondsPerDay)+3, 7))
	}
	return setMissing(dst, null)
}

func (e *Evaluator) evalMonth(in *instr, dst []float64, ns []int64, null []bool) bool {
	for i, t := range ns[:len(dst)] {
		dst[i] = float64(time.Unix(e.wallSeconds(in, t), 0).UTC().Month())
	}
	return setMissing(dst, null)
}

func (e *Evaluator) evalDate(in *instr, dst, ns []int64) {
	for i, t := range ns[:len(dst)] {
		dst[i] = midnight(e.wallSeconds(in, t))
	}
}

// midnight is that of the wall-clock day. The first and last day that nanoseconds
// can hold have no midnight or no next one inside the range: they stay at its
// ends.
func midnight(wall int64) int64 {
	const lo, hi = math.MinInt64 / nsPerSecond, math.MaxInt64 / nsPerSecond
	s := floorDiv(wall, secondsPerDay) * secondsPerDay
	switch {
	case s < lo:
		return math.MinInt64
	case s > hi:
		return math.MaxInt64
	}
	return s * nsPerSecond
}

// textCache holds the result of comparing each value of a dictionary with a
// text.
type textCache struct {
	dict *Dict
	val  []float64
}

func (e *Evaluator) evalTextConst(in *instr, dst []float64, v *Vector) (bad bool) {
	c := &e.texts[in.cache]
	if c.dict != v.Dict {
		c.dict, c.val = v.Dict, c.val[:0]
	}
	if v.Dict != nil {
		for i := len(c.val); i < len(v.Dict.Values); i++ {
			c.val = append(c.val, truthOf(in.cmp, strings.Compare(v.Dict.Values[i], in.text)))
		}
	}
	for i, code := range v.Code[:len(dst)] {
		if code < 0 {
			dst[i], bad = math.NaN(), true
		} else {
			dst[i] = c.val[code]
		}
	}
	return bad
}

func evalTextText(in *instr, dst []float64, v, w *Vector) (bad bool) {
	for i, code := range v.Code[:len(dst)] {
		if code < 0 || w.Code[i] < 0 {
			dst[i], bad = math.NaN(), true
			continue
		}
		dst[i] = truthOf(in.cmp, strings.Compare(v.Dict.Values[code], w.Dict.Values[w.Code[i]]))
	}
	return bad
}

// missingAt reports whether the cell of row i is missing.
func missingAt(v *Vector, i int) bool {
	switch v.Kind {
	case Float64:
		return v.F64[i] != v.F64[i]
	case Text:
		return v.Code[i] < 0
	}
	return v.Null != nil && v.Null[i]
}
