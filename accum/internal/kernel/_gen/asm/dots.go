package asm

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// maskTable: the mask of the first t lanes starts t elements before its middle.
func maskTable() Mem {
	m := GLOBL("lanemask", RODATA|NOPTR)
	for i := range 2 * lanes {
		v := U64(0)
		if i < lanes {
			v = ^v
		}
		DATA(8*i, v)
	}
	return m
}

// columns addresses the current group of rows of up to eight columns.
type columns struct {
	base, stride, stride3 Register // strides in bytes
	high                  Register // place of column 4 where there are more than 5
	n                     int
}

func loadColumns(base, stride string, n int) columns {
	c := columns{base: Load(Param(base), GP64()), n: n}
	if n > 1 {
		c.stride = Load(Param(stride), GP64())
		SHLQ(Imm(3), c.stride)
	}
	if n > 3 {
		s := GP64()
		LEAQ(Mem{Base: c.stride, Index: c.stride, Scale: 2}, s)
		c.stride3 = s
	}
	if n > 5 {
		c.high = GP64()
		LEAQ(c.at(4), c.high)
	}
	return c
}

func (c columns) at(j int) Mem {
	if j > 4 {
		return columns{base: c.high, stride: c.stride, stride3: c.stride3}.at(j - 4)
	}
	switch j {
	case 0:
		return Mem{Base: c.base}
	case 3:
		return Mem{Base: c.base, Index: c.stride3, Scale: 1}
	default: // 1, 2, 4
		return Mem{Base: c.base, Index: c.stride, Scale: uint8(j)}
	}
}

// pad copies the rows after the last whole group to buf and fills the group up
// with zeros.
func (c columns) pad(buf Mem, offset Register, mask VecVirtual) {
	d := c
	d.base = GP64()
	LEAQ(Mem{Base: c.base, Index: offset, Scale: 1}, d.base)
	if c.high != nil {
		d.high = GP64()
		LEAQ(Mem{Base: c.high, Index: offset, Scale: 1}, d.high)
	}
	for j := range c.n {
		y := YMM()
		VMASKMOVPD(d.at(j), mask, y)
		VMOVUPD(y, buf.Offset(group*j))
	}
}

// turnTo makes the copy in buf the current group.
func (c columns) turnTo(buf Mem) {
	LEAQ(buf, c.base)
	if c.high != nil {
		LEAQ(buf.Offset(4*group), c.high)
	}
	if c.n > 1 {
		MOVQ(U32(group), c.stride)
	}
	if c.n > 3 {
		MOVQ(U32(3*group), c.stride3)
	}
}

// sweep runs body over all groups of rows. The rows of an incomplete last group
// are copied out before the loop, while registers are free, and go through the
// same loop once it has done the others.
func sweep(mask Mem, sets []columns, acc []VecVirtual, body func()) {
	n, rest := Load(Param("rows"), GP64()), GP64()
	total := 0
	for _, c := range sets {
		total += c.n
	}
	buf := AllocLocal(group * total)

	MOVQ(n, rest)
	SHRQ(Imm(2), n)
	ANDQ(Imm(lanes-1), rest)
	JZ(LabelRef("start"))
	offset, back, table := GP64(), GP64(), GP64()
	MOVQ(n, offset)
	SHLQ(Imm(5), offset)
	MOVQ(rest, back)
	NEGQ(back)
	LEAQ(mask.Offset(group), table)
	m := YMM()
	VMOVUPD(Mem{Base: table, Index: back, Scale: 8}, m)
	at := buf
	for _, c := range sets {
		c.pad(at, offset, m)
		at = at.Offset(group * c.n)
	}

	Label("start")
	for _, s := range acc {
		VXORPD(s, s, s)
	}
	TESTQ(n, n)
	JZ(LabelRef("rest"))

	Label("loop")
	body()
	for _, c := range sets {
		ADDQ(Imm(group), c.base)
		if c.high != nil {
			ADDQ(Imm(group), c.high)
		}
	}
	DECQ(n)
	JNZ(LabelRef("loop"))

	Label("rest")
	TESTQ(rest, rest)
	JZ(LabelRef("sums"))
	XORQ(rest, rest)
	MOVQ(U32(1), n)
	at = buf
	for _, c := range sets {
		c.turnTo(at)
		at = at.Offset(group * c.n)
	}
	JMP(LabelRef("loop"))

	Label("sums")
}

