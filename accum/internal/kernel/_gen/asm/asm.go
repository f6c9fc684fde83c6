// Package asm writes the AVX2 and AVX-512 kernels.
//
// A tile keeps four lanes of a register for every dot product it adds up, so that
// the lanes of the bit contract are the lanes of the register.
package asm

import (
	. "github.com/mmcloughlin/avo/build"
)

// maxA is how many columns on one side a tile has with 1, 2 and 3 on the other.
var maxA = []int{8, 6, 4}

const (
	lanes = 4
	group = 8 * lanes // bytes of one group of rows

	maxTriangle = 5
	min512      = 6 // columns of the triangles of AVX-512
	max512      = 8
	maxB512     = 6
	maxWide     = 4
)

// All writes all of them.
func All() {
	ConstraintExpr("amd64")
	ConstraintExpr("!noasm")
	mask := maskTable()
	for q := range maxA {
		for p := 1 + q/2; p <= maxA[q]; p++ { // 1 x 3 is never cut
			rectangle(mask, p, q+1)
		}
	}
	for p := 1; p <= maxTriangle; p++ {
		triangle(mask, p)
	}
	for p := min512; p <= max512; p++ {
		tile512(mask, p, 0)
	}
	for q := 1; q <= maxB512; q++ {
		tile512(mask, max512, q)
	}
	scale()
	axpy()
	shiftScale()
	scaleColumns()
	zeros()
	chain("chainAVX2", false)
	chain("chainSquareAVX2", true)
	for p := 1; p <= maxWide; p++ {
		wideDots(mask, p)
	}
	axpyWide()
	scaleWide()
	shiftScaleWide()
	peak("peakAVX2", vectors)
	peak("peakAVX512", vectors512)
}
