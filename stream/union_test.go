package stream_test

import (
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/streamtest"
)

// quayFolder writes three files in two quay folders and returns their table.
// The column crane is float64 only because the second file says so, and the
// columns stand in another order there.
func quayFolder(t *testing.T) (want streamtest.Table) {
	t.Helper()
	sizes := []int{1300, 0, 700, 512}
	names := []string{"d/quay=10/day=2024-03-31/a.csv", "d/quay=10/day=2024-03-31/b.csv", "d/quay=9/day=/c.csv", "d/quay=9/day=/d.csv"}
	want.Schema.Columns = []stream.Column{
		{Name: "minutes", Kind: stream.Float64},
		{Name: "crane", Kind: stream.Float64},
		{Name: "barge", Kind: stream.Text},
		{Name: "quay", Kind: stream.Int64},
		{Name: "day", Kind: stream.Time, DateOnly: true},
	}
	cols := make([]stream.Vector, 5)
	for j := range cols {
		cols[j].Kind = want.Schema.Columns[j].Kind
	}
	cols[2].Dict = &stream.Dict{Values: []string{"a", "b"}}
	files := make(map[string]string)
	day := time.Date(2024, 3, 31, 0, 0, 0, 0, time.UTC).UnixNano()
	row := 0
	for i, name := range names {
		var b strings.Builder
		if i == 2 {
			b.WriteString("barge,crane,minutes\n")
		} else {
			b.WriteString("minutes,crane,barge\n")
		}
		for range sizes[i] {
			minutes, crane, barge := 30+float64(row)/8, float64(row%40), "ab"[row%2:row%2+1]
			if row%7 == 3 {
				minutes = math.NaN()
			}
			m := fmt.Sprint(minutes)
			if math.IsNaN(minutes) {
				m = ""
			}
			if i == 2 {
				crane += 0.5
				fmt.Fprintf(&b, "%s,%v,%s\n", barge, crane, m)
			} else {
				fmt.Fprintf(&b, "%s,%v,%s\n", m, crane, barge)
			}
			cols[0].F64 = append(cols[0].F64, minutes)
			cols[1].F64 = append(cols[1].F64, crane)
			cols[2].Code = append(cols[2].Code, int32(row%2))
			cols[3].I64 = append(cols[3].I64, []int64{10, 9}[i/2])
			cols[4].I64 = append(cols[4].I64, day)
			cols[4].Null = append(cols[4].Null, i >= 2)
			row++
		}
		files[name] = b.String()
		want.Files = append(want.Files, streamtest.File{Name: name, Rows: sizes[i]})
	}
	for i := range cols[4].Null {
		if cols[4].Null[i] {
			cols[4].I64[i] = 0
		}
	}
	write(t, files)
	want.Cols = cols
	return want
}