// addSums adds the dot products in s to consecutive elements from d on.
func addSums(d Mem, s []VecVirtual) {
	switch {
	case len(s) >= 4:
		t := YMM()
		VHADDPD(s[1], s[0], s[0])
		VHADDPD(s[3], s[2], s[2])
		VPERM2F128(Imm(0x20), s[2], s[0], t)
		VPERM2F128(Imm(0x31), s[2], s[0], s[0])
		VADDPD(s[0], t, s[0])
		VADDPD(d, s[0], s[0])
		VMOVUPD(s[0], d)
		if len(s) > 4 {
			addSums(d.Offset(8*4), s[4:])
		}
	case len(s) >= 2:
		t := XMM()
		x := s[0].AsX()
		VHADDPD(s[1], s[0], s[0])
		VEXTRACTF128(Imm(1), s[0], t)
		VADDPD(t, x, x)
		VADDPD(d, x, x)
		VMOVUPD(x, d)
		if len(s) > 2 {
			addSums(d.Offset(8*2), s[2:])
		}
	default:
		t := XMM()
		x := s[0].AsX()
		VHADDPD(s[0], s[0], s[0])
		VEXTRACTF128(Imm(1), s[0], t)
		VADDSD(t, x, x)
		VADDSD(d, x, x)
		VMOVSD(x, d)
	}
}

func vectors(n int) []VecVirtual {
	v := make([]VecVirtual, n)
	for i := range v {
		v[i] = YMM()
	}
	return v
}

func rectangle(mask Mem, p, q int) {
	name := fmt.Sprintf("dots%dx%dAVX2", p, q)
	TEXT(name, NOSPLIT, "func(dst *float64, step, grow int, a *float64, strideA int, b *float64, strideB int, rows int)")
	Doc(name+fmt.Sprintf(" adds the %d x %d dot products of columns of a and b. Those of one column of b", p, q),
		"are side by side in dst, step elements behind those of the column before; step grows by grow.")
	Pragma("noescape")
	a, b := loadColumns("a", "strideA", p), loadColumns("b", "strideB", q)
	acc := vectors(p * q) // acc[j*p+i]: column i of a, j of b
	sweep(mask, []columns{a, b}, acc, func() {
		v := vectors(q)
		for j := range v {
			VMOVUPD(b.at(j), v[j])
		}
		for i := range p {
			u := YMM()
			VMOVUPD(a.at(i), u)
			for j := range v {
				VFMADD231PD(v[j], u, acc[j*p+i])
			}
		}
	})
	dst := Load(Param("dst"), GP64())
	var step, grow Register
	if q > 1 {
		step = Load(Param("step"), GP64())
	}
	if q > 2 {
		grow = Load(Param("grow"), GP64())
	}
	for j := range q {
		addSums(Mem{Base: dst}, acc[j*p:(j+1)*p])
		if j+1 < q {
			LEAQ(Mem{Base: dst, Index: step, Scale: 8}, dst)
		}
		if j+2 < q {
			ADDQ(grow, step)
		}
	}
	VZEROUPPER()
	RET()
}

func triangle(mask Mem, p int) {
	name := fmt.Sprintf("triangle%dAVX2", p)
	TEXT(name, NOSPLIT, "func(dst *float64, step int, a *float64, stride int, rows int)")
	Doc(name+fmt.Sprintf(" adds the dot products of all pairs of %d columns: those of column j with the columns", p),
		"up to it are side by side in dst, step elements behind those of the column before; step grows by 1.")
	Pragma("noescape")
	a := loadColumns("a", "stride", p)
	acc := vectors(p * (p + 1) / 2)
	sweep(mask, []columns{a}, acc, func() {
		if p > 4 { // the sums leave one register
			for i := range p {
				u := YMM()
				VMOVUPD(a.at(i), u)
				VFMADD231PD(u, u, acc[i*(i+1)/2+i])
				for j := i + 1; j < p; j++ {
					VFMADD231PD(a.at(j), u, acc[j*(j+1)/2+i])
				}
			}
			return
		}
		v := vectors(p)
		for j := range v {
			VMOVUPD(a.at(j), v[j])
			for i := range j + 1 {
				VFMADD231PD(v[i], v[j], acc[j*(j+1)/2+i])
			}
		}
	})
	dst := Load(Param("dst"), GP64())
	var step Register
	if p > 1 {
		step = Load(Param("step"), GP64())
	}
	for j := range p {
		addSums(Mem{Base: dst}, acc[j*(j+1)/2:(j+1)*(j+2)/2])
		if j+1 < p {
			LEAQ(Mem{Base: dst, Index: step, Scale: 8}, dst)
		}
		if j+2 < p {
			INCQ(step)
		}
	}
	VZEROUPPER()
	RET()
}

