// Package accum sums the rows of a design in one pass over a source, or two.
//
// # Vocabulary
//
//   - A Frame is the coordinate system of the sums: shifted, scaled and, where
//     terms are nearly collinear, whitened; chosen from fixed rows of the input.
//   - z = (1, u, v, f) is a row in the frame: constant, numeric terms, outcome
//     (about its residual), numeric factors of category products.
//   - The internal columns of a state are 1, u and, for each combination of
//     category levels that occurs, an indicator and its products with f; v last.
//     A group is a set of categories that occur multiplied. If there are more
//     columns than Options.Dense, those of the largest group are kept apart.
//   - Second moments are sums of z z'. Fourth moments are sums of products of
//     four entries of z. A keyed table holds sums for each key.
//
// # Why the bits are always the same
//
// Sums are made in row order within a segment (whole data) or within a fold of
// 65,536 rows from the segment's start (keyed tables), with fixed lanes and
// math.FMA. What is joined across segments is joined exactly: whole-data sums
// in integer superaccumulators over the full range of float64, keyed sums in
// 128-bit fixed point. Segments, folds and blocks are cut by the input alone, so
// the result does not depend on the number of workers or on who came first.
//
// # Extended arithmetic
//
// In Extended arithmetic terms of + - * / and whole powers, rows z, and second
// moments of the dense columns are numbers of about 106 bits (Wide): the frame's
// coefficients stay float64 and are taken as exact. Within a segment such sums are
// made in row order; both their parts are then joined exactly. What is summed by
// level or cluster, fourth moments and leverages are float64 and take z rounded,
// which is right to its last bit. Weights are float64, their roots are not.
//
// # Clusters
//
// The partial sums of a fold by cluster (groups) go to one store for all workers
// (groupStore), spread over partitions by the hash of the key. What is beyond its
// share of memory (HeldClusters) is written to scratch as runs in order of key, and
// Scores.Each merges runs and memory while it walks over the clusters. Adding is
// associative, so that does not show in the bits either.
//
// # Unique rows
//
// Where Needs.Cells asks for it, rows with equal regressors are summed together (cells):
// their number and the sums of powers of v. SecondByCells makes of them, once the
// coefficients are known, what Second makes of rows. How many are kept hangs on a bound
// of bytes that does not depend on workers; whether there were more is the same for all.
//
// # Checkpoints
//
// Since joining is exact, the sums of any set of finished segments, in whatever order,
// are a place to go on from: see Checkpoint.
//
// # Limits
//
// One worker holds its own tables by level, joined at the end; pairs of levels of
// two categories are summed in tables common to all. With a group apart all
// clusters are held in memory. The columns beside the group
// apart make dense matrices, whose solve takes the cube of their number.
package accum
