package stream

import (
	"fmt"
	"math"
	"math/big"
	"slices"
	"strconv"
	"strings"
)

// The compiler turns bound expressions into instructions. Equal operations on
// equal operands become one instruction, also across expressions.

// use returns the index of a column among the uses.
func (c *compiler) use(column int, raw bool) int {
	p := c.prog
	i, ok := c.useOf[column]
	if !ok {
		i = len(p.uses)
		c.useOf[column] = i
		s := &c.schema.Columns[column]
		p.uses = append(p.uses, use{column: column, name: s.Name, kind: s.Kind})
	}
	p.uses[i].raw = p.uses[i].raw || raw
	if c.counts && !slices.Contains(p.checked, i) {
		p.checked = append(p.checked, i)
	}
	return i
}

// emit adds an instruction unless the same one is there, and returns its
// register.
func (c *compiler) emit(in instr) int {
	in.label = -1
	key := fmt.Sprint(in.code, in.cmp, in.a, in.b, in.use, math.Float64bits(in.k), in.ns, in.bound, in.zoned, strconv.Quote(in.text))
	if r, ok := c.known[key]; ok {
		return r
	}
	if in.code == codeTextConst {
		in.cache = c.prog.textCaches
		c.prog.textCaches++
	}
	r := len(c.prog.code)
	c.prog.code = append(c.prog.code, in)
	c.known[key] = r
	return r
}

// time compiles an expression of type time.
func (c *compiler) time(n *node) int {
	if n.op == opColumn {
		return c.emit(instr{code: codeTimeCell, use: c.use(n.col, true)})
	}
	return c.emit(instr{code: codeDate, a: c.time(n.args[0]), zoned: n.args[0].zoned})
}

// number compiles an expression whose value is a number, a truth value, or a
// time taken as a number.
func (c *compiler) number(n *node) int {
	switch n.op {
	case opNumber, opBool:
		return c.emit(instr{code: codeConst, k: n.num})
	case opColumn:
		if n.typ == timeValue {
			return c.emit(instr{code: codeSeconds, a: c.time(n)})
		}
		return c.emit(instr{code: codeCell, use: c.use(n.col, false)})
	case opCall:
		return c.call(n)
	case opNeg:
		return c.emit(instr{code: codeNeg, a: c.number(n.args[0])})
	case opNot:
		return c.emit(instr{code: codeNot, a: c.number(n.args[0])})
	}
	if n.op.comparison() {
		return c.comparison(n)
	}
	codes := map[op]code{opAdd: codeAdd, opSub: codeSub, opMul: codeMul, opDiv: codeDiv, opAnd: codeAnd, opOr: codeOr}
	in := instr{code: codes[n.op], a: c.number(n.args[0]), b: c.number(n.args[1])}
	if n.op == opDiv {
		return c.fallible(in, n)
	}
	return c.emit(in)
}

// fallible emits an operation that can have no value for present operands.
func (c *compiler) fallible(in instr, n *node) int {
	r := c.emit(in)
	if p := c.prog; c.counts && p.code[r].label < 0 {
		p.code[r].label = len(p.noValue)
		p.noValue = append(p.noValue, n.String())
	}
	return r
}

func (c *compiler) call(n *node) int {
	switch n.fn {
	case "missing":
		return c.missing(n.args[0])
	case "date":
		return c.emit(instr{code: codeSeconds, a: c.time(n)})
	case "hour", "weekday", "month":
		codes := map[string]code{"hour": codeHour, "weekday": codeWeekday, "month": codeMonth}
		return c.emit(instr{code: codes[n.fn], a: c.time(n.args[0]), zoned: n.args[0].zoned})
	}
	a := c.number(n.args[0])
	switch n.fn {
	case "log":
		return c.fallible(instr{code: codeLog, a: a}, n)
	case "sqrt":
		return c.fallible(instr{code: codeSqrt, a: a}, n)
	case "exp":
		return c.emit(instr{code: codeExp, a: a})
	case "abs":
		return c.emit(instr{code: codeAbs, a: a})
	case "hinge":
		return c.emit(instr{code: codeHinge, a: a, b: c.number(n.args[1])})
	case "pow":
		return c.pow(n, a)
	}
	codes := map[string]code{"min": codeMin, "max": codeMax}
	for _, arg := range n.args[1:] {
		a = c.emit(instr{code: codes[n.fn], a: a, b: c.number(arg)})
	}
	return a
}

