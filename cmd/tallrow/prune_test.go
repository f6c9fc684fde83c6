package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
	"github.com/tallrow/tallrow/vcov"
)

// unpruned hides that a source can tell what a filter excludes.
type unpruned struct{ stream.Source }

// quayYears writes a folder of Parquet files, a folder a year, in time order, and
// with csv one file of text.
func quayYears(t *testing.T, csv bool) string {
	t.Helper()
	r := rand.New(rand.NewPCG(51, 1))
	dir := t.TempDir()
	const rows = 3000
	for year := 2021; year <= 2024; year++ {
		folder := filepath.Join(dir, fmt.Sprintf("year=%d", year))
		if err := os.Mkdir(folder, 0o700); err != nil {
			t.Fatal(err)
		}
		cols := []columnar.WriteColumn{
			{Name: "minutes", Kind: stream.Float64}, {Name: "pallets", Kind: stream.Float64, Optional: true},
			{Name: "crew", Kind: stream.Int64}, {Name: "quay", Kind: stream.Text, Optional: true}, {Name: "day", Kind: stream.Time, DateOnly: true},
		}
		vecs := make([]stream.Vector, len(cols))
		dict := &stream.Dict{Values: []string{"east", "north", "west"}}
		var text strings.Builder
		text.WriteString("minutes,pallets,crew,quay,day\n")
		for i := range rows {
			pallets, crew, quay := float64(r.IntN(40)), int64(2+3*i/rows+r.IntN(2)), int32(3*i/rows)
			minutes := 10 + 2*pallets - float64(crew) + (1+pallets/9)*r.NormFloat64()
			if r.IntN(50) == 0 {
				pallets = math.NaN()
			}
			day := int64(i * 365 / rows)
			vecs[0].F64 = append(vecs[0].F64, minutes)
			vecs[1].F64 = append(vecs[1].F64, pallets)
			vecs[2].I64 = append(vecs[2].I64, crew)
			vecs[3].Code = append(vecs[3].Code, quay)
			vecs[4].I64 = append(vecs[4].I64, (19000+day)*86400e9)
			fmt.Fprintf(&text, "%v,%v,%d,%s,%s\n", minutes, pallets, crew, dict.Values[quay],
				stream.FormatKey(stream.KeyColumn{Kind: stream.Time, DateOnly: true}, nil, stream.KeyValue{Bits: uint64((19000 + day) * 86400e9)}))
		}
		for j := range vecs {
			vecs[j].Kind = cols[j].Kind
		}
		vecs[3].Dict = dict
		if csv && year == 2022 {
			if err := os.WriteFile(filepath.Join(folder, "u.csv"), []byte(text.String()), 0o600); err != nil {
				t.Fatal(err)
			}
			continue
		}
		var buf bytes.Buffer
		w, err := columnar.NewWriter(&buf, cols, columnar.WriterOptions{RowsPerGroup: 700})
		if err != nil {
			t.Fatal(err)
		}
		if err := w.WriteColumns(rows, vecs); err != nil {
			t.Fatal(err)
		}
		if err := w.Close(); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(folder, "u.parquet"), buf.Bytes(), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

// What is not read shows nowhere but in the counts of what is not read: the whole
// result is the same, for any number of workers, in one pass and in two.
func TestPrunedFitIsTheSame(t *testing.T) {
	ctx := context.Background()
	formats := []stream.Format{columnar.Format{}, delimited.Format{}}
	for _, tc := range []struct {
		where string
		csv   bool
		first int64
		want  stream.Unread // without bytes
	}{
		{where: "year == 2023", want: stream.Unread{Files: 3, Segments: 15, Rows: 9000}},
		{where: "year >= 2022 && year < 2024", csv: true, want: stream.Unread{Files: 2, Segments: 10, Rows: 6000}},
		{where: `year == 2023 && quay == "north"`, want: stream.Unread{Files: 3, Segments: 18, Rows: 9000 + 700 + 700 + 200}},
		{where: `quay == "north" || day < "2022-02-01"`, want: stream.Unread{Segments: 8, Rows: 4 * (700 + 200)}},
		{where: "crew * 2 > 9 && pallets != 3", want: stream.Unread{Segments: 8, Rows: 4 * 1400}},
		{where: "pallets > 2", want: stream.Unread{}},
		{where: "year != 2021", first: 5500, want: stream.Unread{Files: 1, Segments: 5, Rows: 3000}},
		{where: "year != 2022", first: 5500, want: stream.Unread{Files: 1, Segments: 4, Rows: 2500}},
	} {
		dir := quayYears(t, tc.csv)
		open := func() stream.Source {
			src, err := stream.Open(ctx, []string{dir}, nil, formats, stream.Options{})
			if err != nil {
				t.Fatal(err)
			}
			if tc.first > 0 {
				src = stream.First(src, tc.first)
			}
			return src
		}
		var want []byte
		var none vcov.Run
		for _, passes := range []int{1, 2} {
			for _, workers := range []int{1, 2, 3} {
				for _, prune := range []bool{false, true} {
					src := open()
					d, err := stream.NewDesign(stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "crew"}, Where: tc.where, Keys: []string{"day"}}, src.Schema())
					if err != nil {
						t.Fatal(err)
					}
					if u, err := d.Unread(ctx, src); err != nil {
						t.Fatal(err)
					} else if u.Bytes = 0; tc.first == 0 && u != tc.want {
						t.Errorf("%s: announced %+v, want %+v", tc.where, u, tc.want)
					}
					in := src
					if !prune {
						in = unpruned{src}
					}
					res, err := vcov.Fit(ctx, in, d, vcov.Options{Errors: []vcov.Kind{{Name: "classical", Cluster: -1}, {Name: "hc1", Cluster: -1}, {Name: "cr1", Cluster: 0}}, Passes: passes, Workers: workers})
					if err != nil {
						t.Fatal(err)
					}
					src.Close()
					got := res.Run.Unread
					if got.Bytes = 0; prune && got != tc.want || !prune && got != (stream.Unread{}) {
						t.Errorf("%s: not read %+v, want %+v", tc.where, got, tc.want)
					}
					if !prune && workers == 1 {
						none = res.Run
					}
					if prune && tc.first == 0 && int64(res.Run.Passes)*res.Run.Unread.Bytes+res.Run.Bytes != none.Bytes {
						t.Errorf("%s: %d bytes read in %d passes and %+v not, of %d", tc.where, res.Run.Bytes, res.Run.Passes, res.Run.Unread, none.Bytes)
					}
					res.Run.Unread, res.Run.Bytes, res.Run.Seconds, res.Run.Workers = stream.Unread{}, 0, 0, 0
					text, err := json.Marshal(res)
					if err != nil {
						t.Fatal(err)
					}
					if want == nil || !prune && workers == 1 {
						want = text
					}
					if !bytes.Equal(text, want) {
						t.Errorf("%s, %d passes, %d workers, pruned %v:\n%s\nwant\n%s", tc.where, passes, workers, prune, text, want)
					}
				}
			}
		}
	}
}

