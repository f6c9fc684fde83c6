package main

import (
	"errors"
	"os"
	"os/exec"
	"syscall"
)

// setApart keeps an interrupt at the terminal from a command that is being run: half
// a submission is worse than one that is found again.
func setApart(cmd *exec.Cmd) { cmd.SysProcAttr = &syscall.SysProcAttr{Setpgid: true} }

// lockFile locks a file until the process ends. It reports false if another process
// holds the lock. File systems without locks lock nothing.
func lockFile(f *os.File) bool {
	return !errors.Is(syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB), syscall.EWOULDBLOCK)
}
