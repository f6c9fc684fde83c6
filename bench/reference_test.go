package bench

import (
	"context"
	"slices"

	"github.com/tallrow/tallrow/bench/reference"
)

func referenceCases(d *dataset) []benchCase {
	t := d.table()
	return []benchCase{
		{
			name:  "what=encoding-csv+strconv",
			bytes: d.sizes["csv"],
			run: func(context.Context) (outcome, error) {
				p, err := reference.ParseCSV(d.files["csv"], append(slices.Clone(terms), "minutes"))
				return outcome{rows: p.Rows, used: p.Complete, sums: p.Sums}, err
			},
		},
		{
			name:  "what=gonum-in-memory",
			bytes: int64(8 * len(t.Cols) * t.Rows),
			run: func(context.Context) (outcome, error) {
				_, se, err := reference.HC1(t, 1)
				return outcome{rows: d.rows, used: int64(t.Rows), se: se}, err
			},
		},
	}
}