// tile512 keeps the lanes of two dot products in a register: those of columns 2m
// and 2m+1 of a with column j of b in acc[j][m]. With q zero it is a triangle: b
// is a, and acc[j] ends with the pair that holds column j.
func tile512(mask Mem, p, q int) {
	var acc [][]VecVirtual
	var all []VecVirtual
	var a, b columns
	if q == 0 {
		name := fmt.Sprintf("triangle%dAVX512", p)
		TEXT(name, 0, "func(dst *float64, step int, a *float64, stride int, rows int)")
		Doc(name + fmt.Sprintf(" does what triangle1AVX2 does, for %d columns.", p))
		a = loadColumns("a", "stride", p)
		for j := range p {
			acc = append(acc, vectors512(j/2+1))
		}
	} else {
		name := fmt.Sprintf("dots%dx%dAVX512", p, q)
		TEXT(name, 0, "func(dst *float64, step, grow int, a *float64, strideA int, b *float64, strideB int, rows int)")
		Doc(name + fmt.Sprintf(" does what dots1x1AVX2 does, for %d x %d columns.", p, q))
		a, b = loadColumns("a", "strideA", p), loadColumns("b", "strideB", q)
		for range q {
			acc = append(acc, vectors512((p+1)/2))
		}
	}
	Pragma("noescape")
	for _, v := range acc {
		all = append(all, v...)
	}
	sets, right := []columns{a}, a
	if q > 0 {
		sets, right = append(sets, b), b
	}
	sweep(mask, sets, all, func() {
		var pairs []VecVirtual
		for i := 0; i < p; i += 2 {
			u := ZMM()
			VBROADCASTF64X4(a.at(i), u)
			if i+1 < p {
				VINSERTF64X4(Imm(1), a.at(i+1), u, u)
			}
			pairs = append(pairs, u)
		}
		for j := range acc {
			v := ZMM()
			VBROADCASTF64X4(right.at(j), v)
			for m, s := range acc[j] {
				VFMADD231PD(v, pairs[m], s)
			}
		}
	})
	buf := AllocLocal(2 * group * len(all))
	for i, s := range all {
		VMOVUPD(s, buf.Offset(2*group*i))
	}
	dst := Load(Param("dst"), GP64())
	step := Load(Param("step"), GP64())
	var grow Register
	if q > 2 {
		grow = Load(Param("grow"), GP64())
	}
	for j := range acc {
		n := p
		if q == 0 {
			n = j + 1
		}
		for i := 0; i < n; i += 4 {
			var s []VecVirtual
			for k := i; k < min(i+4, n); k++ {
				y := YMM()
				VMOVUPD(buf.Offset(group*k), y)
				s = append(s, y)
			}
			addSums(Mem{Base: dst, Disp: 8 * i}, s)
		}
		buf = buf.Offset(2 * group * len(acc[j]))
		if j+1 < len(acc) {
			LEAQ(Mem{Base: dst, Index: step, Scale: 8}, dst)
		}
		if j+2 < len(acc) {
			if q == 0 {
				INCQ(step)
			} else {
				ADDQ(grow, step)
			}
		}
	}
	VZEROUPPER()
	RET()
}

func vectors512(n int) []VecVirtual {
	v := make([]VecVirtual, n)
	for i := range v {
		v[i] = ZMM()
	}
	return v
}

func peak(name string, vectors func(n int) []VecVirtual) {
	TEXT(name, NOSPLIT, "func(n int)")
	Doc(name + " does 12 n multiply-adds in registers alone: the ceiling of the benchmarks.")
	n := Load(Param("n"), GP64())
	acc := vectors(13)
	for _, s := range acc {
		VXORPD(s, s, s)
	}
	Label("loop")
	for _, s := range acc[1:] {
		VFMADD231PD(acc[0], acc[0], s)
	}
	DECQ(n)
	JNZ(LabelRef("loop"))
	VZEROUPPER()
	RET()
}
