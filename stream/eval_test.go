package stream

import (
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"
)

func amsterdam(t testing.TB) *time.Location {
	zone, err := time.LoadLocation("Europe/Amsterdam")
	if err != nil {
		t.Fatal(err)
	}
	return zone
}

func rowPosition(mark int64) Position { return Position{File: "quays.csv", Row: mark - 999} }

// Random designs on random batches, against the row-by-row reference: the same
// rows, the same bits, the same counts, the same row in errors.
func TestEvalAgainstReference(t *testing.T) {
	designs := 1000
	if testing.Short() {
		designs = 200
	}
	r := rand.New(rand.NewPCG(1, 2))
	schema := quays()
	zones := []*time.Location{time.UTC, amsterdam(t), time.FixedZone("", -12345)}
	categories := []string{"barge", "crane", "crew", "id", "wet", "tonnes", "day", "date(t)", "hour(left)", "pallets > 2", "t"}
	evaluated, failed, used := 0, 0, int64(0)
	for evaluated < designs {
		zone := zones[r.IntN(len(zones))]
		spec := Spec{Outcome: randomNumber(r, 1), Zone: zone, Stop: r.IntN(20) == 0}
		for range r.IntN(4) {
			spec.Terms = append(spec.Terms, randomNumber(r, r.IntN(4)))
		}
		for range r.IntN(3) {
			c := categories[r.IntN(len(categories))]
			term := "each(" + c + ")"
			if r.IntN(2) == 0 {
				term += " * (" + randomNumber(r, 1) + ")"
			}
			if d := categories[r.IntN(len(categories))]; d != c && r.IntN(3) == 0 {
				term = "each(" + d + ") * " + term
			}
			spec.Terms = append(spec.Terms, term)
		}
		for range r.IntN(3) {
			spec.Keys = append(spec.Keys, append(categories, "pallets / tonnes")[r.IntN(len(categories)+1)])
		}
		if r.IntN(2) == 0 {
			spec.Where = randomTruth(r, 3)
		}
		switch r.IntN(6) {
		case 0:
			spec.Weight, spec.WeightKind = "abs(pallets)", Frequency
		case 1:
			spec.Weight, spec.WeightKind = "abs("+randomNumber(r, 2)+")", Sampling
		case 2:
			spec.Weight, spec.WeightKind = "tonnes", Precision
		}
		d, err := NewDesign(spec, schema)
		if err != nil {
			// Random terms may coincide or read no column; anything else is a bug.
			if m := err.Error(); !strings.Contains(m, "is there twice") && !strings.Contains(m, "reads no column") && !strings.Contains(m, "also a term") && !strings.Contains(m, "cannot be compared") {
				t.Fatalf("%+v: %v", spec, err)
			}
			continue
		}
		evaluated++
		e := d.NewEvaluator()
		var total Tally
		var out Block
		for range 2 {
			n := []int{0, 1, 5, 60, 511, 512, 530}[r.IntN(7)]
			gaps := []float64{0, 0.01, 0.2}[r.IntN(3)]
			rows := randomRows(r, n, gaps, zone)
			want := reference(spec, schema, rows, zone)
			b := batchOf(rows, schema, d.Uses())
			err := e.Eval(b, rowPosition, &out)
			if err != nil || want.badRow >= 0 {
				failed++
				var re *RowError
				if !errors.As(err, &re) || want.badRow < 0 || re.Pos.Row != int64(want.badRow+1) || re.Pos.Column == "" {
					t.Fatalf("%+v: error %v, want one in row %d", spec, err, want.badRow)
				}
				continue
			}
			used += want.tally.Used
			compareBlock(t, d, &out, &want)
			total.Add(&want.tally)
			if !sameTally(&e.Tally, &total) {
				t.Fatalf("%+v:\ncounts %+v\nwant   %+v", spec, e.Tally, total)
			}
			if t.Failed() {
				t.Fatalf("in %+v", spec)
			}
		}
	}
	if used < int64(designs)*10 || failed < designs/50 {
		t.Errorf("only %d rows used and %d errors met in %d designs", used, failed, designs)
	}
}

