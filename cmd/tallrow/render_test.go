package main

import (
	"flag"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"github.com/tallrow/tallrow/vcov"
)

var update = flag.Bool("update", false, "write the golden files of this package anew")

// golden compares text with testdata/NAME.
func golden(t *testing.T, name, text string) {
	t.Helper()
	file := filepath.Join("testdata", name)
	if *update {
		if err := os.MkdirAll(filepath.Dir(file), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(file, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(string(want), text); d != "" {
		t.Errorf("%s (-want +got):\n%s\nrun go test with -update if the change is meant", file, d)
	}
}

// manyLevels has a category of 60 levels and long names.
func manyLevels() *vcov.Result {
	r := sampleResult()
	r.Terms = []string{"constant", "log(pallets + tonnes * 1000 + crew) * hinge(tonnes, 12.5)"}
	r.Estimates = []vcov.Number{1, 2}
	for i := range 60 {
		r.Terms = append(r.Terms, fmt.Sprintf("quay = quay number %d on the long river bank", i+1))
		r.Estimates = append(r.Estimates, vcov.Number(float64(i)-30.25))
	}
	r.BaseLevels = map[string]string{"quay": "quay number 0"}
	for i := range r.Errors {
		e := &r.Errors[i]
		e.SE, e.DF, e.T, e.P, e.Log10P, e.Low, e.High = nil, nil, nil, nil, nil, nil, nil
		for j, b := range r.Estimates {
			se := vcov.Number(0.5 * float64(i+1) * (1 + float64(j%5)/10))
			e.SE, e.DF, e.T = append(e.SE, se), append(e.DF, 59), append(e.T, b/se)
			p := math.Erfc(math.Abs(float64(b/se)) / math.Sqrt2)
			e.P, e.Log10P = append(e.P, vcov.Number(p)), append(e.Log10P, vcov.Number(math.Log10(p)))
			e.Low, e.High = append(e.Low, b-2*se), append(e.High, b+2*se)
		}
	}
	return r
}

// troubled has whatever may be missing from a result.
func troubled() *vcov.Result {
	r := sampleResult()
	kind, weight := "precision", "1 / tonnes"
	r.Weight = vcov.WeightSum{Kind: &kind, Sum: 123456.75}
	r.Model.Weight, r.Model.WeightKind = &weight, &kind
	nan := vcov.Number(math.NaN())
	r.Estimates[4] = nan
	r.Aliased = []vcov.Alias{{Term: "wet", DependsOn: []string{"night", "crew"}}}
	for i := range r.Errors {
		e := &r.Errors[i]
		for _, s := range [][]vcov.Number{e.SE, e.DF, e.T, e.P, e.Log10P, e.Low, e.High} {
			s[4] = nan
		}
		// A term that lives in one cluster has an error but no interval.
		for _, s := range [][]vcov.Number{e.P, e.Log10P, e.Low, e.High} {
			s[5] = nan
		}
	}
	r.Errors[2].Groups = []int64{7}
	r.Errors[2].GroupRows = &vcov.Spread{Min: 1, Median: 12, Max: 900}
	r.Errors[2].Overall = &vcov.Overall{DF1: 8, DF2: nan, F: nan, P: nan}
	r.Errors = append(r.Errors, unavailable("hc3", []string{}, len(r.Terms), "it needs a second pass and the pipe was not copied"))
	text, term := "night lives in one cluster of quay", "night"
	r.Warnings = []vcov.Warning{{Code: "lone-cluster", Term: &term, Text: text}}
	r.R2, r.R2Adjusted = nan, nan
	r.Rows = vcov.Rows{Read: 10, Used: 10, MissingBy: map[string]int64{}}
	return r
}

func TestRenderGolden(t *testing.T) {
	seven := sampleResult()
	for _, k := range []string{"hc0", "hc2", "hc3", "cr0"} {
		e := seven.Errors[1]
		e.Kind = k
		if k == "cr0" {
			e = seven.Errors[2]
			e.Kind = k
		}
		seven.Errors = append(seven.Errors, e)
	}
	truth := newView(sampleResult(), nil)
	truth.truth = map[string]float64{"pallets": 1.5, "tonnes": 0, "crew": -0.8, "barge = d": 10}
	none := sampleResult()
	none.Errors = []vcov.Errors{unavailable("classical", []string{}, len(none.Terms), "no degrees of freedom are left")}
	none.Residual.SD = vcov.Number(math.NaN())
	for name, text := range map[string]string{
		"usual":     renderText(newView(sampleResult(), []string{"classical", "hc1", "cr1(quay)"}), 120),
		"one_kind":  renderText(newView(sampleResult(), []string{"hc1"}), 100),
		"narrow":    renderText(newView(sampleResult(), nil), 80),
		"seven":     renderText(newView(seven, nil), 120),
		"levels":    renderText(newView(manyLevels(), nil), 120),
		"troubled":  renderText(newView(troubled(), nil), 120),
		"truth":     renderText(truth, 120),
		"no_errors": renderText(newView(none, nil), 120),
	} {
		t.Run(name, func(t *testing.T) { golden(t, "render/"+name+".txt", text) })
	}
}

// No line is wider than asked, whatever the names, unless a single word is.
func TestRenderWidth(t *testing.T) {
	for _, r := range []*vcov.Result{sampleResult(), manyLevels(), troubled()} {
		for width := narrowest; width <= widest; width += 10 {
			for i, line := range strings.Split(renderText(newView(r, nil), width), "\n") {
				if runes(line) > width {
					t.Errorf("width %d: line %d has %d characters: %s", width, i+1, runes(line), line)
				}
			}
		}
	}
}

func TestStrip(t *testing.T) {
	for _, c := range []struct {
		b, low, high float64
		want         string
	}{
		{1, 0.5, 1.5, "........|..--o---"},
		{-1, -1.5, -0.5, "---o--..|........"},
		{0.1, -1, 1.2, ".-------+o-------"},
		{0, 0, 0, "........+........"},
		// An interval that ends just above zero does not seem to hold it.
		{1, 1e-9, 2, "........|---o----"},
		{-1, -2, -1e-9, "----o---|........"},
		// One whose end rounds to the cell of zero does seem to.
		{1, -1e-9, 2, "........+---o----"},
		{math.NaN(), 1, 2, ""},
		{1, math.Inf(-1), 2, ""},
	} {
		if got := strip(c.b, c.low, c.high); got != c.want {
			t.Errorf("strip(%g, %g, %g) = %q, want %q", c.b, c.low, c.high, got, c.want)
		}
	}
}

func TestNumbers(t *testing.T) {
	for _, c := range []struct{ got, want string }{
		{digits(0, 5), "0"},
		{digits(9.99996, 5), "10.000"},
		{digits(123456.7, 5), "123457"},
		{digits(1234567, 5), "1234567"},
		{digits(12345678, 5), "1.2346e+07"},
		{digits(0.00012345, 4), "0.0001234"},
		{digits(0.000012345, 4), "1.234e-05"},
		{digits(math.NaN(), 4), "-"},
		{ratioText(1), "x1.00"},
		{ratioText(9.996), "x10.0"},
		{ratioText(99.96), "x100"},
		{ratioText(0.001), "x0.0010"},
		{ratioText(math.NaN()), ""},
		{ratioText(1234567), "x1.2e+06"},
		{pText(0.04567), "0.0457"},
		{pText(0.99999), "1.00"},
		{pText(3.14e-7), "3.1e-07"},
		{pText(0), "<1e-99"},
		{pText(vcov.Number(math.NaN())), "-"},
		{count(-1234567), "-1,234,567"},
		{count(999), "999"},
		{percent(0.0734), "7.3 %"},
		{percent(0.00001), "below 0.01 %"},
		{percent(0), "0 %"},
		{levelText(0.95), "95 %"},
		{levelText(0.999), "99.9 %"},
		{sizeText(1023), "1,023 bytes"},
		{sizeText(1 << 20), "1.00 MiB"},
		{shorten("abcdefghij", 7), "abcd…ij"},
		{shorten("a\nb", 9), `a\nb`},
		{halves(12.5), "12.5"},
		{rate(1_620_000), "1.62 million"},
		// 1000 known to a hundredth shows the hundredth.
		{fine(1000.00123, 0.01, 2, 5), "1000.001"},
		{fine(0.5, 10, 2, 5), "0.50000"},
	} {
		if c.got != c.want {
			t.Errorf("got %q, want %q", c.got, c.want)
		}
	}
	low, high := ends(999.98, 1000.02)
	if low != "999.9800" || high != "1000.0200" {
		t.Errorf("ends = %s, %s", low, high)
	}
}

func TestAlign(t *testing.T) {
	got := align([]string{"1.5", "-20", "0.001", "1.2e-07"}, 12)
	want := []string{"  1.5    ", "-20      ", "  0.001  ", "  1.2e-07"}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	got = align([]string{"1234567", "0.00012345"}, 12)
	want = []string{"   1234567", "0.00012345"}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
}

func TestSplitLevel(t *testing.T) {
	for term, want := range map[string]levelName{
		"barge = b":                  {"barge", "b", []string{"barge"}},
		"date(t) = 2024-01-02":       {"date(t)", "2024-01-02", []string{"date(t)"}},
		"barge = x = y":              {"barge", "x = y", []string{"barge"}},
		"(barge = b) * pallets":      {"barge * pallets", "b", []string{"barge"}},
		"(barge = b) * (wet = true)": {"barge * wet", "b, true", []string{"barge", "wet"}},
		"pallets":                    {"pallets", "", nil},
		"tonnes == 3":                {"tonnes == 3", "", nil},
		"(a + b) * c":                {"(a + b) * c", "", nil},
	} {
		if d := cmp.Diff(want, splitLevel(term), cmp.AllowUnexported(levelName{})); d != "" {
			t.Errorf("%s: %s", term, d)
		}
	}
}
