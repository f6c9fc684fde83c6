package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/tallrow/tallrow/accum"
)

func TestDescribe(t *testing.T) {
	if got := describe(2, 3_000_000, 1500*time.Millisecond); got != "pass 2  3,000,000 rows  2.00 million rows/s" {
		t.Error(got)
	}
	// A rate from the first moments would mislead.
	if got := describe(1, 10, 10*time.Millisecond); got != "pass 1  10 rows" {
		t.Error(got)
	}
}

// drawn gives what a bar writes while the meter goes through the steps.
func drawn(t *testing.T, total int64, bytes ...int64) string {
	t.Helper()
	f, err := os.Create(filepath.Join(t.TempDir(), "terminal"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	m := new(accum.Meter)
	b := newBar(f)
	now := time.Unix(0, 0)
	b.show(m, now) // before the first pass: nothing
	m.Pass.Store(1)
	m.Total.Store(total)
	for _, n := range bytes {
		m.Bytes.Store(n)
		m.Rows.Store(n / 10)
		now = now.Add(time.Second)
		b.show(m, now)
	}
	b.clear()
	text, err := os.ReadFile(f.Name())
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

func TestBar(t *testing.T) {
	got := drawn(t, 1000, 100, 500, 1000, 1200)
	for _, want := range []string{"10%", "50%", "99%", "pass 1", "50 rows", "50 rows/s"} {
		if !strings.Contains(got, want) {
			t.Errorf("no %q in %q", want, got)
		}
	}
	// The line is empty in the end, and never left.
	if !strings.HasSuffix(got, "\r") || strings.Contains(got, "\n") {
		t.Errorf("%q", got)
	}
	// A pipe has no share and no time left.
	if got := drawn(t, -1, 100, 500); strings.Contains(got, "%") || !strings.Contains(got, "50 rows") {
		t.Errorf("%q", got)
	}
}

// Nothing is drawn where standard error is no terminal.
func TestWatchIsSilent(t *testing.T) {
	f, err := os.Create(filepath.Join(t.TempDir(), "log"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	a := &app{stderr: f}
	m := new(accum.Meter)
	m.Pass.Store(1)
	stop := a.watch(newSettings(), m)
	time.Sleep(pollEvery + 50*time.Millisecond)
	stop()
	if st, err := f.Stat(); err != nil || st.Size() != 0 {
		t.Errorf("%d bytes, %v", st.Size(), err)
	}
}
