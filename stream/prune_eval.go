package stream

import (
	"cmp"
	"math"
	"strings"
	"time"
)

// The row filter over ranges: each instruction gives bounds of what its register
// can hold. Rounding is monotone, so bounds of sums, differences, products,
// quotients and roots are those of their ends, exactly. What is not known to be
// monotone to the last bit (log, exp, pow) answers that nothing is known, as does
// everything with an infinite end: being right is worth more here than being
// narrow.

// limits bounds a number register: its value may be missing if nan is set, and a
// number from lo to hi if some is.
type limits struct {
	lo, hi    float64
	nan, some bool
}

// timeLimits bounds a time register.
type timeLimits struct {
	lo, hi    int64
	nan, some bool
}

func anything(some bool) limits { return limits{math.Inf(-1), math.Inf(1), true, some} }

func truths(no, yes, nan bool) limits {
	s := limits{lo: 1, nan: nan, some: no || yes}
	if no {
		s.lo = 0
	}
	if yes {
		s.hi = 1
	}
	return s
}

func (s limits) no() bool     { return s.some && s.lo <= 0 }
func (s limits) yes() bool    { return s.some && s.hi >= 1 }
func (s limits) finite() bool { return s.lo >= -math.MaxFloat64 && s.hi <= math.MaxFloat64 }

// excludes is a Filter.
func (p *program) excludes(cells func(use int) Range) bool {
	num := make([]limits, p.nWhere)
	ns := make([]timeLimits, p.nWhere)
	for r := range p.code[:p.nWhere] {
		in := &p.code[r]
		switch in.code {
		case codeTimeCell:
			ns[r] = timeCells(cells(in.use))
		case codeDate:
			ns[r] = p.dates(ns[in.a], in.zoned)
		default:
			num[r] = p.bound(in, num, ns, cells)
		}
	}
	return !num[p.where].yes()
}

