package columnar

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"math/bits"
	"os"
	"strings"
	"sync"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// Format opens Parquet files. It implements stream.Format.
type Format struct{}

// Name returns "parquet".
func (Format) Name() string { return "parquet" }

// Match goes by the first bytes, "PAR1" (or "PARE", an encrypted file, so that
// it is refused by name), and by the extension .parquet, so that a broken file
// is called broken and not read as text.
func (Format) Match(name string, head []byte) bool {
	return bytes.HasPrefix(head, []byte("PAR1")) || bytes.HasPrefix(head, []byte("PARE")) ||
		strings.HasSuffix(strings.ToLower(name), ".parquet")
}

// File is an opened Parquet file. It implements stream.Source.
type File struct {
	name    string
	file    io.ReaderAt
	closer  io.Closer
	remove  string // temporary file to remove at the end
	size    int64
	modTime time.Time
	piped   bool
	skipBad bool
	meta    *fileMeta
	cols    []column
	refused []Refused
	schema  stream.Schema
	first   []int64 // first row of each row group
	bytes   []int64 // shares of the file before each group, and the total
	worker  int64
	floats  bool // statistics of floats are believed
	parts   []part
	walkMu  sync.Mutex
	walks   map[walkKey]*walk
	pages   sharedPages
	closed  sync.Once
}

// Open implements stream.Format. The input is closed by the source, and here
// when there is an error. A pipe is copied to a temporary file in o.Scratch
// first, which is removed by Close at the latest.
func (Format) Open(ctx context.Context, in stream.Input, o stream.Options) (stream.Source, error) {
	f := &File{name: in.Name, file: in.File, closer: in.File, size: in.Size, modTime: in.ModTime, skipBad: o.SkipBad}
	if in.File == nil {
		if err := f.spool(ctx, in, o.Scratch); err != nil {
			return nil, err
		}
	}
	if err := f.open(o); err != nil {
		f.Close()
		return nil, err
	}
	return f, nil
}

func (f *File) open(o stream.Options) error {
	meta, dataEnd, err := readFooter(f.file, f.size, f.name)
	if err != nil {
		return err
	}
	f.floats = knowsNaN(meta.CreatedBy)
	var leaves int
	if f.cols, f.refused, leaves, err = buildColumns(meta, f.name); err != nil {
		return err
	}
	if err := checkGroups(meta, f.cols, leaves, dataEnd, f.name); err != nil {
		return err
	}
	f.meta = keep(meta, f.cols, leaves)
	for i := range f.cols {
		c := &f.cols[i]
		if k, ok := o.Kinds[c.name]; ok {
			if err := c.override(k, f.name); err != nil {
				return err
			}
		}
		f.schema.Columns = append(f.schema.Columns, stream.Column{Name: c.name, Kind: c.kind, Zoned: c.zoned, DateOnly: c.dateOnly})
	}
	for _, r := range f.refused {
		if _, ok := o.Kinds[r.Name]; ok {
			return stream.Usef("%s: column %s cannot be used: %s", f.name, r.Name, r.Reason)
		}
	}
	row, stored, before := int64(0), int64(0), make([]int64, len(f.meta.RowGroups)+1)
	for g := range f.meta.RowGroups {
		f.first = append(f.first, row)
		row += f.meta.RowGroups[g].NumRows
		for i := range f.cols {
			stored += max(0, f.meta.RowGroups[g].Columns[f.cols[i].leaf].TotalCompressedSize)
		}
		before[g+1] = stored
	}
	f.bytes = make([]int64, len(before))
	for g := range f.bytes {
		if stored > 0 {
			f.bytes[g] = mulDiv(f.size, before[g], stored)
		}
	}
	f.worker = f.workerBytes()
	f.cut()
	return nil
}

// mulDiv returns a*b/c for a, b >= 0, c > 0 and a result inside int64.
func mulDiv(a, b, c int64) int64 {
	hi, lo := bits.Mul64(uint64(a), uint64(b))
	q, _ := bits.Div64(hi%uint64(c), lo, uint64(c))
	return int64(q)
}