// pow picks the most accurate form for the exponent.
func (c *compiler) pow(n *node, a int) int {
	e := n.args[1]
	negative := e.op == opNeg && e.args[0].op == opNumber
	if e.op == opNumber || negative {
		k := e.num
		if negative {
			k = -e.args[0].num
		}
		switch {
		case k == 1:
			return a
		case k == 2:
			return c.emit(instr{code: codeSquare, a: a})
		case k == 0.5:
			return c.fallible(instr{code: codeSqrt, a: a}, n)
		case k != 0 && k == math.Trunc(k) && math.Abs(k) <= maxPowInt:
			return c.fallible(instr{code: codePowInt, a: a, ns: int64(k)}, n)
		}
	}
	return c.fallible(instr{code: codePow, a: a, b: c.number(e)}, n)
}

func (c *compiler) missing(n *node) int {
	defer func(old bool) { c.counts = old }(c.counts)
	c.counts = false
	switch n.typ {
	case textValue:
		return c.emit(instr{code: codeNoText, use: c.use(n.col, true)})
	case timeValue:
		return c.emit(instr{code: codeNoTime, a: c.time(n)})
	}
	return c.emit(instr{code: codeNoNumber, a: c.number(n)})
}

func (c *compiler) comparison(n *node) int {
	l, r, o := n.args[0], n.args[1], n.op
	if l.op == opString || exactNumber(l) != nil && exactNumber(r) == nil {
		l, r, o = r, l, mirror(o)
	}
	switch {
	case l.typ == textValue && r.op == opString:
		return c.emit(instr{code: codeTextConst, cmp: o, use: c.use(l.col, true), text: r.str})
	case l.typ == textValue:
		return c.emit(instr{code: codeTextText, cmp: o, use: c.use(l.col, true), b: c.use(r.col, true)})
	case l.typ == timeValue && r.op == opString:
		return c.emit(instr{code: codeTimeConst, cmp: o, a: c.time(l), ns: r.ns})
	case l.typ == timeValue && r.typ == timeValue:
		return c.emit(instr{code: codeTimeTime, cmp: o, a: c.time(l), b: c.time(r)})
	case l.op == opColumn && (l.kind == Int64 || l.kind == Uint64):
		// Below 2^53 comparing as float64 is exact, and lets a CSV column hold
		// 12.5 after all.
		if v := exactNumber(r); v != nil && new(big.Rat).Abs(v).Cmp(big.NewRat(1<<53, 1)) >= 0 {
			return c.emit(instr{code: codeBigConst, cmp: o, use: c.use(l.col, true), bound: newBound(v, l.kind)})
		}
	}
	return c.emit(instr{code: codeCompare, cmp: o, a: c.number(l), b: c.number(r)})
}

// exactNumber is the value of a literal, its sign included, or nil.
func exactNumber(n *node) *big.Rat {
	switch n.op {
	case opNeg:
		if v := exactNumber(n.args[0]); v != nil {
			return v.Neg(v)
		}
	case opNumber:
		if strings.Trim(n.lit, "0123456789") == "" {
			i, ok := new(big.Int).SetString(n.lit, 10)
			if !ok {
				return nil
			}
			return new(big.Rat).SetInt(i)
		}
		return new(big.Rat).SetFloat64(n.num)
	}
	return nil
}

// newBound takes a number of at least 2^53, as which every float64 is whole.
func newBound(v *big.Rat, k Kind) bound {
	whole := v.Num()
	switch {
	case k == Int64 && whole.IsInt64():
		return bound{value: uint64(whole.Int64())}
	case k == Uint64 && whole.IsUint64():
		return bound{value: whole.Uint64()}
	}
	return bound{side: -whole.Sign()}
}
