package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"github.com/google/renameio/v2"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
)

// launchFormat is the version of launch.json.
const launchFormat = "tallrow-launch/1"

// launch is a run on a cluster, as launch.json in its folder keeps it. The file is
// written before anything is submitted, and what has been submitted is found again by
// the names of the jobs: so there is nothing else to keep, and no moment at which the
// loss of the program loses track of a job. Beside it the folder has
//
//	model.toml             the model file, as it was when the run began
//	part-R.sh pool-R.sh    scripts of round R, made anew by every launch
//	parts/part-I.digest    what a task leaves, complete or not at all
//	second/part-I.digest   the same of a second round
//	whole.digest           the parts joined; second.digest; first.json between them
//	checkpoints/           of parts under way
//	status-R               how the last pool-R.sh ended
//	logs/                  what tasks have printed
//	lock                   held by the launch that follows the run
type launch struct {
	Format  string        `json:"format"`
	Version string        `json:"version"`
	ID      string        `json:"id"` // in the names of jobs
	Model   *launchModel  `json:"model"`
	Digest  []string      `json:"digest"` // options
	Fit     []string      `json:"fit"`
	Data    []string      `json:"data"`
	Files   []digest.File `json:"files"`
	Parts   int           `json:"parts"`
	Tasks   int           `json:"tasks"` // of an array: task t has parts t, t + Tasks, ...
	Rounds  int           `json:"rounds"`
	Result  string        `json:"result"`
	JSON    bool          `json:"json"`
	// CountQuotes: a part of text was not read from where it begins, so tasks look no
	// more whether they begin inside quotes but read all before them.
	CountQuotes bool `json:"count_quotes"`
	Job         job  `json:"job"`
}

type launchModel struct {
	Name string `json:"name"`
	Text string `json:"text"`
}

// job is what tasks are given; no number hangs on it.
type job struct {
	CPUs    int      `json:"cpus"`
	Memory  int64    `json:"memory"`  // 0: the site's default
	Minutes int64    `json:"minutes"` // of one part
	Words   []string `json:"words"`   // for sbatch
}

// readLaunch reads launch.json in dir, nil if the folder is empty or not there.
func readLaunch(dir string) (*launch, error) {
	name := filepath.Join(dir, "launch.json")
	text, err := os.ReadFile(name)
	if errors.Is(err, fs.ErrNotExist) {
		list, err := os.ReadDir(dir)
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			return nil, stream.Usef("%s: %s, want a folder", dir, plainPathError(err))
		}
		for _, e := range list {
			if n := e.Name(); n != "lock" && !strings.HasPrefix(n, ".") {
				return nil, stream.Usef("%s: found %s and no run; want an empty or new folder", dir, n)
			}
		}
		return nil, nil
	}
	if err != nil {
		return nil, fmt.Errorf("%s: %s", name, plainPathError(err))
	}
	r := &launch{}
	if err := json.Unmarshal(text, r); err != nil {
		return nil, fmt.Errorf("%s: damaged: %s", name, err)
	}
	if r.Format != launchFormat {
		return nil, fmt.Errorf("%s: found format %q, this version reads %s", name, r.Format, launchFormat)
	}
	if r.Version != version {
		return nil, stream.Usef("%s: begun by version %s, this is %s: finish it with that one, or begin in another folder", name, r.Version, version)
	}
	if r.ID == "" || r.Parts < 1 || r.Tasks < 1 || r.Tasks > r.Parts || r.Rounds < 1 || r.Rounds > 2 || len(r.Data) == 0 || r.Result == "" {
		return nil, fmt.Errorf("%s: damaged: found no complete run", name)
	}
	return r, nil
}

// differs says in what o is another run than r, "" if it is the same.
func (r *launch) differs(o *launch) string {
	text := func(m *launchModel) string {
		if m == nil {
			return ""
		}
		return m.Text
	}
	switch {
	case r.Parts != o.Parts:
		return fmt.Sprintf("it has %s, not %d", plural(int64(r.Parts), "part", "parts"), o.Parts)
	case r.Result != o.Result:
		return "its result goes to " + r.Result
	case r.JSON != o.JSON:
		return "only one of them has --json"
	case text(r.Model) != text(o.Model):
		return "its model file says something else"
	case !slices.Equal(r.Digest, o.Digest) || !slices.Equal(r.Fit, o.Fit):
		return "it has the options " + strings.Join(slices.Compact(slices.Sorted(slices.Values(slices.Concat(r.Digest, r.Fit)))), " ")
	case !slices.Equal(r.Data, o.Data):
		return "it reads " + strings.Join(r.Data, ", ")
	}
	return changedFile(r.Files, o.Files)
}

