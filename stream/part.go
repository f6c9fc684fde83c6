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
	open := scanSome
	if p.n == 1 {
		open = scanWhere
	}
	s, err := open(ctx, p.Source, uses, where)
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

// Skipper is a source in which what a segment holds depends on those before it.
type Skipper interface {
	Source
	// ScanSome is Scan, with a Filter as Pruner has it, for who reads only some
	// segments and closes the others: it does not read these, but guesses from the
	// text of a segment what it depends on. SegmentTally.Quotes says what was taken
	// for granted, so that the guesses can be proven when all parts are there.
	ScanSome(ctx context.Context, uses []Use, f Filter) (Scan, error)
}

func scanSome(ctx context.Context, src Source, uses []Use, f Filter) (Scan, error) {
	if s, ok := as[Skipper](src); ok {
		return s.ScanSome(ctx, uses, f)
	}
	return scanWhere(ctx, src, uses, f)
}

// Quotes says how a segment of delimited text was read; 0 for others. Whether a
// segment begins inside quotes is whether an odd number of quotes stands before it
// in its file, so that the segments of a file prove each other.
type Quotes uint8

// The bits of Quotes. QuotesKnown is set in all that is not 0, QuotesFirst in the
// first segment of a file, which begins outside.
const (
	QuotesKnown  Quotes = 1 << iota
	QuotesInside        // it was read as beginning inside quotes
	QuotesOdd           // it holds an odd number of quotes
	QuotesFirst
)

// Passer is a segment of which later ones need to know something: it can be told by who
// has read it in an earlier scan of the same input.
type Passer interface {
	Segment
	// Pass is Close of a segment that is not read. t is what Tally said at its end.
	Pass(t SegmentTally) error
}

// PassOver closes a segment that was read in an earlier scan, see Passer.
func PassOver(seg Segment, t SegmentTally) error {
	if p, ok := seg.(Passer); ok {
		return p.Pass(t)
	}
	return seg.Close()
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