func sameTally(a, b *Tally) bool {
	return a.Used == b.Used && a.Excluded == b.Excluded && a.Missing == b.Missing && a.ZeroWeight == b.ZeroWeight &&
		maps.Equal(a.MissingBy, b.MissingBy) && maps.Equal(a.NoValue, b.NoValue)
}

func compareBlock(t *testing.T, d *Design, out *Block, want *refResult) {
	t.Helper()
	if out.Rows != len(want.rows) {
		t.Fatalf("%d rows, want %d", out.Rows, len(want.rows))
	}
	if out.Rows == 0 {
		return
	}
	for i, row := range want.rows {
		if out.Marks[i] != int64(1000+row) {
			t.Fatalf("row %d has mark %d, want %d", i, out.Marks[i], 1000+row)
		}
	}
	for j, text := range d.Dense {
		for i, v := range out.X[j][:out.Rows] {
			if w := want.dense[text][i]; math.Float64bits(v) != math.Float64bits(w) {
				t.Fatalf("%s in row %d is %v, want %v", text, want.rows[i], v, w)
			}
		}
	}
	for i, w := range want.w {
		if out.Weight[i] != w {
			t.Fatalf("weight %v, want %v", out.Weight[i], w)
		}
	}
	keys := func(cols []KeyColumn, got []Vector, want [][]any) {
		for j, c := range cols {
			for i, w := range want[j] {
				if label, wantLabel := FormatKey(c, d.Spec.Zone, got[j].Key(i)), refLabel(c, w); label != wantLabel || got[j].Kind != c.Kind || got[j].Null != nil {
					t.Fatalf("key %s is %s, want %s", c.Text, label, wantLabel)
				}
			}
		}
	}
	var cats []KeyColumn
	for _, c := range d.Categories {
		cats = append(cats, c.KeyColumn)
	}
	keys(cats, out.Cat, want.cat)
	keys(d.Keys, out.Key, want.key)
}

// refLabel is the label of a key by other means than FormatKey.
func refLabel(c KeyColumn, v any) string {
	switch v := v.(type) {
	case time.Time:
		switch {
		case c.DateOnly:
			return v.Format(time.DateOnly)
		case c.Zoned:
			return v.Format(time.RFC3339Nano)
		}
		return v.Format("2006-01-02T15:04:05")
	case float64:
		text, _ := json.Marshal(v + 0) // the shortest decimal, and no -0
		return string(text)
	}
	return fmt.Sprint(v)
}

// The tables of three-valued logic, as SQL defines AND, OR and NOT.
func TestLogicTable(t *testing.T) {
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "a", Kind: Bool}, {Name: "b", Kind: Bool}}}
	T, F, U := any(true), any(false), any(nil)
	for _, c := range []struct{ a, b, and, or, not any }{
		{T, T, T, T, F}, {T, F, F, T, F}, {T, U, U, T, F},
		{F, T, F, T, T}, {F, F, F, F, T}, {F, U, F, U, T},
		{U, T, U, T, U}, {U, F, F, U, U}, {U, U, U, U, U},
	} {
		rows := []refRow{{"y": 1.0, "a": c.a, "b": c.b}}
		for text, want := range map[string]any{"a && b": c.and, "a || b": c.or, "!a": c.not} {
			if got := one(t, text, schema, rows, nil); got != want {
				t.Errorf("%s for %v, %v is %v, want %v", text, c.a, c.b, got, want)
			}
		}
	}
}

// one evaluates a condition on one row: true, false or nil.
func one(t *testing.T, text string, schema *Schema, rows []refRow, zone *time.Location) any {
	t.Helper()
	holds := func(where string) bool {
		d, err := NewDesign(Spec{Outcome: "y", Where: where, Zone: zone}, schema)
		if err != nil {
			t.Fatal(err)
		}
		var out Block
		if err := d.NewEvaluator().Eval(batchOf(rows, schema, d.Uses()), rowPosition, &out); err != nil {
			t.Fatal(err)
		}
		return out.Rows == 1
	}
	switch yes, no := holds(text), holds("!("+text+")"); {
	case yes && !no:
		return true
	case no && !yes:
		return false
	case yes && no:
		t.Fatalf("%s and its contrary hold", text)
	}
	return nil
}

