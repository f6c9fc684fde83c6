package accum

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// mounted is a file system of that size in memory.
func mounted(t *testing.T, bytes int, flags uintptr) string {
	t.Helper()
	dir := t.TempDir()
	if err := syscall.Mount("tmpfs", dir, "tmpfs", flags, fmt.Sprintf("size=%d", bytes)); err != nil {
		t.Skipf("no file system can be mounted here (%v); want root", err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(dir, 0); err != nil {
			t.Error(err)
		}
	})
	return dir
}

// On a full disk the run goes on, says so, and leaves the file of the save before.
func TestCheckpointDiskFull(t *testing.T) {
	small := filepath.Join(t.TempDir(), "fit.ck")
	src, d, want := halted(t, small)
	c, err := OpenCheckpoint(small, checkpointFacts)
	if err != nil {
		t.Fatal(err)
	}
	c.Close()
	if st, err := os.Stat(small); err != nil || st.Size() > 4<<10 {
		t.Fatalf("the file has %d bytes (%v), want no more than a page for this test", st.Size(), err)
	}
	dir := mounted(t, 4<<10, 0) // one page: the first save takes it, the next would need another
	name := filepath.Join(dir, "fit.ck")
	halted(t, name) // with three saves, of which one goes in
	for range 2 {
		if c, err = OpenCheckpoint(name, checkpointFacts); err != nil {
			t.Fatal(err)
		}
		if pass, segments, _ := c.Found(); pass != 1 || segments < 1 || segments > 2 {
			c.Close()
			t.Fatalf("pass %d and %d segments were saved, want the first save only", pass, segments)
		}
		var told []error
		c.Segments, c.Warn = 1, func(err error) { told = append(told, err) }
		if got := sumsOf(t, src, d, c); got != want {
			t.Error("the sums differ from those of a run that was not stopped")
		}
		c.Close()
		if len(told) == 0 || !strings.Contains(told[0].Error(), syscall.ENOSPC.Error()) || !strings.Contains(told[0].Error(), "the run goes on") {
			t.Errorf("told %v, want that the disk is full", told)
		}
	}
}

func TestCheckpointReadOnly(t *testing.T) {
	dir := mounted(t, 1<<20, syscall.MS_RDONLY)
	_, err := OpenCheckpoint(filepath.Join(dir, "fit.ck"), nil)
	var e *CheckpointError
	if !errors.As(err, &e) || !strings.Contains(err.Error(), syscall.EROFS.Error()) {
		t.Errorf("error %v, want that the folder is read-only", err)
	}
}
