package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"syscall"

	"github.com/google/renameio/v2"
	"github.com/mattn/go-isatty"
	"golang.org/x/term"

	"github.com/tallrow/tallrow/stream"
)

// sink is where a result goes. It is opened before the data are read, so that
// a wrong name does not cost the run.
type sink struct {
	w    io.Writer
	name string
	file *renameio.PendingFile
	drop func()
}

// openSink opens --output, or standard output.
func (a *app) openSink(s *settings) (*sink, error) {
	if !s.given("output") {
		return &sink{w: a.stdout}, nil
	}
	name := s.output
	if name == "" {
		return nil, stream.Usef("%s: want a file name", s.origin("output"))
	}
	if st, err := os.Stat(name); err == nil {
		if !st.Mode().IsRegular() {
			return nil, stream.Usef("%s %s: is not a plain file", s.origin("output"), name)
		}
		for _, d := range s.data {
			if in, err := os.Stat(d); err == nil && os.SameFile(st, in) {
				return nil, stream.Usef("%s %s: would write over the data", s.origin("output"), name)
			}
		}
	}
	f, err := renameio.NewPendingFile(name, renameio.WithExistingPermissions(), renameio.WithPermissions(0o644))
	if err != nil {
		if errors.Is(err, fs.ErrNotExist) || errors.Is(err, syscall.ENOTDIR) {
			return nil, stream.Usef("%s %s: the folder does not exist", s.origin("output"), name)
		}
		return nil, fmt.Errorf("%s %s: %s", s.origin("output"), name, plainPathError(err))
	}
	return &sink{w: f, name: name, file: f, drop: a.onExit(func() { f.Cleanup() })}, nil
}

// write puts the whole result out at once.
func (k *sink) write(text []byte) error {
	if _, err := k.w.Write(text); err != nil {
		return k.failed(err)
	}
	if k.file == nil {
		return nil
	}
	if err := k.file.CloseAtomicallyReplace(); err != nil {
		return k.failed(err)
	}
	return nil
}

func (k *sink) failed(err error) error {
	name := k.name
	if name == "" {
		name = "standard output"
	}
	return fmt.Errorf("writing to %s: %s", name, plainPathError(err))
}

// width is how wide a text may be: the terminal's width, or a fixed one, so
// that files compare.
func (k *sink) width() int {
	if f, ok := k.w.(*os.File); ok && k.file == nil && isatty.IsTerminal(f.Fd()) {
		if w, _, err := term.GetSize(int(f.Fd())); err == nil && w > 0 {
			return w
		}
	}
	return plainWidth
}

// jsonLine is the JSON form of v and a newline.
func jsonLine(v any) ([]byte, error) {
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	if err := enc.Encode(v); err != nil {
		return nil, err
	}
	return b.Bytes(), nil
}
