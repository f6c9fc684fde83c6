//go:build !amd64 || noasm

package kernel

// useAVX2 is false where there is no assembly.
const useAVX2 = false

// DisableAVX2 does nothing in this build, which has no assembly.
func DisableAVX2() (restore func()) { return func() {} }

// DisableAVX512 does nothing either.
func DisableAVX512() (restore func()) { return func() {} }

func gram(dst []float64, x []float64, stride, rows, cols int) {
	gramTiles(dst, x, stride, rows, cols, tileWidth)
}

func cross(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	crossTiles(dst, ldd, a, strideA, colsA, b, strideB, colsB, rows, tileWidth)
}

func scale(dst, x, w []float64) { scaleRef(dst, x, w) }

func axpy(t float64, x, y []float64) { axpyRef(t, x, y) }

func shiftScale(dst, x []float64, m, inv float64) float64 { return shiftScaleRef(dst, x, m, inv) }

func scaleColumns(dst []float64, strideDst int, x []float64, stride, cols int, w []float64) {
	scaleColumnsRef(dst, strideDst, x, stride, cols, w)
}

func zeros(x []float64) int { return zerosRef(x) }

func chain(first float64, dst, x []float64, stride int, theta []float64, step, cols int) {
	chainRef(first, dst, x, stride, theta, step, cols)
}

func chainSquare(dst, x []float64, stride int, theta []float64, step, cols int) {
	chainSquareRef(dst, x, stride, theta, step, cols)
}

func axpyWide(t, tLow float64, xHi, xLo, yHi, yLo []float64) {
	axpyWideRef(t, tLow, xHi, xLo, yHi, yLo)
}

func scaleWide(dstHi, dstLo, xHi, xLo []float64, t float64) {
	scaleWideRef(dstHi, dstLo, xHi, xLo, t)
}

func shiftScaleWide(dstHi, dstLo, xHi, xLo []float64, m, mLow, inv float64) {
	shiftScaleWideRef(dstHi, dstLo, xHi, xLo, m, mLow, inv)
}

func wideDots(out *[maxWide]wideLanes, n int, hi, lo []float64, stride int, bHi, bLo []float64, rows int) {
	wideDotsRef(out, n, hi, lo, stride, bHi, bLo, rows)
}
