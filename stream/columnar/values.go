package columnar

import (
	"encoding/binary"
	"encoding/hex"
	"math"
	"math/big"
	"strconv"
	"time"
	"unsafe"
)

// values are the stored values of a page or dictionary, nulls left out.
type values struct {
	raw   []byte // fixed width, little-endian
	width int
	bools []byte // one byte a value, 0 or 1
	// Byte arrays: value k is text[off[k]+prefix : off[k+1]].
	text   []byte
	off    []uint32
	prefix uint32
}

// bytes returns value k of a byte array or fixed-width column.
func (v *values) bytes(k int) []byte {
	if v.off != nil {
		return v.text[v.off[k]+v.prefix : v.off[k+1]]
	}
	return v.raw[k*v.width : (k+1)*v.width]
}

var littleEndian = binary.NativeEndian.Uint16([]byte{1, 0}) == 1

// rawOf views decoded numbers as little-endian bytes.
func rawOf[T int32 | int64 | float32 | float64](s []T) []byte {
	if len(s) == 0 {
		return nil
	}
	size := int(unsafe.Sizeof(s[0]))
	b := unsafe.Slice((*byte)(unsafe.Pointer(&s[0])), len(s)*size)
	if !littleEndian {
		for i := 0; i < len(b); i += size {
			for j, k := i, i+size-1; j < k; j, k = j+1, k-1 {
				b[j], b[k] = b[k], b[j]
			}
		}
	}
	return b
}

var le = binary.LittleEndian

// floats converts values from..from+len(dst) to numbers. Values that do not fit
// are left as infinities and their places appended to bad.
func (c *column) floats(dst []float64, v *values, from int, bad []int) []int {
	raw := v.raw
	if v.width > 0 {
		raw = raw[from*v.width : (from+len(dst))*v.width]
	}
	switch c.conv {
	case convF64:
		if littleEndian {
			copy(rawOf(dst), raw)
			break
		}
		for i := range dst {
			dst[i] = math.Float64frombits(le.Uint64(raw[8*i : 8*i+8]))
		}
	case convF32:
		for i := range dst {
			dst[i] = float64(math.Float32frombits(le.Uint32(raw[4*i : 4*i+4])))
		}
	case convF16:
		for i := range dst {
			dst[i] = float16(le.Uint16(raw[2*i:]))
		}
	case convI32:
		for i := range dst {
			dst[i] = float64(int32(le.Uint32(raw[4*i : 4*i+4])))
		}
	case convU32:
		for i := range dst {
			dst[i] = float64(le.Uint32(raw[4*i : 4*i+4]))
		}
	case convI64:
		for i := range dst {
			dst[i] = float64(int64(le.Uint64(raw[8*i : 8*i+8])))
		}
	case convU64:
		for i := range dst {
			dst[i] = float64(le.Uint64(raw[8*i : 8*i+8]))
		}
	case convBool:
		for i, b := range v.bools[from : from+len(dst)] {
			dst[i] = float64(b)
		}
	case convTime32:
		for i := range dst {
			dst[i] = float64(int32(le.Uint32(raw[4*i:]))) / 1e3
		}
	case convTime64:
		for i := range dst {
			dst[i] = decimalFloat(int64(le.Uint64(raw[8*i:])), c.scale)
		}
	case convDec32:
		if c.scale <= maxExact {
			p := pow10[c.scale]
			for i := range dst {
				dst[i] = float64(int32(le.Uint32(raw[4*i:4*i+4]))) / p
			}
			break
		}
		for i := range dst {
			dst[i] = decimalFloat(int64(int32(le.Uint32(raw[4*i:]))), c.scale)
		}
	case convDec64:
		for i := range dst {
			dst[i] = decimalFloat(int64(le.Uint64(raw[8*i:])), c.scale)
		}
	case convDecFixed, convDecBytes:
		for i := range dst {
			dst[i] = decimalBytes(v.bytes(from+i), c.scale)
			if math.IsInf(dst[i], 0) {
				bad = append(bad, i)
			}
		}
	default:
		panic("columnar: the column has no numbers")
	}
	return bad
}

// ints converts values from..from+len(dst) to the integers of an Int64, Uint64,
// Bool or Time vector. Times that do not fit are left 0 and appended to bad.
func (c *column) ints(dst []int64, v *values, from int, bad []int) []int {
	raw := v.raw
	if v.width > 0 {
		raw = raw[from*v.width : (from+len(dst))*v.width]
	}
	switch c.conv {
	case convI32:
		for i := range dst {
			dst[i] = int64(int32(le.Uint32(raw[4*i : 4*i+4])))
		}
	case convU32:
		for i := range dst {
			dst[i] = int64(le.Uint32(raw[4*i : 4*i+4]))
		}
	case convI64, convU64:
		if littleEndian {
			copy(rawOf(dst), raw)
			break
		}
		for i := range dst {
			dst[i] = int64(le.Uint64(raw[8*i : 8*i+8]))
		}
	case convBool:
		for i, b := range v.bools[from : from+len(dst)] {
			dst[i] = int64(b)
		}
	case convDate:
		for i := range dst {
			d := int64(int32(le.Uint32(raw[4*i : 4*i+4])))
			if d < -maxDays || d > maxDays {
				dst[i] = 0
				bad = append(bad, i)
				continue
			}
			dst[i] = d * nanosOfDay
		}
	case convStamp:
		limit := math.MaxInt64 / c.unit
		for i := range dst {
			t := int64(le.Uint64(raw[8*i : 8*i+8]))
			if c.unit != 1 && (t < -limit || t > limit) {
				dst[i] = 0
				bad = append(bad, i)
				continue
			}
			dst[i] = t * c.unit
		}
	case convInt96:
		for i := range dst {
			t, ok := int96(raw[12*i:])
			if !ok {
				bad = append(bad, i)
			}
			dst[i] = t
		}
	default:
		panic("columnar: the column has no integers")
	}
	return bad
}