// Nothing is left: the same error, with the same counts.
func TestPrunedToNothing(t *testing.T) {
	dir := quayYears(t, false)
	ctx := context.Background()
	src, err := stream.Open(ctx, []string{dir}, nil, []stream.Format{columnar.Format{}}, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	d, err := stream.NewDesign(stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Where: "year > 2030"}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	for _, in := range []stream.Source{src, unpruned{src}} {
		_, err := vcov.Fit(ctx, in, d, vcov.Options{})
		if err == nil || !strings.Contains(err.Error(), "12000 read, 0 malformed, 12000 excluded") {
			t.Errorf("got %v", err)
		}
	}
}

// plan and fit say what is not read.
func TestPrunedText(t *testing.T) {
	dir := quayYears(t, false)
	command := func(name string, more ...string) string {
		t.Helper()
		args := append([]string{name, "--outcome", "minutes", "--terms", "pallets", "--where", "year == 2023", "--quiet"}, more...)
		var out, errs bytes.Buffer
		if code := run(t.Context(), append(args, dir), strings.NewReader(""), &out, &errs); code != 0 {
			t.Fatalf("%s: status %d, %s", name, code, errs.String())
		}
		return strings.Join(strings.Fields(out.String()), " ")
	}
	want := "15 of 20 segments not read: --where excludes them by statistics or folder names (9,000 rows, "
	for _, name := range []string{"plan", "fit"} {
		if text := command(name); !strings.Contains(text, want) || !strings.Contains(text, "3 whole files)") {
			t.Errorf("%s: %s", name, text)
		}
		if text := command(name, "--json"); !strings.Contains(text, `"unread":{"files":3,"segments":15,"rows":9000,"bytes":`) {
			t.Errorf("%s: %s", name, text)
		}
	}
	if text := command("fit", "--json"); !strings.Contains(text, `"rows":{"read":12000,`) {
		t.Errorf("%s", text)
	}
}
