package delimited

import (
	"bytes"
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math/rand/v2"
	"strconv"
	"testing"

	"github.com/tallrow/tallrow/bench/quaydata"
	"github.com/tallrow/tallrow/stream"
)

const benchRows = 100_000

// logText is the log of a quay's scales and clocks: an outcome and eight
// regressors of the shapes that such files have, among them one that a program
// wrote with all digits of a double.
func logText(rows int) []byte {
	r := rand.New(rand.NewPCG(1, 1))
	var b []byte
	b = append(b, "minutes,pallets,crew,wet,hour,tonnes,draught,wind,drift\n"...)
	for range rows {
		b = strconv.AppendFloat(b, 90+30*r.NormFloat64(), 'f', 2, 64)
		for _, n := range []int{60, 5, 2, 24} {
			b = append(b, ',')
			b = strconv.AppendInt(b, int64(r.IntN(n)), 10)
		}
		b = append(b, ',')
		b = strconv.AppendFloat(b, r.Float64()*1000, 'f', 3, 64)
		b = append(b, ',')
		b = strconv.AppendFloat(b, 2+3*r.Float64(), 'f', 4, 64)
		b = append(b, ',')
		b = strconv.AppendFloat(b, 5*r.NormFloat64(), 'f', 2, 64)
		b = append(b, ',')
		b = strconv.AppendFloat(b, r.Float64(), 'g', -1, 64)
		b = append(b, '\n')
	}
	return b
}

func quayRows(b *testing.B) []byte {
	d, err := quaydata.New(quaydata.Config{Rows: benchRows})
	if err != nil {
		b.Fatal(err)
	}
	var w bytes.Buffer
	if err := d.WriteCSV(b.Context(), &w, nil); err != nil {
		b.Fatal(err)
	}
	return w.Bytes()
}

// columnText has one column, of cells that f makes.
func columnText(f func(*rand.Rand) string) []byte {
	r := rand.New(rand.NewPCG(1, 1))
	b := []byte("x,y\n")
	for range benchRows {
		b = append(append(b, f(r)...), ",0\n"...)
	}
	return b
}

func run(b *testing.B, text []byte, uses []int, o stream.Options) {
	in := stream.Input{Name: "m", File: memory{bytes.NewReader(text)}, Size: int64(len(text))}
	src, err := Format{}.Open(context.Background(), in, o)
	if err != nil {
		b.Fatal(err)
	}
	var us []stream.Use
	for _, u := range uses {
		us = append(us, stream.Use{Column: u, AsNumber: src.Schema().Columns[u].Kind.Numeric()})
	}
	b.SetBytes(int64(len(text)))
	b.ReportAllocs()
	for b.Loop() {
		sc, err := src.Scan(context.Background(), us)
		if err != nil {
			b.Fatal(err)
		}
		var batch stream.Batch
		rows := 0
		for {
			seg, err := sc.Next(context.Background())
			if err != nil {
				break
			}
			for seg.Read(&batch) == nil {
				rows += batch.Rows
			}
			seg.Close()
		}
		if rows != benchRows {
			b.Fatal(rows)
		}
	}
	perRow(b)
}

func perRow(b *testing.B) {
	ns := float64(b.Elapsed().Nanoseconds()) / float64(b.N) / benchRows
	b.ReportMetric(1e9/ns, "rows/s")
	b.ReportMetric(ns, "ns/row")
}

// BenchmarkRead reads with one goroutine what a model needs. impl=copy, which
// moves the same bytes in memory, and impl=std, which reads the same cells with
// encoding/csv and strconv, stand beside it.
func BenchmarkRead(b *testing.B) {
	for _, c := range []struct {
		name string
		text []byte
		uses []int
	}{
		{"data=log/cols=9", logText(benchRows), []int{0, 1, 2, 3, 4, 5, 6, 7, 8}},
		{"data=log/cols=2", logText(benchRows), []int{0, 5}},
		{"data=log/cols=0", logText(benchRows), nil},
		{"data=quay/cols=10", quayRows(b), []int{0, 1, 2, 3, 4, 5, 6, 7, 8, 9}},
		{"data=quay/cols=6", quayRows(b), []int{quaydata.ColPallets, quaydata.ColTonnes, quaydata.ColCrew, quaydata.ColWet, quaydata.ColNight, quaydata.ColMinutes}},
	} {
		b.Run(c.name+"/impl=tallrow", func(b *testing.B) { run(b, c.text, c.uses, stream.Options{}) })
		b.Run(c.name+"/impl=copy", func(b *testing.B) {
			b.SetBytes(int64(len(c.text)))
			to := make([]byte, len(c.text))
			for b.Loop() {
				copy(to, c.text)
			}
			perRow(b)
		})
		b.Run(c.name+"/impl=std", func(b *testing.B) {
			b.SetBytes(int64(len(c.text)))
			for b.Loop() {
				standard(b, c.text, c.uses)
			}
			perRow(b)
		})
	}
}

