package columnar

import (
	"bytes"
	"context"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// designWhere binds a row filter.
func designWhere(t testing.TB, f *File, outcome, where string) *stream.Design {
	t.Helper()
	d, err := stream.NewDesign(stream.Spec{Outcome: outcome, Where: where}, f.Schema())
	if err != nil {
		t.Fatalf("%s: %v", where, err)
	}
	return d
}

// kept scans and returns the rows of each segment that the filter keeps, read or
// not, and which segments were not read.
func kept(t testing.TB, f *File, d *stream.Design, where stream.Filter) (rows []int64, unread []bool) {
	t.Helper()
	ctx := context.Background()
	sc, err := f.ScanWhere(ctx, d.Uses(), where)
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	for {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			return rows, unread
		}
		if err != nil {
			t.Fatal(err)
		}
		if seg.Number() != len(rows) {
			t.Fatalf("segment %d where %d should come", seg.Number(), len(rows))
		}
		unread = append(unread, seg.Tally().Excluded > 0)
		e := d.NewEvaluator()
		var b stream.Batch
		var block stream.Block
		for {
			if err := seg.Read(&b); err == io.EOF {
				break
			} else if err != nil {
				t.Fatal(err)
			}
			if err := e.Eval(&b, seg.Locate, &block); err != nil {
				t.Fatal(err)
			}
		}
		part := f.parts[seg.Number()]
		tally := seg.Tally()
		if tally.Rows != part.rows || tally.Excluded != 0 && tally.Excluded != part.rows {
			t.Fatalf("a segment of %d rows has the tally %+v", part.rows, tally)
		}
		rows = append(rows, part.rows-e.Tally.Excluded-tally.Excluded)
		if err := seg.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// comparison writes a random comparison of a column with one of its cells.
func comparison(r *rand.Rand, c *WriteColumn, v *stream.Vector, rows int) string {
	i := r.IntN(rows)
	o := []string{"<", "<=", ">", ">=", "==", "!="}[r.IntN(6)]
	text := cell(v, i)
	if text == "-" || r.IntN(10) == 0 {
		return "missing(" + c.Name + ")"
	}
	switch c.Kind {
	case stream.Bool:
		return c.Name
	case stream.Text:
		return c.Name + " " + o + " " + text
	case stream.Time:
		k := stream.KeyColumn{Kind: c.Kind, Zoned: c.Zoned, DateOnly: c.DateOnly}
		if math.Abs(float64(v.I64[i])) > 9e18 {
			return "missing(" + c.Name + ")" // before 1678, after 2261
		}
		return c.Name + " " + o + " " + strconv.Quote(stream.FormatKey(k, nil, stream.KeyValue{Bits: uint64(v.I64[i])}))
	}
	if c.Kind == stream.Float64 && r.IntN(3) == 0 {
		return c.Name + " * 2 - 1 " + o + " " + text
	}
	return c.Name + " " + o + " " + text
}

// Random tables and filters: a group that is not read has no row that the filter
// keeps, and reading it not or reading it gives the same counts.
func TestPruneRandom(t *testing.T) {
	r := rand.New(rand.NewPCG(41, 1))
	n := 500
	if testing.Short() {
		n = 100
	}
	names := slices.Sorted(func(yield func(string) bool) {
		for k := range nulls {
			if !yield(k) {
				return
			}
		}
	})
	unreadAll, emptyAll := 0, 0
	for range n {
		rows := 1 + r.IntN(300)
		vecs := quayTable(r, rows, nulls[names[r.IntN(len(names))]])
		if r.IntN(3) > 0 {
			// In order, so that groups have narrow ranges.
			for j := range vecs {
				slices.Sort(vecs[j].F64)
				slices.Sort(vecs[j].I64)
				if quayColumns[j].Kind == stream.Text && r.IntN(2) == 0 {
					slices.SortFunc(vecs[j].Code, func(a, b int32) int {
						if a < 0 || b < 0 {
							return int(b) - int(a)
						}
						return strings.Compare(vecs[j].Dict.Values[a], vecs[j].Dict.Values[b])
					})
				}
			}
		}
		if r.IntN(4) == 0 { // NaN among the numbers of a column that is not optional
			for i := range vecs[7].F64 {
				if r.IntN(3) == 0 {
					vecs[7].F64[i] = math.NaN()
				}
			}
		}
		data := writeTable(t, quayColumns, vecs, rows, WriterOptions{RowsPerGroup: 1 + r.IntN(80), PageBytes: 300})
		f, err := openBytes(data, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		where := ""
		for k := range 1 + r.IntN(3) {
			j := r.IntN(len(quayColumns))
			c := comparison(r, &quayColumns[j], &vecs[j], rows)
			if r.IntN(4) == 0 {
				c = "!(" + c + ")"
			}
			if k > 0 {
				where = "(" + where + []string{") && ", ") || "}[r.IntN(2)]
			}
			where += c
		}
		d := designWhere(t, f, "tonnes", where)
		want, none := kept(t, f, d, nil)
		got, unread := kept(t, f, d, d.Filter())
		if slices.Contains(none, true) {
			t.Fatal("a segment was not read without a filter")
		}
		if !slices.Equal(got, want) {
			t.Fatalf("%s: rows kept by segment %v, read whole %v; not read %v", where, got, want, unread)
		}
		u, err := f.Unread(context.Background(), d.Uses(), d.Filter())
		if err != nil {
			t.Fatal(err)
		}
		count := int64(0)
		for i, out := range unread {
			if out {
				count++
			}
			if want[i] == 0 {
				emptyAll++
			}
		}
		unreadAll += int(count)
		if u.Segments != count || (u.Files == 1) != (count > 0 && count == int64(len(unread))) {
			t.Fatalf("announced %+v, %d of %d segments were not read", u, count, len(unread))
		}
	}
	t.Logf("%d of %d row groups without a row were not read", unreadAll, emptyAll)
	if unreadAll < emptyAll/2 {
		t.Errorf("only %d of %d row groups without a row were not read", unreadAll, emptyAll)
	}
}

// A sample passes over batches in excluded groups and otherwise reads the same
// batches.
func TestPruneSample(t *testing.T) {
	r := rand.New(rand.NewPCG(42, 1))
	const rows = 9000
	cols := []WriteColumn{{Name: "day", Kind: stream.Int64}, {Name: "minutes", Kind: stream.Float64}}
	vecs := []stream.Vector{{Kind: stream.Int64, I64: make([]int64, rows)}, {Kind: stream.Float64, F64: make([]float64, rows)}}
	for i := range rows {
		vecs[0].I64[i] = int64(i / 1000)
		vecs[1].F64[i] = r.Float64()
	}
	f, err := openBytes(writeTable(t, cols, vecs, rows, WriterOptions{RowsPerGroup: 700}), stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	empty := 0
	for range 200 {
		d := designWhere(t, f, "minutes", fmt.Sprintf("day == %d || day == %d", r.IntN(10), r.IntN(10)))
		at := float64(r.IntN(101)) / 100
		a, err := f.SampleWhere(ctx, d.Uses(), at, d.Filter())
		if err != nil {
			t.Fatal(err)
		}
		b, err := f.Sample(ctx, d.Uses(), at)
		if err != nil {
			t.Fatal(err)
		}
		ea, eb := d.NewEvaluator(), d.NewEvaluator()
		var x, y stream.Batch
		var bx, by stream.Block
		for {
			errA, errB := a.Read(&x), b.Read(&y)
			if errA != errB {
				t.Fatalf("%v and %v", errA, errB)
			}
			if errA == io.EOF {
				break
			}
			if errA != nil {
				t.Fatal(errA)
			}
			if err := eb.Eval(&y, b.Locate, &by); err != nil {
				t.Fatal(err)
			}
			if x.Rows == 0 {
				empty++
				if by.Rows > 0 {
					t.Fatal("a batch with rows came empty")
				}
				continue
			}
			if err := ea.Eval(&x, a.Locate, &bx); err != nil {
				t.Fatal(err)
			}
			if x.Rows != y.Rows || !slices.Equal(bx.Marks[:bx.Rows], by.Marks[:by.Rows]) || !slices.Equal(bx.X[0][:bx.Rows], by.X[0][:by.Rows]) {
				t.Fatal("the batches differ")
			}
		}
		if a.Tally().Rows != b.Tally().Rows {
			t.Fatalf("%d rows, %d when read", a.Tally().Rows, b.Tally().Rows)
		}
	}
	if empty < 500 {
		t.Errorf("only %d batches came empty", empty)
	}
}

// Statistics that contradict themselves, or whose order is not known, say
// nothing.
func TestBadStatistics(t *testing.T) {
	r := rand.New(rand.NewPCG(43, 1))
	data := writeTable(t, quayColumns, quayTable(r, 50, nulls["none"]), 50, WriterOptions{})
	le64 := func(x uint64) []byte { return binary.LittleEndian.AppendUint64(nil, x) }
	bits := math.Float64bits
	set := func(low, high []byte) func(f *File, s *statistics) {
		return func(_ *File, s *statistics) { *s = statistics{MinValue: low, MaxValue: high} }
	}
	old := func(low, high []byte) func(f *File, s *statistics) {
		return func(_ *File, s *statistics) { *s = statistics{Min: low, Max: high} }
	}
	noOrder := func(change func(f *File, s *statistics)) func(f *File, s *statistics) {
		return func(f *File, s *statistics) { change(f, s); f.meta.ColumnOrders = nil }
	}
	otherOrder := func(change func(f *File, s *statistics)) func(f *File, s *statistics) {
		return func(f *File, s *statistics) {
			change(f, s)
			f.meta.ColumnOrders = make([]format.ColumnOrder, len(f.meta.ColumnOrders))
		}
	}
	for _, tc := range []struct {
		column, what string
		change       func(f *File, s *statistics)
		bounded      bool
	}{
		{"minutes", "as written", func(*File, *statistics) {}, true},
		{"minutes", "set", set(le64(bits(1)), le64(bits(2))), true},
		{"minutes", "crossed", set(le64(bits(2)), le64(bits(1))), false},
		{"minutes", "NaN below", set(le64(bits(math.NaN())), le64(bits(2))), false},
		{"minutes", "NaN above", set(le64(bits(1)), le64(bits(math.NaN()))), false},
		{"minutes", "too short", set(le64(bits(1))[:7], le64(bits(2))), false},
		{"minutes", "only one", set(le64(bits(1)), nil), false},
		{"minutes", "none", set(nil, nil), false},
		{"minutes", "old", old(le64(bits(1)), le64(bits(2))), true},
		{"minutes", "no order", noOrder(set(le64(bits(1)), le64(bits(2)))), true},
		{"minutes", "another order", otherOrder(set(le64(bits(1)), le64(bits(2)))), false},
		{"minutes", "another writer", func(f *File, _ *statistics) { f.floats = false }, false},
		{"pallets", "another writer", func(f *File, _ *statistics) { f.floats = false }, true},
		{"pallets", "crossed", set(le64(1), le64(1<<63)), false},
		{"pallets", "signed", set(le64(1<<63), le64(1)), true},
		{"pallets", "old", old(le64(1), le64(1)), true},
		{"pallets", "four bytes", set(le64(1)[:4], le64(1)[:4]), false},
		{"barge_id", "unsigned", set(le64(1), le64(1<<63)), true},
		{"barge_id", "signed", set(le64(1<<63), le64(1)), false},
		{"barge_id", "old", old(le64(1), le64(2)), false},
		{"barge_id", "no order", noOrder(set(le64(1), le64(2))), false},
		{"wet", "bits", set([]byte{0}, []byte{1}), true},
		{"wet", "no bits", set([]byte{0}, []byte{2}), false},
		{"wet", "too long", set([]byte{0, 0}, []byte{1, 0}), false},
		{"quay", "set", set([]byte("a"), []byte("b")), true},
		{"quay", "unsigned", set([]byte("a"), []byte("\xff")), true},
		{"quay", "crossed", set([]byte("b"), []byte("a")), false},
		{"quay", "old", old([]byte("a"), []byte("b")), false},
		{"quay", "no order", noOrder(set([]byte("a"), []byte("b"))), false},
		{"day", "beyond int64", set([]byte{0, 0, 0, 0x80}, []byte{0, 0, 0, 0}), false},
		{"day", "set", set([]byte{0, 0, 0, 0}, []byte{9, 0, 0, 0}), true},
		{"t", "set", set(le64(5), le64(6)), true},
		{"minutes", "more nulls than rows", func(_ *File, s *statistics) { s.NullCount = 51 }, false},
		{"minutes", "all null", func(_ *File, s *statistics) { s.NullCount = 50 }, true},
	} {
		f, err := openBytes(data, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		c := &f.cols[f.schema.Lookup(tc.column)]
		tc.change(f, &f.meta.RowGroups[0].Columns[c.leaf].Statistics)
		r, sure := f.cells(0, c, false)
		if r.Bounded != tc.bounded {
			t.Errorf("%s, %s: %+v", tc.column, tc.what, r)
		}
		if want := tc.column != "day" || tc.bounded; sure != want {
			t.Errorf("%s, %s: sure %v", tc.column, tc.what, sure)
		}
		if r.AllMissing != (tc.what == "all null") {
			t.Errorf("%s, %s: all missing %v", tc.column, tc.what, r.AllMissing)
		}
	}
}

// The library's statistics of a dictionary of floats are wrong beside NaN, which
// is why those of unknown writers are not believed.
func TestFloatStatisticsOfOthers(t *testing.T) {
	root := parquet.Group{"tonnes": parquet.Encoded(parquet.Leaf(parquet.DoubleType), &parquet.RLEDictionary)}
	var buf bytes.Buffer
	w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root))
	vals := []parquet.Value{parquet.DoubleValue(math.NaN()), parquet.DoubleValue(-5), parquet.DoubleValue(7)}
	if _, err := w.ColumnWriters()[0].WriteRowValues(vals); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	f, err := openBytes(buf.Bytes(), stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if r, _ := f.cells(0, &f.cols[0], true); r.Bounded {
		t.Errorf("believed of %q: %+v", f.meta.CreatedBy, r)
	}
	for _, tc := range []struct {
		created string
		want    bool
	}{
		{"parquet-mr version 1.12.3 (build f8dced182c4c1fbdec6ccb3185537b5a01e6ed6b)", true},
		{"parquet-mr version 1.8.1 (build 4aba4dae7bb0d4edbcf7923ae1339f28fd3f7fcf)", false},
		{"parquet-mr", false},
		{"parquet-cpp-arrow version 21.0.0", true},
		{"parquet-cpp version 1.3.1", false},
		{"parquet-rs version 55.1.0", true},
		{"parquet-rs version 4.0.0", false},
		{"DuckDB version v1.5.6 (build 069cc9f9b5)", true},
		{"DuckDB", false},
		{"Polars", true},
		{"github.com/parquet-go/parquet-go version 0.32.0(build )", false},
		{"", false},
	} {
		if got := knowsNaN(tc.created); got != tc.want {
			t.Errorf("%q: %v", tc.created, got)
		}
	}
}

// A column that is read may hold a time that does not fit: its group stays, so
// that the row is an error as without a filter.
func TestPruneKeepsBadRows(t *testing.T) {
	data := badTimes(t, 100, func(i int) bool { return i == 50 }, false)
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, tc := range []struct {
		where string
		want  int64
	}{
		{"pallets > 1e9", 1},
		{`pallets > 1e9 && day > "2000-01-01"`, 0}, // reads the column with the bad day
	} {
		d := designWhere(t, f, "pallets", tc.where)
		u, err := f.Unread(context.Background(), d.Uses(), d.Filter())
		if err != nil || u.Segments != tc.want {
			t.Errorf("%s: %+v, %v", tc.where, u, err)
		}
	}
}

// testdata/duck.parquet was written by DuckDB 1.5.6 through @duckdb/node-api
// 1.5.6: three row groups of 2048 rows, group g (0, 1, 2) from
//
//	select (i % 7)::double / 4 + g * 100 as minutes,
//	  case when i % 50 = 0 then 'nan'::double else (g - 1) * 10.0 + (i % 3) end as tonnes,
//	  (g * 10 + i % 10)::integer as pallets,
//	  case when g = 1 then null else (i % 4)::smallint end as crew,
//	  (18446744073709551000::ubigint - ((2 - g) * 1000)::ubigint) + (i % 8)::ubigint as id,
//	  (g * 50 + i % 5)::decimal(8,2) as price, (g * 50 + i % 5)::decimal(30,2) as wide,
//	  g = 2 as wet, date '2024-01-01' + (g * 31 + i % 20)::integer as day,
//	  timestamp '2024-01-01 00:00:00' + to_hours((g * 24 * 31 + i % 100)::integer) as left_at,
//	  ('2024-01-01 00:00:00+00'::timestamptz) + to_hours((g * 24 * 31 + i % 100)::integer) as t,
//	  case when i % 9 = 0 then null else chr((97 + g)::integer) || 'é' || (i % 5) end as barge,
//	  (g * 100 + i % 9)::utinyint as small
//	from (select range as i, range // 2048 as g from range(6144))
func TestPruneForeign(t *testing.T) {
	data, err := os.ReadFile("testdata/duck.parquet")
	if err != nil {
		t.Fatal(err)
	}
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, tc := range []struct {
		where  string
		unread string // of the three groups
	}{
		{"minutes > 150", "xx."},
		{"minutes < 1.5", ".xx"},
		{"tonnes > 1000", "..."}, // NaN among the cells: no statistics
		{"pallets == 15", "x.x"},
		{"crew >= 0", ".x."},
		{"missing(crew)", "..."},
		{"id > 18446744073709550992", "xx."},
		{"id <= 18446744073709549007", ".xx"},
		{"price >= 50 && price < 55", "x.x"},
		{"wide >= 50 && wide < 55", "x.x"},
		{"wet", "xx."},
		{"!wet", "..x"},
		{`day < "2024-02-01"`, ".xx"},
		{`left_at >= "2024-02-01" && left_at < "2024-03-01"`, "x.x"},
		{`date(t) == "2024-03-04"`, "xx."},
		{"month(t) == 2", "x.x"},
		{`barge > "b"`, "x.."},
		{`barge < "bé0"`, ".xx"},
		{"small > 108", "xx."},
		{"minutes > 0 || crew > 0", "..."},
		{"minutes < pallets * 3", ".xx"},
	} {
		d := designWhere(t, f, "minutes", tc.where)
		want, _ := kept(t, f, d, nil)
		got, unread := kept(t, f, d, d.Filter())
		marks := ""
		for _, out := range unread {
			if out {
				marks += "x"
			} else {
				marks += "."
			}
		}
		if marks != tc.unread || !slices.Equal(got, want) {
			t.Errorf("%s: not read %s, want %s; rows kept %v, read whole %v", tc.where, marks, tc.unread, got, want)
		}
	}
}

// Opening statistics of many groups must stay cheap beside reading them.
func BenchmarkExcluded(b *testing.B) {
	r := rand.New(rand.NewPCG(44, 1))
	const rows = 20000
	data := writeTable(b, quayColumns, quayTable(r, rows, nulls["few"]), rows, WriterOptions{RowsPerGroup: 10})
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		b.Fatal(err)
	}
	d := designWhere(b, f, "tonnes", `crew > 2 && quay == "quay 3"`)
	b.Run(fmt.Sprintf("groups=%d", rows/10), func(b *testing.B) {
		for b.Loop() {
			f.excluded(d.Uses(), d.Filter())
		}
		b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/(rows/10), "ns/group")
	})
}
