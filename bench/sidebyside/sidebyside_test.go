package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"
)

// The contestants of this program are processes of the test binary here.
func TestMain(m *testing.M) {
	if len(os.Args) == 3 && os.Args[1] == "task" {
		os.Exit(run(context.Background(), os.Args[1:], os.Stdout, os.Stderr))
	}
	os.Exit(m.Run())
}

// Every contestant that is here gives the same numbers on few rows. The SQL
// engine is not installed for it; TALLROW_NPM names a folder that has it.
func TestScenarios(t *testing.T) {
	if testing.Short() {
		t.Skip("builds the command and starts a hundred processes")
	}
	s := &session{
		dir: t.TempDir(), rows: 20_000, repeat: 1, workers: []int{1, 2}, patience: time.Minute,
		progress: t.Output(), startups: map[int]float64{}, large: map[string]bool{}, npm: os.Getenv("TALLROW_NPM"),
	}
	s.output = filepath.Join(s.dir, "record.json")
	names := []string{"hc1-parquet", "cr1-1e4", "csv", "arithmetic", "memory"}
	if err := s.whole(t.Context(), names); err != nil {
		t.Fatal(err)
	}
	for _, bad := range s.record.bad() {
		t.Error(bad)
	}
	text, err := os.ReadFile(s.output)
	if err != nil {
		t.Fatal(err)
	}
	var got Record
	if err := json.Unmarshal(text, &got); err != nil {
		t.Fatal(err)
	}
	if !got.Complete || len(got.Scenarios) != len(names) {
		t.Fatalf("complete %v, %d scenarios, want %d", got.Complete, len(got.Scenarios), len(names))
	}
	skipped := make(map[string]bool)
	for _, sc := range got.Scenarios {
		confirmed := 0
		for _, r := range sc.Results {
			if r.Status == "skipped" {
				mayMiss := strings.HasPrefix(r.Name, "SQL engine") && s.noSQL != "" ||
					strings.HasPrefix(r.Name, "numpy") && s.noPython != "" || strings.HasSuffix(r.Name, "extended")
				if !mayMiss {
					t.Errorf("%s, %s: skipped: %s", sc.Name, r.Name, r.Reason)
				}
				skipped[r.Reason] = true
				continue
			}
			if r.Status != "ok" || len(r.Times) != 1 || !(r.Seconds > 0) {
				t.Errorf("%s, %s: %+v", sc.Name, r.Name, r)
			}
			if r.Outside {
				if r.Apart == nil || !(*r.Apart <= tolerance) {
					t.Errorf("%s, %s: not compared", sc.Name, r.Name)
				}
				confirmed++
			}
		}
		if confirmed == 0 && s.noSQL == "" {
			t.Errorf("%s: nothing from outside ran", sc.Name)
		}
	}
	for reason := range skipped {
		t.Log("skipped:", reason)
	}
	if r := got.Scenarios[0].Results[0]; r.Ratio == nil || *r.Ratio != 1 {
		t.Errorf("the base has the ratio %v to itself", r.Ratio)
	}
	if left, _ := filepath.Glob(filepath.Join(s.dir, "*trip*")); len(left) > 0 {
		t.Errorf("large files left: %v", left)
	}
	page, err := os.ReadFile(strings.TrimSuffix(s.output, ".json") + ".md")
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range names {
		if !strings.Contains(string(page), "\n## "+name+"\n") {
			t.Errorf("the page has no part %s", name)
		}
	}
}

