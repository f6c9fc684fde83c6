package stream

import (
	"fmt"
	"math"
)

// Evaluator turns batches into blocks for one goroutine. Its buffers are
// reused; after the first batches Eval allocates nothing.
type Evaluator struct {
	// Tally counts the rows of all batches so far.
	Tally Tally
	// Segment is the number of the segment whose batches come next; it must be set
	// where rows are dealt to buckets one by one.
	Segment int

	prog *program
	stop bool
	num  [][]float64 // value of each number register: own buffer or a column
	buf  [][]float64 // own buffers
	bad  []bool      // the register holds a NaN or an infinity
	ns   [][]int64   // value of each time register
	null [][]bool    // missing cells of each time register, nil for none
	nbuf [][]int64

	clock  zoneClock
	texts  []textCache
	events []event

	rows  int     // capacity of the buffers
	state []uint8 // fate of each row
	used  []int32 // rows that are used
	spans []span  // runs of them, see findSpans
	clean []bool  // for each of prog.uses: known to hold no missing or infinite cell

	outX           [][]float64 // compacted columns, kept
	outW           []float64
	outMarks       []int64
	outCat, outKey []Vector
	crossed        []crossing
	dealer         *dealer // nil without buckets
	lost           []int64 // by prog.lost, this batch
	lostRow        []int   // last row counted under the name, plus one
	valueless      []int64 // by prog.noValue, this batch

	wide *wideEval // nil unless extended
}

type event struct{ label, row int32 }

// The fates of a row, and a flag for an infinity.
const (
	stateUsed uint8 = iota
	stateExcluded
	stateMissing
	stateInfinite = 0x80
)

// NewEvaluator returns an evaluator with empty counts. Each goroutine needs its
// own.
func (d *Design) NewEvaluator() *Evaluator {
	p := d.prog
	n := len(p.code)
	e := &Evaluator{
		prog: p, stop: d.Spec.Stop,
		num: make([][]float64, n), buf: make([][]float64, n), bad: make([]bool, n),
		ns: make([][]int64, n), null: make([][]bool, n), nbuf: make([][]int64, n),
		clock: zoneClock{zone: p.zone, lo: 1, hi: 0},
		texts: make([]textCache, p.textCaches),
		clean: make([]bool, len(p.uses)),
		outX:  make([][]float64, len(p.dense)), outCat: make([]Vector, len(p.cats)), outKey: make([]Vector, len(p.keys)),
		lost: make([]int64, len(p.lost)), lostRow: make([]int, len(p.lost)), valueless: make([]int64, len(p.noValue)),
	}
	for _, parts := range d.Spec.Crossed {
		e.crossed = append(e.crossed, crossing{parts: parts})
	}
	if d.Buckets >= 0 {
		e.dealer = &dealer{Buckets: *d.Spec.Buckets}
	}
	e.grow(BatchRows)
	return e
}

// grow makes room for batches of n rows.
func (e *Evaluator) grow(n int) {
	e.rows = n
	for i := range e.prog.code {
		switch in := &e.prog.code[i]; in.code {
		case codeTimeCell:
		case codeDate:
			e.nbuf[i] = make([]int64, n)
		case codeCell:
			if e.prog.uses[in.use].vectorKind() != Float64 {
				e.buf[i] = make([]float64, n)
			}
		default:
			e.buf[i] = make([]float64, n)
			if in.code == codeConst {
				for j := range e.buf[i] {
					e.buf[i][j] = in.k
				}
			}
		}
	}
	e.state, e.used = make([]uint8, n), make([]int32, 0, n)
	e.outW, e.outMarks = nil, nil
	clear(e.outX)
	clear(e.outCat)
	clear(e.outKey)
}

