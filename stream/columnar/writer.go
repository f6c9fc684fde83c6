package columnar

import (
	"errors"
	"fmt"
	"io"
	"math"
	"unsafe"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/compress"
	"github.com/tallrow/tallrow/stream"
)

// WriteColumn describes a column of a file to be written.
type WriteColumn struct {
	Name string
	Kind stream.Kind
	// Optional columns may have missing cells. In a Float64 column that is not
	// optional NaN is written as a number.
	Optional bool
	// DateOnly writes a Time column as days; its cells must be midnights.
	DateOnly bool
	// Zoned marks a Time column as instants. Times are stored in nanoseconds.
	Zoned bool
}

// WriterOptions say how to write. The zero value is usable.
type WriterOptions struct {
	// RowsPerGroup is the length of a row group; 0 means 131,072.
	RowsPerGroup int
	// PageBytes is the size of a page before compression, 1 MiB at most; 0 means
	// 256 KiB.
	PageBytes int
	// Codec is "snappy", "zstd", "gzip", "none", "brotli" or "lz4"; "" means
	// snappy.
	Codec string
	// DictBytes is the size of a dictionary above which the rest of a row group
	// is written without; 0 means 4 MiB.
	DictBytes int
}

const (
	defaultGroupRows = 131072
	defaultPageBytes = 256 << 10
	maxPageBytes     = 1 << 20
	defaultDictBytes = 4 << 20
)

var codecs = map[string]compress.Codec{
	"": &parquet.Snappy, "snappy": &parquet.Snappy, "zstd": &parquet.Zstd, "gzip": &parquet.Gzip,
	"brotli": &parquet.Brotli, "lz4": &parquet.Lz4Raw, "none": &parquet.Uncompressed,
}

// Writer writes batches to a Parquet file, with a checksum in every page and
// text in dictionaries. Not for several goroutines.
type Writer struct {
	cols     []WriteColumn
	w        *parquet.GenericWriter[any]
	out      []*parquet.ColumnWriter
	perGroup int
	inGroup  int
	rows     int64
	vals     []parquet.Value
	err      error
}

// orderedGroup is a schema root whose fields keep their order; parquet.Group
// sorts them by name.
type orderedGroup struct {
	parquet.Group
	order []string
}

func (g orderedGroup) Fields() []parquet.Field {
	byName := make(map[string]parquet.Field, len(g.order))
	for _, f := range g.Group.Fields() {
		byName[f.Name()] = f
	}
	fields := make([]parquet.Field, len(g.order))
	for i, n := range g.order {
		fields[i] = byName[n]
	}
	return fields
}

// NewWriter returns a Writer of the columns to w. The file is complete after
// Close.
func NewWriter(w io.Writer, cols []WriteColumn, o WriterOptions) (*Writer, error) {
	if o.RowsPerGroup == 0 {
		o.RowsPerGroup = defaultGroupRows
	}
	if o.PageBytes == 0 {
		o.PageBytes = defaultPageBytes
	}
	if o.DictBytes == 0 {
		o.DictBytes = defaultDictBytes
	}
	codec, ok := codecs[o.Codec]
	switch {
	case !ok:
		return nil, fmt.Errorf("columnar: unknown codec %q (snappy, zstd, gzip, brotli, lz4 or none)", o.Codec)
	case o.RowsPerGroup < 0 || o.DictBytes < 0:
		return nil, fmt.Errorf("columnar: %d rows in a group, %d bytes in a dictionary", o.RowsPerGroup, o.DictBytes)
	case o.PageBytes < 0 || o.PageBytes > maxPageBytes:
		return nil, fmt.Errorf("columnar: pages of %d bytes, want at most %d", o.PageBytes, maxPageBytes)
	case len(cols) == 0:
		return nil, errors.New("columnar: a file without columns")
	}
	root := orderedGroup{Group: parquet.Group{}}
	for _, c := range cols {
		if _, ok := root.Group[c.Name]; ok || c.Name == "" {
			return nil, fmt.Errorf("columnar: column name %q is empty or there twice", c.Name)
		}
		var node parquet.Node
		switch c.Kind {
		case stream.Float64:
			node = parquet.Leaf(parquet.DoubleType)
		case stream.Int64:
			node = parquet.Leaf(parquet.Int64Type)
		case stream.Uint64:
			node = parquet.Uint(64)
		case stream.Bool:
			node = parquet.Leaf(parquet.BooleanType)
		case stream.Text:
			node = parquet.Encoded(parquet.String(), &parquet.RLEDictionary)
		case stream.Time:
			node = parquet.TimestampAdjusted(parquet.Nanosecond, c.Zoned)
			if c.DateOnly {
				node = parquet.Date()
			}
		default:
			return nil, fmt.Errorf("columnar: column %q has the unknown kind %s", c.Name, c.Kind)
		}
		if c.Optional {
			node = parquet.Optional(node)
		}
		root.Group[c.Name] = node
		root.order = append(root.order, c.Name)
	}
	pw := parquet.NewGenericWriter[any](w, parquet.NewSchema("rows", root),
		parquet.Compression(codec), parquet.PageBufferSize(o.PageBytes), parquet.DataPageVersion(1),
		parquet.DataPageStatistics(false), parquet.DictionaryMaxBytes(int64(o.DictBytes)),
		parquet.CreatedBy("tallrow", "1", ""))
	return &Writer{
		cols: append([]WriteColumn(nil), cols...), w: pw, out: pw.ColumnWriters(), perGroup: o.RowsPerGroup,
		vals: make([]parquet.Value, 0, stream.BatchRows),
	}, nil
}

