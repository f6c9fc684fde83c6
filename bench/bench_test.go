package bench

import (
	"math"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/bench/reference"
)

func BenchmarkFit(b *testing.B)       { runCases(b, fitCases) }
func BenchmarkDecode(b *testing.B)    { runCases(b, decodeCases) }
func BenchmarkReference(b *testing.B) { runCases(b, referenceCases) }

func runCases(b *testing.B, list func(*dataset) []benchCase) {
	d, err := measured()
	if err != nil {
		b.Fatal(err)
	}
	for _, c := range list(d) {
		b.Run(c.name, func(b *testing.B) {
			b.SetBytes(c.bytes)
			b.ReportAllocs()
			for b.Loop() {
				out, err := c.run(b.Context())
				if err != nil {
					b.Fatal(err)
				}
				if out.rows != d.rows {
					b.Fatalf("%d rows read, want %d", out.rows, d.rows)
				}
			}
			b.ReportMetric(float64(d.rows)*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}

// Every case runs on few rows, under a name that benchstat can split, and the
// fits agree with the calculation by gonum, the rows with encoding/csv.
func TestCases(t *testing.T) {
	const rows = 4_000
	d, err := newDataset(t.Context(), t.TempDir(), rows)
	if err != nil {
		t.Fatal(err)
	}
	want := make(map[string][]float64) // by the key of a name
	for key, table := range map[string]*reference.Table{"terms=5": d.table(), "terms=8": withProducts(d.table())} {
		if _, want[key], err = reference.HC1(table, 2); err != nil {
			t.Fatal(err)
		}
	}
	complete := int64(d.table().Rows)
	if complete == rows || complete < rows/2 {
		t.Fatalf("%d of %d rows are complete; want a few that are not", complete, rows)
	}
	part := regexp.MustCompile(`^[a-z]+=[a-z0-9+-]+$`)
	for group, list := range map[string]func(*dataset) []benchCase{
		"Fit": fitCases, "Decode": decodeCases, "Reference": referenceCases,
	} {
		cases := list(d)
		seen := map[string]bool{}
		for _, c := range cases {
			t.Run(group+"/"+c.name, func(t *testing.T) {
				if seen[c.name] {
					t.Error("the name is taken")
				}
				seen[c.name] = true
				if got, first := keys(c.name), keys(cases[0].name); !slices.Equal(got, first) {
					t.Errorf("keys %v, want %v as in the first case", got, first)
				}
				for p := range strings.SplitSeq(c.name, "/") {
					if !part.MatchString(p) {
						t.Errorf("%q is not key=value", p)
					}
				}
				if c.bytes <= 0 {
					t.Errorf("%d bytes", c.bytes)
				}
				out, err := c.run(t.Context())
				if err != nil {
					t.Fatal(err)
				}
				if out.rows != rows {
					t.Errorf("%d rows read, want %d", out.rows, rows)
				}
				if group != "Decode" && out.used != complete {
					t.Errorf("%d rows used, want %d", out.used, complete)
				}
				for j, sum := range out.sums {
					made := 0.0 // in the same order, so the same bits
					for _, x := range d.table().Cols[1+j] {
						made += x
					}
					if sum != made {
						t.Errorf("sum of column %d is %v, want %v", j, sum, made)
					}
				}
				if group == "Fit" {
					checkErrors(t, out.se, want[strings.Split(c.name, "/")[3]], strings.Contains(c.name, "errors=hc1"))
				}
			})
		}
	}
}

func keys(name string) (out []string) {
	for p := range strings.SplitSeq(name, "/") {
		key, _, _ := strings.Cut(p, "=")
		out = append(out, key)
	}
	return out
}

// checkErrors compares HC1 errors with those from a Cholesky factor of X'X as it
// stands, which has about 12 digits here; other kinds must exist.
func checkErrors(t *testing.T, got, hc1 []float64, same bool) {
	t.Helper()
	if len(got) != len(hc1) {
		t.Fatalf("%d errors, want %d", len(got), len(hc1))
	}
	for j, se := range got {
		if !(se > 0) || math.IsInf(se, 0) {
			t.Errorf("error %d is %v", j, se)
		}
		if same && math.Abs(se/hc1[j]-1) > 1e-10 {
			t.Errorf("error %d is %v, want %v by gonum", j, se, hc1[j])
		}
	}
}
