package stream

import "math"

// The rules of the kernels: NaN is missing and any operation on it is missing,
// except that && and || follow three-valued logic. An operation on present
// cells that has no value (division by zero, log or sqrt outside their domain,
// pow likewise) gives NaN and an event. An infinity among the operands never
// turns into NaN: it stays, so that the row is reported rather than dropped.
//
// Each kernel returns whether dst holds a NaN or an infinity; x-x is not zero
// for exactly these. True may be said needlessly: it only costs time.

func evalNeg(dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := -a[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalAdd(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := a[i] + b[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad && keepInf(dst, a, b)
}

func evalSub(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := a[i] - b[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad && keepInf(dst, a, b)
}

func evalMul(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := a[i] * b[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad && keepInf(dst, a, b)
}

// keepInf makes every NaN that came from infinities an infinity. It returns
// true, for use in a condition.
func keepInf(dst, a, b []float64) bool {
	for i, v := range dst {
		if v != v && a[i] == a[i] && b[i] == b[i] {
			dst[i] = math.Inf(1)
		}
	}
	return true
}

func (e *Evaluator) evalDiv(in *instr, dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := a[i] / b[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	if !bad {
		return false
	}
	for i, v := range dst {
		switch {
		case v-v == 0 || a[i] != a[i] || b[i] != b[i]:
		case b[i] == 0:
			dst[i] = math.NaN()
			e.event(in, i)
		case v != v:
			dst[i] = math.Inf(1)
		}
	}
	return true
}

func (e *Evaluator) evalLog(in *instr, dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		x := a[i]
		v := math.Log(x)
		if x <= 0 {
			v = math.NaN()
			e.event(in, i)
		}
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func (e *Evaluator) evalSqrt(in *instr, dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		x := a[i]
		v := math.Sqrt(x)
		if x < 0 {
			e.event(in, i)
		}
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalExp(dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := math.Exp(a[i])
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalAbs(dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := math.Abs(a[i])
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalMin(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := min(a[i], b[i])
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalMax(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := max(a[i], b[i])
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func evalHinge(dst, a, b []float64) (bad bool) {
	bad = evalSub(dst, a, b)
	for i, v := range dst {
		dst[i] = max(v, 0)
	}
	return bad
}

func evalSquare(dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := a[i] * a[i]
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func (e *Evaluator) evalPow(in *instr, dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		x, y := a[i], b[i]
		v := math.NaN() // also where math.Pow(NaN, 0) and math.Pow(1, NaN) are 1
		if x == x && y == y {
			v = math.Pow(x, y)
			if v != v || x == 0 && math.IsInf(v, 0) && y-y == 0 {
				v = math.NaN()
				e.event(in, i)
			}
		}
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

func (e *Evaluator) evalPowInt(in *instr, dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := powInt(a[i], in.ns)
		if a[i] == 0 && in.ns < 0 {
			v = math.NaN()
			e.event(in, i)
		}
		dst[i] = v
		if v-v != 0 {
			bad = true
		}
	}
	return bad
}

// maxPowInt bounds the whole exponents that powInt serves.
const maxPowInt = 64

// powInt returns x to the power n, n not 0, by repeated squaring of a pair
// h + l in twice the working precision (products split exactly by fused
// multiply-add), so that the result is almost always the correctly rounded one;
// math.Pow loses up to a few units in the last place to its plain products.
func powInt(x float64, n int64) float64 {
	h, l := powPair(x, 0, n)
	if v := h + l; v-v == 0 && math.Abs(v) > 1e-290 && math.Abs(v) < 1e290 {
		return v
	}
	// Near the ends of the range, and for what is missing or infinite, the
	// error terms underflow or overflow.
	return math.Pow(x, float64(n))
}

// mulPair returns (a + b)(c + d) as a normalised pair.
func mulPair(a, b, c, d float64) (h, l float64) {
	h = a * c
	l = math.FMA(a, c, -h) + (float64(a*d) + float64(b*c))
	s := h + l
	return s, l - (s - h)
}

func evalNot(dst, a []float64) (bad bool) {
	a = a[:len(dst)]
	for i := range dst {
		v := 1 - a[i]
		dst[i] = v
		if v != v {
			bad = true
		}
	}
	return bad
}

// evalAnd is three-valued: false beats missing.
func evalAnd(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := a[i] * b[i] // NaN if either is missing
		if a[i] == 0 || b[i] == 0 {
			v = 0
		}
		dst[i] = v
		if v != v {
			bad = true
		}
	}
	return bad
}

// evalOr is three-valued: true beats missing.
func evalOr(dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		v := max(a[i], b[i]) // NaN if either is missing
		if a[i] == 1 || b[i] == 1 {
			v = 1
		}
		dst[i] = v
		if v != v {
			bad = true
		}
	}
	return bad
}

func evalCompare(o op, dst, a, b []float64) (bad bool) {
	a, b = a[:len(dst)], b[:len(dst)]
	switch o {
	case opLess:
		for i := range dst {
			dst[i] = truth(a[i] < b[i])
		}
	case opLessEqual:
		for i := range dst {
			dst[i] = truth(a[i] <= b[i])
		}
	case opGreater:
		for i := range dst {
			dst[i] = truth(a[i] > b[i])
		}
	case opGreaterEqual:
		for i := range dst {
			dst[i] = truth(a[i] >= b[i])
		}
	case opEqual:
		for i := range dst {
			dst[i] = truth(a[i] == b[i])
		}
	case opNotEqual:
		for i := range dst {
			dst[i] = truth(a[i] != b[i])
		}
	}
	for i := range dst {
		if a[i] != a[i] || b[i] != b[i] {
			dst[i], bad = math.NaN(), true
		}
	}
	return bad
}

func truth(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

// truthOf is the result of a comparison whose sides compare as c: negative,
// zero, positive.
func truthOf(o op, c int) float64 {
	switch o {
	case opLess:
		return truth(c < 0)
	case opLessEqual:
		return truth(c <= 0)
	case opGreater:
		return truth(c > 0)
	case opGreaterEqual:
		return truth(c >= 0)
	case opEqual:
		return truth(c == 0)
	}
	return truth(c != 0)
}

// anyBad reports whether v holds a NaN or an infinity, or numbers so large that
// the sum of eight overflows.
func anyBad(v []float64) bool {
	for ; len(v) >= 8; v = v[8:] {
		s := ((v[0] + v[1]) + (v[2] + v[3])) + ((v[4] + v[5]) + (v[6] + v[7]))
		if s-s != 0 {
			return true
		}
	}
	for _, x := range v {
		if x-x != 0 {
			return true
		}
	}
	return false
}
