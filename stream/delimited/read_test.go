package delimited

import (
	"encoding/csv"
	"fmt"
	"io"
	"math/rand/v2"
	"strconv"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// quayText makes rows of quoted and unquoted cells; newlines, delimiters and
// quotes stand in the quoted ones.
func quayText(r *rand.Rand, rows int, delim byte, crlf bool) string {
	var b strings.Builder
	end := "\n"
	if crlf {
		end = "\r\n"
	}
	d := string(delim)
	b.WriteString(strings.Join([]string{"minutes", "pallets", "barge", "note", "t"}, d) + end)
	for i := range rows {
		if r.IntN(12) == 0 {
			b.WriteString(end)
		}
		note := []string{"", "plain", "\"\"", "\"a" + d + "b\"", "\"two\nlines\"", "\"\n\n\"", "\"say \"\"wet\"\"\"", "\"\"\"\"", "\"\"\"" + d + "\n" + d + "\"\"\"",
			"\"" + strings.Repeat("x\n"+d, r.IntN(30)) + "\""}[r.IntN(10)]
		cells := []string{
			strconv.FormatFloat(r.NormFloat64()*30+90, 'f', r.IntN(4), 64),
			[]string{strconv.Itoa(r.IntN(60)), "", "NA"}[r.IntN(3)],
			[]string{"a", "b", "c d", "\"a\"", "null"}[r.IntN(5)],
			note,
			fmt.Sprintf("2024-02-%02dT%02d:30", 1+i%28, i%24),
		}
		b.WriteString(strings.Join(cells, d))
		if i < rows-1 || r.IntN(2) == 0 {
			b.WriteString(end)
		}
	}
	return b.String()
}

// textRows reads with encoding/csv. Fields of a quoted and an unquoted empty
// cell look alike there.
func textRows(t testing.TB, text string, delim byte) (rows []string) {
	t.Helper()
	r := csv.NewReader(strings.NewReader(text))
	r.Comma = rune(delim)
	all, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for _, row := range all[1:] {
		for i, c := range row {
			row[i] = fmt.Sprintf("%q", c)
		}
		rows = append(rows, strings.Join(row, "|"))
	}
	return rows
}

// asText makes all columns text, and nothing but the empty cell missing.
func asText(src *source) {
	for i := range src.head.schema.Columns {
		src.head.schema.Columns[i] = stream.Column{Name: src.head.schema.Columns[i].Name, Kind: stream.Text}
	}
	src.rules = newRules(stream.Options{})
}

var segmentSizes = []int{1, 2, 3, 7, 16, 64, 100, 1000, 4096, 1 << 20}

func TestSegmentsHoldEveryRowOnce(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 12))
	rounds := 9
	if testing.Short() {
		rounds = 2
	}
	for round := range rounds {
		delim := ",\t;"[round%3]
		crlf := round%4 == 3
		text := quayText(r, 1+r.IntN(60), delim, crlf)
		if round == 5 {
			text = "\ufeff" + text
		}
		want := textRows(t, strings.TrimPrefix(text, "\ufeff"), delim)
		for _, way := range ways {
			for _, size := range segmentSizes {
				if size < 16 && (round > 2 || round > 0 && way != "file" && way != "pipe") {
					continue
				}
				src := openWay(t, way, text, stream.Options{SegmentBytes: size})
				if src.head.delim != delim {
					t.Fatalf("delimiter %q, want %q", src.head.delim, delim)
				}
				asText(src)
				got, _, err := readAll(t, src, allUses(src), false)
				if err != nil {
					t.Fatalf("%s, segments of %d bytes: %v", way, size, err)
				}
				for i := range got {
					got[i] = strings.ReplaceAll(strings.ReplaceAll(got[i], `\r\n`, `\n`), "|-", `|""`)
				}
				equalRows(t, fmt.Sprintf("%s, segments of %d bytes", way, size), got, want)
				src.Close()
			}
		}
	}
}

func TestWaysGiveTheSameSegments(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 22))
	text := quayText(r, 3000, ',', false)
	for _, size := range []int{500, 1 << 16, 1 << 22} {
		var want []string
		for _, way := range ways {
			src := openWay(t, way, text, stream.Options{SegmentBytes: size})
			got, tally, err := readAll(t, src, allUses(src), true)
			if err != nil {
				t.Fatal(err)
			}
			if tally.Rows != int64(len(got)) || tally.Rows != 3000 {
				t.Fatalf("%s: tally of %d rows, %d read", way, tally.Rows, len(got))
			}
			if b := src.Info().Bytes; b >= 0 && b != tally.Bytes {
				t.Errorf("%s: %d bytes in the tallies, %d in the file", way, tally.Bytes, b)
			}
			if want == nil {
				want = got
			}
			equalRows(t, way, got, want)
			if src.Info().Rewindable != (way != "pipe" && way != "gzip pipe" && way != "zstd pipe") {
				t.Errorf("%s: rewindable is %v", way, src.Info().Rewindable)
			}
			again, _, err := readAll(t, src, allUses(src), true)
			if !src.Info().Rewindable {
				if err == nil || !strings.Contains(err.Error(), "only once") {
					t.Errorf("%s: second scan: %v", way, err)
				}
				continue
			}
			if err != nil {
				t.Fatal(err)
			}
			equalRows(t, way+" again", again, want)
			src.Close()
		}
	}
}

