package columnar

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"

	"github.com/parquet-go/parquet-go/encoding/thrift"
	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// minFile is the length of the two magic words, the footer length and one byte.
const minFile = 13

func damage(pos stream.Position, what string, args ...any) error {
	return &stream.DamageError{Pos: pos, What: fmt.Sprintf(what, args...)}
}

// readFull reads len(b) bytes at off. A file that ends early is damaged; any
// other failure is passed on as it is.
func readFull(r io.ReaderAt, b []byte, off int64, pos stream.Position) error {
	n, err := r.ReadAt(b, off)
	if n == len(b) {
		return nil
	}
	if err == nil || errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return damage(pos, "the file ends at byte %d, inside what should reach to byte %d", off+int64(n), off+int64(len(b)))
	}
	return fmt.Errorf("%s: %w", pos, err)
}

// readFooter reads and decodes the footer. dataEnd is where the column chunks
// must end.
func readFooter(r io.ReaderAt, size int64, name string) (meta *format.FileMetaData, dataEnd int64, err error) {
	pos := stream.Position{File: name}
	if size < minFile {
		return nil, 0, damage(pos, "it has %d bytes, too few for a Parquet file", size)
	}
	var head [4]byte
	var tail [8]byte
	if err := readFull(r, head[:], 0, pos); err != nil {
		return nil, 0, err
	}
	if err := readFull(r, tail[:], size-8, pos); err != nil {
		return nil, 0, err
	}
	if string(head[:]) == "PARE" || string(tail[4:]) == "PARE" {
		return nil, 0, fmt.Errorf("%s: the file is encrypted, which is not supported", name)
	}
	if string(head[:]) != "PAR1" {
		return nil, 0, damage(pos, "it begins with %q, a Parquet file begins with \"PAR1\"", head[:])
	}
	if string(tail[4:]) != "PAR1" {
		return nil, 0, damage(pos, "it ends with %q, a Parquet file ends with \"PAR1\" (was it cut off?)", tail[4:])
	}
	n := int64(binary.LittleEndian.Uint32(tail[:]))
	if n == 0 || n > size-12 {
		return nil, 0, damage(pos, "a footer of %d bytes does not fit into a file of %d bytes", n, size)
	}
	dataEnd = size - 8 - n
	footer := make([]byte, n)
	if err := readFull(r, footer, dataEnd, pos); err != nil {
		return nil, 0, err
	}
	w := wire{b: footer}
	if err := w.skipStruct(0); err != nil {
		return nil, 0, damage(pos, "the footer cannot be read: %v", err)
	}
	meta = new(format.FileMetaData)
	defer func() {
		if p := recover(); p != nil {
			err = damage(pos, "the footer cannot be read: %v", p)
		}
	}()
	// Bytes after the structure are the signature of a file with signed footer;
	// such a file may be read as it stands.
	if err := thrift.Unmarshal(new(thrift.CompactProtocol), footer[:w.i], meta); err != nil {
		return nil, 0, damage(pos, "the footer cannot be read: %v", err)
	}
	return meta, dataEnd, nil
}

// fileMeta is what is kept of a footer: of a file with many row groups it would
// otherwise be most of what a reader holds.
type fileMeta struct {
	NumRows      int64
	CreatedBy    string
	ColumnOrders []format.ColumnOrder
	RowGroups    []groupMeta
}

type groupMeta struct {
	NumRows int64
	Columns []chunkMeta // by leaf; those of refused columns are empty
}

type chunkMeta struct {
	Codec                 format.CompressionCodec
	Encodings             uint32 // one bit for each
	NumValues             int64
	TotalCompressedSize   int64
	TotalUncompressedSize int64
	DataPageOffset        int64
	DictionaryPageOffset  int64
	Statistics            statistics
}

type statistics struct {
	Min, Max, MinValue, MaxValue []byte
	NullCount                    int64
}

// has reports whether the chunk says that it uses an encoding.
func (m *chunkMeta) has(e format.Encoding) bool { return e >= 0 && e < 32 && m.Encodings>>e&1 == 1 }

