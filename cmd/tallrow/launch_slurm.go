package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"slices"
	"strconv"
	"strings"
	"time"
)

// slurmError is a command of Slurm that failed.
type slurmError struct {
	line string // the command line
	out  string // what it printed, and how it ended
}

func (e *slurmError) Error() string { return e.line + ": " + e.out }

// slurmRun runs a command of Slurm. It is given long: a controller that is busy or
// coming back lets its callers wait.
func slurmRun(ctx context.Context, name string, args ...string) (string, error) {
	ctx, stop := context.WithTimeout(ctx, 5*time.Minute)
	defer stop()
	cmd := exec.CommandContext(ctx, name, args...)
	var out, errs bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &errs
	cmd.WaitDelay = time.Second
	setApart(cmd)
	for _, v := range os.Environ() {
		// A user's taste for squeue would hide jobs or change the columns.
		if !strings.HasPrefix(v, "SQUEUE_") {
			cmd.Env = append(cmd.Env, v)
		}
	}
	err := cmd.Run()
	if err == nil {
		return out.String(), nil
	}
	if errors.Is(err, exec.ErrNotFound) {
		return "", &slurmError{name, "not found; launch needs the commands of Slurm (sbatch, squeue, scontrol, scancel) on this machine"}
	}
	said := strings.TrimSpace(errs.String())
	if said == "" {
		said = strings.TrimSpace(out.String())
	}
	if said != "" {
		said += " (" + err.Error() + ")"
	} else {
		said = err.Error()
	}
	return "", &slurmError{command(append([]string{name}, args...)...), oneLine(said)}
}

// queued is a job, or a task of an array, that Slurm knows of.
type queued struct {
	id     string // job, of an array that of the whole
	task   int    // -1: not an array
	pool   bool
	state  string
	reason string
}

// ended are the states that a job does not leave by itself.
var ended = []string{"BOOT_FAIL", "CANCELLED", "COMPLETED", "DEADLINE", "FAILED", "NODE_FAIL", "OUT_OF_MEMORY", "PREEMPTED", "REVOKED", "TIMEOUT"}

func (q *queued) alive() bool { return !slices.Contains(ended, q.state) }

// jobNames are what the jobs of a round go by.
func (r *launch) jobNames(round int) (parts, pool string) {
	return fmt.Sprintf("tallrow-%s-%d-parts", r.ID, round), fmt.Sprintf("tallrow-%s-%d-pool", r.ID, round)
}

// queue asks for the jobs of a round, those that have ended too as long as Slurm
// remembers them.
func (r *launch) queue(ctx context.Context, round int) ([]queued, error) {
	parts, pool := r.jobNames(round)
	text, err := slurmRun(ctx, "squeue", "--noheader", "--array", "--states=all", "--user="+strconv.Itoa(os.Getuid()), "--name="+parts+","+pool, "--format=%F|%K|%j|%T|%r")
	if err != nil {
		return nil, err
	}
	var list []queued
	for line := range strings.Lines(text) {
		line = strings.TrimSpace(line)
		if line == "" {
			continue
		}
		f := strings.SplitN(line, "|", 5)
		if len(f) < 5 {
			return nil, &slurmError{"squeue", fmt.Sprintf("found the line %q, want job|task|name|state|reason", line)}
		}
		q := queued{id: f[0], task: -1, pool: f[2] == pool, state: f[3], reason: f[4]}
		if !q.pool {
			if q.task, err = strconv.Atoi(f[1]); err != nil {
				q.task = -1
			}
		}
		list = append(list, q)
	}
	return list, nil
}

// maxArray asks how many tasks an array may have.
func maxArray(ctx context.Context) (int, error) {
	text, err := slurmRun(ctx, "scontrol", "show", "config")
	if err != nil {
		return 0, err
	}
	for line := range strings.Lines(text) {
		if name, val, ok := strings.Cut(line, "="); ok && strings.TrimSpace(name) == "MaxArraySize" {
			n, err := strconv.Atoi(strings.TrimSpace(val))
			if err != nil || n < 1 {
				return 0, &slurmError{"scontrol show config", fmt.Sprintf("found MaxArraySize %s: this site has no job arrays", strings.TrimSpace(val))}
			}
			return n, nil
		}
	}
	return 0, &slurmError{"scontrol show config", "found no MaxArraySize"}
}

// tasksOf are the array tasks that have any of the parts.
func (r *launch) tasksOf(parts []int) []int {
	var list []int
	for _, p := range parts {
		list = append(list, p%r.Tasks)
	}
	slices.Sort(list)
	return slices.Compact(list)
}

// ranges writes sorted numbers as 0-3,7.
func ranges(list []int) string {
	var b strings.Builder
	for i := 0; i < len(list); {
		j := i
		for j+1 < len(list) && list[j+1] == list[j]+1 {
			j++
		}
		if b.Len() > 0 {
			b.WriteByte(',')
		}
		b.WriteString(strconv.Itoa(list[i]))
		if j > i {
			b.WriteString("-" + strconv.Itoa(list[j]))
		}
		i = j + 1
	}
	return b.String()
}

// submission is the command line of sbatch for the parts, or for the job behind
// them if tasks is empty. behind is the array that it waits for, or "".
func (l *launcher) submission(round int, tasks []int, behind string) []string {
	r := l.r
	// In a file name of sbatch a % begins a replacement.
	log := func(name string) string { return strings.ReplaceAll(l.path("logs"), "%", "%%") + "/" + name }
	name, pool := r.jobNames(round)
	script, limit := l.path(fmt.Sprintf("part-%d.sh", round)), r.Job.Minutes*int64((r.Parts+r.Tasks-1)/r.Tasks)
	words := []string{"sbatch", "--parsable"}
	if len(tasks) > 0 {
		words = append(words, "--job-name="+name, "--array="+ranges(tasks), "--output="+log("part-%A_%a.txt"))
	} else {
		script, limit = l.path(fmt.Sprintf("pool-%d.sh", round)), r.Job.Minutes
		words = append(words, "--job-name="+pool, "--output="+log("pool-%j.txt"))
		if behind != "" {
			// Not afterok: with it a part that failed and was made again would leave this
			// job waiting for ever. That all parts are there is its own first question.
			words = append(words, "--dependency=afterany:"+behind)
		}
	}
	words = append(words, "--open-mode=append", "--requeue", "--ntasks=1", fmt.Sprintf("--cpus-per-task=%d", r.Job.CPUs), fmt.Sprintf("--time=%d", limit), "--chdir="+l.dir)
	if r.Job.Memory > 0 {
		// What the kernel and the shell hold comes on top.
		words = append(words, fmt.Sprintf("--mem=%dM", (r.Job.Memory+r.Job.Memory/8)>>20+64))
	}
	return append(append(words, r.Job.Words...), script)
}

// submit runs sbatch and returns the number of the job.
func submit(ctx context.Context, words []string) (string, error) {
	text, err := slurmRun(ctx, words[0], words[1:]...)
	if err != nil {
		return "", err
	}
	id, _, _ := strings.Cut(strings.TrimSpace(text), ";")
	if _, err := strconv.ParseUint(id, 10, 64); err != nil {
		return "", &slurmError{command(words...), fmt.Sprintf("printed %q, want the number of the job", oneLine(text))}
	}
	return id, nil
}
