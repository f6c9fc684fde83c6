package accum

import (
	"fmt"
	"math"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// Effects of units are swept out of outcome and terms without ever becoming columns
// (Frisch & Waugh 1933; Lovell 1963): with s_g = sum w z and W_g = sum w over the rows
// of unit g, the second moments about the means of the units are
//
//	W = sum w z z' - sum_g s_g s_g' / W_g
//
// so that pass one needs one vector a unit beside the second moments of the whole. The
// subtraction costs as many digits as the spread between units has more than that
// within them; in extended arithmetic both sides have twice the digits, the sums of
// units too.

// Swept says what was swept out.
type Swept struct {
	Units      int64 // units of more than one row
	Singletons int64 // units of one row (and frequency 1), which say nothing within
	// Total is S before the sweep.
	Total []float64
	// Constant tells of each numeric term whether it is the same in all rows of every
	// unit, as far as the arithmetic can tell.
	Constant []bool
	// Spread is the largest ratio of a sum of squares before the sweep to that after it,
	// Loss the relative error that the subtraction can have cost.
	Spread, Loss float64
}

// SingletonsError says that no unit has more than one row.
type SingletonsError struct {
	Units string // expression
	Rows  int64
}

func (e *SingletonsError) Error() string {
	return fmt.Sprintf("sweeping out the effects of %s leaves nothing: each of its %d values has one used row only; want units with two rows or more", e.Units, e.Rows)
}

// wideUnit is what low parts of the sums of units are multiplied by, so that the
// fixed-point unit does not cut them off.
const wideUnit = 0x1p60

// newUnitGroups makes the sums of units of one worker.
func newUnitGroups(ld *loader, st *groupStore, b *budget) *groups {
	n := st.width - st.owners
	switch {
	case ld.wide != nil:
		return newGroups(st, n, st.owners, addOwned(addWide(st.unit), st.owners, b.split))
	case ld.root != nil:
		return newGroups(st, n+1, st.owners, addOwned(addScaled, st.owners, b.split))
	}
	return newGroups(st, n, st.owners, addOwned(addPlain, st.owners, b.split))
}

// addPlain adds a row's numbers.
func addPlain(part, rows []float64, _ []int32, n int) {
	p := len(rows) / n
	for ; len(rows) > 0; rows = rows[p:] {
		part := part[:p]
		for j, x := range rows[:p] {
			part[j] += x
		}
	}
}

// addWide adds the first half of a row's numbers with twice the digits; the second
// half is what they leave off. High parts are kept to multiples of the fixed-point
// unit, so that fixed point does not round them.
func addWide(unit int) rowAdder {
	last := math.Ldexp(1, unit)
	fine, round := 0x1p52*last, 0x1.8p52*last
	return func(part, rows []float64, _ []int32, n int) {
		p := len(rows) / n
		k := p / 2
		for ; len(rows) > 0; rows = rows[p:] {
			for j, x := range rows[:k] {
				low := rows[k+j]
				if math.Abs(x) < fine {
					y := (x + round) - round
					low += x - y
					x = y
				}
				s, rest := twoSum(part[j], x)
				part[j] = s
				part[k+j] += float64((rest + low) * wideUnit)
			}
		}
	}
}

// addUnits adds w z of the block's rows to their units.
func (w *firstWorker) addUnits() {
	l, n := w.lay, w.block.Rows
	key := &w.block.Key[l.design.Sweep]
	cols := w.unitCols[:0]
	switch {
	case w.wide != nil:
		for j := range l.p0 + 2 {
			hi, lo := w.col(j), w.lowCol(j)
			if w.root != nil {
				th, tl := w.unitLow[2*j*stride:][:n], w.unitLow[(2*j+1)*stride:][:n]
				for r, wt := range w.block.Weight[:n] {
					p := Wide{hi[r], lo[r]}.Times(wt)
					th[r], tl[r] = p.Hi, p.Lo
				}
				hi, lo = th, tl
			}
			cols = append(cols, hi, lo)
		}
		// High parts first, then the low ones.
		for j := range l.p0 + 2 {
			w.unitOrder[j], w.unitOrder[l.p0+2+j] = cols[2*j], cols[2*j+1]
		}
		w.unitCols, cols = cols, w.unitOrder
	case w.root != nil:
		cols = append(cols, w.block.Weight[:n])
		for j := range l.p0 + 2 {
			cols = append(cols, w.col(j))
		}
		w.unitCols = cols
	default:
		for j := range l.p0 + 2 {
			cols = append(cols, w.col(j))
		}
		w.unitCols = cols
	}
	rows, base := w.units.room(n)
	transpose(rows, len(cols), 0, cols)
	for i, v := range w.owners {
		for r, c := range v.number(&w.block.Key[v.key], n) {
			base[r*len(w.owners)+i] = c
		}
	}
	w.units.take(key, n)
	w.watch.lap(StageClusters)
}

// wide is f 2^unit to about 106 bits.
func (f fixed) wide(unit int) Wide {
	hi := f.float(unit)
	g, ok := toFixed(-hi, unit)
	if !ok {
		return Widen(hi)
	}
	return Wide{hi, f.add(g).float(unit)}
}

// unitSums is the sums of one unit.
type unitSums struct {
	groupPart
	sums   []Wide  // of w z, z = (1, u, v); the first is W_g
	owners []int32 // numbers of the clusters that it lies in, -1 for several
}

// single reports whether the unit is one row, which is no spread within it.
func (u *unitSums) single(kind stream.WeightKind) bool {
	return u.rows == 1 && (kind != stream.Frequency || u.sums[0].Hi == 1)
}

// eachUnit calls f for each unit in order of key. What f gets is valid until it
// returns.
func (s *State) eachUnit(f func(u *unitSums) error) error {
	key := s.lay.design.Sweep
	var stores []*groupStore
	var packed []bool // sums stand among the second moments of the unit
	for _, e := range s.epochs {
		st := e.units
		if packed = append(packed, st == nil); st == nil {
			st = e.clusters[key]
		}
		stores = append(stores, st)
	}
	k := s.lay.p0 + 2
	u := &unitSums{sums: make([]Wide, k), owners: make([]int32, len(s.nests))}
	joined := make([]fixed, len(s.nests))
	return mergeGroups(stores, func(parts []groupPart) error {
		u.groupPart = parts[0]
		clear(u.sums)
		clear(joined)
		for i := range parts {
			p := &parts[i]
			sums := len(p.sums) - stores[p.tag].owners
			for j, o := range p.sums[sums:] {
				joined[j].joinOwner(o)
			}
			if i > 0 {
				u.rows += p.rows
			}
			unit := stores[p.tag].unit
			low := !packed[p.tag] && sums == 2*k
			for j := range u.sums {
				at := j
				if packed[p.tag] {
					at = j * (j + 1) / 2
				}
				x := p.sums[at].wide(unit)
				if low {
					x = x.Add(Widen(p.sums[k+j].float(unit) / wideUnit))
				}
				u.sums[j] = u.sums[j].Add(x)
			}
		}
		for j, o := range joined {
			u.owners[j] = int32(o.lo) // -1 of manyOwners
		}
		return f(u)
	})
}

// sweep makes S and Wide the moments within units.
func (s *State) sweep() error {
	l := s.lay
	p := l.p0 + 2
	kind := l.design.Spec.WeightKind
	out := &Swept{Total: append([]float64(nil), s.S...), Constant: make([]bool, l.p0)}
	z, low := make([]float64, p*stride), make([]float64, p*stride)
	gram, gramLow := make([]float64, p*(p+1)/2), make([]float64, p*(p+1)/2)
	between := make(superVec, len(gram))
	n := 0
	flush := func() {
		if s.Extended {
			kernel.GramWide(gram, gramLow, z, low, stride, n, p)
			between.addVec(gramLow)
			clear(gramLow)
		} else {
			kernel.Gram(gram, z, stride, n, p)
		}
		between.addVec(gram)
		clear(gram)
		n = 0
	}
	var single superSum
	err := s.eachUnit(func(u *unitSums) error {
		if u.single(kind) {
			out.Singletons++
			single.add(u.sums[0].Hi)
		} else {
			out.Units++
		}
		root := u.sums[0].Sqrt()
		for j, x := range u.sums {
			if s.Extended {
				q := x.Div(root)
				z[j*stride+n], low[j*stride+n] = q.Hi, q.Lo
			} else {
				z[j*stride+n] = x.Hi / root.Hi
			}
		}
		for i, nest := range s.nests {
			if err := nest.add(u.owners[i], u.single(kind), z, n); err != nil {
				return err
			}
		}
		if n++; n == stream.BatchRows {
			flush()
		}
		return nil
	})
	if err == nil {
		err = s.endNests(s.smallest())
	}
	if err != nil {
		return err
	}
	flush()
	if out.Units == 0 {
		return &SingletonsError{Units: l.design.Keys[l.design.Sweep].Text, Rows: out.Singletons}
	}
	s.Rows -= out.Singletons
	s.Freq -= out.Singletons
	s.Tally.Used -= out.Singletons
	if l.design.Spec.Weight == "" {
		s.Weight = float64(s.Rows)
	} else {
		s.Weight -= single.value()
	}
	for j := range p {
		for i := range j + 1 {
			b := between[j*(j+1)/2+i].wide()
			x := s.S[i*p+j] - b.Hi
			if i == 0 {
				x = 0
			}
			if s.Extended {
				w := s.Wide[i*p+j].Sub(b)
				if i == 0 {
					w = Wide{}
				}
				s.Wide[i*p+j], s.Wide[j*p+i] = w, w
				x = w.Hi
			}
			s.S[i*p+j], s.S[j*p+i] = x, x
		}
	}
	eps := 0x1p-53
	if s.Extended {
		eps = 0x1p-100
	}
	f := s.Frame
	weight := out.Total[0]
	for j := 1; j < p; j++ {
		within, total := s.S[j*p+j], out.Total[j*p+j]
		if within < 0 {
			for i := range p { // rounding of nothing
				s.S[i*p+j], s.S[j*p+i] = 0, 0
				if s.Extended {
					s.Wide[i*p+j], s.Wide[j*p+i] = Wide{}, Wide{}
				}
			}
			within = 0
		}
		if j <= l.p0 {
			size := math.Sqrt(total / weight)
			if !f.White || f.T[(j-1)*(f.Terms+1)] == 1 {
				size = math.Max(size, math.Abs(f.Shift[j-1]*f.Inv[j-1]))
			}
			if out.Constant[j-1] = s.Extended && math.Sqrt(within/weight) <= constantShare*size; out.Constant[j-1] {
				continue
			}
		}
		if total > 0 {
			out.Spread = math.Max(out.Spread, total/within)
		}
	}
	out.Loss = eps * out.Spread
	s.Swept = out
	return nil
}

// sweptScores forms the scores of units, and their second moments within, from the
// second moments of their rows.
func (s *State) sweptScores(sc *Scores, theta []float64) {
	kind := s.lay.design.Spec.WeightKind
	p := s.lay.p0 + 2
	z := make([]float64, p*(p+1)/2)
	sc.skip = func(parts []groupPart) bool {
		var rows int64
		var w float64
		for i := range parts {
			rows += parts[i].rows
			w += parts[i].sums[0].float(sc.stores[parts[i].tag].unit)
		}
		return rows == 1 && (kind != stream.Frequency || w == 1)
	}
	s.withinScores(sc, theta, func(_ *Cluster, parts []groupPart, within, gross []float64) {
		clear(z)
		for i := range parts {
			unit := sc.stores[parts[i].tag].unit
			for q, f := range parts[i].sums {
				z[q] += f.float(unit)
			}
		}
		q := 0
		for hi := range p {
			for lo := range hi + 1 {
				y := z[lo*(lo+1)/2] / z[0] * z[hi*(hi+1)/2]
				within[q], gross[q] = z[q]-y, math.Abs(z[q])+math.Abs(y)
				q++
			}
		}
	})
}

// withinScores forms scores from second moments within units, packed. fill sets them,
// and the size of what was added up for each, from zeros.
func (s *State) withinScores(sc *Scores, theta []float64, fill func(c *Cluster, parts []groupPart, within, gross []float64)) {
	p, k := s.lay.p0+2, s.lay.p0+1
	within, gross := make([]float64, p*(p+1)/2), make([]float64, p*(p+1)/2)
	sc.form = func(c *Cluster, parts []groupPart) {
		clear(within)
		clear(gross)
		fill(c, parts, within, gross)
		for a := range k {
			var sum, mag float64
			for b := range p {
				var x float64
				if a > 0 && b > 0 { // the constant is swept out
					lo, hi := min(a, b), max(a, b)
					q := hi*(hi+1)/2 + lo
					x = within[q]
					sum = math.FMA(theta[b], x, sum)
					mag = math.FMA(math.Abs(theta[b]), gross[q], mag)
				}
				if c.A != nil && b < k {
					c.A[a*k+b] = x
				}
			}
			c.S[a] = sum
			sc.Gross[a] += mag * mag
		}
	}
}
