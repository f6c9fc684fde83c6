package main

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"github.com/tallrow/tallrow/stream"
)

// given makes settings from options and values by turns.
func given(t *testing.T, words ...string) *settings {
	t.Helper()
	s := newSettings()
	for i := 0; i < len(words); i += 2 {
		if err := s.give(optionNamed(words[i]), value{parts: []string{words[i+1]}}, "--"+words[i]); err != nil {
			t.Fatal(err)
		}
	}
	return s
}

func TestParseErrors(t *testing.T) {
	for _, c := range []struct {
		words []string
		want  string // names of the kinds
		keys  string
	}{
		{nil, "classical hc1", ""},
		{[]string{"cluster", "quay"}, "classical hc1 cr1(quay)", "quay"},
		{[]string{"weight-kind", "sampling"}, "hc1", ""},
		{[]string{"weight-kind", "sampling", "cluster", "date(t)"}, "hc1 cr1(date(t))", "date(t)"},
		{[]string{"sweep", "crane"}, "classical cr1(crane)", "crane"},
		{[]string{"sweep", "crane", "cluster", "quay"}, "classical cr1(quay)", "quay crane"},
		{[]string{"sweep", "crane", "errors", "hc1"}, "hc1", "crane"},
		{[]string{"errors", "hc1, cr1(quay), cr1(crane)"}, "hc1 cr1(quay) cr1(crane)", "quay crane"},
		{[]string{"errors", "HC3,CR0( quay ),cr1(quay)"}, "hc3 cr0(quay) cr1(quay)", "quay"},
		{[]string{"errors", "cr1, classical", "cluster", "max(quay, crane)"}, "cr1(max(quay, crane)) classical", "max(quay, crane)"},
		{[]string{"errors", "cr1(quay), cr1(crane)", "cluster", "quay, crane"}, "cr1(quay) cr1(crane)", "quay crane"},
		{[]string{"cluster", "quay, crane"}, "classical hc1 cr1(quay, crane)", "quay crane"},
		{[]string{"errors", "cr0(crane), cr2(quay), cr1(quay, crane), cr1(date(t), quay)"}, "cr0(crane) cr2(quay) cr1(crane, quay) cr1(quay, date(t))", "crane quay date(t)"},
	} {
		r, err := given(t, c.words...).parseErrors()
		if err != nil {
			t.Errorf("%q: %s", c.words, err)
			continue
		}
		if got := strings.Join(r.names(), " "); got != c.want {
			t.Errorf("%q: got %s, want %s", c.words, got, c.want)
		}
		if got := strings.Join(r.keys, " "); got != c.keys {
			t.Errorf("%q: keys %s, want %s", c.words, got, c.keys)
		}
	}
}

func TestParseErrorsRefuses(t *testing.T) {
	for _, c := range []struct {
		words []string
		want  string // part of the message
	}{
		{[]string{"errors", ""}, "found nothing"},
		{[]string{"errors", "cr3(quay, crane)"}, "cr3 is for one clustering; cr0 and cr1 take several: cr3(quay), cr3(crane)"},
		{[]string{"errors", "cr2(quay, crane)"}, "cr2 is for one clustering"},
		{[]string{"errors", "cr3"}, "cr3 needs clusters"},
		{[]string{"errors", "hac(quay)"}, "hac takes its order from --period and --unit"},
		{[]string{"unit", "quay"}, "no kind of errors uses it; add hac"},
		{[]string{"errors", "driscoll-kraay"}, "driscoll-kraay needs periods"},
		{[]string{"period", "date(t)"}, "no kind of errors uses it"},
		{[]string{"errors", "clasical"}, "did you mean classical?"},
		{[]string{"errors", "cr1"}, "cr1 needs clusters"},
		{[]string{"errors", "cr1()"}, "found no clusters"},
		{[]string{"errors", "cr1(quay, crane, quay)"}, "quay is there twice"},
		{[]string{"errors", "cr1(a, b, c, d, e)"}, "found 5 clusterings, want at most 4"},
		{[]string{"errors", "cr1(quay, crane), cr0(crane), cr1(crane, quay)"}, "cr1(crane, quay) is asked for twice"},
		{[]string{"errors", "hc1(quay)"}, "hc1 has no clusters"},
		{[]string{"errors", "hc1, hc1"}, "hc1 is asked for twice"},
		{[]string{"errors", "cr1(quay), cr1", "cluster", "quay"}, "cr1(quay) is asked for twice"},
		{[]string{"cluster", "quay", "errors", "hc1"}, "add cr1(quay)"},
		{[]string{"cluster", "quay", "errors", "cr1(crane)"}, "no kind of errors uses it"},
		{[]string{"errors", "cr1(quay) x"}, "closing parenthesis"},
	} {
		_, err := given(t, c.words...).parseErrors()
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: got %v, want %q", c.words, err, c.want)
		} else if !errors.Is(err, stream.ErrUse) {
			t.Errorf("%q: %v is no wrong use", c.words, err)
		}
	}
}

