package columnar

import (
	"encoding/binary"
	"errors"
)

// Wire types of the Thrift compact protocol.
const (
	wireTrue   = 1
	wireFalse  = 2
	wireI8     = 3
	wireI16    = 4
	wireI32    = 5
	wireI64    = 6
	wireDouble = 7
	wireBinary = 8
	wireList   = 9
	wireSet    = 10
	wireMap    = 11
	wireStruct = 12
	wireUUID   = 13
)

// maxWireDepth bounds the nesting of structs and lists; footers need about 8.
const maxWireDepth = 32

var (
	errWireShort = errors.New("it ends in the middle of a field")
	errWire      = errors.New("it is not a valid compact-protocol structure")
)

// wire reads the Thrift compact protocol from a byte slice. It exists beside
// the library's decoder because that one allocates lists and strings of the
// length a damaged byte claims, before it looks whether they can be there.
type wire struct {
	b []byte
	i int
}

func (w *wire) byte() (byte, error) {
	if w.i >= len(w.b) {
		return 0, errWireShort
	}
	w.i++
	return w.b[w.i-1], nil
}

func (w *wire) uvarint() (uint64, error) {
	v, n := binary.Uvarint(w.b[w.i:])
	if n == 0 {
		return 0, errWireShort
	}
	if n < 0 {
		return 0, errWire
	}
	w.i += n
	return v, nil
}

func (w *wire) int32() (int32, error) {
	u, err := w.uvarint()
	v := int64(u>>1) ^ -int64(u&1)
	if err == nil && v != int64(int32(v)) {
		err = errWire
	}
	return int32(v), err
}

func (w *wire) advance(n uint64) error {
	if n > uint64(len(w.b)-w.i) {
		return errWireShort
	}
	w.i += int(n)
	return nil
}

// field reads a field header; typ 0 is the end of the struct.
func (w *wire) field(last int16) (id int16, typ byte, err error) {
	b, err := w.byte()
	if err != nil || b == 0 {
		return 0, 0, err
	}
	if d := b >> 4; d != 0 {
		return last + int16(d), b & 15, nil
	}
	v, err := w.int32()
	if err == nil && v != int32(int16(v)) {
		err = errWire
	}
	return int16(v), b & 15, err
}

// skip passes over one value. inList tells that booleans have a byte of their
// own there.
func (w *wire) skip(typ byte, inList bool, depth int) error {
	if depth > maxWireDepth {
		return errWire
	}
	switch typ {
	case wireTrue, wireFalse:
		if inList {
			return w.advance(1)
		}
		return nil
	case wireI8:
		return w.advance(1)
	case wireI16, wireI32, wireI64:
		_, err := w.uvarint()
		return err
	case wireDouble:
		return w.advance(8)
	case wireUUID:
		return w.advance(16)
	case wireBinary:
		n, err := w.uvarint()
		if err != nil {
			return err
		}
		return w.advance(n)
	case wireList, wireSet:
		b, err := w.byte()
		if err != nil {
			return err
		}
		n := uint64(b >> 4)
		if n == 15 {
			if n, err = w.uvarint(); err != nil {
				return err
			}
		}
		return w.skipMany(n, depth, b&15)
	case wireMap:
		n, err := w.uvarint()
		if err != nil || n == 0 {
			return err
		}
		b, err := w.byte()
		if err != nil {
			return err
		}
		return w.skipMany(n, depth, b>>4, b&15)
	case wireStruct:
		return w.skipStruct(depth)
	}
	return errWire
}

// skipMany passes over n tuples of the types. Each item has at least one byte.
func (w *wire) skipMany(n uint64, depth int, types ...byte) error {
	if n > uint64(len(w.b)-w.i) {
		return errWireShort
	}
	for ; n > 0; n-- {
		for _, t := range types {
			if err := w.skip(t, true, depth+1); err != nil {
				return err
			}
		}
	}
	return nil
}

func (w *wire) skipStruct(depth int) error {
	last := int16(0)
	for {
		id, typ, err := w.field(last)
		if err != nil || typ == 0 {
			return err
		}
		if err := w.skip(typ, false, depth+1); err != nil {
			return err
		}
		last = id
	}
}

// fields calls f for each field of a struct. f reports whether it read the
// value; otherwise it is skipped.
func (w *wire) fields(f func(id int16, typ byte) (bool, error)) error {
	last := int16(0)
	for {
		id, typ, err := w.field(last)
		if err != nil || typ == 0 {
			return err
		}
		used, err := f(id, typ)
		if err != nil {
			return err
		}
		if !used {
			if err := w.skip(typ, false, 1); err != nil {
				return err
			}
		}
		last = id
	}
}

// Page types of the format.
const (
	pageData       = 0
	pageIndex      = 1
	pageDictionary = 2
	pageDataV2     = 3
)

// pageHeader is what the reader needs of a page header.
type pageHeader struct {
	size                     int64 // of the header itself
	typ                      int32
	uncompressed, compressed int32
	crc                      uint32
	hasCRC                   bool
	body                     bool // the sub-header that belongs to typ was there
	values, nulls, rows      int32
	encoding, defEncoding    int32
	defBytes, repBytes       int32
	packed                   bool // V2: the values are compressed
}

// parsePageHeader reads a page header from the front of b and returns its
// length. errWireShort means that b may be too short.
func parsePageHeader(b []byte) (h pageHeader, n int, err error) {
	w := wire{b: b}
	h = pageHeader{typ: -1, uncompressed: -1, compressed: -1, packed: true}
	read := func(p *int32, typ byte) (bool, error) {
		if typ != wireI32 {
			return false, errWire
		}
		v, err := w.int32()
		*p = v
		return true, err
	}
	var subs [4]bool
	sub := func(page int, dst ...*int32) (bool, error) {
		subs[page] = true
		return true, w.fields(func(id int16, typ byte) (bool, error) {
			if page == pageDataV2 && id == 7 && (typ == wireTrue || typ == wireFalse) {
				h.packed = typ == wireTrue
				return true, nil
			}
			if id < 1 || int(id) > len(dst) || dst[id-1] == nil {
				return false, nil
			}
			return read(dst[id-1], typ)
		})
	}
	err = w.fields(func(id int16, typ byte) (bool, error) {
		switch id {
		case 1:
			return read(&h.typ, typ)
		case 2:
			return read(&h.uncompressed, typ)
		case 3:
			return read(&h.compressed, typ)
		case 4:
			var v int32
			ok, err := read(&v, typ)
			h.crc, h.hasCRC = uint32(v), true
			return ok, err
		}
		if typ != wireStruct {
			return false, nil
		}
		switch id {
		case 5:
			return sub(pageData, &h.values, &h.encoding, &h.defEncoding)
		case 7:
			return sub(pageDictionary, &h.values, &h.encoding)
		case 8:
			return sub(pageDataV2, &h.values, &h.nulls, &h.rows, &h.encoding, &h.defBytes, &h.repBytes)
		}
		return false, nil
	})
	if err != nil {
		return h, 0, err
	}
	if h.compressed < 0 || h.uncompressed < 0 || h.values < 0 || h.nulls < 0 || h.rows < 0 || h.defBytes < 0 || h.repBytes < 0 || h.typ < 0 {
		return h, 0, errWire
	}
	if h.typ < 4 {
		h.body = subs[h.typ] || h.typ == pageIndex
	}
	return h, w.i, nil
}
