package vcov

import (
	"context"
	"fmt"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Errors of rows from unique rows. Where regressors take few values, one pass keeps
// for each distinct row x its number of rows n and the sums of powers of the outcome,
// from which every kind of hc.go is exact (Wong, Forsell, Lewis, Mao, Wardrop 2021,
// arXiv:2102.11297):
//
//	meat = sum_c [ SSE_c + n_c (ybar_c - x_c'b)^2 ] g(h_c) x_c x_c',  h_c = x_c'(X'X)^-1 x_c
//
// See accum.SecondByCells.

const (
	// rowsPerCell is how many rows a unique row must stand for to be worth keeping.
	rowsPerCell = 10
	// aheadCells: the estimate from a sample must be so far below the bound.
	aheadCells = 2
)

// cellCosts are what the planner weighs, in nanoseconds a row.
type cellCosts struct {
	byRow           bool    // the kinds need leverages, or have categories: else fourth moments do
	one             float64 // what one pass takes beside unique rows
	two             float64 // what two passes take instead
	quartic, second float64 // what fourth moments and a second pass take, where they do
	cells           float64 // what unique rows take
	against         string  // why they were not chosen, for a message
}

// planCells chooses unique rows, where they fit and cost less, or nothing else can do
// without a second pass. The choice hangs on the input and the model alone.
func (p *Plan) planCells(ctx context.Context, src stream.Source, d *stream.Design, o *Options, c *cellCosts) error {
	if o.Passes == 2 {
		return nil
	}
	s, err := p.takeSample(ctx, src, d, o)
	if err != nil {
		return err
	}
	info := src.Info()
	most, each := accum.CellsHeld(d, o.ClusterMemory)
	c.cells = costCell + costCellWord*float64(len(d.Dense)-1+len(d.Categories))
	blind := s.Cells.Rows == 0
	n := s.Cells.Estimate()
	few := !blind
	switch {
	case blind:
	case n*aheadCells > float64(most):
		few = false
		c.against = fmt.Sprintf(" (its regressors take about %.0f distinct values, too many to keep)", n)
	case o.Passes == 1 && c.byRow: // they fit, and nothing else does
	case s.Whole:
		few = false // so few rows are read twice in no time
	case info.Rows >= 0:
		few = n*rowsPerCell <= float64(info.Rows)
		c.against = fmt.Sprintf(" (a regressor row stands for fewer than %d rows)", rowsPerCell)
	}
	if !blind {
		c.cells += costCellMiss * n
	}
	one := c.one + c.cells
	switch {
	case !c.byRow && o.Passes == 1:
		p.needs.Cells = few && info.Rewindable && c.cells < c.quartic
	case !c.byRow:
		p.needs.Cells = few && info.Rewindable && c.cells < min(c.quartic, c.second)
	case o.Passes == 1 || !info.Rewindable:
		p.needs.Cells = few || blind
	default:
		p.needs.Cells = (few || blind) && one < c.two
	}
	if p.needs.Cells {
		p.PerUnique = each
	}
	switch {
	case !p.needs.Cells:
	case blind:
		p.why("rows with equal regressors are summed together as long as they are few (about %.0f ns a row); the first rows will tell", c.cells)
	default:
		p.why("of %d rows looked at %d have different regressors, so that there may be about %.0f unique rows: they are summed in one pass (about %.0f ns a row)",
			s.Cells.Rows, s.Cells.Distinct, n, c.cells)
	}
	return nil
}

// cellsLoss is a bound of the relative error that cancelling within unique rows costs
// the variances of a kind: rounding in a cell acts on them as rounding of the size of
// what was added up for it does,
//
//	eps max_j V_jj(size added up) / V_jj
//
// It also returns the estimate with what bounds its noise.
func (x *solution) cellsLoss(kind string, sums *accum.RowSums, i int) (r *estimate, loss float64) {
	r = x.hc(kind, sums.Meats[i], sums.MeatBlocks[i])
	all := x.hc(kind, sums.Gross[i], sums.GrossBlocks[i])
	net, gross := x.rawVariances(r), x.rawVariances(all)
	floor := x.zeroVariance()
	r.noise = make([]float64, len(net))
	for j := range net {
		if math.IsNaN(x.est[j]) || math.IsNaN(net[j]) || math.IsInf(net[j], 0) {
			continue // powers of 1/(1-h) beyond float64 are not lost by cancelling
		}
		r.noise[j] = 64 * 0x1p-53 * gross[j] / r.factor
		if net[j] <= r.factor*r.noise[j] && r.noise[j] <= harmless(floor[j]) {
			continue // zero
		}
		if q := gross[j] / max(net[j], floor[j]); q >= 0 {
			loss = max(loss, 0x1p-53*q)
		} else {
			loss = math.Inf(1)
		}
	}
	if x.apart == nil {
		r.gross = absolute(all.meat)
	}
	return r, loss
}

// rawVariances are those of the coefficients in units of v.
func (x *solution) rawVariances(r *estimate) []float64 {
	v := sandwichDiagonal(x.wAlias, r.v, x.k())
	if x.apart != nil {
		own, _ := x.apartVariances(r.apart)
		for _, y := range own {
			v = append(v, r.apart.scale*y)
		}
	}
	return v
}

// LeverageSummary tells how the leverages h of the rows are spread: they add up to k,
// so that their mean is k/N, and rows of more than two or three times the mean deserve
// a look (Hoaglin & Welsch 1978, doi:10.1080/00031305.1978.10479237). A row of leverage
// 1 decides a coefficient alone. Counts are of rows, as often as a frequency says.
type LeverageSummary struct {
	Largest         Number    `json:"largest"`
	Mean            Number    `json:"mean"`
	AboveTwice      int64     `json:"above_twice"` // of the mean
	AboveThreeTimes int64     `json:"above_three_times"`
	AboveHalf       int64     `json:"above_half"` // above 0.5
	Above99         int64     `json:"above_0_99"`
	Highest         []HighRow `json:"highest"` // rows of the largest, empty by unique rows
}

// HighRow is the leverage of a row and its place in the input.
type HighRow struct {
	Leverage Number `json:"leverage"`
	Row      string `json:"row"`
}

// leverageLimits are the leverages above which rows are counted.
func (x *solution) leverageLimits() []float64 {
	mean := float64(int64(x.rank())+x.swept()) / float64(x.n)
	return []float64{2 * mean, 3 * mean, 0.5, 0.99}
}

// leverageSummary is nil where no kind asked for leverages.
func (f *fitter) leverageSummary() *LeverageSummary {
	if f.sums == nil || len(f.sums.Over) == 0 {
		return nil
	}
	s := &LeverageSummary{Largest: Number(f.sums.MaxLeverage), Mean: Number(1 / f.perTerm()), Highest: []HighRow{},
		AboveTwice: f.sums.Over[0], AboveThreeTimes: f.sums.Over[1], AboveHalf: f.sums.Over[2], Above99: f.sums.Over[3]}
	if f.sums.LoneRows > 0 {
		s.Largest = 1
	}
	for _, h := range f.sums.Highest {
		s.Highest = append(s.Highest, HighRow{Number(min(1, h.Leverage)), h.Position.String()})
	}
	return s
}

// cellsEnough reports whether the kinds summed from unique rows have kept their digits.
func (f *fitter) cellsEnough() bool {
	for i, k := range f.kinds {
		_, loss := f.sol.cellsLoss(k, f.sums, i)
		f.loss = max(f.loss, loss)
	}
	return f.loss <= lossLimit
}

// kindAt is the place of a kind among the meats.
func (f *fitter) kindAt(kind string) int {
	if kind == "hc1" {
		kind = "hc0"
	}
	return slices.Index(f.kinds, kind)
}
