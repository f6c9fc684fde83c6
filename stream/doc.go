// Package stream turns files and pipes too large for memory into blocks of
// numbers: the rows of a linear model, in order, with nothing silently lost.
//
// # Vocabulary
//
//   - A Source is an input with one Schema: a file, a set of files, a pipe.
//   - A Segment is the unit of parallel work: a Parquet row group, a fixed part
//     of a huge one, or a fixed byte range of the uncompressed text of a CSV file (a row belongs to the
//     segment in which it starts). Segments are numbered over the whole input,
//     inputs sorted bytewise by path. Nothing depends on the number of workers.
//   - A Batch holds up to 512 raw rows of a segment, column by column, as read.
//   - A Design is a model bound to a schema: outcome, terms, weight, row filter,
//     cluster keys. Its Evaluator turns a Batch into a Block.
//   - A Block holds the used rows of one batch, column-major, each column one
//     contiguous slice.
//
// # Ownership
//
// The slices of a Batch belong to the Segment that filled it and hold until the
// next call of Read on that segment. The slices of a Block belong to the
// Evaluator and hold until its next call. Nobody else may change them.
//
// # Rows that are not read
//
// A Pruner bounds the cells of segments by metadata: statistics of Parquet row
// groups, names of key=value folders. What the row filter of a Design certainly
// excludes by them is not read, but counted as if it had been: Design.Scan and
// Design.Sample see to that. No number of a result depends on it.
//
// # Missing cells
//
// In a Float64 vector NaN is a missing cell. In every other vector Null marks
// it. Expressions compute in float64, where NaN is "missing" and propagates.
package stream
