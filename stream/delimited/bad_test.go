package delimited

import (
	"bytes"
	"context"
	"errors"
	"io"
	"math/rand/v2"
	"os"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// TestMessages holds the whole message; FILE stands for the name.
func TestMessages(t *testing.T) {
	long := strings.Repeat("quay ", 20)
	cases := []struct{ name, text, want string }{
		{"empty", "", "FILE: found an empty file, want a header line and rows"},
		{"mark only", "\ufeff", "FILE: found an empty file, want a header line and rows"},
		{"empty lines", "\n\r\n\n\n", "FILE: found only empty lines, want a header line and rows"},
		{"binary", "a,b\n\x00\x01", `FILE: found a zero byte at offset 4 (binary data?), want CSV text in UTF-8`},
		{"UTF-16", "\xff\xfea\x00", "FILE: found text in UTF-16 (by its byte order mark), want text in UTF-8"},
		{"name twice", "\na,b, a\n1,2,3\n", `FILE line 2: found the column name "a" twice (columns 1 and 3), want names that differ (or --no-header, if the first line is data)`},
		{"returns only", "a,b\r1,2\r", `FILE line 1: found lines that end in a carriage return alone, want newlines`},
		{"header quote", "a,b\"c\n", `FILE line 1: found a quote inside the unquoted cell "b\"c", want the whole cell in quotes and quotes in it doubled`},
		{"header open", "a,\"b\n1,2\n", `FILE line 1: found a quote opened on line 1 and never closed, want a closing quote`},
		{"only bad rows", "a,b\n1\n2\n", `FILE line 2: found 1 field, want 2 fields`},
		{"too few", "a,b\n1,2\n\n1\n", `FILE line 4: found 1 field, want 2 fields`},
		{"too many", "a,b\n1,2\n\"x\n\n\",4,5,\"x\n\"\n1,2,3", `FILE line 3: found 4 fields, want 2 fields`},
		{"extra delimiter", "a,b\n1,2\n1,2,\n", `FILE line 3: found 3 fields, want 2 fields`},
		{"text", "a,note\n1,\"x\n\ny\"\n2,\nx,3\n", `FILE line 6 column a: found "x", want a whole number (--kinds "a=float64" reads others)`},
		{"quoted empty number", "a,b\n1,2\n\"\",2\n", `FILE line 3 column a: found "", want a whole number (--kinds "a=float64" reads others)`},
		{"quoted token", "a,b\n1.5,2\n\"NA\",2\n", `FILE line 3 column a: found "NA", want a number (--kinds "a=text" reads others)`},
		{"zeros", "a,b\n1,2\n007,2\n", `FILE line 3 column a: found "007", want a whole number without leading zeros (--kinds "a=text" reads others)`},
		{"beyond int64", "a,b\n1,2\n9223372036854775808,2\n", `FILE line 3 column a: found "9223372036854775808", want a whole number within the range of int64 (--kinds "a=text" reads others)`},
		{"minus in uint64", "a,b\n18446744073709551615,2\n-1,2\n", `FILE line 3 column a: found "-1", want a whole number within the range of uint64 (--kinds "a=text" reads others)`},
		{"beyond float64", "a,b\n1.5,2\n-1e400,2\n", `FILE line 3 column a: found "-1e400", want a number within the range of float64 (up to 1.8e308)`},
		{"decimal comma", "a;b\n1.5;2\n1,5;2\n", `FILE line 3 column a: found "1,5", want a number (--kinds "a=text" reads others)`},
		{"long cell", "a,b\n1,2\n" + long + ",2\n", `FILE line 3 column a: found "` + long[:40] + `"..., want a whole number (--kinds "a=float64" reads others)`},
		{"bool", "a,b\ntrue,2\nmaybe,2\n", `FILE line 3 column a: found "maybe", want true or false (--kinds "a=text" reads others)`},
		{"date", "a,b\n2024-01-01,2\n2024-02-30,2\n", `FILE line 3 column a: found "2024-02-30", want a date such as 2006-01-02, years 1678 to 2261 (--kinds "a=text" reads others)`},
		{"time for a date", "a,b\n2024-01-01,2\n2024-02-01 10:00,2\n", `FILE line 3 column a: found "2024-02-01 10:00", want a date such as 2006-01-02, years 1678 to 2261 (--kinds "a=text" reads others)`},
		{"zone", "a,b\n2024-01-01 10:00,2\n2024-02-01 10:00Z,2\n", `FILE line 3 column a: found "2024-02-01 10:00Z", want a time without zone such as 2006-01-02 15:04:05, years 1678 to 2261 (--kinds "a=text" reads others)`},
		{"bare quote", "a,b\n1,2\n1,5\"\n3,4\n7,8\"9\n", `FILE line 3: found a quote inside the unquoted cell "5\"" (by its quotes the row runs on to line 5), want the whole cell in quotes and quotes in it doubled`},
		{"bare quote, endless", "a,b\n1,2\n1,5\"\n3,4\n", `FILE line 3: found a quote inside the unquoted cell "5\"" (by its quotes the row has no end), want the whole cell in quotes and quotes in it doubled`},
		{"after the quote", "a,b\n1,2\n1,\"x\"y\n", `FILE line 3: found "y" after the closing quote of a cell, want a delimiter or the end of the row (quotes inside a cell doubled)`},
		{"open", "a,b\n1,2\n\"1\n\n\",\"x\n3,4\n", `FILE line 3: found a quote opened on line 5 and never closed, want a closing quote`},
	}
	// The sample must not see the bad row, or the column would become text.
	for _, c := range cases {
		text := c.text
		o := stream.Options{}
		for n := 2; n < 5 && o.Kinds == nil; n++ {
			if src, err := tryOpen(t, "file", firstRows(text, n), o); err == nil {
				o.Kinds = map[string]stream.Kind{}
				for _, col := range src.Schema().Columns {
					o.Kinds[col.Name] = col.Kind
				}
			}
		}
		for _, way := range ways {
			if text == "" && (way == "gzip" || way == "zstd") {
				continue
			}
			for _, size := range []int{3, 1 << 20} {
				o := o
				o.SegmentBytes = size
				in := inputOf(t, way, text, &o)
				opened, err := Format{}.Open(t.Context(), in, o)
				if err == nil {
					src := opened.(*source)
					for i, col := range src.head.schema.Columns {
						if k, ok := o.Kinds[col.Name]; ok && k == stream.Time {
							fixTime(src, i, firstRows(text, 2))
						}
					}
					_, _, err = readAll(t, src, allUses(src), false)
					src.Close()
				}
				if err == nil {
					t.Errorf("%s, %s: no error", c.name, way)
					continue
				}
				if msg := strings.Replace(err.Error(), in.Name, "FILE", 1); msg != c.want {
					t.Errorf("%s, %s:\n got %s\nwant %s", c.name, way, msg, c.want)
				}
				asRowError(t, err)
			}
		}
	}
}

// firstRows keeps a few lines of a text.
func firstRows(text string, n int) string {
	lines := strings.SplitAfter(text, "\n")
	return strings.Join(lines[:min(n, len(lines))], "")
}

// fixTime gives a column the kind that the first rows alone give it.
func fixTime(src *source, column int, text string) {
	var g guess
	g.see([]byte(strings.Split(strings.Split(text, "\n")[1], ",")[column]), false, src.rules)
	g.decide(&src.head.schema.Columns[column], false)
}

func TestUnusedColumnsAreNotParsed(t *testing.T) {
	text := "a,b,c,d\n1,2,3,4\nx,2,\"y\n\"\"\",z\n,7,,\n"
	src := openWay(t, "file", text, stream.Options{Kinds: map[string]stream.Kind{"a": stream.Int64, "c": stream.Int64, "d": stream.Int64}})
	got, _, err := readAll(t, src, []stream.Use{{Column: 1}}, false)
	if err != nil {
		t.Fatal(err)
	}
	equalRows(t, "b", got, []string{"2", "2", "7"})
	got, tally, err := readAll(t, src, nil, false)
	if err != nil || tally.Rows != 3 || len(got) != 3 {
		t.Errorf("no columns: %d rows, %v", tally.Rows, err)
	}
}

// TestStructureOfUnusedColumns compares what is malformed when all, some and no
// columns are read: passing over cells must see the same faults.
func TestStructureOfUnusedColumns(t *testing.T) {
	r := rand.New(rand.NewPCG(31, 32))
	pieces := []string{"a", "12", ",", ",", ",", "\"", "\"\"", "\n", "\r\n", "\"x,y\"", "\"p\n\"", "long cell without end"}
	rounds, bad := 3000, 0
	if testing.Short() {
		rounds = 300
	}
	for range rounds {
		var b strings.Builder
		b.WriteString("1,2,3\n")
		for range 1 + r.IntN(14) {
			b.WriteString(pieces[r.IntN(len(pieces))])
		}
		b.WriteString("\n")
		in := stream.Input{Name: "q.csv", File: memory{bytes.NewReader([]byte(b.String()))}, Size: int64(b.Len())}
		opened, err := Format{}.Open(t.Context(), in, stream.Options{NoHeader: true, SkipBad: true, SegmentBytes: 1 << 10})
		if err != nil {
			t.Fatal(err)
		}
		src := opened.(*source)
		asText(src)
		var first string
		for i, uses := range [][]stream.Use{allUses(src), nil, {{Column: 1}}, {{Column: 2}, {Column: 0}}} {
			_, tally, err := readAll(t, src, uses, true)
			s := ""
			for _, p := range tally.Problems {
				s += p.Error() + "\n"
			}
			if err != nil {
				s += err.Error()
			}
			if i == 0 {
				first = s
				if s != "" {
					bad++
				}
			} else if s != first {
				t.Fatalf("%q, columns %v:\n got %s\nwant %s", b.String(), uses, s, first)
			}
		}
		src.Close()
	}
	if bad < rounds/3 {
		t.Errorf("only %d texts had a fault", bad)
	}
}

func TestSkipBad(t *testing.T) {
	text := "a,b\n1,x\n2\n3,\"y\"z\n4,p\"q\nr\",7\n5,x\nbad,x\n6,x\n"
	o := stream.Options{SkipBad: true, Kinds: map[string]stream.Kind{"a": stream.Int64}}
	var first []string
	for _, way := range ways {
		for _, size := range []int{1, 5, 1 << 20} {
			o := o
			o.SegmentBytes = size
			src := openWay(t, way, text, o)
			got, tally, err := readAll(t, src, allUses(src), false)
			if err != nil {
				t.Fatal(err)
			}
			equalRows(t, way, got, []string{`1|"x"`, `5|"x"`, `6|"x"`})
			var problems []string
			for _, p := range tally.Problems {
				p.Pos.File = "F"
				problems = append(problems, p.Error())
			}
			if first == nil {
				first = problems
				if len(first) != 4 || !strings.Contains(first[2], "F line 5: found a quote inside the unquoted cell \"p\\\"q\" (by its quotes the row runs on to line 6)") ||
					!strings.HasPrefix(first[3], "F line 8 column a: found \"bad\"") {
					t.Errorf("problems:\n%s", strings.Join(first, "\n"))
				}
			}
			equalRows(t, way, problems, first)
			if tally.Rows != 7 || tally.Malformed != 4 {
				t.Errorf("%s: tally %+v", way, tally)
			}
		}
	}
	// What swallows the rest of the file is never passed over.
	src := openWay(t, "file", "a,b\n1,2\n3,\"4\n5,6\n", o)
	_, _, err := readAll(t, src, allUses(src), false)
	if e := asRowError(t, err); e.Pos.Line != 3 || !strings.Contains(e.Found, "opened on line 3") {
		t.Error(e)
	}
}

func TestRowsBeforeTheErrorComeFirst(t *testing.T) {
	src := openWay(t, "file", "a\n1\n2\nx\n3\n", stream.Options{Kinds: map[string]stream.Kind{"a": stream.Int64}})
	sc, _ := src.Scan(t.Context(), allUses(src))
	seg, err := sc.Next(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	rows, err := readSegment(t, seg, false)
	equalRows(t, "rows", rows, []string{"1", "2"})
	var b stream.Batch
	if again := seg.Read(&b); again != err || err == nil || b.Rows != 0 {
		t.Errorf("got %v, then %v", err, again)
	}
}

func TestRowTooLong(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"a,b\n1,2\n3,\"" + strings.Repeat("x\n", 300) + "\"\n5,6\n", "a quote opened on line 3 and not closed for"},
		{"a,b\n1,2\n3," + strings.Repeat("x", 600) + "\n5,6\n", "a row of more than"},
	} {
		for _, way := range ways {
			for _, skip := range []bool{false, true} {
				src := openWay(t, way, c.text, stream.Options{SegmentBytes: 10, SkipBad: skip})
				asText(src)
				src.overhang = 100
				_, _, err := readAll(t, src, allUses(src), false)
				if e := asRowError(t, err); e.Pos.Line != 3 || !strings.HasPrefix(e.Found, c.want) {
					t.Errorf("%s: %v", way, e)
				}
				src.Close()
				src = openWay(t, way, c.text, stream.Options{SegmentBytes: 10})
				asText(src)
				src.overhang = 601
				if _, _, err := readAll(t, src, allUses(src), false); err != nil {
					t.Errorf("%s: %v", way, err)
				}
			}
		}
	}
}

