package kernel

// Gram adds the products of all pairs of columns of a block to dst:
//
//	dst[j*(j+1)/2+i] += sum_r x_i[r] x_j[r]    for 0 <= i <= j < cols
//
// where x_j is x[j*stride : j*stride+rows]. dst needs cols(cols+1)/2 elements
// and x needs (cols-1)*stride+rows; they must not overlap. Gram panics when a
// slice is shorter, rows or cols is negative, or stride < rows. The bits of the
// result are those of the package's contract. O(rows cols^2) time, no memory.
func Gram(dst []float64, x []float64, stride, rows, cols int) {
	if !checkBlock(x, stride, rows, cols) {
		return
	}
	if len(dst) < cols*(cols+1)/2 {
		panic(shortDst)
	}
	gram(dst, x, stride, rows, cols)
}

// Cross adds the products of the columns of two blocks with the same rows:
//
//	dst[i*ldd+j] += sum_r a_i[r] b_j[r]    for i < colsA, j < colsB
//
// where a_i is a[i*strideA : i*strideA+rows] and b_j likewise. dst needs
// (colsA-1)*ldd+colsB elements and must not overlap a or b; a and b may be the
// same. Cross panics when a slice is shorter, a count is negative, a stride is
// below rows or ldd below colsB. An element has the bits that Gram gives for
// the same two columns. O(rows colsA colsB) time, no memory.
func Cross(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	switch {
	case rows < 0:
		panic(negRows)
	case colsA < 0 || colsB < 0:
		panic(negCols)
	case strideA < rows || strideB < rows:
		panic(badStride)
	case ldd < colsB:
		panic(badLdd)
	}
	if rows == 0 || colsA == 0 || colsB == 0 {
		return
	}
	if len(a) < (colsA-1)*strideA+rows {
		panic(shortA)
	}
	if len(b) < (colsB-1)*strideB+rows {
		panic(shortB)
	}
	if len(dst) < (colsA-1)*ldd+colsB {
		panic(shortDst)
	}
	cross(dst, ldd, a, strideA, colsA, b, strideB, colsB, rows)
}

// Scale sets dst[i] = x[i] w[i] for every i < len(dst). dst may be x or w
// itself but must not overlap them otherwise. Scale panics when x or w is
// shorter than dst.
func Scale(dst, x, w []float64) {
	if len(x) < len(dst) {
		panic(shortX)
	}
	if len(w) < len(dst) {
		panic(shortW)
	}
	scale(dst, x, w)
}

// Axpy adds a multiple of x to y:
//
//	y[i] = fma(t, x[i], y[i])    for 0 <= i < len(x)
//
// with one rounding, whatever the values. y may be x itself but must not overlap
// it otherwise; elements of y from len(x) on stay as they are. Axpy panics when
// y is shorter than x.
func Axpy(t float64, x, y []float64) {
	if len(y) < len(x) {
		panic(shortY)
	}
	axpy(t, x, y)
}
