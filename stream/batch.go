package stream

// BatchRows is the number of raw rows in a full batch. Batches are cut from
// the start of each segment, so a batch boundary never depends on workers.
const BatchRows = 512

// Batch is up to BatchRows raw rows of one segment, column by column.
type Batch struct {
	// Rows is the number of rows.
	Rows int
	// Cols has one vector for each requested column, in request order.
	Cols []Vector
	// Marks holds, for each row, the segment's own mark of its place (byte
	// offset in a CSV file, row number in a Parquet file); Segment.Locate turns
	// a mark into a Position.
	Marks []int64
}

// Vector is one column of a batch. Kind says which of the slices is filled.
type Vector struct {
	Kind Kind
	// F64 holds Float64 cells; NaN is missing.
	F64 []float64
	// I64 holds Int64 cells, the bit patterns of Uint64 cells, 0 or 1 for Bool,
	// and nanoseconds since 1970-01-01 for Time (UTC for an instant, as the wall
	// shows it for a time without zone).
	I64 []int64
	// Code holds Text cells as indexes into Dict.Values; -1 is missing.
	Code []int32
	Dict *Dict
	// Null marks missing cells of I64 vectors; nil when the batch has none.
	Null []bool
}

// Dict is the dictionary of a text vector. A segment may append Values from
// batch to batch but never changes one; it may also start a new Dict, which
// readers of the vector notice by the pointer.
type Dict struct {
	Values []string
}