// standard is what the standard library does for the same work.
func standard(b *testing.B, text []byte, uses []int) {
	r := csv.NewReader(bytes.NewReader(text))
	r.ReuseRecord = true
	if _, err := r.Read(); err != nil {
		b.Fatal(err)
	}
	cols := make([][]float64, len(uses))
	for {
		row, err := r.Read()
		if err == io.EOF {
			return
		}
		for k, u := range uses {
			v, err := strconv.ParseFloat(row[u], 64)
			switch {
			case err == nil:
			case row[u] == "true":
				v = 1
			}
			if len(cols[k]) == stream.BatchRows {
				cols[k] = cols[k][:0]
			}
			cols[k] = append(cols[k], v)
		}
	}
}

var cellCases = []struct {
	name string
	cell func(r *rand.Rand) string
	kind stream.Kind
}{
	{"skipped", func(r *rand.Rand) string { return strconv.Itoa(r.IntN(60)) }, 0},
	{"digits-1", func(r *rand.Rand) string { return strconv.Itoa(r.IntN(2)) }, stream.Float64},
	{"digits-2", func(r *rand.Rand) string { return strconv.Itoa(r.IntN(60)) }, stream.Float64},
	{"places-2", func(r *rand.Rand) string { return fmt.Sprintf("%.2f", 90+30*r.NormFloat64()) }, stream.Float64},
	{"places-4", func(r *rand.Rand) string { return fmt.Sprintf("%.4f", 1000*r.Float64()) }, stream.Float64},
	{"signed", func(r *rand.Rand) string { return fmt.Sprintf("%.3f", r.NormFloat64()) }, stream.Float64},
	{"shortest", func(r *rand.Rand) string { return fmt.Sprint(r.Float64()) }, stream.Float64},
	{"exponent", func(r *rand.Rand) string { return fmt.Sprintf("%.6e", r.Float64()) }, stream.Float64},
	{"missing-half", func(r *rand.Rand) string { return []string{"", "12.5"}[r.IntN(2)] }, stream.Float64},
	{"na-half", func(r *rand.Rand) string { return []string{"NA", "12.5"}[r.IntN(2)] }, stream.Float64},
	{"quoted", func(r *rand.Rand) string { return fmt.Sprintf(`"%.2f"`, 90+30*r.NormFloat64()) }, stream.Float64},
	{"id-10", func(r *rand.Rand) string { return strconv.Itoa(1_000_000_000 + r.IntN(1_000_000_000)) }, stream.Int64},
	{"truth", func(r *rand.Rand) string { return strconv.FormatBool(r.IntN(2) == 0) }, stream.Bool},
	{"time", func(r *rand.Rand) string {
		return fmt.Sprintf("2024-02-%02dT%02d:%02d:%02d", 1+r.IntN(28), r.IntN(24), r.IntN(60), r.IntN(60))
	}, stream.Time},
	{"text-short", func(r *rand.Rand) string { return "q" + strconv.Itoa(r.IntN(60)) }, stream.Text},
	{"text-long", func(r *rand.Rand) string { return "quay number " + strconv.Itoa(r.IntN(60)) }, stream.Text},
	{"text-many", func(r *rand.Rand) string { return "b" + strconv.Itoa(r.IntN(50_000)) }, stream.Text},
	{"text-quoted", func(r *rand.Rand) string { return `"q` + strconv.Itoa(r.IntN(60)) + `"` }, stream.Text},
}

// BenchmarkCell reads one column of a kind; the time for it is that of the case
// minus that of cell=skipped.
func BenchmarkCell(b *testing.B) {
	for _, c := range cellCases {
		b.Run("cell="+c.name, func(b *testing.B) {
			uses := []int{0}
			o := stream.Options{Kinds: map[string]stream.Kind{"x": c.kind}}
			if c.kind == 0 {
				uses, o.Kinds = nil, nil
			}
			run(b, columnText(c.cell), uses, o)
		})
	}
}
