package vcov_test

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// table is data in memory, column by column.
type table struct {
	schema stream.Schema
	cols   []stream.Vector
}

func (tb *table) add(c stream.Column, v stream.Vector) {
	v.Kind = c.Kind
	tb.schema.Columns = append(tb.schema.Columns, c)
	tb.cols = append(tb.cols, v)
}

func (tb *table) float(name string, x []float64) {
	tb.add(stream.Column{Name: name, Kind: stream.Float64}, stream.Vector{F64: x})
}

func (tb *table) int(name string, x []int64) {
	tb.add(stream.Column{Name: name, Kind: stream.Int64}, stream.Vector{I64: x})
}

// text adds a text column; the empty string is a missing cell.
func (tb *table) text(name string, x []string) {
	d := &stream.Dict{}
	at := map[string]int32{"": -1}
	code := make([]int32, len(x))
	for i, s := range x {
		c, ok := at[s]
		if !ok {
			c = int32(len(d.Values))
			at[s] = c
			d.Values = append(d.Values, s)
		}
		code[i] = c
	}
	tb.add(stream.Column{Name: name, Kind: stream.Text}, stream.Vector{Code: code, Dict: d})
}

func (tb *table) rows() int {
	if len(tb.cols) == 0 {
		return 0
	}
	v := &tb.cols[0]
	return max(len(v.F64), len(v.I64), len(v.Code))
}

func (tb *table) source(segmentRows int) stream.Source {
	return stream.NewMemory(tb.schema, tb.cols, segmentRows)
}

// csv gives the table as text; float64 cells read back to the same bits.
func (tb *table) csv() []byte {
	var b bytes.Buffer
	for j, c := range tb.schema.Columns {
		if j > 0 {
			b.WriteByte(',')
		}
		b.WriteString(c.Name)
	}
	b.WriteByte('\n')
	for i := range tb.rows() {
		for j := range tb.cols {
			if j > 0 {
				b.WriteByte(',')
			}
			v := &tb.cols[j]
			switch {
			case v.Null != nil && v.Null[i]:
			case v.Kind == stream.Float64:
				if !math.IsNaN(v.F64[i]) {
					b.WriteString(strconv.FormatFloat(v.F64[i], 'g', -1, 64))
				}
			case v.Kind == stream.Text:
				if v.Code[i] >= 0 {
					b.WriteString(v.Dict.Values[v.Code[i]])
				}
			default:
				b.WriteString(strconv.FormatInt(v.I64[i], 10))
			}
		}
		b.WriteByte('\n')
	}
	return b.Bytes()
}

// kinds names error kinds; "cr1" and "cr0" use the first clustering, "cr1:1"
// the second.
func kinds(names ...string) []vcov.Kind {
	var ks []vcov.Kind
	for _, n := range names {
		k := vcov.Kind{Name: n, Cluster: -1}
		if strings.HasPrefix(n, "cr") || strings.HasPrefix(n, "wc") {
			k.Cluster = 0
			if name, at, ok := strings.Cut(n, ":"); ok {
				k.Name = name
				k.Cluster, _ = strconv.Atoi(at)
			}
		}
		ks = append(ks, k)
	}
	return ks
}

func tryFit(src stream.Source, spec stream.Spec, o vcov.Options) (*vcov.Result, error) {
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		return nil, err
	}
	return vcov.Fit(context.Background(), src, d, o)
}

func fit(t testing.TB, src stream.Source, spec stream.Spec, o vcov.Options) *vcov.Result {
	t.Helper()
	r, err := tryFit(src, spec, o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// errorsOf finds the entry of a kind, which must be there and available.
func errorsOf(t testing.TB, r *vcov.Result, name string) *vcov.Errors {
	t.Helper()
	base, _, _ := strings.Cut(name, ":")
	for i := range r.Errors {
		e := &r.Errors[i]
		if e.Kind != base {
			continue
		}
		if e.Status != "ok" {
			reason := ""
			if e.Reason != nil {
				reason = *e.Reason
			}
			t.Fatalf("%s is %s: %s", name, e.Status, reason)
		}
		return e
	}
	t.Fatalf("no %s in the result", name)
	return nil
}

// fixed is the result without what may differ between equal runs, as bytes. The
// shortest decimal of a float64 is different for different bits (NaN apart,
// which stands for "does not exist").
func fixed(t testing.TB, r *vcov.Result) string {
	t.Helper()
	c := *r
	c.Run.Workers, c.Run.Seconds, c.Run.PeakBytes = 0, 0, 0
	c.Run.SpilledBytes, c.Run.SpilledRuns = 0, 0
	b, err := json.Marshal(&c)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

func floats(x []vcov.Number) []float64 {
	f := make([]float64, len(x))
	for i, v := range x {
		f[i] = float64(v)
	}
	return f
}

// digits is the number of correct decimal digits of got: -log10 of the relative
// error (absolute where want is 0), at most 16.
func digits(got, want float64) float64 {
	d := math.Abs(got - want)
	if want != 0 {
		d /= math.Abs(want)
	}
	switch {
	case d == 0:
		return 16
	case math.IsNaN(d):
		return 0
	}
	return math.Max(0, math.Min(16, -math.Log10(d)))
}

func least(got, want []float64) float64 {
	if len(got) != len(want) {
		return 0
	}
	d := 16.0
	for i := range got {
		d = math.Min(d, digits(got[i], want[i]))
	}
	return d
}

func parse(t testing.TB, s string) float64 {
	t.Helper()
	f, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func parseAll(t testing.TB, s []string) []float64 {
	t.Helper()
	f := make([]float64, len(s))
	for i := range s {
		f[i] = parse(t, s[i])
	}
	return f
}

func testdata(name ...string) string {
	return filepath.Join(append([]string{"..", "testdata"}, name...)...)
}

func readJSON(t testing.TB, to any, name ...string) {
	t.Helper()
	b, err := os.ReadFile(testdata(name...))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, to); err != nil {
		t.Fatal(err)
	}
}
