package kernel

import "math"

// lanes is the number of sums that a dot product is made of.
const lanes = 4

// gramRef and crossRef are the bit contract written down literally. Tests hold
// every other implementation against them.

func gramRef(dst []float64, x []float64, stride, rows, cols int) {
	for j := range cols {
		for i := range j + 1 {
			dst[j*(j+1)/2+i] += dotRef(x[i*stride:], x[j*stride:], rows)
		}
	}
}

func crossRef(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	for i := range colsA {
		for j := range colsB {
			dst[i*ldd+j] += dotRef(a[i*strideA:], b[j*strideB:], rows)
		}
	}
}

func dotRef(a, b []float64, rows int) float64 {
	var lane [4]float64
	for r := 0; r < rows; r += 4 {
		for l := range lane {
			var u, v float64
			if r+l < rows {
				u, v = a[r+l], b[r+l]
			}
			lane[l] = math.FMA(u, v, lane[l])
		}
	}
	return (lane[0] + lane[1]) + (lane[2] + lane[3])
}

// gramWideRef is the contract of GramWide.
func gramWideRef(dst, dstLow []float64, hi, lo []float64, stride, rows, cols int) {
	for j := range cols {
		for i := range j + 1 {
			var w wideLanes
			for r := 0; r < rows; r += lanes {
				for l := range lanes {
					var p, e float64
					if r+l < rows {
						p, e = productWide(hi[i*stride+r+l], lo[i*stride+r+l], hi[j*stride+r+l], lo[j*stride+r+l])
					}
					s, d := twoSum(w.sum[l], p)
					w.sum[l], w.left[l] = s, w.left[l]+(d+e)
				}
			}
			at := j*(j+1)/2 + i
			dst[at], dstLow[at] = w.addTo(dst[at], dstLow[at])
		}
	}
}

// wideDotsRef sums one lane after the other, which keeps it in registers.
func wideDotsRef(out *[maxWide]wideLanes, n int, hi, lo []float64, stride int, bHi, bLo []float64, rows int) {
	bHi, bLo = bHi[:rows], bLo[:rows]
	for k := range n {
		aHi, aLo := hi[k*stride:][:rows], lo[k*stride:][:rows]
		for l := range lanes {
			var sum, left float64
			for r := l; r < rows; r += lanes {
				p, e := productWide(aHi[r], aLo[r], bHi[r], bLo[r])
				s, d := twoSum(sum, p)
				sum, left = s, left+(d+e)
			}
			if rows%lanes != 0 && l >= rows%lanes {
				s, d := twoSum(sum, 0)
				sum, left = s, left+d
			}
			out[k].sum[l], out[k].left[l] = sum, left
		}
	}
}

// productWide returns a b and what is missing from the product of two
// double-doubles but for the product of the low parts. The conversion keeps the
// compiler from fusing the product with a sum it goes into.
func productWide(a, aLow, b, bLow float64) (p, e float64) {
	p = float64(a * b)
	e = math.FMA(a, b, -p)
	e = math.FMA(a, bLow, e)
	e = math.FMA(aLow, b, e)
	return p, e
}

func axpyWideRef(t, tLow float64, xHi, xLo, yHi, yLo []float64) {
	n := len(xHi)
	xLo, yHi, yLo = xLo[:n], yHi[:n], yLo[:n]
	for i, x := range xHi {
		p, e := productWide(t, tLow, x, xLo[i])
		s, d := twoSum(yHi[i], p)
		yHi[i], yLo[i] = twoSum(s, (d+e)+yLo[i])
	}
}

func scaleWideRef(dstHi, dstLo, xHi, xLo []float64, t float64) {
	n := len(dstHi)
	dstLo, xHi, xLo = dstLo[:n], xHi[:n], xLo[:n]
	for i, x := range xHi {
		p := float64(t * x)
		dstHi[i], dstLo[i] = twoSum(p, math.FMA(t, xLo[i], math.FMA(t, x, -p)))
	}
}

// shiftScaleWideRef adds m: a sum that cancels loses nothing that a product
// could have spoilt before, so both parts are added with their errors.
func shiftScaleWideRef(dstHi, dstLo, xHi, xLo []float64, m, mLow, inv float64) {
	n := len(dstHi)
	dstLo, xHi, xLo = dstLo[:n], xHi[:n], xLo[:n]
	for i, x := range xHi {
		s, d := twoSum(x, m)
		t, e := twoSum(xLo[i], mLow)
		s, d = twoSum(s, d+t)
		s, d = twoSum(s, d+e)
		dstHi[i], dstLo[i] = s*inv, d*inv
	}
}

// scaleRef and axpyRef round once an element, which leaves the bits no choice:
// they are what runs wherever there is no assembly.

func scaleRef(dst, x, w []float64) {
	x, w = x[:len(dst)], w[:len(dst)]
	for i := range dst {
		dst[i] = x[i] * w[i]
	}
}

func axpyRef(t float64, x, y []float64) {
	y = y[:len(x)]
	for i, v := range x {
		y[i] = math.FMA(t, v, y[i])
	}
}

func shiftScaleRef(dst, x []float64, m, inv float64) float64 {
	x = x[:len(dst)]
	var lane [lanes]float64
	i := 0
	for ; i+lanes <= len(x); i += lanes {
		for l := range lane {
			lane[l] += x[i+l]
			dst[i+l] = (x[i+l] - m) * inv
		}
	}
	for ; i < len(x); i++ {
		lane[0] += x[i]
		dst[i] = (x[i] - m) * inv
	}
	return (lane[0] + lane[1]) + (lane[2] + lane[3])
}

// chainRef sets dst[r] to first dst[r] and then, column after column, to
// fma(theta_j, x_j[r], dst[r]), where theta_j is theta[j*step].
func chainRef(first float64, dst, x []float64, stride int, theta []float64, step, cols int) {
	if first != 1 {
		for r := range dst {
			dst[r] *= first
		}
	}
	for j := range cols {
		axpyRef(theta[j*step], x[j*stride:][:len(dst)], dst)
	}
}

// chainSquareRef does the same from zero and adds the square to dst.
func chainSquareRef(dst, x []float64, stride int, theta []float64, step, cols int) {
	var buf [64]float64
	for r := 0; r < len(dst); r += len(buf) {
		h := dst[r:min(r+len(buf), len(dst))]
		t := buf[:len(h)]
		clear(t)
		chainRef(1, t, x[r:], stride, theta, step, cols)
		for i, v := range t {
			h[i] = math.FMA(v, v, h[i])
		}
	}
}

func scaleColumnsRef(dst []float64, strideDst int, x []float64, stride, cols int, w []float64) {
	for j := range cols {
		scaleRef(dst[j*strideDst:][:len(w)], x[j*stride:], w)
	}
}

func zerosRef(x []float64) int {
	n := 0
	for _, v := range x {
		if v == 0 {
			n++
		}
	}
	return n
}
