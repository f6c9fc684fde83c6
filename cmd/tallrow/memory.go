package main

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
)

// smallest is what the program needs before it reads a row.
const smallest = 32 << 20

var sizeUnits = []struct {
	suffix string
	bytes  float64
}{
	{"KiB", 1 << 10}, {"MiB", 1 << 20}, {"GiB", 1 << 30}, {"TiB", 1 << 40},
	{"kB", 1e3}, {"KB", 1e3}, {"MB", 1e6}, {"GB", 1e9}, {"TB", 1e12}, {"B", 1},
}

// parseSize reads a number of bytes: 1GiB, 512MB, 1.5GB or plain 1073741824.
func parseSize(text string) (int64, error) {
	want := func() error { return fmt.Errorf("found %q, want a size such as 1GiB or 512MB", text) }
	t, unit := strings.TrimSpace(text), 1.0
	for _, u := range sizeUnits {
		if rest, ok := strings.CutSuffix(t, u.suffix); ok {
			t, unit = strings.TrimSpace(rest), u.bytes
			break
		}
	}
	x, err := strconv.ParseFloat(t, 64)
	if err != nil || math.IsNaN(x) || x <= 0 || x*unit >= math.MaxInt64 {
		return 0, want()
	}
	n := int64(x * unit)
	if n < smallest {
		return 0, fmt.Errorf("found %q, want at least %s", text, sizeText(smallest))
	}
	return n, nil
}

// defaultMemory is half of the machine's memory or of the limit of the control
// group the process is in, whichever is smaller. root is "/" but in tests.
func defaultMemory(root string) int64 {
	total := int64(math.MaxInt64)
	if data, err := os.ReadFile(filepath.Join(root, "proc/meminfo")); err == nil {
		for line := range strings.Lines(string(data)) {
			f := strings.Fields(line)
			if len(f) >= 2 && f[0] == "MemTotal:" {
				if kb, err := strconv.ParseInt(f[1], 10, 64); err == nil && kb > 0 {
					total = kb << 10
				}
			}
		}
	}
	for _, path := range groupLimits(root) {
		data, err := os.ReadFile(path)
		if err != nil {
			continue
		}
		// "max" and v1's huge default are no limits.
		if n, err := strconv.ParseInt(strings.TrimSpace(string(data)), 10, 64); err == nil && n > 0 {
			total = min(total, n)
		}
	}
	if total == math.MaxInt64 {
		return 2 << 30
	}
	return max(total/2, smallest)
}

// groupLimits lists the files that may hold a limit: those of the process's
// own group and of every group above it, version 2 and 1.
func groupLimits(root string) []string {
	var files []string
	climb := func(base, group, file string) {
		for g := filepath.Clean("/" + group); ; g = filepath.Dir(g) {
			files = append(files, filepath.Join(base, g, file))
			if g == "/" {
				return
			}
		}
	}
	v2 := filepath.Join(root, "sys/fs/cgroup")
	v1 := filepath.Join(root, "sys/fs/cgroup/memory")
	data, _ := os.ReadFile(filepath.Join(root, "proc/self/cgroup"))
	for line := range strings.Lines(string(data)) {
		f := strings.SplitN(strings.TrimSpace(line), ":", 3)
		if len(f) != 3 {
			continue
		}
		switch {
		case f[0] == "0" && f[1] == "":
			climb(v2, f[2], "memory.max")
		case strings.Contains(","+f[1]+",", ",memory,"):
			climb(v1, f[2], "memory.limit_in_bytes")
		}
	}
	return append(files, filepath.Join(v2, "memory.max"), filepath.Join(v1, "memory.limit_in_bytes"))
}

// peakBytes is the largest memory the process has held, 0 if unknown.
func peakBytes() int64 {
	if data, err := os.ReadFile("/proc/self/status"); err == nil {
		for line := range strings.Lines(string(data)) {
			f := strings.Fields(line)
			if len(f) >= 2 && f[0] == "VmHWM:" {
				if kb, err := strconv.ParseInt(f[1], 10, 64); err == nil {
					return kb << 10
				}
			}
		}
	}
	return peakByUsage()
}
