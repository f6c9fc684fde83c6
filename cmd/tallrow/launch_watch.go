package main

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/mattn/go-isatty"

	"github.com/tallrow/tallrow/stream"
)

// launcher follows one run.
type launcher struct {
	a       *app
	s       *settings
	dir     string // absolute
	program string // this one, absolute
	r       *launch
	resumed bool
	reached bool   // the controller has answered
	shown   string // progress
	start   time.Time
}

// lostParts are parts that did not come in all tries.
type lostParts struct{ text string }

func (e *lostParts) Error() string { return e.text }

// run takes the run to its end.
func (l *launcher) run(ctx context.Context) error {
	var err error
	if l.program, err = os.Executable(); err != nil {
		return err
	}
	l.start = time.Now()
	r := l.r
	l.resumed = r.ID != ""
	if !l.resumed {
		var id [6]byte
		if _, err := rand.Read(id[:]); err != nil {
			return err
		}
		r.ID = hex.EncodeToString(id[:])
		most, err := maxArray(ctx)
		if err != nil {
			if !l.s.launch.dryRun {
				return err
			}
			most = 1001 // Slurm's own default
			l.say("%s; shown as for a site with arrays of %d", err, most)
		}
		r.Tasks = min(r.Parts, most)
	}
	if l.s.launch.dryRun {
		return l.dryRun()
	}
	if err := os.MkdirAll(l.dir, 0o755); err != nil {
		return fmt.Errorf("making the folder of the run: %s", err)
	}
	lock, err := os.OpenFile(l.path("lock"), os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return fmt.Errorf("%s: %s", l.path("lock"), plainPathError(err))
	}
	defer lock.Close()
	if !lockFile(lock) {
		return stream.Usef("%s: another launch follows this run now", l.dir)
	}
	old, err := readLaunch(l.dir)
	if err != nil {
		return err
	}
	if old != nil && old.ID != r.ID {
		return stream.Usef("%s: another launch has begun a run here meanwhile; look with --resume", l.dir)
	}
	// Also where a run is over: a result must not pass for that of other data.
	input := settings{data: r.Data, output: r.Result}
	files, err := input.inputFiles(ctx)
	if err != nil {
		return err
	}
	if what := changedFile(r.Files, files); what != "" {
		return fmt.Errorf("%s; parts of a run must read the same data: begin another one in another --folder", what)
	}
	if err := l.save(); err != nil {
		return err
	}
	if l.terminal() { // an interrupt is told on a line of its own
		defer l.a.onExit(func() { fmt.Fprint(l.a.stderr, "\r\x1b[K") })()
	}
	already := l.finished(r.Rounds)
	for round := 1; round <= r.Rounds && !already; round++ {
		if err := l.round(ctx, round); err != nil {
			return err
		}
	}
	l.clearLine()
	l.tidy()
	if l.s.json {
		text, err := jsonLine(map[string]any{"format": "tallrow-launch-done/1", "output": r.Result, "folder": l.dir, "parts": r.Parts, "rounds": r.Rounds, "already": already})
		if err != nil {
			return err
		}
		_, err = l.a.stdout.Write(text)
		return err
	}
	done := "fitted from"
	if already {
		done = "was fitted before from"
	}
	_, err = fmt.Fprintf(l.a.stdout, "%s: %s %s; the sums are in %s\n", r.Result, done, plural(int64(r.Parts), "part", "parts"), l.joined(1))
	return err
}

// dryRun prints what would be written and submitted.
func (l *launcher) dryRun() error {
	var b strings.Builder
	for round := 1; round <= l.r.Rounds; round++ {
		parts, err := l.missing(round)
		if err != nil {
			return err
		}
		for _, s := range []struct{ name, text string }{{"part", l.partScript(round)}, {"pool", l.poolScript(round)}} {
			fmt.Fprintf(&b, "# %s\n%s\n", l.path(fmt.Sprintf("%s-%d.sh", s.name, round)), s.text)
		}
		if round == 2 {
			b.WriteString("# when the first round is done\n")
		}
		behind := ""
		if len(parts) > 0 {
			fmt.Fprintf(&b, "%s\n", command(l.submission(round, l.r.tasksOf(parts), "")...))
			behind = "ARRAY"
		}
		fmt.Fprintf(&b, "%s\n", command(l.submission(round, nil, behind)...))
		if round < l.r.Rounds {
			b.WriteByte('\n')
		}
	}
	_, err := io.WriteString(l.a.stdout, b.String())
	return err
}

