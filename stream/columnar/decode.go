package columnar

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math/bits"
	"unsafe"

	"github.com/parquet-go/parquet-go/encoding/bytestreamsplit"
	"github.com/parquet-go/parquet-go/encoding/delta"
	"github.com/parquet-go/parquet-go/encoding/rle"
	"github.com/parquet-go/parquet-go/format"
)

// plainDictionary is the older name of the encodings of dictionary pages
// (plain) and of indexes (RLE_DICTIONARY). Files still have it.
const plainDictionary format.Encoding = 2

// load decodes the data page whose header was just read.
func (c *chunk) load(h *pageHeader) error {
	b, err := c.body(h)
	if err != nil {
		return err
	}
	p := &c.page
	*p = page{rows: int(h.values)}
	n := p.rows
	if h.typ == pageData {
		if b, err = c.unpack(b, int(h.uncompressed)); err != nil {
			return err
		}
		if c.col.maxDef > 0 {
			if h.defEncoding != int32(format.RLE) {
				return fmt.Errorf("%s: definition levels in the encoding %s, which is not supported", c.pos, format.Encoding(h.defEncoding))
			}
			if len(b) < 4 || uint64(binary.LittleEndian.Uint32(b)) > uint64(len(b)-4) {
				return c.damage("the levels of the page at byte %d are longer than the page", c.off)
			}
			k := 4 + int(binary.LittleEndian.Uint32(b))
			if err := c.levels(b[4:k]); err != nil {
				return err
			}
			b = b[k:]
		}
	} else {
		def := b[h.repBytes : h.repBytes+h.defBytes]
		b = b[h.repBytes+h.defBytes:]
		if c.col.maxDef > 0 {
			if err := c.levels(def); err != nil {
				return err
			}
		}
		if h.packed {
			if b, err = c.unpack(b, int(h.uncompressed-h.repBytes-h.defBytes)); err != nil {
				return err
			}
		}
	}
	if p.def != nil {
		n = bytes.Count(p.def, []byte{c.col.maxDef})
		if n == p.rows {
			p.def = nil
		}
	}
	if h.typ == pageDataV2 && p.rows-n != int(h.nulls) {
		return c.damage("the page at byte %d has %d nulls, its header says %d", c.off, p.rows-n, h.nulls)
	}
	if err := c.decode(format.Encoding(h.encoding), b, n); err != nil {
		return err
	}
	c.off += int64(h.compressed)
	c.left -= int64(p.rows)
	return nil
}

// levels decodes the definition levels of the page.
func (c *chunk) levels(b []byte) error {
	p := &c.page
	if u, k := binary.Uvarint(b); k > 0 && k < len(b) && u&1 == 0 && u>>1 == uint64(p.rows) && b[k] == c.col.maxDef {
		return nil // one run: every row has a value
	}
	out := grow(c.buf.def, p.rows+slack)
	c.buf.def = out
	if c.col.maxDef == 1 {
		if err := bitLevels(out, b, p.rows); err != nil {
			return c.damage("the levels of the page at byte %d: %v", c.off, err)
		}
		p.def = out[:p.rows:p.rows]
		return nil
	}
	width := bits.Len8(c.col.maxDef)
	if err := checkRuns(b, uint(width), p.rows); err != nil {
		return c.damage("the levels of the page at byte %d: %v", c.off, err)
	}
	e := rle.Encoding{BitWidth: width}
	out, err := e.DecodeLevels(out[:0], b)
	c.buf.def = out
	if err != nil || len(out) < p.rows {
		return c.damage("the levels of the page at byte %d cannot be decoded (%d of %d): %v", c.off, len(out), p.rows, err)
	}
	p.def = out[:p.rows:p.rows]
	if c.col.maxDef&(c.col.maxDef+1) != 0 {
		for _, d := range p.def {
			if d > c.col.maxDef {
				return c.damage("the page at byte %d has the level %d, the schema allows %d", c.off, d, c.col.maxDef)
			}
		}
	}
	return nil
}

// spread8 has the bits of its index as bytes, lowest first.
var spread8 = func() (t [256]uint64) {
	for i := range t {
		for j := range 8 {
			t[i] |= uint64(i>>j&1) << (8 * j)
		}
	}
	return t
}()

