package main

import (
	"errors"
	"fmt"
	"regexp"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"github.com/tallrow/tallrow/stream"
)

const goodModel = `# unloading times
outcome = "log(minutes)"
terms = [
  "log(pallets)", # one comment
  "max(tonnes, 1)",
  "each(barge, base=\"a\")",
]
no-constant = true
sweep = "crane"
errors = "hc1, cr1"
cluster = ["quay"]
hypothesis = ["log(pallets) = 1, constant = 0", "each(barge, level=\"b\") = 0"]
adjust = "bh"
weight = "n"
weight-kind = "frequency"
where = "tonnes > 0 && !night"
missing = "stop"
bad-rows = "skip"
level = 0.9
cluster-detail = true
audit = 40
draws = 999
draw-weights = "signs"
period = "date(t)"
unit = "crane"
lags = 3
kernel = "parzen"
seed = 5
first = 1_000
format = "csv"
no-header = false
decimal = "comma"
null = ["-999", "a, b"]
zone = "Europe/Rome"
passes = 2
arithmetic = "extended"
workers = 0x10
memory = "1GiB"
scratch = "/tmp"

[kinds]
crane = "text"
"odd, name = x" = "int64"
`

func TestModelFile(t *testing.T) {
	s := newSettings()
	if err := parseModel(s, "quay.toml", []byte(goodModel), onFit); err != nil {
		t.Fatal(err)
	}
	rome, err := time.LoadLocation("Europe/Rome")
	if err != nil {
		t.Fatal(err)
	}
	want := &settings{
		outcome: "log(minutes)", terms: []string{"log(pallets)", "max(tonnes, 1)", `each(barge, base="a")`},
		noConstant: true, sweep: "crane", errors: []string{"hc1", "cr1"}, cluster: []string{"quay"},
		hypotheses: []string{"log(pallets) = 1, constant = 0", `each(barge, level="b") = 0`}, adjust: "bh", weight: "n", weightKind: "frequency",
		where: "tonnes > 0 && !night", missing: "stop", badRows: "skip", level: 0.9, clusterDetail: true, audit: audit{on: true, buckets: 40}, draws: 999, drawWeights: "signs", seed: 5, period: "date(t)", unit: "crane", fixedLags: true, lags: 3, kernel: "parzen", first: 1000,
		format: "csv", decimal: "comma", null: []string{"-999", "a, b"}, zone: rome,
		kinds:  map[string]stream.Kind{"crane": stream.Text, "odd, name = x": stream.Int64},
		passes: 2, arithmetic: "extended", workers: 16, memory: 1 << 30, scratch: "/tmp", launch: newSettings().launch,
	}
	if d := cmp.Diff(want, s, cmp.AllowUnexported(settings{}, launchSettings{}, audit{}), cmp.FilterPath(func(p cmp.Path) bool {
		return p.String() == "from" || p.String() == "raw"
	}, cmp.Ignore()), cmp.Comparer(func(a, b *time.Location) bool { return a.String() == b.String() })); d != "" {
		t.Error(d)
	}
	if got := s.origin("terms"); got != "quay.toml line 3: terms" {
		t.Errorf("origin %q", got)
	}
	// Every key that a model file may hold stands in the example above.
	for _, name := range optionNames(onModel, true) {
		if !s.given(name) {
			t.Errorf("the example does not hold %s", name)
		}
	}
}

func TestModelKinds(t *testing.T) {
	for _, text := range []string{
		"kinds = { a = \"text\", \"b\" = \"int64\" }\n",
		"kinds = \"a=text, b=int64\"\n",
		"kinds.a = \"text\"\nkinds.b = \"int64\"\n",
		"[kinds]\na = 'text'\nb = 'int64'\n",
	} {
		s := newSettings()
		if err := parseModel(s, "m.toml", []byte(text), onFit); err != nil {
			t.Errorf("%q: %s", text, err)
			continue
		}
		if d := cmp.Diff(map[string]stream.Kind{"a": stream.Text, "b": stream.Int64}, s.kinds); d != "" {
			t.Errorf("%q: %s", text, d)
		}
	}
}

