package stream_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

const oneRow = "minutes,pallets\n31,4\n"

func TestOpenFiles(t *testing.T) {
	write(t, map[string]string{
		"b.csv":                oneRow,
		"a.csv":                oneRow,
		"a[1].csv":             oneRow,
		"a1.csv":               oneRow,
		"_old.csv":             oneRow,
		"days/2/x.csv":         oneRow,
		"days/10/x.csv":        oneRow,
		"days/10-b/x.csv":      oneRow,
		"days/_temp/x.csv":     oneRow,
		"days/.hidden":         oneRow,
		"days/2/_SUCCESS":      "",
		"globbed/.g/x.csv":     oneRow,
		"globbed/g/x.csv":      oneRow,
		"globbed/_also.csv":    oneRow,
		"quay=7/t/part.csv":    oneRow,
		"other/quay=7/a=b.csv": oneRow,
	})
	for _, c := range []struct {
		paths   []string
		files   string
		skipped int
	}{
		{[]string{"b.csv", "a.csv"}, "a.csv b.csv", 0},
		{[]string{"./b.csv", "a.csv"}, "a.csv ./b.csv", 0},
		// The path exists, so its brackets are no pattern.
		{[]string{"a[1].csv"}, "a[1].csv", 0},
		{[]string{"a[12].csv"}, "a1.csv", 0},
		{[]string{"a*.csv"}, "a.csv a1.csv a[1].csv", 0},
		{[]string{"*.csv"}, "a.csv a1.csv a[1].csv b.csv", 1},
		{[]string{"_*.csv", "a.csv"}, "_old.csv a.csv", 0},
		// A file that is named is read, whatever its name.
		{[]string{"_old.csv"}, "_old.csv", 0},
		// Bytewise: "-" sorts before "/", "1" before "2".
		{[]string{"days"}, "days/10-b/x.csv days/10/x.csv days/2/x.csv", 3},
		{[]string{"days/"}, "days/10-b/x.csv days/10/x.csv days/2/x.csv", 3},
		{[]string{"days/2", "a.csv"}, "a.csv days/2/x.csv", 1},
		{[]string{"globbed/*"}, "globbed/g/x.csv", 2},
		{[]string{"globbed/.g"}, "globbed/.g/x.csv", 0},
		{[]string{"days/?"}, "days/2/x.csv", 1},
	} {
		src, err := open(c.paths, stream.Options{})
		if err != nil {
			t.Errorf("%q: %v", c.paths, err)
			continue
		}
		var files []string
		for _, line := range dump(t, src, "minutes", "pallets") {
			name, row, _ := strings.Cut(line, ":")
			files = append(files, name)
			if row != "1 31 4" {
				t.Errorf("%q: %s", c.paths, line)
			}
		}
		if got := strings.Join(files, " "); got != c.files {
			t.Errorf("%q: files %s, want %s", c.paths, got, c.files)
		}
		if info := src.Info(); info.Files != len(files) || info.Skipped != c.skipped {
			t.Errorf("%q: %d files, %d skipped, want %d and %d", c.paths, info.Files, info.Skipped, len(files), c.skipped)
		}
		if err := src.Close(); err != nil {
			t.Errorf("%q: Close: %v", c.paths, err)
		}
	}
}