// Eval computes the block of a batch and counts its rows. Blocks filled by one
// evaluator share memory: they hold until its next Eval, and where nothing had
// to be left out their columns are the batch's own.
//
// A row that may not be used as asked is a *RowError, the one of the first such
// row: an infinite cell or value in a row that would be used, a weight that is
// negative or not finite, a frequency weight that is no whole number, and with
// Spec.Stop a missing cell. loc turns marks into places for it. The counts are
// then those of the batches before.
func (e *Evaluator) Eval(b *Batch, loc func(mark int64) Position, out *Block) error {
	p, n := e.prog, b.Rows
	out.Rows = 0
	if err := e.check(b); err != nil {
		return err
	}
	if n > e.rows {
		e.grow(n)
	}
	e.events = e.events[:0]
	e.survey(b)
	e.prepare(out)
	if p.where >= 0 {
		e.run(p.code[:p.nWhere], 0, b)
		if e.noneInside(n) {
			e.Tally.Excluded += int64(n)
			e.empty(out)
			return nil
		}
	}
	e.run(p.code[p.nWhere:], p.nWhere, b)
	if e.wide != nil {
		e.wide.run(e, n)
	}
	if e.allUsed() {
		e.Tally.Used += int64(n)
		e.pass(b, out)
		return nil
	}
	t, err := e.sort(b, loc)
	if err != nil {
		return err
	}
	e.count(t)
	e.compact(b, out)
	return nil
}

// check finds a batch that does not fit the design, a mistake of the program
// that reads it.
func (e *Evaluator) check(b *Batch) error {
	if len(b.Cols) != len(e.prog.uses) {
		return fmt.Errorf("stream: batch of %d columns for a design that reads %d", len(b.Cols), len(e.prog.uses))
	}
	if len(b.Marks) < b.Rows {
		return fmt.Errorf("stream: batch of %d rows with %d marks", b.Rows, len(b.Marks))
	}
	for i := range b.Cols {
		v, u := &b.Cols[i], &e.prog.uses[i]
		have := len(v.I64)
		switch v.Kind {
		case Float64:
			have = len(v.F64)
		case Text:
			have = len(v.Code)
		}
		if v.Kind != u.vectorKind() || have < b.Rows || v.Null != nil && len(v.Null) < b.Rows {
			return fmt.Errorf("stream: batch column %s is %v of %d rows, want %v of %d", u.name, v.Kind, have, u.vectorKind(), b.Rows)
		}
	}
	return nil
}

func (e *Evaluator) event(in *instr, row int) {
	if in.label >= 0 {
		e.events = append(e.events, event{int32(in.label), int32(row)})
	}
}

