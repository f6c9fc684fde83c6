package main

import (
	"encoding/json"
	"os/exec"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/testscript"
)

// numbersOf is what a result says of the data: all but the run and where it read.
func numbersOf(text []byte) (map[string]any, error) {
	dec := json.NewDecoder(strings.NewReader(string(text)))
	dec.UseNumber() // digits as they stand: equal texts of shortest numbers are equal bits
	var doc map[string]any
	if err := dec.Decode(&doc); err != nil {
		return nil, err
	}
	delete(doc, "run")
	if in, ok := doc["input"].(map[string]any); ok {
		if sums, ok := in["sums"].(map[string]any); ok {
			delete(sums, "digests")
		}
	}
	return doc, nil
}

// scriptSums FILE FILE compares two results, but for the run.
func scriptSums(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: sums file file")
	}
	a, err := numbersOf([]byte(ts.ReadFile(args[0])))
	ts.Check(err)
	b, err := numbersOf([]byte(ts.ReadFile(args[1])))
	ts.Check(err)
	if d := cmp.Diff(a, b); d != "" {
		ts.Fatalf("-%s +%s\n%s", args[0], args[1], d)
	}
}

// scriptSame FILE FILE compares two results for readers, but for times and memory.
func scriptSame(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: same file file")
	}
	steady := func(s string) string {
		head, _, ok := strings.Cut(s, "\nrun  ")
		if !ok {
			ts.Fatalf("no line about the run in %q", s)
		}
		return head
	}
	if d := cmp.Diff(steady(ts.ReadFile(args[0])), steady(ts.ReadFile(args[1]))); d != "" {
		ts.Fatalf("-%s +%s\n%s", args[0], args[1], d)
	}
}

func TestRanges(t *testing.T) {
	for want, list := range map[string][]int{"": nil, "4": {4}, "0-2": {0, 1, 2}, "0,2,5-6,9": {0, 2, 5, 6, 9}} {
		if got := ranges(list); got != want {
			t.Errorf("%v: %q, want %q", list, got, want)
		}
	}
	var odd []int
	for i := range 500 {
		odd = append(odd, 2*i+1)
	}
	if got := someRanges(odd); len(got) > 100 || !strings.HasPrefix(got, "1,3,5,") || !strings.HasSuffix(got, ",... (500)") {
		t.Errorf("%q", got)
	}
}

func TestSplitWords(t *testing.T) {
	for text, want := range map[string][]string{
		"":                                 nil,
		" -p  night ":                      {"-p", "night"},
		`--comment="a b" -x ''`:            {"--comment=a b", "-x", ""},
		`'--comment=it is "so"' "it's"`:    {`--comment=it is "so"`, "it's"},
		"--gres=scratch:1\t--account=quay": {"--gres=scratch:1", "--account=quay"},
	} {
		got, err := splitWords(text)
		if err != nil || !slices.Equal(got, want) {
			t.Errorf("%q: %q, %v; want %q", text, got, err, want)
		}
	}
	if _, err := splitWords(`--comment="a b`); err == nil {
		t.Error("a quote that does not end is taken")
	}
}

// A shell reads a quoted word as it was.
func TestQuoted(t *testing.T) {
	sh, err := exec.LookPath("sh")
	if err != nil {
		t.Skip("no shell")
	}
	words := []string{"a", "", "it's", `"$HOME" \ * ? [a] ~ #`, "a\nb", "-n", "ümlaut", "`id`", "%A", "a=b;c"}
	out, err := exec.Command(sh, "-c", "for w in "+command(words...)+`; do printf '%s\0' "$w"; done`).Output()
	if err != nil {
		t.Fatal(err)
	}
	if got := strings.Split(strings.TrimSuffix(string(out), "\x00"), "\x00"); !slices.Equal(got, words) {
		t.Errorf("%q, want %q", got, words)
	}
}

func TestLaunchTime(t *testing.T) {
	for text, want := range map[string]int64{"1m": 1, "90s": 2, "4h": 240, "1d": 1440, "2d1h30m": 2970} {
		s := newSettings()
		if err := setTime(s, value{parts: []string{text}}); err != nil || minutes(s.launch.limit) != want {
			t.Errorf("%s: %d minutes, %v; want %d", text, minutes(s.launch.limit), err, want)
		}
	}
	for _, text := range []string{"", "30s", "-4h", "1d-2h", "10", "1:00:00", "d", "99999d", "NaNh"} {
		if s := newSettings(); setTime(s, value{parts: []string{text}}) == nil {
			t.Errorf("%q is taken as %v", text, s.launch.limit)
		}
	}
}

// Every part is the work of one task, whatever array the site allows.
func TestTasksOf(t *testing.T) {
	for _, parts := range []int{1, 2, 7, 8, 9, 20} {
		for tasks := 1; tasks <= parts; tasks++ {
			r := &launch{Parts: parts, Tasks: tasks}
			seen := make([]int, parts)
			for task := range tasks {
				for i := task; i < parts; i += tasks { // as the script does
					seen[i]++
					if got := r.tasksOf([]int{i}); !slices.Equal(got, []int{task}) {
						t.Fatalf("part %d of %d, %d tasks: task %v, want %d", i, parts, tasks, got, task)
					}
				}
			}
			if slices.Max(seen) != 1 || slices.Min(seen) != 1 {
				t.Errorf("%d parts, %d tasks: %v", parts, tasks, seen)
			}
		}
	}
}

// Looks become rarer, within bounds.
func TestLaunchInterval(t *testing.T) {
	for ago, want := range map[time.Duration]time.Duration{0: time.Second, 100 * time.Second: 5 * time.Second, time.Hour: 30 * time.Second} {
		l := &launcher{start: time.Now().Add(-ago)}
		if got := l.interval().Round(time.Second); got != want {
			t.Errorf("after %v: %v, want %v", ago, got, want)
		}
	}
}

// Whatever makes another run differs.
func TestLaunchDiffers(t *testing.T) {
	fresh := func() *launch {
		return &launch{Parts: 2, Result: "/r", Data: []string{"/d"}, Digest: []string{"--outcome=y"}, Fit: []string{"--level=0.9"}, Model: &launchModel{"m.toml", "x"}, Rounds: 1}
	}
	if what := fresh().differs(fresh()); what != "" {
		t.Errorf("equal runs differ: %s", what)
	}
	other := fresh()
	other.ID, other.Tasks, other.Job = "x", 2, job{CPUs: 4}
	if what := fresh().differs(other); what != "" {
		t.Errorf("other resources make another run: %s", what)
	}
	for name, change := range map[string]func(*launch){
		"Parts": func(r *launch) { r.Parts = 3 }, "Result": func(r *launch) { r.Result = "/q" }, "JSON": func(r *launch) { r.JSON = true },
		"Model": func(r *launch) { r.Model.Text = "z" }, "Digest": func(r *launch) { r.Digest = nil }, "Fit": func(r *launch) { r.Fit[0] = "--level=0.8" },
		"Data": func(r *launch) { r.Data = nil },
	} {
		o := fresh()
		change(o)
		if fresh().differs(o) == "" {
			t.Errorf("%s: no difference seen", name)
		}
	}
	// A field that is added must be thought of.
	if n := reflect.TypeFor[launch]().NumField(); n != 15 {
		t.Errorf("launch has %d fields; does differs know them all?", n)
	}
}
