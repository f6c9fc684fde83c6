package stream

import (
	"slices"
	"strconv"
	"strings"
)

var opText = [...]string{
	opNeg: "-", opNot: "!", opAdd: "+", opSub: "-", opMul: "*", opDiv: "/",
	opLess: "<", opLessEqual: "<=", opGreater: ">", opGreaterEqual: ">=",
	opEqual: "==", opNotEqual: "!=", opAnd: "&&", opOr: "||",
}

// Binding strength, Go's.
const (
	precOr = iota + 1
	precAnd
	precCompare
	precAdd
	precMul
	precUnary
	precOperand
)

func (n *node) prec() int {
	switch n.op {
	case opOr:
		return precOr
	case opAnd:
		return precAnd
	case opAdd, opSub:
		return precAdd
	case opMul, opDiv:
		return precMul
	case opNeg, opNot:
		return precUnary
	}
	if n.op.comparison() {
		return precCompare
	}
	return precOperand
}

// String prints the expression in canonical form: single spaces, no needless
// parentheses. The text parses to the same tree.
func (n *node) String() string {
	var b strings.Builder
	n.print(&b)
	return b.String()
}

func (n *node) print(b *strings.Builder) {
	switch n.op {
	case opNumber:
		b.WriteString(n.lit)
	case opBool:
		b.WriteString(strconv.FormatBool(n.num != 0))
	case opString:
		b.WriteString(strconv.Quote(n.str))
	case opColumn:
		if isWord(n.str) && n.str != "true" && n.str != "false" {
			b.WriteString(n.str)
		} else {
			b.WriteString("col(" + strconv.Quote(n.str) + ")")
		}
	case opCall:
		b.WriteString(n.fn)
		b.WriteByte('(')
		for i, a := range n.args {
			if i > 0 {
				b.WriteString(", ")
			}
			a.print(b)
		}
		if n.hasBase {
			b.WriteString(", base=" + strconv.Quote(n.base))
		}
		if n.hasLevel {
			b.WriteString(", level=" + strconv.Quote(n.level))
		}
		b.WriteByte(')')
	case opNeg, opNot:
		b.WriteString(opText[n.op])
		a := n.args[0]
		a.printIn(b, a.prec() < precUnary || n.op == opNeg && a.op == opNeg)
	default:
		p := n.prec()
		left, right := n.args[0], n.args[1]
		left.printIn(b, left.prec() < p || p == precCompare && left.prec() == p)
		b.WriteString(" " + opText[n.op] + " ")
		right.printIn(b, right.prec() <= p)
	}
}

func (n *node) printIn(b *strings.Builder, parens bool) {
	if parens {
		b.WriteByte('(')
	}
	n.print(b)
	if parens {
		b.WriteByte(')')
	}
}

// identity is a text that two expressions share when they differ only in the
// order of operands that does not matter: a*b and b*a, x < y and y > x.
func (n *node) identity() string {
	switch n.op {
	case opAdd, opMul, opAnd, opOr:
		parts := n.chain(n.op, nil)
		slices.Sort(parts)
		return "(" + strings.Join(parts, opText[n.op]) + ")"
	case opEqual, opNotEqual:
		a, b := n.args[0].identity(), n.args[1].identity()
		return "(" + min(a, b) + opText[n.op] + max(a, b) + ")"
	case opGreater, opGreaterEqual:
		return "(" + n.args[1].identity() + opText[mirror(n.op)] + n.args[0].identity() + ")"
	case opCall:
		parts := make([]string, len(n.args))
		for i, a := range n.args {
			parts[i] = a.identity()
		}
		if n.fn == "min" || n.fn == "max" {
			slices.Sort(parts)
		}
		s := n.fn + "(" + strings.Join(parts, ",")
		if n.hasBase {
			s += ",base=" + strconv.Quote(n.base)
		}
		return s + ")"
	case opNeg, opNot:
		return opText[n.op] + "(" + n.args[0].identity() + ")"
	case opSub, opDiv, opLess, opLessEqual:
		return "(" + n.args[0].identity() + opText[n.op] + n.args[1].identity() + ")"
	}
	return n.String()
}

// chain collects the operands of nested o.
func (n *node) chain(o op, parts []string) []string {
	if n.op != o {
		return append(parts, n.identity())
	}
	return n.args[1].chain(o, n.args[0].chain(o, parts))
}

// mirror is the comparison with its sides swapped.
func mirror(o op) op {
	switch o {
	case opLess:
		return opGreater
	case opLessEqual:
		return opGreaterEqual
	case opGreater:
		return opLess
	case opGreaterEqual:
		return opLessEqual
	}
	return o
}

// walk calls f for n and every node below it until f returns false.
func (n *node) walk(f func(*node) bool) bool {
	if !f(n) {
		return false
	}
	for _, a := range n.args {
		if !a.walk(f) {
			return false
		}
	}
	return true
}

func (n *node) readsColumn() bool {
	return !n.walk(func(m *node) bool { return m.op != opColumn })
}

func (n *node) isCall(fn string) bool { return n.op == opCall && n.fn == fn }

func (n *node) hasEach() bool {
	return !n.walk(func(m *node) bool { return !m.isCall("each") })
}