// run executes instructions; the first writes register base.
func (e *Evaluator) run(code []instr, base int, b *Batch) {
	n := b.Rows
	for j := range code {
		in, r := &code[j], base+j
		var dst, x, y []float64
		if e.buf[r] != nil {
			dst = e.buf[r][:n]
			e.num[r] = dst
		}
		if in.code >= codeNeg {
			x, y = e.num[in.a], e.num[in.b]
		}
		bad := false
		switch in.code {
		case codeConst:
		case codeCell:
			v := &b.Cols[in.use]
			if v.Kind == Float64 {
				e.num[r] = v.F64[:n]
				bad = !e.clean[in.use]
			} else {
				bad = cellsToNumbers(dst, v)
			}
		case codeSeconds:
			bad = evalSeconds(dst, e.ns[in.a], e.null[in.a])
		case codeTimeCell:
			v := &b.Cols[in.use]
			e.ns[r], e.null[r] = v.I64[:n], v.Null
		case codeDate:
			e.ns[r], e.null[r] = e.nbuf[r][:n], e.null[in.a]
			e.evalDate(in, e.ns[r], e.ns[in.a])
		case codeHour:
			bad = e.evalHour(in, dst, e.ns[in.a], e.null[in.a])
		case codeWeekday:
			bad = e.evalWeekday(in, dst, e.ns[in.a], e.null[in.a])
		case codeMonth:
			bad = e.evalMonth(in, dst, e.ns[in.a], e.null[in.a])
		case codeNoText:
			for i, c := range b.Cols[in.use].Code[:n] {
				dst[i] = truth(c < 0)
			}
		case codeNoTime:
			null := e.null[in.a]
			for i := range dst {
				dst[i] = truth(null != nil && null[i])
			}
		case codeNoNumber:
			for i, v := range e.num[in.a][:n] {
				dst[i] = truth(v != v)
			}
		case codeTextConst:
			bad = e.evalTextConst(in, dst, &b.Cols[in.use])
		case codeTextText:
			bad = evalTextText(in, dst, &b.Cols[in.use], &b.Cols[in.b])
		case codeBigConst:
			bad = evalBound(in, dst, &b.Cols[in.use])
		case codeTimeConst:
			bad = evalTimeConst(in, dst, e.ns[in.a], e.null[in.a])
		case codeTimeTime:
			bad = evalTimeTime(in, dst, e.ns[in.a], e.ns[in.b], e.null[in.a], e.null[in.b])
		case codeNeg:
			bad = evalNeg(dst, x)
		case codeNot:
			bad = evalNot(dst, x)
		case codeAdd:
			bad = evalAdd(dst, x, y)
		case codeSub:
			bad = evalSub(dst, x, y)
		case codeMul:
			bad = evalMul(dst, x, y)
		case codeDiv:
			bad = e.evalDiv(in, dst, x, y)
		case codeAnd:
			bad = evalAnd(dst, x, y)
		case codeOr:
			bad = evalOr(dst, x, y)
		case codeCompare:
			bad = evalCompare(in.cmp, dst, x, y)
		case codeLog:
			bad = e.evalLog(in, dst, x)
		case codeExp:
			bad = evalExp(dst, x)
		case codeSqrt:
			bad = e.evalSqrt(in, dst, x)
		case codeAbs:
			bad = evalAbs(dst, x)
		case codeMin:
			bad = evalMin(dst, x, y)
		case codeMax:
			bad = evalMax(dst, x, y)
		case codeHinge:
			bad = evalHinge(dst, x, y)
		case codeSquare:
			bad = evalSquare(dst, x)
		case codePow:
			bad = e.evalPow(in, dst, x, y)
		case codePowInt:
			bad = e.evalPowInt(in, dst, x)
		}
		e.bad[r] = bad
	}
}

// noneInside reports whether the row filter leaves no row.
func (e *Evaluator) noneInside(n int) bool {
	for _, v := range e.num[e.prog.where][:n] {
		if v == 1 {
			return false
		}
	}
	return true
}

// survey notes which columns of a batch are clean.
func (e *Evaluator) survey(b *Batch) {
	for i := range b.Cols {
		v := &b.Cols[i]
		clean := true
		switch v.Kind {
		case Float64:
			clean = !anyBad(v.F64[:b.Rows])
		case Text:
			for _, c := range v.Code[:b.Rows] {
				if c < 0 {
					clean = false
					break
				}
			}
		default:
			clean = v.Null == nil
		}
		e.clean[i] = clean
	}
}

// allUsed reports whether every row of the batch is used.
func (e *Evaluator) allUsed() bool {
	p, all := e.prog, len(e.events) == 0
	for _, u := range p.checked {
		all = all && e.clean[u]
	}
	for _, r := range p.dense {
		all = all && !e.bad[r]
	}
	for _, k := range p.cats {
		all = all && (k.reg < 0 || !e.bad[k.reg])
	}
	for _, k := range p.keys {
		all = all && (k.reg < 0 || !e.bad[k.reg])
	}
	if p.where >= 0 && all {
		for _, v := range e.num[p.where] {
			all = all && v == 1
		}
	}
	if p.weight >= 0 && all {
		for _, w := range e.num[p.weight] {
			all = all && w > 0 && w <= math.MaxFloat64 && (!p.frequency || w == math.Trunc(w))
		}
	}
	return all
}

