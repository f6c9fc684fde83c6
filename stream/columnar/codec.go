package columnar

import (
	"bytes"
	"fmt"
	"io"
	"sync"

	"github.com/andybalholm/brotli"
	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/snappy"
	"github.com/klauspost/compress/zstd"
	"github.com/parquet-go/parquet-go/format"
	"github.com/pierrec/lz4/v4"
)

// The codecs are called directly, not through the library's wrappers: those
// let the output grow beyond the size in the page header, and the one for LZ4
// doubles its buffer for ever on a damaged page.

// maxRatio is the largest expansion a codec can reach (0: no useful bound). A
// snappy copy makes 64 bytes of 3, an LZ4 length byte 255 of 1, deflate at most
// 1032 of 1, a zstd block of 4 bytes at most 128 KiB.
var maxRatio = map[format.CompressionCodec]int64{
	format.Uncompressed: 1,
	format.Snappy:       22,
	format.Gzip:         1033,
	format.Lz4Raw:       256,
	format.Brotli:       0,
	format.Zstd:         1 << 15,
}

var (
	zstdPool = sync.Pool{New: func() any {
		d, err := zstd.NewReader(nil, zstd.WithDecoderConcurrency(1), zstd.WithDecodeAllCapLimit(true))
		if err != nil {
			return err
		}
		return d
	}}
	gzipPool   = sync.Pool{New: func() any { return new(gzip.Reader) }}
	brotliPool = sync.Pool{New: func() any { return brotli.NewReader(nil) }}
)

// decompress fills dst, whose length is the size that the header promises.
func decompress(codec format.CompressionCodec, dst, src []byte) error {
	var n int
	var err error
	switch codec {
	case format.Uncompressed:
		n = copy(dst, src)
		if len(src) > n {
			return fmt.Errorf("%d bytes where the page header promises %d", len(src), len(dst))
		}
	case format.Snappy:
		if n, err = snappy.DecodedLen(src); err == nil && n == len(dst) {
			_, err = snappy.Decode(dst, src)
		}
	case format.Gzip:
		z := gzipPool.Get().(*gzip.Reader)
		defer gzipPool.Put(z)
		if err = z.Reset(bytes.NewReader(src)); err == nil {
			n, err = readExactly(z, dst)
		}
	case format.Brotli:
		z := brotliPool.Get().(*brotli.Reader)
		defer brotliPool.Put(z)
		if err = z.Reset(bytes.NewReader(src)); err == nil {
			n, err = readExactly(z, dst)
		}
	case format.Zstd:
		z, ok := zstdPool.Get().(*zstd.Decoder)
		if !ok {
			return fmt.Errorf("no zstd decoder could be made")
		}
		defer zstdPool.Put(z)
		var out []byte
		out, err = z.DecodeAll(src, dst[:0:len(dst)])
		n = len(out)
	case format.Lz4Raw:
		n, err = lz4.UncompressBlock(src, dst)
	default:
		return fmt.Errorf("unknown codec %d", codec)
	}
	if err != nil {
		return fmt.Errorf("%s: %w", codec, err)
	}
	if n != len(dst) {
		return fmt.Errorf("%s: %d bytes where the page header promises %d", codec, n, len(dst))
	}
	return nil
}

// readExactly fills dst and checks that r ends there.
func readExactly(r io.Reader, dst []byte) (int, error) {
	n, err := io.ReadFull(r, dst)
	if err != nil {
		return n, err
	}
	var one [1]byte
	for range 8 {
		m, err := r.Read(one[:])
		if m > 0 {
			return n + m, nil
		}
		if err == io.EOF {
			return n, nil
		}
		if err != nil {
			return n, err
		}
	}
	return n, io.ErrNoProgress
}
