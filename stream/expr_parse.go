package stream

import (
	"errors"
	"go/ast"
	"go/parser"
	"go/scanner"
	"go/token"
	"strconv"
	"strings"
)

// op is what a node of an expression does.
type op uint8

const (
	opNumber op = iota + 1 // num, lit
	opBool                 // num 0 or 1
	opString               // str
	opColumn               // str, col
	opCall                 // fn, args, option
	opNeg
	opNot
	opAdd
	opSub
	opMul
	opDiv
	opLess
	opLessEqual
	opGreater
	opGreaterEqual
	opEqual
	opNotEqual
	opAnd
	opOr
)

func (o op) comparison() bool { return o >= opLess && o <= opNotEqual }

var binaryOps = map[token.Token]op{
	token.ADD: opAdd, token.SUB: opSub, token.MUL: opMul, token.QUO: opDiv,
	token.LSS: opLess, token.LEQ: opLessEqual, token.GTR: opGreater, token.GEQ: opGreaterEqual,
	token.EQL: opEqual, token.NEQ: opNotEqual, token.LAND: opAnd, token.LOR: opOr,
}

// valueType is the type of a node's value. Numbers and booleans are float64
// vectors when evaluated, where NaN is missing and true is 1.
type valueType uint8

const (
	numberValue valueType = iota + 1
	boolValue
	textValue
	timeValue
)

func (t valueType) String() string {
	return [...]string{"unknown", "a number", "true or false", "text", "a time"}[t]
}

// node is one node of a parsed expression. Parentheses are not kept.
type node struct {
	op   op
	args []*node
	num  float64
	lit  string // canonical spelling of a number
	str  string // text of a literal, name of a column
	fn   string
	// base is the option of each(c, base="...").
	base    string
	hasBase bool
	// level is the option of each(c, level="...") in a hypothesis.
	level    string
	hasLevel bool
	pos      int // offset in the expression's text

	// Set by the binder.
	typ             valueType
	col             int
	kind            Kind  // of a column
	zoned, dateOnly bool  // of a time
	ns              int64 // a text that is compared with a time
}

// parse reads the expression without looking at any schema.
func (x exprText) parse() (*node, error) {
	masked, names, err := x.scan()
	if err != nil {
		return nil, err
	}
	fset := token.NewFileSet()
	tree, err := parser.ParseExprFrom(fset, "", masked, parser.SkipObjectResolution)
	if err != nil {
		var list scanner.ErrorList
		if errors.As(err, &list) && len(list) > 0 {
			return nil, x.errorf(list[0].Pos.Offset, "%s", x.tidy(list[0].Msg))
		}
		return nil, x.errorf(0, "%s", x.tidy(err.Error()))
	}
	p := parseState{exprText: x, names: names, masked: masked}
	return p.node(tree, 0)
}

// tidy words a message of go/parser in the terms of an expression.
func (x exprText) tidy(msg string) string {
	msg = strings.ReplaceAll(msg, "'EOF'", "the end")
	msg = strings.ReplaceAll(msg, "newline", "the end")
	msg = strings.ReplaceAll(msg, "expected operand", "want a number, a column or a function")
	msg = strings.ReplaceAll(msg, "expected ", "want ")
	return strings.ReplaceAll(msg, "\n", " ")
}

type parseState struct {
	exprText
	names  map[int]string
	masked []byte
}

// offset is the place of a position in the text: the file set holds one file,
// whose base is 1.
func offset(p token.Pos) int { return int(p) - 1 }

func (p *parseState) source(e ast.Expr) string {
	return strings.Join(strings.Fields(p.text[offset(e.Pos()):min(offset(e.End()), len(p.text))]), " ")
}

// name is the word of an identifier as the user wrote it.
func (p *parseState) name(id *ast.Ident) string {
	if w, ok := p.names[offset(id.Pos())]; ok {
		return w
	}
	return id.Name
}

// node converts a tree. The left operand of a binary operator does not count
// as deeper, so that a long sum is no deep nesting.
func (p *parseState) node(e ast.Expr, depth int) (*node, error) {
	pos := offset(e.Pos())
	if depth > maxExprDepth {
		return nil, p.errorf(pos, "nested more than %d deep", maxExprDepth)
	}
	switch e := e.(type) {
	case *ast.ParenExpr:
		return p.node(e.X, depth+1)
	case *ast.Ident:
		switch name := p.name(e); name {
		case "true":
			return &node{op: opBool, num: 1, pos: pos}, nil
		case "false":
			return &node{op: opBool, pos: pos}, nil
		default:
			return &node{op: opColumn, str: name, pos: pos}, nil
		}
	case *ast.BasicLit:
		return p.literal(e)
	case *ast.UnaryExpr:
		if e.Op == token.XOR {
			return nil, p.errorf(pos, "found =; a comparison is written ==")
		}
		arg, err := p.node(e.X, depth+1)
		if err != nil {
			return nil, err
		}
		switch e.Op {
		case token.ADD:
			return arg, nil
		case token.SUB:
			return &node{op: opNeg, args: []*node{arg}, pos: pos}, nil
		case token.NOT:
			return &node{op: opNot, args: []*node{arg}, pos: pos}, nil
		}
		return nil, p.errorf(pos, "found %s; before an operand stand only - + and !", e.Op)
	case *ast.BinaryExpr:
		return p.binary(e, depth)
	case *ast.CallExpr:
		return p.call(e, depth)
	case *ast.StarExpr:
		return nil, p.errorf(pos, "found * without a left operand")
	}
	return nil, p.errorf(pos, "found %s, want a number, a column or a function", p.source(e))
}

