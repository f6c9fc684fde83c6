package accum

import (
	"errors"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum/internal/kernel"
)

// cellPass is what pass two over unique rows needs of them.
type cellPass struct {
	*cellRows
	at    int       // of the first cell of the block
	gross []float64 // roots of the size of what was added up for the squares
}

// rows is the number of rows of cell r of the block.
func (c *cellPass) rows(r int) int64 { return c.cellRows.rows[c.at+r] }

// SecondByCells is Second from the unique rows that pass one kept, without reading
// anything: the same sums, but for clusters' and positions of rows, and with
// RowSums.Gross. Time O(P^2) for each cell, one goroutine.
func SecondByCells(s *State, rp RowPass, o Options) (*RowSums, error) {
	if s.cells == nil || len(rp.Scores) > 0 {
		return nil, errors.New("accum: no unique rows to sum")
	}
	if s.Extended && rp.ThetaLow == nil {
		rp.ThetaLow = make([]float64, len(rp.Theta))
	}
	n := len(rp.Weights)
	rp.Weights = append(slices.Clone(rp.Weights), rp.Weights...)
	o.Workers = 1
	out, unit, err := s.sumCells(&rp, &o, defaultUnit)
	if err == nil && unit != defaultUnit {
		out, _, err = s.sumCells(&rp, &o, unit)
	}
	if err != nil {
		return nil, err
	}
	out.Meats, out.Gross = out.Meats[:n], out.Meats[n:]
	out.MeatBlocks, out.GrossBlocks = out.MeatBlocks[:n], out.MeatBlocks[n:]
	out.Passes, out.Bytes = 0, 0
	return out, nil
}

func (s *State) sumCells(rp *RowPass, o *Options, unit int) (*RowSums, int, error) {
	common := newSecondCommon(s, rp, unit, o, nil)
	w := newSecondWorker(s, rp, unit, common)
	w.cells = &cellPass{cellRows: s.cells, gross: make([]float64, stride)}
	for b := 1; w.cells.at < s.CellRows(); b++ {
		if err := w.addCells(); err != nil {
			return nil, 0, err
		}
		w.cells.at += w.block.Rows
		if b%foldBatches == 0 {
			if err := w.fold(); err != nil {
				return nil, 0, err
			}
		}
	}
	if err := w.fold(); err != nil {
		return nil, 0, err
	}
	if err := w.segment(0); err != nil {
		return nil, 0, err
	}
	return s.joinSecond([]*secondWorker{w}, rp, newPass(nil, nil), unit, common)
}

// addCells sums the next block of cells.
func (w *secondWorker) addCells() error {
	c, l, rp, b := w.cells, w.lay, w.pass, &w.block
	from := c.at
	b.Rows = min(512, len(c.cellRows.rows)-from)
	to, n := from+b.Rows, b.Rows
	b.X, b.XLow = b.X[:0], b.XLow[:0]
	for j := range l.nx {
		b.X = append(b.X, c.x[j][from:to])
		if w.wide != nil {
			b.XLow = append(b.XLow, c.low[j][from:to])
		}
	}
	b.X = append(b.X, c.size[from:to]) // in the outcome's place: v is set below
	b.XLow = append(b.XLow, nil)
	if c.weight != nil {
		b.Weight = c.weight[from:to]
	}
	w.load()
	v := w.col(l.v())
	for r := range v {
		v[r] = c.sum[1][from+r] / c.size[from+r]
	}
	if w.wide != nil {
		clear(w.lowCol(l.v()))
	}
	w.findCellColumns()
	e := w.e[:n]
	if w.wide != nil {
		w.residualsWide(e)
	} else {
		w.residuals(e)
	}
	var fourth float64
	for r, x := range e {
		i := from + r
		m, s1, s2 := c.size[i], c.sum[1][i], c.sum[2][i]
		sse, gross := max(0, s2-s1*v[r]), c.sum[0][i]
		if c.cellRows.rows[i] == 1 {
			sse, gross = 0, 0 // as over rows
		}
		t := x - v[r]
		fourth += c.sum[4][i] + t*(4*c.sum[3][i]+t*(6*s2+t*(4*s1+m*t)))
		c.gross[r] = math.Sqrt(gross + m*x*x)
		e[r] = math.Sqrt(sse + m*x*x)
	}
	if rp.Spread {
		sq := w.squares[:n]
		kernel.Scale(sq, e, e)
		kernel.Cross(w.spread, l.p0+1, sq, stride, 1, w.z, stride, l.p0+1, n)
		w.spread[l.p0+1] += fourth
	}
	w.addRows(e)
	return nil
}

// findCellColumns is findColumns for cells.
func (w *secondWorker) findCellColumns() {
	c, s := w.cells, w.state
	var pick []int32
	for i := range w.lay.tables {
		cats, to := w.lay.tables[i].cats, w.cats.rows[i][:w.block.Rows]
		for r := range to {
			if len(cats) == 1 {
				to[r] = c.cats[cats[0]][c.at+r]
				continue
			}
			pick = pick[:0]
			for _, cat := range cats {
				pick = append(pick, c.cats[cat][c.at+r])
			}
			to[r] = int32(s.combos[i].find(pick))
		}
	}
	w.groupColumns()
}
