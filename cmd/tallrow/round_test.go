package main

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/vcov"
)

// must runs a command line that has to succeed.
func must(t *testing.T, args ...string) string {
	t.Helper()
	code, out, errw := try(context.Background(), nil, args...)
	if code != exitDone {
		t.Fatalf("%q: status %d, stderr %q", args, code, errw)
	}
	return out
}

// fails runs a command line that has to end with a status and a message.
func fails(t *testing.T, status int, message string, args ...string) {
	t.Helper()
	code, out, errw := try(context.Background(), nil, args...)
	if code != status || !strings.Contains(errw, message) || out != "" {
		t.Errorf("%q: status %d, stdout %q, stderr %q; want status %d and %q", args, code, out, errw, status, message)
	}
}

func result(t *testing.T, name string) *vcov.Result {
	t.Helper()
	text, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	var r vcov.Result
	if err := json.Unmarshal(text, &r); err != nil {
		t.Fatal(err)
	}
	return &r
}

// quays makes the demo's data.
func quays(t *testing.T, rows int) string {
	t.Helper()
	dir := t.TempDir()
	must(t, "demo", "--rows", fmt.Sprint(rows), "--dir", dir)
	found, err := filepath.Glob(filepath.Join(dir, "*.parquet"))
	if err != nil || len(found) != 1 {
		t.Fatalf("found %q, %v", found, err)
	}
	return found[0]
}

// Two rounds in parts give the bits of a fit in two passes, whatever the number of
// parts and how they are joined: errors by row, by level, by cluster.
func TestTwoRounds(t *testing.T) {
	data := quays(t, 60_000)
	for _, c := range []struct{ name, terms, weight, errors string }{
		{"numbers", "pallets, tonnes, night", "", "hc1, hc2, hc3, hc4m, cr0(crane), cr2(quay)"},
		{"levels", "pallets, each(barge), each(crew) * wet", "", "hc1, hc3, cr1(crane), cr3(quay)"},
		{"two ways", "tonnes, each(barge)", "", "hc0, cr1(quay, crane)"},
		{"weights", "pallets, each(barge)", "crew", "hc1, hc3, cr1(crane)"},
		{"eliminated", "tonnes, each(crane)", "", "hc1, hc3"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			in := func(name string) string { return filepath.Join(dir, name) }
			model := []string{"--outcome", "minutes", "--terms", c.terms, "--errors", c.errors, "--quiet"}
			if c.weight != "" {
				model = append(model, "--weight", c.weight, "--weight-kind", "precision")
			}
			with := func(command string, more ...string) []string {
				return slices.Concat([]string{command}, model, []string{data}, more)
			}
			must(t, with("fit", "--passes", "2", "--json", "-o", in("whole.json"))...)
			var ones, twos []string
			for i := range 3 {
				name := in(fmt.Sprintf("one-%d.digest", i))
				must(t, with("digest", "--part", fmt.Sprintf("%d/3", i), "-o", name)...)
				ones = append(ones, name)
			}
			must(t, "pool", ones[2], ones[0], ones[1], "-o", in("one.digest"))
			must(t, "fit", in("one.digest"), "--json", "--errors", "classical", "-o", in("one.json"))
			for i := range 4 {
				name := in(fmt.Sprintf("two-%d.digest", i))
				must(t, with("digest", "--at", in("one.json"), "--part", fmt.Sprintf("%d/4", i), "-o", name)...)
				twos = append(twos, name)
			}
			must(t, "pool", "--partial", twos[3], twos[0], "-o", in("some.digest"))
			must(t, "pool", twos[1], in("some.digest"), twos[2], "-o", in("two.digest"))
			must(t, "pool", twos[0], twos[1], twos[2], twos[3], "-o", in("again.digest"))
			a, _ := os.ReadFile(in("two.digest"))
			if b, _ := os.ReadFile(in("again.digest")); string(a) != string(b) {
				t.Error("grouping shows in the bytes of joined digests")
			}
			must(t, "fit", in("one.digest"), in("two.digest"), "--errors", c.errors, "--json", "-o", in("pooled.json"))
			want, got := result(t, in("whole.json")), result(t, in("pooled.json"))
			if !slices.Equal(want.Estimates, got.Estimates) {
				t.Error("estimates differ")
			}
			for i, e := range want.Errors {
				g := got.Errors[i]
				near := 0.0
				if c.name == "numbers" && e.Kind == "cr2" {
					near = 1e-13 // a fit has these second moments from its first pass
				}
				same := func(a, b vcov.Number) bool {
					return a == b || !a.Exists() && !b.Exists() || math.Abs(float64(a-b)) <= near*math.Abs(float64(a))
				}
				if e.Name() != g.Name() || e.Status != g.Status || len(e.SE) == 0 || !slices.EqualFunc(e.SE, g.SE, same) {
					t.Errorf("%s %s: got %s %s %v, want %v", e.Name(), e.Status, g.Name(), g.Status, g.SE, e.SE)
				}
			}

			fails(t, exitIncomplete, "missing", "fit", in("one.digest"), twos[0])
			fails(t, exitUse, "is of a second round", "fit", in("two.digest"))
			fails(t, exitUse, "whole model", "fit", in("one.digest"), in("two.digest"), "--terms", "")
			fails(t, exitFailed, "different rounds", "pool", in("one.digest"), in("two.digest"), "-o", in("mixed.digest"))
			fails(t, exitUse, "is a fit of data", with("digest", "--at", in("whole.json"), "-o", in("x.digest"))...)
		})
	}
}

