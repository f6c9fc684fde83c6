package columnar

import (
	"fmt"
	"math/rand/v2"
	"strconv"
	"testing"

	"github.com/parquet-go/parquet-go"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/streamtest"
)

// libraryCell writes a value of quayColumns as the library reads it.
func libraryCell(c WriteColumn, v parquet.Value) string {
	switch {
	case v.IsNull():
		return "-"
	case c.Kind == stream.Float64:
		return strconv.FormatFloat(v.Double(), 'g', -1, 64)
	case c.Kind == stream.Text:
		return strconv.Quote(string(v.ByteArray()))
	case c.Kind == stream.Bool && v.Boolean():
		return "1"
	case c.Kind == stream.Bool:
		return "0"
	case c.DateOnly:
		return strconv.FormatInt(int64(v.Int32())*86400e9, 10)
	case c.Kind == stream.Uint64:
		return strconv.FormatUint(v.Uint64(), 10)
	}
	return strconv.FormatInt(v.Int64(), 10)
}

// checkFile compares the three readings of a file: what was written, what the
// library's generic row interface says, what the source says.
func checkFile(t *testing.T, data []byte, codec string, vecs []stream.Vector, rows int) {
	t.Helper()
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	got, err := readAll(f, allUses(f))
	if err != nil {
		t.Fatal(err)
	}
	var lib []parquet.Row
	if codec != "lz4" {
		// The library (v0.32.0) loses what its LZ4 codec decodes into a buffer of
		// its own: it reads zeros or stale bytes from such files.
		lib = readLibrary(t, data)
	}
	if len(got) != rows || lib != nil && len(lib) != rows {
		t.Fatalf("%d rows, the library reads %d, want %d", len(got), len(lib), rows)
	}
	for i, row := range got {
		for j, c := range quayColumns {
			want := cell(&vecs[j], i)
			if lib != nil {
				if w := libraryCell(c, lib[i][j]); w != want {
					t.Fatalf("row %d column %s: the library reads %s, written was %s", i, c.Name, w, want)
				}
			}
			if row[j] != want {
				t.Fatalf("row %d column %s: %s, want %s", i, c.Name, row[j], want)
			}
		}
	}
}

func TestRoundTripCodecs(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for codec := range codecs {
		for name, null := range nulls {
			t.Run(fmt.Sprintf("%s nulls %s", codec, name), func(t *testing.T) {
				rows := 1800
				vecs := quayTable(r, rows, null)
				checkFile(t, writeTable(t, quayColumns, vecs, rows, WriterOptions{Codec: codec, PageBytes: 3000, RowsPerGroup: 1100}), codec, vecs, rows)
			})
		}
	}
}

// Sizes around the edges of batches, pages and row groups.
func TestRoundTripSizes(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 1))
	for _, rows := range []int{0, 1, 2, 511, 512, 513, 1024, 1025, 1537} {
		for _, group := range []int{1, 7, 511, 512, 513, 5000} {
			if group < 100 && rows > 2 {
				continue
			}
			for _, page := range []int{100, 4096, 1 << 20} {
				if testing.Short() && page != 100 {
					continue
				}
				vecs := quayTable(r, rows, nulls["half"])
				data := writeTable(t, quayColumns, vecs, rows, WriterOptions{PageBytes: page, RowsPerGroup: group})
				t.Run(fmt.Sprintf("%d rows by %d, pages %d", rows, group, page), func(t *testing.T) { checkFile(t, data, "", vecs, rows) })
			}
		}
	}
}

// A dictionary that outgrows its limit: the chunk begins with indexes and goes
// on in plain pages.
func TestRoundTripMixedPages(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 1))
	for name, null := range nulls {
		rows := 9000
		vecs := quayTable(r, rows, null)
		data := writeTable(t, quayColumns, vecs, rows, WriterOptions{PageBytes: 2000, DictBytes: 3000, RowsPerGroup: 6000})
		t.Run(name, func(t *testing.T) {
			f, err := openBytes(data, stream.Options{})
			if err != nil {
				t.Fatal(err)
			}
			plain, indexed := pageKinds(t, f, f.schema.Lookup("note"))
			if plain == 0 || indexed == 0 {
				t.Fatalf("%d plain and %d indexed pages: the file is not mixed", plain, indexed)
			}
			checkFile(t, data, "", vecs, rows)
		})
	}
}

// pageKinds counts the pages of a column in the first row group.
func pageKinds(t *testing.T, f *File, col int) (plain, indexed int) {
	t.Helper()
	var c chunk
	rg := &f.meta.RowGroups[0]
	c.open(f.file, &f.cols[col], &rg.Columns[f.cols[col].leaf], rg.NumRows, stream.Position{})
	for c.left > 0 {
		if err := c.next(); err != nil {
			t.Fatal(err)
		}
		if c.page.idx != nil {
			indexed++
		} else {
			plain++
		}
	}
	return plain, indexed
}

func TestSourceLaws(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 1))
	for _, tc := range []struct{ rows, group, page, dict int }{{0, 10, 0, 0}, {1, 10, 0, 0}, {1500, 400, 900, 0}, {3000, 1024, 2000, 3000}} {
		t.Run(fmt.Sprint(tc), func(t *testing.T) {
			vecs := quayTable(r, tc.rows, nulls["half"])
			data := writeTable(t, quayColumns, vecs, tc.rows, WriterOptions{PageBytes: tc.page, RowsPerGroup: tc.group, DictBytes: tc.dict})
			name, open := onDisk(t, data)
			want := streamtest.Table{Cols: vecs, Files: []streamtest.File{{Name: name, Rows: tc.rows}}}
			for _, c := range quayColumns {
				want.Schema.Columns = append(want.Schema.Columns, stream.Column{Name: c.Name, Kind: c.Kind, Zoned: c.Zoned, DateOnly: c.DateOnly})
			}
			streamtest.TestSource(t, open, want)
		})
	}
}
