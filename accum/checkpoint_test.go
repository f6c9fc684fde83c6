package accum

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

var checkpointFacts = []Fact{{"the input quay.csv", "120 bytes"}, {"--terms", `"x1"`}}

// halted is pass one that was stopped after some segments, and the whole of it.
func halted(t *testing.T, name string) (src stream.Source, d *stream.Design, whole string) {
	t.Helper()
	src = randomTable(3000, 3, nil).source(512)
	d = design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}, Keys: []string{"key"}})
	whole = sumsOf(t, src, d, nil)
	c, err := OpenCheckpoint(name, checkpointFacts)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	c.Segments = 1
	if err := stopAfter(t, src, d, c, 3); !errors.Is(err, context.Canceled) {
		t.Fatalf("error %v, want that it was stopped", err)
	}
	return src, d, whole
}

// cutOff stops a scan after some segments.
type cutOff struct {
	stream.Source
	left   int
	cancel func()
}

type cutScan struct {
	stream.Scan
	c *cutOff
}

func (c *cutOff) Scan(ctx context.Context, uses []stream.Use) (stream.Scan, error) {
	s, err := c.Source.Scan(ctx, uses)
	return &cutScan{s, c}, err
}

func (s *cutScan) Next(ctx context.Context) (stream.Segment, error) {
	if s.c.left--; s.c.left < 0 {
		s.c.cancel()
		return nil, ctx.Err()
	}
	return s.Scan.Next(ctx)
}

func stopAfter(t *testing.T, src stream.Source, d *stream.Design, c *Checkpoint, segments int) error {
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	s, err := First(ctx, &cutOff{src, segments, cancel}, d, Needs{Retain: true}, Options{Workers: 1, Memory: 1 << 26, Checkpoint: c})
	if err == nil {
		s.Close()
	}
	return err
}

// sumsOf is everything that pass one sums, as a text.
func sumsOf(t *testing.T, src stream.Source, d *stream.Design, c *Checkpoint) string {
	t.Helper()
	s, err := First(t.Context(), src, d, Needs{Retain: true}, Options{Workers: 1, Memory: 1 << 26, Checkpoint: c})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	var b strings.Builder
	err = s.Records(func(r *Record) error {
		b.WriteString(r.What.String())
		for _, x := range r.Sums {
			b.Write(x[:])
		}
		return nil
	}, nil)
	if err != nil {
		t.Fatal(err)
	}
	return b.String()
}

// A file that was cut short at any length, or has any byte changed, is refused, and
// stays as it is.
func TestCheckpointDamage(t *testing.T) {
	name := filepath.Join(t.TempDir(), "fit.ck")
	src, d, want := halted(t, name)
	good, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	refused := func(bad []byte, what string, at int) {
		t.Helper()
		if err := os.WriteFile(name, bad, 0o600); err != nil {
			t.Fatal(err)
		}
		c, err := OpenCheckpoint(name, checkpointFacts)
		var e *CheckpointError
		if !errors.As(err, &e) || c != nil {
			t.Fatalf("%s %d: error %v, want a *CheckpointError", what, at, err)
		}
		if !strings.Contains(e.What, "delete it") && !strings.Contains(e.What, "another name") {
			t.Fatalf("%s %d: %q does not say what to do", what, at, e.What)
		}
		if now, err := os.ReadFile(name); err != nil || !slices.Equal(now, bad) {
			t.Fatalf("%s %d: the file was touched", what, at)
		}
	}
	step := 1
	if testing.Short() {
		step = 7
	}
	for n := 0; n < len(good); n += step {
		refused(good[:n], "cut to", n)
	}
	for i := 0; i < len(good); i += step {
		bad := slices.Clone(good)
		bad[i] ^= byte(1 + i%255)
		refused(bad, "byte", i)
	}
	refused(append(slices.Clone(good), 0), "longer by", 1)
	if err := os.WriteFile(name, good, 0o600); err != nil {
		t.Fatal(err)
	}
	c, err := OpenCheckpoint(name, checkpointFacts)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	if pass, segments, rows := c.Found(); pass != 1 || segments != 3 || rows != 3*512 {
		t.Errorf("found pass %d, %d segments, %d rows, want 1, 3, 1536", pass, segments, rows)
	}
	if got := sumsOf(t, src, d, c); got != want {
		t.Error("the sums differ from those of a run that was not stopped")
	}
	if st, err := os.Stat(name); err != nil || st.Mode().Perm() != 0o600 {
		t.Errorf("mode %v, want one for the owner only", st.Mode())
	}
}

// What was not the same when the file was written is named.
func TestCheckpointOfAnotherRun(t *testing.T) {
	name := filepath.Join(t.TempDir(), "fit.ck")
	src, _, _ := halted(t, name)
	for _, c := range []struct {
		facts []Fact
		want  string
	}{
		{[]Fact{{"the input quay.csv", "121 bytes"}, checkpointFacts[1]}, "the input quay.csv was 120 bytes and is now 121 bytes"},
		{checkpointFacts[:1], `--terms ("x1") is there no more`},
		{append(slices.Clone(checkpointFacts), Fact{"--where", `"x1 > 0"`}), `--where ("x1 > 0") is new`},
	} {
		_, err := OpenCheckpoint(name, c.facts)
		if err == nil || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), "delete it to start again") {
			t.Errorf("error %v, want %s", err, c.want)
		}
	}
	// Sums of another model cannot be taken for these, whatever the facts say.
	c, err := OpenCheckpoint(name, checkpointFacts)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	other := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x2"}, Keys: []string{"key"}})
	if err := stopAfter(t, src, other, c, 100); err == nil || !strings.Contains(err.Error(), "the sums of pass 1 are others") {
		t.Errorf("error %v for another model", err)
	}
	text, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	newer := filepath.Join(t.TempDir(), "newer.ck")
	if err := os.WriteFile(newer, []byte(strings.Replace(string(text), "checkpoint/1", "checkpoint/2", 1)), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := OpenCheckpoint(newer, checkpointFacts); err == nil || !strings.Contains(err.Error(), "another version") {
		t.Errorf("error %v for another version", err)
	}
}

// An input that cannot be taken up in the middle is refused.
func TestCheckpointNeedsSamples(t *testing.T) {
	src := unsampled{randomTable(3000, 3, nil).source(512)}
	d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}, Keys: []string{"key"}})
	c, err := OpenCheckpoint(filepath.Join(t.TempDir(), "fit.ck"), nil)
	if err != nil {
		t.Fatal(err)
	}
	var e *CheckpointError
	if err := stopAfter(t, src, d, c, 100); !errors.As(err, &e) {
		t.Errorf("error %v, want a *CheckpointError", err)
	}
}

// Files that a killed run has left are removed; a place where none can be made is told
// at once.
func TestCheckpointPlaces(t *testing.T) {
	dir := t.TempDir()
	name, left := filepath.Join(dir, "fit[1].ck"), filepath.Join(dir, ".fit[1].ck.0011223344556677.tmp")
	if err := os.WriteFile(left, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := OpenCheckpoint(name, nil); err != nil {
		t.Fatal(err)
	}
	if list, _ := os.ReadDir(dir); len(list) > 0 {
		t.Errorf("%s is there", list[0].Name())
	}
	for _, bad := range []string{filepath.Join(dir, "none", "fit.ck"), dir} {
		var e *CheckpointError
		if _, err := OpenCheckpoint(bad, nil); !errors.As(err, &e) {
			t.Errorf("%s: error %v, want a *CheckpointError", bad, err)
		}
	}
}