func TestExactIds(t *testing.T) {
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "i", Kind: Int64}, {Name: "u", Kind: Uint64}}}
	rows := []refRow{{"y": 1.0, "i": int64(1<<53 + 1), "u": uint64(math.MaxUint64)}}
	for text, want := range map[string]bool{
		"i == 9007199254740993": true, "i == 9007199254740992": false, "i > 9007199254740992": true, "i < 9007199254740994": true,
		"i >= 9007199254740994": false, "9007199254740993 == i": true, "9007199254740992 < i": true, "i != 9007199254740993": false,
		"i < 9223372036854775808": true, "i > -99999999999999999999": true, "i == 1e30": false,
		"u == 18446744073709551615": true, "u > 18446744073709551614": true, "u < 18446744073709551616": true, "u >= -9007199254740993": true,
	} {
		if got := one(t, text, schema, rows, nil); got != want {
			t.Errorf("%s is %v, want %v", text, got, want)
		}
	}
}

// Hours, weekdays, months and days against package time, over both changes of
// the clock and before 1970.
func TestTimesAgainstTime(t *testing.T) {
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "t", Kind: Time, Zoned: true}, {Name: "w", Kind: Time}}}
	var rows []refRow
	for _, start := range []string{
		"2024-03-31T00:50:00Z", "2024-10-27T00:50:00Z", "1677-09-21T12:00:00Z", "1880-01-01T00:00:00Z", "1937-06-30T23:00:00Z", "1969-12-28T00:00:00Z",
		"2024-03-30T20:00:00Z", "2024-10-26T20:00:00Z", "2262-04-09T00:00:00Z",
	} {
		at, err := time.Parse(time.RFC3339, start)
		if err != nil {
			t.Fatal(err)
		}
		step := 37 * time.Minute
		if at.Minute() == 50 { // just before the clock changes
			step = 3 * time.Minute
		}
		for i := range 70 {
			v := at.Add(time.Duration(i)*step + time.Duration(i)*123456789)
			rows = append(rows, refRow{"y": 1.0, "t": v, "w": v})
		}
	}
	for _, zone := range []*time.Location{nil, amsterdam(t), time.FixedZone("", 5*3600+1800), time.FixedZone("", -39600)} {
		in := zone
		if in == nil {
			in = time.UTC
		}
		spec := Spec{Outcome: "y", Zone: zone, Terms: []string{"hour(t)", "weekday(t)", "month(t)", "hour(w)", "weekday(w)", "month(w)", "date(t)", "t"}, Keys: []string{"date(t)", "date(w)"}}
		d, err := NewDesign(spec, schema)
		if err != nil {
			t.Fatal(err)
		}
		e := d.NewEvaluator()
		for first := 0; first < len(rows); first += 100 {
			part := rows[first:min(first+100, len(rows))]
			var out Block
			if err := e.Eval(batchOf(part, schema, d.Uses()), rowPosition, &out); err != nil {
				t.Fatal(err)
			}
			if out.Rows != len(part) {
				t.Fatal("rows lost")
			}
			for i, row := range part {
				v, w := row["t"].(time.Time).In(in), row["w"].(time.Time).UTC()
				if v.Year() < 1678 {
					continue // the first day has no midnight in the range
				}
				day := time.Date(v.Year(), v.Month(), v.Day(), 0, 0, 0, 0, time.UTC)
				for j, want := range []float64{
					float64(v.Hour()), float64((v.Weekday() + 6) % 7), float64(v.Month()),
					float64(w.Hour()), float64((w.Weekday() + 6) % 7), float64(w.Month()), float64(day.Unix()),
				} {
					if got := out.X[j][i]; got != want {
						t.Fatalf("%s of %v in %v is %v, want %v", d.Dense[j], v, zone, got, want)
					}
				}
				exact := refEval{row: row}
				want := exact.number(&node{op: opColumn, str: "t"}).(float64)
				if got := out.X[7][i]; math.Abs(got-want) > math.Nextafter(math.Abs(want), math.Inf(1))-math.Abs(want) {
					t.Fatalf("seconds of %v: %v, want %v within one unit in the last place", v, got, want)
				}
				if got, want := FormatKey(d.Keys[0], zone, out.Key[0].Key(i)), v.Format(time.DateOnly); got != want {
					t.Fatalf("date(t) of %v is %s, want %s", v, got, want)
				}
				if got, want := FormatKey(d.Keys[1], zone, out.Key[1].Key(i)), w.Format(time.DateOnly); got != want {
					t.Fatalf("date(w) of %v is %s, want %s", w, got, want)
				}
			}
		}
	}
}

