package scan

import (
	"math"
	"math/big"
	"math/bits"
)

// The powers of ten that float64 holds exactly.
var pow10 = [...]float64{
	1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
	1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
}

// Beyond these powers of ten any mantissa below 2^64 is zero or infinite.
const (
	minPower = -342
	maxPower = 308
)

// power is a power of five, scaled to 2^127 <= p < 2^128 and rounded down; up if
// it is one over a power below 2^64, so that products with it that should be
// whole do not fall short.
type power struct{ hi, lo uint64 }

// powers holds 5^minPower to 5^maxPower.
var powers = func() (t [maxPower - minPower + 1]power) {
	put := func(e int, p *big.Int) {
		var b [16]byte
		p.FillBytes(b[:])
		for _, c := range b[:8] {
			t[e-minPower].hi = t[e-minPower].hi<<8 | uint64(c)
		}
		for _, c := range b[8:] {
			t[e-minPower].lo = t[e-minPower].lo<<8 | uint64(c)
		}
	}
	five, one := big.NewInt(5), big.NewInt(1)
	p := big.NewInt(1)
	var q big.Int
	for e := 0; e <= -minPower; e++ {
		n := uint(p.BitLen())
		if e <= maxPower {
			if q.Set(p); n > 128 {
				q.Rsh(&q, n-128)
			} else {
				q.Lsh(&q, 128-n)
			}
			put(e, &q)
		}
		if e > 0 {
			// 2^(n+127) / 5^e lies between 2^127 and 2^128.
			q.Quo(q.Lsh(one, n+127), p)
			if n <= 64 {
				q.Add(&q, one)
			}
			put(-e, &q)
		}
		p.Mul(p, five)
	}
	return t
}()

// round returns the double nearest to m * 10^e, ties to even; infinity beyond
// the largest.
//
// A mantissa below 2^53 times or over a power of ten up to 10^22 is one rounding
// of exact operands (Clinger, How to read floating point numbers accurately,
// 1990, doi:10.1145/93542.93557).
func round(m uint64, e int) float64 {
	if m < 1<<53 {
		v := float64(int64(m))
		switch {
		case e == 0:
			return v
		case e < 0 && e >= -22:
			return v / pow10[-e]
		case e > 0 && e <= 22:
			return v * pow10[e]
		}
	}
	return lemire(m, e)
}

// lemire returns what round does. The mantissa is multiplied by the first 64 or
// 128 bits of the power, which is always enough (Lemire, Number parsing at a
// gigabyte per second, 2021, doi:10.1002/spe.2984; that 128 bits decide in all
// cases: Mushtak and Lemire, Fast number parsing without fallback, 2023,
// doi:10.1002/spe.3198).
func lemire(m uint64, e int) float64 {
	if m == 0 || e < minPower {
		return 0
	}
	if e > maxPower {
		return math.Inf(1)
	}
	lz := bits.LeadingZeros64(m)
	m <<= lz
	p := powers[e-minPower]
	hi, lo := bits.Mul64(m, p.hi)
	// The 55 bits from the top are right unless the others are all ones.
	if hi&0x1ff == 0x1ff {
		h2, _ := bits.Mul64(m, p.lo)
		var carry uint64
		lo, carry = bits.Add64(lo, h2, 0)
		hi += carry
	}
	top := int(hi >> 63)
	shift := top + 9
	mant := hi >> shift // 54 bits: one more than the result has
	// The exponent of two, biased: floor(e log2(10)) by a rational.
	exp := (217706*e)>>16 + 63 + top - lz + 1023
	if exp <= 0 { // subnormal
		if exp <= -63 {
			return 0
		}
		mant >>= 1 - exp
		mant += mant & 1
		mant >>= 1
		// Rounding up to 2^52 makes the exponent 1, as the bits stand.
		return math.Float64frombits(mant)
	}
	// Halfway between two doubles, to the last bit, can be only what has a small
	// power: it goes down to the even one.
	if lo <= 1 && e >= -4 && e <= 23 && mant&3 == 1 && mant<<shift == hi {
		mant &^= 1
	}
	mant += mant & 1
	mant >>= 1
	if mant >= 1<<53 {
		mant >>= 1
		exp++
	}
	if exp >= 0x7ff {
		return math.Inf(1)
	}
	return math.Float64frombits(mant&^(1<<52) | uint64(exp)<<52)
}