// Classical errors are computed for the ratio even when not asked for.
func TestWithClassical(t *testing.T) {
	r, err := given(t, "errors", "hc1").parseErrors()
	if err != nil {
		t.Fatal(err)
	}
	if k := r.withClassical(false); len(k) != 2 || k[0].Name != "classical" || len(r.kinds) != 1 {
		t.Errorf("got %v", k)
	}
	if k := r.withClassical(true); len(k) != 1 {
		t.Errorf("sampling weights: got %v", k)
	}
}

func TestOptionValues(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"level", "95", "0.95 for 95 %"},
		{"level", "0", "above 0 and below 1"},
		{"level", "1", "above 0 and below 1"},
		{"level", "NaN", "above 0 and below 1"},
		{"first", "0", "above 0"},
		{"first", "1.5", "whole number"},
		{"workers", "-1", "above 0"},
		{"workers", "99999", "at most 4096"},
		{"passes", "3", "auto, 1 or 2"},
		{"memory", "1G", "1GiB"},
		{"memory", "1MB", "at least 32.0 MiB"},
		{"memory", "1e300TiB", "1GiB"},
		{"memory", "NaN", "1GiB"},
		{"zone", "Local", "zone name"},
		{"zone", "Europe/Rom", "zone name"},
		{"missing", "drop", "skip or stop"},
		{"weight-kind", "analytic", "frequency, precision or sampling"},
		{"kinds", "crane", "column=kind"},
		{"kinds", "crane=txt", "did you mean text?"},
		{"kinds", "=text", "column=kind"},
		{"kinds", "a=text, a=int64", "two kinds"},
		{"terms", "a, (b", "where ) must stand"},
		{"no-header", "maybe", "true or false"},
	} {
		err := newSettings().give(optionNamed(c.name), value{parts: []string{c.text}}, "--"+c.name)
		if err == nil || !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), "--"+c.name+": ") {
			t.Errorf("--%s %s: got %v, want %q", c.name, c.text, err, c.want)
		}
	}
	s := given(t, "kinds", "odd=name=text, n=int64", "null", "-999,, .", "memory", "1.5GiB", "zone", "Europe/Rome", "level", ".9")
	if d := cmp.Diff(map[string]stream.Kind{"odd=name": stream.Text, "n": stream.Int64}, s.kinds); d != "" {
		t.Error(d)
	}
	if d := cmp.Diff([]string{"-999", "."}, s.null); d != "" {
		t.Error(d)
	}
	if s.memory != 3<<29 || s.zone.String() != "Europe/Rome" || s.level != 0.9 {
		t.Errorf("memory %d, zone %s, level %g", s.memory, s.zone, s.level)
	}
	// An empty list leaves only the empty cell missing; no list, the reader's own.
	if s := given(t, "null", ""); s.null == nil || len(s.null) != 0 {
		t.Errorf("null %q", s.null)
	}
}

func TestCheckModel(t *testing.T) {
	for _, c := range []struct {
		words []string
		want  string
	}{
		{nil, "no outcome"},
		{[]string{"outcome", "minutes"}, "no terms"},
		{[]string{"outcome", "minutes", "terms", "pallets", "weight", "n"}, "--weight needs --weight-kind: frequency if"},
		{[]string{"outcome", "minutes", "terms", "pallets", "weight-kind", "frequency"}, "--weight-kind without --weight"},
		{[]string{"outcome", "minutes", "terms", ""}, ""},
	} {
		err := given(t, c.words...).checkModel()
		if c.want == "" && err == nil {
			continue
		}
		if err == nil || c.want == "" || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: got %v, want %q", c.words, err, c.want)
		}
	}
}

