package accum

import (
	"errors"
	"fmt"
	"slices"
)

// RowSums is what pass two leaves.
type RowSums struct {
	// Meats are (P+1) x (P+1) matrices of which the last row and column are
	// unused, one for each of RowPass.Weights.
	Meats [][]float64
	// MeatBlocks are the products of each meat with the group apart, LoneBlocks
	// those of LoneGram; empty without such a group.
	MeatBlocks []Blocks
	LoneBlocks Blocks
	Scores     []*Scores
	// Nested tells for each of Scores whether every unit whose effects are swept out
	// lies in one cluster; nil without a sweep. Not known of crossed keys.
	Nested []bool
	// MaxLeverage is the largest leverage that is not 1.
	MaxLeverage float64
	// LoneRows counts rows of leverage 1; LoneGram is the sum of their w z z',
	// (P+1) x (P+1), nil if there are none.
	LoneRows int64
	LoneGram []float64
	// HeavyRows counts rows with HeavyAt < h < 1.
	HeavyRows int64
	// Heavy and Light are filled under RowPass.Heavy: root-weighted rows (P+1
	// entries, v last) in segment order, and the second moments of all others.
	Heavy []HeavyRow
	Light []float64
	// Spread is filled under RowPass.Spread: sum e^2 z over the constant and the
	// numeric terms, then sum e^4; each row as often as its frequency.
	Spread []float64
	// Over counts the rows (frequencies as often as they say) for each of RowPass.Over;
	// Highest are the rows of largest leverage, none by unique rows.
	Over    []int64
	Highest []HighRow
	// Gross and GrossBlocks are, by unique rows, like Meats and MeatBlocks the size of
	// what was added up for them.
	Gross       [][]float64
	GrossBlocks []Blocks
	// Series is filled under RowPass.Series.
	Series *SeriesSums
	// Passes is 1, or 2 if the keyed sums needed another unit; Bytes is of all.
	Passes int
	Bytes  int64

	pool   *groupPool
	kept   *secondWorker // under RowPass.Retain: the sums as they were added up
	checks map[int]segCheck
	read   int64
}

// Close gives back what Scores hold in memory and on scratch; they cannot be read
// any more. It may be called again.
func (r *RowSums) Close() {
	if r.pool != nil {
		r.pool.close()
	}
}

// HeavyRow is a row of high leverage, times the root of its weight.
type HeavyRow struct {
	Z      []float64
	Weight float64
	// segment and at order the rows.
	segment, at int
}

func (s *State) unchanged(p *pass) error {
	if len(p.checks) != len(s.checks) {
		return &ChangedError{fmt.Sprintf("%d segments, then %d", len(s.checks), len(p.checks))}
	}
	for n, c := range s.checks {
		if q, ok := p.checks[n]; !ok || q != c {
			return &ChangedError{fmt.Sprintf("segment %d holds other values", n)}
		}
	}
	return nil
}

// join adds the sums that o keeps to itself, but those of clusters.
func (w *secondWorker) join(o *secondWorker) {
	mine := w.allMeats()
	for k, m := range o.allMeats() {
		if !m.used {
			continue
		}
		mine[k].used = true
		mine[k].gramX.merge(m.gramX)
		for i, t := range m.tables {
			mine[k].tables[i].mergeFrom(t, same(len(t.rows)))
		}
	}
	for i := range o.scores {
		w.loneT[i].mergeFrom(o.loneT[i])
		w.loneC[i].mergeFrom(o.loneC[i])
	}
	w.spreadX.merge(o.spreadX)
	w.maxLever = max(w.maxLever, o.maxLever)
	w.loneRows += o.loneRows
	w.heavyCount += o.heavyCount
	w.heavy = append(w.heavy, o.heavy...)
	for i, c := range o.over {
		w.over[i] += c
	}
	w.highest = append(w.highest, o.highest...)
}

