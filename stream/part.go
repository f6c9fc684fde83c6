package stream

import (
	"context"
	"fmt"
)

// Part returns the source of the segments of src whose number is i modulo n; src
// belongs to it. Numbers and samples stay those of the whole, so that parts read by
// different machines add up to it. Part panics unless 0 <= i < n.
func Part(src Source, i, n int) Source {
	if i < 0 || i >= n {
		panic(fmt.Sprintf("stream: part %d of %d", i, n))
	}
	return &part{src, i, n}
}

type part struct {
	Source
	i, n int
}

func (p *part) Scan(ctx context.Context, uses []Use) (Scan, error) {
	return p.ScanWhere(ctx, uses, nil)
}

// ScanWhere implements Pruner.
func (p *part) ScanWhere(ctx context.Context, uses []Use, where Filter) (Scan, error) {
	s, err := scanWhere(ctx, p.Source, uses, where)
	if err != nil {
		return nil, err
	}
	return &partScan{s, p.i, p.n}, nil
}

// SampleWhere implements Pruner.
func (p *part) SampleWhere(ctx context.Context, uses []Use, at float64, where Filter) (Segment, error) {
	return sampleWhere(ctx, p.Source, uses, at, where)
}

// Unread implements Pruner: of the whole input.
func (p *part) Unread(ctx context.Context, uses []Use, where Filter) (Unread, error) {
	return unread(ctx, p.Source, uses, where)
}

type partScan struct {
	Scan
	i, n int
}

func (s *partScan) Next(ctx context.Context) (Segment, error) {
	for {
		seg, err := s.Scan.Next(ctx)
		if err != nil || seg.Number()%s.n == s.i {
			return seg, err
		}
		if err := seg.Close(); err != nil {
			return nil, err
		}
	}
}

// FileState is a file as it was found; Size is -1 and Time empty for a pipe.
type FileState struct {
	Path string
	Size int64
	Time string
}

// ListFiles lists the files that Open would read, in its order.
func ListFiles(ctx context.Context, paths []string) ([]FileState, error) {
	if len(paths) == 1 && paths[0] == "-" {
		return []FileState{{Path: "standard input", Size: -1}}, nil
	}
	e, err := expandPaths(ctx, paths)
	if err != nil {
		return nil, err
	}
	var out []FileState
	for _, f := range e.files {
		s := FileState{Path: f.path, Size: -1}
		if !f.pipe {
			s.Size, s.Time = f.info.Size(), f.info.ModTime().UTC().Format("2006-01-02T15:04:05.999999999Z")
		}
		out = append(out, s)
	}
	return out, nil
}
