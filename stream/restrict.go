package stream

import (
	"fmt"
	"math/big"
	"slices"
	"strings"

	"golang.org/x/text/unicode/norm"
)

// Restriction is a linear equation between coefficients of a model,
//
//	sum_i Parts[i].Coef b_i = Value
//
// in exact numbers: 0.1 is one tenth.
type Restriction struct {
	// Text is the equation in canonical form, with its sides as they were written.
	Text  string
	Parts []RestrictionPart // at least one; no Coef is zero
	Value *big.Rat
}

// RestrictionPart names the coefficient of a term, of one level of a category, or
// of each of its levels.
type RestrictionPart struct {
	Term int // index into Design.Terms, -1 for the constant
	// Levels has an entry for each of the term's categories, nil for every level.
	Levels []*KeyValue
	Coef   *big.Rat
	Text   string // the term, without Coef
}

// Every reports whether the part stands for every level of a category.
func (p *RestrictionPart) Every() bool { return slices.Contains(p.Levels, nil) }

// roleHypothesis is the role of a restriction in messages.
const roleHypothesis = "hypothesis"

// ParseHypothesis reads "EQUATION, EQUATION": restrictions on coefficients that
// are tested together. In an equation a term stands for its coefficient, `constant`
// for that of the constant, each(c) for every level of a category at once, and
// each(c, level="label") for one of them; terms are multiplied by numbers and added
// up, as in "pallets + 2 * tonnes = 1". A term is found by what it is, not by its
// spelling: spaces, the order of factors and the base of a category do not matter.
//
// A UseError says which part is no term of the model (with the nearest one), not
// linear, or holds or fails whatever the coefficients are.
func (d *Design) ParseHypothesis(text string) ([]Restriction, error) {
	if strings.TrimSpace(text) == "" {
		return nil, Usef("the %s is empty, want an equation such as pallets = 0.5", roleHypothesis)
	}
	list, err := SplitList(text)
	if err != nil {
		return nil, err
	}
	p := hypothesisParser{d: d, terms: map[string]int{}, names: map[string]string{}}
	for i := range d.Terms {
		n, err := exprText{roleTerm, d.Terms[i].Text}.parse()
		if err != nil {
			return nil, err
		}
		n.walk(func(m *node) bool {
			if m.op == opColumn {
				p.names[norm.NFC.String(m.str)] = m.str
			}
			return true
		})
		p.terms[plainTerm(n).identity()] = i
	}
	var out []Restriction
	for _, item := range list {
		r, err := p.equation(item)
		if err != nil {
			return nil, err
		}
		out = append(out, r)
	}
	return out, nil
}

type hypothesisParser struct {
	d     *Design
	terms map[string]int    // by identity, categories without base
	names map[string]string // columns of the terms by their normalised name
	exprText
}

// plainTerm copies a tree without bases and levels of categories.
func plainTerm(n *node) *node {
	c := *n
	c.base, c.hasBase, c.level, c.hasLevel = "", false, "", false
	c.args = make([]*node, len(n.args))
	for i, a := range n.args {
		c.args[i] = plainTerm(a)
	}
	return &c
}

// linear is a sum of parts and a number.
type linear struct {
	parts []RestrictionPart
	num   *big.Rat
}

func (l *linear) add(o linear, sign int64) {
	s := big.NewRat(sign, 1)
	l.num.Add(l.num, new(big.Rat).Mul(s, o.num))
	for _, p := range o.parts {
		p.Coef = new(big.Rat).Mul(s, p.Coef)
		i := slices.IndexFunc(l.parts, func(q RestrictionPart) bool {
			return q.Term == p.Term && slices.EqualFunc(q.Levels, p.Levels, func(a, b *KeyValue) bool {
				return a == b || a != nil && b != nil && *a == *b
			})
		})
		if i < 0 {
			l.parts = append(l.parts, p)
			continue
		}
		l.parts[i].Coef = new(big.Rat).Add(l.parts[i].Coef, p.Coef)
	}
}

