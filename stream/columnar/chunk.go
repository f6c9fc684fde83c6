package columnar

import (
	"bytes"
	"errors"
	"hash/crc32"
	"io"

	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

const (
	windowBytes = 16 << 10 // read ahead for headers and small pages
	headWindow  = 1 << 10  // read ahead for headers of larger pages
	minHeader   = 512      // of which this much should be there for a header
	maxHeader   = 16 << 20
	// smallPage is a page size that is believed whatever the chunk's total says:
	// some writers keep wrong totals.
	smallPage = 16 << 20
	// slack is the room the bit unpackers may read beyond the data.
	slack = 64
)

// verifyChecksums is turned off by tests, to reach the decoders with damaged
// bytes.
var verifyChecksums = true

// page is a decoded data page with a cursor.
type page struct {
	rows int    // rows in the page
	row  int    // rows consumed
	val  int    // values consumed
	def  []byte // levels, nil if all rows have a value
	values
	idx []int32 // indexes into the chunk's dictionary, nil if the page is plain
}

// dictionary is the decoded dictionary of a chunk.
type dictionary struct {
	n int
	values
	buf *chunkBuffers // whose memory the entries are in
	// The cells the entries become, made when first asked for. bad lists the
	// entries that do not fit.
	floats []float64
	ints   []int64
	bad    map[int32]bool
	texts  []string
	// codes in the vector's Dict, for the Dict they were made for; -1 unknown.
	codes   []int32
	codesOf *stream.Dict
}

// chunk reads the pages of one column in one row group. One goroutine.
type chunk struct {
	r     io.ReaderAt
	col   *column
	pos   stream.Position
	meta  *chunkMeta
	off   int64 // of the next page header
	end   int64
	rows  int64 // of the row group
	left  int64 // rows that no page has brought yet
	dict  *dictionary
	page  page
	win   []byte // window of the file, at winAt
	winAt int64
	ahead int64 // how much is read for the next window
	walk  bool  // only headers are wanted
	// Of a row group that is cut.
	group  int
	pages  *sharedPages
	shared *sharedPage // whose page this is
	buf    chunkBuffers
}

// chunkBuffers are kept from chunk to chunk, and from segment to segment.
type chunkBuffers struct {
	win, raw, plain, def, bools []byte
	dict                        []byte // values of the dictionary
	dictOff                     []uint32
	dictFloats                  []float64
	dictInts                    []int64
	idx, i32                    []int32
	i64                         []int64
	f32                         []float32
	f64                         []float64
	off                         []uint32
	flat                        []byte
}

// open points the chunk at a row group.
func (c *chunk) open(r io.ReaderAt, col *column, meta *chunkMeta, rows int64, pos stream.Position) {
	c.release()
	pos.Column = col.name
	start := chunkStart(meta)
	*c = chunk{r: r, col: col, pos: pos, meta: meta, off: start, end: start + meta.TotalCompressedSize, rows: rows, left: rows, ahead: headWindow, buf: c.buf}
	if rows == 0 {
		c.end = c.off
	}
}

// at returns n bytes of the file, valid until the next call.
func (c *chunk) at(off int64, n int) ([]byte, error) {
	if off >= c.winAt && off+int64(n) <= c.winAt+int64(len(c.win)) {
		i := int(off - c.winAt)
		return c.win[i : i+n], nil
	}
	if n > windowBytes-slack {
		c.buf.raw = grow(c.buf.raw, n+slack)
		b := c.buf.raw[:n]
		return b, readFull(c.r, b, off, c.pos)
	}
	c.winAt = off
	want := min(max(c.ahead, int64(n)), windowBytes-slack, c.end-off)
	c.buf.win = grow(c.buf.win, int(want)+slack)
	c.win = c.buf.win[:want]
	if err := readFull(c.r, c.win, off, c.pos); err != nil {
		c.win = nil
		return nil, err
	}
	return c.win[:n], nil
}

// header reads the next page header and moves to the page's bytes.
func (c *chunk) header() (pageHeader, error) {
	for want := int64(minHeader); ; want *= 8 {
		n := min(want, c.end-c.off)
		b, err := c.at(c.off, int(n))
		if err != nil {
			return pageHeader{}, err
		}
		h, k, err := parsePageHeader(b)
		if errors.Is(err, errWireShort) && n < c.end-c.off && want < maxHeader {
			continue
		}
		if err != nil {
			return h, c.damage("the page header at byte %d cannot be read: %v", c.off, err)
		}
		c.off += int64(k)
		h.size = int64(k)
		c.ahead = windowBytes
		if h.compressed > windowBytes/2 || c.walk && h.compressed > headWindow {
			c.ahead = headWindow
		}
		if int64(h.compressed) > c.end-c.off {
			return h, c.damage("the page at byte %d has %d bytes, its chunk only %d more", c.off, h.compressed, c.end-c.off)
		}
		return h, c.checkHeader(&h)
	}
}

// checkHeader bounds the sizes of a page before memory is taken for it.
func (c *chunk) checkHeader(h *pageHeader) error {
	if !h.body {
		return c.damage("the page header before byte %d has no part for page type %d", c.off, h.typ)
	}
	limit := max(smallPage, c.meta.TotalUncompressedSize)
	if r := maxRatio[c.meta.Codec]; r > 0 {
		limit = min(limit, r*int64(h.compressed)+slack)
	}
	if c.meta.Codec == format.Uncompressed && h.compressed != h.uncompressed {
		return c.damage("the uncompressed page at byte %d has %d bytes, its header says %d", c.off, h.compressed, h.uncompressed)
	}
	if int64(h.uncompressed) > limit {
		return c.damage("the page at byte %d with %d bytes (%s) claims to hold %d", c.off, h.compressed, c.meta.Codec, h.uncompressed)
	}
	switch enc := format.Encoding(h.encoding); enc {
	case format.DeltaBinaryPacked, format.DeltaLengthByteArray, format.DeltaByteArray, format.ByteStreamSplit:
		// The header has no checksum, and these can be taken for plain values.
		if (h.typ == pageData || h.typ == pageDataV2) && !c.meta.has(enc) {
			return c.damage("the page at byte %d has the encoding %s, which is not among those of its chunk", c.off, enc)
		}
	}
	switch h.typ {
	case pageDataV2:
		if h.rows != h.values {
			return c.damage("the page at byte %d has %d values in %d rows", c.off, h.values, h.rows)
		}
		if h.nulls > h.values || (c.col.maxDef == 0 && h.nulls > 0) {
			return c.damage("the page at byte %d has %d nulls in %d rows", c.off, h.nulls, h.rows)
		}
		if n := int64(h.defBytes) + int64(h.repBytes); n > int64(h.compressed) || n > int64(h.uncompressed) {
			return c.damage("the levels of the page at byte %d are longer than the page", c.off)
		}
		fallthrough
	case pageData:
		if int64(h.values) > c.left {
			return c.damage("the page at byte %d has %d rows, the row group only %d more", c.off, h.values, c.left)
		}
	}
	return nil
}

// next loads the next data page that has rows. io.EOF after the last row.
func (c *chunk) next() error {
	for c.left > 0 {
		h, err := c.dataHeader()
		if err != nil {
			return err
		}
		if h.values > 0 {
			return c.loadPage(&h, true)
		}
		c.off += int64(h.compressed)
	}
	return c.finish()
}

// dataHeader reads on to the next header of a data page; dictionaries on the way
// are loaded.
func (c *chunk) dataHeader() (pageHeader, error) {
	for {
		if c.off >= c.end {
			return pageHeader{}, c.damage("its pages end %d rows before the row group", c.left)
		}
		h, err := c.header()
		if err != nil {
			return h, err
		}
		switch h.typ {
		case pageData, pageDataV2:
			return h, nil
		case pageDictionary:
			if err := c.loadDictionary(&h); err != nil {
				return h, err
			}
		}
		// Pages of other types may be passed over by the format's rules.
		c.off += int64(h.compressed)
	}
}

// finish looks whether rows follow that the row group does not know of. What
// cannot be read as a page there is no row.
func (c *chunk) finish() error {
	c.release()
	c.page = page{}
	if c.off < c.end {
		n := min(minHeader, c.end-c.off)
		b, err := c.at(c.off, int(n))
		if err != nil {
			return err
		}
		h, _, err := parsePageHeader(b)
		if err == nil && h.body && h.values > 0 && (h.typ == pageData || h.typ == pageDataV2) {
			return c.damage("%d rows follow after those of the row group", h.values)
		}
	}
	return io.EOF
}

// advance passes over n rows of the page.
func (p *page) advance(n int, maxDef byte) {
	if p.def != nil {
		p.val += bytes.Count(p.def[p.row:p.row+n], []byte{maxDef})
	} else {
		p.val += n
	}
	p.row += n
}

// body returns the bytes of the page whose header was just read, and moves
// behind them.
func (c *chunk) body(h *pageHeader) ([]byte, error) {
	b, err := c.at(c.off, int(h.compressed))
	if err != nil {
		return nil, err
	}
	if h.hasCRC && verifyChecksums && crc32.ChecksumIEEE(b) != h.crc {
		return nil, c.damage("the checksum of the page at byte %d is %08x, not %08x", c.off, crc32.ChecksumIEEE(b), h.crc)
	}
	return b, nil
}

// unpack decompresses src into n bytes.
func (c *chunk) unpack(src []byte, n int) ([]byte, error) {
	if c.meta.Codec == format.Uncompressed || (n == 0 && len(src) == 0) {
		return src, nil
	}
	c.buf.plain = grow(c.buf.plain, n+slack)
	dst := c.buf.plain[:n]
	if err := decompress(c.meta.Codec, dst, src); err != nil {
		return nil, c.damage("the page at byte %d cannot be decompressed: %v", c.off, err)
	}
	return dst, nil
}

func (c *chunk) damage(what string, args ...any) error {
	return damage(c.pos, what, args...)
}
