package stream

import (
	"context"
	"io"
	"slices"
)

// Sample takes the file in which that share of the stored bytes falls, and the
// share within it. Where that file ends early it goes on with the next ones
// until it has a full batch.
func (u *union) Sample(ctx context.Context, uses []Use, at float64) (Segment, error) {
	return u.SampleWhere(ctx, uses, at, nil)
}

// SampleWhere goes on to the next files by all rows, those that are not read
// among them.
func (u *union) SampleWhere(ctx context.Context, uses []Use, at float64, f Filter) (Segment, error) {
	if !u.info.Sampled {
		return nil, ErrNoSample
	}
	if err := u.check(uses); err != nil {
		return nil, err
	}
	if err := checkAt(at); err != nil {
		return nil, err
	}
	pos := at * float64(u.info.Bytes)
	i := 0
	for i+1 < len(u.members) && float64(u.before[i+1]) <= pos {
		i++
	}
	inner := at
	if size := u.before[i+1] - u.before[i]; at < 1 {
		inner = 0
		if size > 0 {
			inner = min(max((pos-float64(u.before[i]))/float64(size), 0), 1)
		}
	}
	s := &unionSample{u: u, ctx: ctx, uses: slices.Clone(uses), where: f, file: i, end: at == 1}
	if err := s.open(inner); err != nil {
		return nil, err
	}
	return s, nil
}

type unionSample struct {
	u     *union
	ctx   context.Context
	uses  []Use
	where Filter
	file  int
	end   bool // the end of the input is asked for: look before empty files
	seg   Segment
	cols  *unionColumns
	rows  int64
	past  SegmentTally // of files that are left behind
}

func (s *unionSample) open(at float64) error {
	m := s.u.members[s.file]
	src, err := m.acquire(s.ctx)
	if err != nil {
		return err
	}
	inner, from := s.u.memberUses(m, s.uses)
	seg, err := sampleWhere(s.ctx, src, inner, at, s.u.memberFilter(m, s.uses, from, s.where))
	if err != nil {
		m.release()
		return err
	}
	s.seg, s.cols = seg, newUnionColumns(s.u, m, s.uses, from)
	return nil
}

// Number is that of a segment in its file: a sample has no place in the
// numbering of the whole.
func (s *unionSample) Number() int {
	if s.seg == nil {
		return -1
	}
	return s.seg.Number()
}

func (s *unionSample) Read(b *Batch) error {
	b.Rows, b.Cols, b.Marks = 0, nil, nil
	for s.seg != nil {
		before := s.seg.Tally().Excluded
		err := s.cols.read(s.seg, b)
		if err == nil {
			s.rows += int64(b.Rows) + s.seg.Tally().Excluded - before
			return nil
		}
		step, at := 1, 0.0
		if s.end {
			step, at = -1, 1
		}
		next := s.file + step
		if err != io.EOF || next < 0 || next == len(s.u.members) || s.rows >= BatchRows || s.end && s.rows > 0 {
			return err
		}
		s.past = s.Tally()
		if err := s.Close(); err != nil {
			return err
		}
		s.file = next
		if err := s.open(at); err != nil {
			return err
		}
	}
	return io.EOF
}

func (s *unionSample) Locate(mark int64) Position {
	if s.seg == nil {
		return Position{}
	}
	return s.seg.Locate(mark)
}

func (s *unionSample) Tally() SegmentTally {
	t := s.past
	if s.seg != nil {
		in := s.seg.Tally()
		t.Rows += in.Rows
		t.Malformed += in.Malformed
		t.Bytes += in.Bytes
		t.Excluded += in.Excluded
	}
	return t
}

func (s *unionSample) Close() error {
	if s.seg == nil {
		return nil
	}
	seg := s.seg
	s.seg = nil
	return firstErr(seg.Close(), s.u.members[s.file].release())
}