func TestOpenRefuses(t *testing.T) {
	write(t, map[string]string{
		"june.csv":                           oneRow,
		"july.csv":                           oneRow,
		"empty/_x.csv":                       oneRow,
		"notes.txt":                          "crane 7 is out of order",
		"nothing.dat":                        "",
		"loop/a.csv":                         oneRow,
		"twice/a=1/b/a=2/x.csv":              oneRow,
		"clash/pallets=3/x.csv":              oneRow,
		"kinds/x.csv":                        "minutes,crane\n1,7\n",
		"kinds/y.csv":                        "minutes,crane\n1,7b\n",
		"fixed/x.fix":                        "minutes,crane\n1,7\n",
		"fixed/y.fix":                        "minutes,crane\n1,7.5\n",
		"mixed/x.csv":                        "minutes,crane\n1,7.5\n",
		"mixed/y.fix":                        "minutes,crane\n1,7\n",
		"zones/t=2024-01-01T08:00:00/x.csv":  oneRow,
		"zones/t=2024-01-01T08:00:00Z/x.csv": oneRow,
		"quays/quay=7/x.csv":                 oneRow,
		"quays/quay=n/x.csv":                 oneRow,
		"piped/x.csv":                        oneRow,
	})
	for _, link := range [][2]string{{"../loop", "loop/again"}, {"june.csv", "alias.csv"}, {"nowhere", "dangling.csv"}} {
		if err := os.Symlink(link[0], link[1]); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.Link("june.csv", "hard.csv"); err != nil {
		t.Fatal(err)
	}
	if err := syscall.Mkfifo("piped/p.csv", 0o666); err != nil {
		t.Fatal(err)
	}
	use, missing := stream.ErrUse, fs.ErrNotExist
	for _, c := range []struct {
		paths string
		o     stream.Options
		is    error
		want  string
	}{
		{"", stream.Options{}, use, "no data is named"},
		{"jume.csv", stream.Options{}, missing, "jume.csv: file does not exist; did you mean june.csv"},
		{"quays/quay=7/y.csv", stream.Options{}, missing, "did you mean quays/quay=7/x.csv?"},
		{"none/at/all.csv", stream.Options{}, missing, "none/at/all.csv: file does not exist"},
		{"dangling.csv", stream.Options{}, missing, "dangling.csv: the link leads nowhere"},
		{"x*.csv", stream.Options{}, missing, "x*.csv: the pattern matches no files"},
		{"empty/*.csv", stream.Options{}, missing, "(1 names with leading _ or . passed over)"},
		{"[.csv", stream.Options{}, use, "[.csv: not a correct pattern"},
		{"days/**/x.csv", stream.Options{}, use, "name the folder"},
		{"empty", stream.Options{}, nil, "folder empty: found no files (1 names"},
		{"june.csv june.csv", stream.Options{}, use, "june.csv is named twice"},
		{"june.csv ./june.csv", stream.Options{}, use, "june.csv and ./june.csv are the same file"},
		{"alias.csv june.csv", stream.Options{}, use, "alias.csv and june.csv are the same file"},
		{"hard.csv june.csv", stream.Options{}, use, "hard.csv and june.csv are the same file"},
		{"ju*.csv july.csv", stream.Options{}, use, "july.csv is named twice"},
		{"loop", stream.Options{}, use, "folder loop/again is a link to loop"},
		{"- june.csv", stream.Options{}, use, "beside june.csv"},
		{"- -", stream.Options{}, use, "beside itself"},
		{"-", stream.Options{}, use, "no standard input"},
		{"notes.txt", stream.Options{}, nil, "notes.txt: name and first bytes fit no known format (tried csv, fixed)"},
		{"nothing.dat", stream.Options{}, nil, "nothing.dat: it is empty"},
		{"june.csv", stream.Options{Format: "sheet"}, use, `format "sheet" is not known, want auto, csv or fixed`},
		{"june.csv", stream.Options{Kinds: map[string]stream.Kind{"palets": stream.Text}}, use, "column palets, which is not in the data; did you mean pallets?"},
		{"twice", stream.Options{}, nil, "twice/a=1/b/a=2/x.csv: two folders give the column a"},
		{"clash", stream.Options{}, nil, "column pallets: found in clash/pallets=3/x.csv and also as folder pallets=3"},
		{"kinds", stream.Options{}, nil, `column crane: found int64 in kinds/x.csv but text in kinds/y.csv, want one kind (--kinds "crane=text"`},
		{"fixed", stream.Options{}, nil, "column crane: found int64 in fixed/x.fix but float64 in fixed/y.fix, want one kind"},
		{"mixed", stream.Options{}, nil, "column crane: found float64 in mixed/x.csv but int64 in mixed/y.fix"},
		{"zones", stream.Options{Kinds: map[string]stream.Kind{"t": stream.Time}}, nil, "only one of them has a time zone"},
		{"quays", stream.Options{Kinds: map[string]stream.Kind{"quay": stream.Int64}}, nil, `quays/quay=n/x.csv: folder quay=n: found "n", want a whole number`},
		{"piped", stream.Options{}, nil, "piped/p.csv: is not a regular file"},
	} {
		_, err := open(strings.Fields(c.paths), c.o)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: got %v, want %q", c.paths, err, c.want)
		} else if c.is != nil && !errors.Is(err, c.is) {
			t.Errorf("%q: %v is not %v", c.paths, err, c.is)
		} else if c.is == nil && errors.Is(err, use) {
			t.Errorf("%q: %v is a mistake of use, want one of the data", c.paths, err)
		}
	}
}

