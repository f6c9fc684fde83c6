package main

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// launchSettings are the options that only launch has.
type launchSettings struct {
	parts      int
	folder     string
	cpus       int
	limit      time.Duration // of one part
	tries      int
	submitWith []string // words
	resume     string
	dryRun     bool
}

// maxParts bounds --parts, as setPart does.
const maxParts = 1_000_000

func newLaunch(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "launch [MODEL.toml] DATA... --parts N -o RESULT",
		Short: "run a model on a Slurm cluster: parts as an array, then the fit",
		Long: `Each part of the data is read by a task of its own (tallrow digest --part), a job behind them joins the digests
and fits. Errors that depend on single rows take a second round by themselves. Missing parts are submitted again;
everything is in one folder, so that launch can be stopped at any moment and resumed. This program, the data and the
folder must have the same path on all machines.`,
		Example: `  tallrow launch quay.toml /data/unloading/*.parquet --parts 64 --cpus 4 --memory 8GiB -o may.txt
  tallrow launch --resume may.txt.launch --time 4h`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onLaunch)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onLaunch)
		if err != nil {
			return err
		}
		l := &launcher{a: a, s: s}
		if s.given("resume") {
			err = l.resume(args)
		} else {
			err = l.begin(cmd, args)
		}
		if err != nil {
			return err
		}
		return l.run(cmd.Context())
	}
	return cmd
}

// onResume are the options that --resume takes: those that no number hangs on.
var onResume = []string{"resume", "cpus", "memory", "time", "tries", "submit-with", "dry-run", "quiet", "json"}

// resume takes the run from its folder.
func (l *launcher) resume(args []string) error {
	s := l.s
	if len(args) > 0 {
		return stream.Usef("--resume and %q do not go together: the folder knows model and data", args[0])
	}
	for name := range s.from {
		if !slices.Contains(onResume, name) {
			return stream.Usef("--resume and --%s do not go together: the folder knows the model, the data and the result", name)
		}
	}
	dir, err := filepath.Abs(s.launch.resume)
	if err != nil {
		return err
	}
	l.dir = dir
	r, err := readLaunch(dir)
	if err != nil {
		return err
	}
	if r == nil {
		return stream.Usef("--resume %s: there is no run, want the folder that launch has made", s.launch.resume)
	}
	if s.given("cpus") {
		r.Job.CPUs = s.launch.cpus
	}
	if s.given("memory") {
		r.Job.Memory = s.memory
	}
	if s.given("time") {
		r.Job.Minutes = minutes(s.launch.limit)
	}
	if s.given("submit-with") {
		r.Job.Words = s.launch.submitWith
	}
	l.r = r
	return nil
}