func TestKindsAndCells(t *testing.T) {
	const maxU = "18446744073709551615"
	cases := []struct {
		name, cells string // one column, cells separated by |
		kind        string
		want        string
	}{
		{"whole", "1|-2|NA||0", "int64", "1|-2|-|-|0"},
		{"spaces", " 1 | 2|\t3", "int64", "1|2|3"},
		{"quoted numbers", `"1"|"22"`, "int64", "1|22"},
		{"largest", "9223372036854775807|-9223372036854775808", "int64", "9223372036854775807|-9223372036854775808"},
		{"nan among whole", "1|nan|-NaN|3", "int64", "1|-|-|3"},
		{"beyond int64", "1|" + maxU + "|NA", "uint64", "1|" + maxU + "|-"},
		{"beyond uint64", "1|18446744073709551616", "text", `"1"|"18446744073709551616"`},
		{"beyond int64 with minus", "-1|" + maxU, "text", `"-1"|"` + maxU + `"`},
		{"leading zeros", "1|007|NA", "text", `"1"|"007"|-`},
		{"fraction", "1|2.5|.5|5.|1e3|+4|null", "float64", "0x1p+00|0x1.4p+01|0x1p-01|0x1.4p+02|0x1.f4p+09|0x1p+02|-"},
		{"inf", "1|-Inf|infinity|NAN", "float64", "0x1p+00|-Inf|+Inf|-"},
		{"missing only", "NA||null", "float64", "-|-|-"},
		{"bool", "true|FALSE|True|NA", "bool", "1|0|1|-"},
		{"bool and number", "true|1", "text", `"true"|"1"`},
		{"letters", "t|f", "text", `"t"|"f"`},
		{"quoted empty", `a|""|` + "|NA|nan", "text", `"a"|""|-|-|"nan"`},
		{"quoted empty among numbers", `1|""`, "text", `"1"|""`},
		{"quoted token", `a|"NA"`, "text", `"a"|"NA"`},
		{"text keeps spaces", " a|a ", "text", `" a"|"a "`},
		{"dates", "2024-02-29|1970-01-01||1678-01-01|2261-12-31", "date", "2024-02-29T00:00:00Z|1970-01-01T00:00:00Z|-|1678-01-01T00:00:00Z|2261-12-31T00:00:00Z"},
		{"no such date", "2023-02-29", "text", `"2023-02-29"`},
		{"wall clock", "2024-02-29 23:59:59.25|2024-03-01T07:05|2024-03-01", "time", "2024-02-29T23:59:59.25Z|2024-03-01T07:05:00Z|2024-03-01T00:00:00Z"},
		{"instants", "2024-02-29T23:59:59Z|2024-03-01T00:30:00.5+01:30|2024-03-01 00:00 -0500|2024-03-01 00:00:00 UTC", "zoned", "2024-02-29T23:59:59Z|2024-02-29T23:00:00.5Z|2024-03-01T05:00:00Z|2024-03-01T00:00:00Z"},
		{"instants and wall clock", "2024-02-29T23:59:59Z|2024-02-29T23:59:59", "text", `"2024-02-29T23:59:59Z"|"2024-02-29T23:59:59"`},
	}
	for _, c := range cases {
		text := "x,pad\n"
		for _, cell := range strings.Split(c.cells, "|") {
			text += cell + ",1\n"
		}
		src := openWay(t, "file", text, stream.Options{})
		col := src.Schema().Columns[0]
		kind := col.Kind.String()
		if col.Zoned {
			kind = "zoned"
		}
		if col.DateOnly {
			kind = "date"
		}
		if kind != c.kind {
			t.Errorf("%s: kind %s, want %s", c.name, kind, c.kind)
		}
		got, _, err := readAll(t, src, []stream.Use{{Column: 0}}, false)
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
		}
		if g := strings.Join(got, "|"); g != c.want {
			t.Errorf("%s: %s, want %s", c.name, g, c.want)
		}
	}
}