// keep takes over what the columns need of a footer.
func keep(meta *format.FileMetaData, cols []column, leaves int) *fileMeta {
	f := &fileMeta{NumRows: meta.NumRows, CreatedBy: meta.CreatedBy, ColumnOrders: meta.ColumnOrders, RowGroups: make([]groupMeta, len(meta.RowGroups))}
	for g := range f.RowGroups {
		rg := &meta.RowGroups[g]
		to := &f.RowGroups[g]
		to.NumRows, to.Columns = rg.NumRows, make([]chunkMeta, leaves)
		for i := range cols {
			to.Columns[cols[i].leaf] = keepChunk(&rg.Columns[cols[i].leaf].MetaData)
		}
	}
	return f
}

func keepChunk(m *format.ColumnMetaData) chunkMeta {
	st := &m.Statistics
	c := chunkMeta{Codec: m.Codec, NumValues: m.NumValues, TotalCompressedSize: m.TotalCompressedSize, TotalUncompressedSize: m.TotalUncompressedSize,
		DataPageOffset: m.DataPageOffset, DictionaryPageOffset: m.DictionaryPageOffset,
		Statistics: statistics{st.Min, st.Max, st.MinValue, st.MaxValue, st.NullCount}}
	for _, e := range m.Encoding {
		if e >= 0 && e < 32 {
			c.Encodings |= 1 << e
		}
	}
	return c
}

// checkGroups checks the row groups against the schema and the file.
func checkGroups(meta *format.FileMetaData, cols []column, leaves int, dataEnd int64, name string) error {
	total := int64(0)
	for g := range meta.RowGroups {
		rg := &meta.RowGroups[g]
		pos := stream.Position{File: name, Group: g + 1}
		if rg.NumRows < 0 || rg.NumRows > 1<<56 {
			return damage(pos, "it has %d rows", rg.NumRows)
		}
		total += rg.NumRows
		if len(rg.Columns) != leaves {
			return damage(pos, "it has %d columns, the schema has %d", len(rg.Columns), leaves)
		}
		for i := range cols {
			c := &cols[i]
			cc := &rg.Columns[c.leaf]
			m := &cc.MetaData
			pos.Column = c.name
			switch {
			case cc.FilePath != "":
				return fmt.Errorf("%s: the column lies in another file (%s), which is not supported", pos, cc.FilePath)
			case cc.CryptoMetadata.Value != nil || len(cc.EncryptedColumnMetadata) > 0:
				return fmt.Errorf("%s: the column is encrypted, which is not supported", pos)
			case m.Type != c.phys:
				return damage(pos, "its values are %s, the schema says %s", m.Type, c.phys)
			case m.NumValues != rg.NumRows:
				return damage(pos, "it has %d values, the row group has %d rows", m.NumValues, rg.NumRows)
			}
			if rg.NumRows == 0 {
				continue
			}
			k := keepChunk(m)
			start := chunkStart(&k)
			if start < 4 || m.TotalCompressedSize <= 0 || start > dataEnd || m.TotalCompressedSize > dataEnd-start {
				return damage(pos, "its %d bytes at byte %d lie outside the file's data (4 to %d)", m.TotalCompressedSize, start, dataEnd)
			}
			if m.TotalUncompressedSize < 0 {
				return damage(pos, "its uncompressed size is %d", m.TotalUncompressedSize)
			}
			if _, ok := maxRatio[m.Codec]; !ok {
				return fmt.Errorf("%s: compressed with %s, which is not supported (snappy, gzip, zstd, brotli and LZ4_RAW are)", pos, m.Codec)
			}
		}
	}
	if total != meta.NumRows {
		return damage(stream.Position{File: name}, "its row groups have %d rows, its footer says %d", total, meta.NumRows)
	}
	return nil
}

// chunkStart is the place of the first page. Writers leave the dictionary's
// offset 0, or wrong, when there is no dictionary.
func chunkStart(m *chunkMeta) int64 {
	if d := m.DictionaryPageOffset; d > 0 && d < m.DataPageOffset {
		return d
	}
	return m.DataPageOffset
}