func (s *State) joinSecond(ws []*secondWorker, rp *RowPass, p *pass, unit int, common *secondCommon) (*RowSums, int, error) {
	w := ws[0]
	for _, o := range ws[1:] {
		w.join(o)
	}
	out := &RowSums{MaxLeverage: w.maxLever, LoneRows: w.loneRows, HeavyRows: w.heavyCount, Over: w.over, Highest: highest(w.highest), Passes: 1, Bytes: p.bytes}
	if rp.Spread {
		out.Spread = make([]float64, len(w.spread))
		w.spreadX.values(out.Spread)
	}
	// Meats are judged by the unit's range; scores by their digits too.
	need, best := false, -1074
	see := func(t *partials, unit int) {
		over, _ := t.fits(unit, 0)
		need = need || over
		best = max(best, t.betterUnit())
	}
	var rows int64 // of one pair of combinations at most
	if len(s.lay.pairs) > 0 {
		rows = s.Rows
	}
	full := func(m *meat, cols int) *sums {
		out := s.newSums()
		gram := make([]float64, len(m.gram))
		m.gramX.values(gram)
		s.placeDense(out.m, gram, cols)
		for _, t := range m.tables {
			see(&t.partials, t.unit)
		}
		for _, b := range m.pairs {
			over, _ := b.t.fits(0, rows)
			need = need || over
			best = max(best, b.t.betterUnit(rows))
		}
		s.placeTables(out, m.tables, nil)
		s.placePairs(out, pairTablesOf(m.pairs), nil)
		return out
	}
	for _, m := range w.meats {
		f := full(m, s.lay.p0+1)
		out.Meats = append(out.Meats, f.m)
		out.MeatBlocks = append(out.MeatBlocks, f.Blocks)
	}
	if w.lone.used {
		f := full(w.lone, s.lay.p0+1)
		out.LoneGram, out.LoneBlocks = f.m, f.Blocks
	}
	if rp.Heavy {
		if len(w.heavy) > maxHeavy {
			return nil, 0, errors.New("accum: too many rows of high leverage to treat one by one")
		}
		out.Light = full(w.light, s.lay.p0+2).m
		slices.SortFunc(w.heavy, func(a, b HeavyRow) int {
			if a.segment != b.segment {
				return a.segment - b.segment
			}
			return a.at - b.at
		})
		out.Heavy = w.heavy
	}
	for i, g := range w.scores {
		for _, o := range ws {
			if err := o.scores[i].finish(); err != nil {
				return nil, 0, err
			}
		}
		see(&g.store.seen, g.store.unit)
		sc := storeScores(g.store, s.scoreWidth(), rp.moments(rp.Scores[i]))
		sc.Lone, sc.LoneZero = make([]bool, s.allColumns()), make([]bool, s.allColumns())
		nonzero, zero := w.loneT[i].lone()
		copy(sc.Lone[1:], nonzero)
		copy(sc.LoneZero[1:], zero)
		for _, g := range s.Groups {
			for c := g.first; c < g.first+g.n*len(g.Parts); c++ {
				sc.Lone[c] = w.loneC[i].nonzero[c].in == inOne
			}
		}
		if s.Apart != nil {
			over, unit, err := common.scores[i].join(s, sc)
			if err != nil {
				return nil, 0, err
			}
			need, best = need || over, max(best, unit)
		}
		s.loneBases(w.loneC[i].nonzero, sc.LoneZero)
		if common.scales != nil {
			sc.unscale(common.scales, s.lay.v())
		}
		if s.Swept != nil {
			out.Nested = append(out.Nested, common.nested(s, rp.Scores[i]))
		}
		out.Scores = append(out.Scores, sc)
	}
	switch {
	case need && unit == defaultUnit:
		return out, best, nil
	case need:
		return nil, 0, errors.New("the sums of residuals leave the range of float64: values are too large; divide the outcome or a term by a power of ten")
	}
	return out, unit, nil
}

// loneBases marks indicators whose zero cells lie in a single cluster: all other
// combinations of the group do. only holds the only cluster of each indicator.
func (s *State) loneBases(only []where, cols []bool) {
	for gi := range s.Groups {
		g := &s.Groups[gi]
		count := map[where]int{}
		for i := range g.n {
			count[only[g.first+i*len(g.Parts)]]++
		}
		for i := range g.n {
			c := g.first + i*len(g.Parts)
			own := only[c]
			others := len(count)
			if count[own] == 1 {
				others--
			}
			many := where{in: inMany}
			among := count[many] > 1 || (count[many] == 1 && own != many)
			cols[c] = cols[c] || (others == 1 && !among)
		}
	}
}

// outer returns W W' for the n x k matrix W.
func outer(w []float64, n, k int) []float64 {
	if k > manyColumns {
		return RowProducts(w, w, k)
	}
	out := make([]float64, n*n)
	for i := range n {
		for j := 0; j <= i; j++ {
			x := dotp(w[i*k:(i+1)*k], w[j*k:(j+1)*k])
			out[i*n+j], out[j*n+i] = x, x
		}
	}
	return out
}