// bitLevels decodes n levels of one bit to a byte each, and checks the runs as
// checkRuns does. dst has room for 8 more.
func bitLevels(dst, b []byte, n int) error {
	total := 0
	for i := 0; i < len(b); {
		u, k := uint64(b[i]), 1
		if u >= 0x80 {
			if u, k = binary.Uvarint(b[i:]); k <= 0 || u>>1 > uint64(n)+runSlack {
				return errRuns
			}
		}
		i += k
		count := int(u >> 1)
		if count == 0 {
			continue
		}
		at := min(total, n)
		if u&1 != 0 {
			if count > len(b)-i {
				return errRuns
			}
			for _, x := range b[i : i+min(count, (n-at+7)/8)] {
				le.PutUint64(dst[at:at+8], spread8[x])
				at += 8
			}
			i += count
			total += 8 * count
		} else {
			if i == len(b) {
				return errRuns
			}
			if b[i] > 1 {
				return errRuns
			}
			fill(dst[at:min(at+count, n)], b[i])
			i++
			total += count
		}
		if total > n+runSlack {
			return errRuns
		}
	}
	if total < n {
		return fmt.Errorf("%d values where the page header promises %d", total, n)
	}
	return nil
}

func fill(b []byte, v byte) {
	if len(b) <= 16 {
		for i := range b {
			b[i] = v
		}
		return
	}
	b[0] = v
	for n := 1; n < len(b); n *= 2 {
		copy(b[n:], b[:n])
	}
}

// decode reads the n values of the page.
func (c *chunk) decode(enc format.Encoding, b []byte, n int) error {
	p := &c.page
	switch enc {
	case plainDictionary, format.RLEDictionary:
		return c.decodeIndexes(b, n)
	case format.Plain:
		v, err := c.plain(b, n, &c.buf)
		if err != nil {
			return c.damage("the page at byte %d: %v", c.off, err)
		}
		p.values = v
		return nil
	}
	v, err := c.special(enc, b, n)
	if err != nil {
		return err
	}
	p.values = v
	return nil
}

// decodeIndexes reads dictionary indexes and checks each against the dictionary.
func (c *chunk) decodeIndexes(b []byte, n int) error {
	p := &c.page
	if c.dict == nil {
		return c.damage("the page at byte %d needs a dictionary, the column has none", c.off)
	}
	p.idx = []int32{}
	if n == 0 {
		return nil
	}
	if len(b) == 0 || b[0] > 32 {
		return c.damage("the dictionary indexes of the page at byte %d have no valid width", c.off)
	}
	if err := checkRuns(b[1:], uint(b[0]), n); err != nil {
		return c.damage("the dictionary indexes of the page at byte %d: %v", c.off, err)
	}
	var e rle.DictionaryEncoding
	out, err := e.DecodeInt32(grow(c.buf.idx, n+slack)[:0], b)
	if err != nil {
		return c.damage("the dictionary indexes of the page at byte %d: %v", c.off, err)
	}
	if len(b) == 1 && len(out) == 0 {
		// Width 0 and no run at all: every value is entry 0.
		out = out[:n]
		clear(out)
	}
	c.buf.idx = out
	if len(out) < n {
		return c.damage("the page at byte %d has %d dictionary indexes where its header promises %d", c.off, len(out), n)
	}
	p.idx = out[:n:n]
	if !inside(p.idx, c.dict.n) {
		top := uint32(0)
		for _, i := range p.idx {
			top = max(top, uint32(i))
		}
		return c.damage("the page at byte %d has the dictionary index %d, the dictionary %d entries", c.off, top, c.dict.n)
	}
	return nil
}

// inside reports whether all indexes are below n.
func inside(idx []int32, n int) bool {
	if n == 0 {
		return len(idx) == 0
	}
	// n-1-i is negative exactly if i is too large or negative itself. Two at a
	// time: this touches every index of every page. A borrow from the upper half
	// comes only of a lower half that is too large.
	last := uint64(n - 1)
	last |= last << 32
	var a, b, c, d uint64
	rest := idx
	if len(idx) >= 8 {
		pairs := unsafe.Slice((*uint64)(unsafe.Pointer(&idx[0])), len(idx)/2)
		rest = idx[len(pairs)&^3*2:]
		for ; len(pairs) >= 4; pairs = pairs[4:] {
			p := (*[4]uint64)(pairs)
			a |= last - p[0] | p[0]
			b |= last - p[1] | p[1]
			c |= last - p[2] | p[2]
			d |= last - p[3] | p[3]
		}
	}
	if (a|b|c|d)&(1<<63|1<<31) != 0 {
		return false
	}
	for _, i := range rest {
		if i < 0 || int(i) >= n {
			return false
		}
	}
	return true
}

