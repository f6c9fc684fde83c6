package streamtest

import (
	"fmt"
	"math"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// quayTable has every kind of column, with missing cells at odd places.
func quayTable(rows int) ([]stream.Column, []stream.Vector) {
	columns := []stream.Column{
		{Name: "minutes", Kind: stream.Float64},
		{Name: "crane", Kind: stream.Int64},
		{Name: "barge_id", Kind: stream.Uint64},
		{Name: "wet", Kind: stream.Bool},
		{Name: "t", Kind: stream.Time, Zoned: true},
		{Name: "quay", Kind: stream.Text},
	}
	cols := make([]stream.Vector, len(columns))
	for j, c := range columns {
		cols[j].Kind = c.Kind
		switch c.Kind {
		case stream.Float64:
			cols[j].F64 = make([]float64, rows)
		case stream.Text:
			cols[j].Code = make([]int32, rows)
			cols[j].Dict = &stream.Dict{Values: []string{"north", "south", "", "ferry | lock"}}
		default:
			cols[j].I64 = make([]int64, rows)
			cols[j].Null = make([]bool, rows)
		}
	}
	for i := range rows {
		cols[0].F64[i] = 30 + float64(i)/7
		if i%11 == 3 {
			cols[0].F64[i] = math.NaN()
		}
		cols[1].I64[i] = int64(i)*1e15 + 9007199254740993
		cols[2].I64[i] = -1 - int64(i) // bits of 2^64-1-i
		cols[3].I64[i] = int64(i / 3 % 2)
		cols[4].I64[i] = int64(i) * 1e12
		for j := 1; j <= 4; j++ {
			cols[j].Null[i] = i%(12+j) == 5 && i < 1600
		}
		cols[5].Code[i] = int32(i%5) - 1
	}
	return columns, cols
}

func TestMemory(t *testing.T) {
	for _, rows := range []int{0, 1, 511, 512, 513, 1700} {
		for _, segment := range []int{1, 512, 700, 100000} {
			if segment == 1 && rows > 1 && rows != 513 || testing.Short() && rows == 1700 {
				continue
			}
			t.Run(fmt.Sprintf("%d rows by %d", rows, segment), func(t *testing.T) {
				columns, cols := quayTable(rows)
				open := func(*testing.T) stream.Source {
					return stream.NewMemory(stream.Schema{Columns: columns}, cols, segment)
				}
				TestSource(t, open, Table{
					Schema: stream.Schema{Columns: columns},
					Cols:   cols,
					Files:  []File{{"memory", rows}},
				})
			})
		}
	}
}