func TestUnion(t *testing.T) {
	want := quayFolder(t)
	openFolder := func(t *testing.T) stream.Source {
		src, err := open([]string{"d"}, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		return src
	}
	streamtest.TestSource(t, openFolder, want)
	src := openFolder(t)
	defer src.Close()
	// a: 1300 rows in segments of 600, b: none, c: 700, d: 512.
	if info := src.Info(); info.Rows != 2512 || info.Segments != 3+0+2+1 || info.Format != "csv" || !info.Rewindable || !info.Sampled {
		t.Errorf("%+v", info)
	}
}

func TestUnionOfPipes(t *testing.T) {
	want := quayFolder(t)
	// The same rows: the first file as a file, those with rows through pipes.
	want.Schema.Columns = want.Schema.Columns[:3]
	want.Cols = want.Cols[:3]
	if err := os.Rename(want.Files[0].Name, "a.csv"); err != nil {
		t.Fatal(err)
	}
	contents := make([][]byte, 2)
	for i, f := range want.Files[2:] {
		var err error
		if contents[i], err = os.ReadFile(f.Name); err != nil {
			t.Fatal(err)
		}
	}
	table := want
	table.Files = []streamtest.File{{Name: "a.csv", Rows: 1300}}
	openPipes := func(t *testing.T) stream.Source {
		paths := []string{"a.csv"}
		var readers []*os.File
		for i, content := range contents {
			r, w, err := os.Pipe()
			if err != nil {
				t.Fatal(err)
			}
			go func() {
				w.Write(content)
				w.Close()
			}()
			link := fmt.Sprintf("pipe%d", i)
			os.Remove(link)
			if err := os.Symlink(fmt.Sprintf("/dev/fd/%d", r.Fd()), link); err != nil {
				t.Fatal(err)
			}
			paths = append(paths, link)
			readers = append(readers, r)
		}
		src, err := open(paths, stream.Options{Format: "csv"})
		for _, r := range readers {
			r.Close()
		}
		if err != nil {
			t.Fatal(err)
		}
		return src
	}
	for i, f := range want.Files[2:] {
		table.Files = append(table.Files, streamtest.File{Name: fmt.Sprintf("pipe%d", i), Rows: f.Rows})
	}
	streamtest.TestSource(t, openPipes, table)
}

func TestUnionKinds(t *testing.T) {
	for _, c := range []struct {
		name   string
		files  map[string]string
		kind   stream.Kind
		values string
	}{
		{"int and float", map[string]string{"a.csv": "crane\n1\n", "b.csv": "crane\n2.5\n"}, stream.Float64, "1 2.5"},
		// The float64 column of b is stored so, a only looks whole.
		{"guess and stored", map[string]string{"a.csv": "crane\n1\n", "b.fix": "crane\n2.5\n"}, stream.Float64, "1 2.5"},
		// Three rows are looked at for a guess, in which b has no cell; as text, or
		// through float64, ids would lose their digits.
		{"no cell in a later file", map[string]string{"a.csv": "crane\n9007199254740993\n", "b.csv": "crane,n\n,1\n"}, stream.Int64, "9007199254740993 -"},
		{"no cell in the first file", map[string]string{"a.csv": "crane,n\n,1\n", "b.csv": "crane\n9007199254740993\n"}, stream.Int64, "- 9007199254740993"},
		{"no row in the first file", map[string]string{"a.csv": "crane\n", "b.csv": "crane\n7\n"}, stream.Int64, "7"},
		{"no cell, then stored", map[string]string{"a.csv": "crane,n\n,1\n", "b.fix": "crane\n7\n"}, stream.Int64, "- 7"},
		{"no cell anywhere", map[string]string{"a.csv": "crane,n\n,1\n", "b.csv": "crane\n"}, stream.Text, "-"},
		{"no cell among floats", map[string]string{"a.csv": "crane,n\n,1\n", "b.csv": "crane\n1\n", "c.csv": "crane\n1.5\n"}, stream.Float64, "NaN 1 1.5"},
		{"days", map[string]string{"a.csv": "crane,n\n,1\n", "b.csv": "crane\n2024-02-29\n"}, stream.Time, "- 2024-02-29T00:00:00Z"},
	} {
		t.Run(c.name, func(t *testing.T) {
			write(t, c.files)
			src, err := open([]string{"."}, stream.Options{})
			if err != nil {
				t.Fatal(err)
			}
			defer src.Close()
			if got := src.Schema().Columns[0].Kind; got != c.kind {
				t.Errorf("kind %s, want %s", got, c.kind)
			}
			for range 2 {
				var values []string
				for _, line := range dump(t, src, "crane") {
					_, v, _ := strings.Cut(line, " ")
					values = append(values, v)
				}
				if got := strings.Join(values, " "); got != c.values {
					t.Errorf("values %s, want %s", got, c.values)
				}
			}
		})
	}
}

func TestUnionMissingColumn(t *testing.T) {
	write(t, map[string]string{
		"a.csv": "minutes,wet\n1,0\n",
		"b.csv": "crew,minutes\n3,2\n",
	})
	src, err := open([]string{"a.csv", "b.csv"}, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	var names []string
	for _, c := range src.Schema().Columns {
		names = append(names, c.Name)
	}
	if got := strings.Join(names, " "); got != "minutes wet crew" {
		t.Errorf("columns %s", got)
	}
	if got := dump(t, src, "minutes"); !slices.Equal(got, []string{"a.csv:1 1", "b.csv:1 2"}) {
		t.Errorf("%q", got)
	}
	for i, want := range []string{"", "column wet: found as a column in a.csv but not in b.csv", "column crew: found as a column in b.csv but not in a.csv"} {
		if want == "" {
			continue
		}
		uses := []stream.Use{{Column: i}}
		if _, err := src.Scan(context.Background(), uses); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("Scan: got %v, want %s", err, want)
		}
		if _, err := src.Sample(context.Background(), uses, 0); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("Sample: got %v, want %s", err, want)
		}
	}
}

