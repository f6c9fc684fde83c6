package delimited

import (
	"bufio"
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"sync"

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
	free   func()
	read   int64
}

// rawReader counts stored bytes and remembers why reading failed.
type rawReader struct {
	r   io.Reader
	ctx context.Context
	n   int64
	err error
}

func (r *rawReader) Read(p []byte) (n int, err error) {
	if err = r.ctx.Err(); err == nil {
		if pp, ok := r.r.(*pump); ok {
			n, err = pp.read(r.ctx, p)
		} else {
			n, err = r.r.Read(p)
		}
	}
	r.n += int64(n)
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
	p := newPump(in.Pipe)
	raw := &rawReader{r: p, ctx: ctx}
	br := bufio.NewReaderSize(raw, 64<<10)
	magic, err := br.Peek(4)
	t := &textReader{name: in.Name, raw: raw, coding: sniffCoding(magic), free: p.stop}
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
		// One decoder goroutine less: other workers parse while this one decodes.
		z, err := zstd.NewReader(br, zstd.WithDecoderConcurrency(1), zstd.WithDecoderLowmem(true))
		if err != nil {
			err = t.judge(err)
			t.Close()
			return err
		}
		free := t.free
		t.free = func() {
			z.Close()
			if free != nil {
				free()
			}
		}
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

func (t *textReader) Close() {
	if t.free != nil {
		t.free()
		t.free = nil
	}
}

// pump reads a pipe ahead in a goroutine of its own, so that a pipe that is
// silent does not hold up a cancelled context. The goroutine ends with the pipe
// or, when stopped, with the read under way.
type pump struct {
	full chan []byte
	back chan []byte
	done chan struct{}
	once sync.Once
	err  error // set before full is closed
	cur  []byte
	buf  []byte
}

func newPump(r io.Reader) *pump {
	p := &pump{full: make(chan []byte, 2), back: make(chan []byte, 4), done: make(chan struct{})}
	go func() {
		defer close(p.full)
		for made := 0; ; {
			var b []byte
			select {
			case b = <-p.back:
			default:
				if made < cap(p.back) {
					b = make([]byte, 128<<10)
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
			select {
			case p.full <- b[:n]:
			case <-p.done:
				p.err = io.ErrClosedPipe
				return
			}
			if err != nil {
				p.err = err
				return
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
		}
	}
	n := copy(b, p.cur)
	p.cur = p.cur[n:]
	return n, nil
}

func (p *pump) Read(b []byte) (int, error) { return p.read(context.Background(), b) }

func (p *pump) stop() { p.once.Do(func() { close(p.done) }) }