// round submits what is missing of a round and waits, until all is there.
func (l *launcher) round(ctx context.Context, round int) error {
	for tries := 0; ; tries++ {
		list, adopted, err := l.wait(ctx, round)
		if err != nil {
			return err
		}
		// On a network file system the result may come into view after the status.
		for n := 0; n < 30 && adopted && l.status(round) == "done" && !l.finished(round); n++ {
			if err := pause(ctx, 2*time.Second); err != nil {
				return err
			}
		}
		if l.finished(round) {
			return nil
		}
		if tries == 0 && adopted {
			tries = 1 // of a launch that was lost
		}
		missing, err := l.missing(round)
		if err != nil {
			return err
		}
		why := ""
		if tries > 0 {
			if len(missing) == 0 {
				if why, err = l.poolFailure(ctx, round); err != nil {
					return err
				}
				if missing, err = l.missing(round); err != nil {
					return err
				}
			} else {
				why = l.failures(round, missing, list)
			}
		}
		if tries >= l.s.launch.tries {
			again := fmt.Sprintf("; tallrow launch --resume %s tries again", quoted(l.dir))
			if len(missing) > 0 {
				return &lostParts{fmt.Sprintf("incomplete: part(s) %s of %d missing after %s: %s%s", someRanges(missing), l.r.Parts, plural(int64(tries), "try", "tries"), why, again)}
			}
			return fmt.Errorf("no result after %s: %s%s", plural(int64(tries), "try", "tries"), why, again)
		}
		if err := l.submit(ctx, round, missing); err != nil {
			return err
		}
	}
}

// someRanges keeps a list of numbers short.
func someRanges(list []int) string {
	t := ranges(list)
	if len(t) <= 80 {
		return t
	}
	return t[:strings.LastIndexByte(t[:80], ',')] + fmt.Sprintf(",... (%d)", len(list))
}

// submit hands the missing parts to Slurm, and a job behind them.
func (l *launcher) submit(ctx context.Context, round int, missing []int) error {
	if err := os.Remove(l.path(fmt.Sprintf("status-%d", round))); err != nil && !errors.Is(err, os.ErrNotExist) {
		return err
	}
	array := ""
	if len(missing) > 0 {
		id, err := l.submitOne(ctx, round, l.r.tasksOf(missing), "")
		if err != nil {
			return err
		}
		array = id
		l.say("submitted %s: %s of %d", id, plural(int64(len(missing)), "part", "parts"), l.r.Parts)
		l.submitted(id)
	}
	id, err := l.submitOne(ctx, round, nil, array)
	if err != nil {
		if array != "" {
			err = fmt.Errorf("%w; the parts go on as job %s", err, array)
		}
		return err
	}
	l.say("submitted %s: joins and fits", id)
	l.submitted(array, id)
	return nil
}

// submitOne submits once, whatever becomes of the controller meanwhile: an answer
// that is lost does not mean that the job is.
func (l *launcher) submitOne(ctx context.Context, round int, tasks []int, behind string) (string, error) {
	words := l.submission(round, tasks, behind)
	for refused := false; ; refused = true {
		id, err := submit(context.WithoutCancel(ctx), words)
		if err == nil {
			return id, nil
		}
		list, ask := l.ask(ctx, round)
		if ask != nil {
			return "", errors.Join(err, ask)
		}
		for _, q := range list {
			if q.alive() && q.pool == (len(tasks) == 0) && !q.stuck() {
				return q.id, nil
			}
		}
		if refused {
			return "", err
		}
		l.say("%s; trying once more", err)
		if err := pause(ctx, 2*time.Second); err != nil {
			return "", err
		}
	}
}

// submitted notes jobs for the words of a run that is cut short.
func (l *launcher) submitted(ids ...string) {
	ids = slices.DeleteFunc(ids, func(id string) bool { return id == "" })
	l.a.mu.Lock()
	defer l.a.mu.Unlock()
	l.a.jobs = fmt.Sprintf("; the jobs go on: tallrow launch --resume %s follows them again, scancel %s ends them", quoted(l.dir), strings.Join(ids, " "))
}

