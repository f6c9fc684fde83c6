package kernel

import "math"

// A tile is the block of dot products of tileWidth by tileWidth columns. One
// lane is finished before the next begins: that keeps the accumulators in
// registers, and the columns stay in the first-level cache for all four.
// A tile that reaches past the last column gets the last one again and its
// surplus results are dropped, which costs no more than a narrower tile.

func gramTiles(dst []float64, x []float64, stride, rows, cols, width int) {
	var out [9]float64
	for j := 0; j < cols; j += width {
		for i := 0; i <= j; i += width {
			tile(&out, columns{x, stride, cols, i}, columns{x, stride, cols, j}, rows, width)
			for jj := j; jj < min(j+width, cols); jj++ {
				c := dst[jj*(jj+1)/2:]
				for ii := i; ii < min(i+width, jj+1); ii++ {
					c[ii] += out[(ii-i)*width+jj-j]
				}
			}
		}
	}
}

func crossTiles(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows, width int) {
	var out [9]float64
	for i := 0; i < colsA; i += width {
		for j := 0; j < colsB; j += width {
			tile(&out, columns{a, strideA, colsA, i}, columns{b, strideB, colsB, j}, rows, width)
			for ii := i; ii < min(i+width, colsA); ii++ {
				c := dst[ii*ldd:]
				for jj := j; jj < min(j+width, colsB); jj++ {
					c[jj] += out[(ii-i)*width+jj-j]
				}
			}
		}
	}
}

// columns names up to width columns of a block, from column first on.
type columns struct {
	x            []float64
	stride, cols int
	first        int
}

func (c columns) at(i, rows int) []float64 {
	j := min(c.first+i, c.cols-1) * c.stride
	return c.x[j : j+rows : j+rows]
}

// tile sets out[i*width+j] to the dot product of column i of a and j of b.
func tile(out *[9]float64, a, b columns, rows, width int) {
	switch {
	case a.first == a.cols-1 && b.first == b.cols-1:
		out[0] = dot(a.at(0, rows), b.at(0, rows))
	case width == 2:
		tile2(out, a.at(0, rows), a.at(1, rows), b.at(0, rows), b.at(1, rows))
	default:
		tile3(out, a.at(0, rows), a.at(1, rows), a.at(2, rows), b.at(0, rows), b.at(1, rows), b.at(2, rows))
	}
}

func dot(a, b []float64) float64 {
	n := len(a)
	b = b[:n]
	var s0, s1, s2, s3 float64
	r := 0
	for ; r < n-3; r += 4 {
		u, v := a[r:r+4:r+4], b[r:r+4:r+4]
		s0 = math.FMA(u[0], v[0], s0)
		s1 = math.FMA(u[1], v[1], s1)
		s2 = math.FMA(u[2], v[2], s2)
		s3 = math.FMA(u[3], v[3], s3)
	}
	if r < n {
		var u, v [4]float64
		copy(u[:], a[r:])
		copy(v[:], b[r:])
		s0 = math.FMA(u[0], v[0], s0)
		s1 = math.FMA(u[1], v[1], s1)
		s2 = math.FMA(u[2], v[2], s2)
		s3 = math.FMA(u[3], v[3], s3)
	}
	return (s0 + s1) + (s2 + s3)
}

func tile2(out *[9]float64, a0, a1, b0, b1 []float64) {
	var lane [4][4]float64
	n := len(a0)
	a1, b0, b1 = a1[:n], b0[:n], b1[:n]
	for l := range 4 {
		var s00, s01, s10, s11 float64
		for r := l; r < n; r += 4 {
			x, y := a0[r], a1[r]
			u, v := b0[r], b1[r]
			s00 = math.FMA(x, u, s00)
			s01 = math.FMA(x, v, s01)
			s10 = math.FMA(y, u, s10)
			s11 = math.FMA(y, v, s11)
		}
		lane[l] = [4]float64{s00, s01, s10, s11}
	}
	if n%4 != 0 {
		for l := n % 4; l < 4; l++ {
			pad(lane[l][:])
		}
	}
	for i := range lane[0] {
		out[i] = (lane[0][i] + lane[1][i]) + (lane[2][i] + lane[3][i])
	}
}

func tile3(out *[9]float64, a0, a1, a2, b0, b1, b2 []float64) {
	var lane [4][9]float64
	n := len(a0)
	a1, a2, b0, b1, b2 = a1[:n], a2[:n], b0[:n], b1[:n], b2[:n]
	for l := range 4 {
		var s00, s01, s02, s10, s11, s12, s20, s21, s22 float64
		for r := l; r < n; r += 4 {
			u, v, w := b0[r], b1[r], b2[r]
			x := a0[r]
			s00 = math.FMA(x, u, s00)
			s01 = math.FMA(x, v, s01)
			s02 = math.FMA(x, w, s02)
			x = a1[r]
			s10 = math.FMA(x, u, s10)
			s11 = math.FMA(x, v, s11)
			s12 = math.FMA(x, w, s12)
			x = a2[r]
			s20 = math.FMA(x, u, s20)
			s21 = math.FMA(x, v, s21)
			s22 = math.FMA(x, w, s22)
		}
		lane[l] = [9]float64{s00, s01, s02, s10, s11, s12, s20, s21, s22}
	}
	if n%4 != 0 {
		for l := n % 4; l < 4; l++ {
			pad(lane[l][:])
		}
	}
	for i := range lane[0] {
		out[i] = (lane[0][i] + lane[1][i]) + (lane[2][i] + lane[3][i])
	}
}

// pad does what a group of rows without this lane does: fma(0, 0, s).
func pad(lane []float64) {
	for i := range lane {
		lane[i] = math.FMA(0, 0, lane[i])
	}
}
