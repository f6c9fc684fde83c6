package main

import (
	"bytes"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// Few replications of every design agree with the reference within their bands, the
// orderings hold, and the tables are the same for any number of workers.
func TestCoverage(t *testing.T) {
	reps := "200"
	if testing.Short() {
		reps = "10"
	}
	file := filepath.Join(t.TempDir(), "coverage.md")
	var first string
	for _, workers := range []string{"1", "3"} {
		var out, errw bytes.Buffer
		if code := run(t.Context(), []string{"-repeat", reps, "-workers", workers, "-o", file}, &out, &errw); code != 0 {
			t.Fatalf("exit status %d\n%s%s", code, errw.String(), out.String())
		}
		text, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		if string(text) != out.String() {
			t.Error("the file is not what was printed")
		}
		tables, _, _ := strings.Cut(out.String(), "\nSeed")
		if first == "" {
			first = tables
		}
		if tables != first {
			t.Errorf("other tables with %s workers:\n%s\n%s", workers, tables, first)
		}
	}
	if n := strings.Count(first, "\n| n = ") + strings.Count(first, "\n| G = "); n != len(designs) {
		t.Errorf("%d designs in the tables", n)
	}
	if !strings.Contains(first, " 0 violated of "+map[bool]string{true: "360", false: "7200"}[reps == "10"]) {
		t.Errorf("orderings:\n%s", first)
	}
}

func TestCoverageTellsWhatIsOff(t *testing.T) {
	d := *designs[0]
	c := &count{design: &d, reps: 1000, hits: make([][2]int, len(d.columns))}
	for i, p := range d.reference {
		c.hits[i] = [2]int{int(1000*p[0] + 0.5), int(1000*p[1] + 0.5)}
	}
	var out bytes.Buffer
	if render(&out, []*count{c}) || strings.Contains(out.String(), "**0") || strings.Contains(out.String(), "**1") {
		t.Errorf("the reference is not within its band:\n%s", out.String())
	}
	c.hits[0][0] += 150
	out.Reset()
	if !render(&out, []*count{c}) || !strings.Contains(out.String(), "**0.803**") || !strings.Contains(out.String(), "band: 1 of 12") {
		t.Errorf("a share far outside is not told:\n%s", out.String())
	}
	c.hits[0][0] -= 150
	c.violations = []string{"hc0 above hc1"}
	if !render(&out, []*count{c}) {
		t.Error("a violated ordering is not told")
	}
}

func TestFlags(t *testing.T) {
	for _, args := range [][]string{{"-repeat", "-1"}, {"-workers", "0"}, {"more"}, {"-what"}} {
		var out, errw bytes.Buffer
		if code := run(t.Context(), args, &out, &errw); code != 2 || errw.Len() == 0 || out.Len() > 0 {
			t.Errorf("%v: exit status %d", args, code)
		}
	}
}
