package stream

import (
	"context"
	"io"
	"time"
)

// Use asks a source for one column.
type Use struct {
	// Column is the index in the source's schema.
	Column int
	// AsNumber asks for the cells as Float64 whatever numeric kind the column
	// has (Int64, Uint64, Bool are converted; a CSV cell such as 12.5 then fits a
	// column whose first cells were whole). It may be set for numeric kinds only.
	AsNumber bool
}

// Source is an input with one schema. Its methods may be called from several
// goroutines.
type Source interface {
	// Schema is fixed from the first rows (CSV) or the footer (Parquet).
	Schema() *Schema
	// Info says what is known before a scan.
	Info() Info
	// Scan starts a pass over all segments, delivering the columns in uses, in
	// that order. A source that is not Info().Rewindable allows one Scan.
	Scan(ctx context.Context, uses []Use) (Scan, error)
	// Sample opens a reader at the first row at or after the fraction at of the
	// input (0 <= at <= 1; 1 means the last BatchRows rows or so). The same at
	// gives the same rows every time. Malformed rows are passed over without
	// being counted. It returns ErrNoSample if the source cannot seek.
	Sample(ctx context.Context, uses []Use, at float64) (Segment, error)
	// Stamp identifies the present state of the input: names, sizes, times. Two
	// equal stamps say that no file was replaced in between.
	Stamp() (string, error)
	Close() error
}

// Info is what a source knows before a scan. Unknown numbers are -1.
type Info struct {
	Files      int
	Bytes      int64 // as stored, all files
	Rows       int64
	Segments   int
	Rewindable bool // Scan can be called again
	Sampled    bool // Sample works
	// Format names the formats, for reports: "csv", "parquet", "csv+gzip", ...
	Format string
	// Skipped counts names in folders that were passed over (leading _ or .).
	Skipped int
	// WorkerBytes estimates the bytes of memory one worker holds while it reads.
	WorkerBytes int64
}

// Scan is one pass. Next may be called from several goroutines.
type Scan interface {
	// Next hands out segments in the order of their numbers; io.EOF after the
	// last. It may read ahead (a pipe does). After an error no more segments
	// come.
	Next(ctx context.Context) (Segment, error)
	// Close stops the pass and frees what it holds. Segments that were handed
	// out must be closed first.
	Close() error
}

// Segment reads the rows of one segment, in order. One goroutine at a time.
type Segment interface {
	// Number counts over the whole input from 0.
	Number() int
	// Read fills b with the next min(BatchRows, rows left) rows; io.EOF when
	// there are none left (b.Rows is then 0). A row that cannot be read is a
	// *RowError, or counted and passed over when Options.SkipBad is set.
	// Damage of the file is an error that wraps ErrDamaged.
	Read(b *Batch) error
	// Locate turns a mark of the last batch into a place for messages. It may
	// be slow (counting lines), and works until Close.
	Locate(mark int64) Position
	// Tally is what the segment has seen so far.
	Tally() SegmentTally
	Close() error
}

// SegmentTally counts what a segment has read.
type SegmentTally struct {
	Rows      int64 // delivered rows, malformed and excluded ones
	Malformed int64 // rows passed over under Options.SkipBad
	Bytes     int64 // bytes of the input as stored, for progress
	// Excluded counts rows that were not read because metadata alone say that the
	// row filter excludes them, see Pruner. Files is 1 at the first segment of a
	// file of which no row is read.
	Excluded int64
	Files    int64
	// Quotes says how text was read, Lines how many newlines are in it; they are there
	// when the segment has been read.
	Quotes Quotes
	Lines  int64
	// Problems describes the first malformed rows, at most MaxProblems.
	Problems []*RowError
}

// MaxProblems is how many skipped rows are described one by one.
const MaxProblems = 10

// Format opens files of one kind of storage.
type Format interface {
	// Name is the word that --format takes: "csv" or "parquet".
	Name() string
	// Match reports whether a file looks like this format, from its name and
	// its first bytes (up to 64 KiB, uncompressed magic only).
	Match(name string, head []byte) bool
	// Open opens the file. Input is closed by the source.
	Open(ctx context.Context, in Input, o Options) (Source, error)
}

// Input is one opened file or pipe.
type Input struct {
	// Name is the path as the user gave it, or "standard input".
	Name string
	// File allows reading at any place; nil for a pipe.
	File ReaderAtCloser
	// Size of File in bytes.
	Size int64
	// ModTime of File.
	ModTime time.Time
	// Pipe is the reader when File is nil.
	Pipe io.ReadCloser
}

// ReaderAtCloser is what a format needs of a file.
type ReaderAtCloser interface {
	io.ReaderAt
	io.Closer
}

// Options say how to read. The zero value is usable after WithDefaults.
type Options struct {
	// Format is "auto", "csv" or "parquet".
	Format string
	// NoHeader: the first CSV row is data; columns are named c1, c2, ...
	NoHeader bool
	// DecimalComma: CSV numbers have a comma where others have a point.
	DecimalComma bool
	// Null lists the cells that are missing beside the empty one; nil means
	// NA, null and NaN.
	Null []string
	// Kinds overrides the kinds of columns by name.
	Kinds map[string]Kind
	// SkipBad counts and passes over malformed rows instead of stopping.
	SkipBad bool
	// Spool is the path of a new file into which a pipe's bytes are copied
	// while they are read, so that it can be read again; "" for none.
	Spool string
	// Scratch is the folder for temporary files ("" for the system's): a
	// Parquet file on a pipe is copied there whole.
	Scratch string
	// CountQuotes: ScanSome counts all quotes before a segment of text and does not
	// guess whether it begins inside quotes.
	CountQuotes bool
	// SegmentBytes is the length of a CSV segment; 0 means 4 MiB. Only tests
	// change it.
	SegmentBytes int
}

// WithDefaults returns o with the zero values replaced by the defaults.
func (o Options) WithDefaults() Options {
	if o.Format == "" {
		o.Format = "auto"
	}
	if o.Null == nil {
		o.Null = []string{"NA", "null", "NaN"}
	}
	if o.SegmentBytes == 0 {
		o.SegmentBytes = 4 << 20
	}
	return o
}
