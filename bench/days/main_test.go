package main

import (
	"bytes"
	"context"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"testing"
)

// A small month, to its end: answers from digests and from the data agree.
func TestMonth(t *testing.T) {
	if testing.Short() {
		t.Skip("builds the command")
	}
	dir := t.TempDir()
	out := filepath.Join(dir, "record.md")
	var log bytes.Buffer
	if err := run(context.Background(), []string{"-days", "2", "-rows", "3000", "-repeat", "1", "-dir", dir, "-o", out}, &log); err != nil {
		t.Fatalf("%s\n%s", err, log.String())
	}
	text, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	found := regexp.MustCompile(`\| ([0-9.]+e-?[0-9]+) \|\n`).FindAllStringSubmatch(string(text), -1)
	if len(found) != len(questions) {
		t.Fatalf("%d answers in\n%s", len(found), text)
	}
	for i, f := range found {
		if x, err := strconv.ParseFloat(f[1], 64); err != nil || x > 1e-10 {
			t.Errorf("%s: differs by %s", questions[i].what, f[1])
		}
	}
}

func TestApart(t *testing.T) {
	const a = `{"estimates":[1,2],"errors":[{"kind":"hc1","clusters":[],"se":[1,4]}]}`
	if d := apart([]byte(a), []byte(a)); d != 0 {
		t.Errorf("the same answer is apart by %v", d)
	}
	if d := apart([]byte(a), []byte(`{"estimates":[1,2],"errors":[{"kind":"hc1","clusters":[],"se":[1,5]}]}`)); d != 0.2 {
		t.Errorf("apart by %v, want 0.2", d)
	}
	if d := apart([]byte(a), []byte(`{"estimates":[1,2],"errors":[]}`)); d == d {
		t.Errorf("answers of different form are apart by %v, want NaN", d)
	}
}
