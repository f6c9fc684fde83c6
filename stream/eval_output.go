package stream

import (
	"maps"
	"slices"
)

// Add adds the counts of o.
func (t *Tally) Add(o *Tally) {
	t.Used += o.Used
	t.Excluded += o.Excluded
	t.Missing += o.Missing
	t.ZeroWeight += o.ZeroWeight
	add := func(dst *map[string]int64, src map[string]int64) {
		if *dst == nil {
			*dst = maps.Clone(src)
			return
		}
		for k, v := range src {
			(*dst)[k] += v
		}
	}
	add(&t.MissingBy, o.MissingBy)
	add(&t.NoValue, o.NoValue)
}

// Read is the number of rows counted.
func (t *Tally) Read() int64 { return t.Used + t.Excluded + t.Missing + t.ZeroWeight }

// prepare gives the block its columns.
func (e *Evaluator) prepare(out *Block) {
	p := e.prog
	out.X = slices.Grow(out.X[:0], len(p.dense))[:len(p.dense)]
	out.XLow = out.XLow[:0]
	if e.wide != nil {
		out.XLow = slices.Grow(out.XLow, len(p.dense))[:len(p.dense)]
	}
	out.Cat = slices.Grow(out.Cat[:0], len(p.cats))[:len(p.cats)]
	n := len(p.keys) + len(e.crossed)
	if e.dealer != nil {
		n++
	}
	out.Key = slices.Grow(out.Key[:0], n)[:n]
}

// empty makes a block without rows.
func (e *Evaluator) empty(out *Block) {
	p := e.prog
	clear(out.X)
	clear(out.XLow)
	out.Weight, out.Marks = nil, nil
	for i := range p.cats {
		out.Cat[i] = Vector{Kind: p.cats[i].kind}
	}
	for i := range p.keys {
		out.Key[i] = Vector{Kind: p.keys[i].kind}
	}
	for i := range e.crossed {
		out.Key[len(p.keys)+i] = Vector{Kind: Text}
	}
	if e.dealer != nil {
		out.Key[len(out.Key)-1] = Vector{Kind: Int64}
	}
}

// pass hands on all rows of a batch.
func (e *Evaluator) pass(b *Batch, out *Block) {
	p, n := e.prog, b.Rows
	out.Rows = n
	for j, r := range p.dense {
		out.X[j] = e.num[r][:n]
	}
	if e.wide != nil {
		e.wide.used(e, n, true, out.XLow)
	}
	out.Weight = nil
	if p.weight >= 0 {
		out.Weight = e.num[p.weight][:n]
	}
	out.Marks = b.Marks[:n]
	for j := range p.cats {
		e.passKey(&p.cats[j], b, &e.outCat[j], &out.Cat[j])
	}
	for j := range p.keys {
		e.passKey(&p.keys[j], b, &e.outKey[j], &out.Key[j])
	}
	e.cross(out)
}

func (e *Evaluator) passKey(k *keyOutput, b *Batch, own, out *Vector) {
	n := b.Rows
	switch {
	case k.time:
		*out = Vector{Kind: Time, I64: e.ns[k.reg][:n]}
	case k.use >= 0 && k.kind == Text:
		v := &b.Cols[k.use]
		*out = Vector{Kind: Text, Code: v.Code[:n], Dict: v.Dict}
	case k.use >= 0 && k.kind != Float64:
		*out = Vector{Kind: k.kind, I64: b.Cols[k.use].I64[:n]}
	default:
		e.used = e.used[:n]
		for i := range e.used {
			e.used[i] = int32(i)
		}
		e.spans = append(e.spans[:0], span{0, int32(n)})
		e.compactKey(k, b, own, out)
	}
}

