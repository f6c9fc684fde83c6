package accum

import (
	"cmp"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// HighestRows is how many rows of the largest leverage pass two remembers.
const HighestRows = 5

// HighRow is a row of large leverage.
type HighRow struct {
	Leverage float64
	Position stream.Position
	segment  int
	mark     int64
}

// noteLeverage counts the leverage of row r of the block.
func (w *secondWorker) noteLeverage(r int, h float64) {
	if len(w.over) == 0 {
		return
	}
	for i, limit := range w.pass.Over {
		if h > limit {
			w.over[i] += w.timesRow(r)
		}
	}
	n := len(w.highest)
	if w.cells != nil || n >= HighestRows && h < w.highest[n-1].Leverage {
		return
	}
	row := HighRow{Leverage: h, segment: w.seg.Number(), mark: w.block.Marks[r]}
	if n >= HighestRows && compareHigh(row, w.highest[n-1]) >= 0 {
		return
	}
	row.Position = w.seg.Locate(row.mark)
	w.highest = highest(append(w.highest, row))
}

// timesRow is how many rows row r of the block stands for.
func (w *secondWorker) timesRow(r int) int64 {
	switch {
	case w.root != nil && w.lay.design.Spec.WeightKind == stream.Frequency:
		return int64(w.block.Weight[r])
	case w.cells != nil:
		return w.cells.rows(r)
	}
	return 1
}

// compareHigh puts the largest leverage first, equal ones in order of rows.
func compareHigh(a, b HighRow) int {
	return cmp.Or(cmp.Compare(b.Leverage, a.Leverage), cmp.Compare(a.segment, b.segment), cmp.Compare(a.mark, b.mark))
}

// highest sorts rows and keeps the first.
func highest(rows []HighRow) []HighRow {
	slices.SortFunc(rows, compareHigh)
	return rows[:min(len(rows), HighestRows)]
}