// begin makes a run from the command line, or goes on with the same one.
func (l *launcher) begin(cmd *cobra.Command, args []string) error {
	s, ctx := l.s, cmd.Context()
	if err := s.checkModel(); err != nil {
		return err
	}
	if err := s.needData(cmd); err != nil {
		return err
	}
	if !s.given("parts") {
		return stream.Usef("no number of parts: say in how many the data are read, such as --parts 16")
	}
	if slices.Contains(s.data, "-") {
		return stream.Usef("standard input cannot be read by other machines; name files or folders")
	}
	if !s.given("output") || s.output == "" {
		return stream.Usef("no place for the result: give it a name, such as -o may.txt")
	}
	out, err := l.a.openSink(s)
	if err != nil {
		return err
	}
	out.drop() // it was to show that the place is good
	r := &launch{Format: launchFormat, Version: version, Parts: s.launch.parts, JSON: s.json,
		Job: job{CPUs: s.launch.cpus, Memory: s.memory, Minutes: minutes(s.launch.limit), Words: s.launch.submitWith}}
	if r.Result, err = filepath.Abs(s.output); err != nil {
		return err
	}
	folder := s.launch.folder
	if folder == "" {
		if s.given("folder") {
			return stream.Usef("--folder: want the name of a folder")
		}
		folder = s.output + ".launch"
	}
	if l.dir, err = filepath.Abs(folder); err != nil {
		return err
	}
	if strings.ContainsAny(l.dir, "\r\n") || strings.ContainsAny(r.Result, "\r\n") {
		return stream.Usef("a name with a line break: sbatch cannot take it")
	}
	if len(args) > len(s.data) {
		text, err := os.ReadFile(args[0])
		if err != nil {
			return stream.Usef("model file %s: %s", args[0], plainPathError(err))
		}
		r.Model = &launchModel{Name: filepath.Base(args[0]), Text: string(text)}
		whole := newSettings()
		if err := readModel(whole, args[0], onFit); err != nil {
			return err
		}
		if whole.first > 0 {
			return stream.Usef("%s: does not go together with parts", whole.origin("first"))
		}
	}
	for _, d := range s.data {
		abs, err := filepath.Abs(d)
		if err != nil {
			return err
		}
		if here, err := os.Getwd(); err != nil || !filepath.IsAbs(d) && strings.ContainsAny(here, "*?[") {
			if _, err := os.Lstat(d); err != nil {
				return stream.Usef("%s: is a pattern, and so would be the name of this folder, %s, before it; name the files themselves", d, here)
			}
		}
		r.Data = append(r.Data, abs)
	}
	s.data = r.Data // tasks name them like this, and key=value folders above them count too
	if r.Digest, r.Fit, err = optionsFor(cmd, s); err != nil {
		return err
	}
	if r.Rounds, err = l.check(ctx); err != nil {
		return err
	}
	if r.Files, err = s.inputFiles(ctx); err != nil {
		return err
	}
	old, err := readLaunch(l.dir)
	if err != nil {
		return err
	}
	if old != nil {
		if what := old.differs(r); what != "" {
			return stream.Usef("%s holds another run: %s; give this one another --folder, or remove that one", folder, what)
		}
		r.ID, r.Tasks, r.CountQuotes = old.ID, old.Tasks, old.CountQuotes
	}
	l.r = r
	return nil
}

// apartFromModel are options that tasks are not given as they stand.
var apartFromModel = []string{"memory", "output", "json", "quiet"}

// pathOptions name files or folders.
var pathOptions = []string{"scratch", "frame-from", "hide-ids"}

// optionsFor turns the options of the command line into those of digest and of fit.
func optionsFor(cmd *cobra.Command, s *settings) (forDigest, forFit []string, err error) {
	forDigest, forFit = []string{}, []string{}
	give := func(o *option, texts []string) {
		for _, t := range texts {
			word := "--" + o.name + "=" + t
			if o.on&onDigest != 0 {
				forDigest = append(forDigest, word)
			}
			// fit of digests refuses what the sums have fixed, but for what it can compare.
			fixed := slices.Contains(dataOnly, o.name) && !slices.Contains([]string{"no-constant", "sweep", "weight", "weight-kind", "where", "missing", "zone"}, o.name)
			if o.on&onFit != 0 && !fixed {
				forFit = append(forFit, word)
			}
		}
	}
	cmd.Flags().Visit(func(f *pflag.Flag) {
		fv, ok := f.Value.(*flagValue)
		if !ok || fv.o.group == "Launch" || slices.Contains(apartFromModel, fv.o.name) || slices.Contains(pathOptions, fv.o.name) {
			return
		}
		give(fv.o, fv.texts)
	})
	for i, path := range []string{s.scratch, s.frameFrom, s.hideIDs} {
		if path == "" {
			continue
		}
		if path, err = filepath.Abs(path); err != nil {
			return nil, nil, err
		}
		give(optionNamed(pathOptions[i]), []string{path})
	}
	return forDigest, forFit, nil
}