func TestAsNumberAndRepeatedUses(t *testing.T) {
	text := "pallets,wet,big\n12,true,18446744073709551615\n12.5,FALSE,1.5e3\nNA,NA,NA\n"
	o := stream.Options{Kinds: map[string]stream.Kind{"pallets": stream.Int64, "wet": stream.Bool, "big": stream.Uint64}}
	src := openWay(t, "file", text, o)
	got, _, err := readAll(t, src, []stream.Use{{Column: 2, AsNumber: true}, {Column: 1, AsNumber: true}, {Column: 0, AsNumber: true}, {Column: 1}, {Column: 1}}, false)
	if err != nil {
		t.Fatal(err)
	}
	equalRows(t, "numbers", got, []string{"0x1p+64|0x1p+00|0x1.8p+03|1|1", "0x1.77p+10|0x0p+00|0x1.9p+03|0|0", "-|-|-|-|-"})
	_, _, err = readAll(t, src, []stream.Use{{Column: 0}}, false)
	if e := asRowError(t, err); e.Pos.Line != 3 || e.Pos.Column != "pallets" || e.Found != `"12.5"` || !strings.HasPrefix(e.Want, "a whole number") {
		t.Errorf("got %v", e)
	}
	if _, err := src.Scan(t.Context(), []stream.Use{{Column: 3}}); err == nil {
		t.Error("a scan of a column that is not there")
	}
	text2 := openWay(t, "file", "barge\na\n", stream.Options{})
	if _, err := text2.Scan(t.Context(), []stream.Use{{AsNumber: true}}); err == nil {
		t.Error("text as a number")
	}
}

func TestOptions(t *testing.T) {
	t.Run("decimal comma", func(t *testing.T) {
		src := openWay(t, "file", "minutes;pallets\n1,5;3\n-0,25;4\n1e2;NA\n", stream.Options{DecimalComma: true})
		got, _, err := readAll(t, src, allUses(src), false)
		if err != nil {
			t.Fatal(err)
		}
		equalRows(t, "cells", got, []string{"0x1.8p+00|3", "-0x1p-02|4", "0x1.9p+06|-"})
		src = openWay(t, "file", "1,5;2,5\n3,5;4,5\n", stream.Options{DecimalComma: true, NoHeader: true})
		if n := len(src.Schema().Columns); n != 2 {
			t.Errorf("%d columns, want 2", n)
		}
	})
	t.Run("no header", func(t *testing.T) {
		src := openWay(t, "file", "1,a\n2,b\n", stream.Options{NoHeader: true})
		if s := fmt.Sprint(src.Schema().Columns); s != "[{c1 int64 false false} {c2 text false false}]" {
			t.Errorf("columns %s", s)
		}
		got, _, _ := readAll(t, src, allUses(src), true)
		equalRows(t, "rows", got, []string{`0:@0|1|"a"`, `0:@4|2|"b"`})
	})
	t.Run("null list", func(t *testing.T) {
		src := openWay(t, "file", "a,b\n.,NA\n5,-\n", stream.Options{Null: []string{".", "-"}})
		got, _, err := readAll(t, src, allUses(src), false)
		if err != nil {
			t.Fatal(err)
		}
		equalRows(t, "cells", got, []string{`-|"NA"`, "5|-"})
	})
	t.Run("kinds", func(t *testing.T) {
		src := openWay(t, "file", "id,wet,t\n7,1,2024-01-01\n8,no,2024-01-02\n", stream.Options{
			Kinds: map[string]stream.Kind{"id": stream.Text, "wet": stream.Bool, "t": stream.Text, "elsewhere": stream.Int64}})
		got, _, err := readAll(t, src, allUses(src), false)
		if err != nil {
			t.Fatal(err)
		}
		equalRows(t, "cells", got, []string{`"7"|1|"2024-01-01"`, `"8"|0|"2024-01-02"`})
	})
	t.Run("empty names", func(t *testing.T) {
		src := openWay(t, "file", ", minutes ,\n1,2,3\n", stream.Options{})
		var names []string
		for _, c := range src.Schema().Columns {
			names = append(names, c.Name)
		}
		if s := strings.Join(names, "|"); s != "c1|minutes|c3" {
			t.Errorf("names %s", s)
		}
	})
	t.Run("header only", func(t *testing.T) {
		for _, way := range ways {
			for _, text := range []string{"a,b", "a,b\n", "\n\r\na,b\r\n\n\n", "\ufeffa,b\n"} {
				for _, size := range []int{1, 4096} {
					src := openWay(t, way, text, stream.Options{SegmentBytes: size})
					got, _, err := readAll(t, src, allUses(src), false)
					if len(got) != 0 || err != nil || src.Schema().Columns[1].Kind != stream.Text {
						t.Errorf("%s, %q: %d rows, %v", way, text, len(got), err)
					}
				}
			}
		}
	})
	t.Run("one column", func(t *testing.T) {
		src := openWay(t, "file", "x\n1\n\n2\n\"\"\n", stream.Options{Kinds: map[string]stream.Kind{"x": stream.Text}})
		got, _, err := readAll(t, src, allUses(src), false)
		if err != nil {
			t.Fatal(err)
		}
		equalRows(t, "cells", got, []string{`"1"`, `"2"`, `""`})
	})
}