// What is opened before an error is closed.
func TestOpenErrorCloses(t *testing.T) {
	write(t, map[string]string{
		"a.csv": "minutes,crane\n1,7\n",
		"b.csv": "minutes,crane\n1,7b\n",
		"c.csv": "minutes\n\"",
	})
	f := newTextFormat("csv", ".csv")
	for _, paths := range [][]string{{"a.csv", "b.csv"}, {"a.csv", "c.csv"}, {"c.csv"}} {
		if _, err := stream.Open(context.Background(), paths, nil, []stream.Format{f}, stream.Options{}); err == nil {
			t.Errorf("%v: no error", paths)
		}
		if n := f.open.Load(); n != 0 {
			t.Errorf("%v: %d inputs stay open", paths, n)
		}
	}
}

func TestFolderColumns(t *testing.T) {
	write(t, map[string]string{
		"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv":  "minutes\n1\n2\n",
		"d/quay=-12/day=2024-04-01/berth=A=B/x.csv":  "minutes\n3\n",
		"d/quay=/day=NA/berth=%zz/plain/x.csv":       "minutes\n4\n",
		"e/crane=007/lot=18446744073709551615/x.csv": "minutes\n5\n",
		"f/quay=3/x.csv": "minutes\n6\n",
		"f/y.csv":        "minutes\n7\n",
	})
	for _, c := range []struct {
		paths string
		kinds map[string]stream.Kind
		names string
		types string
		rows  []string
	}{
		{"d", nil, "quay day berth", "int64 time text", []string{
			"d/quay=-12/day=2024-04-01/berth=A=B/x.csv:1 -12 2024-04-01T00:00:00Z A=B",
			"d/quay=/day=NA/berth=%zz/plain/x.csv:1 - - %zz",
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:1 7 2024-03-31T00:00:00Z n/w",
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:2 7 2024-03-31T00:00:00Z n/w",
		}},
		{"d/quay=7", nil, "quay", "int64", []string{
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:1 7",
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:2 7",
		}},
		{"d", map[string]stream.Kind{"quay": stream.Float64, "day": stream.Text}, "quay day", "float64 text", []string{
			"d/quay=-12/day=2024-04-01/berth=A=B/x.csv:1 -12 2024-04-01",
			"d/quay=/day=NA/berth=%zz/plain/x.csv:1 NaN -",
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:1 7 2024-03-31",
			"d/quay=7/day=2024-03-31/berth=n%2Fw/x.csv:2 7 2024-03-31",
		}},
		// Leading zeros make text, as in cells; so does what int64 cannot hold.
		{"e", nil, "crane lot", "text text", []string{"e/crane=007/lot=18446744073709551615/x.csv:1 007 18446744073709551615"}},
		{"e", map[string]stream.Kind{"crane": stream.Int64, "lot": stream.Uint64}, "crane lot", "int64 uint64",
			[]string{"e/crane=007/lot=18446744073709551615/x.csv:1 7 -1"}},
	} {
		src, err := open(strings.Fields(c.paths), stream.Options{Kinds: c.kinds})
		if err != nil {
			t.Errorf("%s: %v", c.paths, err)
			continue
		}
		names := strings.Fields(c.names)
		var types []string
		for _, name := range names {
			types = append(types, src.Schema().Columns[src.Schema().Lookup(name)].Kind.String())
		}
		if got := strings.Join(types, " "); got != c.types {
			t.Errorf("%s: kinds %s, want %s", c.paths, got, c.types)
		}
		if got := dump(t, src, names...); !slices.Equal(got, c.rows) {
			t.Errorf("%s:\n%s\nwant\n%s", c.paths, strings.Join(got, "\n"), strings.Join(c.rows, "\n"))
		}
		src.Close()
	}
	// A folder column that some files lack is an error only when it is used.
	src, err := open([]string{"f"}, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	if got := dump(t, src, "minutes"); len(got) != 2 {
		t.Errorf("rows %v", got)
	}
	const want = "column quay: found as a folder name in f/quay=3/x.csv but not in f/y.csv"
	if _, err := src.Scan(context.Background(), []stream.Use{{Column: 1}}); err == nil || !strings.Contains(err.Error(), want) {
		t.Errorf("got %v, want %s", err, want)
	}
}

func TestStdin(t *testing.T) {
	write(t, map[string]string{"a.csv": "minutes,pallets\n31,4\n32,5\n"})
	ctx := context.Background()
	formats := []stream.Format{newTextFormat("csv", ".csv")}
	check := func(t *testing.T, in io.ReadCloser, rewindable bool) {
		t.Helper()
		src, err := stream.Open(ctx, []string{"-"}, in, formats, stream.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if got := src.Info().Rewindable; got != rewindable {
			t.Errorf("Rewindable = %v", got)
		}
		want := []string{"standard input:1 31 4", "standard input:2 32 5"}
		if got := dump(t, src, "minutes", "pallets"); !slices.Equal(got, want) {
			t.Errorf("got %q, want %q", got, want)
		}
		if err := src.Close(); err != nil {
			t.Error(err)
		}
	}
	t.Run("pipe", func(t *testing.T) {
		check(t, io.NopCloser(strings.NewReader("minutes,pallets\n31,4\n32,5\n")), false)
	})
	t.Run("slow pipe", func(t *testing.T) {
		check(t, io.NopCloser(onebyone{strings.NewReader("minutes,pallets\n31,4\n32,5\n")}), false)
	})
	t.Run("file", func(t *testing.T) {
		f, err := os.Open("a.csv")
		if err != nil {
			t.Fatal(err)
		}
		check(t, f, true)
	})
	t.Run("cancel", func(t *testing.T) {
		r, w := io.Pipe()
		defer w.Close()
		ctx, cancel := context.WithTimeout(ctx, 10*time.Millisecond)
		defer cancel()
		if _, err := stream.Open(ctx, []string{"-"}, r, formats, stream.Options{}); !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("got %v", err)
		}
	})
	t.Run("fifo nobody writes", func(t *testing.T) {
		if err := syscall.Mkfifo("fifo", 0o666); err != nil {
			t.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(ctx, 10*time.Millisecond)
		defer cancel()
		if _, err := stream.Open(ctx, []string{"fifo", "a.csv"}, nil, formats, stream.Options{}); !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("got %v", err)
		}
		// Let the pending open of the pipe go.
		if w, err := os.OpenFile("fifo", os.O_WRONLY, 0); err == nil {
			w.Close()
		}
	})
}

type onebyone struct{ r io.Reader }

func (r onebyone) Read(p []byte) (int, error) { return r.r.Read(p[:min(1, len(p))]) }

// Pipes that the shell names, as in process substitution, are read once, in the
// order given, after the files.
func TestNamedPipes(t *testing.T) {
	write(t, map[string]string{"z.csv": "minutes\n1\n"})
	var paths []string
	for i, content := range []string{"minutes\n2\n", "minutes\n3.5\n"} {
		r, w, err := os.Pipe()
		if err != nil {
			t.Fatal(err)
		}
		defer r.Close()
		go func() {
			io.Copy(w, bytes.NewReader([]byte(content)))
			w.Close()
		}()
		paths = append(paths, fmt.Sprintf("/dev/fd/%d", r.Fd()))
		if i == 0 {
			paths = append(paths, "z.csv")
		}
	}
	src, err := open(paths, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	want := []string{"z.csv:1 1", paths[0] + ":1 2", paths[2] + ":1 3.5"}
	if got := dump(t, src, "minutes"); !slices.Equal(got, want) {
		t.Errorf("got %q, want %q", got, want)
	}
	if src.Info().Rewindable || src.Info().Sampled {
		t.Errorf("%+v", src.Info())
	}
	if _, err := src.Scan(context.Background(), nil); err == nil {
		t.Error("a pipe was scanned twice")
	}
}