// check opens the data and binds the model, so that what is wrong is told before
// anything is submitted. It returns how many rounds the errors take.
func (l *launcher) check(ctx context.Context) (rounds int, err error) {
	s := *l.s
	s.scratch = "" // of the tasks' machines
	names, err := digestsAmong(ctx, s.data, true)
	if err != nil {
		return 0, err
	}
	if len(names) > 0 {
		return 0, stream.Usef("%s is a digest; launch reads data", names[0])
	}
	if _, _, err := s.hiding(); err != nil {
		return 0, err
	}
	p, err := l.a.prepare(ctx, &s)
	if err != nil {
		return 0, err
	}
	defer p.src.Close()
	if info := p.src.Info(); !info.Rewindable || !info.Sampled {
		return 0, stream.Usef("this input cannot be read in parts; want files that are neither compressed text nor pipes")
	}
	o := p.opts
	o.Errors = p.req.kinds
	_, later, err := vcov.SumsFor(p.design, o)
	if err != nil {
		return 0, err
	}
	if len(later) > 0 {
		return 2, nil
	}
	return 1, nil
}

// setWhole makes a setter of a whole number from 1 to most.
func setWhole(dst func(*settings) *int, most int) func(*settings, value) error {
	return func(s *settings, v value) error {
		n, err := positive(v)
		if err != nil {
			return err
		}
		if n > int64(most) {
			return fmt.Errorf("found %d, want at most %s", n, count(int64(most)))
		}
		*dst(s) = int(n)
		return nil
	}
}

var days = regexp.MustCompile(`^(\d{1,5})d(.*)$`)

func setTime(s *settings, v value) error {
	text := v.text()
	var whole, rest time.Duration
	if m := days.FindStringSubmatch(text); m != nil {
		n, _ := strconv.Atoi(m[1])
		whole, text = time.Duration(n)*24*time.Hour, m[2]
	}
	var err error
	if text != "" || whole == 0 {
		rest, err = time.ParseDuration(text)
	}
	if t := whole + rest; err == nil && rest >= 0 && t >= time.Minute && t <= 10_000*24*time.Hour {
		s.launch.limit = t
		return nil
	}
	return fmt.Errorf("found %q, want a time of a minute or more, such as 90m, 4h or 1d12h", v.text())
}

// minutes rounds up: Slurm counts in minutes.
func minutes(d time.Duration) int64 { return int64((d + time.Minute - 1) / time.Minute) }

// ours are the words of sbatch that launch lives by.
var ours = []string{"--array", "-a", "--dependency", "-d", "--job-name", "-J", "--parsable", "--wrap", "--wait", "-W", "--output", "-o", "--chdir", "-D", "--test-only"}

func setSubmitWith(s *settings, v value) error {
	s.launch.submitWith = nil
	for _, p := range v.parts {
		words, err := splitWords(p)
		if err != nil {
			return err
		}
		for _, w := range words {
			name, _, _ := strings.Cut(w, "=")
			if slices.Contains(ours, name) || len(w) > 2 && w[0] == '-' && w[1] != '-' && slices.Contains(ours, w[:2]) {
				return fmt.Errorf("found %s, which launch sets itself", name)
			}
		}
		s.launch.submitWith = append(s.launch.submitWith, words...)
	}
	return nil
}

// splitWords splits a text at spaces, but not within '...' or "...".
func splitWords(text string) ([]string, error) {
	var words []string
	var b strings.Builder
	in, quote := false, rune(0)
	for _, r := range text {
		switch {
		case quote != 0 && r == quote:
			quote = 0
		case quote != 0:
			b.WriteRune(r)
		case r == '\'' || r == '"':
			in, quote = true, r
		case r == ' ' || r == '\t' || r == '\n':
			if in {
				words = append(words, b.String())
				b.Reset()
			}
			in = false
		default:
			in = true
			b.WriteRune(r)
		}
	}
	if quote != 0 {
		return nil, fmt.Errorf("found %q, where a quote %c does not end", text, quote)
	}
	if in {
		words = append(words, b.String())
	}
	return words, nil
}