// A text without zone means the zone of the run when compared with instants.
func TestTimeLiterals(t *testing.T) {
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "t", Kind: Time, Zoned: true}, {Name: "w", Kind: Time}}}
	at := time.Date(2024, 1, 5, 6, 0, 0, 0, time.UTC)
	rows := []refRow{{"y": 1.0, "t": at, "w": at}}
	for text, want := range map[string]bool{
		`t == "2024-01-05T07:00"`: true, `t == "2024-01-05 07:00"`: true, `t == "2024-01-05T06:00:00Z"`: true, `t == "2024-01-05T06:00:00.000Z"`: true,
		`t == "2024-01-05T01:00:00-05:00"`: true, `t < "2024-01-05T07:00:00.5"`: true, `t == "2024-01-05T06:00"`: false,
		`w == "2024-01-05T06:00"`: true, `w > "2024-01-05"`: true, `date(t) == "2024-01-05"`: true, `"2024-01-06" > w`: true,
		`date(t) == date(w)`: true, `hour(t) == 7`: true, `hour(w) == 6`: true,
	} {
		if got := one(t, text, schema, rows, amsterdam(t)); got != want {
			t.Errorf("%s is %v, want %v", text, got, want)
		}
	}
}

func TestRowErrors(t *testing.T) {
	inf := math.Inf(1)
	good := refRow{"minutes": 3.0, "pallets": 2.0, "tonnes": 4.0, "wet": true, "barge": "a"}
	with := func(name string, v any) refRow { r := maps.Clone(good); r[name] = v; return r }
	for _, c := range []struct {
		spec Spec
		row  refRow
		want string // "" for none
	}{
		{Spec{Outcome: "minutes", Terms: []string{"pallets"}}, with("pallets", inf), "quays.csv row 2 column pallets: found +Inf, want a finite number"},
		{Spec{Outcome: "minutes", Terms: []string{"pallets > 3"}}, with("pallets", -inf), "quays.csv row 2 column pallets: found -Inf, want a finite number"},
		{Spec{Outcome: "minutes", Keys: []string{"tonnes"}}, with("tonnes", inf), "quays.csv row 2 column tonnes: found +Inf, want a finite number"},
		{Spec{Outcome: "minutes", Terms: []string{"tonnes", "wet*exp(pallets)"}}, with("pallets", 1000.0), "quays.csv row 2 column wet * exp(pallets): found a value beyond float64 (1.8e308), want a finite number"},
		{Spec{Outcome: "exp(pallets) - exp(pallets)"}, with("pallets", 1000.0), "quays.csv row 2 column exp(pallets) - exp(pallets): found a value beyond float64 (1.8e308), want a finite number"},
		{Spec{Outcome: "minutes", Terms: []string{"each(barge) * exp(pallets)"}}, with("pallets", 1000.0), "quays.csv row 2 column each(barge) * exp(pallets): found a value beyond float64 (1.8e308), want a finite number"},
		{Spec{Outcome: "minutes", Terms: []string{"each(exp(pallets))"}}, with("pallets", 1000.0), "quays.csv row 2 column each(exp(pallets)): found a value beyond float64 (1.8e308), want a finite number"},
		{Spec{Outcome: "minutes", Keys: []string{"exp(pallets)"}}, with("pallets", 1000.0), "quays.csv row 2 column exp(pallets): found a value beyond float64 (1.8e308), want a finite number"},
		{Spec{Outcome: "minutes", Weight: "tonnes - 2", WeightKind: Precision}, with("tonnes", 1.0), "quays.csv row 2 column tonnes - 2: found -1, want a finite weight of zero or more"},
		{Spec{Outcome: "minutes", Weight: "tonnes", WeightKind: Precision}, with("tonnes", inf), "quays.csv row 2 column tonnes: found +Inf, want a finite weight of zero or more"},
		{Spec{Outcome: "minutes", Weight: "tonnes/2", WeightKind: Frequency}, with("tonnes", 5.0), "quays.csv row 2 column tonnes / 2: found 2.5, want a whole number, as a frequency weight counts rows"},
		{Spec{Outcome: "minutes", Terms: []string{"pallets"}, Stop: true}, with("pallets", nil), "quays.csv row 2 column pallets: found a missing cell, want a value, as missing cells stop the run"},
		{Spec{Outcome: "minutes", Terms: []string{"each(barge)"}, Stop: true}, with("barge", nil), "quays.csv row 2 column barge: found a missing cell, want a value, as missing cells stop the run"},
		{Spec{Outcome: "minutes", Terms: []string{"log(pallets)"}, Stop: true}, with("pallets", 0.0), "quays.csv row 2 column log(pallets): found an operation without value, want a value, as missing ones stop the run"},
		// No error: the row or the cell is not used, or the value is right.
		{Spec{Outcome: "minutes", Terms: []string{"pallets"}, Where: "pallets < 1e300"}, with("pallets", inf), ""},
		{Spec{Outcome: "minutes", Terms: []string{"missing(pallets)"}}, with("pallets", inf), ""},
		{Spec{Outcome: "minutes", Terms: []string{"pallets"}, Weight: "tonnes * 0", WeightKind: Precision}, with("pallets", inf), ""},
		{Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}}, refRow{"minutes": 1.0, "pallets": inf}, ""},
		{Spec{Outcome: "minutes", Terms: []string{"pallets"}, Where: "tonnes > 5", Stop: true}, with("pallets", nil), ""},
		{Spec{Outcome: "minutes", Terms: []string{"1 / exp(pallets)"}}, with("pallets", 1000.0), ""},
		{Spec{Outcome: "minutes", Terms: []string{"wet || missing(pallets)"}, Stop: true}, with("pallets", nil), ""},
	} {
		d, err := NewDesign(c.spec, quays())
		if err != nil {
			t.Fatal(err)
		}
		e := d.NewEvaluator()
		var out Block
		err = e.Eval(batchOf([]refRow{good, c.row, c.row}, quays(), d.Uses()), rowPosition, &out)
		if c.want == "" {
			if err != nil {
				t.Errorf("%+v: %v", c.spec, err)
			}
			continue
		}
		var re *RowError
		if !errors.As(err, &re) || err.Error() != c.want {
			t.Errorf("got  %v\nwant %s", err, c.want)
		}
		if e.Tally.Read() != 0 {
			t.Errorf("a failed batch is counted: %+v", e.Tally)
		}
	}
}

