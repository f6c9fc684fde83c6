package delimited

import (
	"encoding/binary"
	"math/bits"
	"math/rand/v2"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

const (
	maxDict      = 65536
	maxDictBytes = 4 << 20
)

// interner gives equal cells of a text column equal codes, in the order in which
// they come first.
type interner struct {
	dict  *stream.Dict
	slots []slot // found by hash
	bytes int
	chunk strings.Builder // holds the bytes of many values
}

// slot is one value of the dictionary. The key of a short value is the value
// itself, so that the string need not be looked at.
type slot struct {
	key  uint64
	code int32 // plus 1; 0 is free
}

// short is the length up to which a key holds the whole value: seven bytes and
// the length.
const short = 7

// seed keeps anybody from making a text whose values all have the same hash.
var seed = [2]uint64{rand.Uint64(), rand.Uint64() | 1}

func mix(x uint64) uint64 {
	hi, lo := bits.Mul64(x^seed[0], seed[1])
	return hi ^ lo
}

func shortKey(word uint64, n int) uint64 {
	return word&(1<<(8*n&63)-1) | uint64(n)<<56
}

// key returns the key of a value.
func key(cell []byte) uint64 {
	n := len(cell)
	if n <= short {
		var b [8]byte
		copy(b[:], cell)
		return shortKey(binary.LittleEndian.Uint64(b[:]), n)
	}
	h := uint64(n)
	for i := 0; i+8 < n; i += 8 {
		h = mix(h ^ binary.LittleEndian.Uint64(cell[i:]))
	}
	return mix(h^binary.LittleEndian.Uint64(cell[n-8:])) | 0xff<<56
}

func (t *interner) start() {
	if t.slots == nil {
		t.slots = make([]slot, 128)
	} else {
		clear(t.slots)
	}
	t.dict = &stream.Dict{}
	t.bytes = 0
}

// limit begins a new dictionary when the old one could overflow in this batch.
func (t *interner) limit() {
	if len(t.dict.Values)+stream.BatchRows > maxDict || t.bytes > maxDictBytes {
		t.start()
	}
}

func (t *interner) intern(cell []byte) int32 { return t.find(key(cell), cell) }

// find returns the code of the cell that has this key.
func (t *interner) find(key uint64, cell []byte) int32 {
	mask := uint64(len(t.slots) - 1)
	for h := mix(key) & mask; ; h = (h + 1) & mask {
		s := &t.slots[h]
		switch {
		case s.code == 0:
			c := int32(len(t.dict.Values))
			t.dict.Values = append(t.dict.Values, t.keep(cell))
			*s = slot{key, c + 1}
			if 2*len(t.dict.Values) > len(t.slots) {
				t.grow()
			}
			return c
		case s.key == key && (len(cell) <= short || t.dict.Values[s.code-1] == string(cell)):
			return s.code - 1
		}
	}
}

// keep copies a cell into a chunk shared by many values.
func (t *interner) keep(cell []byte) string {
	t.bytes += len(cell)
	if t.chunk.Cap()-t.chunk.Len() < len(cell) {
		t.chunk = strings.Builder{}
		t.chunk.Grow(max(min(1<<16, 256+2*t.bytes), len(cell)))
	}
	from := t.chunk.Len()
	t.chunk.Write(cell)
	return t.chunk.String()[from:]
}

func (t *interner) grow() {
	old := t.slots
	t.slots = make([]slot, 2*len(old))
	mask := uint64(len(t.slots) - 1)
	for _, s := range old {
		if s.code == 0 {
			continue
		}
		h := mix(s.key) & mask
		for t.slots[h].code != 0 {
			h = (h + 1) & mask
		}
		t.slots[h] = s
	}
}

// texts reads cells without quotes. It returns the row of the first quoted one,
// or len(out).
func (o *column) texts(c *scan.Column, k int, out []int32, rules *rules) int {
	text := c.Text[:len(c.Text)+scan.Pad]
	for ; k < len(out); k++ {
		start, end := c.Cell(k)
		n := end - start
		switch b := text[start]; {
		case n == 0 || rules.first[b] && rules.missing(text[start:end]):
			out[k] = -1
		case b == '"':
			return k
		case n <= short:
			out[k] = o.text.find(shortKey(binary.LittleEndian.Uint64(text[start:start+8]), n), text[start:end])
		default:
			out[k] = o.text.intern(text[start:end])
		}
	}
	return k
}
