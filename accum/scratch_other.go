//go:build !windows

package accum

import "os"

// createScratch makes a file without a name: it is gone with its last descriptor,
// however the process ends.
func createScratch(dir string) (scratchFile, error) {
	f, err := os.CreateTemp(dir, "tallrow-")
	if err != nil {
		return nil, err
	}
	if err := os.Remove(f.Name()); err != nil {
		f.Close()
		return nil, err
	}
	return f, nil
}
