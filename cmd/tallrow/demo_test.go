package main

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/bench/quaydata"
	"github.com/tallrow/tallrow/vcov"
)

// demoRun runs the program in this process.
func demoRun(t *testing.T, args ...string) (code int, out, errs string) {
	t.Helper()
	var o, e bytes.Buffer
	code = run(context.Background(), args, strings.NewReader(""), &o, &e)
	return code, o.String(), e.String()
}

func TestDemoShowsTheTruthBesideTheTable(t *testing.T) {
	tmp := t.TempDir()
	t.Setenv("TMPDIR", tmp)
	code, out, errs := demoRun(t, "demo", "--rows", "30000")
	if code != 0 || errs != "" {
		t.Fatalf("exit %d, standard error %q", code, errs)
	}
	for _, want := range []string{"30,000 rows", "cr1(crane)", "cr1(quay)", "Which 95 % intervals hold the true coefficient", "tallrow fit --outcome"} {
		if !strings.Contains(out, want) {
			t.Errorf("the demo does not say %q:\n%s", want, out)
		}
	}
	// Every true coefficient has a line of verdicts.
	_, verdicts, _ := strings.Cut(out, "Which 95 %")
	for term := range quaydata.Truth() {
		found := false
		for _, l := range strings.Split(verdicts, "\n") {
			if strings.HasPrefix(l, term+"  ") {
				found = true
				if n := strings.Count(l, "holds") + strings.Count(l, "MISSES"); n != len(demoErrors) {
					t.Errorf("%d verdicts for %d kinds of errors: %s", n, len(demoErrors), l)
				}
			}
		}
		if !found {
			t.Errorf("no line for %s in\n%s", term, verdicts)
		}
	}
	// Crew hardly varies within a quay: the classical error is far too small.
	for _, l := range strings.Split(verdicts, "\n") {
		if strings.HasPrefix(l, "crew  ") && strings.Count(l, "MISSES") == 0 {
			t.Errorf("the classical interval of crew holds the truth: %s", l)
		}
	}
	if left, err := os.ReadDir(tmp); err != nil || len(left) != 0 {
		t.Errorf("left behind: %v %v", left, err)
	}
}

// The files of the demo can be fitted by the command it prints, and text and
// Parquet give the same.
func TestDemoFilesStay(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "new", "quays")
	var results []vcov.Result
	for _, csv := range []bool{false, true} {
		args := []string{"demo", "--rows", "20000", "--dir", dir}
		name := "unloading.parquet"
		if csv {
			args, name = append(args, "--csv"), "unloading.csv"
		}
		code, out, errs := demoRun(t, args...)
		if code != 0 {
			t.Fatalf("exit %d: %s", code, errs)
		}
		file := filepath.Join(dir, name)
		if _, err := os.Stat(file); err != nil {
			t.Fatal(err)
		}
		_, after, ok := strings.Cut(out, "The same fit again:\n")
		if !ok || !strings.Contains(after, file) {
			t.Fatalf("no command for %s in\n%s", file, out)
		}
		s, err := demoSettings(file)
		if err != nil {
			t.Fatal(err)
		}
		code, out, errs = demoRun(t, "fit", "--json", "--outcome", s.outcome, "--terms", strings.Join(s.terms, ", "), "--errors", strings.Join(s.errors, ", "), file)
		if code != 0 {
			t.Fatalf("exit %d: %s", code, errs)
		}
		var r vcov.Result
		if err := json.Unmarshal([]byte(out), &r); err != nil {
			t.Fatal(err)
		}
		results = append(results, r)
		code, _, errs = demoRun(t, args...)
		if code != exitUse || !strings.Contains(errs, "is there already") {
			t.Errorf("a second demo into %s: exit %d, %q", dir, code, errs)
		}
	}
	p, c := results[0], results[1]
	if p.N != c.N || p.Rows.Missing != c.Rows.Missing || p.Rows.Missing == 0 {
		t.Fatalf("rows %+v and %+v", p.Rows, c.Rows)
	}
	for i := range p.Errors {
		for j := range p.Terms {
			a, b := float64(p.Errors[i].SE[j]), float64(c.Errors[i].SE[j])
			if math.Abs(a/b-1) > 1e-12 {
				t.Errorf("%s %s: %v from Parquet, %v from text", p.Errors[i].Name(), p.Terms[j], a, b)
			}
		}
	}
}

func TestDemoRefuses(t *testing.T) {
	file := filepath.Join(t.TempDir(), "plain")
	if err := os.WriteFile(file, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		args []string
		says string
	}{
		{[]string{"demo", "--rows", "many"}, `--rows: found "many", want a whole number above 0`},
		{[]string{"demo", "--rows", "0"}, `--rows: found "0"`},
		{[]string{"demo", "mine.csv"}, `found "mine.csv"`},
		{[]string{"demo", "--rows", "10", "--dir", file}, "--dir " + file},
		{[]string{"demo", "--errors", "hc1"}, "--errors is not an option of demo"},
	} {
		code, out, errs := demoRun(t, c.args...)
		if code != exitUse || out != "" || !strings.Contains(errs, c.says) || strings.Count(errs, "\n") != 1 {
			t.Errorf("%q: exit %d, output %q, message %q, want %q", c.args, code, out, errs, c.says)
		}
	}
}

func TestShellWord(t *testing.T) {
	for in, want := range map[string]string{"a/b.parquet": "a/b.parquet", "a b": "'a b'", "it's": `'it'\''s'`, "": "''", "$x": "'$x'"} {
		if got := shellWord(in); got != want {
			t.Errorf("%q is quoted as %s, want %s", in, got, want)
		}
	}
}