func (p *hypothesisParser) equation(text string) (Restriction, error) {
	whole := exprText{roleHypothesis, text}
	at, err := whole.equals()
	if err != nil {
		return Restriction{}, err
	}
	var sides [2]linear
	var texts [2]string
	for i, side := range []string{text[:at], text[at+1:]} {
		if strings.TrimSpace(side) == "" {
			return Restriction{}, whole.errorf(at, "found nothing on one side of =, want an equation such as pallets = 0.5")
		}
		p.exprText = exprText{roleHypothesis, strings.TrimSpace(side)}
		n, err := p.parse()
		if err != nil {
			return Restriction{}, err
		}
		n.walk(func(m *node) bool {
			if s, ok := p.names[norm.NFC.String(m.str)]; ok && m.op == opColumn {
				m.str = s
			}
			return true
		})
		if sides[i], err = p.linear(n); err != nil {
			return Restriction{}, err
		}
		texts[i] = n.String()
	}
	l, r := sides[0], sides[1]
	any := len(l.parts)+len(r.parts) > 0
	l.add(r, -1)
	l.parts = slices.DeleteFunc(l.parts, func(q RestrictionPart) bool { return q.Coef.Sign() == 0 })
	out := Restriction{Text: texts[0] + " = " + texts[1], Parts: l.parts, Value: l.num.Neg(l.num)}
	every := 0
	for i := range out.Parts {
		if out.Parts[i].Every() {
			every++
		}
	}
	switch holds := out.Value.Sign() == 0; {
	case !any:
		return out, whole.errorf(0, "there is no term in it, want an equation such as pallets = 0.5")
	case len(l.parts) == 0 && holds:
		return out, whole.errorf(0, "it holds whatever the coefficients are: there is nothing to test")
	case len(l.parts) == 0:
		return out, whole.errorf(0, "it cannot hold, whatever the coefficients are")
	case every > 1:
		return out, whole.errorf(0, `every level of two terms stands in one equation; name levels, as in each(c, level="label")`)
	}
	return out, nil
}

// equals finds the = of an equation.
func (x exprText) equals() (int, error) {
	s, at, depth := x.text, -1, 0
	for i := 0; i < len(s); i++ {
		switch c := s[i]; c {
		case '"', '`', '\'':
			end, _ := skipString(s, i)
			i = end - 1
		case '(':
			depth++
		case ')':
			depth--
		case '=', '<', '>', '!', ':':
			if i+1 < len(s) && s[i+1] == '=' {
				i++
				continue
			}
			if c != '=' || depth > 0 {
				continue
			}
			if at >= 0 {
				return 0, x.errorf(i, "found a second =; equations are separated by commas")
			}
			at = i
		}
	}
	if at >= 0 {
		return at, nil
	}
	if i := strings.Index(s, "=="); i >= 0 {
		return 0, x.errorf(i, "found ==; an equation between coefficients is written with one =")
	}
	if i := strings.IndexAny(s, "<>"); i >= 0 {
		return 0, x.errorf(i, "found %s; a hypothesis is an equation, as in pallets = 0.5", s[i:i+1])
	}
	return 0, x.errorf(len(s), "there is no =, want an equation such as pallets = 0.5")
}

// linear takes an expression as a sum of multiples of terms.
func (p *hypothesisParser) linear(n *node) (linear, error) {
	out := linear{num: new(big.Rat)}
	if part, ok, err := p.term(n); err != nil {
		return out, err
	} else if ok {
		out.parts = []RestrictionPart{part}
		return out, nil
	}
	c, rest, err := p.split(n)
	if err != nil {
		return out, err
	}
	if rest == nil {
		out.num = c
		return out, nil
	}
	times := func(l linear) linear {
		l.num.Mul(l.num, c)
		for i := range l.parts {
			l.parts[i].Coef = new(big.Rat).Mul(l.parts[i].Coef, c)
		}
		return l
	}
	if part, ok, err := p.term(rest); err != nil {
		return out, err
	} else if ok {
		out.parts = []RestrictionPart{part}
		return times(out), nil
	}
	if rest.op == opAdd || rest.op == opSub {
		a, err := p.linear(rest.args[0])
		if err != nil {
			return out, err
		}
		b, err := p.linear(rest.args[1])
		if err != nil {
			return out, err
		}
		out.add(a, 1)
		if rest.op == opAdd {
			out.add(b, 1)
		} else {
			out.add(b, -1)
		}
		return times(out), nil
	}
	return out, p.unknown(rest)
}