func (p *parseState) literal(e *ast.BasicLit) (*node, error) {
	pos := offset(e.Pos())
	if e.Kind == token.STRING {
		s, err := strconv.Unquote(e.Value)
		if err != nil {
			return nil, p.errorf(pos, "found %s, want text in double quotes", e.Value)
		}
		return &node{op: opString, str: s, pos: pos}, nil
	}
	digits := strings.ReplaceAll(e.Value, "_", "")
	v, err := strconv.ParseFloat(digits, 64)
	if err != nil {
		return nil, p.errorf(pos, "found %s, want a number within 1.8e308", p.snippet(pos))
	}
	if e.Kind != token.INT {
		digits = formatFloat(v)
	}
	return &node{op: opNumber, num: v, lit: digits, pos: pos}, nil
}

func (p *parseState) binary(e *ast.BinaryExpr, depth int) (*node, error) {
	pos := offset(e.OpPos)
	if e.Op == token.XOR {
		return nil, p.errorf(pos, `found =; a comparison is written ==, an option only in each(c, base="label")`)
	}
	o, ok := binaryOps[e.Op]
	if !ok {
		return nil, p.errorf(pos, "found %s; the operators are + - * / == != < <= > >= && || !", e.Op)
	}
	if left, chained := e.X.(*ast.BinaryExpr); chained && o.comparison() && binaryOps[left.Op].comparison() {
		return nil, p.errorf(pos, "found a chain of comparisons; write %s && %s %s %s",
			p.source(left), p.source(left.Y), e.Op, p.source(e.Y))
	}
	a, err := p.node(e.X, depth)
	if err != nil {
		return nil, err
	}
	b, err := p.node(e.Y, depth+1)
	if err != nil {
		return nil, err
	}
	return &node{op: o, args: []*node{a, b}, pos: pos}, nil
}

func (p *parseState) call(e *ast.CallExpr, depth int) (*node, error) {
	pos := offset(e.Pos())
	id, ok := e.Fun.(*ast.Ident)
	if !ok {
		return nil, p.errorf(pos, "found %s, want the name of a function before (", p.source(e.Fun))
	}
	name := p.name(id)
	f := lookupFunction(name)
	if f == nil {
		hint := "the functions are " + oneOf(functionNames())
		if near := nearest(name, functionNames()); len(near) > 0 {
			hint = "nearest: " + oneOf(near)
		}
		return nil, p.errorf(pos, "there is no function %s; %s", name, hint)
	}
	n := &node{op: opCall, fn: name, pos: pos}
	args := e.Args
	if name == "each" && len(args) == 2 {
		if err := p.option(n, args[1]); err != nil {
			return nil, err
		}
		args = args[:1]
	}
	if len(e.Args) < f.min || f.max > 0 && len(e.Args) > f.max {
		return nil, p.errorf(pos, "%s has %d arguments, want %s", name, len(e.Args), f.usage)
	}
	if name == "col" {
		lit, ok := args[0].(*ast.BasicLit)
		if !ok || lit.Kind != token.STRING {
			return nil, p.errorf(offset(args[0].Pos()), `found %s, want a name in quotes: col("name")`, p.source(args[0]))
		}
		s, err := p.literal(lit)
		if err != nil {
			return nil, err
		}
		return &node{op: opColumn, str: s.str, pos: pos}, nil
	}
	for _, a := range args {
		arg, err := p.node(a, depth+1)
		if err != nil {
			return nil, err
		}
		n.args = append(n.args, arg)
	}
	return n, nil
}

// option reads base="label" or, in a hypothesis, level="label".
func (p *parseState) option(n *node, e ast.Expr) error {
	pos := offset(e.Pos())
	want := "base"
	if p.role == roleHypothesis {
		want = "level"
	}
	b, ok := e.(*ast.BinaryExpr)
	if !ok || b.Op != token.XOR {
		return p.errorf(pos, `found %s, want %s="label"; an interaction is written each(a) * each(b)`, p.source(e), want)
	}
	id, ok := b.X.(*ast.Ident)
	if !ok || id.Name != "base" && id.Name != want {
		return p.errorf(pos, `found the option %s, want %s="label"`, p.source(b.X), want)
	}
	lit, ok := b.Y.(*ast.BasicLit)
	if !ok || lit.Kind != token.STRING {
		return p.errorf(offset(b.Y.Pos()), `found %s, want a label in quotes, such as base="a" or base="3"`, p.source(b.Y))
	}
	s, err := p.literal(lit)
	if err != nil {
		return err
	}
	if id.Name == "level" {
		n.level, n.hasLevel = s.str, true
	} else {
		n.base, n.hasBase = s.str, true
	}
	return nil
}
