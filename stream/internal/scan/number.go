package scan

import (
	"bytes"
	"math"
	"math/bits"
	"strconv"
)

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
	neg := false
	if len(cell) > 0 && (cell[0] == '-' || cell[0] == '+') {
		neg = cell[0] == '-'
		i = 1
	}
	first := i
	m, i := digits(cell, i, 0)
	n := i - first // digits
	exp := 0
	if i < len(cell) && cell[i] == point {
		f := i + 1
		m, i = digits(cell, f, m)
		exp = f - i
		n -= exp
	}
	if n == 0 {
		return special(cell[first:], neg)
	}
	last := i
	if i < len(cell) {
		if cell[i]|0x20 != 'e' {
			return 0, Syntax
		}
		i++
		eneg := false
		if i < len(cell) && (cell[i] == '-' || cell[i] == '+') {
			eneg = cell[i] == '-'
			i++
		}
		f, e := i, 0
		for ; i < len(cell) && cell[i]-'0' <= 9; i++ {
			if e < 1<<30 {
				e = e*10 + int(cell[i]-'0')
			}
		}
		if i == f || i < len(cell) {
			return 0, Syntax
		}
		if eneg {
			e = -e
		}
		exp += e
	}
	v := 0.0
	if n > 19 && significant(cell[first:last], point) > 19 {
		var ok bool
		if v, ok = long(cell[first:last], point, exp); !ok {
			return parse(cell, point)
		}
	} else {
		v = round(m, exp)
	}
	if math.IsInf(v, 0) {
		return 0, Range
	}
	if neg {
		v = -v
	}
	return v, OK
}

// digits appends the digits at cell[i:] to the decimal number m, eight at a time
// while there are so many, and returns the index after them. Beyond 19 digits
// that are not leading zeros the number is modulo 2^64.
func digits(cell []byte, i int, m uint64) (uint64, int) {
	for i+8 <= len(cell) {
		x := load(cell, i) ^ zeros
		if other(x) != 0 {
			break
		}
		m = m*1e8 + eight(x)
		i += 8
	}
	for i < len(cell) {
		d := cell[i] - '0'
		if d > 9 {
			break
		}
		m = m*10 + uint64(d)
		i++
	}
	return m, i
}

// significant counts the digits after leading zeros.
func significant(mantissa []byte, point byte) int {
	n := 0
	for _, c := range mantissa {
		if c != point && (n > 0 || c != '0') {
			n++
		}
	}
	return n
}

// long rounds a mantissa of more than 19 digits, the last of which counts
// 10^exp. It is not ok if the first 19 digits do not decide.
func long(mantissa []byte, point byte, exp int) (v float64, ok bool) {
	var m uint64
	n := 0
	for _, c := range mantissa {
		switch {
		case c == point || n == 0 && c == '0':
		case n < 19:
			m = m*10 + uint64(c-'0')
			n++
		default:
			exp++
		}
	}
	v = round(m, exp)
	return v, v == round(m+1, exp)
}