func TestTallyNames(t *testing.T) {
	spec := Spec{
		Outcome: "minutes", Terms: []string{"log(pallets)", "2 * log(pallets) / tonnes", "each(barge) * log(pallets)", "missing(crane) * tonnes", "each(crew)"},
		Where: "log(tonnes) > 0 || true", Keys: []string{"crane"},
	}
	d, err := NewDesign(spec, quays())
	if err != nil {
		t.Fatal(err)
	}
	row := func(minutes, pallets, tonnes, crew, barge, crane any) refRow {
		return refRow{"minutes": minutes, "pallets": pallets, "tonnes": tonnes, "crew": crew, "barge": barge, "crane": crane}
	}
	rows := []refRow{
		row(1.0, 2.0, 3.0, int64(4), "a", "k1"),
		row(1.0, 0.0, 3.0, int64(4), "a", "k1"), // no log
		row(1.0, 0.0, 0.0, int64(4), "a", "k1"), // no log, and nothing left for / to miss
		row(1.0, 2.0, 0.0, int64(4), "a", "k1"), // division by zero
		row(1.0, nil, 3.0, int64(4), nil, "k1"), // two cells
		row(nil, 0.0, 3.0, nil, "a", nil),       // three cells and no log
	}
	e := d.NewEvaluator()
	var out Block
	if err := e.Eval(batchOf(rows, quays(), d.Uses()), nil, &out); err != nil {
		t.Fatal(err)
	}
	want := Tally{Used: 1, Missing: 5,
		MissingBy: map[string]int64{
			"log(pallets)": 2, "2 * log(pallets) / tonnes": 3, "each(barge) * log(pallets)": 2,
			"pallets": 1, "barge": 1, "minutes": 1, "crew": 1, "crane": 1,
		},
		NoValue: map[string]int64{"log(pallets)": 3, "2 * log(pallets) / tonnes": 1},
	}
	if !sameTally(&e.Tally, &want) {
		t.Errorf("got  %+v\nwant %+v", e.Tally, want)
	}
	// An operation without value that does not matter drops no row, but counts.
	d, err = NewDesign(Spec{Outcome: "minutes", Terms: []string{"wet || log(pallets) > 1"}}, quays())
	if err != nil {
		t.Fatal(err)
	}
	e = d.NewEvaluator()
	if err := e.Eval(batchOf([]refRow{{"minutes": 1.0, "wet": true, "pallets": 0.0}}, quays(), d.Uses()), nil, &out); err != nil {
		t.Fatal(err)
	}
	if masked := (Tally{Used: 1, NoValue: map[string]int64{"log(pallets)": 1}}); !sameTally(&e.Tally, &masked) {
		t.Errorf("got  %+v\nwant %+v", e.Tally, masked)
	}
	var sum Tally
	sum.Add(&want)
	sum.Add(&want)
	if sum.Read() != 12 || sum.MissingBy["pallets"] != 2 || want.MissingBy["pallets"] != 1 {
		t.Errorf("sum %+v of two %+v", sum, want)
	}
}

