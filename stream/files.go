package stream

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

// foundFile is one input that the arguments name.
type foundFile struct {
	path string
	info fs.FileInfo
	pipe bool
}

// expansion is what the arguments come to.
type expansion struct {
	files   []foundFile // files sorted bytewise by path, then pipes as given
	skipped int         // names with leading _ or . that were passed over
	folders []folder    // all folders that were read
}

type folder struct {
	path string
	info fs.FileInfo
}

// expandPaths finds the files behind the arguments: files, patterns, folders
// with everything below. A path that exists is never taken for a pattern.
func expandPaths(ctx context.Context, paths []string) (*expansion, error) {
	e := &expansion{}
	for _, path := range paths {
		if err := e.argument(ctx, path); err != nil {
			return nil, err
		}
	}
	slices.SortStableFunc(e.files, func(a, b foundFile) int {
		switch {
		case a.pipe && b.pipe:
			return 0
		case a.pipe:
			return 1
		case b.pipe:
			return -1
		}
		return strings.Compare(filepath.Clean(a.path), filepath.Clean(b.path))
	})
	return e, e.refuseTwice()
}

func (e *expansion) argument(ctx context.Context, path string) error {
	if path == "" {
		return Usef("a data argument is empty; want a file, a folder, a pattern or -")
	}
	info, err := os.Stat(path)
	switch {
	case err == nil && info.IsDir():
		before, skipped := len(e.files), e.skipped
		if err := e.folder(ctx, path, info); err != nil {
			return err
		}
		if len(e.files) == before {
			return fmt.Errorf("folder %s: found no files%s, want at least one", path, passedOver(e.skipped-skipped))
		}
		return nil
	case err == nil:
		return e.add(path, info)
	case !errors.Is(err, fs.ErrNotExist) && !strings.ContainsAny(path, patternChars):
		return err
	}
	if _, err := os.Lstat(path); err == nil {
		return fmt.Errorf("%s: the link leads nowhere: %w", path, fs.ErrNotExist)
	}
	if strings.ContainsAny(path, patternChars) {
		return e.pattern(ctx, path)
	}
	return fmt.Errorf("%s: %w%s", path, fs.ErrNotExist, likeName(path))
}

const patternChars = "*?["

func passedOver(n int) string {
	if n == 0 {
		return ""
	}
	return fmt.Sprintf(" (%d names with leading _ or . passed over)", n)
}

// hidden reports whether a name in a folder is passed over.
func hidden(name string) bool {
	return strings.HasPrefix(name, "_") || strings.HasPrefix(name, ".") && name != "." && name != ".."
}

func (e *expansion) add(path string, info fs.FileInfo) error {
	mode := info.Mode()
	switch {
	case mode.IsRegular():
		e.files = append(e.files, foundFile{path: path, info: info})
	case mode&fs.ModeDevice != 0 && mode&fs.ModeCharDevice == 0:
		return fmt.Errorf("%s: is a block device, want a file or a pipe", path)
	default:
		e.files = append(e.files, foundFile{path: path, info: info, pipe: true})
	}
	return nil
}

// pattern adds what a pattern matches. As in a shell, names with leading _ or .
// are taken only if the pattern spells that character out.
func (e *expansion) pattern(ctx context.Context, pattern string) error {
	parts := strings.Split(pattern, string(filepath.Separator))
	if slices.Contains(parts, "**") {
		return Usef("%s: ** is not known in patterns; name the folder, it is read with all folders below it", pattern)
	}
	matches, err := filepath.Glob(pattern)
	if err != nil {
		return Usef("%s: not a correct pattern: %v", pattern, err)
	}
	before, skipped := len(e.files), e.skipped
	for _, path := range matches {
		names := strings.Split(path, string(filepath.Separator))
		skip := false
		for i, name := range names {
			if hidden(name) && len(names) == len(parts) && !hidden(parts[i]) {
				skip = true
			}
		}
		if skip {
			e.skipped++
			continue
		}
		info, err := os.Stat(path)
		if err != nil {
			return err
		}
		if info.IsDir() {
			err = e.folder(ctx, path, info)
		} else {
			err = e.add(path, info)
		}
		if err != nil {
			return err
		}
	}
	if len(e.files) == before {
		return fmt.Errorf("%s: the pattern matches no files%s: %w", pattern, passedOver(e.skipped-skipped), fs.ErrNotExist)
	}
	return nil
}

// folder adds the files below a folder. A link to a folder is followed unless
// that folder was read already: the rows would count twice, or never end.
func (e *expansion) folder(ctx context.Context, dir string, info fs.FileInfo) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	e.folders = append(e.folders, folder{dir, info})
	entries, err := os.ReadDir(dir)
	if err != nil {
		return err
	}
	for _, entry := range entries {
		if hidden(entry.Name()) {
			e.skipped++
			continue
		}
		path := filepath.Join(dir, entry.Name())
		info, err := os.Stat(path)
		if err != nil {
			return err
		}
		switch {
		case info.IsDir():
			if entry.Type()&fs.ModeSymlink != 0 {
				for _, f := range e.folders {
					if os.SameFile(f.info, info) {
						return Usef("folder %s is a link to %s, which is read already; remove the link or name the folders one by one", path, f.path)
					}
				}
			}
			err = e.folder(ctx, path, info)
		case info.Mode().IsRegular():
			err = e.add(path, info)
		default:
			err = fmt.Errorf("%s: is not a regular file (%s); in a folder only files are read", path, info.Mode().Type())
		}
		if err != nil {
			return err
		}
	}
	return nil
}

// refuseTwice looks for one file under two names, or twice under one. Equal
// files have equal sizes and times, so only those are compared.
func (e *expansion) refuseTwice() error {
	type look struct{ size, time int64 }
	seen := make(map[look][]int, len(e.files))
	for i, f := range e.files {
		var l look // pipes change size and time while they are written
		if !f.pipe {
			l = look{f.info.Size(), f.info.ModTime().UnixNano()}
		}
		for _, j := range seen[l] {
			if !os.SameFile(e.files[j].info, f.info) {
				continue
			}
			if other := e.files[j].path; other != f.path {
				return Usef("%s and %s are the same file; name it once", other, f.path)
			}
			return Usef("%s is named twice", f.path)
		}
		seen[l] = append(seen[l], i)
	}
	return nil
}

// likeName returns "; did you mean X?" for a file that does not exist, or "".
func likeName(path string) string {
	dir, name := filepath.Split(path)
	from := dir
	if from == "" {
		from = "."
	}
	entries, err := os.ReadDir(from)
	if err != nil || len(entries) > 10000 {
		return ""
	}
	names := make([]string, len(entries))
	for i, entry := range entries {
		names[i] = entry.Name()
	}
	names = nearest(name, names)
	for i := range names {
		names[i] = dir + names[i]
	}
	if len(names) == 0 {
		return ""
	}
	return "; did you mean " + oneOf(names) + "?"
}
