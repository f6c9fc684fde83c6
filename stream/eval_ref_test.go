package stream

import (
	"cmp"
	"math"
	"math/big"
	"slices"
	"strings"
	"time"
)

// The reference: expressions evaluated one row at a time, straight from the
// tree, on Go values, with package time for times and math/big where the block
// evaluator takes care of digits. It shares only the parser with it.

// refRow holds the cells of a row by column; nil is a missing cell. Times are
// time.Time: instants in the zone of the run, others in UTC.
type refRow map[string]any

type refEval struct {
	row     refRow
	zone    *time.Location
	noValue map[string]bool // texts of operations without value; nil: not noted
}

func (r *refEval) fail(n *node) any {
	if r.noValue != nil {
		r.noValue[n.String()] = true
	}
	return nil
}

// number is the value of n as a number, or nil.
func (r *refEval) number(n *node) any {
	switch v := r.eval(n).(type) {
	case bool:
		if v {
			return 1.0
		}
		return 0.0
	case int64:
		return float64(v)
	case uint64:
		return float64(v)
	case time.Time:
		q := new(big.Rat).SetFrac64(v.UnixNano(), 1e9)
		f, _ := q.Float64()
		return f
	case float64:
		return v
	}
	return nil
}

// arithmetic gives NaN that comes from infinities back as an infinity.
func arithmetic(v float64) any {
	if math.IsNaN(v) {
		return math.Inf(1)
	}
	return v
}

func (r *refEval) eval(n *node) any {
	switch n.op {
	case opNumber:
		return n.num
	case opBool:
		return n.num == 1
	case opString:
		return n.str
	case opColumn:
		return r.row[n.str]
	case opNot:
		if v, ok := r.eval(n.args[0]).(bool); ok {
			return !v
		}
		return nil
	case opAnd, opOr:
		a, b := r.eval(n.args[0]), r.eval(n.args[1])
		decisive := n.op == opOr // the value that decides alone
		switch {
		case a == decisive || b == decisive:
			return decisive
		case a == nil || b == nil:
			return nil
		}
		return !decisive
	case opCall:
		return r.call(n)
	}
	if n.op.comparison() {
		return r.compare(n)
	}
	var x [2]float64
	for i, a := range n.args {
		v := r.number(a)
		if v == nil {
			// The other side still notes what has no value.
			if i == 0 && len(n.args) > 1 {
				r.number(n.args[1])
			}
			return nil
		}
		x[i] = v.(float64)
	}
	switch n.op {
	case opNeg:
		return -x[0]
	case opAdd:
		return arithmetic(x[0] + x[1])
	case opSub:
		return arithmetic(x[0] - x[1])
	case opMul:
		return arithmetic(x[0] * x[1])
	}
	if x[1] == 0 {
		return r.fail(n)
	}
	return arithmetic(x[0] / x[1])
}

func (r *refEval) compare(n *node) any {
	l, s := n.args[0], n.args[1]
	a, b := r.eval(l), r.eval(s)
	if a == nil || b == nil {
		return nil
	}
	c := 0
	ta, isTimeA := a.(time.Time)
	tb, isTimeB := b.(time.Time)
	sa, isTextA := a.(string)
	sb, isTextB := b.(string)
	switch {
	case isTextA && isTextB:
		c = cmp.Compare(sa, sb)
	case isTimeA && isTextB:
		c = ta.Compare(refTime(sb, l.zoned, r.zone))
	case isTimeB && isTextA:
		c = refTime(sa, s.zoned, r.zone).Compare(tb)
	case isTimeA && isTimeB:
		c = ta.Compare(tb)
	case refWhole(l, s) || refWhole(s, l):
		c = refExact(l, a).Cmp(refExact(s, b))
	default:
		c = cmp.Compare(r.number(l).(float64), r.number(s).(float64))
	}
	switch n.op {
	case opLess:
		return c < 0
	case opLessEqual:
		return c <= 0
	case opGreater:
		return c > 0
	case opGreaterEqual:
		return c >= 0
	case opEqual:
		return c == 0
	}
	return c != 0
}

// refWhole reports whether a is a whole-number column and b a literal.
func refWhole(a, b *node) bool {
	if b.op == opNeg {
		b = b.args[0]
	}
	return a.op == opColumn && (a.kind == Int64 || a.kind == Uint64) && b.op == opNumber
}