// plain reads n values of the plain encoding in place.
func (c *chunk) plain(b []byte, n int, buf *chunkBuffers) (v values, err error) {
	switch {
	case c.col.phys == format.Boolean:
		if len(b) < (n+7)/8 {
			return v, fmt.Errorf("%d bytes cannot hold %d booleans", len(b), n)
		}
		buf.bools = grow(buf.bools, n)
		for i := range buf.bools {
			buf.bools[i] = b[i>>3] >> (i & 7) & 1
		}
		v.bools = buf.bools
	case c.col.phys == format.ByteArray:
		buf.off, err = plainOffsets(buf.off, b, n)
		v = values{text: b, off: buf.off, prefix: 4}
	default:
		if int64(len(b)) != int64(n)*int64(c.col.width) {
			return v, fmt.Errorf("%d bytes of values where the page header promises %d of %d bytes", len(b), n, c.col.width)
		}
		v = values{raw: b, width: c.col.width}
	}
	return v, err
}

// special reads n values of the encodings that are neither plain nor indexes.
func (c *chunk) special(enc format.Encoding, b []byte, n int) (v values, err error) {
	v.width = c.col.width
	phys := c.col.phys
	got := -1
	switch {
	case enc == format.RLE && phys == format.Boolean:
		if len(b) < 4 || uint64(binary.LittleEndian.Uint32(b)) > uint64(len(b)-4) {
			return v, c.damage("the booleans of the page at byte %d are longer than the page", c.off)
		}
		b = b[4 : 4+binary.LittleEndian.Uint32(b)]
		if err = checkRuns(b, 1, n); err == nil {
			// As levels, a byte each: the library's own boolean decoder rounds
			// every run up to 8 values.
			e := rle.Encoding{BitWidth: 1}
			c.buf.bools, err = e.DecodeLevels(grow(c.buf.bools, n+slack)[:0], b)
			v.bools = c.buf.bools
			got = min(len(v.bools), n)
		}
	case enc == format.DeltaBinaryPacked && (phys == format.Int32 || phys == format.Int64):
		if n == 0 {
			return v, nil
		}
		if _, err = checkDelta(b, uint(8*c.col.width), n); err != nil {
			break
		}
		var e delta.BinaryPackedEncoding
		if phys == format.Int32 {
			c.buf.i32, err = e.DecodeInt32(grow(c.buf.i32, n+slack)[:0], b)
			v.raw, got = rawOf(c.buf.i32), len(c.buf.i32)
		} else {
			c.buf.i64, err = e.DecodeInt64(grow(c.buf.i64, n+slack)[:0], b)
			v.raw, got = rawOf(c.buf.i64), len(c.buf.i64)
		}
	case enc == format.ByteStreamSplit && c.col.width > 0 && phys != format.Int96:
		if int64(len(b)) != int64(n)*int64(c.col.width) {
			return v, c.damage("the page at byte %d has %d bytes of values where its header promises %d of %d bytes", c.off, len(b), n, c.col.width)
		}
		v.raw, err = c.unsplit(b, n)
		got = len(v.raw) / c.col.width
	case (enc == format.DeltaLengthByteArray || enc == format.DeltaByteArray) && phys == format.ByteArray:
		if n == 0 {
			v.off = []uint32{0}
			return v, nil
		}
		if err = checkLengths(b, enc, n); err != nil {
			break
		}
		off := grow(c.buf.off, n+1)[:0]
		if enc == format.DeltaByteArray {
			var e delta.ByteArrayEncoding
			v.text, c.buf.off, err = e.DecodeByteArray(c.buf.flat[:0], b, off)
		} else {
			var e delta.LengthByteArrayEncoding
			v.text, c.buf.off, err = e.DecodeByteArray(c.buf.flat[:0], b, off)
		}
		c.buf.flat = v.text
		v.off, got = c.buf.off, len(c.buf.off)-1
	case enc == format.DeltaByteArray && phys == format.FixedLenByteArray:
		if n == 0 {
			return v, nil
		}
		if err = checkLengths(b, enc, n); err != nil {
			break
		}
		var e delta.ByteArrayEncoding
		c.buf.flat, err = e.DecodeFixedLenByteArray(c.buf.flat[:0], b, c.col.width)
		v.raw, got = c.buf.flat, len(c.buf.flat)/c.col.width
		if len(v.raw) != n*c.col.width && err == nil {
			got = -1
		}
	default:
		return v, fmt.Errorf("%s: the encoding %s of %s values is not supported", c.pos, enc, physNames[phys])
	}
	if err != nil {
		return v, c.damage("the page at byte %d cannot be decoded: %v", c.off, err)
	}
	if got != n {
		return v, c.damage("the page at byte %d holds %d values where its header promises %d", c.off, got, n)
	}
	return v, nil
}

// maxUnpacked bounds the bytes that byte arrays with shared prefixes may unpack
// to: a few bytes can stand for very many.
const maxUnpacked = 1 << 30

