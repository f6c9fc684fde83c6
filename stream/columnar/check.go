package columnar

import (
	"encoding/binary"
	"errors"
	"fmt"
)

var errRuns = errors.New("a run of the run-length encoding does not fit its page")

var errDelta = errors.New("a block of the delta encoding does not fit its page")

// runSlack is how many values beyond those announced the last bit-packed run
// may hold: writers fill it up to a multiple of 8, some up to a whole block.
const runSlack = 4096

// checkRuns walks the run headers of the hybrid run-length encoding and checks
// that they hold at least n values, not many more, and lie inside b. The
// library's decoder takes memory for whatever length a header claims, and fills
// up missing dictionary indexes with zeros.
func checkRuns(b []byte, width uint, n int) error {
	total := 0
	for i := 0; i < len(b); {
		u, k := binary.Uvarint(b[i:])
		if k <= 0 || u>>1 > uint64(n)+runSlack {
			return errRuns
		}
		i += k
		count := int(u >> 1)
		if count == 0 {
			continue
		}
		if u&1 != 0 {
			count *= 8
			i += count / 8 * int(width)
		} else {
			i += int(width+7) / 8
		}
		total += count
		if i > len(b) || total > n+runSlack {
			return errRuns
		}
	}
	if total < n && !(width == 0 && len(b) == 0) {
		return fmt.Errorf("%d values where the page header promises %d", total, n)
	}
	return nil
}

// checkDelta walks the blocks of a delta encoding of integers of at most width
// bits, checks that it holds n values and lies inside b, and returns what comes
// after it. Only the last miniblock may be shorter than its full length: some
// writers do not fill it up.
func checkDelta(b []byte, width uint, n int) (rest []byte, err error) {
	var head [3]uint64
	for i := range head {
		u, k := binary.Uvarint(b)
		if k <= 0 {
			return nil, errDelta
		}
		head[i], b = u, b[k:]
	}
	if head[2] != uint64(n) {
		return nil, fmt.Errorf("the delta encoding holds %d values where the page header promises %d", head[2], n)
	}
	if head[0] == 0 || head[0] > 1<<16 || head[1] == 0 || head[0]%head[1] != 0 || head[0]/head[1]%32 != 0 {
		return nil, errDelta
	}
	minis, per := int(head[1]), int(head[0]/head[1])
	_, k := binary.Uvarint(b)
	if k <= 0 {
		return nil, errDelta
	}
	b = b[k:]
	for left := n - 1; left > 0; {
		_, k := binary.Uvarint(b)
		if k <= 0 || len(b)-k < minis {
			return nil, errDelta
		}
		widths := b[k : k+minis]
		b = b[k+minis:]
		for _, w := range widths {
			if left <= 0 {
				break
			}
			if uint(w) > width {
				return nil, errDelta
			}
			full, need := per*int(w)/8, (min(per, left)*int(w)+7)/8
			if need > len(b) {
				return nil, errDelta
			}
			b = b[min(full, len(b)):]
			left -= per
		}
	}
	return b, nil
}

// plainOffsets writes to off the offsets of the n length-prefixed byte arrays in
// b, and the end of the last one.
func plainOffsets(off []uint32, b []byte, n int) ([]uint32, error) {
	if n > len(b)/4 {
		return off, fmt.Errorf("%d bytes cannot hold %d byte arrays", len(b), n)
	}
	off = grow(off, n+1)
	i := 0
	for k := range n {
		if len(b)-i < 4 {
			return off, fmt.Errorf("%d byte arrays where the page header promises %d", k, n)
		}
		m := binary.LittleEndian.Uint32(b[i:])
		if uint64(m) > uint64(len(b)-i-4) {
			return off, fmt.Errorf("byte array %d of %d bytes reaches beyond its page", k+1, m)
		}
		off[k] = uint32(i)
		i += 4 + int(m)
	}
	off[n] = uint32(i)
	if i != len(b) {
		return off, fmt.Errorf("%d bytes are left over after %d byte arrays", len(b)-i, n)
	}
	return off, nil
}

// grow returns a slice of length n, with the memory of s if that is enough. The
// contents are not kept.
func grow[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n, n+n/4)
	}
	return s[:n]
}