// mark notes what is missing or infinite in a number register.
func (e *Evaluator) mark(r, n int) {
	if !e.bad[r] {
		return
	}
	for i, v := range e.num[r][:n] {
		if v-v != 0 {
			e.markRow(i, v != v)
		}
	}
}

func (e *Evaluator) markRow(i int, missing bool) {
	switch {
	case e.state[i]&^stateInfinite == stateExcluded:
	case missing:
		e.state[i] = e.state[i]&stateInfinite | stateMissing
	default:
		e.state[i] |= stateInfinite
	}
}

// keyMissing reports whether a key is missing in row i.
func (e *Evaluator) keyMissing(k *keyOutput, b *Batch, i int) bool {
	switch {
	case k.use >= 0:
		return missingAt(&b.Cols[k.use], i)
	case k.time:
		return e.null[k.reg] != nil && e.null[k.reg][i]
	}
	return e.num[k.reg][i] != e.num[k.reg][i]
}

func (e *Evaluator) markKey(k *keyOutput, b *Batch) {
	switch {
	case k.use < 0 && !k.time:
		e.mark(k.reg, b.Rows)
		return
	case k.use >= 0 && e.clean[k.use], k.time && e.null[k.reg] == nil:
		return
	}
	for i := range b.Rows {
		if e.keyMissing(k, b, i) {
			e.markRow(i, true)
		}
	}
}

// sort gives each row its fate, fills e.used and counts.
func (e *Evaluator) sort(b *Batch, loc func(int64) Position) (t Tally, err error) {
	p, n := e.prog, b.Rows
	clear(e.state[:n])
	if p.where >= 0 {
		for i, v := range e.num[p.where][:n] {
			if v != 1 {
				e.state[i] = stateExcluded
			}
		}
	}
	for _, u := range p.checked {
		if !e.clean[u] && b.Cols[u].Kind == Float64 {
			for j, v := range b.Cols[u].F64[:n] {
				if v-v != 0 && v == v {
					e.markRow(j, false)
				}
			}
		}
	}
	for _, r := range p.dense {
		e.mark(r, n)
	}
	if p.weight >= 0 {
		e.mark(p.weight, n)
	}
	for i := range p.cats {
		e.markKey(&p.cats[i], b)
	}
	for i := range p.keys {
		e.markKey(&p.keys[i], b)
	}
	clear(e.lost)
	clear(e.lostRow)
	clear(e.valueless)
	e.used = e.used[:0]
	for i, s := range e.state[:n] {
		switch {
		case s&^stateInfinite == stateExcluded:
			t.Excluded++
			continue
		case s&^stateInfinite == stateMissing:
			if e.stop {
				return t, e.stopError(b, loc, i)
			}
			t.Missing++
			e.blame(b, i)
			continue
		}
		if p.weight >= 0 {
			w := e.num[p.weight][i]
			switch {
			case w == 0:
				t.ZeroWeight++
				continue
			case w < 0 || w > math.MaxFloat64:
				return t, rowError(b, loc, i, p.weightText, formatFloat(w), "a finite weight of zero or more")
			case p.frequency && w != math.Trunc(w):
				return t, rowError(b, loc, i, p.weightText, formatFloat(w), "a whole number, as a frequency weight counts rows")
			}
		}
		if s&stateInfinite != 0 {
			return t, e.infiniteError(b, loc, i)
		}
		e.used = append(e.used, int32(i))
	}
	t.Used = int64(len(e.used))
	for _, ev := range e.events {
		if e.state[ev.row]&^stateInfinite != stateExcluded {
			e.valueless[ev.label]++
		}
	}
	return t, nil
}

