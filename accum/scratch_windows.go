package accum

import (
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"syscall"
)

// createScratch makes a file that the system deletes with its last handle, however
// the process ends.
func createScratch(dir string) (scratchFile, error) {
	const temporary, deleteOnClose = 0x100, 0x04000000
	name := filepath.Join(dir, fmt.Sprintf("tallrow-%016x", rand.Uint64()))
	path, err := syscall.UTF16PtrFromString(name)
	if err != nil {
		return nil, err
	}
	h, err := syscall.CreateFile(path, syscall.GENERIC_READ|syscall.GENERIC_WRITE, 0, nil, syscall.CREATE_NEW,
		temporary|deleteOnClose, 0)
	if err != nil {
		return nil, &os.PathError{Op: "open", Path: name, Err: err}
	}
	return os.NewFile(uintptr(h), name), nil
}