// ask asks for the queue until the controller answers. Only where it never has is
// that an error.
func (l *launcher) ask(ctx context.Context, round int) ([]queued, error) {
	told := ""
	for {
		list, err := l.r.queue(ctx, round)
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
		if err == nil {
			if told != "" {
				l.say("the controller answers again")
			}
			l.reached = true
			return list, nil
		}
		if !l.reached {
			return nil, err
		}
		if l.finished(round) {
			return nil, nil
		}
		if err.Error() != told {
			told = err.Error()
			l.say("%s; trying again, the jobs do not need it to go on", told)
		}
		if err := pause(ctx, l.interval()); err != nil {
			return nil, err
		}
	}
}

// stuck is a job that waits for what will not come by itself: Slurm holds a task that
// it could not start on its node, for an administrator to look at. Held by a person it
// may be for a reason.
func (q *queued) stuck() bool {
	return q.state == "PENDING" && (q.reason == "DependencyNeverSatisfied" || q.reason == "launch failed requeued held")
}

// name is what scancel takes.
func (q *queued) name() string {
	if q.task < 0 {
		return q.id
	}
	return fmt.Sprintf("%s_%d", q.id, q.task)
}

// wait returns when no job of the round is alive, or the round is done. adopted: there
// were jobs when it was called.
func (l *launcher) wait(ctx context.Context, round int) (list []queued, adopted bool, err error) {
	for idle := 0; ; {
		if l.finished(round) {
			return list, adopted, nil
		}
		if list, err = l.ask(ctx, round); err != nil {
			return nil, adopted, err
		}
		var ids, arrays, useless []string
		for _, q := range list {
			switch {
			case q.stuck():
				useless = append(useless, q.name())
				l.say("ending %s: %s", q.name(), q.reason)
			case q.alive():
				ids = append(ids, q.id)
				if !q.pool {
					arrays = append(arrays, q.id)
				}
			}
		}
		if len(ids) == 0 && len(useless) == 0 {
			return list, adopted, nil
		}
		adopted = true
		ids = slices.Compact(slices.Sorted(slices.Values(ids)))
		if len(ids) > 0 {
			l.submitted(ids...)
		}
		missing, err := l.missing(round)
		if err != nil {
			return nil, adopted, err
		}
		l.show(round, list, len(missing))
		// A task can outlive its work: Slurm holds it for running though it is not, or has
		// queued it again. Nothing is left for it to do, and others wait for it.
		if idle++; len(missing) > 0 || len(arrays) == 0 {
			idle = 0
		}
		if idle == 4 {
			l.say("all parts are there; ending the tasks that are not over")
			useless, idle = append(useless, arrays...), 0
		}
		l.cancel(ctx, useless)
		if err := pause(ctx, l.interval()); err != nil {
			return nil, adopted, err
		}
	}
}

// cancel ends jobs that are of no use.
func (l *launcher) cancel(ctx context.Context, ids []string) {
	if len(ids) == 0 {
		return
	}
	if _, err := slurmRun(ctx, "scancel", slices.Compact(slices.Sorted(slices.Values(ids)))...); err != nil {
		l.say("%s", err)
	}
}

// interval is the time between two looks: short runs are followed closely, long ones
// cost the controller little.
func (l *launcher) interval() time.Duration {
	return min(max(time.Since(l.start)/20, time.Second), 30*time.Second)
}

func pause(ctx context.Context, d time.Duration) error {
	select {
	case <-ctx.Done():
		return ctx.Err()
	case <-time.After(d):
		return nil
	}
}

// show tells how far the round is: a line that changes on a terminal, else a line for
// each change.
func (l *launcher) show(round int, list []queued, missing int) {
	running, waiting, pool := 0, 0, ""
	reasons := map[string]int{}
	for _, q := range list {
		switch {
		case !q.alive():
		case q.pool:
			pool = strings.ToLower(q.state)
			if q.state == "PENDING" {
				pool = "waiting (" + q.reason + ")"
			}
		case q.state == "PENDING":
			waiting++
			reasons[q.reason]++
		default:
			running++
		}
	}
	t := fmt.Sprintf("parts: %s of %s done", count(int64(l.r.Parts-missing)), count(int64(l.r.Parts)))
	if l.r.Rounds > 1 {
		t = fmt.Sprintf("round %d, ", round) + t
	}
	if running > 0 {
		t += fmt.Sprintf(", %s running", plural(int64(running), "task", "tasks"))
	}
	if waiting > 0 {
		most, of := "", 0
		for r, n := range reasons {
			if n > of || n == of && r < most {
				most, of = r, n
			}
		}
		t += fmt.Sprintf(", %s waiting (%s)", count(int64(waiting)), most)
	}
	if pool != "" && running+waiting == 0 {
		t += "; joining: " + pool
	}
	if t == l.shown {
		return
	}
	l.shown = t
	if l.terminal() {
		fmt.Fprintf(l.a.stderr, "\r\x1b[K%s", t)
	} else {
		l.say("%s", t)
	}
}

