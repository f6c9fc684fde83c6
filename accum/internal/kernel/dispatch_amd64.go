//go:build amd64 && !noasm

package kernel

import (
	"math"

	"golang.org/x/sys/cpu"
)

//go:generate sh -c "cd _gen && go run main.go -out ../asm_amd64.s -stubs ../asm_amd64.go -pkg kernel"

// useAVX2 tells whether the processor and the operating system allow the
// assembly. Only speed depends on it, no bit of a result.
var useAVX2 = cpu.X86.HasAVX2 && cpu.X86.HasFMA

// DisableAVX2 makes the package run its plain Go until restore is called, so
// that a test can compare the two in one process. Neither call may run at the
// same time as a kernel.
func DisableAVX2() (restore func()) {
	old, restore512 := useAVX2, DisableAVX512()
	useAVX2 = false
	return func() {
		useAVX2 = old
		restore512()
	}
}

func gram(dst []float64, x []float64, stride, rows, cols int) {
	switch {
	case useAVX512:
		gram512(dst, x, stride, rows, cols)
	case useAVX2:
		gramAVX2(dst, x, stride, rows, cols)
	default:
		gramTiles(dst, x, stride, rows, cols, tileWidth)
	}
}

func cross(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	switch {
	case useAVX512 && colsA > 1: // one column leaves too few sums for wide registers
		cross512(dst, ldd, a, strideA, colsA, b, strideB, colsB, rows)
	case useAVX2:
		crossAVX2(dst, ldd, a, strideA, colsA, b, strideB, colsB, rows)
	default:
		crossTiles(dst, ldd, a, strideA, colsA, b, strideB, colsB, rows, tileWidth)
	}
}

func scale(dst, x, w []float64) {
	if n := len(dst); useAVX2 && n > 0 {
		scaleAVX2(&dst[0], &x[0], &w[0], n)
	} else {
		scaleRef(dst, x, w)
	}
}

func axpy(t float64, x, y []float64) {
	if n := len(x); useAVX2 && n > 0 {
		axpyAVX2(t, &x[0], &y[0], n)
	} else {
		axpyRef(t, x, y)
	}
}

func shiftScale(dst, x []float64, m, inv float64) float64 {
	if n := len(dst); useAVX2 && n > 0 {
		return shiftScaleAVX2(&dst[0], &x[0], m, inv, n)
	}
	return shiftScaleRef(dst, x, m, inv)
}

func scaleColumns(dst []float64, strideDst int, x []float64, stride, cols int, w []float64) {
	if useAVX2 {
		scaleColumnsAVX2(&dst[0], strideDst, &x[0], stride, &w[0], cols, len(w))
	} else {
		scaleColumnsRef(dst, strideDst, x, stride, cols, w)
	}
}

func zeros(x []float64) int {
	n := len(x)
	if !useAVX2 || n == 0 {
		return zerosRef(x)
	}
	return zerosAVX2(&x[0], n) + zerosRef(x[n/lanes*lanes:])
}

func chain(first float64, dst, x []float64, stride int, theta []float64, step, cols int) {
	if useAVX2 {
		chainAVX2(first, &dst[0], &x[0], stride, &theta[0], step, cols, len(dst))
	} else {
		chainRef(first, dst, x, stride, theta, step, cols)
	}
}

func chainSquare(dst, x []float64, stride int, theta []float64, step, cols int) {
	if useAVX2 {
		chainSquareAVX2(&dst[0], &x[0], stride, &theta[0], step, cols, len(dst))
	} else {
		chainSquareRef(dst, x, stride, theta, step, cols)
	}
}

func axpyWide(t, tLow float64, xHi, xLo, yHi, yLo []float64) {
	if n := len(xHi); useAVX2 && n > 0 {
		axpyWideAVX2(t, tLow, &xHi[0], &xLo[0], &yHi[0], &yLo[0], n)
	} else {
		axpyWideRef(t, tLow, xHi, xLo, yHi, yLo)
	}
}

func scaleWide(dstHi, dstLo, xHi, xLo []float64, t float64) {
	if n := len(dstHi); useAVX2 && n > 0 {
		scaleWideAVX2(&dstHi[0], &dstLo[0], &xHi[0], &xLo[0], t, n)
	} else {
		scaleWideRef(dstHi, dstLo, xHi, xLo, t)
	}
}

func shiftScaleWide(dstHi, dstLo, xHi, xLo []float64, m, mLow, inv float64) {
	if n := len(dstHi); useAVX2 && n > 0 {
		shiftScaleWideAVX2(&dstHi[0], &dstLo[0], &xHi[0], &xLo[0], m, mLow, inv, n)
	} else {
		shiftScaleWideRef(dstHi, dstLo, xHi, xLo, m, mLow, inv)
	}
}

