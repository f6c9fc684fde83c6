package delimited

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"sync"

	"github.com/tallrow/tallrow/stream"
)

// maxOverhang bounds how far beyond its segment a row may run.
const maxOverhang = 64 << 20

// Format is the stream.Format of CSV and TSV text.
type Format struct{}

// Name returns "csv".
func (Format) Name() string { return "csv" }

// Match reports whether the name ends in .csv, .tsv, .tab or .txt (with or
// without .gz or .zst), or the head is compressed or free of NUL bytes. A head
// that begins like a Parquet file never matches.
func (Format) Match(name string, head []byte) bool {
	if bytes.HasPrefix(head, []byte("PAR1")) {
		return false
	}
	n := strings.ToLower(name)
	n = strings.TrimSuffix(strings.TrimSuffix(n, ".gz"), ".zst")
	for _, ext := range []string{".csv", ".tsv", ".tab", ".txt"} {
		if strings.HasSuffix(n, ext) {
			return true
		}
	}
	return sniffCoding(head) != plainText || (len(head) > 0 && bytes.IndexByte(head, 0) < 0)
}

// Open reads the head of the text and fixes delimiter, names and kinds. The
// input is closed also when Open fails.
//
// A file without any row is an error; one with a header only has no rows and
// text columns. An empty header name becomes the name that Options.NoHeader
// would give the column (c1, c2, ...); a name that stands twice is an error.
func (Format) Open(ctx context.Context, in stream.Input, o stream.Options) (stream.Source, error) {
	o = o.WithDefaults()
	s := &source{in: in, o: o, rules: newRules(o), overhang: maxOverhang}
	if err := s.open(ctx); err != nil {
		s.Close()
		return nil, err
	}
	return s, nil
}

type source struct {
	in       stream.Input
	o        stream.Options
	rules    *rules
	coding   coding
	head     *head
	overhang int
	pool     sync.Pool // *[]byte

	mu    sync.Mutex
	text  *textReader // of a pipe, after the head; nil for a file
	begun bool        // the one scan of a pipe
	spool *os.File
	whole int64 // size of the complete spool; 0 before
}

func (s *source) open(ctx context.Context) error {
	var t *textReader
	var err error
	if s.in.File != nil {
		var magic [8]byte
		n, rerr := s.in.File.ReadAt(magic[:min(8, s.in.Size)], 0)
		if rerr != nil && rerr != io.EOF {
			return fmt.Errorf("%s: %w", s.in.Name, rerr)
		}
		s.coding = sniffCoding(magic[:n])
		t, err = s.reopen(ctx)
	} else {
		t, err = openPipe(ctx, s.in)
		if err == nil {
			s.coding = t.coding
		}
		s.text = t
	}
	if err != nil {
		return err
	}
	h, err := readHead(t, s.in.Name, s.o, s.rules, s.overhang)
	if s.in.File != nil {
		t.Close()
	}
	if err != nil {
		return err
	}
	if s.in.File != nil {
		h.text = nil
	}
	s.head = h
	return nil
}

// reopen starts to read the text of a file.
func (s *source) reopen(ctx context.Context) (*textReader, error) {
	return openText(ctx, s.in.Name, io.NewSectionReader(s.in.File, 0, s.in.Size), s.coding)
}

func (s *source) Schema() *stream.Schema { return &s.head.schema }

// plain returns the seekable uncompressed text and its size, or nil.
func (s *source) plain() (io.ReaderAt, int64) {
	if s.in.File != nil {
		if s.coding == plainText {
			return s.in.File, s.in.Size
		}
		return nil, 0
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.whole > 0 {
		return s.spool, s.whole
	}
	return nil, 0
}

func (s *source) Info() stream.Info {
	ra, size := s.plain()
	i := stream.Info{
		Files: 1, Bytes: -1, Rows: -1, Segments: -1,
		Rewindable: s.in.File != nil || ra != nil, Sampled: ra != nil,
		Format: "csv" + s.coding.suffix(), WorkerBytes: 2 * int64(s.o.SegmentBytes),
	}
	if s.in.File != nil {
		i.Bytes = s.in.Size
	}
	if ra != nil {
		i.Segments = int(segments(s.head.start, size, s.o.SegmentBytes))
	}
	return i
}

// segments returns the number of byte ranges of the text from first to size.
func segments(first, size int64, length int) int64 {
	return (size - first + int64(length) - 1) / int64(length)
}

func (s *source) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	return s.scan(ctx, uses, false)
}

