package stream

import (
	"slices"
	"strconv"
	"time"
)

// NewDesign parses a model and binds it to a schema: every name is resolved and
// every type checked. Its errors are UseErrors of one line that say where in
// which expression what was found and what would be right.
//
// Terms that are the same but for spacing or the order of factors and summands
// are refused, as are the outcome among the terms, terms that read no column,
// and one category with two bases. A cluster may be named twice.
func NewDesign(spec Spec, schema *Schema) (*Design, error) {
	d := &Design{Spec: spec}
	c := &compiler{d: d, schema: schema, known: map[string]int{}, useOf: map[int]int{}, prog: &program{where: -1, weight: -1}}
	if err := c.design(); err != nil {
		return nil, err
	}
	d.prog = c.prog
	return d, nil
}

// Uses returns the columns that the design reads, each once: as numbers where
// nothing more is wanted, else in their own kind.
func (d *Design) Uses() []Use {
	uses := make([]Use, len(d.prog.uses))
	for i, u := range d.prog.uses {
		uses[i] = Use{Column: u.column, AsNumber: u.asNumber()}
	}
	return uses
}

// OutcomeText is the canonical text of the outcome, also the last of Dense.
func (d *Design) OutcomeText() string { return d.Dense[len(d.Dense)-1] }

// WeightText is the canonical text of the weight, "" for none.
func (d *Design) WeightText() string { return d.prog.weightText }

// WhereText is the canonical text of the row filter, "" for none.
func (d *Design) WhereText() string { return d.prog.whereText }

// program is a design compiled for blocks. Instruction i writes register i and
// reads only registers below i.
type program struct {
	uses   []use
	code   []instr
	nWhere int // code[:nWhere] is the row filter
	where  int // register, -1 for none
	weight int // register, -1 for none
	dense  []int
	cats   []keyOutput
	keys   []keyOutput
	// checked are the uses outside where and missing(...): their cells must not
	// be infinite, and a dropped row is put down to those that are missing.
	checked []int
	// lost are the names under which dropped rows are counted: one for each of
	// checked, then the texts of outputs.
	lost []string
	// denseLost, weightLost, ... are indexes into lost for the values that do
	// not exist although every cell is there.
	denseLost  [][]int
	catLost    [][]int
	keyLost    [][]int
	weightLost []int
	noValue    []string // texts of operations without value
	weightText string
	whereText  string
	frequency  bool
	zone       *time.Location
	textCaches int
}

// use is a column that the program reads.
type use struct {
	column int
	name   string
	kind   Kind
	raw    bool // wanted in its own kind
}

func (u *use) asNumber() bool { return u.kind == Float64 || !u.raw && u.kind.Numeric() }

// vectorKind is the kind of the vector that a batch brings.
func (u *use) vectorKind() Kind {
	if u.asNumber() {
		return Float64
	}
	return u.kind
}

// keyOutput says where a key comes from: straight from a column, or from a
// register.
type keyOutput struct {
	kind Kind
	use  int // index into uses, -1 if computed
	reg  int
	time bool // reg is a time register
}

type code uint8

const (
	codeConst     code = iota + 1 // k
	codeCell                      // column use as float64
	codeSeconds                   // time register a
	codeTimeCell                  // column use, a time register
	codeDate                      // time register a to a time register
	codeHour                      // time register a
	codeWeekday                   // time register a
	codeMonth                     // time register a
	codeNoText                    // missing(text column)
	codeNoTime                    // missing(time register a)
	codeNoNumber                  // missing(register a)
	codeTextConst                 // column use compared with text
	codeTextText                  // column use compared with column use b
	codeBigConst                  // whole-number column use compared with bound
	codeTimeConst                 // time register a compared with ns
	codeTimeTime                  // time register a compared with b
	codeNeg
	codeNot
	codeAdd
	codeSub
	codeMul
	codeDiv
	codeAnd
	codeOr
	codeCompare // register a compared with b
	codeLog
	codeExp
	codeSqrt
	codeAbs
	codeMin
	codeMax
	codeHinge
	codePow
	codeSquare
	codePowInt // exponent ns
)