// split takes the numbers out of a product or quotient: n = c rest, rest nil if n
// is a number.
func (p *hypothesisParser) split(n *node) (c *big.Rat, rest *node, err error) {
	switch n.op {
	case opNumber:
		c, ok := new(big.Rat).SetString(n.lit)
		if !ok {
			return nil, nil, p.errorf(n.pos, "found %s, want a number", n.lit)
		}
		return c, nil, nil
	case opNeg:
		c, rest, err := p.split(n.args[0])
		if err != nil {
			return nil, nil, err
		}
		return new(big.Rat).Neg(c), rest, nil
	case opAdd, opSub:
		a, restA, err := p.split(n.args[0])
		if err != nil || restA != nil {
			return big.NewRat(1, 1), n, err
		}
		b, restB, err := p.split(n.args[1])
		if err != nil || restB != nil {
			return big.NewRat(1, 1), n, err
		}
		if n.op == opSub {
			b = new(big.Rat).Neg(b)
		}
		return new(big.Rat).Add(a, b), nil, nil
	case opMul, opDiv:
		a, left, err := p.split(n.args[0])
		if err != nil {
			return nil, nil, err
		}
		b, right, err := p.split(n.args[1])
		if err != nil {
			return nil, nil, err
		}
		if n.op == opMul {
			c := new(big.Rat).Mul(a, b)
			switch {
			case left == nil:
				return c, right, nil
			case right == nil:
				return c, left, nil
			}
			return c, &node{op: opMul, args: []*node{left, right}, pos: n.pos}, nil
		}
		if b.Sign() == 0 {
			return nil, nil, p.errorf(n.args[1].pos, "found a division by zero")
		}
		c := new(big.Rat).Quo(a, b)
		if right == nil {
			return c, left, nil
		}
		if left == nil {
			left = &node{op: opNumber, num: 1, lit: "1", pos: n.args[0].pos}
		}
		return c, &node{op: opDiv, args: []*node{left, right}, pos: n.pos}, nil
	}
	return big.NewRat(1, 1), n, nil
}

// term looks an expression up among the terms.
func (p *hypothesisParser) term(n *node) (part RestrictionPart, ok bool, err error) {
	part = RestrictionPart{Term: -1, Coef: big.NewRat(1, 1), Text: n.String()}
	id := plainTerm(n).identity()
	at, ok := p.terms[id]
	if id == "constant" && !p.d.Spec.NoConstant {
		if ok {
			return part, false, p.errorf(n.pos, "constant is the constant and a column; give the term another form, such as 1 * constant")
		}
		return part, true, nil
	}
	if !ok {
		return part, false, nil
	}
	part.Term = at
	cats := p.d.Terms[at].Categories
	part.Levels = make([]*KeyValue, len(cats))
	n.walk(func(m *node) bool {
		if !m.isCall("each") || err != nil {
			return err == nil
		}
		c := slices.IndexFunc(p.d.Categories, func(c Category) bool { return c.Text == plainTerm(m.args[0]).String() })
		if c < 0 { // the same category in another spelling
			for _, k := range cats {
				if x, e := (exprText{roleTerm, p.d.Categories[k].Text}).parse(); e == nil && x.identity() == m.args[0].identity() {
					c = k
				}
			}
		}
		cat := &p.d.Categories[c]
		if m.hasBase && (m.base != cat.Base || !cat.HasBase) && !(m.base == "none" && cat.NoBase) {
			err = p.errorf(m.pos, "the model has %s; a hypothesis needs no base", eachText(*cat))
		}
		if m.hasLevel {
			v, e := ParseKey(cat.KeyColumn, p.d.Spec.Zone, m.level)
			if e != nil {
				err = p.errorf(m.pos, "the level of %s: %s", m, e)
			}
			part.Levels[slices.Index(cats, c)] = &v
		}
		return true
	})
	return part, err == nil, err
}

// unknown words the error of what is neither a term nor a number times one.
func (p *hypothesisParser) unknown(n *node) error {
	if n.op == opString {
		return p.errorf(n.pos, `found the text %s, want a term; a level is written each(c, level="label")`, n)
	}
	if n.op == opMul || n.op == opDiv {
		_, errA := p.linear(n.args[0])
		_, errB := p.linear(n.args[1])
		if errA == nil && errB == nil {
			return p.errorf(n.pos, "%s is not linear in the coefficients and no term of the model; multiply and divide terms by numbers only", n)
		}
	}
	if !n.readsColumn() {
		return p.errorf(n.pos, "found %s, want a number in digits", n)
	}
	var names []string
	if !p.d.Spec.NoConstant {
		names = append(names, "constant")
	}
	for i := range p.d.Terms {
		names = append(names, p.d.Terms[i].Text)
	}
	hint := "the terms are " + strings.Join(names, ", ")
	const show = 12
	if len(names) > show {
		hint = fmt.Sprintf("the terms are %s and %d more", strings.Join(names[:show], ", "), len(names)-show)
	}
	if n.str == "constant" && n.op == opColumn {
		hint = "the model has none"
	} else if near := nearest(n.String(), names); len(near) > 0 {
		hint = "nearest: " + oneOf(near)
	}
	return p.errorf(n.pos, "there is no term %s; %s", n, hint)
}
