//go:build linux

package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

// site is a Slurm that testdata/slurm/up.sh has started.
type site struct {
	dir   string // of up.sh
	prog  string
	work  string
	model []string // options
	data  string
	want  map[string]any // numbers of the unsplit data
}

// patience bounds every wait: a machine may be busy, but not for ever.
const patience = 3 * time.Minute

// output runs a command that must succeed.
func output(t *testing.T, name string, args ...string) string {
	t.Helper()
	ctx, stop := context.WithTimeout(t.Context(), patience)
	defer stop()
	cmd := exec.CommandContext(ctx, name, args...)
	var errs bytes.Buffer
	cmd.Stderr = &errs
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("%s %s: %v\n%s%s", name, strings.Join(args, " "), err, out, errs.String())
	}
	return string(out)
}

// until waits for something to become true.
func until(t *testing.T, what string, f func() bool) {
	t.Helper()
	for end := time.Now().Add(patience); !f(); time.Sleep(100 * time.Millisecond) {
		if time.Now().After(end) {
			t.Fatalf("waited for %v: %s", patience, what)
		}
	}
}

// running is a launch under way.
type running struct {
	t   *testing.T
	cmd *exec.Cmd
	mu  sync.Mutex
	err bytes.Buffer
	end chan struct{}
}

func (r *running) Write(p []byte) (int, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.err.Write(p)
}

func (r *running) said() string {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.err.String()
}

func (s *site) start(t *testing.T, args ...string) *running {
	t.Helper()
	r := &running{t: t, cmd: exec.Command(s.prog, append([]string{"launch"}, args...)...), end: make(chan struct{})}
	r.cmd.Dir, r.cmd.Stderr = s.work, r
	if err := r.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	go func() { _ = r.cmd.Wait(); close(r.end) }()
	t.Cleanup(func() { _ = r.cmd.Process.Kill(); <-r.end })
	return r
}

// ends waits for the exit status.
func (r *running) ends(code int) {
	r.t.Helper()
	select {
	case <-r.end:
	case <-time.After(patience):
		r.t.Fatalf("launch goes on for %v:\n%s", patience, r.said())
	}
	if got := r.cmd.ProcessState.ExitCode(); got != code {
		r.t.Fatalf("launch: status %d, want %d:\n%s", got, code, r.said())
	}
}

// says waits for a line on standard error.
func (r *running) says(pattern string) {
	r.t.Helper()
	re := regexp.MustCompile("(?m)" + pattern)
	for end := time.Now().Add(patience); !re.MatchString(r.said()); time.Sleep(100 * time.Millisecond) {
		if time.Now().After(end) {
			r.t.Fatalf("waited %v for %s; launch said:\n%s", patience, pattern, r.said())
		}
	}
}

// count is how many lines match.
func (r *running) count(pattern string) int {
	return len(regexp.MustCompile("(?m)"+pattern).FindAllString(r.said(), -1))
}

// freeze stops the program that makes a part, as soon as there is one. Call it before
// the launch, the returned function after.
func (s *site) freeze(t *testing.T, folder string, part, parts int) func() int {
	found := make(chan int, 1)
	word := []byte(fmt.Sprintf("\x00--part\x00%d/%d\x00", part, parts))
	place := []byte(filepath.Join(s.work, folder, "parts"))
	go func() {
		defer close(found)
		for end := time.Now().Add(patience); time.Now().Before(end); time.Sleep(time.Millisecond) {
			list, _ := filepath.Glob("/proc/[0-9]*/cmdline")
			for _, name := range list {
				line, err := os.ReadFile(name)
				if err != nil || !bytes.Contains(line, word) || !bytes.Contains(line, place) {
					continue
				}
				pid, err := strconv.Atoi(filepath.Base(filepath.Dir(name)))
				if err == nil && syscall.Kill(pid, syscall.SIGSTOP) == nil {
					found <- pid
					return
				}
			}
		}
	}()
	return func() int {
		t.Helper()
		pid, ok := <-found
		if !ok {
			t.Fatalf("no program makes part %d of %s", part, folder)
		}
		if _, err := os.Stat(filepath.Join(s.work, folder, "parts", partName(part))); err == nil {
			t.Fatalf("part %d was done before it could be stopped: the data are too small", part)
		}
		t.Cleanup(func() { _ = syscall.Kill(pid, syscall.SIGCONT) })
		return pid
	}
}

