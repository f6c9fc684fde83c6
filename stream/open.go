package stream

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"os"
	"slices"
	"strings"
	"time"
)

// headBytes is how much of an input Format.Match sees.
const headBytes = 8 << 10

// Open opens the inputs that paths name as one source: files, patterns of
// filepath.Match, folders with everything below them, and "-", alone, for stdin
// (which may be nil otherwise). Names in folders and pattern matches with a
// leading _ or . are passed over and counted in Info.Skipped. Folders named
// key=value in the path of a file become columns behind the file's own.
//
// Files are read in the bytewise order of their paths, whatever the order of the
// arguments; named pipes follow as given. The same file twice is a UseError,
// also under two names; a missing file, an empty folder and a pattern without a
// match are errors that wrap fs.ErrNotExist or say what was looked for.
//
// The format of each input is Options.Format, or else the first of formats that
// matches. Several files have one schema: columns are matched by name, in the
// order of the first file; a column that only some files have stays in the
// schema and is an error when it is used; a column with another kind in another
// file is an error that names both, except that kinds guessed from text give way
// to wider ones. A single file is the format's own source.
//
// Each of many files is opened once to learn its schema and again when its
// segments come, so no more than about maxHeld files, and one for each segment
// in work, are open at a time. Closing the source closes them, and stdin.
func Open(ctx context.Context, paths []string, stdin io.ReadCloser, formats []Format, o Options) (Source, error) {
	o = o.WithDefaults()
	formats, err := chooseFormats(formats, o.Format)
	if err != nil {
		return nil, err
	}
	if len(paths) == 0 {
		return nil, Usef("no data is named; want files, folders, patterns, or - for standard input")
	}
	var src Source
	if slices.Contains(paths, "-") {
		src, err = openStdin(ctx, paths, stdin, formats, o)
	} else {
		src, err = openFiles(ctx, paths, formats, o)
	}
	if err != nil {
		return nil, err
	}
	if err := checkKinds(src.Schema(), o.Kinds); err != nil {
		src.Close()
		return nil, err
	}
	return src, nil
}

func chooseFormats(formats []Format, name string) ([]Format, error) {
	if name == "auto" {
		return formats, nil
	}
	var names []string
	for _, f := range formats {
		if f.Name() == name {
			return []Format{f}, nil
		}
		names = append(names, f.Name())
	}
	return nil, Usef("format %q is not known, want %s", name, oneOf(append([]string{"auto"}, names...)))
}

// checkKinds refuses kinds for columns that do not exist.
func checkKinds(schema *Schema, kinds map[string]Kind) error {
	for _, name := range slices.Sorted(maps.Keys(kinds)) {
		if schema.Lookup(name) >= 0 {
			continue
		}
		names := make([]string, len(schema.Columns))
		for j, c := range schema.Columns {
			names[j] = c.Name
		}
		hint := ""
		if near := nearest(name, names); len(near) > 0 {
			hint = "; did you mean " + oneOf(near) + "?"
		}
		return Usef("a kind is given for column %s, which is not in the data%s", name, hint)
	}
	return nil
}

func openStdin(ctx context.Context, paths []string, stdin io.ReadCloser, formats []Format, o Options) (Source, error) {
	if len(paths) > 1 {
		return nil, Usef("- (standard input) is named beside %s; want it alone", otherThan(paths, "-"))
	}
	if stdin == nil {
		return nil, Usef("- is named but there is no standard input")
	}
	const name = "standard input"
	if f, ok := stdin.(*os.File); ok {
		// A file that the shell has put there can be read at any place, unless
		// somebody has read a part of it.
		if info, err := f.Stat(); err == nil && info.IsDir() {
			return nil, fmt.Errorf("%s: is a folder, want data", name)
		} else if err == nil && info.Mode().IsRegular() {
			if at, err := f.Seek(0, io.SeekCurrent); err == nil && at == 0 {
				in := Input{Name: name, File: f, Size: info.Size(), ModTime: info.ModTime()}
				src, _, err := openInput(ctx, in, formats, o)
				if err != nil {
					return nil, err
				}
				return stdinFile{src, f}, nil
			}
		}
	}
	src, _, err := openInput(ctx, Input{Name: name, Pipe: stdin}, formats, o)
	return src, err
}

// stdinFile is a file on standard input: it has no path by which its stamp could
// be taken.
type stdinFile struct {
	Source
	file *os.File
}

func (s stdinFile) unwrap() Source { return s.Source }

func (s stdinFile) Stamp() (string, error) {
	info, err := s.file.Stat()
	if err != nil {
		return "", err
	}
	return fileStamp("standard input", info.Size(), info.ModTime()), nil
}

func otherThan(paths []string, not string) string {
	for _, p := range paths {
		if p != not {
			return p
		}
	}
	return "itself"
}

// openInput finds the format and opens the input; it closes it on an error.
func openInput(ctx context.Context, in Input, formats []Format, o Options) (Source, Format, error) {
	src, f, err := matchInput(ctx, &in, formats, o)
	if err != nil {
		if in.File != nil {
			in.File.Close()
		} else {
			in.Pipe.Close()
		}
		return nil, nil, err
	}
	return src, f, nil
}

func matchInput(ctx context.Context, in *Input, formats []Format, o Options) (Source, Format, error) {
	f := Format(nil)
	if o.Format != "auto" {
		f = formats[0]
	} else {
		head, err := readHead(ctx, in)
		if err != nil {
			return nil, nil, err
		}
		var names []string
		for _, try := range formats {
			if try.Match(in.Name, head) {
				f = try
				break
			}
			names = append(names, try.Name())
		}
		if f == nil {
			found := "name and first bytes fit no known format"
			if len(head) == 0 {
				found = "it is empty, and its name fits no known format"
			}
			return nil, nil, fmt.Errorf("%s: %s (tried %s), want one of them, or --format to say which it is", in.Name, found, strings.Join(names, ", "))
		}
	}
	src, err := f.Open(ctx, *in, o)
	return src, f, err
}