// A second round is for the rows and the model of the first.
func TestSecondRoundRefuses(t *testing.T) {
	data, other := quays(t, 20_000), quays(t, 30_000)
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	model := []string{"--outcome", "minutes", "--terms", "pallets, each(barge)", "--errors", "hc3", "--quiet"}
	must(t, slices.Concat([]string{"digest"}, model, []string{data, "-o", in("one.digest")})...)
	must(t, "fit", in("one.digest"), "--errors", "classical", "--json", "-o", in("one.json"))
	fails(t, exitUse, "second round (tallrow digest --at)", "fit", in("one.digest"), "--errors", "hc3")
	fails(t, exitUse, "are not an input of the first round", slices.Concat([]string{"digest"}, model, []string{other, "--at", in("one.json"), "-o", in("x.digest")})...)
	fails(t, exitUse, "terms is", "digest", "--outcome", "minutes", "--terms", "pallets, each(crew)", "--errors", "hc3", data, "--at", in("one.json"), "-o", in("x.digest"))
	must(t, slices.Concat([]string{"digest"}, model, []string{data, "--at", in("one.json"), "-o", in("two.digest")})...)
	must(t, slices.Concat([]string{"digest"}, model, []string{other, "-o", in("other.digest")})...)
	fails(t, exitUse, "is the second round of other digests", "fit", in("other.digest"), in("two.digest"))
	must(t, slices.Concat([]string{"digest"}, model, []string{other, "-o", in("one.digest")})...)
	fails(t, exitFailed, "are not what they were", slices.Concat([]string{"digest"}, model, []string{data, "--at", in("one.json"), "-o", in("x.digest")})...)
	if _, err := os.Stat(in("x.digest")); err == nil {
		t.Error("a refused run left a file")
	}
}

// Sums of units add up: parts and days in one frame answer as the data do, with hidden
// units too.
func TestSweptDigests(t *testing.T) {
	data, other := quays(t, 60_000), quays(t, 50_000)
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	if err := os.WriteFile(in("key"), []byte(strings.Repeat("k", 40)), 0o600); err != nil {
		t.Fatal(err)
	}
	model := []string{"--outcome", "minutes", "--terms", "pallets, tonnes, wet", "--sweep", "crane", "--errors", "classical, cr1(crane), cr3(crane)", "--quiet"}
	with := func(command string, more ...string) []string { return slices.Concat([]string{command}, model, more) }
	must(t, with("fit", data, "--passes", "1", "--arithmetic", "extended", "--json", "-o", in("whole.json"))...)
	for i := range 3 {
		must(t, with("digest", data, "--part", fmt.Sprintf("%d/3", i), "-o", in(fmt.Sprintf("part-%d.digest", i)))...)
		must(t, with("digest", data, "--part", fmt.Sprintf("%d/3", i), "--hide-ids", in("key"), "-o", in(fmt.Sprintf("hidden-%d.digest", i)))...)
	}
	must(t, "fit", in("part-2.digest"), in("part-0.digest"), in("part-1.digest"), "--json", "--errors", "classical, cr1(crane), cr3(crane)", "-o", in("parts.json"))
	must(t, "fit", in("hidden-2.digest"), in("hidden-0.digest"), in("hidden-1.digest"), "--json", "--errors", "classical, cr1(crane), cr3(crane)", "-o", in("hidden.json"))
	want := result(t, in("whole.json"))
	compare := func(name string, near float64) {
		got := result(t, in(name))
		same := func(a, b vcov.Number) bool {
			return math.Abs(float64(a-b)) <= near*math.Abs(float64(a)) || a == b
		}
		if !slices.EqualFunc(want.Estimates, got.Estimates, same) || want.Rows.Used != got.Rows.Used || want.Rows.Singleton != got.Rows.Singleton || *want.Sweep != *got.Sweep {
			t.Errorf("%s: %v of %d rows, want %v of %d", name, got.Estimates, got.Rows.Used, want.Estimates, want.Rows.Used)
		}
		for i, e := range want.Errors {
			if g := got.Errors[i]; e.Status != "ok" || g.Status != "ok" || !slices.EqualFunc(e.SE, g.SE, same) || e.Factor != g.Factor {
				t.Errorf("%s: %s: %v, want %v", name, e.Name(), g.SE, e.SE)
			}
		}
	}
	compare("parts.json", 0)
	compare("hidden.json", 1e-13) // the order of units is another

	must(t, with("digest", data, "-o", in("may.digest"))...)
	must(t, with("digest", other, "-o", in("alone.digest"))...)
	must(t, with("digest", other, "--frame-from", in("may.digest"), "-o", in("june.digest"))...)
	fails(t, exitFailed, "make the digests with --frame-from", "fit", in("may.digest"), in("alone.digest"))
	must(t, "fit", in("may.digest"), in("june.digest"), "--json", "--errors", "classical, cr1(crane), cr3(crane)", "-o", in("days.json"))
	must(t, with("fit", data, other, "--passes", "1", "--arithmetic", "extended", "--json", "-o", in("both.json"))...)
	want = result(t, in("both.json"))
	compare("days.json", 1e-11)

	fails(t, exitUse, "only the whole model", "fit", in("may.digest"), "--terms", "pallets")
	fails(t, exitUse, "fixed when the digest was made", "fit", in("may.digest"), "--sweep", "quay")
	fails(t, exitUse, "for hc1 fit the data", "digest", data, "--outcome", "minutes", "--terms", "pallets", "--sweep", "crane", "--errors", "hc1", "-o", in("x.digest"))
}