func sendTo(t *testing.T, pid int, sig syscall.Signal) {
	t.Helper()
	if err := syscall.Kill(pid, sig); err != nil {
		t.Fatalf("signal %v to %d: %v", sig, pid, err)
	}
}

// task is what squeue says of the task that has a part.
func (s *site) task(t *testing.T, folder string, part int) (job, state, node string) {
	t.Helper()
	r, err := readLaunch(filepath.Join(s.work, folder))
	if err != nil || r == nil {
		t.Fatalf("%s: %v", folder, err)
	}
	name, _ := r.jobNames(1)
	for line := range strings.Lines(output(t, "squeue", "--noheader", "--array", "--states=all", "--name="+name, "--format=%F %K %T %N")) {
		f := strings.Fields(line)
		if len(f) >= 3 && f[1] == strconv.Itoa(part%r.Tasks) {
			job, state, node = f[0], f[2], strings.Join(f[3:], " ")
		}
	}
	return job, state, node
}

// right compares a result with that of the unsplit data, bit for bit.
func (s *site) right(t *testing.T, name string) {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(s.work, name))
	if err != nil {
		t.Fatal(err)
	}
	got, err := numbersOf(text)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(s.want, got); d != "" {
		t.Errorf("%s (-unsplit +launch):\n%s", name, d)
	}
}

// args are those of a launch of the data in four parts.
func (s *site) args(name string, more ...string) []string {
	return slices.Concat(s.model, []string{s.data, "--parts", "4", "--json", "-o", name}, more)
}

func newSite(t *testing.T, dir string) *site {
	t.Setenv("SLURM_CONF", filepath.Join(dir, "slurm.conf"))
	s := &site{dir: dir, work: filepath.Join(t.TempDir(), "work of the night")}
	if err := os.Mkdir(s.work, 0o755); err != nil {
		t.Fatal(err)
	}
	s.prog = filepath.Join(t.TempDir(), "tallrow")
	output(t, "go", "build", "-o", s.prog, ".")
	output(t, s.prog, "demo", "--rows", "1000000", "--dir", s.work, "--csv")
	s.data = filepath.Join(s.work, "unloading.csv")
	s.model = []string{"--outcome", "minutes", "--terms", "pallets, tonnes, crew, wet, night, pallets*tonnes, pallets*crew, pallets*wet, pallets*night, tonnes*crew, " +
		"tonnes*wet, tonnes*night, crew*wet, crew*night, wet*night, pallets*pallets, tonnes*tonnes, crew*crew", "--arithmetic", "extended", "--errors", "hc1, cr1(quay)"}
	whole := filepath.Join(s.work, "unsplit.digest")
	output(t, s.prog, slices.Concat([]string{"digest"}, s.model, []string{s.data, "-o", whole})...)
	var err error
	if s.want, err = numbersOf([]byte(output(t, s.prog, "fit", whole, "--errors", "hc1, cr1(quay)", "--json"))); err != nil {
		t.Fatal(err)
	}
	return s
}

