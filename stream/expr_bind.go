package stream

import (
	"fmt"
	"strings"
	"time"

	"golang.org/x/text/unicode/norm"
)

// Roles of expressions, as messages name them.
const (
	roleOutcome = "outcome"
	roleTerm    = "term"
	roleWeight  = "weight"
	roleWhere   = "where"
	roleKey     = "cluster"
	roleSweep   = "sweep"
)

// binder resolves the names of one expression and checks its types.
type binder struct {
	exprText
	schema *Schema
	zone   *time.Location
}

// lookup finds a column by its exact name, then by its normalised one.
func (b *binder) lookup(n *node) (int, error) {
	if i := b.schema.Lookup(n.str); i >= 0 {
		return i, nil
	}
	found, want := -1, norm.NFC.String(n.str)
	for i := range b.schema.Columns {
		if norm.NFC.String(b.schema.Columns[i].Name) != want {
			continue
		}
		if found >= 0 {
			return 0, b.errorf(n.pos, "two columns have the name %s in different Unicode spellings; copy the exact one into col(\"...\")", n.str)
		}
		found = i
	}
	if found >= 0 {
		return found, nil
	}
	if f := lookupFunction(n.str); f != nil {
		return 0, b.errorf(n.pos, "there is no column %s; the function is written %s", n.str, f.usage)
	}
	names := make([]string, len(b.schema.Columns))
	for i := range names {
		names[i] = b.schema.Columns[i].Name
	}
	if near := nearest(n.str, names); len(near) > 0 {
		return 0, b.errorf(n.pos, "there is no column %s; nearest: %s", n.str, oneOf(near))
	}
	const show = 12
	more := ""
	if len(names) > show {
		more = fmt.Sprintf(" and %d more", len(names)-show)
		names = names[:show]
	}
	for i := range names {
		names[i] = strings.Join(strings.Fields(names[i]), " ")
	}
	return 0, b.errorf(n.pos, "there is no column %s, nor one with a name near it; the columns are %s%s", n.str, strings.Join(names, ", "), more)
}

// bind resolves and types n and everything below it.
func (b *binder) bind(n *node) error {
	if n.isCall("each") {
		switch b.role {
		case roleTerm:
		case roleKey:
			return b.errorf(n.pos, "found %s; a cluster is named by %s alone", n, n.args[0])
		case roleSweep:
			return b.errorf(n.pos, "found %s; units are named by %s alone", n, n.args[0])
		default:
			return b.errorf(n.pos, "found %s, which can only stand in the terms", n)
		}
		return b.errorf(n.pos, "%s can only be a factor of a product at the top of a term, such as %s * x", n, n)
	}
	for _, a := range n.args {
		if err := b.bind(a); err != nil {
			return err
		}
	}
	switch n.op {
	case opNumber:
		n.typ = numberValue
	case opBool:
		n.typ = boolValue
	case opString:
		n.typ = textValue
	case opColumn:
		return b.column(n)
	case opCall:
		return b.call(n)
	case opNot, opAnd, opOr:
		n.typ = boolValue
		for _, a := range n.args {
			if a.typ != boolValue {
				return b.errorf(a.pos, "%s is %s, want true or false for %s%s", a, a.typ, opText[n.op], truthHint(a))
			}
		}
	case opNeg, opAdd, opSub, opMul, opDiv:
		n.typ = numberValue
		return b.numbers(n.args)
	default:
		n.typ = boolValue
		return b.comparison(n)
	}
	return nil
}

// truthHint says how to make a condition of a value.
func truthHint(n *node) string {
	switch n.typ {
	case numberValue:
		return "; write " + asOperand(n) + " != 0"
	case textValue:
		if n.op != opString {
			return "; write " + n.String() + ` == "..."`
		}
	case timeValue:
		return "; write " + n.String() + ` >= "2024-01-31"`
	}
	return ""
}

// asOperand prints n so that a comparison can follow.
func asOperand(n *node) string {
	if n.prec() <= precCompare {
		return "(" + n.String() + ")"
	}
	return n.String()
}

func (b *binder) column(n *node) error {
	i, err := b.lookup(n)
	if err != nil {
		return err
	}
	c := &b.schema.Columns[i]
	n.col, n.kind, n.str = i, c.Kind, c.Name
	switch c.Kind {
	case Bool:
		n.typ = boolValue
	case Text:
		n.typ = textValue
	case Time:
		n.typ, n.zoned, n.dateOnly = timeValue, c.Zoned, c.DateOnly
	default:
		n.typ = numberValue
	}
	return nil
}

func (b *binder) numbers(args []*node) error {
	for _, a := range args {
		if err := b.number(a); err != nil {
			return err
		}
	}
	return nil
}

