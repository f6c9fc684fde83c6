package kernel

// ShiftScale sets dst to x shifted and scaled and returns the sum of x:
//
//	dst[i] = (x[i] - m) inv    for 0 <= i < len(dst), two roundings
//
// The sum has four lanes, lane l of x[l], x[l+4], x[l+8], ... in this order; the
// elements after the last whole group of four go to lane 0. It is
// (lane[0] + lane[1]) + (lane[2] + lane[3]). dst may be x itself but must not
// overlap it otherwise. ShiftScale panics when x is shorter than dst.
func ShiftScale(dst, x []float64, m, inv float64) (sum float64) {
	if len(x) < len(dst) {
		panic(shortX)
	}
	return shiftScale(dst, x, m, inv)
}

// Combine adds a combination of the columns of a block to dst:
//
//	dst[r] = fma(theta[j], x_j[r], dst[r])    for j = 0, 1, .. cols-1 in this order
//
// where x_j is x[j*stride : j*stride+rows]: what cols calls of Axpy do, with dst
// loaded and stored once. dst must not overlap x. Combine panics when a slice is
// too short, rows or cols is negative, or stride < rows. O(rows cols) time, no
// memory.
func Combine(dst, x []float64, stride, rows, cols int, theta []float64) {
	if !checkBlock(x, stride, rows, cols) {
		return
	}
	if len(dst) < rows {
		panic(shortDst)
	}
	if len(theta) < cols {
		panic(shortTheta)
	}
	chain(1, dst[:rows], x, stride, theta, 1, cols)
}

// ScaleColumns sets the columns of one block to those of another, row r times
// w[r]:
//
//	dst_j[r] = x_j[r] w[r]    for j < cols
//
// where dst_j is dst[j*strideDst : j*strideDst+rows] and x_j likewise. dst may be x
// with the same stride but must not overlap it otherwise, nor w. ScaleColumns panics when a slice is too short, rows or cols is
// negative, or a stride is below rows. O(rows cols) time, no memory.
func ScaleColumns(dst []float64, strideDst int, x []float64, stride, rows, cols int, w []float64) {
	if !checkBlock(x, stride, rows, cols) {
		return
	}
	if strideDst < rows {
		panic(badStride)
	}
	if len(dst) < (cols-1)*strideDst+rows {
		panic(shortDst)
	}
	if len(w) < rows {
		panic(shortW)
	}
	w = w[:rows]
	if rows*cols <= panelBlock {
		scaleColumns(dst, strideDst, x, stride, cols, w)
		return
	}
	for j := range cols {
		scale(dst[j*strideDst:][:rows], x[j*stride:], w)
	}
}

// panelBlock is how many elements two blocks may have that both fit the
// first-level cache. Going through them panel by panel, with the factors in
// registers, is faster there by half, and half as fast beyond, where whole
// columns keep the processor's prefetching busy.
const panelBlock = 2048

// Zeros counts the elements of x that are zero, of either sign.
func Zeros(x []float64) int { return zeros(x) }

// Whiten multiplies the rows of a block by an upper triangle, in place:
//
//	z_j[r] = sum_{i <= j} T_ij z_i[r]    for 0 <= j < p
//
// where z_j is z[j*stride : j*stride+rows] and T_ij = t[i*p+j]. The sum starts
// with T_jj z_j[r] and goes on by fma(T_ij, z_i[r], sum) for i = 0, 1, .. j-1 in
// this order, without those i whose T_ij is zero. Elements of t below the
// diagonal are not read. Whiten panics when a slice is too short, p or rows is
// negative, or stride < rows. O(rows p^2) time, no memory.
func Whiten(t []float64, p int, z []float64, stride, rows int) {
	if !checkBlock(z, stride, rows, p) {
		return
	}
	if len(t) < p*p {
		panic(shortT)
	}
	step := panelRows(p)
	for r := 0; r < rows; r += step {
		z, n := z[r:], min(step, rows-r)
		for j := p - 1; j >= 0; j-- {
			u, first := z[j*stride:][:n], t[j*p+j]
			i := 0
			for done := false; !done; {
				from := i
				for i < j && t[i*p+j] != 0 {
					i++
				}
				chain(first, u, z[from*stride:], stride, t[from*p+j:], p, i-from)
				first = 1
				for i < j && t[i*p+j] == 0 {
					i++
				}
				done = i == j
			}
		}
	}
}