// The same rows from a file and from a pipe are found out.
func TestSameRowsTwice(t *testing.T) {
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	data := filepath.Join("..", "..", "testdata", "quays", "unloading.csv")
	model := []string{"digest", "--outcome", "minutes", "--terms", "pallets", "--quiet"}
	must(t, slices.Concat(model, []string{data, "-o", in("file.digest")})...)
	f, err := os.Open(data)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	pipe := struct{ io.Reader }{f} // not a file for the program
	if code, _, errw := try(context.Background(), pipe, slices.Concat(model, []string{"-", "-o", in("pipe.digest")})...); code != exitDone {
		t.Fatal(errw)
	}
	fails(t, exitUse, "would write over one of the digests", "pool", in("file.digest"), "-o", in("file.digest"))
	fails(t, exitFailed, "they have used the same cells", "pool", in("file.digest"), in("pipe.digest"), "-o", in("both.digest"))
}

// More digests than are open at a time are joined by groups, with the same bytes.
func TestManyDigests(t *testing.T) {
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	var names []string
	for i := range poolMost + 3 {
		data, name := in(fmt.Sprintf("%03d.csv", i)), in(fmt.Sprintf("%03d.digest", i))
		rows := "quay,pallets,minutes\n"
		for r := range 5 {
			rows += fmt.Sprintf("%d,%d,%d\n", (i+r)%7, i*r%11+r, 3*i+r*r)
		}
		if err := os.WriteFile(data, []byte(rows), 0o600); err != nil {
			t.Fatal(err)
		}
		args := []string{"digest", "--outcome", "minutes", "--terms", "pallets", "--cluster", "quay", "--quiet", data, "-o", name}
		if i > 0 {
			args = append(args, "--frame-from", names[0])
		}
		must(t, args...)
		names = append(names, name)
	}
	must(t, slices.Concat([]string{"pool"}, names, []string{"-o", in("all.digest")})...)
	must(t, slices.Concat([]string{"pool"}, names[:70], []string{"-o", in("some.digest")})...)
	must(t, slices.Concat([]string{"pool"}, names[70:], []string{in("some.digest"), "-o", in("again.digest")})...)
	a, _ := os.ReadFile(in("all.digest"))
	if b, _ := os.ReadFile(in("again.digest")); len(a) == 0 || string(a) != string(b) {
		t.Error("grouping shows in the bytes")
	}
	must(t, slices.Concat([]string{"fit"}, names, []string{"--json", "-o", in("many.json")})...)
	must(t, "fit", in("all.digest"), "--json", "-o", in("one.json"))
	many, one := result(t, in("many.json")), result(t, in("one.json"))
	if !slices.Equal(many.Estimates, one.Estimates) || !slices.Equal(many.Errors[2].SE, one.Errors[2].SE) || len(many.Input.Sums.Digests) != len(names) || many.Rows.Used != int64(5*len(names)) {
		t.Errorf("%v %v of %d digests, want %v %v of %d", many.Estimates, many.Errors[2].SE, len(many.Input.Sums.Digests), one.Estimates, one.Errors[2].SE, len(names))
	}
	if err := os.WriteFile(in("copy.digest"), mustRead(t, names[4]), 0o600); err != nil {
		t.Fatal(err)
	}
	fails(t, exitFailed, "part 0 of 1 is there twice: in "+names[4], slices.Concat([]string{"pool"}, names, []string{in("copy.digest"), "-o", in("x.digest")})...)
}

func mustRead(t *testing.T, name string) []byte {
	t.Helper()
	b, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	return b
}