// Many files: a bounded number is open at any time, none after Close.
func TestUnionOfManyFiles(t *testing.T) {
	const n = 1000
	files := make(map[string]string)
	for i := range n {
		files[fmt.Sprintf("d/%04d.csv", i)] = fmt.Sprintf("minutes,crane\n%d,%d\n", i, i%7)
	}
	write(t, files)
	f := newTextFormat("csv", ".csv")
	src, err := stream.Open(context.Background(), []string{"d"}, nil, []stream.Format{f}, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	const workers = 4
	for range 2 {
		sc, err := src.Scan(ctx, []stream.Use{{Column: 0, AsNumber: true}})
		if err != nil {
			t.Fatal(err)
		}
		var mu sync.Mutex
		got := make([]float64, n)
		var wg sync.WaitGroup
		for range workers {
			wg.Go(func() {
				var b stream.Batch
				for {
					seg, err := sc.Next(ctx)
					if err == io.EOF {
						return
					}
					if err == nil {
						err = seg.Read(&b)
					}
					if err != nil {
						t.Error(err)
						return
					}
					mu.Lock()
					got[seg.Number()] = b.Cols[0].F64[0]
					mu.Unlock()
					if err := seg.Close(); err != nil {
						t.Error(err)
					}
				}
			})
		}
		wg.Wait()
		if err := sc.Close(); err != nil {
			t.Fatal(err)
		}
		for i, x := range got {
			if x != float64(i) {
				t.Fatalf("segment %d has %v", i, x)
			}
		}
	}
	for _, at := range []float64{0, 0.3, 0.999, 1} {
		seg, err := src.Sample(ctx, []stream.Use{{Column: 0, AsNumber: true}}, at)
		if err != nil {
			t.Fatal(err)
		}
		var b stream.Batch
		// Files of one row each: a sample goes on until it has a batch.
		rows, first := 0, -1.0
		for {
			err := seg.Read(&b)
			if err == io.EOF {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
			if first < 0 {
				first = b.Cols[0].F64[0]
			}
			if want := fmt.Sprintf("d/%04d.csv", int(b.Cols[0].F64[0])); seg.Locate(b.Marks[0]).File != want {
				t.Errorf("row of %s located in %s", want, seg.Locate(b.Marks[0]).File)
			}
			rows += b.Rows
		}
		if tally := seg.Tally(); tally.Rows != int64(rows) {
			t.Errorf("sample at %v: tally %+v for %d rows", at, tally, rows)
		}
		if want := min(at*n, n-1); math.Abs(first-want) > 1 {
			t.Errorf("sample at %v starts at row %v, want about %v", at, first, want)
		}
		if want := min(stream.BatchRows, n-int(first)); rows != want {
			t.Errorf("sample at %v has %d rows, want %d", at, rows, want)
		}
		if err := seg.Close(); err != nil {
			t.Fatal(err)
		}
	}
	if most := f.most.Load(); most > 64+workers+8 {
		t.Errorf("%d files were open at the same time", most)
	}
	if err := src.Close(); err != nil {
		t.Fatal(err)
	}
	if left := f.open.Load(); left != 0 {
		t.Errorf("%d files are still open", left)
	}
}

// A file that is replaced while the union is in use is noticed: by the stamp,
// and when the file is opened again.
func TestUnionChanged(t *testing.T) {
	files := make(map[string]string)
	for i := range 100 {
		files[fmt.Sprintf("d/%02d.csv", i)] = "minutes\n1\n"
	}
	write(t, files)
	src, err := open([]string{"d"}, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	if got := dump(t, src, "minutes"); len(got) != 100 {
		t.Fatalf("%d rows", len(got))
	}
	before, err := src.Stamp()
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile("d/99.csv", []byte("minutes\n1\n2\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	after, err := src.Stamp()
	if err != nil {
		t.Fatal(err)
	}
	if before == after {
		t.Error("the stamp is the same for another file")
	}
	sc, err := src.Scan(context.Background(), nil)
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	for err == nil {
		var seg stream.Segment
		if seg, err = sc.Next(context.Background()); err == nil {
			seg.Close()
		}
	}
	if !strings.Contains(err.Error(), "d/99.csv was changed while it was in use") {
		t.Errorf("got %v", err)
	}
	if _, again := sc.Next(context.Background()); again != err {
		t.Errorf("after an error Next says %v", again)
	}
	if err := os.Remove("d/98.csv"); err != nil {
		t.Fatal(err)
	}
	if _, err := src.Stamp(); err == nil || !strings.Contains(err.Error(), "d/98.csv: was removed") {
		t.Errorf("Stamp: %v", err)
	}
}
