package accum

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"sync/atomic"
)

// ScratchError says that sums could not be put into the scratch folder or not be
// read back.
type ScratchError struct {
	Dir  string
	Need int64 // bytes that the folder must take, at least
	Err  error
}

func (e *ScratchError) Error() string {
	err := e.Err
	var p *fs.PathError
	if errors.As(err, &p) {
		err = p.Err
	}
	return fmt.Sprintf("scratch folder %s: %v; the sums of clusters do not fit --memory and need at least %s there: make room, raise --memory, or name another folder with --scratch", e.Dir, err, size(e.Need))
}

func (e *ScratchError) Unwrap() error { return e.Err }

// DamageError says that a scratch file does not hold what was written.
type DamageError struct {
	Dir string
	At  int64 // byte in the file
}

func (e *DamageError) Error() string {
	return fmt.Sprintf("scratch folder %s: the sums of clusters at byte %d of a temporary file read back differently than they were written; check the disk, or name another folder with --scratch", e.Dir, e.At)
}

// scratch makes temporary files and counts what goes there.
type scratch struct {
	dir    string
	create func(dir string) (scratchFile, error)
	meter  *Meter
	live   atomic.Int64 // bytes
}

// scratchFile vanishes when it is closed or the process ends.
type scratchFile interface {
	io.Writer
	io.ReaderAt
	io.Closer
}

func newScratch(o *Options) *scratch {
	s := &scratch{dir: o.Scratch, create: o.createScratch, meter: o.Meter}
	if s.meter == nil {
		s.meter = new(Meter)
	}
	if s.dir == "" {
		s.dir = os.TempDir()
	}
	if s.create == nil {
		s.create = createScratch
	}
	return s
}
