// Command _gen writes the AVX2 kernels of the package above it.
//
// A tile keeps one register of four lanes for every dot product it adds up, so
// that the lanes of the bit contract are the lanes of the register. Twelve of
// them and four operands fill the sixteen registers.
package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// maxA is how many columns on one side a tile has with 1, 2 and 3 on the other.
var maxA = []int{8, 6, 4}

const (
	lanes = 4
	group = 8 * lanes // bytes of one group of rows

	maxTriangle = 5
	maxWide     = 4
)

func main() {
	ConstraintExpr("amd64")
	ConstraintExpr("!noasm")
	mask := maskTable()
	for q := range maxA {
		for p := range maxA[q] {
			rectangle(mask, p+1, q+1)
		}
	}
	for p := 1; p <= maxTriangle; p++ {
		triangle(mask, p)
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
	peak()
	Generate()
}

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

func peak() {
	TEXT("peakAVX2", NOSPLIT, "func(n int)")
	Doc("peakAVX2 does 48 n multiplications and additions in registers alone: the ceiling of the benchmarks.")
	n := Load(Param("n"), GP64())
	acc := vectors(12)
	u := YMM()
	for _, s := range append(acc, u) {
		VXORPD(s, s, s)
	}
	Label("loop")
	for _, s := range acc {
		VFMADD231PD(u, u, s)
	}
	DECQ(n)
	JNZ(LabelRef("loop"))
	VZEROUPPER()
	RET()
}
