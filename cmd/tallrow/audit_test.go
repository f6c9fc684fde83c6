package main

import (
	"bytes"
	"encoding/json"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

func TestAuditOption(t *testing.T) {
	for _, c := range []struct {
		words   []string
		text    string
		buckets stream.Buckets
		keys    string
	}{
		{[]string{"audit", "auto"}, "auto(rows)", stream.Buckets{Key: -1, Cells: 200}, ""},
		{[]string{"audit", "40"}, "40(rows)", stream.Buckets{Key: -1, Cells: 160}, ""},
		{[]string{"audit", "auto", "cluster", "quay"}, "auto(quay)", stream.Buckets{Key: 0, Cells: 2048}, "quay"},
		{[]string{"audit", "auto", "cluster", "quay", "errors", "hc1"}, "auto(quay)", stream.Buckets{Key: 0, Cells: 2048}, "quay"},
		{[]string{"audit", "40(crane)", "errors", "hc1"}, "40(crane)", stream.Buckets{Key: 0, Cells: 2048}, "crane"},
		{[]string{"audit", "auto(crane)", "cluster", "quay"}, "auto(crane)", stream.Buckets{Key: 1, Cells: 2048}, "quay crane"},
		{[]string{"audit", "auto(rows)", "cluster", "quay"}, "auto(rows)", stream.Buckets{Key: -1, Cells: 200}, "quay"},
		{[]string{"audit", "auto", "errors", "cr1(quay), cr3(crane), hc1"}, "auto(crane)", stream.Buckets{Key: 1, Cells: 2048}, "quay crane"},
		{[]string{"audit", "auto", "errors", "cr1(quay), cr1(crane, date(t))"}, "auto(crane)", stream.Buckets{Key: 1, Cells: 2048}, "quay crane date(t)"},
	} {
		s := given(t, c.words...)
		r, err := s.parseErrors()
		if err != nil {
			t.Errorf("%q: %s", c.words, err)
			continue
		}
		if d := cmp.Diff(&c.buckets, r.buckets); d != "" || strings.Join(r.keys, " ") != c.keys || *s.auditText(r) != c.text {
			t.Errorf("%q: %s, keys %q, %s", c.words, *s.auditText(r), r.keys, d)
		}
	}
	for _, c := range []struct{ text, want string }{
		{"", "want auto or a number of buckets"}, {"yes", "want auto"}, {"auto()", "want auto"}, {"auto(quay, crane)", "want auto"},
		{"7", "found 7 buckets, want 8 to 512"}, {"513(quay)", "want 8 to 512"}, {"auto(quay", "want auto"}, {"2.5", "want auto"},
	} {
		if err := newSettings().give(optionNamed("audit"), value{parts: []string{c.text}}, "--audit"); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v", c.text, err)
		}
	}
	if r, err := given(t, "errors", "hc1").parseErrors(); err != nil || r.buckets != nil {
		t.Errorf("without audit: %v, %v", r.buckets, err)
	}
}

// The quays of the example move together, so hc1 is too small for what is much the
// same within a quay, and cr1 is not.
func TestAuditCommand(t *testing.T) {
	data := filepath.Join("..", "..", "testdata", "quays", "unloading.csv")
	s := compiledSchema(t)
	for _, terms := range []string{"pallets, tonnes, crew, wet", "pallets, crew, each(barge)"} {
		args := []string{"fit", "--outcome", "minutes", "--terms", terms, "--errors", "hc1, cr1(quay)", "--audit", "auto"}
		text := readmeRun(t, append(args, "--json", data))
		if err := validate(t, s, []byte(text)); err != nil {
			t.Fatal(err)
		}
		var r vcov.Result
		if err := json.Unmarshal([]byte(text), &r); err != nil {
			t.Fatal(err)
		}
		a := r.Audit
		if a == nil || a.Status != "ok" || a.Buckets != 10 || a.Cells != 40 || *r.Model.Audit != "auto(quay)" || len(a.Against) != 2 {
			t.Fatalf("%+v", a)
		}
		hc1, cr1 := a.Against[0], a.Against[1]
		if d := cmp.Diff([]string{"constant", "crew"}, hc1.TooSmall); d != "" || len(cr1.TooSmall)+len(cr1.TooLarge) > 0 || *hc1.Instead != "cr1(quay)" {
			t.Errorf("%s: %s, cr1 %+v", terms, d, cr1)
		}
		out := readmeRun(t, append(args, data))
		for _, want := range []string{"Audit by 10 buckets of whole clusters of quay", "cr1(quay), which replicates\n    support", "*: outside what replication supports", "what goes across is cut"} {
			if !strings.Contains(out, want) && !strings.Contains(strings.Join(strings.Fields(out), " "), strings.Join(strings.Fields(want), " ")) {
				t.Errorf("%s: no %q in\n%s", terms, want, out)
			}
		}
	}
	out := readmeRun(t, []string{"fit", "--outcome", "minutes", "--terms", "pallets", "--errors", "hc1", "--audit", "auto(barge)", "--json", data})
	if err := validate(t, s, []byte(out)); err != nil {
		t.Fatal(err)
	}
	out = readmeRun(t, []string{"fit", "--outcome", "minutes", "--terms", "pallets", "--errors", "hc1", "--audit", "auto(barge)", data})
	if !strings.Contains(out, "not given audit: the clusters of barge fill") {
		t.Errorf("few clusters:\n%s", out)
	}
}

