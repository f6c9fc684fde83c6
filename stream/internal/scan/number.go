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

// Floats reads the cells of rows r, r+1, ... below len(out) as ParseFloat does,
// and NaN for an empty one. Quotes around a cell are passed over. It returns the
// row of the first cell that is no number, or len(out).
func (c *Column) Floats(r int, out []float64, point byte) int {
	text, ends, stride, last := c.Text[:len(c.Text)+Pad], c.Ends[r*c.Stride:], c.Stride, c.Last
	pt := uint64(point ^ '0')
	for k, j := 0, r; j < len(out); k, j = k+stride, j+1 {
		e := ends[k : k+2]
		start, end := int(e[0])+1, int(e[1])
		if last && end > start && text[end-1] == '\r' {
			end--
		}
		var neg int
		if text[start] == '-' {
			neg = 1
		}
		i := start + neg
		n := end - i
		if uint(n-1) < 8 {
			// The digits are at the high end of a word.
			x := (load(text, i) ^ zeros) << (uint(64-8*n) & 63)
			o := other(x)
			if o == 0 {
				out[j] = sign(float64(int64(eight(x))), neg)
				continue
			}
			k := bits.TrailingZeros64(o) &^ 7
			if o&(o-1) == 0 && x>>(k&63)&0xff == pt && n > 1 {
				out[j] = sign(float64(int64(eight(closeUp(x, o))))/pow10[7-k>>3], neg)
				continue
			}
		}
		v, ok := float(text, start, end, point)
		if !ok {
			return j
		}
		out[j] = v
	}
	return len(out)
}

// float reads the cell from start to end as Floats does.
func float(text []byte, start, end int, point byte) (v float64, ok bool) {
	if start == end {
		return math.NaN(), true
	}
	if text[start] == '"' && end-start > 2 {
		start, end = start+1, end-1
	}
	var neg int
	if text[start] == '-' {
		neg = 1
	}
	i := start + neg
	n := end - i
	if uint(n-1) >= 24 {
		return general(text[start:end], point)
	}
	// The digits are at the high end of three words, the point is in one of
	// them. Nobody can foresee in which: no branches.
	var x, y uint64
	z := load(text, i) ^ zeros
	switch {
	case n <= 8:
		z <<= uint(64-8*n) & 63
	case n <= 16:
		y, z = z<<(uint(128-8*n)&63), load(text, end-8)^zeros
	default:
		x, y, z = z<<(uint(192-8*n)&63), load(text, end-16)^zeros, load(text, end-8)^zeros
	}
	o, p, q := other(x), other(y), other(z)
	at := 23
	if o|p|q != 0 {
		if w := closeUp(z, q) | y>>56; q != 0 {
			z = w
		}
		if w := closeUp(y, p) | x>>56; p|q != 0 {
			y = w
		}
		x = closeUp(x, o)
		at = bits.TrailingZeros64(o|p|q) >> 3
		if p != 0 {
			at += 8
		}
		if q != 0 {
			at += 16
		}
		if o&(o-1)|p&(p-1)|q&(q-1) != 0 || o != 0 && p|q != 0 || p != 0 && q != 0 || text[end-24+at] != point || n == 1 {
			return general(text[start:end], point)
		}
	}
	high := eight(x)
	if high >= 1800 { // beyond 64 bits
		return general(text[start:end], point)
	}
	m := (high*1e8+eight(y))*1e8 + eight(z)
	if n <= 16 && m < 1<<53 {
		return sign(float64(int64(m))/pow10[23-at], neg), true
	}
	return sign(lemire(m, at-23), neg), true
}

// general reads what is not a sign, at most 24 characters and a point.
func general(cell []byte, point byte) (float64, bool) {
	v, s := ParseFloat(cell, point)
	return v, s == OK
}

// closeUp takes out the character that o marks: what stands before it moves up.
func closeUp(x, o uint64) uint64 { return x&^(o<<1-1) | x&(o>>7-1)<<8 }

func sign(v float64, neg int) float64 {
	return math.Float64frombits(math.Float64bits(v) | uint64(neg)<<63)
}

// Ints reads the cells of rows r, r+1, ... below len(out) as ParseInt does. It
// returns the row of the first cell that is not of at most 16 digits without
// plus sign and leading zeros, or len(out).
func (c *Column) Ints(r int, out []int64) int {
	text, ends, stride, last := c.Text[:len(c.Text)+Pad], c.Ends[r*c.Stride:], c.Stride, c.Last
	for k, j := 0, r; j < len(out); k, j = k+stride, j+1 {
		e := ends[k : k+2]
		i, end := int(e[0])+1, int(e[1])
		if last && end > i && text[end-1] == '\r' {
			end--
		}
		if text[i] == '"' && end > i {
			i, end = i+1, end-1
		}
		var neg int
		if text[i] == '-' {
			neg = 1
		}
		i += neg
		n := end - i
		if n > 1 && text[i] == '0' {
			return j
		}
		var v uint64
		switch {
		case uint(n-1) < 8:
			x := (load(text, i) ^ zeros) << (uint(64-8*n) & 63)
			if other(x) != 0 {
				return j
			}
			v = eight(x)
		case uint(n-9) < 8:
			x, y := (load(text, i)^zeros)<<(uint(128-8*n)&63), load(text, end-8)^zeros
			if other(x)|other(y) != 0 {
				return j
			}
			v = eight(x)*1e8 + eight(y)
		default:
			return j
		}
		out[j] = int64(v) * int64(1-2*neg)
	}
	return len(out)
}