type instr struct {
	code  code
	cmp   op // comparison
	a, b  int
	use   int
	k     float64
	ns    int64
	text  string
	bound bound
	zoned bool
	cache int // index of a text cache
	// label is an index into program.noValue, -1 for operations that always
	// have a value or are not counted.
	label int
}

// bound is a number that whole-number cells are compared with exactly.
type bound struct {
	side  int    // every cell is smaller (-1) or larger (+1); 0 if value decides
	value uint64 // the bits of an int64 or the uint64 itself
}

type compiler struct {
	d      *Design
	schema *Schema
	prog   *program
	known  map[string]int // instruction by its operands
	useOf  map[int]int    // use by column
	bind   binder
	counts bool // outside where and missing(...)
}

// read parses and binds the expression.
func (c *compiler) read(role, text string) (*node, error) {
	n, err := c.parse(role, text)
	if err == nil {
		err = c.bind.bind(n)
	}
	return n, err
}

func (c *compiler) parse(role, text string) (*node, error) {
	c.bind = binder{exprText{role, text}, c.schema, c.d.Spec.Zone}
	return c.bind.parse()
}

func (c *compiler) readNumber(role, text string) (*node, error) {
	n, err := c.read(role, text)
	if err == nil {
		err = c.bind.number(n)
	}
	return n, err
}

func (c *compiler) design() error {
	d, p, spec := c.d, c.prog, &c.d.Spec
	p.zone = spec.Zone
	if p.zone == nil {
		p.zone = time.UTC
	}
	if spec.Weight == "" && spec.WeightKind != NoWeight {
		return Usef("a weight kind is given without a weight, want both or none")
	}
	if spec.Weight != "" && spec.WeightKind == NoWeight {
		return Usef("the weight %s has no kind, want frequency, precision or sampling", quoteExpr(spec.Weight, 0))
	}
	if len(spec.Terms) == 0 && spec.Sweep != "" {
		return Usef("the model has no terms beside the effects of %s that are swept out, want at least one", spec.Sweep)
	}
	if len(spec.Terms) == 0 && spec.NoConstant {
		return Usef("the model has neither terms nor a constant, want at least one term")
	}
	if spec.Where != "" {
		n, err := c.read(roleWhere, spec.Where)
		if err != nil {
			return err
		}
		if n.typ != boolValue {
			return c.bind.errorf(n.pos, "%s is %s, want true or false%s", n, n.typ, truthHint(n))
		}
		p.where, p.whereText = c.number(n), n.String()
		p.nWhere = len(p.code)
	}
	c.counts = true
	outcome, err := c.readNumber(roleOutcome, spec.Outcome)
	if err != nil {
		return err
	}
	if !outcome.readsColumn() {
		return c.bind.errorf(0, "the outcome reads no column, want one that does")
	}
	outcomeReg := c.number(outcome)
	if err := c.terms(outcome); err != nil {
		return err
	}
	d.Dense = append(d.Dense, outcome.String())
	p.dense = append(p.dense, outcomeReg)
	if spec.Weight != "" {
		n, err := c.readNumber(roleWeight, spec.Weight)
		if err != nil {
			return err
		}
		p.weight, p.weightText = c.number(n), n.String()
		p.frequency = spec.WeightKind == Frequency
	}
	for _, text := range spec.Keys {
		n, err := c.read(roleKey, text)
		if err != nil {
			return err
		}
		if !n.readsColumn() {
			return c.bind.errorf(0, "the cluster reads no column, want one that does")
		}
		col, out := c.key(n)
		d.Keys, p.keys = append(d.Keys, col), append(p.keys, out)
	}
	if err := c.sweep(); err != nil {
		return err
	}
	if err := c.crossedKeys(); err != nil {
		return err
	}
	if err := c.bucketKey(); err != nil {
		return err
	}
	c.names()
	return nil
}