// compact hands on the used rows.
func (e *Evaluator) compact(b *Batch, out *Block) {
	p, n := e.prog, len(e.used)
	if n == 0 {
		e.empty(out)
		return
	}
	out.Rows = n
	e.findSpans()
	for j, r := range p.dense {
		e.outX[j] = e.gather(e.outX[j], e.num[r])
		out.X[j] = e.outX[j][:n]
	}
	if e.wide != nil {
		e.wide.used(e, n, false, out.XLow)
	}
	out.Weight = nil
	if p.weight >= 0 {
		e.outW = e.gather(e.outW, e.num[p.weight])
		out.Weight = e.outW[:n]
	}
	e.outMarks = gatherInts(e.outMarks, b.Marks, e.used, e.rows)
	out.Marks = e.outMarks[:n]
	for j := range p.cats {
		e.compactKey(&p.cats[j], b, &e.outCat[j], &out.Cat[j])
	}
	for j := range p.keys {
		e.compactKey(&p.keys[j], b, &e.outKey[j], &out.Key[j])
	}
	e.cross(out)
}

// cross fills the keys that are made of others.
func (e *Evaluator) cross(out *Block) {
	for i := range e.crossed {
		e.crossed[i].cross(out.Key, out.Rows, &out.Key[len(e.prog.keys)+i])
	}
	if e.dealer != nil {
		e.dealer.deal(e.Segment, out, &out.Key[len(out.Key)-1])
	}
}

// gather copies the used rows of src to dst, which it makes if need be.
func (e *Evaluator) gather(dst, src []float64) []float64 {
	if dst == nil {
		dst = make([]float64, e.rows)
	}
	if len(e.spans) > 0 {
		j := 0
		for _, s := range e.spans {
			j += copy(dst[j:], src[s.from:s.to])
		}
		return dst
	}
	for j, i := range e.used {
		dst[j] = src[i]
	}
	return dst
}

// span is a run of rows that are all used.
type span struct{ from, to int32 }

// findSpans lists the runs of used rows; none where they are too short to be
// copied as such.
func (e *Evaluator) findSpans() {
	e.spans = e.spans[:0]
	for i := 0; i < len(e.used); {
		j := i + 1
		for j < len(e.used) && e.used[j] == e.used[j-1]+1 {
			j++
		}
		e.spans = append(e.spans, span{e.used[i], e.used[j-1] + 1})
		if len(e.spans) > maxSpans {
			e.spans = e.spans[:0]
			return
		}
		i = j
	}
}

// maxSpans in a batch are worth a copy each.
const maxSpans = BatchRows / 8

func gatherInts(dst, src []int64, used []int32, rows int) []int64 {
	if dst == nil {
		dst = make([]int64, rows)
	}
	for j, i := range used {
		dst[j] = src[i]
	}
	return dst
}

// compactKey fills own with the used rows of a key, and hands it out.
func (e *Evaluator) compactKey(k *keyOutput, b *Batch, own, out *Vector) {
	n := len(e.used)
	switch {
	case k.time:
		own.I64 = gatherInts(own.I64, e.ns[k.reg], e.used, e.rows)
	case k.kind == Text:
		v := &b.Cols[k.use]
		if own.Code == nil {
			own.Code = make([]int32, e.rows)
		}
		for j, i := range e.used {
			own.Code[j] = v.Code[i]
		}
		*out = Vector{Kind: Text, Code: own.Code[:n], Dict: v.Dict}
		return
	case k.kind == Float64:
		var from []float64
		if k.use >= 0 {
			from = b.Cols[k.use].F64
		} else {
			from = e.num[k.reg]
		}
		own.F64 = e.gather(own.F64, from)
		for j, v := range own.F64[:n] {
			if v == 0 {
				own.F64[j] = 0 // one key for both zeros
			}
		}
		*out = Vector{Kind: Float64, F64: own.F64[:n]}
		return
	case k.use >= 0:
		own.I64 = gatherInts(own.I64, b.Cols[k.use].I64, e.used, e.rows)
	default:
		if own.I64 == nil {
			own.I64 = make([]int64, e.rows)
		}
		for j, i := range e.used {
			own.I64[j] = int64(e.num[k.reg][i])
		}
	}
	*out = Vector{Kind: k.kind, I64: own.I64[:n]}
}