// blame counts a dropped row under the columns that are missing in it, or else
// under what has no value there.
func (e *Evaluator) blame(b *Batch, row int) {
	p, any := e.prog, false
	for i, u := range p.checked {
		if !e.clean[u] && missingAt(&b.Cols[u], row) {
			e.lost[i]++
			any = true
		}
	}
	if any {
		return
	}
	e.eachValueless(b, row, func(names []int) {
		for _, name := range names {
			if e.lostRow[name] != row+1 {
				e.lostRow[name] = row + 1
				e.lost[name]++
			}
		}
	})
}

// eachValueless calls f with the names of each output that is missing in a row.
func (e *Evaluator) eachValueless(b *Batch, row int, f func(names []int)) {
	p := e.prog
	for j, r := range p.dense {
		if e.num[r][row] != e.num[r][row] {
			f(p.denseLost[j])
		}
	}
	if p.weight >= 0 && e.num[p.weight][row] != e.num[p.weight][row] {
		f(p.weightLost)
	}
	for j := range p.cats {
		if e.keyMissing(&p.cats[j], b, row) {
			f(p.catLost[j])
		}
	}
	for j := range p.keys {
		if e.keyMissing(&p.keys[j], b, row) {
			f(p.keyLost[j])
		}
	}
}

func rowError(b *Batch, loc func(int64) Position, row int, column, found, want string) error {
	var pos Position
	if loc != nil {
		pos = loc(b.Marks[row])
	}
	pos.Column = column
	return &RowError{Pos: pos, Found: found, Want: want}
}

func (e *Evaluator) stopError(b *Batch, loc func(int64) Position, row int) error {
	for _, u := range e.prog.checked {
		if missingAt(&b.Cols[u], row) {
			return rowError(b, loc, row, e.prog.uses[u].name, "a missing cell", "a value, as missing cells stop the run")
		}
	}
	name := ""
	e.eachValueless(b, row, func(names []int) {
		if name == "" && len(names) > 0 {
			name = e.prog.lost[names[0]]
		}
	})
	return rowError(b, loc, row, name, "an operation without value", "a value, as missing ones stop the run")
}

// infiniteError names the infinite cell of a row, or the expression that goes
// beyond float64.
func (e *Evaluator) infiniteError(b *Batch, loc func(int64) Position, row int) error {
	p := e.prog
	for _, u := range p.checked {
		if v := &b.Cols[u]; v.Kind == Float64 && math.IsInf(v.F64[row], 0) {
			return rowError(b, loc, row, p.uses[u].name, formatFloat(v.F64[row]), "a finite number")
		}
	}
	name := ""
	for j, r := range p.dense {
		if names := p.denseLost[j]; name == "" && math.IsInf(e.num[r][row], 0) && len(names) > 0 {
			name = p.lost[names[0]]
		}
	}
	outputs := func(keys []keyOutput, lost [][]int) {
		for j := range keys {
			if k := &keys[j]; name == "" && k.use < 0 && !k.time && math.IsInf(e.num[k.reg][row], 0) {
				name = p.lost[lost[j][0]]
			}
		}
	}
	outputs(p.cats, p.catLost)
	outputs(p.keys, p.keyLost)
	return rowError(b, loc, row, name, "a value beyond float64 (1.8e308)", "a finite number")
}

// count adds the counts of a batch.
func (e *Evaluator) count(t Tally) {
	if e.Tally.MissingBy == nil {
		e.Tally.MissingBy = map[string]int64{}
	}
	if e.Tally.NoValue == nil {
		e.Tally.NoValue = map[string]int64{}
	}
	e.Tally.Used += t.Used
	e.Tally.Excluded += t.Excluded
	e.Tally.Missing += t.Missing
	e.Tally.ZeroWeight += t.ZeroWeight
	for i, c := range e.lost {
		if c > 0 {
			e.Tally.MissingBy[e.prog.lost[i]] += c
		}
	}
	for i, c := range e.valueless {
		if c > 0 {
			e.Tally.NoValue[e.prog.noValue[i]] += c
		}
	}
}