// changedFile says which input is not what it was.
func changedFile(old, now []digest.File) string {
	for _, f := range old {
		i := slices.IndexFunc(now, func(g digest.File) bool { return g.Path == f.Path })
		if i < 0 {
			return fmt.Sprintf("the input %s is gone", f.Path)
		}
		if g := now[i]; g.Size != f.Size || g.Checksum != f.Checksum || g.Time != f.Time {
			return fmt.Sprintf("the input %s has changed (%d bytes of %s, now %d of %s)", f.Path, f.Size, f.Time, g.Size, g.Time)
		}
	}
	for _, g := range now {
		if !slices.ContainsFunc(old, func(f digest.File) bool { return g.Path == f.Path }) {
			return fmt.Sprintf("the input %s is new", g.Path)
		}
	}
	return ""
}

// Names in the folder.
func (l *launcher) path(names ...string) string {
	return filepath.Join(append([]string{l.dir}, names...)...)
}
func (l *launcher) partsDir(round int) string { return l.path([]string{"", "parts", "second"}[round]) }
func (l *launcher) joined(round int) string {
	return l.path([]string{"", "whole.digest", "second.digest"}[round])
}

func partName(i int) string { return fmt.Sprintf("part-%d.digest", i) }

// save writes the folder: all of it can be written again at any moment.
func (l *launcher) save() error {
	r := l.r
	text, err := json.MarshalIndent(r, "", "  ")
	if err != nil {
		return err
	}
	put := func(name, text string) error {
		if err := renameio.WriteFile(l.path(name), []byte(text), 0o644); err != nil {
			return fmt.Errorf("writing %s: %s", l.path(name), plainPathError(err))
		}
		return nil
	}
	if err := put("launch.json", string(text)+"\n"); err != nil {
		return err
	}
	dirs := []string{"logs", "checkpoints", "parts"}
	if r.Rounds > 1 {
		dirs = append(dirs, "second")
	}
	for _, d := range dirs {
		if err := os.MkdirAll(l.path(d), 0o755); err != nil {
			return fmt.Errorf("making a folder: %s", err)
		}
	}
	if r.Model != nil {
		if err := put("model.toml", r.Model.Text); err != nil {
			return err
		}
	}
	for round := 1; round <= r.Rounds; round++ {
		if err := put(fmt.Sprintf("part-%d.sh", round), l.partScript(round)); err != nil {
			return err
		}
		if err := put(fmt.Sprintf("pool-%d.sh", round), l.poolScript(round)); err != nil {
			return err
		}
	}
	return nil
}

// missing lists the parts of a round that are not there.
func (l *launcher) missing(round int) ([]int, error) {
	there := make([]bool, l.r.Parts)
	list, err := os.ReadDir(l.partsDir(round))
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, err
	}
	for _, e := range list {
		number, ok := strings.CutPrefix(e.Name(), "part-")
		if number, ok2 := strings.CutSuffix(number, ".digest"); ok && ok2 {
			if i, err := strconv.Atoi(number); err == nil && i >= 0 && i < len(there) {
				there[i] = true
			}
		}
	}
	var out []int
	for i, t := range there {
		if !t {
			out = append(out, i)
		}
	}
	return out, nil
}

// dropBad removes parts that are not what was written, or that were not read from where
// they begin, and says which.
func (l *launcher) dropBad(ctx context.Context, round int) error {
	drop := func(i int, why error) error {
		l.say("part %d is made again: %s", i, why)
		return os.Remove(filepath.Join(l.partsDir(round), partName(i)))
	}
	var rs []*digest.Reader
	defer func() {
		for _, r := range rs {
			r.Close()
		}
	}()
	for i := range l.r.Parts {
		r, err := digest.Open(filepath.Join(l.partsDir(round), partName(i)))
		if err == nil {
			rs = append(rs, r)
			continue
		}
		var damage *digest.DamageError
		if errors.As(err, &damage) {
			if err := drop(i, err); err != nil {
				return err
			}
		}
	}
	if len(rs) < l.r.Parts {
		return nil
	}
	p, err := digest.NewPool(rs)
	if err != nil {
		return nil // the joining job has said so
	}
	// Quotes are proven by the records that come first.
	var quotes *digest.QuoteError
	rec, err := p.Next()
	for n := 0; rec != nil && err == nil && rec.What == accum.SegmentCheck; n++ {
		if n%4096 == 0 && ctx.Err() != nil {
			return ctx.Err()
		}
		rec, err = p.Next()
	}
	if !errors.As(err, &quotes) || l.r.CountQuotes {
		return nil
	}
	for _, i := range quotes.Again {
		if err := drop(i, quotes); err != nil {
			return err
		}
	}
	l.r.CountQuotes = true
	return l.save()
}

// tidy removes what killed tasks have left, once all is done.
func (l *launcher) tidy() {
	os.RemoveAll(l.path("checkpoints"))
	for round := 1; round <= l.r.Rounds; round++ {
		list, err := os.ReadDir(l.partsDir(round))
		if err != nil {
			continue
		}
		for _, e := range list {
			if n := e.Name(); strings.HasPrefix(n, ".part-") && strings.HasSuffix(n, ".tmp") {
				os.Remove(filepath.Join(l.partsDir(round), n))
			}
		}
	}
}