// launch on a real Slurm of four nodes: what comes out has the bits of the unsplit
// data, whatever is lost on the way.
func TestSlurm(t *testing.T) {
	dir := os.Getenv("TALLROW_SLURM")
	if dir == "" {
		t.Skip("TALLROW_SLURM is not set; .ci/run starts a Slurm by testdata/slurm/up.sh and sets it to its folder")
	}
	s := newSite(t, dir)

	// A task that hangs is ended by its time limit, a minute here: that goes on beside
	// the others.
	hanging := s.freeze(t, "hangs.json.launch", 3, 4)
	hangs := s.start(t, s.args("hangs.json", "--time", "1m")...)
	hanging()

	t.Run("two rounds", func(t *testing.T) {
		// Categories, and leverages: two rounds; more parts than an array may have tasks.
		model := []string{"--outcome", "minutes", "--terms", "pallets, tonnes, each(barge)", "--errors", "hc3, cr1(quay)"}
		data, err := filepath.Abs(filepath.Join("..", "..", "testdata", "quays", "unloading.csv"))
		if err != nil {
			t.Fatal(err)
		}
		s.start(t, slices.Concat(model, []string{data, "--parts", "11", "--json", "-o", "rounds.json"})...).ends(exitDone)
		at := func(name string) string { return filepath.Join(s.work, name) }
		output(t, s.prog, slices.Concat([]string{"digest"}, model, []string{data, "-o", at("w.digest")})...)
		output(t, s.prog, "fit", at("w.digest"), "--errors", "classical", "--json", "-o", at("first.json"))
		output(t, s.prog, slices.Concat([]string{"digest"}, model, []string{data, "--at", at("first.json"), "-o", at("s.digest")})...)
		two := *s
		if two.want, err = numbersOf([]byte(output(t, s.prog, "fit", at("w.digest"), at("s.digest"), "--errors", "hc3, cr1(quay)", "--json"))); err != nil {
			t.Fatal(err)
		}
		two.right(t, "rounds.json")
	})

	t.Run("nothing lost", func(t *testing.T) {
		l := s.start(t, s.args("good.json")...)
		l.ends(exitDone)
		if n := l.count("^submitted"); n != 2 {
			t.Errorf("%d submissions, want 2:\n%s", n, l.said())
		}
		s.right(t, "good.json")
		// The same again has nothing to do.
		l = s.start(t, s.args("good.json")...)
		l.ends(exitDone)
		if n := l.count("^submitted"); n != 0 {
			t.Errorf("%d submissions of what is done:\n%s", n, l.said())
		}
	})

	t.Run("program killed", func(t *testing.T) {
		pid := s.freeze(t, "killed.json.launch", 1, 4)
		l := s.start(t, s.args("killed.json")...)
		sendTo(t, pid(), syscall.SIGKILL)
		l.ends(exitDone)
		if l.count(`^task 1: FAILED; .*Killed`) != 1 || l.count(`^submitted \d+: 1 part of 4$`) != 1 || l.count("^submitted") != 4 {
			t.Errorf("launch said:\n%s", l.said())
		}
		s.right(t, "killed.json")
	})

	t.Run("killed with a checkpoint", func(t *testing.T) {
		t.Setenv("TALLROW_CHECKPOINT_SEGMENTS", "1") // sbatch hands it on
		frozen := s.freeze(t, "kept.json.launch", 1, 4)
		l := s.start(t, s.args("kept.json")...)
		pid := frozen()
		for saved := ""; saved == ""; {
			sendTo(t, pid, syscall.SIGCONT)
			time.Sleep(10 * time.Millisecond)
			sendTo(t, pid, syscall.SIGSTOP)
			if list, _ := filepath.Glob(filepath.Join(s.work, "kept.json.launch", "checkpoints", "part-1-*")); len(list) > 0 {
				saved = list[0]
			}
		}
		sendTo(t, pid, syscall.SIGKILL)
		l.ends(exitDone)
		logs, err := filepath.Glob(filepath.Join(s.work, "kept.json.launch", "logs", "part-*_1.txt"))
		if err != nil {
			t.Fatal(err)
		}
		wentOn := 0
		for _, name := range logs {
			text, err := os.ReadFile(name)
			if err != nil {
				t.Fatal(err)
			}
			wentOn += bytes.Count(text, []byte("going on from "))
		}
		if len(logs) != 2 || wentOn != 1 || l.count(`^submitted \d+: 1 part of 4$`) != 1 {
			t.Errorf("%d logs, %d times gone on; launch said:\n%s", len(logs), wentOn, l.said())
		}
		s.right(t, "kept.json")
	})

	t.Run("script killed", func(t *testing.T) {
		pid := s.freeze(t, "script.json.launch", 2, 4)
		l := s.start(t, s.args("script.json")...)
		stat, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid()))
		if err != nil {
			t.Fatal(err)
		}
		_, rest, _ := strings.Cut(string(stat), ") ") // state, parent
		parent, err := strconv.Atoi(strings.Fields(rest)[1])
		if err != nil {
			t.Fatal(err)
		}
		sendTo(t, parent, syscall.SIGKILL)
		l.ends(exitDone)
		if l.count(`^submitted \d+: 1 part of 4$`) != 1 {
			t.Errorf("launch said:\n%s", l.said())
		}
		s.right(t, "script.json")
	})

	t.Run("part missing", func(t *testing.T) {
		pid := s.freeze(t, "missing.json.launch", 2, 4)
		l := s.start(t, s.args("missing.json", "--tries", "1")...)
		sendTo(t, pid(), syscall.SIGKILL)
		l.ends(exitIncomplete)
		if l.count(`^tallrow: incomplete: part\(s\) 2 of 4 missing after 1 try: task 2: FAILED; .*Killed`) != 1 {
			t.Errorf("launch said:\n%s", l.said())
		}
		// It was refused by the job behind the parts, not by launch alone.
		status, err := os.ReadFile(filepath.Join(s.work, "missing.json.launch", "status-1"))
		if err != nil || string(status) != "pool 3\n" {
			t.Errorf("status of the joining job: %q, %v", status, err)
		}
		if _, err := os.Stat(filepath.Join(s.work, "missing.json")); err == nil {
			t.Error("there is a result")
		}
		l = s.start(t, "--resume", "missing.json.launch")
		l.ends(exitDone)
		if l.count(`^submitted \d+: 1 part of 4$`) != 1 {
			t.Errorf("launch said:\n%s", l.said())
		}
		s.right(t, "missing.json")
	})

	t.Run("node down", func(t *testing.T) {
		frozen := s.freeze(t, "node.json.launch", 0, 4)
		l := s.start(t, s.args("node.json")...)
		pid := frozen()
		job, state, node := s.task(t, "node.json.launch", 0)
		if state != "RUNNING" || node == "" {
			t.Fatalf("task 0 is %s on %q", state, node)
		}
		output(t, "scontrol", "update", "NodeName="+node, "State=DOWN", "Reason=test")
		until(t, "the lost task is queued again", func() bool {
			_, state, _ := s.task(t, "node.json.launch", 0)
			return state == "PENDING"
		})
		output(t, "scontrol", "update", "JobId="+job+"_0", "StartTime=now") // else two minutes later
		until(t, "the processes on the lost node are gone", func() bool { return !alive(pid) })
		l.ends(exitDone)
		// Slurm has started it again by itself.
		if n := l.count("^submitted"); n != 2 {
			t.Errorf("%d submissions, want 2:\n%s", n, l.said())
		}
		s.right(t, "node.json")
		until(t, "the node is back", func() bool {
			_ = exec.Command("scontrol", "update", "NodeName="+node, "State=RESUME").Run() // it may be back already
			return strings.TrimSpace(output(t, "sinfo", "--noheader", "--nodes="+node, "--format=%T")) != "down"
		})
	})

	t.Run("two copies of a part", func(t *testing.T) {
		frozen := s.freeze(t, "copies.json.launch", 1, 4)
		l := s.start(t, s.args("copies.json")...)
		pid := frozen()
		// The second copy overtakes the first.
		cmd := exec.Command("sh", filepath.Join(s.work, "copies.json.launch", "part-1.sh"))
		cmd.Env = append(os.Environ(), "SLURM_ARRAY_TASK_ID=1")
		if out, err := cmd.CombinedOutput(); err != nil {
			t.Fatalf("%v: %s", err, out)
		}
		part := filepath.Join(s.work, "copies.json.launch", "parts", partName(1))
		before, err := os.ReadFile(part)
		if err != nil {
			t.Fatal(err)
		}
		sendTo(t, pid, syscall.SIGCONT)
		l.ends(exitDone)
		after, err := os.ReadFile(part)
		if err != nil || !bytes.Equal(before, after) {
			t.Errorf("two copies of a part differ (%v)", err)
		}
		s.right(t, "copies.json")
	})

	t.Run("launch killed", func(t *testing.T) {
		frozen := s.freeze(t, "lost.json.launch", 1, 4)
		l := s.start(t, s.args("lost.json")...)
		pid := frozen()
		l.says("^parts: 3 of 4 done")
		sendTo(t, l.cmd.Process.Pid, syscall.SIGKILL)
		<-l.end
		// The same command goes on; interrupted it says how to go on and how to stop.
		l = s.start(t, s.args("lost.json")...)
		l.says("^parts: 3 of 4 done")
		other := s.start(t, "--resume", "lost.json.launch")
		other.ends(exitUse)
		if other.count("another launch follows this run now") != 1 {
			t.Errorf("a second launch said:\n%s", other.said())
		}
		sendTo(t, l.cmd.Process.Pid, syscall.SIGINT)
		l.ends(130)
		if l.count(`^tallrow: interrupted; the jobs go on: tallrow launch --resume '.*lost.json.launch' follows them again, scancel \d+ \d+ ends them$`) != 1 || l.count("^submitted") != 0 {
			t.Errorf("interrupted, launch said:\n%s", l.said())
		}
		l = s.start(t, "--resume", "lost.json.launch")
		l.says("^parts: 3 of 4 done")
		sendTo(t, pid, syscall.SIGCONT)
		l.ends(exitDone)
		if n := l.count("^submitted"); n != 0 {
			t.Errorf("%d submissions of what was submitted:\n%s", n, l.said())
		}
		s.right(t, "lost.json")
	})

	t.Run("controller killed", func(t *testing.T) {
		frozen := s.freeze(t, "controller.json.launch", 1, 4)
		l := s.start(t, s.args("controller.json")...)
		pid := frozen()
		l.says("^submitted .*joins and fits")
		// The controller writes its state some seconds behind its answers. Killed within
		// them it forgets jobs that run, and gives their numbers to others.
		time.Sleep(8 * time.Second)
		text, err := os.ReadFile(filepath.Join(s.dir, "run", "slurmctld.pid"))
		if err != nil {
			t.Fatal(err)
		}
		controller, err := strconv.Atoi(strings.TrimSpace(string(text)))
		if err != nil {
			t.Fatal(err)
		}
		sendTo(t, controller, syscall.SIGKILL)
		until(t, "the controller is gone", func() bool { return !alive(controller) })
		l.says("trying again, the jobs do not need it to go on$")
		sendTo(t, pid, syscall.SIGCONT)
		if out, err := exec.Command("/usr/sbin/slurmctld", "-f", os.Getenv("SLURM_CONF")).CombinedOutput(); err != nil {
			t.Fatalf("%v: %s", err, out)
		}
		l.says("^the controller answers again$")
		l.ends(exitDone)
		// It may come back without its newest jobs: then only what is not there yet is
		// submitted again.
		if l.count(`^submitted \d+: 4 parts of 4$`) != 1 || l.count("^submitted") > 4 {
			t.Errorf("launch said:\n%s", l.said())
		}
		s.right(t, "controller.json")
	})

	t.Run("task hangs", func(t *testing.T) {
		hangs.ends(exitDone)
		if hangs.count(`^task 3: TIMEOUT; `) != 1 || hangs.count(`^submitted \d+: 1 part of 4$`) != 1 {
			t.Errorf("launch said:\n%s", hangs.said())
		}
		s.right(t, "hangs.json")
	})

	// Nothing half-written stays.
	left, err := filepath.Glob(filepath.Join(s.work, "*.launch", "*", ".*"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %q %v", left, err)
	}
	for _, name := range []string{"good.json.launch", "rounds.json.launch"} {
		text, err := os.ReadFile(filepath.Join(s.work, name, "launch.json"))
		if err != nil || !json.Valid(text) {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// alive reports whether a process runs; one that nobody has waited for does not.
func alive(pid int) bool {
	stat, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid))
	if err != nil {
		return false
	}
	_, rest, _ := strings.Cut(string(stat), ") ")
	return !strings.HasPrefix(rest, "Z")
}