const (
	nanosOfDay  = 86400e9
	maxDays     = math.MaxInt64 / int64(nanosOfDay)
	julianEpoch = 2440588 // Julian day of 1970-01-01
)

// int96 reads nanoseconds of the day and a Julian day.
func int96(b []byte) (int64, bool) {
	nanos := int64(le.Uint64(b))
	days := int64(int32(le.Uint32(b[8:]))) - julianEpoch
	if days < -maxDays-1 || days > maxDays || nanos < 0 || nanos > nanosOfDay {
		return 0, false
	}
	// The day before the first whole one is reached from the day after it.
	if days < 0 {
		days++
		nanos -= nanosOfDay
	}
	d := days * nanosOfDay
	t := d + nanos
	return t, (t < d) == (nanos < 0)
}

// found describes value k for an error message.
func (c *column) found(v *values, k int) string {
	switch c.conv {
	case convDate:
		return time.Unix(int64(int32(le.Uint32(v.bytes(k))))*86400, 0).UTC().Format(`"2006-01-02"`)
	case convStamp:
		t := int64(le.Uint64(v.bytes(k)))
		per := 1e9 / c.unit
		if t/per > 1<<40 || t/per < -1<<40 {
			return strconv.FormatInt(t, 10) + " ticks of " + time.Duration(c.unit).String() + " since 1970"
		}
		return time.Unix(t/per, t%per*c.unit).UTC().Format(`"2006-01-02T15:04:05.999999999"`)
	case convInt96:
		b := v.bytes(k)
		return "Julian day " + strconv.Itoa(int(int32(le.Uint32(b[8:])))) + " and " + strconv.FormatInt(int64(le.Uint64(b)), 10) + " ns"
	case convDecFixed, convDecBytes:
		return "a decimal of " + strconv.Itoa(len(v.bytes(k))) + " bytes"
	}
	return "a value out of range"
}

// wanted is what would have been right in place of found.
func (c *column) wanted() string {
	if c.conv == convDecFixed || c.conv == convDecBytes {
		return "a decimal inside the range of float64"
	}
	return "a time from 1677-09-21 to 2262-04-11"
}

// appendText appends value k as text.
func (c *column) appendText(b []byte, v *values, k int) []byte {
	switch c.conv {
	case convText:
		return append(b, v.bytes(k)...)
	case convHex:
		return hex.AppendEncode(b, v.bytes(k))
	case convUUID:
		u := v.bytes(k)
		for i, n := range [...]int{4, 2, 2, 2, 6} {
			if i > 0 {
				b = append(b, '-')
			}
			b = hex.AppendEncode(b, u[:n])
			u = u[n:]
		}
		return b
	case convBool | convAsText:
		return strconv.AppendBool(b, v.bools[k] != 0)
	case convI32 | convAsText:
		return strconv.AppendInt(b, int64(int32(le.Uint32(v.bytes(k)))), 10)
	case convU32 | convAsText:
		return strconv.AppendUint(b, uint64(le.Uint32(v.bytes(k))), 10)
	case convI64 | convAsText:
		return strconv.AppendInt(b, int64(le.Uint64(v.bytes(k))), 10)
	case convU64 | convAsText:
		return strconv.AppendUint(b, le.Uint64(v.bytes(k)), 10)
	}
	panic("columnar: the column has no text")
}

// maxExact is the largest power of ten that a float64 holds exactly.
const maxExact = 22

var pow10 = [maxExact + 1]float64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22}

// decimalFloat returns u/10^scale correctly rounded: by one division where both
// operands are exact, through the decimal parser elsewhere.
func decimalFloat(u int64, scale int) float64 {
	if scale <= maxExact && u <= 1<<53 && u >= -1<<53 {
		return float64(u) / pow10[scale]
	}
	var buf [40]byte
	b := append(strconv.AppendInt(buf[:0], u, 10), "e-"...)
	b = strconv.AppendInt(b, int64(scale), 10)
	f, _ := strconv.ParseFloat(string(b), 64)
	return f
}

// decimalBytes is decimalFloat of a big-endian two's complement integer; an
// infinity if it is beyond float64.
func decimalBytes(b []byte, scale int) float64 {
	neg := len(b) > 0 && b[0] >= 0x80
	fill := byte(0)
	if neg {
		fill = 0xff
	}
	for len(b) > 8 && b[0] == fill && (b[1] >= 0x80) == neg {
		b = b[1:]
	}
	if len(b) <= 8 {
		u := int64(0)
		if neg {
			u = -1
		}
		for _, x := range b {
			u = u<<8 | int64(x)
		}
		return decimalFloat(u, scale)
	}
	z := new(big.Int).SetBytes(b)
	if neg {
		z.Sub(z, new(big.Int).Lsh(big.NewInt(1), uint(8*len(b))))
	}
	f, _ := strconv.ParseFloat(z.String()+"e-"+strconv.Itoa(scale), 64)
	return f
}

// float16 converts an IEEE 754 half.
func float16(h uint16) float64 {
	exp, frac := int(h>>10&31), float64(h&1023)
	var f float64
	switch exp {
	case 0:
		f = math.Ldexp(frac, -24)
	case 31:
		f = math.Inf(1)
		if frac != 0 {
			return math.NaN()
		}
	default:
		f = math.Ldexp(1024+frac, exp-25)
	}
	if h>>15 != 0 {
		f = -f
	}
	return f
}
