package scan

import (
	"encoding/binary"
	"math/bits"
)

// Pad is how many bytes must follow the text that an Index or a column loop
// reads, so that they may look beyond a cell. Their value does not matter.
const Pad = 64

// Index finds where cells end, 64 bytes at a time: a bit for each byte tells
// whether it is a delimiter or a newline, and whether it is inside quotes, which
// it is if an odd number of quotes stands before it.
type Index struct {
	// Ends holds the indexes of delimiters and newlines outside quotes, in order.
	// Ends[0] is the index before the first byte of the row that comes next (-1
	// for the first).
	Ends []int32
	// Odd is the index of a quote that no sound row has there, or -1: one that
	// opens within a cell or closes before its end. Ends stops before it.
	Odd int

	buf    []int32 // Ends is a part of it
	pos    int     // what comes before is in Ends
	inside uint64  // all ones if pos is inside quotes
	start  uint64  // 1 if a quote at pos may open
	closed uint64  // 1 if the byte before pos is a quote that closes
}

// Reset begins at the row at index i, for rows of that many columns.
func (x *Index) Reset(i, columns int) {
	if room := 64*max(64, columns) + 64; len(x.buf) < room {
		x.buf = make([]int32, room)
	}
	x.Ends = append(x.buf[:0], int32(i-1))
	x.Odd, x.pos, x.inside, x.start, x.closed = -1, i, 0, 1, 0
}

// Seek drops the ends before the row at index i. It returns false if it cannot
// tell where they are.
func (x *Index) Seek(i int) bool {
	for k, e := range x.Ends {
		if int(e) == i-1 {
			x.Ends = x.Ends[k:]
			return true
		}
	}
	return false
}

// More adds ends up to the end of text or as many as there is room for. It
// returns false when there is nothing to add. Pad bytes follow text in its array.
func (x *Index) More(text []byte, delim byte) bool {
	ends := x.buf
	room := len(ends) - 64
	n := copy(ends, x.Ends)
	x.Ends = ends[:n]
	if x.pos >= len(text) || x.Odd >= 0 || n > room {
		return false
	}
	end := len(text)
	text = text[:end+Pad]
	pos := x.pos
	for pos < end && n <= room {
		block := (*[64]byte)(text[pos:])
		s, quotes := stops(block, ones*uint64(delim))
		if left := end - pos; left < 64 {
			s &= 1<<left - 1
		}
		if quotes|x.inside|x.closed != 0 {
			s = x.quoted(block, text, pos, end, s)
		} else {
			x.start = s >> 63
		}
		c := bits.OnesCount64(s)
		e := (*[64]int32)(ends[n:])
		for j := 0; j < c; j += 4 {
			f := (*[4]int32)(e[j&63:])
			f[0] = int32(pos + bits.TrailingZeros64(s))
			s &= s - 1
			f[1] = int32(pos + bits.TrailingZeros64(s))
			s &= s - 1
			f[2] = int32(pos + bits.TrailingZeros64(s))
			s &= s - 1
			f[3] = int32(pos + bits.TrailingZeros64(s))
			s &= s - 1
		}
		n += c
		pos += 64
		if x.Odd >= 0 {
			break
		}
	}
	x.pos = pos
	x.Ends = ends[:n]
	return true
}

// stops returns a bit for each byte that is a delimiter or a newline, and
// something other than zero if there is a quote.
func stops(block *[64]byte, delim uint64) (bits, quotes uint64) {
	quotes = ^uint64(0)
	for j := 0; j < 64; j += 8 {
		w := binary.LittleEndian.Uint64(block[j : j+8])
		y := w & lows
		// The high bit of a byte that is none of them stays set.
		other := (y^delim+lows)&(y^ones*'\n'+lows) | w
		quotes &= y ^ ones*'"' + lows | w
		bits = bits>>8 | other&highs*gather&(0xff<<56)
	}
	return ^bits, ^quotes & highs
}

// gather brings the high bits of eight bytes together in the highest one.
const gather = 0x0002040810204081

// quoted takes out of the stops of a block those inside quotes, and checks that
// quotes stand where they may.
func (x *Index) quoted(block *[64]byte, text []byte, pos, end int, stops uint64) uint64 {
	var q uint64
	for j := 0; j < 64; j += 8 {
		m := match(binary.LittleEndian.Uint64(block[j:j+8]), ones*'"')
		q = q>>8 | m*gather&(0xff<<56)
	}
	if left := end - pos; left < 64 {
		q &= 1<<left - 1
	}
	// Whether a byte or one before it changed the state, for all bytes at once.
	in := q
	for k := 1; k < 64; k *= 2 {
		in ^= in << k
	}
	in ^= x.inside
	opens, closes := q&in, q&^in
	stops &^= in
	// A quote opens at the start of a cell, or after one that closed: two of them
	// stand for one inside quotes.
	odd := opens &^ ((stops|closes)<<1 | x.start | x.closed)
	// After one that closes comes the end of the cell or the second of two.
	after := (closes<<1 | x.closed) &^ (stops | q)
	for ; after != 0; after &= after - 1 {
		k := bits.TrailingZeros64(after)
		if pos+k >= end || text[pos+k] != '\r' || text[pos+k+1] != '\n' {
			odd |= 1 << k
			break
		}
	}
	x.inside = -(in >> 63)
	x.start = stops >> 63
	x.closed = closes >> 63
	if odd != 0 {
		k := bits.TrailingZeros64(odd)
		x.Odd = pos + k
		stops &= 1<<k - 1
	}
	return stops
}