// share is the part of the file's bytes that counts for a row group.
func (f *File) share(g int) int64 { return f.bytes[g+1] - f.bytes[g] }

// Refused lists the columns that are not offered, and why.
func (f *File) Refused() []Refused { return f.refused }

// Schema implements stream.Source.
func (f *File) Schema() *stream.Schema { return &f.schema }

// Info implements stream.Source. WorkerBytes counts all columns, whether they
// will be used or not: per column three times the first data page of the largest
// row group (as stored, unpacked, decoded) and twice its dictionary.
func (f *File) Info() stream.Info {
	return stream.Info{Files: 1, Bytes: f.size, Rows: f.meta.NumRows, Segments: len(f.parts), Rewindable: true, Sampled: true, Format: "parquet", WorkerBytes: f.worker}
}

// workerBytes looks at the first pages of the largest row group, which stands for
// the others.
func (f *File) workerBytes() int64 {
	if len(f.meta.RowGroups) == 0 {
		return 0
	}
	largest := 0
	for g := range f.meta.RowGroups {
		if f.share(g) > f.share(largest) {
			largest = g
		}
	}
	total := int64(0)
	for i := range f.cols {
		m := &f.meta.RowGroups[largest].Columns[f.cols[i].leaf]
		est := 3 * min(m.TotalUncompressedSize, 1<<20)
		// A file with very many columns is not probed beyond the first ones.
		if i < 256 && m.NumValues > 0 {
			if p := f.probe(&f.cols[i], m); p > 0 {
				est = p
			}
		}
		total += est
	}
	return total
}

// probe reads the headers of a chunk up to the first data page. 0 if they cannot
// be read: that is an error of the scan, if it comes so far.
func (f *File) probe(c *column, m *chunkMeta) int64 {
	var ch chunk
	ch.open(f.file, c, m, m.NumValues, stream.Position{File: f.name})
	dict := int64(0)
	for range 4 {
		if ch.off >= ch.end {
			return 0
		}
		h, err := ch.header()
		if err != nil {
			return 0
		}
		switch h.typ {
		case pageDictionary:
			dict = 2 * int64(h.uncompressed)
		case pageData, pageDataV2:
			decoded := max(int64(h.uncompressed), 4*int64(h.values))
			return int64(h.compressed) + int64(h.uncompressed) + decoded + dict
		}
		ch.off += int64(h.compressed)
	}
	return 0
}

// checkUses refuses what a column cannot be read as.
func (f *File) checkUses(uses []stream.Use) error {
	for _, u := range uses {
		if u.Column < 0 || u.Column >= len(f.cols) {
			return fmt.Errorf("columnar: column index %d of %d", u.Column, len(f.cols))
		}
		if c := &f.cols[u.Column]; u.AsNumber && !c.kind.Numeric() {
			return stream.Usef("%s: column %s is of kind %s, not a number", f.name, c.name, c.kind)
		}
	}
	return nil
}

// Scan implements stream.Source. One segment is one row group, or a part of a
// huge one.
func (f *File) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	return f.ScanWhere(ctx, uses, nil)
}

// ScanWhere implements stream.Pruner. All statistics are looked at before the
// first segment: a few microseconds a row group.
func (f *File) ScanWhere(ctx context.Context, uses []stream.Use, where stream.Filter) (stream.Scan, error) {
	if err := f.checkUses(uses); err != nil {
		return nil, err
	}
	s := &scan{f: f, uses: append([]stream.Use(nil), uses...), out: f.excluded(uses, where)}
	if f.wholly(s.out) {
		s.files = 1
	}
	return s, ctx.Err()
}

type scan struct {
	f     *File
	uses  []stream.Use
	out   []bool // groups that are not read, nil for none
	mu    sync.Mutex
	next  int
	files int64 // to be told by the first segment that is not read
}

