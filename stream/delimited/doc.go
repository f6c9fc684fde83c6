// Package delimited reads CSV and TSV text, plain, gzip or zstd compressed, from
// files and pipes, as a stream.Source.
//
// # Text
//
// Rows follow RFC 4180: fields between delimiters, quoted fields may hold
// delimiters, newlines and doubled quotes. A row ends at a newline byte (with
// or without a carriage return before it) that has an even number of quotes
// before it, counted from the start of the text. A quote inside an unquoted
// field, anything but a delimiter or a row end after a closing quote, and
// another number of fields than the header has make a row malformed. Lines
// without any byte are not rows. A byte order mark of UTF-8 is passed over. The
// delimiter (comma, tab, semicolon) is the one that occurs equally often in the
// first hundred rows.
//
// # Segments
//
// The text after the header is cut every Options.SegmentBytes bytes. A row
// belongs to the segment that holds its first byte, and is read by that segment
// alone, however far it runs on. Files and pipes have the same segments; those
// of a plain file are read in parallel (see plainScan), those of a compressed
// file or a pipe are cut by one reader and parsed in parallel (see serialScan).
// Marks are byte offsets into the uncompressed text.
//
// A part of a plain file is read without the rest of it: each segment tells by its
// own text whether it begins inside quotes (see startInside) and says in
// SegmentTally.Quotes what it took for granted. Lines before it are not counted
// then, except for the message that ends the reading; others give the offset.
//
// # Cells
//
// Kinds come from the first 1,000 rows within the first mebibyte, see guess. In
// number, truth and time columns blanks around a cell are passed over. Missing
// are the unquoted empty cell, the unquoted tokens of Options.Null and, outside
// text columns, nan in any case. Cells of columns that nobody asked for are never
// looked at beyond their quotes.
//
// Differences from encoding/csv: a carriage return before a newline inside
// quotes is kept; a byte order mark is not data; a text with NUL bytes in its
// head is refused.
//
// # Speed
//
// The ends of all cells of some hundred rows are found first (scan.Index), then
// each wanted column is read from top to bottom. A row that is not plain, because
// its structure or one of its cells is at fault or the line is empty, ends such a
// block and is read by itself, cell by cell. Reading allocates nothing for a row,
// and for a text cell only when it is new to the dictionary.
package delimited
