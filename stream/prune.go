package stream

import "context"

// Range bounds the cells of one column in a stretch of rows, as a Vector would
// bring them. The zero value says nothing.
type Range struct {
	// AllMissing: no cell is there. NoneMissing: none is missing, NaN included.
	AllMissing, NoneMissing bool
	// Bounded: every cell that is there lies in one of the following, both ends
	// included, by the kind of the vector.
	Bounded bool
	F64     [2]float64
	I64     [2]int64 // bit patterns for Uint64
	Text    [2]string
}

// Filter reports whether a row filter certainly leaves none of the rows whose
// cells lie in the ranges. It asks for those it needs, by the place of the column
// among the uses; they are valid for that call.
type Filter func(cells func(use int) Range) bool

// Pruner is a source that can bound the cells of segments without reading them.
// With a nil Filter it does as a Source does.
//
// A segment is passed over only if its rows are known to be without fault: reading
// them would count each one as excluded, and find none malformed.
type Pruner interface {
	Source
	// ScanWhere is Scan, but excluded segments are not read: each comes under its
	// number, ends at once and has SegmentTally.Excluded from the start.
	ScanWhere(ctx context.Context, uses []Use, f Filter) (Scan, error)
	// SampleWhere is Sample, but a batch that lies in excluded segments comes empty,
	// with Rows 0 and no error; SegmentTally counts its rows.
	SampleWhere(ctx context.Context, uses []Use, at float64, f Filter) (Segment, error)
	// Unread says what ScanWhere would not read.
	Unread(ctx context.Context, uses []Use, f Filter) (Unread, error)
}

// Unread counts what a row filter excludes by metadata alone: ranges of stored
// columns, names of folders.
type Unread struct {
	Files    int64 `json:"files"` // of which no row is read
	Segments int64 `json:"segments"`
	Rows     int64 `json:"rows"`
	Bytes    int64 `json:"bytes"`
}

// Add adds the counts of o.
func (u *Unread) Add(o Unread) {
	u.Files += o.Files
	u.Segments += o.Segments
	u.Rows += o.Rows
	u.Bytes += o.Bytes
}

// wrapper is a source that reads as another one does.
type wrapper interface{ unwrap() Source }

// as finds out whether a source, or the one that it reads as, is a T.
func as[T Source](src Source) (t T, ok bool) {
	for {
		if t, ok = src.(T); ok {
			return t, true
		}
		w, ok := src.(wrapper)
		if !ok {
			return t, false
		}
		src = w.unwrap()
	}
}

func scanWhere(ctx context.Context, src Source, uses []Use, f Filter) (Scan, error) {
	if p, ok := as[Pruner](src); ok && f != nil {
		return p.ScanWhere(ctx, uses, f)
	}
	return src.Scan(ctx, uses)
}

func sampleWhere(ctx context.Context, src Source, uses []Use, at float64, f Filter) (Segment, error) {
	if p, ok := as[Pruner](src); ok && f != nil {
		return p.SampleWhere(ctx, uses, at, f)
	}
	return src.Sample(ctx, uses, at)
}

func unread(ctx context.Context, src Source, uses []Use, f Filter) (Unread, error) {
	if p, ok := as[Pruner](src); ok && f != nil {
		return p.Unread(ctx, uses, f)
	}
	return Unread{}, nil
}

// Scan starts a pass over the columns of the design. Segments that its row filter
// excludes by metadata alone are not read, see Pruner.
func (d *Design) Scan(ctx context.Context, src Source) (Scan, error) {
	return scanWhere(ctx, src, d.Uses(), d.Filter())
}

// Sample opens a reader at a fraction of the input, see Source. Batches that the
// row filter excludes by metadata alone come empty.
func (d *Design) Sample(ctx context.Context, src Source, at float64) (Segment, error) {
	return sampleWhere(ctx, src, d.Uses(), at, d.Filter())
}

// Unread says what Scan will not read of the source. It reads no rows. Under First
// it is not known before.
func (d *Design) Unread(ctx context.Context, src Source) (Unread, error) {
	return unread(ctx, src, d.Uses(), d.Filter())
}

// Filter returns the row filter over ranges, with places among Uses; nil without
// a row filter.
func (d *Design) Filter() Filter {
	if d.prog.where < 0 {
		return nil
	}
	return d.prog.excludes
}