// Write appends the rows of b, whose columns must be those of the writer, in
// order and kind.
func (w *Writer) Write(b *stream.Batch) error {
	if len(b.Cols) != len(w.cols) {
		return fmt.Errorf("columnar: a batch of %d columns for a file of %d", len(b.Cols), len(w.cols))
	}
	return w.WriteColumns(b.Rows, b.Cols)
}

// WriteColumns appends rows rows. There may be more of them than in a batch.
func (w *Writer) WriteColumns(rows int, cols []stream.Vector) (err error) {
	if w.err != nil {
		return w.err
	}
	if err := w.check(rows, cols); err != nil {
		return err
	}
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("columnar: writing failed: %v", p)
		}
		w.err = err
	}()
	for at := 0; at < rows; {
		n := min(rows-at, w.perGroup-w.inGroup, stream.BatchRows)
		for j := range cols {
			w.fill(j, &cols[j], at, n)
			if _, err := w.out[j].WriteRowValues(w.vals); err != nil {
				return fmt.Errorf("columnar: column %s: %w", w.cols[j].Name, err)
			}
		}
		at += n
		w.rows += int64(n)
		if w.inGroup += n; w.inGroup == w.perGroup {
			w.inGroup = 0
			if err := w.w.Flush(); err != nil {
				return err
			}
		}
	}
	return nil
}

// check looks at the whole input first, so that no row is half written.
func (w *Writer) check(rows int, cols []stream.Vector) error {
	if len(cols) != len(w.cols) {
		return fmt.Errorf("columnar: %d columns for a file of %d", len(cols), len(w.cols))
	}
	for j := range cols {
		c, v := &w.cols[j], &cols[j]
		if v.Kind != c.Kind {
			return fmt.Errorf("columnar: column %s is %s, got %s", c.Name, c.Kind, v.Kind)
		}
		n := len(v.I64)
		switch c.Kind {
		case stream.Float64:
			n = len(v.F64)
		case stream.Text:
			n = len(v.Code)
		}
		if n < rows || v.Null != nil && len(v.Null) < rows || c.Kind == stream.Text && v.Dict == nil && rows > 0 {
			return fmt.Errorf("columnar: column %s has fewer cells than the %d rows", c.Name, rows)
		}
		switch {
		case c.Kind == stream.Text:
			for i, k := range v.Code[:rows] {
				if k < -1 || int(k) >= len(v.Dict.Values) {
					return fmt.Errorf("columnar: column %s row %d: code %d is not in its dictionary", c.Name, w.rows+int64(i)+1, k)
				}
				if k < 0 && !c.Optional {
					return w.missing(c, i)
				}
			}
		case c.Kind != stream.Float64 && v.Null != nil && !c.Optional:
			for i, null := range v.Null[:rows] {
				if null {
					return w.missing(c, i)
				}
			}
		}
		if c.Kind == stream.Time && c.DateOnly {
			for i, t := range v.I64[:rows] {
				if t%nanosOfDay != 0 && (v.Null == nil || !v.Null[i]) {
					return fmt.Errorf("columnar: column %s row %d: %d ns is not a whole day", c.Name, w.rows+int64(i)+1, t)
				}
			}
		}
	}
	return nil
}

func (w *Writer) missing(c *WriteColumn, i int) error {
	return fmt.Errorf("columnar: column %s row %d is missing, but the column is not optional", c.Name, w.rows+int64(i)+1)
}

// fill puts the cells at..at+n of v into w.vals.
func (w *Writer) fill(j int, v *stream.Vector, at, n int) {
	c := &w.cols[j]
	vals := w.vals[:n]
	null := parquet.NullValue().Level(0, 0, j)
	// Columns that are not optional have no levels to look at.
	level := func(v parquet.Value) parquet.Value {
		if c.Optional {
			v = v.Level(0, 1, j)
		}
		return v
	}
	isNull := func(i int) bool { return v.Null != nil && v.Null[at+i] }
	switch c.Kind {
	case stream.Float64:
		for i, x := range v.F64[at : at+n] {
			if c.Optional && math.IsNaN(x) {
				vals[i] = null
				continue
			}
			vals[i] = level(parquet.DoubleValue(x))
		}
	case stream.Bool:
		for i, x := range v.I64[at : at+n] {
			vals[i] = level(parquet.BooleanValue(x != 0))
			if isNull(i) {
				vals[i] = null
			}
		}
	case stream.Text:
		for i, k := range v.Code[at : at+n] {
			if k < 0 {
				vals[i] = null
				continue
			}
			// The value is copied when it is written.
			text := v.Dict.Values[k]
			vals[i] = level(parquet.ByteArrayValue(unsafe.Slice(unsafe.StringData(text), len(text))))
		}
	default:
		days := c.Kind == stream.Time && c.DateOnly
		for i, x := range v.I64[at : at+n] {
			if days {
				vals[i] = level(parquet.Int32Value(int32(x / nanosOfDay)))
			} else {
				vals[i] = level(parquet.Int64Value(x))
			}
			if isNull(i) {
				vals[i] = null
			}
		}
	}
	w.vals = vals
}

// Close writes the last row group and the footer. It does not close the
// underlying writer.
func (w *Writer) Close() (err error) {
	if w.err != nil {
		return w.err
	}
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("columnar: writing failed: %v", p)
		}
		w.err = err
		if err == nil {
			w.err = errors.New("columnar: write after Close")
		}
	}()
	return w.w.Close()
}
