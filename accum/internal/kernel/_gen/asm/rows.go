package asm

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

func scale() {
	TEXT("scaleAVX2", NOSPLIT, "func(dst, x, w *float64, n int)")
	Doc("scaleAVX2 sets dst[i] = x[i] w[i].")
	Pragma("noescape")
	elementwise([]string{"dst", "x", "w"}, func(w arith, at []Mem) {
		y := w.load(at[1])
		w.mul(at[2], y, y)
		w.move(y, at[0])
	})
}

func axpy() {
	TEXT("axpyAVX2", NOSPLIT, "func(t float64, x, y *float64, n int)")
	Doc("axpyAVX2 sets y[i] = fma(t, x[i], y[i]).")
	Pragma("noescape")
	t := broadcast("t")
	elementwise([]string{"x", "y"}, func(w arith, at []Mem) {
		y := w.load(at[1])
		w.fmadd(at[0], w.of(t), y)
		w.move(y, at[1])
	})
}

// shiftScale keeps the sum of each lane; the elements after the last whole group
// are added to the first.
func shiftScale() {
	TEXT("shiftScaleAVX2", NOSPLIT, "func(dst, x *float64, m, inv float64, n int) float64")
	Doc("shiftScaleAVX2 sets dst[i] = (x[i] - m) inv and returns the sum of x.")
	Pragma("noescape")
	m, inv, sum := broadcast("m"), broadcast("inv"), YMM()
	VXORPD(sum, sum, sum)
	do := func(w arith, at []Mem) {
		v := w.load(at[1])
		w.add(v, w.of(sum), w.of(sum))
		w.sub(w.of(m), v, v)
		w.mul(w.of(inv), v, v)
		w.move(v, at[0])
	}
	p := loadSweepers([]string{"dst", "x"}, "n")
	p.groups(do)
	upper := XMM()
	VEXTRACTF128(Imm(1), sum, upper)
	p.rest(do)
	s := sum.AsX()
	VHADDPD(s, s, s)
	VHADDPD(upper, upper, upper)
	VADDSD(upper, s, s)
	VZEROUPPER() // before Store, which is not a VEX instruction
	Store(s, ReturnIndex(0))
	RET()
}

// chain keeps the sums of a panel of rows in registers. Squared, they start at
// zero and their squares are added to dst; otherwise they start at first dst and
// replace it.
func chain(name string, squared bool) {
	sig, doc := "first float64, dst", " sets dst[r] = fma(theta_j, x_j[r], .. first dst[r]), column after column."
	if squared {
		sig, doc = "dst", " adds to dst[r] the square of fma(theta_j, x_j[r], .. 0), column after column."
	}
	TEXT(name, NOSPLIT, "func("+sig+", x *float64, stride int, theta *float64, step, cols, rows int)")
	Doc(name+doc, "theta_j is step elements behind the one before.")
	Pragma("noescape")
	var first VecVirtual
	if !squared {
		first = broadcast("first")
	}
	p := loadSweepers([]string{"dst", "x"}, "rows")
	dst := p.base[0]
	x, theta := moving(p.base[1], "stride"), moving(Load(Param("theta"), GP64()), "step")
	p.panels(Load(Param("cols"), GP64()), func(w arith, n int) []VecVirtual {
		sum := make([]VecVirtual, n)
		for i := range sum {
			if squared {
				sum[i] = w.vector()
				VXORPD(sum[i], sum[i], sum[i])
			} else {
				sum[i] = w.load(Mem{Base: dst, Disp: w.size * i})
				w.mul(w.of(first), sum[i], sum[i])
			}
		}
		return sum
	}, []move{x, theta}, func(w arith, sum []VecVirtual) {
		t := YMM()
		VBROADCASTSD(Mem{Base: theta.at}, t)
		for i := range sum {
			w.fmadd(Mem{Base: x.at, Disp: w.size * i}, w.of(t), sum[i])
		}
	}, func(w arith, sum []VecVirtual) {
		for i := range sum {
			d := Mem{Base: dst, Disp: w.size * i}
			if squared {
				h := w.load(d)
				w.fmadd(sum[i], sum[i], h)
				w.move(h, d)
			} else {
				w.move(sum[i], d)
			}
		}
	})
}

// scaleColumns keeps the factors of a panel of rows in registers.
func scaleColumns() {
	TEXT("scaleColumnsAVX2", NOSPLIT, "func(dst *float64, strideDst int, x *float64, stride int, w *float64, cols, rows int)")
	Doc("scaleColumnsAVX2 sets dst_j[r] = x_j[r] w[r].")
	Pragma("noescape")
	p := loadSweepers([]string{"dst", "x", "w"}, "rows")
	dst, x := moving(p.base[0], "strideDst"), moving(p.base[1], "stride")
	p.panels(Load(Param("cols"), GP64()), func(w arith, n int) []VecVirtual {
		f := make([]VecVirtual, n)
		for i := range f {
			f[i] = w.load(Mem{Base: p.base[2], Disp: w.size * i})
		}
		return f
	}, []move{dst, x}, func(w arith, f []VecVirtual) {
		for i := range f {
			v := w.load(Mem{Base: x.at, Disp: w.size * i})
			w.mul(f[i], v, v)
			w.move(v, Mem{Base: dst.at, Disp: w.size * i})
		}
	}, func(arith, []VecVirtual) {})
}

// zeros counts by subtracting comparisons, which are -1 where they hold.
func zeros() {
	TEXT("zerosAVX2", NOSPLIT, "func(x *float64, n int) int")
	Doc("zerosAVX2 counts the zeros among n elements but for those after the last whole four.")
	Pragma("noescape")
	zero, count := YMM(), YMM()
	VXORPD(zero, zero, zero)
	VXORPD(count, count, count)
	p := loadSweepers([]string{"x"}, "n")
	p.groups(func(w arith, at []Mem) {
		equal := YMM()
		VCMPPD(Imm(0), at[0], zero, equal)
		VPSUBQ(equal, count, count)
	})
	upper, c := XMM(), count.AsX()
	VEXTRACTI128(Imm(1), count, upper)
	VPADDQ(upper, c, c)
	VPUNPCKHQDQ(c, c, upper)
	VPADDQ(upper, c, c)
	n := GP64()
	VMOVQ(c, n)
	Store(n, ReturnIndex(0))
	VZEROUPPER()
	RET()
}