func TestDamage(t *testing.T) {
	r := rand.New(rand.NewPCG(41, 42))
	text := quayText(r, 20000, ',', false)
	for name, data := range map[string][]byte{"gz": gz(t, text), "zst": zs(t, text)} {
		for _, cut := range []int{5, len(data) / 3, len(data) - 100, len(data) - 3, len(data) - 1} {
			if name == "gz" && cut == len(data)/2 {
				continue
			}
			for _, in := range []stream.Input{fileInput(t, "q.csv."+name, data[:cut]), pipeInput(data[:cut], 0)} {
				err := openAndRead(t, in)
				var d *stream.DamageError
				if !errors.As(err, &d) || !errors.Is(err, stream.ErrDamaged) || d.Pos.File != in.Name || !strings.Contains(d.What, "end too early") {
					t.Errorf("%s cut at %d of %d: %v", name, cut, len(data), err)
				}
			}
		}
		flipped := append([]byte(nil), data...)
		flipped[len(flipped)*3/4] ^= 0x55
		if err := openAndRead(t, fileInput(t, "q.csv."+name, flipped)); !errors.Is(err, stream.ErrDamaged) {
			t.Errorf("%s with a flipped byte: %v", name, err)
		}
		if err := openAndRead(t, fileInput(t, "q.csv."+name, append(append([]byte(nil), data...), "junk after the end"...))); !errors.Is(err, stream.ErrDamaged) {
			t.Errorf("%s with junk behind: %v", name, err)
		}
	}
}