func (l *launcher) terminal() bool {
	f, ok := l.a.stderr.(*os.File)
	return ok && !l.s.quiet && isatty.IsTerminal(f.Fd())
}

func (l *launcher) clearLine() {
	if l.terminal() && l.shown != "" {
		fmt.Fprint(l.a.stderr, "\r\x1b[K")
		l.shown = ""
	}
}

// say prints a line of progress.
func (l *launcher) say(format string, args ...any) {
	if l.s.quiet {
		return
	}
	l.clearLine()
	fmt.Fprintln(l.a.stderr, oneLine(fmt.Sprintf(format, args...)))
}

// failures says of the first missing parts what became of their tasks, and returns
// what it says of the first.
func (l *launcher) failures(round int, missing []int, list []queued) string {
	first := ""
	for i, task := range l.r.tasksOf(missing) {
		if i == 3 {
			l.say("and so %d more", len(l.r.tasksOf(missing))-i)
			break
		}
		state, id, newest := "gone", "*", uint64(0)
		for _, q := range list {
			if n := jobNumber(q.id); !q.pool && q.task == task && n >= newest {
				state, id, newest = q.state, q.id, n
			}
		}
		t := fmt.Sprintf("task %d: %s; %s", task, state, l.lastWords(fmt.Sprintf("part-%s_%d.txt", id, task)))
		if first == "" {
			first = t
		}
		l.say("%s", t)
	}
	return first
}

func jobNumber(id string) (n uint64) {
	fmt.Sscan(id, &n)
	return n
}

// lastWords is the end of the newest log that matches.
func (l *launcher) lastWords(pattern string) string {
	list, err := os.ReadDir(l.path("logs"))
	if err != nil {
		return plainPathError(err)
	}
	name, newest := "", time.Time{}
	for _, e := range list {
		if ok, _ := filepath.Match(pattern, e.Name()); !ok {
			continue
		}
		if info, err := e.Info(); err == nil && !info.ModTime().Before(newest) {
			name, newest = l.path("logs", e.Name()), info.ModTime()
		}
	}
	if name == "" {
		return "no log"
	}
	f, err := os.Open(name)
	if err != nil {
		return err.Error()
	}
	defer f.Close()
	const most = 4096
	if st, err := f.Stat(); err == nil && st.Size() > most {
		_, _ = f.Seek(-most, io.SeekEnd)
	}
	text, err := io.ReadAll(f)
	if err != nil {
		return err.Error()
	}
	lines := strings.Split(strings.TrimSpace(string(text)), "\n")
	if last := strings.TrimSpace(lines[len(lines)-1]); last != "" {
		return fmt.Sprintf("the last line of %s is: %s", name, last)
	}
	return name + " is empty"
}

// poolFailure says why there is no result although all parts are there. An error that
// would come again is returned as such.
func (l *launcher) poolFailure(ctx context.Context, round int) (why string, err error) {
	status, words := l.status(round), l.lastWords("pool-*.txt")
	if status == "" {
		why = "the joining job was ended before it was done; " + words
		l.say("%s", why)
		return why, nil
	}
	var step string
	var code int
	if n, _ := fmt.Sscan(status, &step, &code); n == 2 && step == "pool" && code == exitFailed {
		if err := l.dropBad(ctx, round); err != nil {
			return "", err
		}
		if missing, err := l.missing(round); err != nil || len(missing) > 0 {
			return words, err
		}
	}
	if code == exitFailed || code == exitUse {
		return "", fmt.Errorf("all parts are there, but the %s failed with status %d; %s", step, code, words)
	}
	why = fmt.Sprintf("the %s ended with status %d; %s", step, code, words)
	l.say("%s", why)
	return why, nil
}