func TestBatchesOfFullLength(t *testing.T) {
	var b strings.Builder
	b.WriteString("x,y\n")
	for i := range 2000 {
		fmt.Fprintf(&b, "%d,%d\n", i, i%7)
		if i%3 == 0 {
			b.WriteString("oops,1\n")
		}
	}
	src := openWay(t, "file", b.String(), stream.Options{SkipBad: true, Kinds: map[string]stream.Kind{"x": stream.Int64}})
	sc, err := src.Scan(t.Context(), allUses(src))
	if err != nil {
		t.Fatal(err)
	}
	seg, err := sc.Next(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var batch stream.Batch
	var sizes []int
	for seg.Read(&batch) == nil {
		sizes = append(sizes, batch.Rows)
	}
	if fmt.Sprint(sizes) != "[512 512 512 464]" {
		t.Errorf("batches of %v rows", sizes)
	}
	if n := seg.Tally(); n.Rows != 2667 || n.Malformed != 667 || len(n.Problems) != stream.MaxProblems {
		t.Errorf("tally %+v", n)
	}
	if p := seg.Tally().Problems[1]; p.Error() != src.in.Name+` line 7 column x: found "oops", want a whole number (--kinds "x=float64" reads others)` {
		t.Errorf("problem %v", p)
	}
	if err := seg.Read(&batch); err != io.EOF {
		t.Errorf("after the end: %v", err)
	}
	seg.Close()
	if err := seg.Read(&batch); err == nil || err == io.EOF {
		t.Errorf("after Close: %v", err)
	}
}

func TestDictionaries(t *testing.T) {
	var b strings.Builder
	b.WriteString("id\n")
	var want []string
	for i := range 150000 {
		id := fmt.Sprintf("crane-%d", i*7%140001)
		b.WriteString(id + "\n")
		want = append(want, strconv.Quote(id))
	}
	src := openWay(t, "file", b.String(), stream.Options{})
	sc, _ := src.Scan(t.Context(), allUses(src))
	seg, err := sc.Next(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var batch stream.Batch
	dicts := map[*stream.Dict]bool{}
	row := 0
	for seg.Read(&batch) == nil {
		d := batch.Cols[0].Dict
		dicts[d] = true
		if len(d.Values) > maxDict {
			t.Fatalf("a dictionary of %d", len(d.Values))
		}
		for r := range batch.Rows {
			if show(batch.Cols[0], r) != want[row] {
				t.Fatalf("row %d is %s, want %s", row, show(batch.Cols[0], r), want[row])
			}
			row++
		}
	}
	if row != 150000 || len(dicts) != 3 {
		t.Errorf("%d rows, %d dictionaries", row, len(dicts))
	}
}

func TestInfoAndStamp(t *testing.T) {
	text := "a,b\n" + strings.Repeat("1,2\n", 100)
	src := openWay(t, "file", text, stream.Options{SegmentBytes: 64})
	i := src.Info()
	if i.Files != 1 || i.Bytes != int64(len(text)) || i.Rows != -1 || i.Segments != 7 || !i.Rewindable || !i.Sampled || i.Format != "csv" || i.WorkerBytes != 128 {
		t.Errorf("file: %+v", i)
	}
	one, err := src.Stamp()
	two, _ := src.Stamp()
	if err != nil || one != two || !strings.Contains(one, src.in.Name) {
		t.Errorf("stamps %q, %q, %v", one, two, err)
	}
	for way, format := range map[string]string{"gzip": "csv+gzip", "zstd": "csv+zstd", "pipe": "csv", "gzip pipe": "csv+gzip"} {
		i := openWay(t, way, text, stream.Options{}).Info()
		if i.Format != format || i.Sampled || i.Segments != -1 || i.Rewindable == strings.Contains(way, "pipe") {
			t.Errorf("%s: %+v", way, i)
		}
	}
}

func TestMatch(t *testing.T) {
	f := Format{}
	for _, c := range []struct {
		name, head string
		want       bool
	}{
		{"a.csv", "\x00\x01", true}, {"a.TSV.GZ", "", true}, {"a.txt.zst", "", true}, {"a.csv", "PAR1....", false},
		{"a.parquet", "PAR1", false}, {"a.bin", "\x00\x01", false}, {"data", "a,b\n", true}, {"data", "\x1f\x8b\x08\x00", true}, {"data", "", false},
	} {
		if got := f.Match(c.name, []byte(c.head)); got != c.want {
			t.Errorf("Match(%q, %q) = %v", c.name, c.head, got)
		}
	}
	if f.Name() != "csv" {
		t.Error(f.Name())
	}
}