// Digests that hold clusters answer for buckets of them as the data do, also for fewer
// terms than they were made for.
func TestAuditOfDigests(t *testing.T) {
	data := filepath.Join("..", "..", "testdata", "quays", "unloading.csv")
	held := filepath.Join(t.TempDir(), "quays.tallrow")
	readmeRun(t, []string{"digest", "--outcome", "minutes", "--terms", "pallets, tonnes, crew", "--errors", "hc1, cr1(quay)", "--where", "tonnes > 0 && crew > 0", "-o", held, data})
	for _, terms := range []string{"pallets, tonnes, crew", "crew, pallets"} {
		ask := []string{"fit", "--outcome", "minutes", "--terms", terms, "--errors", "hc1", "--audit", "auto(quay)", "--json"}
		var want, got vcov.Result
		for _, x := range []struct {
			to   *vcov.Result
			args []string
		}{{&want, []string{"--where", "tonnes > 0 && crew > 0", data}}, {&got, []string{held}}} {
			text := readmeRun(t, append(ask[:len(ask):len(ask)], x.args...))
			if err := validate(t, compiledSchema(t), []byte(text)); err != nil {
				t.Fatal(err)
			}
			if err := json.Unmarshal([]byte(text), x.to); err != nil {
				t.Fatal(err)
			}
		}
		near := cmp.Comparer(func(a, b vcov.Number) bool { return a == b || math.Abs(float64(a/b)-1) < 1e-10 })
		if d := cmp.Diff(want.Audit, got.Audit, near); d != "" {
			t.Errorf("%s: (-data +digest)\n%s", terms, d)
		}
		if *got.Model.Audit != "auto(quay)" || got.Audit.Status != "ok" {
			t.Errorf("%s: %+v", terms, got.Audit)
		}
	}
	for by, want := range map[string]string{"auto(rows)": "only their sums are left", "auto(crane)": "holds no sums of clusters by crane"} {
		var out, errs bytes.Buffer
		if run(t.Context(), []string{"fit", "--outcome", "minutes", "--terms", "crew", "--errors", "hc1", "--audit", by, held}, strings.NewReader(""), &out, &errs) != 2 || !strings.Contains(errs.String(), want) {
			t.Errorf("%s: %s", by, errs.String())
		}
	}
}

func TestAuditSays(t *testing.T) {
	r := scaled("cr1", []string{"quay"}, 1, 1, 1)
	use := "cr2(quay)"
	r.Audit = &vcov.Audit{Status: "ok", Buckets: 40, Clusters: []string{"quay"}, Against: []vcov.AuditedError{
		{Errors: "classical", Ratio: []vcov.Number{1, 1, 1}},
		{Errors: "cr1(quay)", Ratio: []vcov.Number{0.5, 2, 3}, TooSmall: []string{"pallets", "tonnes"}, TooLarge: []string{"constant"}, Instead: &use},
		{Errors: "hc3", Ratio: []vcov.Number{9, 9, 9}, TooSmall: []string{"pallets"}}, // not shown
	}}
	got := auditSays(newView(r, nil))
	want := []string{
		"Audit: the errors of pallets and tonnes by cr1(quay) are too small; over 40 buckets of whole clusters of quay they come out up to 3.0 times as large. Use cr2(quay).",
		"Audit: the errors of constant by cr1(quay) are larger than replicates support; over 40 buckets of whole clusters of quay they come out down to 0.50 times as large. Use cr2(quay).",
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	r.Audit.Against, r.Audit.Clusters = r.Audit.Against[:1], nil
	if d := cmp.Diff([]string{"Audit: replicates over 40 buckets of rows support the errors by classical."}, auditSays(newView(r, nil))); d != "" {
		t.Error(d)
	}
	if n := len(newView(r, []string{"cr1(quay)"}).document().Audit.Against); n != 0 || len(r.Audit.Against) != 1 {
		t.Errorf("%d comparisons with kinds that were not asked for", n)
	}
}