func TestModelRefuses(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"outcome = \"minutes\"\ntrems = \"a\"\n", `m.toml line 2: unknown key "trems"; did you mean terms?`},
		{"\ncheckpoint = 3\n", "m.toml line 2: checkpoint belongs on the command line: --checkpoint"},
		{"lags = 1.5\n", "m.toml line 1: lags: found 1.5, want \"auto\" or a whole number"},
		{"lags = -1\n", "m.toml line 1: lags: found \"-1\""},
		{"arithmetic = \"wide\"\n", "m.toml line 1: arithmetic: found \"wide\", want auto, double or extended"},
		{"json = true\n", "m.toml line 1: json belongs on the command line: --json"},
		{"data = \"a.csv\"\n", "m.toml line 1: data are named on the command line"},
		{"level = \"high\"\n", `m.toml line 1: level: found the string "high", want a number`},
		{"level = 95\n", `m.toml line 1: level: found "95", want a number above 0 and below 1`},
		{"level = nan\n", "m.toml line 1: level: found"},
		{"first = 1.5\n", "m.toml line 1: first: found 1.5, want a whole number"},
		{"no-constant = \"yes\"\n", `m.toml line 1: no-constant: found the string "yes", want true or false`},
		{"outcome = [\"a\"]\n", "m.toml line 1: outcome: found an array, want a string"},
		{"terms = 3\n", "m.toml line 1: terms: found 3, want a string with commas or an array of strings"},
		{"terms = [\"a\", 3]\n", "m.toml line 1: terms: found 3 in the array, want strings"},
		{"terms = [\"a\", \"\"]\n", "m.toml line 1: terms: found an empty element"},
		{"passes = 1979-05-27\n", `m.toml line 1: passes: found a date or time, want "auto", 1 or 2`},
		{"passes = 3\n", `m.toml line 1: passes: found "3"`},
		{"memory = \"lots\"\n", `m.toml line 1: memory: found "lots", want a size`},
		{"[kinds]\na = 3\n", "m.toml line 2: kinds: column a: found 3, want a kind as a string"},
		{"[kinds]\na = \"txt\"\n", `m.toml line 1: kinds: column a: found kind "txt"`},
		{"kinds = { a = 1 }\n", "m.toml line 1: kinds: column a: found 1"},
		{"[kinds]\na.b = \"text\"\n", "m.toml line 2: kinds: found the dotted name a.b"},
		{"[[kinds]]\na = \"text\"\n", "m.toml line 1: kinds: found an array of tables"},
		{"[model]\noutcome = \"a\"\n", `m.toml line 1: unknown key "model"`},
		{"[terms]\na = 1\n", "m.toml line 1: found a table terms, want a string with commas"},
		{"outcome = \"a\"\noutcome = \"b\"\n", "m.toml line 2 column 1: "},
		{"outcome = \n", "m.toml line 1 column "},
		{"outcome = \"a\n", "m.toml line 1 column "},
		{"\x00", "m.toml line 1 column 1: "},
		{"minutes,pallets\n1,2\n", "m.toml line 1 column "},
	} {
		err := parseModel(newSettings(), "m.toml", []byte(c.text), onFit)
		if err == nil || !strings.HasPrefix(err.Error(), c.want) {
			t.Errorf("%q: got %v, want %q", c.text, err, c.want)
		} else if !errors.Is(err, stream.ErrUse) {
			t.Errorf("%q: %v is no wrong use", c.text, err)
		}
	}
}

// Whatever the bytes, a model file is applied or refused on one line that
// names the file; and what is applied is the same the next time.
func FuzzModel(f *testing.F) {
	f.Add([]byte(goodModel))
	for _, s := range []string{"", "[kinds]\n", "terms = ['a', \"b\"]", "kinds = {a='text'}", "level = 0.5\n[kinds]\na='int64'",
		"kinds.a.b = 1", "[[terms]]", "first = 0b11", "terms = [[\"a\"]]", "a.b.c = 1", "level = 1e400", "\"\" = 1", "null = []"} {
		f.Add([]byte(s))
	}
	place := regexp.MustCompile(`^m\.toml( line [1-9][0-9]*( column [0-9]+)?)?: .`)
	f.Fuzz(func(t *testing.T, data []byte) {
		s, again := newSettings(), newSettings()
		err := parseModel(s, "m.toml", data, onFit)
		if err != nil {
			if !errors.Is(err, stream.ErrUse) {
				t.Errorf("%v is no wrong use", err)
			}
			if !place.MatchString(err.Error()) {
				t.Errorf("%q does not say where", err)
			}
			return
		}
		if err := parseModel(again, "m.toml", data, onFit); err != nil {
			t.Errorf("refused the second time: %v", err)
		}
		if s.zone.String() != again.zone.String() {
			t.Errorf("zones %s and %s", s.zone, again.zone)
		}
		s.zone, again.zone = nil, nil // pointers differ
		if a, b := fmt.Sprintf("%+v", s), fmt.Sprintf("%+v", again); a != b {
			t.Errorf("two readings differ:\n%s\n%s", a, b)
		}
		if s.level <= 0 || s.level >= 1 || s.workers < 1 || s.passes < 0 || s.passes > 2 || s.first < 0 || s.memory < 0 {
			t.Errorf("a value out of range got through: %+v", s)
		}
	})
}