func (p *program) bound(in *instr, num []limits, ns []timeLimits, cells func(int) Range) limits {
	var a, b limits
	if in.code >= codeNeg {
		a, b = num[in.a], num[in.b]
	}
	switch in.code {
	case codeConst:
		return limits{in.k, in.k, in.k != in.k, in.k == in.k}
	case codeCell:
		return numberCellSpan(cells(in.use), p.uses[in.use].vectorKind())
	case codeSeconds:
		return secondsSpan(ns[in.a])
	case codeHour, codeWeekday, codeMonth:
		return p.clockSpan(in, ns[in.a])
	case codeNoText:
		r := cells(in.use)
		return truths(!r.AllMissing, !r.NoneMissing, false)
	case codeNoTime:
		return truths(ns[in.a].some, ns[in.a].nan, false)
	case codeNoNumber:
		return truths(num[in.a].some, num[in.a].nan, false)
	case codeTextConst:
		r := cells(in.use)
		return compareTexts(in.cmp, r, Range{NoneMissing: true, Bounded: true, Text: [2]string{in.text, in.text}})
	case codeTextText:
		return compareTexts(in.cmp, cells(in.use), cells(in.b))
	case codeBigConst:
		return compareWhole(in, cells(in.use), p.uses[in.use].kind)
	case codeTimeConst:
		return compareTimes(in.cmp, ns[in.a], timeLimits{in.ns, in.ns, false, true})
	case codeTimeTime:
		return compareTimes(in.cmp, ns[in.a], ns[in.b])
	case codeNeg:
		return limits{-a.hi, -a.lo, a.nan, a.some}
	case codeNot:
		return limits{1 - a.hi, 1 - a.lo, a.nan, a.some}
	case codeAdd:
		return corners(a, b, a.lo+b.lo, a.hi+b.hi)
	case codeSub:
		return corners(a, b, a.lo-b.hi, a.hi-b.lo)
	case codeMul:
		return corners(a, b, a.lo*b.lo, a.lo*b.hi, a.hi*b.lo, a.hi*b.hi)
	case codeDiv:
		if b.lo <= 0 && b.hi >= 0 {
			return anything(a.some && b.some)
		}
		return corners(a, b, a.lo/b.lo, a.lo/b.hi, a.hi/b.lo, a.hi/b.hi)
	case codeAnd:
		return truths(a.no() || b.no(), a.yes() && b.yes(), a.nan && (b.nan || b.yes()) || b.nan && (a.nan || a.yes()))
	case codeOr:
		return truths(a.no() && b.no(), a.yes() || b.yes(), a.nan && (b.nan || b.no()) || b.nan && (a.nan || a.no()))
	case codeCompare:
		return compareSpans(in.cmp, a.lo < b.hi, a.lo <= b.hi && b.lo <= a.hi, a.hi > b.lo, a.nan || b.nan, a.some && b.some)
	case codeSqrt:
		if a.hi < 0 {
			return limits{nan: true}
		}
		return limits{math.Sqrt(max(a.lo, 0)), math.Sqrt(a.hi), a.nan || a.lo < 0, a.some}
	case codeAbs:
		s := limits{math.Abs(a.lo), math.Abs(a.hi), a.nan, a.some}
		if s.lo > s.hi {
			s.lo, s.hi = s.hi, s.lo
		}
		if a.lo <= 0 && a.hi >= 0 {
			s.lo = 0
		}
		return s
	case codeSquare:
		if a.lo <= 0 && a.hi >= 0 {
			return corners(a, a, 0, a.lo*a.lo, a.hi*a.hi)
		}
		return corners(a, a, a.lo*a.lo, a.hi*a.hi)
	case codeMin:
		return limits{min(a.lo, b.lo), min(a.hi, b.hi), a.nan || b.nan, a.some && b.some}
	case codeMax:
		return limits{max(a.lo, b.lo), max(a.hi, b.hi), a.nan || b.nan, a.some && b.some}
	case codeHinge:
		s := corners(a, b, a.lo-b.hi, a.hi-b.lo)
		s.lo, s.hi = max(s.lo, 0), max(s.hi, 0)
		return s
	case codeLog, codeExp:
		return anything(a.some)
	case codePow:
		return anything(a.some && b.some)
	case codePowInt:
		return anything(a.some)
	}
	return anything(true)
}

// corners bounds an operation on two finite spans by its values there.
func corners(a, b limits, at ...float64) limits {
	if !a.finite() || !b.finite() {
		return anything(a.some && b.some)
	}
	s := limits{at[0], at[0], a.nan || b.nan, a.some && b.some}
	for _, x := range at[1:] {
		s.lo, s.hi = min(s.lo, x), max(s.hi, x)
	}
	return s
}

// compareSpans is the result of a comparison whose sides can be in these orders.
func compareSpans(o op, less, equal, greater, nan, some bool) limits {
	var no, yes bool
	for c, can := range [...]bool{less, equal, greater} {
		if can && some {
			if truthOf(o, c-1) == 1 {
				yes = true
			} else {
				no = true
			}
		}
	}
	return truths(no, yes, nan)
}

func compareTexts(o op, a, b Range) limits {
	nan, some := !a.NoneMissing || !b.NoneMissing, !a.AllMissing && !b.AllMissing
	if !a.Bounded || !b.Bounded {
		return truths(some, some, nan)
	}
	low, high := strings.Compare(a.Text[0], b.Text[1]), strings.Compare(a.Text[1], b.Text[0])
	return compareSpans(o, low < 0, low <= 0 && high >= 0, high > 0, nan, some)
}

func compareTimes(o op, a, b timeLimits) limits {
	return compareSpans(o, a.lo < b.hi, a.lo <= b.hi && b.lo <= a.hi, a.hi > b.lo, a.nan || b.nan, a.some && b.some)
}

