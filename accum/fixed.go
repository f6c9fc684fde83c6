package accum

import (
	"math"
	"math/bits"
)

// fixed is a 128-bit two's complement number hi:lo in units of 2^unit; the unit
// is the caller's and common to all numbers that meet. A value enters by one
// rounding and sums are exact, so neither order nor grouping shows in them.
//
// Sums wrap around beyond ±2^127. The caller keeps that from happening unseen by
// a bound that does not depend on order: number of values times largest
// magnitude below 2^(127+unit).
type fixed struct {
	hi int64
	lo uint64
}

// toFixed returns x/2^unit rounded to the nearest integer, ties away from zero.
// It reports false, with a zero, if x is not finite or |x|/2^unit >= 2^126.
// The unit must be within ±2^30.
func toFixed(x float64, unit int) (fixed, bool) {
	b := math.Float64bits(x)
	e := int(b >> 52 & 0x7ff)
	m := b & (1<<52 - 1)
	if uint(e-1) < 0x7fe {
		m |= 1 << 52
	} else if e == 0 {
		e = 1
	} else {
		return fixed{}, false
	}
	var hi, lo uint64
	switch s := e - 1075 - unit; { // x = ±m 2^(s+unit)
	case s < 0:
		if s >= -54 {
			lo = (m + 1<<(^s&63)) >> (-s & 63)
		}
	case s < 64:
		hi, lo = m>>1>>(63-s&63), m<<(s&63)
	case bits.Len64(m)+s > 126 && m != 0:
		return fixed{}, false
	case s < 128:
		hi = m << (s - 64)
	}
	neg := uint64(int64(b) >> 63)
	lo, borrow := bits.Sub64(lo^neg, neg, 0)
	hi, _ = bits.Sub64(hi^neg, neg, borrow)
	return fixed{int64(hi), lo}, true
}

// add returns f + o, modulo 2^128.
func (f fixed) add(o fixed) fixed {
	lo, c := bits.Add64(f.lo, o.lo, 0)
	hi, _ := bits.Add64(uint64(f.hi), uint64(o.hi), c)
	return fixed{int64(hi), lo}
}

// float returns f 2^unit rounded to nearest, ties to even; ±Inf beyond float64.
func (f fixed) float(unit int) float64 {
	hi, lo := uint64(f.hi), f.lo
	neg := f.hi < 0
	if neg {
		var borrow uint64
		lo, borrow = bits.Sub64(0, lo, 0)
		hi, _ = bits.Sub64(0, hi, borrow)
	}
	return roundBits(neg, hi, lo, false, unit)
}

// addFixed adds xs to dst element by element, each rounded once by toFixed. It
// reports false if one of them does not fit; such elements are left out, and dst
// is of no more use. The lengths must be equal.
func addFixed(dst []fixed, xs []float64, unit int) bool {
	if len(xs) != len(dst) {
		panic(badVecLen)
	}
	good := true
	for i, x := range xs {
		b := math.Float64bits(x)
		e := int(b >> 52 & 0x7ff)
		s := e - 1075 - unit
		d := &dst[i]
		if uint(e-1) < 0x7fe && uint(s) < 64 {
			// The usual case of toFixed: x is a whole number of units.
			m := b&(1<<52-1) | 1<<52
			neg := uint64(int64(b) >> 63)
			lo, borrow := bits.Sub64(m<<(s&63)^neg, neg, 0)
			hi, _ := bits.Sub64(m>>1>>(63-s&63)^neg, neg, borrow)
			var c uint64
			d.lo, c = bits.Add64(d.lo, lo, 0)
			d.hi += int64(hi + c)
			continue
		}
		f, ok := toFixed(x, unit)
		good = good && ok
		*d = d.add(f)
	}
	return good
}

// mergeFixed adds src to dst element by element. The lengths must be equal.
func mergeFixed(dst, src []fixed) {
	if len(src) != len(dst) {
		panic(badVecLen)
	}
	for i, f := range src {
		dst[i] = dst[i].add(f)
	}
}
