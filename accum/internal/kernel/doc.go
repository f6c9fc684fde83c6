// Package kernel adds up products of columns: the innermost loops of every
// moment sum, and nothing else.
//
// # Layout
//
// A block has rows rows and is column-major. Column j starts at x[j*stride] and
// is contiguous; stride-rows elements behind each column are never read.
//
//	          column 0        column 1        column 2
//	x  [ r0 r1 r2 r3 r4 . . | r0 r1 r2 r3 r4 . . | r0 r1 r2 r3 r4 ]
//	     <--- rows --->
//	     <----- stride ----->
//
// A Gram sum is the upper triangle, packed column by column: the element of
// columns i <= j is dst[j*(j+1)/2+i].
//
//	     j=0  1  2  3
//	i=0   0   1  3  6
//	  1       2  4  7
//	  2          5  8
//	  3             9
//
// A cross sum is a dense row-major matrix with ldd elements from row to row:
// dst[i*ldd+j].
//
// # Bit contract
//
// Every implementation gives the same bits on every machine. The dot product of
// columns a and b over one block has four lanes, all +0 at the start. Lane l
// takes rows l, l+4, l+8, ... in this order by
//
//	lane[l] = fma(a[r], b[r], lane[l])
//
// with one rounding. When rows is not a multiple of 4, the lanes without a row
// in the last group take fma(0, 0, lane[l]), as a masked vector load does; this
// differs from skipping them only in turning a lane of -0 into +0. Then
//
//	dot = (lane[0] + lane[1]) + (lane[2] + lane[3])
//	dst = dst + dot
//
// The error of dot is at most (rows/4+3) 2^-53 sum |a[r] b[r]|, barring
// underflow. NaN and infinities propagate by IEEE 754; which NaN comes out is
// not part of the contract. Zero rows leave dst as it is.
//
// The functions on single elements and on rows (Scale, Axpy, ShiftScale,
// Combine, Whiten, Leverage) do for each of them the operations their
// documentation lists, in its order, each rounded once. GramWide and the other
// functions on double-doubles do those of ref.go.
//
// # Implementations
//
// The contract is written down literally in ref.go. Plain Go follows it on every
// processor, Gram and Cross in tiles. On amd64 assembly takes its place: with AVX2
// and FMA, where the four lanes are those of one register, and for the tiles of
// Gram and Cross with AVX-512, where a register holds the lanes of two dot
// products. The generator in _gen writes the assembly; the build tag noasm leaves
// it out.
//
// Columns whose stride is a multiple of 4096 bytes compete for the same sets of
// the first-level cache: a stride a few elements longer is a tenth faster.
package kernel