// compareWhole compares whole numbers exactly with one beyond 2^53.
func compareWhole(in *instr, r Range, kind Kind) limits {
	nan, some := !r.NoneMissing, !r.AllMissing
	if in.bound.side != 0 {
		return compareSpans(in.cmp, in.bound.side < 0, false, in.bound.side > 0, nan, some)
	}
	if !r.Bounded {
		return truths(some, some, nan)
	}
	compare := func(cell int64) int {
		if kind == Uint64 {
			return cmp.Compare(uint64(cell), in.bound.value)
		}
		return cmp.Compare(cell, int64(in.bound.value))
	}
	low, high := compare(r.I64[0]), compare(r.I64[1])
	return compareSpans(in.cmp, low < 0, low <= 0 && high >= 0, high > 0, nan, some)
}

func numberCellSpan(r Range, kind Kind) limits {
	s := limits{math.Inf(-1), math.Inf(1), !r.NoneMissing, !r.AllMissing}
	switch {
	case kind == Bool && !r.Bounded:
		s.lo, s.hi = 0, 1
	case !r.Bounded:
	case kind == Float64:
		s.lo, s.hi = r.F64[0], r.F64[1]
	case kind == Uint64:
		s.lo, s.hi = float64(uint64(r.I64[0])), float64(uint64(r.I64[1]))
	default:
		s.lo, s.hi = float64(r.I64[0]), float64(r.I64[1])
	}
	return s
}

func timeCells(r Range) timeLimits {
	t := timeLimits{math.MinInt64, math.MaxInt64, !r.NoneMissing, !r.AllMissing}
	if r.Bounded {
		t.lo, t.hi = r.I64[0], r.I64[1]
	}
	return t
}

func secondsSpan(t timeLimits) limits {
	var ends [2]float64
	evalSeconds(ends[:], []int64{t.lo, t.hi}, nil)
	return limits{ends[0], ends[1], t.nan, t.some}
}

// maxOffsets is how many changes of a zone's offset are looked at.
const maxOffsets = 300

// wall bounds the wall-clock seconds of times from lo to hi; ok is false if the
// zone's offset changes too often between.
func (p *program) wall(t timeLimits, zoned bool) (lo, hi int64, ok bool) {
	from, to := floorDiv(t.lo, nsPerSecond), floorDiv(t.hi, nsPerSecond)
	if !zoned {
		return from, to, true
	}
	lo, hi = math.MaxInt64, math.MinInt64
	for range maxOffsets {
		at := time.Unix(from, 0).In(p.zone)
		_, offset := at.Zone()
		last := to
		if _, end := at.ZoneBounds(); !end.IsZero() {
			last = min(last, end.Unix()-1)
		}
		lo, hi = min(lo, from+int64(offset)), max(hi, last+int64(offset))
		if last == to {
			return lo, hi, true
		}
		from = last + 1
	}
	return 0, 0, false
}

func (p *program) dates(t timeLimits, zoned bool) timeLimits {
	lo, hi, ok := p.wall(t, zoned)
	if !ok {
		return timeLimits{math.MinInt64, math.MaxInt64, t.nan, t.some}
	}
	return timeLimits{midnight(lo), midnight(hi), t.nan, t.some}
}

// clockSpan bounds hour, weekday or month: exactly inside one day, or one year
// for months, else by all that they can be.
func (p *program) clockSpan(in *instr, t timeLimits) limits {
	s := limits{0, 23, t.nan, t.some}
	lo, hi, ok := p.wall(t, in.zoned)
	day := floorDiv(lo, secondsPerDay)
	one := ok && day == floorDiv(hi, secondsPerDay)
	switch in.code {
	case codeHour:
		if one {
			s.lo, s.hi = float64(floorMod(lo, secondsPerDay)/3600), float64(floorMod(hi, secondsPerDay)/3600)
		}
	case codeWeekday:
		s.hi = 6
		if one {
			s.lo = float64(floorMod(day+3, 7))
			s.hi = s.lo
		}
	case codeMonth:
		s.lo, s.hi = 1, 12
		if a, b := time.Unix(lo, 0).UTC(), time.Unix(hi, 0).UTC(); ok && a.Year() == b.Year() {
			s.lo, s.hi = float64(a.Month()), float64(b.Month())
		}
	}
	return s
}
