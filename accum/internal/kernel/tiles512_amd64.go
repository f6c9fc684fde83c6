//go:build amd64 && !noasm

package kernel

import "golang.org/x/sys/cpu"

// useAVX512 tells whether tiles in registers of eight numbers may be used. Two
// dot products share a register, so their bits are those of all other tiles.
// Processors without VBMI2, older than 2019, are left out: on them the other code
// of the process pays for wide registers by a lower clock.
var useAVX512 = useAVX2 && cpu.X86.HasAVX512F && cpu.X86.HasAVX512DQ && cpu.X86.HasAVX512VBMI2

// DisableAVX512 makes the package run the AVX2 tiles, as DisableAVX2 does with
// plain Go.
func DisableAVX512() (restore func()) {
	old := useAVX512
	useAVX512 = false
	return func() { useAVX512 = old }
}

const (
	min512 = 6 // fewer columns are left to AVX2, which is as fast
	max512 = 8
)

// gram512 takes eight columns, their triangle and what stands to the right of
// them, as long as there are so many, and then one triangle.
func gram512(dst []float64, x []float64, stride, rows, cols int) {
	for i := 0; i < cols; i += max512 {
		p, d, a := min(cols-i, max512), &dst[i*(i+1)/2+i], &x[i*stride]
		if p < min512 {
			triangle(p, d, i+1, a, stride, rows)
		} else {
			triangle512(p, d, i+1, a, stride, rows)
		}
		for j := i + p; j < cols; {
			q := evenPart(cols-j, 6)
			rectangle512(q, &dst[j*(j+1)/2+i], j+1, 1, a, stride, &x[j*stride], stride, rows)
			j += q
		}
	}
}

// cross512 takes eight columns of b at a time and leaves the rest to AVX2.
func cross512(dst []float64, ldd int, a []float64, strideA, colsA int, b []float64, strideB, colsB, rows int) {
	j := 0
	for ; colsB-j >= max512; j += max512 {
		for i := 0; i < colsA; {
			q := evenPart(colsA-i, 6)
			rectangle512(q, &dst[i*ldd+j], ldd, 0, &b[j*strideB], strideB, &a[i*strideA], strideA, rows)
			i += q
		}
	}
	if j < colsB {
		crossAVX2(dst[j:], ldd, a, strideA, colsA, b[j*strideB:], strideB, colsB-j, rows)
	}
}

func triangle512(p int, dst *float64, step int, a *float64, stride, rows int) {
	switch p {
	case 6:
		triangle6AVX512(dst, step, a, stride, rows)
	case 7:
		triangle7AVX512(dst, step, a, stride, rows)
	case 8:
		triangle8AVX512(dst, step, a, stride, rows)
	}
}

func rectangle512(q int, dst *float64, step, grow int, a *float64, strideA int, b *float64, strideB, rows int) {
	switch q {
	case 1:
		dots8x1AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	case 2:
		dots8x2AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	case 3:
		dots8x3AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	case 4:
		dots8x4AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	case 5:
		dots8x5AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	case 6:
		dots8x6AVX512(dst, step, grow, a, strideA, b, strideB, rows)
	}
}
