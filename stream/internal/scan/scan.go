// Package scan has the inner loops of the text reader: finding delimiters,
// newlines and quotes eight bytes at a time, and reading numbers.
//
// A row of delimited text ends at a newline byte that has an even number of
// quote bytes before it, counted from the start of the input. That rule needs
// no delimiter and no look at fields, so a byte range of a file can be cut into
// rows as soon as the parity of the quotes before it is known.
package scan

import (
	"bytes"
	"encoding/binary"
	"math/bits"
)

const (
	ones  = 0x0101010101010101
	highs = 0x8080808080808080
)

// match marks with 0x80 exactly the bytes of x that equal the repeated byte.
func match(x, repeated uint64) uint64 {
	x ^= repeated
	return ^(((x &^ highs) + ^uint64(highs)) | x | ^uint64(highs))
}

// Count returns the numbers of quotes and newlines in b.
func Count(b []byte) (quotes, newlines int) {
	return bytes.Count(b, quote), bytes.Count(b, newline)
}

var (
	quote   = []byte{'"'}
	newline = []byte{'\n'}
)

// RowEnd returns the index after the first newline in b[i:] that is outside
// quotes, where odd says whether b[i] is inside. Without such a newline it
// returns -1 and the state after the last byte.
func RowEnd(b []byte, i int, odd bool) (end int, oddAfter bool) {
	for {
		n := bytes.IndexByte(b[i:], '\n')
		line := b[i:]
		if n >= 0 {
			line = b[i : i+n]
		}
		if bytes.Count(line, quote)&1 == 1 {
			odd = !odd
		}
		if n < 0 {
			return -1, odd
		}
		i += n + 1
		if !odd {
			return i, false
		}
	}
}

// Stop returns the index of the first delimiter, newline or quote in b[i:].
// The last byte of b must be a newline.
func Stop(b []byte, i int, delim byte) int {
	pd := ones * uint64(delim)
	for i+8 <= len(b) {
		x := binary.LittleEndian.Uint64(b[i:])
		m := match(x, pd) | match(x, ones*'\n') | match(x, ones*'"')
		if m != 0 {
			return i + bits.TrailingZeros64(m)>>3
		}
		i += 8
	}
	for c := b[i]; c != delim && c != '\n' && c != '"'; c = b[i] {
		i++
	}
	return i
}

// Skip passes over n delimiters. It returns the index after the n-th and left
// 0, or the index of the first newline or quote before it and the number of
// delimiters not passed. The last byte of b must be a newline, n at least 1.
func Skip(b []byte, i int, delim byte, n int) (at, left int) {
	pd := ones * uint64(delim)
	for i+8 <= len(b) {
		x := binary.LittleEndian.Uint64(b[i:])
		d := match(x, pd)
		s := match(x, ones*'\n') | match(x, ones*'"')
		if s != 0 {
			d &= (s & -s) - 1 // only the delimiters before the first stop
		}
		c := bits.OnesCount64(d)
		if c >= n {
			for ; n > 1; n-- {
				d &= d - 1
			}
			return i + bits.TrailingZeros64(d)>>3 + 1, 0
		}
		n -= c
		if s != 0 {
			return i + bits.TrailingZeros64(s)>>3, n
		}
		i += 8
	}
	for ; ; i++ {
		switch b[i] {
		case delim:
			if n--; n == 0 {
				return i + 1, 0
			}
		case '\n', '"':
			return i, n
		}
	}
}
