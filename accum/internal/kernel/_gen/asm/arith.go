package asm

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// packed and single are the instructions on four numbers and on one.
var (
	packed = arith{group, YMM, VMOVUPD, VADDPD, VSUBPD, VMULPD, VFMADD231PD, VFMSUB231PD}
	single = arith{8, XMM, VMOVSD, VADDSD, VSUBSD, VMULSD, VFMADD231SD, VFMSUB231SD}
)

type arith struct {
	size                              int // bytes
	vector                            func() VecVirtual
	move, add, sub, mul, fmadd, fmsub func(...Op)
}

func (w arith) load(m Mem) VecVirtual {
	v := w.vector()
	w.move(m, v)
	return v
}

// sum and diff return a+b and a-b in a new register.
func (w arith) sum(a, b VecVirtual) VecVirtual {
	v := w.vector()
	w.add(b, a, v)
	return v
}

func (w arith) diff(a, b VecVirtual) VecVirtual {
	v := w.vector()
	w.sub(b, a, v)
	return v
}

// of is the part of a broadcast that w works with.
func (w arith) of(v VecVirtual) VecVirtual {
	if w.size == group {
		return v
	}
	return v.AsX().(VecVirtual)
}

// twoSum returns a+b and, exactly, what was rounded off (Knuth).
func (w arith) twoSum(a, b VecVirtual) (s, e VecVirtual) {
	s = w.sum(a, b)
	t := w.diff(s, a)
	return s, w.sum(w.diff(a, w.diff(s, t)), w.diff(b, t))
}

// product returns a b and what is missing from the product of the double-doubles
// (a, al) and (b, bl) but for al bl. The low parts may be in memory; nil is zero.
func (w arith) product(a VecVirtual, al Op, b VecVirtual, bl Op) (p, e VecVirtual) {
	p, e = w.vector(), w.vector()
	w.mul(b, a, p)
	VMOVAPD(p, e)
	w.fmsub(b, a, e)
	w.fmadd(bl, a, e)
	if al != nil {
		w.fmadd(al, b, e)
	}
	return p, e
}

// sweepers are the current places in vectors that are swept over together.
type sweepers struct {
	base []Register
	n    Register // elements left
}

func loadSweepers(params []string, n string) sweepers {
	var p sweepers
	for _, name := range params {
		p.base = append(p.base, Load(Param(name), GP64()))
	}
	p.n = Load(Param(n), GP64())
	return p
}

// each runs body as long as there are count elements, and steps over them.
func (p sweepers) each(label string, count int, body func()) {
	Label(label)
	SUBQ(Imm(uint64(count)), p.n)
	JL(LabelRef(label + "end"))
	body()
	for _, b := range p.base {
		ADDQ(U32(8*count), b)
	}
	JMP(LabelRef(label))
	Label(label + "end")
	if count > 1 {
		ADDQ(Imm(uint64(count)), p.n)
	}
}

// groups does 16 elements at a time, then 4, and rest single ones. at is the
// current place in the vector of each parameter.
func (p sweepers) groups(do func(w arith, at []Mem)) {
	at := func(k int) []Mem {
		var at []Mem
		for _, b := range p.base {
			at = append(at, Mem{Base: b, Disp: group * k})
		}
		return at
	}
	p.each("sixteen", 4*lanes, func() {
		for k := range 4 {
			do(packed, at(k))
		}
	})
	p.each("four", lanes, func() { do(packed, at(0)) })
}

func (p sweepers) rest(do func(w arith, at []Mem)) {
	p.each("single", 1, func() {
		var at []Mem
		for _, b := range p.base {
			at = append(at, Mem{Base: b})
		}
		do(single, at)
	})
}

func elementwise(params []string, do func(w arith, at []Mem)) {
	p := loadSweepers(params, "n")
	p.groups(do)
	p.rest(do)
	VZEROUPPER()
	RET()
}

// broadcast fills a register with a parameter.
func broadcast(param string) VecVirtual {
	m, err := Param(param).Resolve()
	if err != nil {
		panic(err)
	}
	y := YMM()
	VBROADCASTSD(m.Addr, y)
	return y
}

// panels cuts rows into panels that fit registers. start fills n registers of w
// for the panel at p, each uses them for every column, after which the places in
// moves go on, and end is left with them.
func (p sweepers) panels(cols Register, start func(w arith, n int) []VecVirtual, moves []move, each, end func(w arith, v []VecVirtual)) {
	one := func(label string, n int, w arith) {
		p.each(label, n*w.size/8, func() {
			v := start(w, n)
			left := GP64()
			for i := range moves {
				MOVQ(moves[i].from, moves[i].at)
			}
			MOVQ(cols, left)
			TESTQ(left, left)
			JZ(LabelRef(label + "done"))
			Label(label + "columns")
			each(w, v)
			for _, m := range moves {
				ADDQ(m.by, m.at)
			}
			DECQ(left)
			JNZ(LabelRef(label + "columns"))
			Label(label + "done")
			end(w, v)
		})
	}
	one("panel", 8, packed)
	one("four", 1, packed)
	one("single", 1, single)
	VZEROUPPER()
	RET()
}

// move is a place that starts anew for each panel and goes on by so many bytes
// after each column.
type move struct{ from, at, by Register }

func moving(from Register, by string) move {
	m := move{from, GP64(), Load(Param(by), GP64())}
	SHLQ(Imm(3), m.by)
	return m
}