// wideDots gives the lanes of n <= maxWide columns from hi and lo on with b.
func wideDots(out *[maxWide]wideLanes, n int, hi, lo []float64, stride int, bHi, bLo []float64, rows int) {
	if !useAVX2 {
		wideDotsRef(out, n, hi, lo, stride, bHi, bLo, rows)
		return
	}
	d, h, l, bh, bl := &out[0].sum[0], &hi[0], &lo[0], &bHi[0], &bLo[0]
	switch n {
	case 1:
		wideDots1AVX2(d, h, l, stride, bh, bl, rows)
	case 2:
		wideDots2AVX2(d, h, l, stride, bh, bl, rows)
	case 3:
		wideDots3AVX2(d, h, l, stride, bh, bl, rows)
	case 4:
		wideDots4AVX2(d, h, l, stride, bh, bl, rows)
	}
}

// The columns of a block are cut so that every tile has eight sums or more
// where there are columns for it: fewer do not fill the time a multiply-add
// takes. Four columns and what stands to the right of them come first; the last
// five are one triangle, the last six two of three with a square between.

func gramAVX2(dst []float64, x []float64, stride, rows, cols int) {
	for i := 0; i < cols; {
		p := min(cols-i, 4)
		switch cols - i {
		case 5:
			p = 5
		case 6:
			p = 3
		}
		triangle(p, &dst[i*(i+1)/2+i], i+1, &x[i*stride], stride, rows)
		for j := i + p; j < cols; {
			q := part(cols-j, 3)
			rectangle(p, q, &dst[j*(j+1)/2+i], j+1, 1, &x[i*stride], stride, &x[j*stride], stride, rows)
			j += q
		}
		i += p
	}
}

func crossAVX2(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	switch {
	case colsA <= 2:
		for j := 0; j < colsB; {
			p := evenPart(colsB-j, narrow[colsA])
			rectangle(p, colsA, &dst[j], ldd, 0, &b[j*strideB], strideB, &a[0], strideA, rows)
			j += p
		}
	case colsB <= 2:
		for i := 0; i < colsA; {
			p := evenPart(colsA-i, narrow[colsB])
			out := [2][8]float64{negZeros, negZeros}
			rectangle(p, colsB, &out[0][0], len(out[0]), 0, &a[i*strideA], strideA, &b[0], strideB, rows)
			for k := range p {
				d := dst[(i+k)*ldd:]
				for j := range colsB {
					d[j] += out[j][k]
				}
			}
			i += p
		}
	default:
		for j := 0; j < colsB; {
			p := part(colsB-j, 4)
			for i := 0; i < colsA; {
				q := part(colsA-i, 3)
				rectangle(p, q, &dst[i*ldd+j], ldd, 0, &b[j*strideB], strideB, &a[i*strideA], strideA, rows)
				i += q
			}
			j += p
		}
	}
}

// narrow is how many columns a tile has with one and two on the other side.
var narrow = [3]int{1: 8, 2: 6}

// negZeros take a first summand as it is, where zeros would turn -0 into 0.
var negZeros = func() (z [8]float64) {
	for i := range z {
		z[i] = math.Copysign(0, -1)
	}
	return z
}()

// evenPart is how many of the n columns left a tile takes where no more tiles
// than needed, of about the same width, take all.
func evenPart(n, most int) int {
	tiles := (n + most - 1) / most
	return (n + tiles - 1) / tiles
}

// part is how many of the n columns left a tile takes: most, or one fewer so
// that the last tile is not a single column.
func part(n, most int) int {
	if n == most+1 {
		return most - 1
	}
	return min(n, most)
}

// triangle and rectangle choose by a switch, not a table: through a table the
// compiler would take the pointers to escape.

func triangle(p int, dst *float64, step int, a *float64, stride, rows int) {
	switch p {
	case 1:
		triangle1AVX2(dst, step, a, stride, rows)
	case 2:
		triangle2AVX2(dst, step, a, stride, rows)
	case 3:
		triangle3AVX2(dst, step, a, stride, rows)
	case 4:
		triangle4AVX2(dst, step, a, stride, rows)
	case 5:
		triangle5AVX2(dst, step, a, stride, rows)
	}
}

func rectangle(p, q int, dst *float64, step, grow int, a *float64, strideA int, b *float64, strideB, rows int) {
	switch 4*p + q {
	case 4*1 + 1:
		dots1x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*2 + 1:
		dots2x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*3 + 1:
		dots3x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*4 + 1:
		dots4x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*5 + 1:
		dots5x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*6 + 1:
		dots6x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*7 + 1:
		dots7x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*8 + 1:
		dots8x1AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*1 + 2:
		dots1x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*2 + 2:
		dots2x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*3 + 2:
		dots3x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*4 + 2:
		dots4x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*5 + 2:
		dots5x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*6 + 2:
		dots6x2AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*2 + 3:
		dots2x3AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*3 + 3:
		dots3x3AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	case 4*4 + 3:
		dots4x3AVX2(dst, step, grow, a, strideA, b, strideB, rows)
	}
}
