package columnar

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"testing"

	"github.com/parquet-go/parquet-go"
	"github.com/tallrow/tallrow/stream"
)

// memFile is a file in memory.
type memFile struct{ *bytes.Reader }

func (memFile) Close() error { return nil }

func openBytes(data []byte, o stream.Options) (*File, error) {
	in := stream.Input{Name: "quay.parquet", File: memFile{bytes.NewReader(data)}, Size: int64(len(data))}
	src, err := Format{}.Open(context.Background(), in, o.WithDefaults())
	if err != nil {
		return nil, err
	}
	return src.(*File), nil
}

// onDisk writes data to a file and returns what opens it.
func onDisk(t testing.TB, data []byte) (name string, open func(t *testing.T) stream.Source) {
	t.Helper()
	name = filepath.Join(t.TempDir(), "quay.parquet")
	if err := os.WriteFile(name, data, 0o600); err != nil {
		t.Fatal(err)
	}
	return name, func(t *testing.T) stream.Source {
		t.Helper()
		f, err := os.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		src, err := Format{}.Open(context.Background(), stream.Input{Name: name, File: f, Size: int64(len(data))}, stream.Options{}.WithDefaults())
		if err != nil {
			t.Fatal(err)
		}
		return src
	}
}

// cell writes a cell of a vector as text.
func cell(v *stream.Vector, i int) string {
	switch v.Kind {
	case stream.Float64:
		if math.IsNaN(v.F64[i]) {
			return "-"
		}
		return strconv.FormatFloat(v.F64[i], 'g', -1, 64)
	case stream.Text:
		if v.Code[i] < 0 {
			return "-"
		}
		return strconv.Quote(v.Dict.Values[v.Code[i]])
	}
	if v.Null != nil && v.Null[i] {
		return "-"
	}
	if v.Kind == stream.Uint64 {
		return strconv.FormatUint(uint64(v.I64[i]), 10)
	}
	return strconv.FormatInt(v.I64[i], 10)
}

func allUses(f *File) []stream.Use {
	uses := make([]stream.Use, len(f.cols))
	for j := range uses {
		uses[j].Column = j
	}
	return uses
}

// readAll returns the cells of all columns, row by row. It checks the shapes of
// the batches.
func readAll(f *File, uses []stream.Use) (rows [][]string, err error) {
	ctx := context.Background()
	sc, err := f.Scan(ctx, uses)
	if err != nil {
		return nil, err
	}
	defer sc.Close()
	for {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			return rows, nil
		}
		if err != nil {
			return rows, err
		}
		for {
			var b stream.Batch
			err := seg.Read(&b)
			if err == io.EOF {
				break
			}
			if err != nil {
				return rows, err
			}
			for i := range b.Rows {
				row := make([]string, len(b.Cols))
				for j := range b.Cols {
					row[j] = cell(&b.Cols[j], i)
				}
				rows = append(rows, row)
			}
		}
		if err := seg.Close(); err != nil {
			return rows, err
		}
	}
}

// readLibrary reads all rows through the library's generic interface.
func readLibrary(t testing.TB, data []byte) (rows []parquet.Row) {
	t.Helper()
	f, err := parquet.OpenFile(bytes.NewReader(data), int64(len(data)))
	if err != nil {
		t.Fatal(err)
	}
	for _, g := range f.RowGroups() {
		r := g.Rows()
		buf := make([]parquet.Row, 100)
		for {
			n, err := r.ReadRows(buf)
			for _, row := range buf[:n] {
				rows = append(rows, row.Clone())
			}
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		r.Close()
	}
	return rows
}

// nulls are patterns of missing cells.
var nulls = map[string]func(r *rand.Rand, i int) bool{
	"none":   func(*rand.Rand, int) bool { return false },
	"all":    func(*rand.Rand, int) bool { return true },
	"half":   func(r *rand.Rand, _ int) bool { return r.IntN(2) == 0 },
	"few":    func(r *rand.Rand, _ int) bool { return r.IntN(700) == 0 },
	"blocks": func(_ *rand.Rand, i int) bool { return i/600%2 == 0 },
	"first":  func(_ *rand.Rand, i int) bool { return i == 0 },
}

var quayColumns = []WriteColumn{
	{Name: "minutes", Kind: stream.Float64, Optional: true},
	{Name: "pallets", Kind: stream.Int64, Optional: true},
	{Name: "barge_id", Kind: stream.Uint64, Optional: true},
	{Name: "wet", Kind: stream.Bool, Optional: true},
	{Name: "t", Kind: stream.Time, Zoned: true, Optional: true},
	{Name: "day", Kind: stream.Time, DateOnly: true, Optional: true},
	{Name: "quay", Kind: stream.Text, Optional: true},
	{Name: "tonnes", Kind: stream.Float64},
	{Name: "crew", Kind: stream.Int64},
	{Name: "night", Kind: stream.Bool},
	{Name: "note", Kind: stream.Text},
}

// quayTable makes rows for quayColumns.
func quayTable(r *rand.Rand, rows int, null func(*rand.Rand, int) bool) []stream.Vector {
	cols := make([]stream.Vector, len(quayColumns))
	for j, c := range quayColumns {
		v := &cols[j]
		v.Kind = c.Kind
		for i := range rows {
			miss := c.Optional && null(r, i)
			switch c.Kind {
			case stream.Float64:
				x := r.NormFloat64() * math.Pow(10, float64(r.IntN(40)-20))
				if miss {
					x = math.NaN()
				}
				v.F64 = append(v.F64, x)
				continue
			case stream.Text:
				if v.Dict == nil {
					v.Dict = new(stream.Dict)
				}
				k := int32(-1)
				if !miss {
					s := fmt.Sprintf("quay %d", r.IntN(9))
					if c.Name == "note" {
						s = fmt.Sprintf("note %d", r.IntN(2000))
					}
					k = int32(len(v.Dict.Values))
					v.Dict.Values = append(v.Dict.Values, s)
				}
				v.Code = append(v.Code, k)
				continue
			}
			x := int64(r.Uint64())
			switch {
			case c.Kind == stream.Bool:
				x &= 1
			case c.DateOnly:
				x = (x % 100000) * nanosOfDay
			case c.Name == "crew":
				x = int64(r.IntN(9)) - 4
			}
			if miss {
				x = 0
			}
			v.I64 = append(v.I64, x)
			if c.Optional {
				v.Null = append(v.Null, miss)
			}
		}
		if c.Kind == stream.Text && v.Dict == nil {
			v.Dict = new(stream.Dict)
		}
	}
	return cols
}

func writeTable(t testing.TB, cols []WriteColumn, vecs []stream.Vector, rows int, o WriterOptions) []byte {
	t.Helper()
	var b bytes.Buffer
	w, err := NewWriter(&b, cols, o)
	if err != nil {
		t.Fatal(err)
	}
	if err := w.WriteColumns(rows, vecs); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}
