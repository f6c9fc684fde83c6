package stream

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"
)

// rangeOf bounds a vector: exactly, or loosely, or not at all.
func rangeOf(r *rand.Rand, v *Vector, n int) Range {
	var g Range
	missing := 0
	for i := range n {
		if missingAt(v, i) {
			missing++
		}
	}
	g.AllMissing = missing == n && r.IntN(4) > 0
	g.NoneMissing = missing == 0 && r.IntN(4) > 0
	if missing == n || r.IntN(8) == 0 {
		return g
	}
	g.Bounded = true
	first := true
	for i := range n {
		if missingAt(v, i) {
			continue
		}
		switch v.Kind {
		case Float64:
			if x := v.F64[i]; first {
				g.F64 = [2]float64{x, x}
			} else {
				g.F64 = [2]float64{min(g.F64[0], x), max(g.F64[1], x)}
			}
		case Text:
			if x := v.Dict.Values[v.Code[i]]; first {
				g.Text = [2]string{x, x}
			} else {
				g.Text = [2]string{min(g.Text[0], x), max(g.Text[1], x)}
			}
		case Uint64:
			if x := uint64(v.I64[i]); first {
				g.I64 = [2]int64{int64(x), int64(x)}
			} else {
				g.I64 = [2]int64{int64(min(uint64(g.I64[0]), x)), int64(max(uint64(g.I64[1]), x))}
			}
		default:
			if x := v.I64[i]; first {
				g.I64 = [2]int64{x, x}
			} else {
				g.I64 = [2]int64{min(g.I64[0], x), max(g.I64[1], x)}
			}
		}
		first = false
	}
	if r.IntN(4) == 0 { // looser, as cut texts are
		if t := g.Text[0]; t != "" {
			g.Text[0] = t[:len(t)-1]
		}
		g.Text[1] += "\xff"
		g.F64[0] -= r.Float64()
		g.F64[1] += r.Float64()
	}
	return g
}

// What a filter excludes, the evaluator excludes row by row; and where every row
// is excluded by bounds that are exact and narrow, the filter mostly sees it.
func TestFilterAgainstEvaluator(t *testing.T) {
	testSchema := quays()
	r := rand.New(rand.NewPCG(31, 1))
	zones := []*time.Location{time.UTC, amsterdam(t), time.FixedZone("", -3*3600-1800)}
	n := 20000
	if testing.Short() {
		n = 4000
	}
	excluded, empty := 0, 0
	for k := range n {
		zone := zones[r.IntN(len(zones))]
		where := randomTruth(r, r.IntN(4))
		d, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{"pallets"}, Where: where, Zone: zone}, testSchema)
		if err != nil {
			continue // a constant that is refused
		}
		rows := randomRows(r, 1+r.IntN(4), []float64{0, 0, 0.3, 1}[r.IntN(4)], zone)
		if r.IntN(2) == 0 { // close together
			for i := range rows[1:] {
				for name := range rows[0] {
					if r.IntN(3) > 0 {
						rows[1+i][name] = rows[0][name]
					}
				}
			}
		}
		b := batchOf(rows, testSchema, d.Uses())
		ranges := make([]Range, len(b.Cols))
		for j := range ranges {
			ranges[j] = rangeOf(r, &b.Cols[j], len(rows))
		}
		out := d.Filter()(func(use int) Range { return ranges[use] })
		e := d.NewEvaluator()
		var block Block
		err = e.Eval(b, rowPosition, &block)
		none := err == nil && e.Tally.Excluded == int64(len(rows))
		if out && !none {
			t.Fatalf("case %d: %s excludes %+v\nby %+v,\nthe evaluator counts %+v, %v", k, where, rows, ranges, e.Tally, err)
		}
		if none {
			empty++
		}
		if out {
			excluded++
		}
	}
	t.Logf("%d of %d stretches without a row were seen", excluded, empty)
	if excluded < empty/3 {
		t.Errorf("only %d of %d stretches without a row were seen", excluded, empty)
	}
}

