package main

import (
	"bytes"
	"context"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// commandOf is the test binary as the command; arguments follow.
func commandOf(t *testing.T, args ...string) *exec.Cmd {
	t.Helper()
	path, err := exec.LookPath("tallrow")
	if err != nil {
		t.Fatal(err)
	}
	c := exec.Command(path, args...)
	c.Env = append(os.Environ(), "GOMAXPROCS=2")
	return c
}

// names lists a folder.
func names(t *testing.T, dir string) (out []string) {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range list {
		out = append(out, e.Name())
	}
	return out
}

// Killed at any moment: the whole digest or none under its name, and what is left
// beside it is never taken for one.
func TestKilledDigest(t *testing.T) {
	data := unloadings(t, 4, 12_000)
	dir := t.TempDir()
	args := func(name string) []string {
		return []string{"digest", "--outcome", "minutes", "--terms", "pallets, tonnes, crew, wet", "--errors", "hc1, cr1(quay)", "--quiet", data, "-o", filepath.Join(dir, name)}
	}
	start := time.Now()
	if out, err := commandOf(t, args("whole.digest")...).CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	took := time.Since(start)
	whole, err := os.ReadFile(filepath.Join(dir, "whole.digest"))
	if err != nil {
		t.Fatal(err)
	}
	kills := 60
	if testing.Short() {
		kills = 8
	}
	rng := rand.New(rand.NewPCG(9, 9))
	finished, cut := 0, 0
	for i := range kills {
		c := commandOf(t, args("cut.digest")...)
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		wait := time.Duration(float64(took) * 1.1 * rng.Float64())
		if i%2 == 1 { // while the file is written and takes its name
			wait = time.Duration(float64(took) * (0.6 + 0.4*rng.Float64()))
		}
		time.Sleep(wait)
		c.Process.Kill()
		c.Wait()
		b, err := os.ReadFile(filepath.Join(dir, "cut.digest"))
		switch {
		case os.IsNotExist(err):
			cut++
		case err != nil:
			t.Fatal(err)
		case !bytes.Equal(b, whole):
			t.Fatalf("killed after %v: another file than the whole", wait)
		default:
			finished++
			os.Remove(filepath.Join(dir, "cut.digest"))
		}
	}
	left := 0
	for _, n := range names(t, dir) {
		if n != "whole.digest" {
			left++
			if !strings.HasPrefix(n, ".cut.digest.") {
				t.Errorf("left over: %s", n)
			}
		}
	}
	t.Logf("%d kills within %v: %d whole, %d without a file, %d temporary files left", kills, took, finished, cut, left)
	// The folder is the whole digest, as if nothing else were in it.
	must(t, "fit", dir, "--errors", "hc1")
	must(t, "pool", dir, "-o", filepath.Join(t.TempDir(), "x"))
}

// Asked to stop, a digest takes its temporary file with it.
func TestInterruptedDigest(t *testing.T) {
	data := unloadings(t, 3, 40_000)
	dir := t.TempDir()
	stopped := 0
	for i := range 12 {
		sig := []syscall.Signal{syscall.SIGINT, syscall.SIGTERM}[i%2]
		c := commandOf(t, "digest", "--outcome", "minutes", "--terms", "pallets, tonnes, crew, wet", "--errors", "hc1, cr1(quay)", "--quiet", data, "-o", filepath.Join(dir, "quay.digest"))
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		// It is asked as soon as its temporary file is there.
		for range 2000 {
			if len(names(t, dir)) > 0 {
				break
			}
			time.Sleep(time.Millisecond)
		}
		time.Sleep(time.Duration(i) * time.Millisecond)
		c.Process.Signal(sig)
		c.Wait()
		code := c.ProcessState.ExitCode()
		got := names(t, dir)
		switch {
		case code == 128+int(sig) && len(got) == 0:
			stopped++
		case code == 0 && len(got) == 1 && got[0] == "quay.digest": // it was done before
			os.Remove(filepath.Join(dir, "quay.digest"))
		default:
			t.Fatalf("%v: status %d, left %q", sig, code, got)
		}
	}
	if stopped == 0 {
		t.Error("no run was stopped in time")
	}
}

// A disk that is full, folders that cannot be written or are not there: an error that
// says so, and nothing left.
func TestNoRoomForDigest(t *testing.T) {
	data := unloadings(t, 2, 3000)
	digest := func(to string) (int, string) {
		code, out, errw := try(context.Background(), nil, "digest", "--outcome", "minutes", "--terms", "pallets, tonnes, crew", "--errors", "hc1, cr1(minutes), cr1(quay)", "--quiet", data, "-o", to)
		return code, out + errw
	}
	if code, text := digest(filepath.Join(t.TempDir(), "none", "x.digest")); code != exitUse || !strings.Contains(text, "the folder does not exist") {
		t.Errorf("no folder: status %d, %s", code, text)
	}
	locked := t.TempDir()
	if err := os.Chmod(locked, 0o500); err != nil {
		t.Fatal(err)
	}
	if os.Getuid() != 0 {
		if code, text := digest(filepath.Join(locked, "x.digest")); code != exitFailed || !strings.Contains(text, "permission denied") {
			t.Errorf("a folder that cannot be written: status %d, %s", code, text)
		}
	}
	if os.Getuid() != 0 {
		t.Skip("a small disk needs root")
	}
	small := t.TempDir()
	if err := syscall.Mount("tmpfs", small, "tmpfs", 0, "size=64k"); err != nil {
		t.Skip("no small disk: ", err)
	}
	defer syscall.Unmount(small, 0)
	for _, command := range []string{"digest", "pool"} {
		code, text := 0, ""
		if command == "digest" {
			code, text = digest(filepath.Join(small, "x.digest"))
		} else {
			whole := filepath.Join(t.TempDir(), "whole.digest")
			if code, text := digest(whole); code != 0 {
				t.Fatal(text)
			}
			var out string
			code, out, text = try(context.Background(), nil, "pool", whole, "-o", filepath.Join(small, "x.digest"))
			text += out
		}
		if code != exitFailed || !strings.Contains(text, "x.digest") || !strings.Contains(text, "no space left on device") {
			t.Errorf("%s on a full disk: status %d, %s", command, code, text)
		}
		if got := names(t, small); len(got) != 0 {
			t.Errorf("%s left %q on a full disk", command, got)
		}
	}
	if err := syscall.Mount("", small, "", syscall.MS_REMOUNT|syscall.MS_RDONLY, ""); err != nil {
		t.Skip("not made read-only: ", err)
	}
	if code, text := digest(filepath.Join(small, "x.digest")); code != exitFailed || !strings.Contains(text, "read-only file system") {
		t.Errorf("read-only: status %d, %s", code, text)
	}
}