func refExact(n *node, v any) *big.Float {
	f := new(big.Float).SetPrec(200)
	switch v := v.(type) {
	case int64:
		return f.SetInt64(v)
	case uint64:
		return f.SetUint64(v)
	}
	text := strings.ReplaceAll(n.String(), " ", "")
	if _, ok := f.SetString(text); !ok {
		panic(text)
	}
	return f
}

func refTime(s string, zoned bool, zone *time.Location) time.Time {
	if !zoned {
		zone = time.UTC
	}
	for _, layout := range []string{time.DateOnly, "2006-01-02T15:04", "2006-01-02T15:04:05", time.RFC3339} {
		if t, err := time.ParseInLocation(layout, s, zone); err == nil {
			return t
		}
	}
	panic(s)
}

func (r *refEval) call(n *node) any {
	if n.fn == "missing" {
		quiet := refEval{row: r.row, zone: r.zone}
		return quiet.eval(n.args[0]) == nil
	}
	if slices.Contains([]string{"hour", "weekday", "month", "date"}, n.fn) {
		t, ok := r.eval(n.args[0]).(time.Time)
		if !ok {
			return nil
		}
		switch n.fn {
		case "hour":
			return float64(t.Hour())
		case "weekday":
			return float64((int(t.Weekday()) + 6) % 7)
		case "month":
			return float64(t.Month())
		}
		return time.Date(t.Year(), t.Month(), t.Day(), 0, 0, 0, 0, time.UTC)
	}
	x := make([]float64, len(n.args))
	none := false
	for i, a := range n.args {
		v := r.number(a)
		if v == nil {
			none = true
			continue
		}
		x[i] = v.(float64)
	}
	if none {
		return nil
	}
	switch n.fn {
	case "log":
		if x[0] <= 0 {
			return r.fail(n)
		}
		return math.Log(x[0])
	case "sqrt":
		if x[0] < 0 {
			return r.fail(n)
		}
		return math.Sqrt(x[0])
	case "exp":
		return math.Exp(x[0])
	case "abs":
		return math.Abs(x[0])
	case "min":
		return slices.Min(x)
	case "max":
		return slices.Max(x)
	case "hinge":
		return math.Max(arithmetic(x[0]-x[1]).(float64), 0)
	}
	if x[0] == 0 && x[1] < 0 {
		return r.fail(n)
	}
	v := refPow(x[0], x[1])
	if math.IsNaN(v) {
		return r.fail(n)
	}
	return v
}

// refPow rounds the exact power once where the exponent is whole and small.
func refPow(x, y float64) float64 {
	if y == 0 || y != math.Trunc(y) || math.Abs(y) > maxPowInt || math.IsInf(x, 0) || x == 0 {
		return math.Pow(x, y)
	}
	bits := uint(53*math.Abs(y)) + 200 // the power is exact in them
	p := new(big.Float).SetPrec(bits).SetInt64(1)
	for range int(math.Abs(y)) {
		p.Mul(p, big.NewFloat(x))
	}
	if y < 0 {
		p.Quo(new(big.Float).SetPrec(bits).SetInt64(1), p)
	}
	f, _ := p.Float64()
	return f
}

// refOutput is one thing that a row must have: a term, the outcome, ...
type refOutput struct {
	text  string
	nodes []*node
	key   bool
}

// columns are the names of the columns that n reads outside missing(...).
func refColumns(n *node, out map[string]bool) {
	if n.isCall("missing") {
		return
	}
	if n.op == opColumn {
		out[n.str] = true
	}
	for _, a := range n.args {
		refColumns(a, out)
	}
}

type refResult struct {
	tally Tally
	rows  []int
	dense map[string][]float64 // by text
	cat   [][]any
	key   [][]any
	w     []float64
	// badRow is the first row that cannot be used, or -1.
	badRow int
}

