package asm

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
)

// wideDots keeps two registers for each dot product: the sums of the lanes and
// what was left off them.
func wideDots(mask Mem, p int) {
	name := fmt.Sprintf("wideDots%dAVX2", p)
	TEXT(name, NOSPLIT, "func(out, hi, lo *float64, stride int, bHi, bLo *float64, rows int)")
	Doc(name+fmt.Sprintf(" multiplies %d double-double columns by column b. Of each, out gets", p),
		"the sums of the four lanes, then what was left off them.")
	Pragma("noescape")
	hi, lo := loadColumns("hi", "stride", p), loadColumns("lo", "stride", p)
	bHi, bLo := loadColumns("bHi", "", 1), loadColumns("bLo", "", 1)
	acc := vectors(2 * p)
	sweep(mask, []columns{hi, lo, bHi, bLo}, acc, func() {
		w := packed
		b, bl := w.load(bHi.at(0)), w.load(bLo.at(0))
		for i := range p {
			sum, left := acc[2*i], acc[2*i+1]
			prod, e := w.product(w.load(hi.at(i)), lo.at(i), b, bl)
			s, d := w.twoSum(sum, prod)
			w.add(e, d, d)
			w.add(d, left, left)
			VMOVAPD(s, sum)
		}
	})
	out := Load(Param("out"), GP64())
	for i, s := range acc {
		VMOVUPD(s, Mem{Base: out, Disp: group * i})
	}
	VZEROUPPER()
	RET()
}

func axpyWide() {
	TEXT("axpyWideAVX2", NOSPLIT, "func(t, tLow float64, xHi, xLo, yHi, yLo *float64, n int)")
	Doc("axpyWideAVX2 adds t x to y in double-double.")
	Pragma("noescape")
	t, tLow := broadcast("t"), broadcast("tLow")
	elementwise([]string{"xHi", "xLo", "yHi", "yLo"}, func(w arith, at []Mem) {
		prod, e := w.product(w.of(t), w.of(tLow), w.load(at[0]), at[1])
		s, d := w.twoSum(w.load(at[2]), prod)
		w.add(e, d, d)
		w.add(at[3], d, d)
		s, d = w.twoSum(s, d)
		w.move(s, at[2])
		w.move(d, at[3])
	})
}

func scaleWide() {
	TEXT("scaleWideAVX2", NOSPLIT, "func(dstHi, dstLo, xHi, xLo *float64, t float64, n int)")
	Doc("scaleWideAVX2 sets dst to t x in double-double.")
	Pragma("noescape")
	t := broadcast("t")
	elementwise([]string{"dstHi", "dstLo", "xHi", "xLo"}, func(w arith, at []Mem) {
		prod, e := w.product(w.of(t), nil, w.load(at[2]), at[3])
		s, d := w.twoSum(prod, e)
		w.move(s, at[0])
		w.move(d, at[1])
	})
}

func shiftScaleWide() {
	TEXT("shiftScaleWideAVX2", NOSPLIT, "func(dstHi, dstLo, xHi, xLo *float64, m, mLow, inv float64, n int)")
	Doc("shiftScaleWideAVX2 sets dst to (x + m) inv in double-double.")
	Pragma("noescape")
	m, mLow, inv := broadcast("m"), broadcast("mLow"), broadcast("inv")
	elementwise([]string{"dstHi", "dstLo", "xHi", "xLo"}, func(w arith, at []Mem) {
		s, d := w.twoSum(w.load(at[2]), w.of(m))
		t, e := w.twoSum(w.load(at[3]), w.of(mLow))
		w.add(t, d, d)
		s, d = w.twoSum(s, d)
		w.add(e, d, d)
		s, d = w.twoSum(s, d)
		w.mul(w.of(inv), s, s)
		w.mul(w.of(inv), d, d)
		w.move(s, at[0])
		w.move(d, at[1])
	})
}
