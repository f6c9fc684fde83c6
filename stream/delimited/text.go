package delimited

import (
	"bufio"
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"sync"
	"sync/atomic"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"
	"github.com/tallrow/tallrow/stream"
)

// coding is how the text is compressed.
type coding uint8

const (
	plainText coding = iota
	gzipped
	zstandard
)

func (c coding) suffix() string { return [...]string{"", "+gzip", "+zstd"}[c] }

// sniffCoding knows the magic numbers of RFC 1952 and RFC 8878 (there also that
// of a skippable frame, with which parallel compressors begin).
func sniffCoding(b []byte) coding {
	switch {
	case bytes.HasPrefix(b, []byte{0x1f, 0x8b}):
		return gzipped
	case bytes.HasPrefix(b, []byte{0x28, 0xb5, 0x2f, 0xfd}),
		len(b) >= 4 && b[0]&0xf0 == 0x50 && bytes.HasPrefix(b[1:], []byte{0x2a, 0x4d, 0x18}):
		return zstandard
	}
	return plainText
}

// textReader reads uncompressed text and tells damage from failing storage.
type textReader struct {
	name   string
	coding coding
	raw    *rawReader
	r      io.Reader
	read   int64

	zstd  *zstd.Decoder
	ahead *pump // of the decoded text
}

// rawReader counts stored bytes and remembers why reading failed.
type rawReader struct {
	r    io.Reader // of a file
	pump *pump     // of a pipe
	ctx  context.Context
	n    atomic.Int64
	err  error
}

func (r *rawReader) Read(p []byte) (n int, err error) {
	if err = r.ctx.Err(); err == nil {
		if r.pump != nil {
			n, err = r.pump.read(r.ctx, p)
		} else {
			n, err = r.r.Read(p)
		}
	}
	r.n.Add(int64(n))
	if err != nil && err != io.EOF && r.err == nil {
		r.err = err
	}
	return n, err
}

func openText(ctx context.Context, name string, r io.Reader, c coding) (*textReader, error) {
	raw := &rawReader{r: r, ctx: ctx}
	t := &textReader{name: name, coding: c, raw: raw}
	if c == plainText {
		t.r = raw
		return t, nil
	}
	return t, t.decode(bufio.NewReaderSize(raw, 256<<10))
}

func openPipe(ctx context.Context, in stream.Input) (*textReader, error) {
	p := newPump(in.Pipe, false)
	raw := &rawReader{pump: p, ctx: ctx}
	br := bufio.NewReaderSize(raw, 64<<10)
	magic, err := br.Peek(4)
	t := &textReader{name: in.Name, raw: raw, coding: sniffCoding(magic)}
	if err != nil && err != io.EOF {
		t.Close()
		return nil, fmt.Errorf("%s: %w", in.Name, err)
	}
	if err := t.decode(br); err != nil {
		return nil, err
	}
	return t, nil
}

func (t *textReader) decode(br *bufio.Reader) error {
	switch t.coding {
	case gzipped:
		z, err := gzip.NewReader(br)
		if err != nil {
			err = t.judge(err)
			t.Close()
			return err
		}
		t.r = z
	case zstandard:
		// One goroutine for it, which readAhead starts.
		z, err := zstd.NewReader(br, zstd.WithDecoderConcurrency(1), zstd.WithDecoderLowmem(true))
		if err != nil {
			err = t.judge(err)
			t.Close()
			return err
		}
		t.zstd = z
		t.r = z
	default:
		t.r = br
	}
	return nil
}

// judge turns an error of the decoder into a message about the input.
func (t *textReader) judge(err error) error {
	switch {
	case t.raw.err != nil:
		return fmt.Errorf("%s: %w", t.name, t.raw.err)
	case errors.Is(err, io.ErrUnexpectedEOF), err == io.EOF:
		return &stream.DamageError{Pos: stream.Position{File: t.name},
			What: fmt.Sprintf("the compressed data end too early, after %d bytes of text", t.read)}
	}
	return &stream.DamageError{Pos: stream.Position{File: t.name},
		What: fmt.Sprintf("after %d bytes of text: %v", t.read, err)}
}

// Read returns io.EOF only at the sound end of the text.
func (t *textReader) Read(p []byte) (int, error) {
	n, err := t.r.Read(p)
	t.read += int64(n)
	if err != nil && err != io.EOF {
		err = t.judge(err)
	}
	return n, err
}

// readAhead goes on decoding in a goroutine of its own, so that the workers need
// not wait for it, nor it for them. ctx ends it.
func (t *textReader) readAhead(ctx context.Context) *pump {
	t.raw.ctx = ctx
	t.ahead = newPump(t, true)
	return t.ahead
}

func (t *textReader) Close() {
	if t.raw.pump != nil {
		t.raw.pump.stop()
	}
	if t.ahead != nil {
		t.ahead.stop()
		t.ahead.wait()
	}
	if t.zstd != nil {
		t.zstd.Close()
	}
}

// pump reads ahead in a goroutine of its own, up to pumpChunks chunks, so that
// the other end of a pipe can go on while the workers are busy, and a silent one
// does not hold up a cancelled context. The goroutine ends with what it reads or,
// when stopped, with the read under way.
type pump struct {
	full chan []byte
	back chan []byte
	done chan struct{}
	once sync.Once
	err  error // set before full is closed
	cur  []byte
	buf  []byte
}

const (
	pumpChunks = 64
	pumpChunk  = 64 << 10
)

// newPump reads r; whole says that a chunk should be full before it is passed on.
func newPump(r io.Reader, whole bool) *pump {
	p := &pump{full: make(chan []byte, pumpChunks), back: make(chan []byte, pumpChunks+1), done: make(chan struct{})}
	go func() {
		defer close(p.full)
		for made := 0; p.err == nil; {
			var b []byte
			select {
			case b = <-p.back:
			default:
				if made < cap(p.back) {
					b = make([]byte, pumpChunk)
					made++
					break
				}
				select {
				case b = <-p.back:
				case <-p.done:
					p.err = io.ErrClosedPipe
					return
				}
			}
			n, err := r.Read(b)
			for whole && err == nil && n < len(b) {
				var m int
				m, err = r.Read(b[n:])
				n += m
			}
			select {
			case p.full <- b[:n]:
				p.err = err
			case <-p.done:
				p.err = io.ErrClosedPipe
			}
		}
	}()
	return p
}

func (p *pump) read(ctx context.Context, b []byte) (int, error) {
	for len(p.cur) == 0 {
		if p.buf != nil {
			p.back <- p.buf[:cap(p.buf)]
			p.buf = nil
		}
		select {
		case c, ok := <-p.full:
			if !ok {
				return 0, p.err
			}
			p.cur, p.buf = c, c
		case <-ctx.Done():
			return 0, ctx.Err()
		case <-p.done:
			return 0, io.ErrClosedPipe
		}
	}
	n := copy(b, p.cur)
	p.cur = p.cur[n:]
	return n, nil
}

// stop ends the pump: nobody may read from it any more, and who does gets an
// error.
func (p *pump) stop() { p.once.Do(func() { close(p.done) }) }

// wait returns when the goroutine of a stopped pump is gone.
func (p *pump) wait() {
	for range p.full {
	}
}