func (s *scan) Next(ctx context.Context) (stream.Segment, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.next >= len(s.f.parts) {
		return nil, io.EOF
	}
	p := s.f.parts[s.next]
	if s.out != nil && s.out[p.group] {
		seg := unreadPart{s.f, s.next, s.files}
		s.files = 0
		s.next++
		return seg, nil
	}
	seg := s.f.newSegment(s.uses, s.next, p.group, p.group+1)
	seg.from, seg.rows = p.first, p.rows
	s.next++
	return seg, nil
}

func (s *scan) Close() error {
	s.mu.Lock()
	s.next = len(s.f.parts)
	s.mu.Unlock()
	s.f.pages.clear()
	return nil
}

// Sample implements stream.Source. The segment begins at row floor(at x rows),
// but so that BatchRows rows are left if the file has them, and goes on to the
// end of the file. Pages before that row are passed over by their headers.
func (f *File) Sample(ctx context.Context, uses []stream.Use, at float64) (stream.Segment, error) {
	return f.SampleWhere(ctx, uses, at, nil)
}

// SampleWhere implements stream.Pruner.
func (f *File) SampleWhere(ctx context.Context, uses []stream.Use, at float64, where stream.Filter) (stream.Segment, error) {
	if err := f.checkUses(uses); err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if !(at >= 0 && at <= 1) {
		return nil, fmt.Errorf("columnar: sample at %v", at)
	}
	rows := f.meta.NumRows
	row := int64(math.Floor(at * float64(rows)))
	row = max(0, min(row, rows-stream.BatchRows))
	n := len(f.meta.RowGroups)
	if rows == 0 {
		s := f.newSegment(uses, -1, 0, 0)
		s.err = io.EOF
		return s, nil
	}
	g := 0
	for g+1 < n && f.first[g+1] <= row {
		g++
	}
	s := f.newSegment(uses, -1, g, n)
	s.from, s.rows = row-f.first[g], rows-row
	s.uses, s.where = append([]stream.Use(nil), uses...), where
	return s, nil
}

// Stamp implements stream.Source: name, size and time of change, looked up again
// by name. A pipe was copied when it was opened and cannot change.
func (f *File) Stamp() (string, error) {
	if f.piped {
		return fmt.Sprintf("%q %d", f.name, f.size), nil
	}
	st, err := os.Stat(f.name)
	if err != nil {
		return "", err
	}
	return fmt.Sprintf("%q %d %d", f.name, st.Size(), st.ModTime().UnixNano()), nil
}

// Close implements stream.Source.
func (f *File) Close() error {
	var err error
	f.closed.Do(func() {
		err = f.closer.Close()
		if f.remove != "" {
			err = errors.Join(err, os.Remove(f.remove))
		}
	})
	return err
}

// spool copies a pipe to a temporary file.
func (f *File) spool(ctx context.Context, in stream.Input, dir string) (err error) {
	defer in.Pipe.Close()
	tmp, err := os.CreateTemp(dir, "tallrow-*.parquet")
	if err != nil {
		return fmt.Errorf("%s: a Parquet file on a pipe is copied to a temporary file first: %w", in.Name, err)
	}
	f.file, f.closer, f.piped = tmp, tmp, true
	// Where an open file can be unlinked nothing is left behind by a crash.
	if os.Remove(tmp.Name()) != nil {
		f.remove = tmp.Name()
	}
	defer func() {
		if err != nil {
			f.Close()
		}
	}()
	head := make([]byte, 4)
	n, err := io.ReadFull(in.Pipe, head)
	if err != nil && err != io.EOF && err != io.ErrUnexpectedEOF {
		return fmt.Errorf("%s: %w", in.Name, err)
	}
	if n == 4 && string(head) != "PAR1" && string(head) != "PARE" {
		return damage(stream.Position{File: in.Name}, "it begins with %q, a Parquet file begins with \"PAR1\"", head)
	}
	if _, err := tmp.Write(head[:n]); err != nil {
		return fmt.Errorf("copying %s to a temporary file: %w", in.Name, err)
	}
	f.size = int64(n)
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		m, err := io.CopyN(tmp, in.Pipe, 1<<20)
		f.size += m
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return fmt.Errorf("copying %s to a temporary file: %w", in.Name, err)
		}
	}
}