// ScanSome implements stream.Skipper. Compressed text and pipes are read whole.
func (s *source) ScanSome(ctx context.Context, uses []stream.Use, _ stream.Filter) (stream.Scan, error) {
	return s.scan(ctx, uses, !s.o.CountQuotes)
}

func (s *source) scan(ctx context.Context, uses []stream.Use, guess bool) (stream.Scan, error) {
	if err := s.check(uses); err != nil {
		return nil, err
	}
	if ra, size := s.plain(); ra != nil {
		p := newPlainScan(ctx, s, uses, ra, size)
		p.guess = guess
		return p, nil
	}
	if s.in.File != nil {
		t, err := s.reopen(ctx)
		if err != nil {
			return nil, err
		}
		if _, err := io.CopyN(io.Discard, t, s.head.start); err != nil {
			t.Close()
			if err == io.EOF {
				err = &stream.DamageError{Pos: stream.Position{File: s.in.Name}, What: "the text is shorter than it was before"}
			}
			return nil, err
		}
		return newSerialScan(ctx, s, uses, t, nil), nil
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.begun {
		return nil, fmt.Errorf("%s can be read only once", s.in.Name)
	}
	s.begun = true
	if s.o.Spool != "" {
		f, err := os.OpenFile(s.o.Spool, os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o600)
		if err != nil {
			return nil, fmt.Errorf("a copy of %s for the second pass: %w", s.in.Name, err)
		}
		s.spool = f
		if _, err := f.Write(s.head.text); err != nil {
			return nil, fmt.Errorf("a copy of %s for the second pass: %w", s.in.Name, err)
		}
	}
	return newSerialScan(ctx, s, uses, s.text, s.spool), nil
}

func (s *source) check(uses []stream.Use) error {
	for _, u := range uses {
		if u.Column < 0 || u.Column >= len(s.head.schema.Columns) {
			return fmt.Errorf("delimited: no column %d in %s", u.Column, s.in.Name)
		}
		if c := s.head.schema.Columns[u.Column]; u.AsNumber && !c.Kind.Numeric() {
			return fmt.Errorf("delimited: column %s of kind %v asked for as a number", c.Name, c.Kind)
		}
	}
	return nil
}

// spooled is called when the whole pipe has been read and copied.
func (s *source) spooled(size int64) {
	s.mu.Lock()
	s.whole = size
	s.mu.Unlock()
}

// Stamp names the file with its present size and time; a pipe has a constant
// stamp, because nothing can replace what was read from it.
func (s *source) Stamp() (string, error) {
	if s.in.File == nil {
		return s.in.Name, nil
	}
	fi, err := os.Stat(s.in.Name)
	if err != nil {
		return "", err
	}
	return fmt.Sprintf("%s %d %d", s.in.Name, fi.Size(), fi.ModTime().UnixNano()), nil
}

func (s *source) Close() error {
	var errs []error
	if s.in.File != nil {
		errs = append(errs, s.in.File.Close())
	}
	if s.text != nil {
		s.text.Close()
	}
	if s.in.Pipe != nil {
		errs = append(errs, s.in.Pipe.Close())
	}
	s.mu.Lock()
	if s.spool != nil {
		errs = append(errs, s.spool.Close())
	}
	s.mu.Unlock()
	return errors.Join(errs...)
}

// buffer returns an empty slice with room for n bytes.
func (s *source) buffer(n int) []byte {
	if p, ok := s.pool.Get().(*[]byte); ok && cap(*p) >= n {
		return (*p)[:0]
	}
	return make([]byte, 0, n)
}

// release takes a buffer back unless a long row has blown it up.
func (s *source) release(b []byte) {
	if c := cap(b); c > 0 && c <= 4*s.o.SegmentBytes+1<<20 {
		b = b[:0]
		s.pool.Put(&b)
	}
}
