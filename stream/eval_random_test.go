package stream

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"
)

// batchOf lays rows out as a batch for the uses of a design.
func batchOf(rows []refRow, schema *Schema, uses []Use) *Batch {
	b := &Batch{Rows: len(rows)}
	for i := range rows {
		b.Marks = append(b.Marks, int64(1000+i))
	}
	for _, u := range uses {
		c := schema.Columns[u.Column]
		v := Vector{Kind: c.Kind}
		if u.AsNumber {
			v.Kind = Float64
		}
		index := map[string]int32{}
		if v.Kind == Text {
			v.Dict = &Dict{}
		}
		for i, row := range rows {
			cell := row[c.Name]
			switch v.Kind {
			case Float64:
				e := refEval{row: row}
				x := math.NaN()
				if f := e.number(&node{op: opColumn, str: c.Name}); f != nil {
					x = f.(float64)
				}
				v.F64 = append(v.F64, x)
				continue
			case Text:
				code := int32(-1)
				if s, ok := cell.(string); ok {
					if code, ok = index[s]; !ok {
						code = int32(len(v.Dict.Values))
						index[s] = code
						v.Dict.Values = append(v.Dict.Values, s)
					}
				}
				v.Code = append(v.Code, code)
				continue
			}
			var x int64
			switch cell := cell.(type) {
			case nil:
				if v.Null == nil {
					v.Null = make([]bool, len(rows))
				}
				v.Null[i], x = true, 77
			case int64:
				x = cell
			case uint64:
				x = int64(cell)
			case bool:
				if cell {
					x = 1
				}
			case time.Time:
				x = cell.UnixNano()
			default:
				panic(fmt.Sprintf("%T in %s", cell, c.Name))
			}
			v.I64 = append(v.I64, x)
		}
		b.Cols = append(b.Cols, v)
	}
	return b
}

// randomRows makes rows of the quay schema, each cell missing with probability
// gaps.
func randomRows(r *rand.Rand, n int, gaps float64, zone *time.Location) []refRow {
	rows := make([]refRow, n)
	pick := func(v ...any) any { return v[r.IntN(len(v))] }
	for i := range rows {
		row := refRow{
			"minutes": math.Round(r.NormFloat64()*40) / 4,
			"pallets": float64(r.IntN(9) - 2),
			"tonnes":  pick(0.0, math.Copysign(0, -1), 1.0, 2.5, -1.0, r.Float64()),
			"crew":    pick(int64(3), int64(4), int64(-5), int64(1<<53+1), int64(math.MinInt64)),
			"id":      pick(uint64(1<<53), uint64(1<<53+1), uint64(math.MaxUint64), uint64(7)),
			"wet":     r.IntN(2) == 0, "night": r.IntN(2) == 0,
			"barge": pick("a", "b", "", "ab"), "crane": pick("a", "k9", "b"),
			"t":    time.Unix(r.Int64N(4e9)-2e9, 0).In(zone),
			"left": time.Unix(r.Int64N(4e9)-2e9, 0).UTC(),
			"day":  time.Unix(86400*(r.Int64N(40000)-20000), 0).UTC(),
		}
		for _, name := range []string{"minutes", "pallets", "tonnes", "crew", "id", "wet", "night", "barge", "crane", "t", "left", "day"} {
			if r.Float64() < gaps {
				row[name] = nil
			}
		}
		rows[i] = row
	}
	return rows
}

// randomNumber and randomTruth write random expressions.
func randomNumber(r *rand.Rand, depth int) string {
	if depth == 0 || r.IntN(4) == 0 {
		leaves := []string{"pallets", "tonnes", "crew", "minutes", "wet", "id", "2", "0.5", "hour(t)", "weekday(left)", "month(day)", "hour(left)", "weekday(t)", "month(t)",
			"t", "date(left)", "pow(pallets, 2)", "pow(tonnes, 3)", "pow(pallets, -1)", "pow(minutes, 7)", "pow(pallets, tonnes)", "pow(tonnes, 0)"}
		return leaves[r.IntN(len(leaves))]
	}
	a := func() string { return randomNumber(r, depth-1) }
	switch r.IntN(16) {
	case 0:
		return "log(" + a() + ")"
	case 1:
		return "sqrt(" + a() + ")"
	case 2:
		return "exp(" + a() + " / 4)"
	case 3:
		return "abs(" + a() + ")"
	case 4:
		return "min(" + a() + ", " + a() + ", 3)"
	case 5:
		return "max(" + a() + ", " + a() + ")"
	case 6:
		return "hinge(" + a() + ", 2)"
	case 7:
		return "-(" + a() + ")"
	case 8:
		return "(" + randomTruth(r, depth-1) + ")"
	case 9, 10:
		return "(" + a() + ") / (" + a() + ")"
	case 11, 12:
		return "(" + a() + ") * (" + a() + ")"
	case 13:
		return a() + " - (" + a() + ")"
	}
	return a() + " + " + a()
}

func randomTruth(r *rand.Rand, depth int) string {
	if depth == 0 || r.IntN(5) == 0 {
		leaves := []string{"wet", "night", `barge == "a"`, `"b" <= barge`, "barge < crane", "barge != crane", `t < "2001-05-06T07:08"`, `t >= "1999-12-31T23:59:59Z"`,
			`"1985-02-03" > left`, `day == "1970-01-01"`, "date(t) >= date(left)", `date(t) < "1990-01-01"`, "id == 9007199254740993", "id > 9007199254740992",
			"9007199254740993 <= crew", "crew > -9007199254740993", "id < 1e300", "crew == 4", "missing(barge)", "missing(log(pallets))", "missing(t)", "missing(crew)", "true", "false",
			"crew >= -9223372036854775808", "id <= 18446744073709551614.0", "crew < 9007199254740993.5"}
		return leaves[r.IntN(len(leaves))]
	}
	switch r.IntN(5) {
	case 0:
		return "!(" + randomTruth(r, depth-1) + ")"
	case 1:
		return "(" + randomTruth(r, depth-1) + ") && (" + randomTruth(r, depth-1) + ")"
	case 2:
		return "(" + randomTruth(r, depth-1) + ") || (" + randomTruth(r, depth-1) + ")"
	}
	o := []string{"<", "<=", ">", ">=", "==", "!="}[r.IntN(6)]
	return "(" + randomNumber(r, depth-1) + ") " + o + " (" + randomNumber(r, depth-1) + ")"
}
