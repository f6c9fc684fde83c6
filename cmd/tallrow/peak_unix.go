//go:build unix

package main

import (
	"runtime"
	"syscall"
)

// peakByUsage asks the kernel for the largest resident set.
func peakByUsage() int64 {
	var ru syscall.Rusage
	if syscall.Getrusage(syscall.RUSAGE_SELF, &ru) != nil {
		return 0
	}
	// Apple's kernel counts bytes, the others kibibytes.
	if runtime.GOOS == "darwin" || runtime.GOOS == "ios" {
		return int64(ru.Maxrss)
	}
	return int64(ru.Maxrss) << 10
}