func openAndRead(t testing.TB, in stream.Input) error {
	src, err := Format{}.Open(context.Background(), in, stream.Options{SegmentBytes: 1 << 16})
	if err != nil {
		return err
	}
	defer src.Close()
	_, _, err = readAll(t, src, allUses(src), false)
	return err
}

func TestFileThatShrinks(t *testing.T) {
	in := fileInput(t, "q.csv", []byte("a\n"+strings.Repeat("1\n", 1000)))
	src, err := Format{}.Open(t.Context(), in, stream.Options{SegmentBytes: 100})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	before, _ := src.Stamp()
	if err := os.Truncate(in.Name, 500); err != nil {
		t.Fatal(err)
	}
	if after, err := src.Stamp(); err != nil || after == before {
		t.Errorf("stamps %q and %q, %v", before, after, err)
	}
	if _, _, err := readAll(t, src, allUses(src), false); !errors.Is(err, stream.ErrDamaged) {
		t.Errorf("got %v", err)
	}
}

type brokenPipe struct{ io.Reader }

func (brokenPipe) Close() error { return nil }

var errBroken = errors.New("cable cut")

func TestFailingPipe(t *testing.T) {
	for _, data := range [][]byte{[]byte("a\n" + strings.Repeat("1\n", 1<<20)), gz(t, "a\n"+strings.Repeat("1\n", 1<<20))} {
		half := data[:len(data)/2]
		in := stream.Input{Name: "standard input", Pipe: brokenPipe{io.MultiReader(strings.NewReader(string(half)), failing{})}}
		err := openAndRead(t, in)
		if !errors.Is(err, errBroken) || errors.Is(err, stream.ErrDamaged) || !strings.Contains(err.Error(), "standard input") {
			t.Errorf("got %v", err)
		}
	}
}

