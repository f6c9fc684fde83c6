package streamtest

import (
	"bytes"
	"compress/gzip"
	"context"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
)

// csvText writes rows from to to of the table as CSV with a header.
func csvText(columns []stream.Column, cols []stream.Vector, from, to int) []byte {
	var b bytes.Buffer
	for j, c := range columns {
		if j > 0 {
			b.WriteByte(',')
		}
		b.WriteString(c.Name)
	}
	b.WriteByte('\n')
	for i := from; i < to; i++ {
		for j := range cols {
			if j > 0 {
				b.WriteByte(',')
			}
			v := &cols[j]
			switch {
			case cell(v, i, false) == "missing":
			case v.Kind == stream.Float64:
				b.WriteString(strconv.FormatFloat(v.F64[i], 'g', -1, 64))
			case v.Kind == stream.Uint64:
				b.WriteString(strconv.FormatUint(uint64(v.I64[i]), 10))
			case v.Kind == stream.Bool:
				b.WriteString(strconv.FormatBool(v.I64[i] != 0))
			case v.Kind == stream.Time:
				b.WriteString(time.Unix(0, v.I64[i]).UTC().Format(time.RFC3339Nano))
			case v.Kind == stream.Text:
				// Quoted, for the empty text is a level.
				b.WriteString(`"` + strings.ReplaceAll(v.Dict.Values[v.Code[i]], `"`, `""`) + `"`)
			default:
				b.WriteString(strconv.FormatInt(v.I64[i], 10))
			}
		}
		b.WriteByte('\n')
	}
	return b.Bytes()
}

// parquetFile writes rows from to to of the table in row groups of 700.
func parquetFile(t *testing.T, columns []stream.Column, cols []stream.Vector, from, to int) []byte {
	t.Helper()
	var specs []columnar.WriteColumn
	var cut []stream.Vector
	for j, c := range columns {
		specs = append(specs, columnar.WriteColumn{Name: c.Name, Kind: c.Kind, Zoned: c.Zoned, DateOnly: c.DateOnly, Optional: true})
		v := cols[j]
		switch {
		case v.F64 != nil:
			v.F64 = v.F64[from:to]
		case v.Code != nil:
			v.Code = v.Code[from:to]
		default:
			v.I64, v.Null = v.I64[from:to], v.Null[from:to]
		}
		cut = append(cut, v)
	}
	var b bytes.Buffer
	w, err := columnar.NewWriter(&b, specs, columnar.WriterOptions{RowsPerGroup: 700})
	if err == nil {
		err = w.WriteColumns(to-from, cut)
	}
	if err == nil {
		err = w.Close()
	}
	if err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestFormats(t *testing.T) {
	rows, cuts := 2200, []int{0, 1100, 1101, 2200}
	if testing.Short() {
		rows, cuts = 1400, []int{0, 600, 601, 1400}
	}
	columns, cols := quayTable(rows)
	cols[5].Dict.Values[3] = "ferry,\n\"lock\"" // delimiter, newline and quotes
	formats := []stream.Format{columnar.Format{}, delimited.Format{}}
	o := stream.Options{SegmentBytes: 20000}

	t.Chdir(t.TempDir())
	save := func(name string, data []byte) {
		t.Helper()
		if err := os.MkdirAll(filepath.Dir(name), 0o777); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(name, data, 0o666); err != nil {
			t.Fatal(err)
		}
	}
	whole := csvText(columns, cols, 0, rows)
	save("all.csv", whole)
	var packed bytes.Buffer
	z := gzip.NewWriter(&packed)
	z.Write(whole)
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	save("all.csv.gz", packed.Bytes())
	parquet := parquetFile(t, columns, cols, 0, rows)
	save("all.parquet", parquet)
	for i := range cuts[1:] {
		from, to := cuts[i], cuts[i+1]
		save(fmt.Sprintf("text/part%d.csv", i), csvText(columns, cols, from, to))
		save(fmt.Sprintf("groups/part%d.parquet", i), parquetFile(t, columns, cols, from, to))
		if i == 1 {
			save("both/part1.parquet", parquetFile(t, columns, cols, from, to))
		} else {
			save(fmt.Sprintf("both/part%d.csv", i), csvText(columns, cols, from, to))
		}
	}

	table := func(files ...File) Table {
		return Table{Schema: stream.Schema{Columns: columns}, Cols: cols, Files: files}
	}
	parts := func(names ...string) Table {
		var files []File
		for i, name := range names {
			files = append(files, File{name, cuts[i+1] - cuts[i]})
		}
		return table(files...)
	}
	openPaths := func(stdin []byte, paths ...string) func(t *testing.T) stream.Source {
		return func(t *testing.T) stream.Source {
			var in io.ReadCloser
			if stdin != nil {
				in = io.NopCloser(bytes.NewReader(stdin))
			}
			src, err := stream.Open(context.Background(), paths, in, formats, o)
			if err != nil {
				t.Fatal(err)
			}
			return src
		}
	}
	openStdin := func(name string) func(t *testing.T) stream.Source {
		return func(t *testing.T) stream.Source {
			f, err := os.Open(name)
			if err != nil {
				t.Fatal(err)
			}
			src, err := stream.Open(context.Background(), []string{"-"}, f, formats, o)
			if err != nil {
				t.Fatal(err)
			}
			if !src.Info().Rewindable {
				t.Error("a file on standard input is read like a pipe")
			}
			return src
		}
	}
	for _, c := range []struct {
		name  string
		open  func(t *testing.T) stream.Source
		table Table
	}{
		{"csv", openPaths(nil, "all.csv"), table(File{"all.csv", rows})},
		{"csv pipe", openPaths(whole, "-"), table(File{"standard input", rows})},
		{"csv file on standard input", openStdin("all.csv"), table(File{"standard input", rows})},
		{"parquet file on standard input", openStdin("all.parquet"), table(File{"standard input", rows})},
		{"csv gzip", openPaths(nil, "all.csv.gz"), table(File{"all.csv.gz", rows})},
		{"csv gzip pipe", openPaths(packed.Bytes(), "-"), table(File{"standard input", rows})},
		{"csv folder", openPaths(nil, "text"), parts("text/part0.csv", "text/part1.csv", "text/part2.csv")},
		{"parquet", openPaths(nil, "all.parquet"), table(File{"all.parquet", rows})},
		{"parquet pipe", openPaths(parquet, "-"), table(File{"standard input", rows})},
		{"parquet folder", openPaths(nil, "groups"), parts("groups/part0.parquet", "groups/part1.parquet", "groups/part2.parquet")},
		{"both", openPaths(nil, "both"), parts("both/part0.csv", "both/part1.parquet", "both/part2.csv")},
	} {
		t.Run(c.name, func(t *testing.T) { TestSource(t, c.open, c.table) })
	}
	t.Run("first", func(t *testing.T) {
		const n = 1102
		short := make([]stream.Vector, len(cols))
		for j, v := range cols {
			switch {
			case v.F64 != nil:
				v.F64 = v.F64[:n]
			case v.Code != nil:
				v.Code = v.Code[:n]
			default:
				v.I64, v.Null = v.I64[:n], v.Null[:n]
			}
			short[j] = v
		}
		for _, name := range []string{"all.csv", "all.csv.gz", "all.parquet"} {
			t.Run(name, func(t *testing.T) {
				TestSource(t, func(t *testing.T) stream.Source {
					return stream.First(openPaths(nil, name)(t), n)
				}, Table{Schema: stream.Schema{Columns: columns}, Cols: short, Files: []File{{name, n}}})
			})
		}
	})
}