// number reports an error if n has no value as a number. Truth values are 0
// and 1, times are seconds since 1970.
func (b *binder) number(n *node) error {
	if n.typ != textValue {
		return nil
	}
	if n.op == opString {
		return b.errorf(n.pos, "found the text %s, want a number", n)
	}
	return b.errorf(n.pos, "column %s is text, want a number; each(%s) makes one indicator per level", n.str, n)
}

func (b *binder) call(n *node) error {
	n.typ = numberValue
	switch n.fn {
	case "missing":
		n.typ = boolValue
		if n.args[0].op == opString {
			return b.errorf(n.args[0].pos, "found the text %s, want a column or an expression", n.args[0])
		}
		return nil
	case "hour", "weekday", "month", "date":
		a := n.args[0]
		if a.typ != timeValue {
			return b.errorf(a.pos, "%s is %s, want a time column for %s", a, a.typ, n.fn)
		}
		if n.fn == "date" {
			n.typ, n.dateOnly = timeValue, true
		}
		return nil
	}
	return b.numbers(n.args)
}

func (b *binder) comparison(n *node) error {
	l, r := n.args[0], n.args[1]
	if l.op == opString && r.op == opString {
		return b.errorf(n.pos, "found a comparison of two texts, want a column on one side")
	}
	if l.typ == textValue || r.typ == textValue {
		text, other := l, r
		if r.op == opString || l.typ != textValue {
			text, other = r, l
		}
		switch {
		case other.typ == textValue:
			return nil
		case other.typ == timeValue && text.op == opString:
			ns, err := parseTime(text.str, other.zoned, b.zone)
			if err != nil {
				return b.errorf(text.pos, "found %s, %s", text, err)
			}
			text.ns = ns
			return nil
		case text.op == opString:
			return b.errorf(text.pos, "found the text %s compared with %s, which is %s", text, other, other.typ)
		}
		return b.errorf(other.pos, "column %s is text and is compared with %s; text is written in double quotes", text.str, other)
	}
	if l.typ == timeValue && r.typ == timeValue && l.zoned != r.zoned {
		z, w := l, r
		if r.zoned {
			z, w = r, l
		}
		return b.errorf(n.pos, "%s is an instant and %s is a time without zone; they cannot be compared, but date(%s) and date(%s) can", z, w, z, w)
	}
	return nil
}

var (
	zonedLayouts = []string{"2006-01-02T15:04:05Z07:00", "2006-01-02T15:04Z07:00", "2006-01-02 15:04:05Z07:00", "2006-01-02 15:04Z07:00"}
	plainLayouts = []string{"2006-01-02", "2006-01-02T15:04:05", "2006-01-02T15:04", "2006-01-02 15:04:05", "2006-01-02 15:04"}
)

// parseTime reads a time in the spelling of ISO 8601. A text without zone means
// the given zone when an instant is wanted.
func parseTime(s string, zoned bool, zone *time.Location) (int64, error) {
	if zone == nil || !zoned {
		zone = time.UTC
	}
	for _, layout := range plainLayouts {
		if t, err := time.ParseInLocation(layout, s, zone); err == nil {
			return nanoseconds(t)
		}
	}
	for _, layout := range zonedLayouts {
		t, err := time.Parse(layout, s)
		if err != nil {
			continue
		}
		if !zoned {
			return 0, fmt.Errorf("want a time without zone, as the column has none")
		}
		return nanoseconds(t)
	}
	return 0, fmt.Errorf(`want a time such as "2024-01-31" or "2024-01-31T06:00"`)
}

func nanoseconds(t time.Time) (int64, error) {
	if y := t.Year(); y < 1678 || y > 2261 {
		return 0, fmt.Errorf("want a year from 1678 to 2261")
	}
	return t.UnixNano(), nil
}

// factor is one factor of a term.
type factor struct {
	n    *node
	each bool
}

// factors splits the product at the top of a term that holds an each(...).
func factors(n *node, out []factor) []factor {
	switch {
	case n.op == opMul && n.hasEach():
		return factors(n.args[1], factors(n.args[0], out))
	case n.isCall("each"):
		return append(out, factor{n, true})
	}
	return append(out, factor{n, false})
}

// eachInside words the error of an each(...) below the top of a term.
func (b *binder) eachInside(n *node) error {
	var each *node
	n.walk(func(m *node) bool {
		if m.isCall("each") {
			each = m
			return false
		}
		return true
	})
	hint := fmt.Sprintf("such as %s * x", each)
	switch n.op {
	case opAdd, opSub:
		hint = "write a sum as separate terms"
	case opDiv:
		if n.args[0].isCall("each") && !n.args[1].hasEach() {
			hint = fmt.Sprintf("write %s * (1 / %s)", each, n.args[1])
			if n.args[1].prec() <= precMul {
				hint = fmt.Sprintf("write %s * (1 / (%s))", each, n.args[1])
			}
		}
	}
	return b.errorf(each.pos, "%s can only be a factor of a product at the top of a term; %s", each, hint)
}
