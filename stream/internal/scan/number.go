package scan

import (
	"bytes"
	"math"
	"strconv"
)

// The powers of ten that float64 holds exactly.
var pow10 = [...]float64{
	1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
	1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
}

// Float reads the decimal number at b[i:] and returns it, correctly rounded,
// with the index after its last byte. An end of -1 means that the number is not
// of a simple shape (a sign other than minus, more than 19 digits, a large
// exponent, a value beyond float64, no number at all): ParseFloat must then
// look at the whole cell. The byte after the number is for the caller to judge.
// The last byte of b must not be part of a number.
//
// A mantissa below 2^53 times or over a power of ten up to 10^22 is one rounding
// of exact operands (Clinger, How to read floating point numbers accurately,
// 1990, doi:10.1145/93542.93557); the rest goes to strconv.ParseFloat.
func Float(b []byte, i int, point byte) (v float64, end int) {
	s := i
	neg := b[i] == '-'
	if neg {
		i++
	}
	first := i
	var m uint64
	for {
		d := b[i] - '0'
		if d > 9 {
			break
		}
		m = m*10 + uint64(d)
		i++
	}
	digits := i - first
	exp := 0
	if b[i] == point {
		i++
		f := i
		for {
			d := b[i] - '0'
			if d > 9 {
				break
			}
			m = m*10 + uint64(d)
			i++
		}
		exp = f - i
		digits -= exp
	}
	if digits == 0 || digits > 19 {
		return 0, -1
	}
	if b[i]|0x20 == 'e' {
		i++
		eneg := b[i] == '-'
		if eneg || b[i] == '+' {
			i++
		}
		f, e := i, 0
		for {
			d := b[i] - '0'
			if d > 9 {
				break
			}
			if e < 10000 {
				e = e*10 + int(d)
			}
			i++
		}
		if i == f {
			return 0, -1
		}
		if eneg {
			e = -e
		}
		exp += e
	}
	if m < 1<<53 {
		v = float64(m)
		switch {
		case exp == 0 || m == 0:
		case exp < 0 && exp >= -22:
			v /= pow10[-exp]
		case exp > 0 && exp <= 22:
			v *= pow10[exp]
		default:
			return fallback(b[s:i], point, i)
		}
		if neg {
			v = -v
		}
		return v, i
	}
	return fallback(b[s:i], point, i)
}

func fallback(cell []byte, point byte, end int) (float64, int) {
	v, err := parse(cell, point)
	if err != nil {
		return 0, -1
	}
	return v, end
}

// parse hands a cell of the right grammar to strconv.
func parse(cell []byte, point byte) (float64, error) {
	if point == '.' {
		return strconv.ParseFloat(string(cell), 64)
	}
	var room [64]byte
	c := append(room[:0], cell...)
	if k := bytes.IndexByte(c, point); k >= 0 {
		c[k] = '.'
	}
	return strconv.ParseFloat(string(c), 64)
}

// Status is what became of a cell.
type Status uint8

// The outcomes of ParseFloat, ParseInt and ParseUint.
const (
	OK     Status = iota
	Syntax        // not a number
	Range         // a number beyond the type
	Zeros         // an integer with leading zeros
)

// ParseFloat reads a whole cell as a number: an optional sign, digits with at
// most one point among or beside them, an optional exponent; or inf, infinity,
// nan in any case. The result is correctly rounded; what rounds to zero is zero,
// what rounds beyond the largest float64 is Range.
func ParseFloat(cell []byte, point byte) (float64, Status) {
	i := 0
	if i < len(cell) && (cell[i] == '-' || cell[i] == '+') {
		i++
	}
	body := cell[i:]
	n := 0
	for i < len(cell) && cell[i]-'0' <= 9 {
		i++
		n++
	}
	if i < len(cell) && cell[i] == point {
		for i++; i < len(cell) && cell[i]-'0' <= 9; i++ {
			n++
		}
	}
	if n == 0 {
		return special(body, len(cell) > 0 && cell[0] == '-')
	}
	if i < len(cell) && cell[i]|0x20 == 'e' {
		i++
		if i < len(cell) && (cell[i] == '-' || cell[i] == '+') {
			i++
		}
		f := i
		for i < len(cell) && cell[i]-'0' <= 9 {
			i++
		}
		if i == f {
			return 0, Syntax
		}
	}
	if i != len(cell) {
		return 0, Syntax
	}
	v, err := parse(cell, point)
	if err != nil {
		return 0, Range
	}
	return v, OK
}

func special(body []byte, neg bool) (float64, Status) {
	switch {
	case fold(body, "nan"):
		return math.NaN(), OK
	case fold(body, "inf"), fold(body, "infinity"):
		if neg {
			return math.Inf(-1), OK
		}
		return math.Inf(1), OK
	}
	return 0, Syntax
}

// fold reports whether b is the lower-case ASCII word in any case.
func fold(b []byte, word string) bool {
	if len(b) != len(word) {
		return false
	}
	for i, c := range b {
		if c|0x20 != word[i] {
			return false
		}
	}
	return true
}

// Int reads the integer of at most 18 digits, without plus sign and leading
// zeros, at b[i:] and returns it with the index after its last digit; -1 means
// that ParseInt or ParseUint must look at the whole cell. The last byte of b
// must not be a digit.
func Int(b []byte, i int) (v int64, end int) {
	neg := b[i] == '-'
	if neg {
		i++
	}
	first := i
	for {
		d := b[i] - '0'
		if d > 9 {
			break
		}
		v = v*10 + int64(d)
		i++
	}
	n := i - first
	if n == 0 || n > 18 || (n > 1 && b[first] == '0') {
		return 0, -1
	}
	if neg {
		v = -v
	}
	return v, i
}

// digits checks an optional sign followed by digits only and returns them.
func digits(cell []byte) (body []byte, s Status) {
	body = cell
	if len(body) > 0 && (body[0] == '-' || body[0] == '+') {
		body = body[1:]
	}
	if len(body) == 0 {
		return nil, Syntax
	}
	for _, c := range body {
		if c-'0' > 9 {
			return nil, Syntax
		}
	}
	if body[0] == '0' && len(body) > 1 {
		return nil, Zeros
	}
	return body, OK
}

// ParseInt reads a whole cell as an int64.
func ParseInt(cell []byte) (int64, Status) {
	if _, s := digits(cell); s != OK {
		return 0, s
	}
	v, err := strconv.ParseInt(string(cell), 10, 64)
	if err != nil {
		return 0, Range
	}
	return v, OK
}

// ParseUint reads a whole cell as a uint64.
func ParseUint(cell []byte) (uint64, Status) {
	body, s := digits(cell)
	if s != OK {
		return 0, s
	}
	v, err := strconv.ParseUint(string(body), 10, 64)
	if err != nil || (cell[0] == '-' && v != 0) {
		return 0, Range
	}
	return v, OK
}