// checkLengths checks the lengths in front of delta-encoded byte arrays.
func checkLengths(b []byte, enc format.Encoding, n int) error {
	rest, err := checkDelta(b, 32, n)
	if err != nil || enc != format.DeltaByteArray {
		return err
	}
	if _, err = checkDelta(rest, 32, n); err != nil {
		return err
	}
	var e delta.BinaryPackedEncoding
	prefixes, err := e.DecodeInt32(nil, b)
	if err != nil {
		return err
	}
	total := int64(len(b))
	for _, p := range prefixes {
		total += int64(p)
	}
	if total > maxUnpacked {
		return fmt.Errorf("its %d bytes would unpack to %d", len(b), total)
	}
	return nil
}

// unsplit undoes the byte-stream-split encoding.
func (c *chunk) unsplit(b []byte, n int) ([]byte, error) {
	var e bytestreamsplit.Encoding
	var err error
	switch c.col.phys {
	case format.Float:
		c.buf.f32, err = e.DecodeFloat(grow(c.buf.f32, n), b)
		return rawOf(c.buf.f32), err
	case format.Double:
		c.buf.f64, err = e.DecodeDouble(grow(c.buf.f64, n), b)
		return rawOf(c.buf.f64), err
	case format.Int32:
		c.buf.i32, err = e.DecodeInt32(grow(c.buf.i32, n), b)
		return rawOf(c.buf.i32), err
	case format.Int64:
		c.buf.i64, err = e.DecodeInt64(grow(c.buf.i64, n), b)
		return rawOf(c.buf.i64), err
	}
	w := c.col.width
	c.buf.flat = grow(c.buf.flat, n*w)
	for i := range n {
		for j := range w {
			c.buf.flat[i*w+j] = b[j*n+i]
		}
	}
	return c.buf.flat, nil
}

// loadDictionary decodes the dictionary page whose header was just read.
func (c *chunk) loadDictionary(h *pageHeader) error {
	if c.dict != nil {
		return c.damage("a second dictionary lies at byte %d", c.off)
	}
	if e := format.Encoding(h.encoding); e != format.Plain && e != plainDictionary {
		return c.damage("the dictionary at byte %d has the encoding %s", c.off, e)
	}
	if c.col.phys == format.Boolean {
		return fmt.Errorf("%s: dictionaries of booleans are not supported", c.pos)
	}
	b, err := c.body(h)
	if err != nil {
		return err
	}
	if b, err = c.unpack(b, int(h.uncompressed)); err != nil {
		return err
	}
	// The page buffers are used again for pages, the dictionary stays.
	c.buf.dict = append(c.buf.dict[:0], b...)
	d := &dictionary{n: int(h.values), buf: &c.buf}
	own := chunkBuffers{off: c.buf.dictOff}
	if d.values, err = c.plain(c.buf.dict, d.n, &own); err != nil {
		return c.damage("the dictionary at byte %d: %v", c.off, err)
	}
	c.buf.dictOff = own.off
	c.dict = d
	return nil
}

// asFloats gives the entries as numbers.
func (d *dictionary) asFloats(c *column) []float64 {
	if d.floats == nil {
		d.floats = grow(d.buf.dictFloats, d.n)
		d.buf.dictFloats = d.floats
		d.setBad(c.floats(d.floats, &d.values, 0, nil))
	}
	return d.floats
}

// asInts gives the entries as integers.
func (d *dictionary) asInts(c *column) []int64 {
	if d.ints == nil {
		d.ints = grow(d.buf.dictInts, d.n)
		d.buf.dictInts = d.ints
		d.setBad(c.ints(d.ints, &d.values, 0, nil))
	}
	return d.ints
}

func (d *dictionary) setBad(bad []int) {
	if len(bad) == 0 {
		return
	}
	d.bad = make(map[int32]bool, len(bad))
	for _, k := range bad {
		d.bad[int32(k)] = true
	}
}

// asTexts gives the entries as texts that share one allocation.
func (d *dictionary) asTexts(c *column) []string {
	if d.texts == nil {
		d.texts = make([]string, d.n)
		var flat []byte
		ends := make([]int, d.n)
		for k := range ends {
			flat = c.appendText(flat, &d.values, k)
			ends[k] = len(flat)
		}
		all, from := string(flat), 0
		for k, to := range ends {
			d.texts[k] = all[from:to]
			from = to
		}
	}
	return d.texts
}

// code returns the code of entry k in the dictionary of t.
func (d *dictionary) code(k int32, t *textState) int32 {
	if d.codesOf != t.dict {
		d.codes = grow(d.codes, d.n)
		for i := range d.codes {
			d.codes[i] = -1
		}
		d.codesOf = t.dict
	}
	if d.codes[k] < 0 {
		d.codes[k] = t.intern([]byte(d.texts[k]))
	}
	return d.codes[k]
}
