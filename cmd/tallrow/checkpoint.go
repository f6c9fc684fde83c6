package main

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// anyway lists the options that touch no sum: a run may go on with others.
var anyway = []string{"workers", "hide-ids", "memory", "scratch", "level", "adjust", "output", "json", "quiet", "timings", "cluster-detail", "checkpoint"}

// contents lists the options that name a file of which the content counts.
var contents = []string{"plan", "frame-from", "at"}

// saveEvery is a variable of the environment for tests: save after so many segments.
const saveEvery = "TALLROW_CHECKPOINT_SEGMENTS"

// openCheckpoint makes the run save its sums, and go on from those that it finds.
// It refuses what cannot be taken up again. command is the name of the command, on its
// bit in options.
func (a *app) openCheckpoint(ctx context.Context, s *settings, p *prepared, command string, on int) error {
	if !s.given("checkpoint") {
		return nil
	}
	from := s.origin("checkpoint") + " " + s.checkpoint
	info := p.src.Info()
	switch {
	case s.checkpoint == "":
		return stream.Usef("%s: want a file name", s.origin("checkpoint"))
	case s.first > 0:
		return stream.Usef("%s: does not go with --first, which counts rows from the start", from)
	case !info.Rewindable:
		return stream.Usef("%s: this input can be read only once, so that a run cannot go on with it; want files", from)
	case !info.Sampled:
		return stream.Usef("%s: compressed text can be read from the start only, so that a run cannot go on in the middle; want plain text or Parquet", from)
	}
	for _, k := range p.req.kinds {
		if k.Name == "hac" {
			return stream.Usef("%s: hac goes by the order of rows and cannot go on in the middle; ask for it in a run without --checkpoint", from)
		}
	}
	if err := s.checkpointPlace(from); err != nil {
		return err
	}
	facts, err := s.facts(ctx, command, on)
	if err != nil {
		return err
	}
	c, err := accum.OpenCheckpoint(s.checkpoint, facts)
	if err != nil {
		return err
	}
	if text := os.Getenv(saveEvery); text != "" {
		if c.Segments, err = strconv.Atoi(text); err != nil || c.Segments < 1 {
			c.Close()
			return stream.Usef("%s: found %q, want a whole number above 0", saveEvery, text)
		}
	}
	told := ""
	c.Warn = func(err error) {
		if text := err.Error(); text != told {
			told = text
			a.complain("warning: " + oneLine(text))
		}
	}
	if pass, segments, rows := c.Found(); pass > 0 && !s.quiet {
		a.complain(fmt.Sprintf("going on from %s: %s of pass %d are done, %s", s.checkpoint, plural(segments, "segment", "segments"), pass, plural(rows, "row", "rows")))
	}
	a.mu.Lock()
	a.checkpoint = s.checkpoint
	a.mu.Unlock()
	p.opts.Checkpoint = c
	p.done = func() error {
		cost := c.Cost()
		if err := c.Remove(); err != nil {
			return err
		}
		if s.quiet {
			return nil
		}
		text := fmt.Sprintf("the run is done; checkpoint %s is removed", s.checkpoint)
		if cost.Saves > 0 {
			text += fmt.Sprintf(" (%s, %s the last; workers waited %s at most)", plural(int64(cost.Saves), "save", "saves"), sizeText(cost.Bytes), cost.Pause.Round(time.Millisecond))
		}
		a.complain(text)
		return nil
	}
	return nil
}

// checkpointPlace refuses places where the file would be taken for data or a result.
func (s *settings) checkpointPlace(from string) error {
	name, err := filepath.Abs(s.checkpoint)
	if err != nil {
		return err
	}
	same := func(other string) bool {
		abs, err := filepath.Abs(other)
		if err == nil && abs == name {
			return true
		}
		x, err := os.Stat(name)
		if err != nil {
			return false
		}
		y, err := os.Stat(other)
		return err == nil && os.SameFile(x, y)
	}
	if s.output != "" && same(s.output) {
		return stream.Usef("%s: is the output too, want another name", from)
	}
	for _, d := range s.data {
		abs, err := filepath.Abs(d)
		if err != nil {
			return err
		}
		inside := false
		if st, err := os.Stat(abs); err == nil && st.IsDir() {
			rel, err := filepath.Rel(abs, name)
			inside = err == nil && filepath.IsLocal(rel) && !strings.HasPrefix(filepath.Base(name), ".") && !strings.HasPrefix(filepath.Base(name), "_")
		} else if err != nil {
			inside, _ = filepath.Match(abs, name)
		}
		if inside || same(d) {
			return stream.Usef("%s: would be among the data %s, want another place", from, d)
		}
	}
	return nil
}

// facts are what must be the same when a run goes on: program, options and input.
func (s *settings) facts(ctx context.Context, command string, on int) ([]accum.Fact, error) {
	facts := []accum.Fact{{Name: "the program", Value: "tallrow " + version}, {Name: "the command", Value: command},
		{Name: "the memory for clusters (by --memory)", Value: count(s.clusterMemory()) + " bytes"}}
	for _, o := range options {
		if o.on&on == 0 || !s.given(o.name) || slices.Contains(anyway, o.name) {
			continue
		}
		text := s.raw[o.name]
		if slices.Contains(contents, o.name) {
			b, err := os.ReadFile(text)
			if err != nil {
				return nil, stream.Usef("%s %s: %s", s.origin(o.name), text, plainPathError(err))
			}
			h := sha256.Sum256(b)
			text += " with the checksum " + hex.EncodeToString(h[:8])
		}
		facts = append(facts, accum.Fact{Name: "--" + o.name, Value: strconv.Quote(text)})
	}
	files, err := s.inputFiles(ctx)
	if err != nil {
		return nil, err
	}
	for _, f := range files {
		facts = append(facts, accum.Fact{Name: "the input " + f.Path, Value: fmt.Sprintf("%d bytes of %s (checksum %.16s)", f.Size, f.Time, f.Checksum)})
	}
	return facts, nil
}

// noCheckpoint refuses --checkpoint where nothing is scanned.
func (s *settings) noCheckpoint(why string) error {
	if !s.given("checkpoint") {
		return nil
	}
	return stream.Usef("%s: %s", s.origin("checkpoint"), why)
}
