// Package scan has the inner loops of the text reader: finding delimiters,
// newlines and quotes, and reading numbers, eight bytes at a time.
//
// A row of delimited text ends at a newline byte that has an even number of
// quote bytes before it, counted from the start of the input. That rule needs
// no delimiter and no look at fields, so a byte range of a file can be cut into
// rows as soon as the parity of the quotes before it is known.
//
// An Index holds the ends of all cells of many rows; with them a column is read
// from top to bottom in one loop, in which no cell waits for the one before.
package scan

import (
	"bytes"
	"encoding/binary"
	"math/bits"
)

const (
	ones  = 0x0101010101010101
	highs = 0x8080808080808080
	lows  = 0x7f7f7f7f7f7f7f7f
)

// match marks with 0x80 exactly the bytes of x that equal the repeated byte.
func match(x, repeated uint64) uint64 {
	x ^= repeated
	return ^(x&lows + lows | x | lows)
}

func load(b []byte, i int) uint64 { return binary.LittleEndian.Uint64(b[i : i+8]) }

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
		x := load(b, i)
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