// Leverage adds to h the squared lengths of the rows of a block times W:
//
//	t_c[r] = sum_j W_jc x_j[r],    h[r] = fma(t_c[r], t_c[r], h[r])    for c = 0, 1, .. k-1
//
// where x_j is x[j*stride : j*stride+rows], W_jc = w[j*k+c], and t_c starts at
// zero and adds by fma(W_jc, x_j[r], t_c[r]) for j = 0, 1, .. cols-1 in this
// order. Zeros at the top and at the bottom of a column of W are skipped. With
// (X'X)^-1 = W W' this is the leverage. h must not overlap x. Leverage panics
// when a slice is too short, a count is negative, or stride < rows.
// O(rows cols k) time, half of it for a triangle; no memory.
func Leverage(h, x []float64, stride, rows, cols int, w []float64, k int) {
	if k < 0 {
		panic(negCols)
	}
	if !checkBlock(x, stride, rows, cols) {
		return
	}
	if len(h) < rows {
		panic(shortH)
	}
	if len(w) < cols*k {
		panic(shortW)
	}
	step := panelRows(cols)
	for r := 0; r < rows; r += step {
		h := h[r:min(r+step, rows)]
		for c := range k {
			from, to := 0, cols
			for to > 0 && w[(to-1)*k+c] == 0 {
				to--
			}
			for from < to && w[from*k+c] == 0 {
				from++
			}
			if from < to {
				chainSquare(h, x[from*stride+r:], stride, w[from*k+c:], k, to-from)
			}
		}
	}
}

// checkBlock panics if x is no block and tells whether it has elements.
func checkBlock(x []float64, stride, rows, cols int) bool {
	switch {
	case rows < 0:
		panic(negRows)
	case cols < 0:
		panic(negCols)
	case stride < rows:
		panic(badStride)
	}
	if rows == 0 || cols == 0 {
		return false
	}
	if len(x) < (cols-1)*stride+rows {
		panic(shortX)
	}
	return true
}

// panelRows is how many rows of cols columns fit the first-level cache, for
// loops that come back to a column.
func panelRows(cols int) int { return max(4096/cols/32*32, 64) }

// Filter adds a moving combination of x to dst:
//
//	dst[r] = fma(taps[j], x[j+r], dst[r])    for j = 0, 1, .. len(taps)-1 in this order
//
// It is Combine with columns that overlap. dst must not overlap x. Filter panics when
// x is shorter than len(dst)+len(taps)-1. O(len(dst) len(taps)) time, no memory.
func Filter(dst, x, taps []float64) {
	if len(dst) == 0 || len(taps) == 0 {
		return
	}
	if len(x) < len(dst)+len(taps)-1 {
		panic(shortX)
	}
	chain(1, dst, x, 1, taps, 1, len(taps))
}

// Correlate adds the products of a with every place of x:
//
//	dst[j] += sum_r a[r] x[j+r]    for 0 <= j < len(dst)
//
// with the bits that Cross gives. dst must not overlap a or x. Correlate panics when x
// is shorter than len(dst)+len(a)-1. O(len(dst) len(a)) time, no memory.
func Correlate(dst, a, x []float64) {
	if len(dst) == 0 || len(a) == 0 {
		return
	}
	if len(x) < len(dst)+len(a)-1 {
		panic(shortX)
	}
	cross(dst, len(dst), a, len(a), 1, x, 1, len(dst), len(a))
}