// Filters that must exclude, and near ones that must not.
func TestFilterTable(t *testing.T) {
	testSchema := quays()
	f := func(lo, hi float64) Range { return Range{NoneMissing: true, Bounded: true, F64: [2]float64{lo, hi}} }
	i := func(lo, hi int64) Range { return Range{Bounded: true, I64: [2]int64{lo, hi}} }
	at := func(s string) int64 {
		v, err := time.Parse(time.RFC3339, s)
		if err != nil {
			t.Fatal(err)
		}
		return v.UnixNano()
	}
	days := func(lo, hi string) Range { return i(at(lo), at(hi)) }
	text := func(lo, hi string) Range { return Range{Bounded: true, Text: [2]string{lo, hi}} }
	zone := amsterdam(t)
	big := int64(1) << 53
	for _, tc := range []struct {
		where string
		cells map[string]Range
		want  bool
	}{
		{"pallets > 4", map[string]Range{"pallets": f(1, 4)}, true},
		{"pallets >= 4", map[string]Range{"pallets": f(1, 4)}, false},
		{"!(pallets <= 4)", map[string]Range{"pallets": f(1, 4)}, true},
		{"pallets == 3", map[string]Range{"pallets": f(4, 9)}, true},
		{"pallets == 3", map[string]Range{"pallets": f(2, 9)}, false}, // there may be a 3
		{"pallets != 3", map[string]Range{"pallets": f(3, 3)}, true},
		{"pallets != 3", map[string]Range{"pallets": f(3, 3.5)}, false},
		{"pallets > 4", map[string]Range{"pallets": {}}, false},
		{"pallets > 4", map[string]Range{"pallets": {AllMissing: true}}, true},
		{"pallets > 4 || tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(0, 5)}, false},
		{"pallets > 4 || tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(0, 4)}, true},
		{"pallets > 4 && tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(0, 5)}, true},
		{"pallets > 4 && tonnes > 4", map[string]Range{"pallets": f(1, 5), "tonnes": {}}, false},
		{"!(pallets > 4 && tonnes > 4)", map[string]Range{"pallets": f(5, 6), "tonnes": f(5, 6)}, true},
		{"missing(pallets)", map[string]Range{"pallets": f(1, 4)}, true},
		{"missing(pallets)", map[string]Range{"pallets": {Bounded: true, F64: [2]float64{1, 4}}}, false},
		{"!missing(pallets)", map[string]Range{"pallets": {AllMissing: true}}, true},
		{"pallets * tonnes > 20", map[string]Range{"pallets": f(1, 4), "tonnes": f(-1, 5)}, true},
		{"pallets / tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(1, 5)}, true},
		{"pallets / tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(0, 5)}, false},
		{"pallets / tonnes > 4", map[string]Range{"pallets": f(1, 4), "tonnes": f(math.Copysign(0, -1), 5)}, false},
		{"sqrt(pallets) > 2", map[string]Range{"pallets": f(-9, 4)}, true},
		{"abs(pallets) < 2", map[string]Range{"pallets": f(2, 4)}, true},
		{"log(pallets) > 90", map[string]Range{"pallets": f(1, 4)}, false}, // not known
		{"pallets + tonnes > 1", map[string]Range{"pallets": f(math.Inf(-1), 0), "tonnes": f(0, 0)}, false},
		{"wet", map[string]Range{"wet": f(0, 0)}, true},
		{"!wet", map[string]Range{"wet": f(0, 0)}, false},
		{"wet && !wet", map[string]Range{"wet": f(0, 1)}, false},
		{"barge == \"b\"", map[string]Range{"barge": text("ba", "c")}, true},
		{"barge == \"b\"", map[string]Range{"barge": text("b", "c")}, false},
		{"barge < \"b\"", map[string]Range{"barge": text("b", "c")}, true},
		{"barge > \"\\xff\"", map[string]Range{"barge": text("", "\xff")}, true},
		{"barge == crane", map[string]Range{"barge": text("a", "b"), "crane": text("c", "d")}, true},
		{"id > 9007199254740993", map[string]Range{"id": i(0, big+1)}, true},
		{"id > 9007199254740992", map[string]Range{"id": i(0, big+1)}, false},
		{"id > 18446744073709551614", map[string]Range{"id": i(0, -2)}, true}, // -2 is that bit pattern
		{"id > 18446744073709551614", map[string]Range{"id": i(0, -1)}, false},
		{"crew < -9007199254740993", map[string]Range{"crew": i(-big-1, 0)}, true},
		{"crew < -9007199254740992", map[string]Range{"crew": i(-big-1, 0)}, false},
		{"left < \"2024-05-01\"", map[string]Range{"left": days("2024-05-01T00:00:00Z", "2024-06-01T00:00:00Z")}, true},
		{"left <= \"2024-05-01\"", map[string]Range{"left": days("2024-05-01T00:00:00Z", "2024-06-01T00:00:00Z")}, false},
		// 22:30 UTC is half past midnight of the next day on the quay.
		{"date(t) == \"2024-05-01\"", map[string]Range{"t": days("2024-04-30T22:30:00Z", "2024-04-30T22:40:00Z")}, false},
		{"date(t) == \"2024-04-30\"", map[string]Range{"t": days("2024-04-30T22:30:00Z", "2024-04-30T22:40:00Z")}, true},
		{"t < \"2024-05-01T00:00\"", map[string]Range{"t": days("2024-04-30T22:30:00Z", "2024-04-30T22:40:00Z")}, true},
		{"hour(t) == 23", map[string]Range{"t": days("2024-04-30T22:30:00Z", "2024-04-30T22:40:00Z")}, true},
		{"hour(t) == 0", map[string]Range{"t": days("2024-04-30T22:30:00Z", "2024-04-30T22:40:00Z")}, false},
		// Across the end of summer time the clock shows 2 again.
		{"hour(t) == 3", map[string]Range{"t": days("2024-10-27T00:10:00Z", "2024-10-27T01:50:00Z")}, true},
		{"hour(t) == 2", map[string]Range{"t": days("2024-10-27T00:50:00Z", "2024-10-27T01:10:00Z")}, false},
		{"month(left) == 6", map[string]Range{"left": days("2024-01-01T00:00:00Z", "2024-05-31T23:00:00Z")}, true},
		{"month(left) == 6", map[string]Range{"left": days("2023-01-01T00:00:00Z", "2024-05-31T23:00:00Z")}, false},
		{"weekday(left) == 3", map[string]Range{"left": days("2024-01-01T00:00:00Z", "2024-01-01T23:00:00Z")}, true}, // a Monday
		{"missing(t)", map[string]Range{"t": {NoneMissing: true}}, true},
	} {
		d, err := NewDesign(Spec{Outcome: "minutes", Where: tc.where, Zone: zone}, testSchema)
		if err != nil {
			t.Errorf("%s: %v", tc.where, err)
			continue
		}
		uses := d.Uses()
		got := d.Filter()(func(use int) Range { return tc.cells[testSchema.Columns[uses[use].Column].Name] })
		if got != tc.want {
			t.Errorf("%s of %v: excluded %v", tc.where, fmt.Sprintf("%+v", tc.cells), got)
		}
	}
	d, err := NewDesign(Spec{Outcome: "minutes"}, testSchema)
	if err != nil || d.Filter() != nil {
		t.Errorf("a filter without --where: %v", err)
	}
	if !slices.ContainsFunc(testSchema.Columns, func(c Column) bool { return c.Name == "id" && c.Kind == Uint64 }) {
		t.Error("the table tests no Uint64 column")
	}
}