// sweep finds or adds the key whose effects are swept out.
func (c *compiler) sweep() error {
	d, spec := c.d, &c.d.Spec
	d.Sweep = -1
	if spec.Sweep == "" {
		return nil
	}
	n, err := c.read(roleSweep, spec.Sweep)
	if err != nil {
		return err
	}
	if !n.readsColumn() {
		return c.bind.errorf(0, "the units whose effects are swept out read no column, want an expression that does")
	}
	if d.Sweep = slices.IndexFunc(d.Keys, func(k KeyColumn) bool { return k.Text == n.String() }); d.Sweep < 0 {
		col, out := c.key(n)
		d.Sweep = len(d.Keys)
		d.Keys, c.prog.keys = append(d.Keys, col), append(c.prog.keys, out)
	}
	spec.NoConstant = true // it is a sum of the units' indicators
	return nil
}

// parsedTerm is a term before columns of the block are given out.
type parsedTerm struct {
	text    string
	numeric *node // nil for a pure category
	cats    []int
}

func (c *compiler) terms(outcome *node) error {
	d := c.d
	seen := map[string]string{}
	outcomeID := outcome.identity()
	var parsed []parsedTerm
	for _, text := range d.Spec.Terms {
		n, err := c.parse(roleTerm, text)
		if err != nil {
			return err
		}
		t, err := c.term(n)
		if err != nil {
			return err
		}
		id := n.identity()
		if id == outcomeID {
			return c.bind.errorf(0, "the outcome is also a term, want it only once")
		}
		if first, ok := seen[id]; ok {
			if first == t.text {
				return c.bind.errorf(0, "the term %s is there twice, want it once", t.text)
			}
			return c.bind.errorf(0, "the term %s is there twice, first as %s, want it once", t.text, first)
		}
		seen[id] = t.text
		parsed = append(parsed, t)
	}
	column := map[string]int{}
	dense := func(n *node) int {
		text := n.String()
		j, ok := column[text]
		if !ok {
			j = len(d.Dense)
			column[text] = j
			d.Dense = append(d.Dense, text)
			c.prog.dense = append(c.prog.dense, c.number(n))
		}
		return j
	}
	d.Terms = make([]Term, len(parsed))
	for i, t := range parsed {
		d.Terms[i] = Term{Text: t.text, Dense: -1, Categories: t.cats}
		if t.cats == nil {
			d.Terms[i].Dense = dense(t.numeric)
		}
	}
	for i, t := range parsed {
		if t.cats != nil && t.numeric != nil {
			d.Terms[i].Dense = dense(t.numeric)
		}
	}
	return nil
}

// term binds one term and collects its categories.
func (c *compiler) term(n *node) (parsedTerm, error) {
	b := &c.bind
	if !n.hasEach() {
		if err := b.bind(n); err != nil {
			return parsedTerm{}, err
		}
		if err := b.number(n); err != nil {
			return parsedTerm{}, err
		}
		if !n.readsColumn() {
			hint := "the constant is there by itself, and --no-constant leaves it out"
			if c.d.Spec.NoConstant {
				hint = "leave out --no-constant to have a constant"
			}
			return parsedTerm{}, b.errorf(0, "the term reads no column; %s", hint)
		}
		return parsedTerm{text: n.String(), numeric: n}, nil
	}
	var t parsedTerm
	for _, f := range factors(n, nil) {
		if !f.each {
			if f.n.hasEach() {
				return t, b.eachInside(f.n)
			}
			if err := b.bind(f.n); err != nil {
				return t, err
			}
			if err := b.number(f.n); err != nil {
				return t, err
			}
			if !f.n.readsColumn() {
				return t, b.errorf(f.n.pos, "the factor %s reads no column, want it left out", f.n)
			}
			if t.numeric == nil {
				t.numeric = f.n
			} else {
				t.numeric = &node{op: opMul, args: []*node{t.numeric, f.n}, pos: f.n.pos, typ: numberValue}
			}
			continue
		}
		cat, err := c.category(f.n)
		if err != nil {
			return t, err
		}
		if slices.Contains(t.cats, cat) {
			return t, b.errorf(f.n.pos, "%s is there twice in one product, want it once", f.n)
		}
		t.cats = append(t.cats, cat)
	}
	t.text = n.String()
	return t, nil
}