type failing struct{}

func (failing) Read([]byte) (int, error) { return 0, errBroken }

func TestSpoolExists(t *testing.T) {
	o := stream.Options{}
	in := inputOf(t, "spool", "a\n1\n", &o)
	if err := os.WriteFile(o.Spool, []byte("precious"), 0o600); err != nil {
		t.Fatal(err)
	}
	src, err := Format{}.Open(t.Context(), in, o)
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	if _, err := src.Scan(t.Context(), allUses(src)); !errors.Is(err, os.ErrExist) {
		t.Errorf("got %v", err)
	}
	if b, _ := os.ReadFile(o.Spool); string(b) != "precious" {
		t.Error("the file was overwritten")
	}
}

// TestBadRowLeavesNothing has rows that are given up after cells were stored.
func TestBadRowLeavesNothing(t *testing.T) {
	text := "a,b,c,d\n,,2024-01-01,5\n,,,bad\n1,x,2024-01-02,6\nNA,y,,bad\n"
	o := stream.Options{SkipBad: true, Kinds: map[string]stream.Kind{"a": stream.Int64, "c": stream.Time, "d": stream.Int64}}
	src := openWay(t, "file", text, o)
	got, _, err := readAll(t, src, allUses(src), false)
	if err != nil {
		t.Fatal(err)
	}
	equalRows(t, "rows", got, []string{"-|-|2024-01-01T00:00:00Z|5", `1|"x"|2024-01-02T00:00:00Z|6`})
}