// readHead returns the first bytes of an input. Those of a pipe are kept for
// the format to read.
func readHead(ctx context.Context, in *Input) ([]byte, error) {
	if in.File != nil {
		head := make([]byte, min(headBytes, in.Size))
		n, err := in.File.ReadAt(head, 0)
		if err != nil && err != io.EOF {
			return nil, fmt.Errorf("%s: %w", in.Name, err)
		}
		return head[:n], nil
	}
	r := bufio.NewReaderSize(in.Pipe, 8*headBytes)
	pipe := in.Pipe
	in.Pipe = struct {
		io.Reader
		io.Closer
	}{r, pipe}
	type result struct {
		head []byte
		err  error
	}
	got := make(chan result, 1) // a read that never ends must not hold the caller
	go func() {
		head, err := r.Peek(headBytes)
		got <- result{head, err}
	}()
	select {
	case g := <-got:
		if g.err != nil && g.err != io.EOF {
			return nil, fmt.Errorf("%s: %w", in.Name, g.err)
		}
		return g.head, nil
	case <-ctx.Done():
		return nil, ctx.Err()
	}
}

// opener opens one file, each time in the format that was found first.
type opener struct {
	path    string
	pipe    bool
	formats []Format
	o       Options
}

func (p *opener) open(ctx context.Context, kinds map[string]Kind) (Source, error) {
	o := p.o
	if len(kinds) > 0 {
		o.Kinds = maps.Clone(o.Kinds)
		if o.Kinds == nil {
			o.Kinds = make(map[string]Kind)
		}
		maps.Copy(o.Kinds, kinds)
	}
	f, err := openPath(ctx, p.path)
	if err != nil {
		return nil, err
	}
	in := Input{Name: p.path, Pipe: f}
	if !p.pipe {
		info, err := f.Stat()
		if err == nil && !info.Mode().IsRegular() {
			err = fmt.Errorf("%s: is no longer a file", p.path)
		}
		if err != nil {
			f.Close()
			return nil, err
		}
		in = Input{Name: p.path, File: f, Size: info.Size(), ModTime: info.ModTime()}
	}
	src, format, err := openInput(ctx, in, p.formats, o)
	if err != nil {
		return nil, err
	}
	p.formats = []Format{format}
	p.o.Format = format.Name()
	return src, nil
}

// openPath opens a file. A named pipe blocks until somebody writes to it, which
// must not keep a cancelled caller.
func openPath(ctx context.Context, path string) (*os.File, error) {
	type result struct {
		f   *os.File
		err error
	}
	got := make(chan result, 1)
	go func() {
		f, err := os.Open(path)
		got <- result{f, err}
	}()
	select {
	case g := <-got:
		return g.f, g.err
	case <-ctx.Done():
		go func() {
			if g := <-got; g.f != nil {
				g.f.Close()
			}
		}()
		return nil, ctx.Err()
	}
}

func fileStamp(path string, size int64, modified time.Time) string {
	return fmt.Sprintf("%s %d bytes %s", path, size, modified.UTC().Format(time.RFC3339Nano))
}

func statStamp(path string) (string, error) {
	info, err := os.Stat(path)
	if errors.Is(err, fs.ErrNotExist) {
		return "", fmt.Errorf("%s: was removed while it was in use: %w", path, err)
	}
	if err != nil {
		return "", err
	}
	return fileStamp(path, info.Size(), info.ModTime()), nil
}

func openFiles(ctx context.Context, paths []string, formats []Format, o Options) (Source, error) {
	e, err := expandPaths(ctx, paths)
	if err != nil {
		return nil, err
	}
	names := make([]string, len(e.files))
	for i, f := range e.files {
		names[i] = f.path
	}
	folders, consts, err := folderColumns(names, o)
	if err != nil {
		return nil, err
	}
	inner := o
	inner.Kinds = maps.Clone(o.Kinds)
	for _, c := range folders {
		delete(inner.Kinds, c.Name)
	}
	if len(e.files) == 1 && len(folders) == 0 {
		p := &opener{path: names[0], pipe: e.files[0].pipe, formats: formats, o: inner}
		src, err := p.open(ctx, nil)
		if err != nil || e.skipped == 0 {
			return src, err
		}
		return skipped{src, e.skipped}, nil
	}
	members := make([]*member, len(e.files))
	pipes := 0
	for i, f := range e.files {
		p := &opener{path: f.path, pipe: f.pipe, formats: formats, o: inner}
		m := &member{name: f.path, open: p.open, pipe: f.pipe, hold: f.pipe || i < maxHeld, consts: consts[i]}
		if f.pipe {
			if pipes++; pipes > 1 && p.o.Spool != "" {
				p.o.Spool += fmt.Sprintf(".%d", pipes)
			}
			m.stamp = m.sourceStamp
		} else {
			m.state = fileStamp(f.path, f.info.Size(), f.info.ModTime())
			m.stamp = func() (string, error) { return statStamp(f.path) }
		}
		m.format = func() string { return p.o.Format }
		members[i] = m
	}
	return openUnion(ctx, members, folders, e.skipped)
}

// skipped adds the number of names passed over to the source of a single file.
type skipped struct {
	Source
	names int
}

func (s skipped) unwrap() Source { return s.Source }

func (s skipped) Info() Info {
	info := s.Source.Info()
	info.Skipped += s.names
	return info
}