// Whole powers are the exact power rounded once, but for a few that fall within
// 2^-100 of a tie.
func TestPowInt(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	worse := 0
	for range 3000 {
		x := math.Ldexp(r.Float64()+0.5, r.IntN(9)-4)
		if r.IntN(2) == 0 {
			x = -x
		}
		n := int64(r.IntN(2*maxPowInt+1) - maxPowInt)
		if n == 0 {
			continue
		}
		if got, want := powInt(x, n), refPow(x, float64(n)); got != want {
			t.Errorf("powInt(%v, %d) = %v, want %v", x, n, got, want)
		}
		if math.Pow(x, float64(n)) != refPow(x, float64(n)) {
			worse++
		}
	}
	if worse == 0 {
		t.Error("math.Pow is as exact: powInt is of no use any more")
	}
	for _, n := range []int64{-64, -3, -2, 3, 4, 64} {
		for _, x := range []float64{0, math.Copysign(0, -1), 1, -1, math.Inf(1), math.Inf(-1), 1e300, -1e300, 1e-300, 5e-324, 1e5, 1e-5} {
			got, want := powInt(x, n), math.Pow(x, float64(n))
			if math.Abs(got-want) > 1e-14*math.Abs(want) || math.Signbit(got) != math.Signbit(want) {
				t.Errorf("powInt(%v, %d) = %v, want %v", x, n, got, want)
			}
		}
		if v := powInt(math.NaN(), n); v == v {
			t.Errorf("powInt(NaN, %d) = %v", n, v)
		}
	}
}

// Bare columns of a clean batch are handed on without a copy, and steady work
// allocates nothing, whatever the rows hold.
func TestEvalAllocatesNothing(t *testing.T) {
	zone := amsterdam(t)
	r := rand.New(rand.NewPCG(5, 6))
	for _, gaps := range []float64{0, 0.1} {
		for _, spec := range []Spec{
			{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}},
			{Outcome: "minutes", Terms: []string{"pallets", "crew * tonnes", "each(barge)*log(pallets)", "hour(t)", "pow(pallets, 3)"}, Where: `barge != "b" || date(t) > "1990-01-01"`,
				Weight: "abs(pallets)", WeightKind: Frequency, Keys: []string{"crane", "date(t)", "tonnes", "id", "hour(left)"}, Zone: zone},
		} {
			d, err := NewDesign(spec, quays())
			if err != nil {
				t.Fatal(err)
			}
			b := batchOf(randomRows(r, BatchRows, gaps, zone), quays(), d.Uses())
			e := d.NewEvaluator()
			var out Block
			run := func() {
				if err := e.Eval(b, rowPosition, &out); err != nil {
					t.Fatal(err)
				}
			}
			run()
			if n := testing.AllocsPerRun(20, run); n != 0 {
				t.Errorf("%q with %v gaps: %v allocations a batch", spec.Terms, gaps, n)
			}
			if gaps == 0 && len(spec.Terms) == 2 {
				for j, u := range d.Uses() {
					name := quays().Columns[u.Column].Name
					for k, text := range d.Dense {
						if text == name && &out.X[k][0] != &b.Cols[j].F64[0] {
							t.Errorf("%s is copied", name)
						}
					}
				}
			}
		}
	}
}