// status is how the last pooling job of a round ended: done, "pool N" or "fit N" with
// the exit status N of the command, or "" if it did not come to an end.
func (l *launcher) status(round int) string {
	text, err := os.ReadFile(l.path(fmt.Sprintf("status-%d", round)))
	if err != nil {
		return ""
	}
	return strings.TrimSpace(string(text))
}

// finished reports whether a round has left what it is for.
func (l *launcher) finished(round int) bool {
	if l.status(round) != "done" {
		return false
	}
	name := l.r.Result
	if round < l.r.Rounds {
		name = l.path("first.json")
	}
	st, err := os.Stat(name)
	return err == nil && st.Mode().IsRegular()
}

// The scripts. They need nothing but a POSIX shell.

// command is a command line for a shell.
func command(words ...string) string {
	q := make([]string, len(words))
	for i, w := range words {
		q[i] = quoted(w)
	}
	return strings.Join(q, " ")
}

// quoted writes a word so that a shell reads it as it is.
func quoted(w string) string {
	if w != "" && !strings.ContainsFunc(w, func(r rune) bool {
		return !(r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || strings.ContainsRune("-_./=,:+@%", r))
	}) {
		return w
	}
	return "'" + strings.ReplaceAll(w, "'", `'\''`) + "'"
}

// resources are the options that keep a command within what its job is given.
func (l *launcher) resources() []string {
	words := []string{fmt.Sprintf("--workers=%d", l.r.Job.CPUs)}
	if l.r.Job.Memory > 0 {
		words = append(words, fmt.Sprintf("--memory=%d", l.r.Job.Memory))
	}
	return words
}

// withModel starts a command line: program, command, model file.
func (l *launcher) withModel(name string) []string {
	words := []string{l.program, name}
	if l.r.Model != nil {
		words = append(words, l.path("model.toml"))
	}
	return append(words, l.resources()...)
}

func (l *launcher) partScript(round int) string {
	r := l.r
	words := l.withModel("digest")
	for _, w := range r.Digest {
		if !r.CountQuotes || !strings.HasPrefix(w, "--quotes=") {
			words = append(words, w)
		}
	}
	if r.CountQuotes {
		words = append(words, "--quotes=count")
	}
	if round == 2 {
		words = append(words, "--at="+l.path("first.json"))
	}
	// A task that is killed or moved goes on where it was. A program that fails by itself
	// gives up its checkpoint: that may be what it has failed of. Hidden ids would stand
	// in it as they are.
	keep, drop := "", ""
	if !slices.ContainsFunc(words, func(w string) bool { return strings.HasPrefix(w, "--hide-ids=") }) {
		keep = fmt.Sprintf(` --checkpoint %s/part-$i-%d-%d-%t`, quoted(l.path("checkpoints")), round, r.Job.Memory, r.CountQuotes)
		drop = fmt.Sprintf("\n      if [ \"$failed\" = 1 ]; then rm -f%s; fi", strings.TrimPrefix(keep, " --checkpoint"))
	}
	return fmt.Sprintf(`#!/bin/sh
# Task t of %[1]d reads parts t, t + %[1]d, ... of %[2]d, but for those that are there.
i=$SLURM_ARRAY_TASK_ID
status=0
while [ "$i" -lt %[2]d ]; do
  part=%[3]s/part-$i.digest
  if [ ! -e "$part" ]; then
    %[4]s --part "$i/%[2]d" -o "$part"%[6]s -- %[5]s || {
      failed=$?
      status=$failed%[7]s
    }
  fi
  i=$((i + %[1]d))
done
exit $status
`, r.Tasks, r.Parts, quoted(l.partsDir(round)), command(words...), command(r.Data...), keep, drop)
}

func (l *launcher) poolScript(round int) string {
	r := l.r
	pool := command(l.program, "pool", "--quiet", "-o", l.joined(round), "--", l.partsDir(round))
	var fit string
	if round < r.Rounds {
		// What the second round stands on: the coefficients. The kinds of errors come later.
		fit = command(slices.Concat([]string{l.program, "fit"}, l.resources(), []string{"--errors=classical", "--json", "-o", l.path("first.json"), "--", l.joined(1)})...)
	} else {
		words := append(l.withModel("fit"), r.Fit...)
		if r.JSON {
			words = append(words, "--json")
		}
		words = append(words, "-o", r.Result, "--", l.joined(1))
		if round == 2 {
			words = append(words, l.joined(2))
		}
		fit = command(words...)
	}
	return fmt.Sprintf(`#!/bin/sh
# Joins the parts, all of which must be there, and fits.
status() {
  printf '%%s\n' "$1" >%[1]s."$SLURM_JOB_ID.$$" && mv -f %[1]s."$SLURM_JOB_ID.$$" %[1]s
}
%[2]s || { code=$?; status "pool $code"; exit "$code"; }
%[3]s || { code=$?; status "fit $code"; exit "$code"; }
status "done"
`, quoted(l.path(fmt.Sprintf("status-%d", round))), pool, fit)
}
