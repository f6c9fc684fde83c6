package accum

import (
	"math"
	"math/bits"
)

const (
	superDigits  = 67
	superMaxAdds = 2047
)

// superSum is an exact sum of float64 values: a fixed-point number wide enough
// for the whole range, after Kulisch and Miranker (1986) in the form of Neal
// (Fast exact summation using small and large superaccumulators, 2015,
// arXiv:1505.05571). The value of digit i is digit[i] 2^(32 i - 1074). Digits
// overlap: each carries up to 63 bits, and carries are moved up only once in
// 2047 additions, before a digit can overflow. So the order of additions and the
// shape of merges never show in the result.
//
// The zero value is an empty sum. 2^63 values of any size fit.
type superSum struct {
	digit [superDigits]int64
	// adds bounds every digit but the last: |digit| < 2^32 + adds 2^52.
	adds int32
	// special remembers values that are not finite, by the bits below.
	special uint8
}

const (
	seenNaN uint8 = 1 << iota
	seenPosInf
	seenNegInf
)

// add adds x.
func (s *superSum) add(x float64) {
	if s.adds == superMaxAdds {
		s.carry()
	}
	s.adds++
	s.put(x)
}

// addAll adds every element of xs.
func (s *superSum) addAll(xs []float64) {
	for len(xs) > 0 {
		if s.adds == superMaxAdds {
			s.carry()
		}
		n := min(len(xs), superMaxAdds-int(s.adds))
		for _, x := range xs[:n] {
			s.put(x)
		}
		s.adds += int32(n)
		xs = xs[n:]
	}
}

func (s *superSum) put(x float64) {
	b := math.Float64bits(x)
	e := uint(b>>52) & 0x7ff
	m := b & (1<<52 - 1)
	switch e {
	case 0x7ff:
		switch {
		case m != 0:
			s.special |= seenNaN
		case b>>63 == 0:
			s.special |= seenPosInf
		default:
			s.special |= seenNegInf
		}
		return
	case 0:
		e = 1
	default:
		m |= 1 << 52
	}
	// x = +-m 2^(e-1075): m starts at bit e-1 of the digits.
	i, shift := (e-1)>>5, (e-1)&31
	low := int64(m << shift & (1<<32 - 1))
	high := int64(m >> (32 - shift))
	neg := int64(b) >> 63
	d := s.digit[i : i+2 : i+2]
	d[0] += (low ^ neg) - neg
	d[1] += (high ^ neg) - neg
}

// carry brings every digit but the last into [0, 2^32); the last keeps the sign.
func (s *superSum) carry() {
	var c int64
	for i := range superDigits - 1 {
		c += s.digit[i]
		s.digit[i] = c & (1<<32 - 1)
		c >>= 32
	}
	s.digit[superDigits-1] += c
	s.adds = 0
}

// merge adds the sum o, which stays as it is.
func (s *superSum) merge(o *superSum) {
	if s.adds+o.adds >= superMaxAdds {
		s.carry()
		if o.adds == superMaxAdds {
			t := *o
			t.carry()
			o = &t
		}
	}
	for i := range s.digit {
		s.digit[i] += o.digit[i]
	}
	s.adds += o.adds + 1
	s.special |= o.special
}

// value returns the sum rounded once, to nearest, ties to even. It is ±Inf when
// the sum is beyond float64 by that rounding, NaN when a NaN or infinities of
// both signs were added, ±Inf when infinities of one sign were. An exact zero is
// +0. value does not change the sum.
func (s *superSum) value() float64 {
	switch {
	case s.special&seenNaN != 0 || s.special == seenPosInf|seenNegInf:
		return math.NaN()
	case s.special == seenPosInf:
		return math.Inf(1)
	case s.special == seenNegInf:
		return math.Inf(-1)
	}
	t, neg := s.magnitude()
	top := superDigits - 1
	for top > 0 && t.digit[top] == 0 {
		top--
	}
	// The last digit may hold 63 bits, so three digits need up to 127.
	first := max(0, top-2)
	var hi, lo uint64
	for i := top; i >= first; i-- {
		hi, lo = hi<<32|lo>>32, lo<<32
		var c uint64
		lo, c = bits.Add64(lo, uint64(t.digit[i]), 0)
		hi += c
	}
	var rest int64
	for _, d := range t.digit[:first] {
		rest |= d
	}
	return roundBits(neg, hi, lo, rest != 0, 32*first-1074)
}

// magnitude returns |s| with digits carried, and whether s is negative.
func (s *superSum) magnitude() (t superSum, neg bool) {
	t = *s
	t.carry()
	if neg = t.digit[superDigits-1] < 0; neg {
		for i := range t.digit {
			t.digit[i] = -t.digit[i]
		}
		t.carry()
	}
	return t, neg
}

// roundBits returns ±(hi:lo + r) 2^exp rounded to nearest, ties to even, where r
// is in (0, 1) if rest, else 0. With rest, hi:lo must have 55 bits or more.
func roundBits(neg bool, hi, lo uint64, rest bool, exp int) float64 {
	n := bits.Len64(lo)
	if hi != 0 {
		n = 64 + bits.Len64(hi)
	}
	// The bits below 2^(exp+drop) are rounded off: all beyond 53, or more of them
	// where the result has no 53 bits because it is subnormal.
	drop := max(n-53, -1074-exp)
	var m uint64
	switch {
	case drop <= 0:
		m = lo << -drop
	case drop <= 128:
		d := uint(drop)
		m = hi<<(64-d) | lo>>d
		half := lo >> (d - 1) & 1
		below := lo << (64 - (d - 1))
		if d > 64 {
			m = hi >> (d - 64)
			half = hi >> (d - 65) & 1
			below = hi<<(64-(d-65)) | lo
		}
		if half != 0 && (below != 0 || rest || m&1 != 0) {
			m++
		}
	}
	e := exp + drop + 1074
	b := uint64(0x7ff) << 52
	if e < 0x7ff {
		// m has its leading bit at 52 (or e is 0), which counts e up by one.
		b = min(b, uint64(e)<<52+m)
	}
	if m == 0 {
		b = 0
	} else if neg {
		b |= 1 << 63
	}
	return math.Float64frombits(b)
}

// superVec is a vector of exact sums.
type superVec []superSum

// addVec adds xs element by element. The lengths must be equal.
func (v superVec) addVec(xs []float64) {
	if len(xs) != len(v) {
		panic(badVecLen)
	}
	for i, x := range xs {
		v[i].add(x)
	}
}

// merge adds the sums of o, which stays as it is. The lengths must be equal.
func (v superVec) merge(o superVec) {
	if len(o) != len(v) {
		panic(badVecLen)
	}
	for i := range v {
		v[i].merge(&o[i])
	}
}

// values sets dst to the rounded sums. The lengths must be equal.
func (v superVec) values(dst []float64) {
	if len(dst) != len(v) {
		panic(badVecLen)
	}
	for i := range v {
		dst[i] = v[i].value()
	}
}

const badVecLen = "accum: vectors of different lengths"