// parse hands a cell of the right grammar to strconv.
func parse(cell []byte, point byte) (float64, Status) {
	c := string(cell)
	if point != '.' {
		c = string(bytes.Replace(cell, []byte{point}, []byte{'.'}, 1))
	}
	v, err := strconv.ParseFloat(c, 64)
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

// whole checks an optional sign followed by digits only and returns them.
func whole(cell []byte) (body []byte, s Status) {
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
	if _, s := whole(cell); s != OK {
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
	body, s := whole(cell)
	if s != OK {
		return 0, s
	}
	v, err := strconv.ParseUint(string(body), 10, 64)
	if err != nil || (cell[0] == '-' && v != 0) {
		return 0, Range
	}
	return v, OK
}

const zeros = ones * '0'

// other marks with 0x80 the bytes that are no digits, of eight characters from
// which zeros was taken by exclusive or.
func other(x uint64) uint64 { return (x&lows + ones*(0x80-10) | x) & highs }

// eight returns the number that eight digits make, the first in the lowest byte.
func eight(x uint64) uint64 {
	x = x*10 + x>>8
	return (x&0x000000ff000000ff*(100+1000000<<32) + x>>16&0x000000ff000000ff*(1+10000<<32)) >> 32
}

// A Column is one of the columns that an Index has cut: its cell in row r lies
// after Ends[r*Stride] and ends before Ends[r*Stride+1].
type Column struct {
	Text   []byte // with Pad bytes more in its array
	Ends   []int32
	Stride int
	// Last is true if a newline ends the cells, perhaps behind a carriage return.
	Last bool
}

// Cell returns where the cell in row r lies.
func (c *Column) Cell(r int) (start, end int) {
	e := c.Ends[r*c.Stride : r*c.Stride+2]
	start, end = int(e[0])+1, int(e[1])
	if c.Last && end > start && c.Text[end-1] == '\r' {
		end--
	}
	return start, end
}

// Floats reads the cells of rows r, r+1, ... up to len(out) as ParseFloat does,
// and NaN for an empty one. It returns the row of the first cell that is no
// number, or len(out).
func (c *Column) Floats(r int, out []float64, point byte) int {
	text := c.Text[:len(c.Text)+Pad]
	pt := uint64(point ^ '0')
	for ; r < len(out); r++ {
		start, end := c.Cell(r)
		var neg int
		if text[start] == '-' {
			neg = 1
		}
		i := start + neg
		var m uint64
		var frac int // digits after the point
		switch n := end - i; {
		case uint(n-1) < 8:
			x := (load(text, i) ^ zeros) << (uint(64-8*n) & 63)
			o := other(x)
			if o == 0 {
				out[r] = sign(float64(int64(eight(x))), neg)
				continue
			}
			k := bits.TrailingZeros64(o) &^ 7
			if o&(o-1) != 0 || x>>k&0xff != pt || n == 1 {
				break
			}
			x = x&^(o<<1-1) | x&(o>>7-1)<<8
			out[r] = sign(float64(int64(eight(x)))/pow10[7-k>>3], neg)
			continue
		case uint(n-9) < 8:
			x, y := (load(text, i)^zeros)<<(uint(128-8*n)&63), load(text, end-8)^zeros
			o, p := other(x), other(y)
			switch {
			case o|p == 0:
			case p == 0:
				k := bits.TrailingZeros64(o) &^ 7
				if o&(o-1) != 0 || x>>k&0xff != pt {
					goto slow
				}
				frac = 15 - k>>3
				x = x&^(o<<1-1) | x&(o>>7-1)<<8
			case o == 0:
				k := bits.TrailingZeros64(p) &^ 7
				if p&(p-1) != 0 || y>>k&0xff != pt {
					goto slow
				}
				frac = 7 - k>>3
				y = y&^(p<<1-1) | y&(p>>7-1)<<8 | x>>56
				x <<= 8
			default:
				goto slow
			}
			m = eight(x)*1e8 + eight(y)
			if m < 1<<53 {
				out[r] = sign(float64(int64(m))/pow10[frac], neg)
				continue
			}
			out[r] = sign(round(m, -frac), neg)
			continue
		case n == 0 && neg == 0:
			out[r] = math.NaN()
			continue
		}
	slow:
		v, s := ParseFloat(text[start:end], point)
		if s != OK {
			return r
		}
		out[r] = v
	}
	return r
}

func sign(v float64, neg int) float64 {
	return math.Float64frombits(math.Float64bits(v) | uint64(neg)<<63)
}

// Ints reads the cells of rows r, r+1, ... up to len(out) as ParseInt does. It
// returns the row of the first cell that is not of at most 16 digits without
// plus sign and leading zeros, or len(out).
func (c *Column) Ints(r int, out []int64) int {
	text := c.Text[:len(c.Text)+Pad]
	for ; r < len(out); r++ {
		i, end := c.Cell(r)
		var neg int64
		if text[i] == '-' {
			neg = 1
		}
		i += int(neg)
		n := end - i
		var v int64
		switch {
		case n > 1 && text[i] == '0':
			return r
		case uint(n-1) < 8:
			x := (load(text, i) ^ zeros) << (uint(64-8*n) & 63)
			if other(x) != 0 {
				return r
			}
			v = int64(eight(x))
		case uint(n-9) < 8:
			x, y := (load(text, i)^zeros)<<(uint(128-8*n)&63), load(text, end-8)^zeros
			if other(x)|other(y) != 0 {
				return r
			}
			v = int64(eight(x)*1e8 + eight(y))
		default:
			return r
		}
		out[r] = v ^ -neg + neg
	}
	return r
}