// reference evaluates a design row by row.
func reference(spec Spec, schema *Schema, rows []refRow, zone *time.Location) refResult {
	res := refResult{badRow: -1, dense: map[string][]float64{}}
	res.tally.MissingBy, res.tally.NoValue = map[string]int64{}, map[string]int64{}
	read := func(role, text string) *node {
		b := binder{exprText{role, text}, schema, zone}
		n, err := b.parse()
		if err != nil {
			panic(err)
		}
		for _, f := range factors(n, nil) {
			m := f.n
			if f.each {
				m = m.args[0]
			}
			if err := b.bind(m); err != nil {
				panic(err)
			}
		}
		return n
	}
	var outputs []refOutput
	var cats []*node
	var keys []*node
	outcome := read(roleOutcome, spec.Outcome)
	outputs = append(outputs, refOutput{outcome.String(), []*node{outcome}, false})
	for _, text := range spec.Terms {
		n := read(roleTerm, text)
		o := refOutput{text: n.String()}
		var product *node
		for _, f := range factors(n, nil) {
			if f.each {
				arg := f.n.args[0]
				o.nodes = append(o.nodes, arg)
				if !slices.ContainsFunc(cats, func(c *node) bool { return c.String() == arg.String() }) {
					cats = append(cats, arg)
				}
				continue
			}
			if product == nil {
				product = f.n
			} else {
				product = &node{op: opMul, args: []*node{product, f.n}}
			}
		}
		if product != nil {
			o.nodes = append(o.nodes, product)
		}
		outputs = append(outputs, o)
	}
	var weight, where *node
	if spec.Weight != "" {
		weight = read(roleWeight, spec.Weight)
		outputs = append(outputs, refOutput{weight.String(), []*node{weight}, false})
	}
	for _, text := range spec.Keys {
		keys = append(keys, read(roleKey, text))
		outputs = append(outputs, refOutput{keys[len(keys)-1].String(), keys[len(keys)-1:], true})
	}
	if spec.Where != "" {
		where = read(roleWhere, spec.Where)
	}
	res.cat, res.key = make([][]any, len(cats)), make([][]any, len(keys))
	columns := map[string]bool{}
	for _, o := range outputs {
		for _, n := range o.nodes {
			refColumns(n, columns)
		}
	}
	for i, row := range rows {
		if where != nil {
			quiet := refEval{row: row, zone: zone}
			if quiet.eval(where) != true {
				res.tally.Excluded++
				continue
			}
		}
		e := refEval{row: row, zone: zone, noValue: map[string]bool{}}
		lost, infinite := map[string]bool{}, false
		for _, o := range outputs {
			for _, n := range o.nodes {
				v := e.eval(n)
				if v == nil {
					lost[o.text] = true
				}
				if f, ok := v.(float64); ok && math.IsInf(f, 0) {
					infinite = true
				}
			}
		}
		for name := range columns {
			if f, ok := row[name].(float64); ok && math.IsInf(f, 0) {
				infinite = true
			}
		}
		for text := range e.noValue {
			res.tally.NoValue[text]++
		}
		if len(lost) > 0 {
			if spec.Stop {
				res.badRow = i
				return res
			}
			res.tally.Missing++
			cells := map[string]bool{}
			for name := range columns {
				if row[name] == nil {
					cells[name] = true
				}
			}
			if len(cells) == 0 {
				cells = lost
			}
			for name := range cells {
				res.tally.MissingBy[name]++
			}
			continue
		}
		if weight != nil {
			w := e.number(weight).(float64)
			if w == 0 {
				res.tally.ZeroWeight++
				continue
			}
			if w < 0 || math.IsInf(w, 0) || spec.WeightKind == Frequency && w != math.Floor(w) {
				res.badRow = i
				return res
			}
			res.w = append(res.w, w)
		}
		if infinite {
			res.badRow = i
			return res
		}
		res.tally.Used++
		res.rows = append(res.rows, i)
		for _, o := range outputs {
			if o.key {
				continue
			}
			for _, n := range o.nodes {
				if !slices.Contains(cats, n) && n.typ != textValue {
					if v, ok := e.number(n).(float64); ok {
						text := n.String()
						if !refHas(res.dense, text, len(res.rows)) {
							res.dense[text] = append(res.dense[text], v)
						}
					}
				}
			}
		}
		for j, n := range cats {
			res.cat[j] = append(res.cat[j], e.eval(n))
		}
		for j, n := range keys {
			res.key[j] = append(res.key[j], e.eval(n))
		}
	}
	return res
}

func refHas(m map[string][]float64, text string, n int) bool { return len(m[text]) >= n }
