package main

import (
	"bytes"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/vcov"
)

// The command gives NIST's certified figures by itself: coefficients to 13 digits,
// classical errors to 12 (testdata/README.md). Figures are printed to 15.
func TestNISTCommand(t *testing.T) {
	raw, err := os.ReadFile(filepath.Join("..", "..", "testdata", "nist", "certified.json"))
	if err != nil {
		t.Fatal(err)
	}
	var all struct {
		Datasets []struct {
			Name, File, Outcome string
			Terms               []string
			Constant            bool
			Certified           struct{ B, SE []string }
		}
	}
	if err := json.Unmarshal(raw, &all); err != nil {
		t.Fatal(err)
	}
	if len(all.Datasets) != 11 {
		t.Fatalf("%d sets", len(all.Datasets))
	}
	for _, s := range all.Datasets {
		args := []string{"fit", "--outcome", s.Outcome, "--terms", strings.Join(s.Terms, ", "), "--json",
			filepath.Join("..", "..", "testdata", "nist", s.File)}
		if !s.Constant {
			args = append(args, "--no-constant")
		}
		var r vcov.Result
		if err := json.Unmarshal([]byte(readmeRun(t, args)), &r); err != nil {
			t.Fatal(err)
		}
		near := func(what string, got []vcov.Number, want []string, tol float64) {
			if len(got) != len(want) {
				t.Fatalf("%s: %d %s", s.Name, len(got), what)
			}
			for j, text := range want {
				w, err := strconv.ParseFloat(text, 64)
				if err != nil {
					t.Fatal(err)
				}
				if !(math.Abs(float64(got[j])-w) <= tol*math.Abs(w)) {
					t.Errorf("%s: %s of %s is %v, certified %s", s.Name, what, r.Terms[j], got[j], text)
				}
			}
		}
		near("estimate", r.Estimates, s.Certified.B, 1e-13)
		near("classical error", r.Errors[0].SE, s.Certified.SE, 1e-12)
	}
}

// A plan says which arithmetic and why, and fit keeps to it.
func TestArithmeticOfPlan(t *testing.T) {
	data := filepath.Join("..", "..", "testdata", "nist", "filip.csv")
	model := []string{"--outcome", "y", "--terms", "x, pow(x, 2), pow(x, 3), pow(x, 4), pow(x, 5), pow(x, 6), pow(x, 7), pow(x, 8), pow(x, 9), pow(x, 10)", data}
	text := readmeRun(t, append([]string{"plan"}, model...))
	if !strings.Contains(text, "extended arithmetic") || !strings.Contains(text, "terms are nearly collinear") {
		t.Errorf("plan:\n%s", text)
	}
	file := filepath.Join(t.TempDir(), "plan.json")
	readmeRun(t, append([]string{"plan", "--arithmetic", "double", "-o", file}, model...))
	var r vcov.Result
	if err := json.Unmarshal([]byte(readmeRun(t, append([]string{"fit", "--plan", file, "--json"}, model...))), &r); err != nil {
		t.Fatal(err)
	}
	if r.Run.Arithmetic != "double" {
		t.Errorf("%s arithmetic, the plan has double", r.Run.Arithmetic)
	}
	var out, errs bytes.Buffer
	code := run(t.Context(), append([]string{"fit", "--plan", file, "--arithmetic", "extended"}, model...), strings.NewReader(""), &out, &errs)
	if want := "--arithmetic extended: the plan " + file + " has double"; code != 2 || !strings.Contains(errs.String(), want) {
		t.Errorf("exit %d: %s", code, errs.String())
	}
	// A pipe tells only when it is read.
	csv, err := os.ReadFile(data)
	if err != nil {
		t.Fatal(err)
	}
	model[len(model)-1] = "-"
	for _, c := range []struct{ command, want string }{{"plan", "double or extended arithmetic"}, {"fit", "extended arithmetic"}} {
		out.Reset()
		errs.Reset()
		if code := run(t.Context(), append([]string{c.command}, model...), bytes.NewReader(csv), &out, &errs); code != 0 || !strings.Contains(strings.Join(strings.Fields(out.String()), " "), c.want) {
			t.Errorf("%s of a pipe: exit %d, %s%s", c.command, code, errs.String(), out.String())
		}
	}
}