// What is wrong gets no time and no ratio.
func TestCompete(t *testing.T) {
	good := answer{Seconds: 2, Rows: 5, Beta: []float64{3, 0}, SE: []float64{1, 2}}
	contest := func(name string, change func(*answer)) contestant {
		return contestant{name: name, workers: 1, compare: "hc1", outside: true,
			command: func(bool) (env, argv []string) { return nil, []string{"true"} },
			read: func(measured) (answer, error) {
				a := good
				a.Beta, a.SE = slices.Clone(a.Beta), slices.Clone(a.SE)
				change(&a)
				return a, nil
			}}
	}
	list := []contestant{
		contest("base", func(*answer) {}),
		contest("close", func(a *answer) { a.Seconds, a.SE[1] = 5, 2*(1+1e-9) }),
		contest("near zero", func(a *answer) { a.Beta[1] = 1e-9 }),
		contest("far", func(a *answer) { a.SE[1] = 2 * (1 + 1e-7) }),
		contest("NaN", func(a *answer) { a.SE[0] = math.NaN() }),
		contest("estimate", func(a *answer) { a.Beta[0] += 1e-6 }),
		contest("rows", func(a *answer) { a.Rows = 4 }),
		contest("short", func(a *answer) { a.SE = a.SE[:1] }),
		contest("exact", func(a *answer) { a.SE[1] = math.Nextafter(2, 3) }),
		contest("broken", func(*answer) {}),
		contest("absent", func(*answer) {}),
		contest("slow", func(*answer) {}),
		contest("slower", func(*answer) {}),
	}
	list[0].base = true
	list[8].exact = true
	list[9].command = func(bool) (env, argv []string) { return nil, []string{"false"} }
	list[10].skip = "not here"
	list[11].command = func(bool) (env, argv []string) { return nil, []string{"sleep", "60"} }
	list[11].limit = 50 * time.Millisecond
	slower := 0 // quick to be checked and at first, too slow then
	list[12].command = func(bool) (env, argv []string) {
		if slower++; slower > 2 {
			return nil, []string{"sleep", "60"}
		}
		return nil, []string{"true"}
	}
	list[12].limit = 2 * time.Second
	s := &session{progress: t.Output(), patience: time.Minute}
	sc := &Scenario{Name: "test"}
	if err := s.compete(t.Context(), sc, list, 3); err != nil {
		t.Fatal(err)
	}
	want := []string{"ok", "ok", "ok", "disagrees", "disagrees", "disagrees", "disagrees", "disagrees", "disagrees", "failed", "skipped", "stopped", "ok"}
	for i, r := range sc.Results {
		if r.Status != want[i] {
			t.Errorf("%s: %s (%s), want %s", r.Name, r.Status, r.Reason, want[i])
		}
		rounds := map[bool]int{true: 3}[r.Status == "ok"]
		if r.Name == "slower" {
			rounds = 1
		}
		if timed := r.Status == "ok"; len(r.Times) != rounds || (r.Ratio != nil) != timed {
			t.Errorf("%s, %s: %d times, ratio %v", r.Name, r.Status, len(r.Times), r.Ratio)
		}
	}
	if q := *sc.Results[1].Ratio; q != 2.5 {
		t.Errorf("ratio %v, want 2.5", q)
	}
	bad := (&Record{Scenarios: []*Scenario{sc}}).bad()
	if len(bad) != 7 {
		t.Errorf("%d are told as bad, want 7: %q", len(bad), bad)
	}
	if len(sc.Remarks) != 0 {
		t.Errorf("remarks %q", sc.Remarks)
	}

	// A run that is stopped keeps the rounds it had and times nothing else.
	ctx, stop := context.WithCancel(t.Context())
	cut := slices.Clone(list[:2])
	calls := 0
	cut[1].read = func(measured) (answer, error) {
		if calls++; calls == 2 {
			stop()
		}
		return good, nil
	}
	sc = &Scenario{Name: "test"}
	if err := s.compete(ctx, sc, cut, 3); !errors.Is(err, context.Canceled) {
		t.Errorf("error %v, want that of the context", err)
	}
	if a, b := sc.Results[0], sc.Results[1]; a.Status != "ok" || len(a.Times) != 1 || b.Status != "stopped" || b.Times != nil {
		t.Errorf("after a stop: %+v, %+v", a, b)
	}

	// Numbers of the project alone are marked so.
	list = list[:2]
	list[0].outside, list[1].outside = false, false
	sc = &Scenario{Name: "test"}
	if err := s.compete(t.Context(), sc, list, 1); err != nil {
		t.Fatal(err)
	}
	if len(sc.Remarks) != 1 || !strings.Contains(sc.Remarks[0], "confirm") {
		t.Errorf("remarks %q", sc.Remarks)
	}
}

// The files of a layout are the same whenever they are made, and a file under
// its final name is whole.
func TestData(t *testing.T) {
	l := layout{Rows: 2*blockRows + 77, Terms: 10, IDs: []cluster{quay, {"trip", 50}}}
	one, two := t.TempDir(), t.TempDir()
	for _, format := range []string{"parquet", "csv", "f64"} {
		var text [2][]byte
		for i, dir := range []string{one, two} {
			n, err := l.ensure(t.Context(), dir, format)
			if err != nil {
				t.Fatal(err)
			}
			if text[i], err = os.ReadFile(l.path(dir, format)); err != nil {
				t.Fatal(err)
			}
			if int64(len(text[i])) != n || n > l.storedAtMost(format) {
				t.Errorf("%s: %d bytes, %d said, at most %d expected", format, len(text[i]), n, l.storedAtMost(format))
			}
		}
		if !bytes.Equal(text[0], text[1]) {
			t.Errorf("%s differs when made again", format)
		}
	}
	stopped, stop := context.WithCancel(t.Context())
	stop()
	dir := t.TempDir()
	if _, err := l.ensure(stopped, dir, "csv"); !errors.Is(err, context.Canceled) {
		t.Errorf("error %v, want that of the context", err)
	}
	if left, _ := os.ReadDir(dir); len(left) > 0 {
		t.Errorf("left: %v", left)
	}
}

func TestMedian(t *testing.T) {
	for _, c := range []struct {
		x    []float64
		want float64
	}{{[]float64{3}, 3}, {[]float64{5, 1, 3}, 3}, {[]float64{4, 1, 2, 8}, 3}} {
		if got := median(c.x); got != c.want {
			t.Errorf("median(%v) = %v, want %v", c.x, got, c.want)
		}
	}
}

func TestFlags(t *testing.T) {
	for _, bad := range [][]string{
		{"-rows", "10"}, {"-repeat", "0"}, {"-workers", "x"}, {"-workers", "0"}, {"-scenario", "none"},
		{"-o", "record.txt"}, {"more"}, {"-patience", "0s"}, {"-unknown"},
	} {
		var errw bytes.Buffer
		if status := run(t.Context(), bad, t.Output(), &errw); status != 2 || errw.Len() == 0 {
			t.Errorf("%v: status %d, said %q", bad, status, errw.String())
		}
	}
}