// category finds or adds the category of an each(...).
func (c *compiler) category(n *node) (int, error) {
	b, d, arg := &c.bind, c.d, n.args[0]
	n.typ = numberValue
	if err := b.bind(arg); err != nil {
		return 0, err
	}
	if !arg.readsColumn() {
		return 0, b.errorf(arg.pos, "%s reads no column, want one that does", n)
	}
	cat := Category{Text: arg.String(), Base: n.base, HasBase: n.hasBase}
	if n.hasBase && n.base == "none" {
		cat.Base, cat.HasBase, cat.NoBase = "", false, true
	}
	at := slices.IndexFunc(d.Categories, func(o Category) bool { return o.Text == cat.Text })
	if at < 0 {
		var out keyOutput
		cat.KeyColumn, out = c.key(arg)
		if err := c.base(n, &cat); err != nil {
			return 0, err
		}
		d.Categories, c.prog.cats = append(d.Categories, cat), append(c.prog.cats, out)
		return len(d.Categories) - 1, nil
	}
	cat.KeyColumn = d.Categories[at].KeyColumn
	if err := c.base(n, &cat); err != nil {
		return 0, err
	}
	if old := d.Categories[at]; old != cat {
		return 0, b.errorf(n.pos, "%s stands beside %s, want one base for one category", n, eachText(old))
	}
	return at, nil
}

func eachText(c Category) string {
	switch {
	case c.NoBase:
		return "each(" + c.Text + `, base="none")`
	case c.HasBase:
		return "each(" + c.Text + ", base=" + strconv.Quote(c.Base) + ")"
	}
	return "each(" + c.Text + ")"
}

// base checks that a base can be a label of the column and spells it as labels
// are.
func (c *compiler) base(n *node, cat *Category) error {
	if !cat.HasBase {
		return nil
	}
	v, err := ParseKey(cat.KeyColumn, c.prog.zone, cat.Base)
	if err != nil {
		return c.bind.errorf(n.pos, "the base of %s: %s", n, err)
	}
	cat.Base = FormatKey(cat.KeyColumn, c.d.Spec.Zone, v)
	return nil
}

// key compiles a category or cluster expression.
func (c *compiler) key(n *node) (KeyColumn, keyOutput) {
	col := KeyColumn{Text: n.String()}
	if n.op == opColumn {
		u := c.use(n.col, true)
		col.Kind, col.Zoned, col.DateOnly = n.kind, n.zoned, n.dateOnly
		return col, keyOutput{kind: n.kind, use: u, reg: -1}
	}
	switch {
	case n.typ == timeValue:
		col.Kind, col.DateOnly = Time, true
		return col, keyOutput{kind: Time, use: -1, reg: c.time(n), time: true}
	case n.typ == boolValue:
		col.Kind = Bool
	case n.isCall("hour") || n.isCall("weekday") || n.isCall("month"):
		col.Kind = Int64
	default:
		col.Kind = Float64
	}
	return col, keyOutput{kind: col.Kind, use: -1, reg: c.number(n)}
}

// names lays out the names that dropped rows are counted under.
func (c *compiler) names() {
	p, d := c.prog, c.d
	at := map[string]int{}
	for _, u := range p.checked {
		p.lost = append(p.lost, p.uses[u].name)
	}
	index := func(text string) int {
		i, ok := at[text]
		if !ok {
			i = len(p.lost)
			at[text] = i
			p.lost = append(p.lost, text)
		}
		return i
	}
	p.denseLost = make([][]int, len(p.dense))
	p.catLost = make([][]int, len(p.cats))
	for _, t := range d.Terms {
		if t.Dense >= 0 {
			p.denseLost[t.Dense] = append(p.denseLost[t.Dense], index(t.Text))
		}
		for _, k := range t.Categories {
			p.catLost[k] = append(p.catLost[k], index(t.Text))
		}
	}
	last := len(p.dense) - 1
	p.denseLost[last] = append(p.denseLost[last], index(d.OutcomeText()))
	if p.weight >= 0 {
		p.weightLost = []int{index(p.weightText)}
	}
	for i := range p.keys {
		p.keyLost = append(p.keyLost, []int{index(d.Keys[i].Text)})
	}
}
