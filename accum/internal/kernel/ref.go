package kernel

import "math"

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
