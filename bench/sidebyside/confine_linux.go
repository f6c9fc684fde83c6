package main

import (
	"os"
	"os/exec"
	"runtime"
	"syscall"

	"golang.org/x/sys/unix"
)

// startConfined starts cmd on the first processors of those this process may
// use; 0 means all of them. A child inherits the mask of the thread that starts
// it.
func startConfined(cmd *exec.Cmd, processors int) error {
	var all unix.CPUSet
	if err := unix.SchedGetaffinity(0, &all); err != nil || processors == 0 || processors >= all.Count() {
		return cmd.Start()
	}
	var few unix.CPUSet
	for c := 0; few.Count() < processors; c++ {
		if all.IsSet(c) {
			few.Set(c)
		}
	}
	runtime.LockOSThread()
	defer runtime.UnlockOSThread()
	if err := unix.SchedSetaffinity(0, &few); err != nil {
		return err
	}
	defer unix.SchedSetaffinity(0, &all)
	return cmd.Start()
}

func peakOf(st *os.ProcessState) int64 {
	if ru, ok := st.SysUsage().(*syscall.Rusage); ok {
		return int64(ru.Maxrss) << 10
	}
	return 0
}

// freeBytes is what the disk of dir has left; false if unknown.
func freeBytes(dir string) (int64, bool) {
	var st unix.Statfs_t
	if unix.Statfs(dir, &st) != nil {
		return 0, false
	}
	return int64(st.Bavail) * int64(st.Bsize), true
}
