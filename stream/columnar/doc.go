// Package columnar reads and writes Parquet files for package stream.
//
// # Reading
//
// One segment is one row group, or a part of a huge one. Only the chunks of
// the requested columns are read. The package walks footers and page headers
// itself, bounds every size before memory is taken, checks page checksums, and
// hands only the decoding of values (levels, dictionary indexes, delta and
// byte-stream-split encodings) to the Parquet library. A file that contradicts
// itself is a *stream.DamageError naming file, row group and column, never a
// panic and never an early end. Flipped bits inside the values can be detected
// only in pages that carry checksums; some engines write none.
//
// How Parquet types become kinds:
//
//	boolean                           Bool
//	integers, signed, 8 to 64 bits    Int64
//	integers, unsigned, 8 to 32 bits  Int64
//	integers, unsigned, 64 bits       Uint64
//	float16, float, double            Float64
//	decimal (any storage)             Float64, unscaled/10^scale correctly rounded
//	date                              Time, DateOnly
//	timestamp ms, us, ns              Time, Zoned if adjusted to UTC
//	INT96                             Time without zone, the stored clock as is
//	time of day ms, us, ns            Float64, seconds since midnight
//	string, enum, json, byte array    Text
//	UUID                              Text, 8-4-4-4-12 lower-case hexadecimal
//	fixed-length bytes                Text, lower-case hexadecimal
//
// INT96 has no annotation: some engines store UTC in it, some the local clock;
// the stored clock is taken as it stands. Columns inside groups are named
// "a.b". Repeated columns (lists, maps), intervals, BSON, geometry and variant
// columns are not offered; File.Refused lists them with the reason.
//
// Options.Kinds may turn Int64, Uint64 and Bool columns into Float64 or Text.
// A time outside int64 nanoseconds and a decimal beyond float64 are
// *stream.RowError (or passed over under Options.SkipBad).
//
// File is a stream.Pruner: row groups that a row filter excludes by their
// statistics are not read (see prune.go for which statistics are believed).
//
// # Writing
//
// Writer writes batches, column by column, with page checksums, pages of at
// most 1 MiB and dictionary-encoded text.
package columnar
