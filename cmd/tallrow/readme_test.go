package main

import (
	"bytes"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// changing is what differs from run to run and machine to machine.
var changing = regexp.MustCompile(`(?s)\nrun       .*?\n([a-z]|\n)`)

var (
	fence     = regexp.MustCompile("(?s)```text\n\\$ (.*?)\n(.*?)```")
	tomlFence = regexp.MustCompile("(?s)```toml\n(.*?)```")
	words     = regexp.MustCompile(`"[^"]*"|\S+`)
)

// The README's commands print what it shows, its model file works, and its
// reference is the program's own list of options.
func TestReadme(t *testing.T) {
	t.Chdir(filepath.Join("..", ".."))
	raw, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	text := string(raw)
	steady := func(s string) string {
		return changing.ReplaceAllString(s, "\nrun (left out)\n$1")
	}
	blocks := fence.FindAllStringSubmatch(text, -1)
	if len(blocks) == 0 {
		t.Fatal("no command with its output in README.md")
	}
	for _, b := range blocks {
		var args []string
		for _, w := range words.FindAllString(b[1], -1)[1:] {
			args = append(args, strings.Trim(w, `"`))
		}
		out := readmeRun(t, args)
		if *update {
			text = strings.Replace(text, b[0], "```text\n$ "+b[1]+"\n"+out+"```", 1)
			continue
		}
		if d := cmp.Diff(steady(b[2]), steady(out)); d != "" {
			t.Errorf("$ %s (-README +program):\n%s", b[1], d)
		}
	}
	if *update {
		if err := os.WriteFile("README.md", []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	if !strings.Contains(text, reference()) {
		t.Error("README.md does not hold the model reference as it is; see cmd/tallrow/testdata/model_reference.md")
	}
	m := tomlFence.FindStringSubmatch(text)
	if m == nil {
		t.Fatal("no model file in README.md")
	}
	model := filepath.Join(t.TempDir(), "model.toml")
	if err := os.WriteFile(model, []byte(m[1]), 0o644); err != nil {
		t.Fatal(err)
	}
	readmeRun(t, []string{"fit", model, "testdata/quays/unloading.csv"})
}

func readmeRun(t *testing.T, args []string) string {
	t.Helper()
	var out, errs bytes.Buffer
	if code := run(t.Context(), args, strings.NewReader(""), &out, &errs); code != 0 {
		t.Fatalf("tallrow %q: exit %d: %s", args, code, errs.String())
	}
	return out.String()
}