// A segment may append to a dictionary or start another one.
func TestTextDictionaries(t *testing.T) {
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "c", Kind: Text}}}
	d, err := NewDesign(Spec{Outcome: "y", Where: `c == "b"`, Keys: []string{"c"}}, schema)
	if err != nil {
		t.Fatal(err)
	}
	e := d.NewEvaluator()
	dict := &Dict{Values: []string{"a"}}
	feed := func(dict *Dict, codes []int32, want int) {
		t.Helper()
		b := &Batch{Rows: len(codes), Marks: make([]int64, len(codes))}
		for _, u := range d.Uses() {
			if u.Column == 0 {
				b.Cols = append(b.Cols, Vector{Kind: Float64, F64: make([]float64, len(codes))})
			} else {
				b.Cols = append(b.Cols, Vector{Kind: Text, Code: codes, Dict: dict})
			}
		}
		var out Block
		if err := e.Eval(b, nil, &out); err != nil || out.Rows != want {
			t.Errorf("%d rows, %v; want %d", out.Rows, err, want)
		}
		for i := range out.Rows {
			if s := out.Key[0].Key(i).Text; s != "b" {
				t.Errorf("key %q", s)
			}
		}
	}
	feed(dict, []int32{0, -1}, 0)
	dict.Values = append(dict.Values, "b")
	feed(dict, []int32{0, 1, 1}, 2)
	feed(&Dict{Values: []string{"b", "a"}}, []int32{0, 1, -1}, 1)
	feed(nil, []int32{-1}, 0)
}

// A reader that delivers other columns than asked for is told so.
func TestEvalChecksBatch(t *testing.T) {
	d, err := NewDesign(Spec{Outcome: "minutes", Keys: []string{"crew"}}, quays())
	if err != nil {
		t.Fatal(err)
	}
	f, i := Vector{Kind: Float64, F64: make([]float64, 3)}, Vector{Kind: Int64, I64: make([]int64, 3)}
	marks := make([]int64, 3)
	for _, b := range []*Batch{
		{Rows: 3, Cols: []Vector{f}, Marks: marks},
		{Rows: 3, Cols: []Vector{f, f}, Marks: marks},
		{Rows: 3, Cols: []Vector{f, i}, Marks: marks[:2]},
		{Rows: 3, Cols: []Vector{f, {Kind: Int64, I64: marks[:2]}}, Marks: marks},
		{Rows: 3, Cols: []Vector{f, {Kind: Int64, I64: marks, Null: []bool{true}}}, Marks: marks},
	} {
		var out Block
		if err := d.NewEvaluator().Eval(b, nil, &out); err == nil {
			t.Errorf("accepted %+v", b)
		}
	}
}

func BenchmarkEval(b *testing.B) {
	zone := time.UTC
	for _, c := range []struct {
		name string
		gaps float64
		spec Spec
	}{
		{"bare", 0, Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "type", "log"}}},
		{"gaps", 0.02, Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}}},
		{"mixed", 0.02, Spec{Outcome: "minutes", Terms: []string{"pallets", "wet * pallets", "each(barge)", "log(abs(tonnes) + 1)"}, Where: "pallets > 0", Keys: []string{"crane", "date(t)"}}},
	} {
		b.Run("model="+c.name, func(b *testing.B) {
			d, err := NewDesign(c.spec, quays())
			if err != nil {
				b.Fatal(err)
			}
			rows := randomRows(rand.New(rand.NewPCG(7, 8)), BatchRows, c.gaps, zone)
			for _, row := range rows {
				row["type"], row["log"] = 1.5, 2.5
			}
			batch := batchOf(rows, quays(), d.Uses())
			e := d.NewEvaluator()
			var out Block
			for b.Loop() {
				if err := e.Eval(batch, nil, &out); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/BatchRows, "ns/row")
		})
	}
}