// The limits of the machine and of control groups, in the layouts of proc(5)
// and of the kernel's cgroup-v2 and cgroup-v1 documents.
func TestDefaultMemory(t *testing.T) {
	const meminfo = "MemTotal:        8388608 kB\nMemFree:  1 kB\n"
	for _, c := range []struct {
		name  string
		files map[string]string
		want  int64
	}{
		{"machine", map[string]string{"proc/meminfo": meminfo}, 4 << 30},
		{"v2, own group", map[string]string{"proc/meminfo": meminfo, "proc/self/cgroup": "0::/a/b\n", "sys/fs/cgroup/a/b/memory.max": "2147483648\n"}, 1 << 30},
		{"v2, group above", map[string]string{"proc/meminfo": meminfo, "proc/self/cgroup": "0::/a/b\n", "sys/fs/cgroup/a/memory.max": "2147483648\n", "sys/fs/cgroup/a/b/memory.max": "max\n"}, 1 << 30},
		{"v2, inside a container", map[string]string{"proc/meminfo": meminfo, "proc/self/cgroup": "0::/\n", "sys/fs/cgroup/memory.max": "1073741824\n"}, 1 << 29},
		{"v1", map[string]string{"proc/meminfo": meminfo, "proc/self/cgroup": "5:cpu,memory:/x\n", "sys/fs/cgroup/memory/x/memory.limit_in_bytes": "1073741824\n"}, 1 << 29},
		{"v1 without limit", map[string]string{"proc/meminfo": meminfo, "proc/self/cgroup": "5:memory:/\n", "sys/fs/cgroup/memory/memory.limit_in_bytes": "9223372036854771712\n"}, 4 << 30},
		{"nothing known", nil, 2 << 30},
		{"tiny", map[string]string{"proc/meminfo": "MemTotal: 1000 kB\n"}, smallest},
	} {
		root := t.TempDir()
		for name, text := range c.files {
			p := filepath.Join(root, name)
			if err := os.MkdirAll(filepath.Dir(p), 0o755); err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(p, []byte(text), 0o644); err != nil {
				t.Fatal(err)
			}
		}
		if got := defaultMemory(root); got != c.want {
			t.Errorf("%s: got %d, want %d", c.name, got, c.want)
		}
	}
}

func TestPeakBytes(t *testing.T) {
	if n := peakBytes(); n < 1<<20 || n > 1<<40 {
		t.Errorf("peak of this test is %d bytes", n)
	}
}

// Workers give way when their buffers would take more than a third of the memory.
func TestShare(t *testing.T) {
	s := given(t, "memory", "124MiB", "workers", "8")
	s.memory = 150<<20 + baseBytes
	workers, sums := s.share(stream.Info{WorkerBytes: 10 << 20})
	if workers != 5 || sums != 100<<20 {
		t.Errorf("got %d workers and %d bytes for sums", workers, sums)
	}
	if workers, _ := s.share(stream.Info{WorkerBytes: 1 << 30}); workers != 1 {
		t.Errorf("got %d workers, want at least one", workers)
	}
}

// The route of clusters never hangs on workers, nor on the machine.
func TestClusterMemory(t *testing.T) {
	for _, workers := range []string{"1", "8"} {
		s := given(t, "workers", workers, "memory", "160MiB")
		if got := s.clusterMemory(); got != 10<<20 {
			t.Errorf("%s workers: %d", workers, got)
		}
		s = given(t, "workers", workers)
		for _, s.memory = range []int64{1 << 30, 1 << 40} {
			if got := s.clusterMemory(); got != 128<<20 {
				t.Errorf("%s workers, machine of %d: %d", workers, s.memory, got)
			}
		}
	}
}

func TestNearest(t *testing.T) {
	known := optionNames(onAll, false)
	for word, want := range map[string]string{"outcom": "outcome", "term": "terms", "tremS": "terms", "clusters": "cluster", "wieght": "weight", "zzz": "", "bad_rows": "bad-rows"} {
		if got := nearest(word, known); got != want {
			t.Errorf("nearest(%q) = %q, want %q", word, got, want)
		}
	}
}

// The reference for readers is made from the table of options.
func TestModelReference(t *testing.T) { golden(t, "model_reference.md", reference()) }

// Every option is complete.
func TestOptionTable(t *testing.T) {
	for _, o := range options {
		if o.help == "" || o.set == nil || o.on == 0 || (o.value == "") != (o.form == formSwitch) {
			t.Errorf("--%s is not complete", o.name)
		}
		known := false
		for _, g := range groups {
			known = known || g == o.group
		}
		if !known {
			t.Errorf("--%s is in no group of the help", o.name)
		}
	}
}
