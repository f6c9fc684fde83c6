package columnar

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math/bits"

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
	width := bits.Len8(c.col.maxDef)
	p := &c.page
	if err := checkRuns(b, uint(width), p.rows); err != nil {
		return c.damage("the levels of the page at byte %d: %v", c.off, err)
	}
	e := rle.Encoding{BitWidth: width}
	out, err := e.DecodeLevels(grow(c.buf.def, p.rows+slack)[:0], b)
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
	top := uint32(0)
	for _, i := range p.idx {
		top = max(top, uint32(i))
	}
	if int64(top) >= int64(c.dict.n) {
		return c.damage("the page at byte %d has the dictionary index %d, the dictionary %d entries", c.off, top, c.dict.n)
	}
	return nil
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
	// The page buffers are used again, the dictionary stays.
	b = bytes.Clone(b)
	d := &dictionary{n: int(h.values)}
	var own chunkBuffers
	if d.values, err = c.plain(b, d.n, &own); err != nil {
		return c.damage("the dictionary at byte %d: %v", c.off, err)
	}
	c.dict = d
	return nil
}

// asFloats gives the entries as numbers.
func (d *dictionary) asFloats(c *column) []float64 {
	if d.floats == nil {
		d.floats = make([]float64, d.n)
		d.setBad(c.floats(d.floats, &d.values, 0, nil))
	}
	return d.floats
}

// asInts gives the entries as integers.
func (d *dictionary) asInts(c *column) []int64 {
	if d.ints == nil {
		d.ints = make([]int64, d.n)
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
