package stream

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"sync"
)

// maxHeld is how many files of a union stay open; the others are opened when
// their segments come and closed after the last one.
const maxHeld = 64

// member is one input of a union.
type member struct {
	name string
	// open opens the input, with Options.Kinds extended by kinds. A pipe is
	// opened once.
	open func(ctx context.Context, kinds map[string]Kind) (Source, error)
	pipe bool
	// format tells the name of the format, once opened.
	format func() string
	// stamp tells the present state of the input.
	stamp func() (string, error)
	hold  bool // stays open
	// guesses: the kinds come from the first rows and can be set by opening again.
	guesses bool

	known  bool // schema and the like are filled
	schema Schema
	info   Info
	state  string          // stamp when the input was found
	kinds  map[string]Kind // what the other files settle, see settle
	cols   []int           // by column of the union: index in schema or -1
	widen  []bool          // by column of the union: read as number
	consts []constant      // cells of the folder columns

	mu   sync.Mutex
	src  Source
	refs int
}

// acquire returns the open source; release gives it back.
func (m *member) acquire(ctx context.Context) (Source, error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.src == nil {
		if m.known && m.pipe {
			return nil, fmt.Errorf("%s: is closed", m.name)
		}
		src, err := m.open(ctx, m.kinds)
		if err != nil {
			return nil, err
		}
		if m.known {
			if err := m.unchanged(src); err != nil {
				src.Close()
				return nil, err
			}
		}
		m.src = src
	}
	m.refs++
	return m.src, nil
}

// unchanged compares a source that was opened again with what it was.
func (m *member) unchanged(src Source) error {
	state, err := m.stamp()
	if err != nil {
		return err
	}
	same := state == m.state && len(src.Schema().Columns) == len(m.schema.Columns)
	for j := 0; same && j < len(m.schema.Columns); j++ {
		was, is := m.schema.Columns[j], src.Schema().Columns[j]
		if kind, ok := m.kinds[was.Name]; ok {
			was.Kind = kind
		}
		same = was.Name == is.Name && was.Kind == is.Kind
	}
	if !same {
		return fmt.Errorf("%s was changed while it was in use: found %q, before %q; want an input that stays as it is", m.name, state, m.state)
	}
	return nil
}

func (m *member) release() error {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.refs--
	if m.refs > 0 || m.hold || m.src == nil {
		return nil
	}
	return m.shut()
}

// sourceStamp is the stamp of a pipe.
func (m *member) sourceStamp() (string, error) {
	src, err := m.acquire(context.Background())
	if err != nil {
		return "", err
	}
	state, err := src.Stamp()
	return state, firstErr(err, m.release())
}

func (m *member) shut() error {
	src := m.src
	m.src = nil
	if src == nil {
		return nil
	}
	return src.Close()
}

// union is a Source over several files.
type union struct {
	members []*member
	schema  Schema
	real    int // columns of the files; folder columns follow
	info    Info
	before  []int64 // stored bytes before each member, and in all
}

// openUnion opens every member once, briefly, and joins their schemas. On an
// error it closes what is open.
func openUnion(ctx context.Context, members []*member, folders []Column, skipped int) (*union, error) {
	u := &union{members: members}
	err := eachMember(len(members), func(i int) error {
		m := members[i]
		src, err := m.acquire(ctx)
		if err != nil {
			return err
		}
		m.schema, m.info, m.known = *src.Schema(), src.Info(), true
		m.guesses = m.format() == csvFormat
		return m.release()
	})
	if err == nil {
		err = u.join(ctx, folders)
	}
	if err != nil {
		u.Close()
		return nil, err
	}
	u.sum(skipped)
	return u, nil
}

// eachMember calls f for 0 to n-1 from several goroutines and returns the error
// of the lowest index.
func eachMember(n int, f func(i int) error) error {
	var (
		mu    sync.Mutex
		next  int
		first = n
		err   error
		wg    sync.WaitGroup
	)
	for range min(n, 8) {
		wg.Go(func() {
			for {
				mu.Lock()
				i := next
				next++
				end := i >= first // errors further on do not matter
				mu.Unlock()
				if end {
					return
				}
				if e := f(i); e != nil {
					mu.Lock()
					if i < first {
						first, err = i, e
					}
					mu.Unlock()
				}
			}
		})
	}
	wg.Wait()
	return err
}

// sum joins what is known of the members.
func (u *union) sum(skipped int) {
	u.info = Info{Rewindable: true, Sampled: true, Skipped: skipped}
	add := func(total *int64, x int64) {
		if x < 0 || *total < 0 {
			*total = -1
		} else {
			*total += x
		}
	}
	var segments int64
	var formats []string
	u.before = append(make([]int64, 0, len(u.members)+1), 0)
	for _, m := range u.members {
		add(&u.info.Bytes, m.info.Bytes)
		add(&u.info.Rows, m.info.Rows)
		add(&segments, int64(m.info.Segments))
		u.before = append(u.before, u.info.Bytes)
		u.info.Files += m.info.Files
		u.info.Rewindable = u.info.Rewindable && m.info.Rewindable
		u.info.Sampled = u.info.Sampled && m.info.Sampled && u.info.Bytes >= 0
		u.info.WorkerBytes = max(u.info.WorkerBytes, m.info.WorkerBytes)
		u.info.Skipped += m.info.Skipped
		if !slices.Contains(formats, m.info.Format) {
			formats = append(formats, m.info.Format)
		}
	}
	u.info.Segments = int(segments)
	u.info.Format = strings.Join(formats, ", ")
}

func (u *union) Schema() *Schema { return &u.schema }
func (u *union) Info() Info      { return u.info }

func (u *union) Stamp() (string, error) {
	states := make([]string, len(u.members))
	err := eachMember(len(states), func(i int) (err error) {
		states[i], err = u.members[i].stamp()
		return err
	})
	return strings.Join(states, "\n"), err
}

func (u *union) Close() error {
	var errs []error
	for _, m := range u.members {
		m.mu.Lock()
		errs = append(errs, m.shut())
		m.mu.Unlock()
	}
	return errors.Join(errs...)
}

// check refuses columns that some file lacks.
func (u *union) check(uses []Use) error {
	if err := checkUses(&u.schema, uses); err != nil {
		return err
	}
	for _, use := range uses {
		has, lacks := "", ""
		for _, m := range u.members {
			if m.has(use.Column) {
				has = m.name
			} else if lacks == "" {
				lacks = m.name
			}
			if has != "" && lacks != "" {
				what := "a column"
				if use.Column >= u.real {
					what = "a folder name"
				}
				return fmt.Errorf("column %s: found as %s in %s but not in %s, want it in every file", u.schema.Columns[use.Column].Name, what, has, lacks)
			}
		}
	}
	return nil
}

// has reports whether the member has that column of the union.
func (m *member) has(c int) bool {
	if c < len(m.cols) {
		return m.cols[c] >= 0
	}
	return m.consts[c-len(m.cols)].present
}

// memberUses translates uses. from[k] is the index of use k among the uses of
// the member, or -1 for a folder column.
func (u *union) memberUses(m *member, uses []Use) (inner []Use, from []int) {
	from = make([]int, len(uses))
	for k, use := range uses {
		if use.Column >= u.real {
			from[k] = -1
			continue
		}
		from[k] = len(inner)
		inner = append(inner, Use{Column: m.cols[use.Column], AsNumber: use.AsNumber || m.widen[use.Column]})
	}
	return inner, from
}

// memberFilter is the filter over the member's own columns; it knows the folder
// columns.
func (u *union) memberFilter(m *member, uses []Use, from []int, f Filter) Filter {
	if f == nil {
		return nil
	}
	return func(cells func(int) Range) bool {
		return f(func(k int) Range {
			if from[k] >= 0 {
				return cells(from[k])
			}
			use := uses[k]
			return m.consts[use.Column-u.real].bounds(u.schema.Columns[use.Column].Kind, use.AsNumber)
		})
	}
}

// Unread looks into each file again.
func (u *union) Unread(ctx context.Context, uses []Use, f Filter) (Unread, error) {
	if err := u.check(uses); err != nil {
		return Unread{}, err
	}
	parts := make([]Unread, len(u.members))
	err := eachMember(len(parts), func(i int) error {
		m := u.members[i]
		if m.pipe {
			return nil
		}
		src, err := m.acquire(ctx)
		if err != nil {
			return err
		}
		inner, from := u.memberUses(m, uses)
		parts[i], err = unread(ctx, src, inner, u.memberFilter(m, uses, from, f))
		return firstErr(err, m.release())
	})
	var total Unread
	for _, p := range parts {
		total.Add(p)
	}
	return total, err
}

func (u *union) Scan(ctx context.Context, uses []Use) (Scan, error) {
	return u.ScanWhere(ctx, uses, nil)
}

func (u *union) ScanWhere(ctx context.Context, uses []Use, f Filter) (Scan, error) {
	return u.scan(ctx, uses, f, scanWhere)
}

// ScanSome implements Skipper.
func (u *union) ScanSome(ctx context.Context, uses []Use, f Filter) (Scan, error) {
	return u.scan(ctx, uses, f, scanSome)
}

type scanFunc func(ctx context.Context, src Source, uses []Use, f Filter) (Scan, error)

func (u *union) scan(ctx context.Context, uses []Use, f Filter, open scanFunc) (Scan, error) {
	if err := u.check(uses); err != nil {
		return nil, err
	}
	s := &unionScan{u: u, ctx: ctx, uses: slices.Clone(uses), where: f, open: open, turn: make(chan struct{}, 1)}
	// Pipes say now, not in the middle, that they cannot be read again.
	for i, m := range u.members {
		if !m.pipe {
			continue
		}
		f, err := s.start(ctx, i)
		if err != nil {
			s.Close()
			return nil, err
		}
		s.pipes = append(s.pipes, f)
	}
	return s, nil
}

// unionScan hands out the segments of one file after the other.
type unionScan struct {
	u     *union
	ctx   context.Context
	uses  []Use
	where Filter
	open  scanFunc      // of a file
	turn  chan struct{} // held while the fields below are used

	file   int // of the union, the next to start
	cur    *fileScan
	pipes  []*fileScan // started in advance, in order
	base   int         // number of the first segment of cur
	err    error
	closed bool
}

// fileScan is a pass over one file. It ends when the last segment is closed.
type fileScan struct {
	m    *member
	scan Scan
	from []int
	seen int // segments handed out

	mu   sync.Mutex
	refs int
	last bool // no more segments are handed out
	done bool
}

func (s *unionScan) start(ctx context.Context, i int) (*fileScan, error) {
	m := s.u.members[i]
	src, err := m.acquire(ctx)
	if err != nil {
		return nil, err
	}
	inner, from := s.u.memberUses(m, s.uses)
	sc, err := s.open(s.ctx, src, inner, s.u.memberFilter(m, s.uses, from, s.where))
	if err != nil {
		m.release()
		return nil, err
	}
	return &fileScan{m: m, scan: sc, from: from}, nil
}

// drop counts a closed segment or, with last set, the end of the file.
func (f *fileScan) drop(last bool) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if last {
		f.last = true
	} else {
		f.refs--
	}
	if !f.last || f.refs > 0 || f.done {
		return nil
	}
	f.done = true
	return firstErr(f.scan.Close(), f.m.release())
}

func (s *unionScan) Next(ctx context.Context) (Segment, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	select {
	case s.turn <- struct{}{}:
	case <-ctx.Done():
		return nil, ctx.Err()
	}
	defer func() { <-s.turn }()
	if s.closed {
		return nil, errClosed
	}
	if s.err != nil {
		return nil, s.err
	}
	seg, err := s.next(ctx)
	if err != nil {
		s.err = err
		return nil, err
	}
	return seg, nil
}

func (s *unionScan) next(ctx context.Context) (Segment, error) {
	for {
		if s.cur == nil {
			if s.file == len(s.u.members) {
				return nil, io.EOF
			}
			if s.u.members[s.file].pipe {
				s.cur, s.pipes = s.pipes[0], s.pipes[1:]
			} else {
				f, err := s.start(ctx, s.file)
				if err != nil {
					return nil, err
				}
				s.cur = f
			}
			s.file++
		}
		f := s.cur
		seg, err := f.scan.Next(ctx)
		if err == io.EOF {
			s.cur = nil
			s.base += f.seen
			if err := f.drop(true); err != nil {
				return nil, err
			}
			continue
		}
		if err != nil {
			return nil, err
		}
		f.seen = max(f.seen, seg.Number()+1)
		f.mu.Lock()
		f.refs++
		f.mu.Unlock()
		g := &unionSegment{number: s.base + seg.Number(), cols: newUnionColumns(s.u, f.m, s.uses, f.from)}
		g.Segment, g.end = seg, f.drop
		return g, nil
	}
}

func (s *unionScan) Close() error {
	s.turn <- struct{}{}
	defer func() { <-s.turn }()
	s.closed = true
	var errs []error
	if s.cur != nil {
		errs = append(errs, s.cur.drop(true))
		s.cur = nil
	}
	for _, f := range s.pipes {
		errs = append(errs, f.drop(true))
	}
	s.pipes = nil
	return errors.Join(errs...)
}

// unionSegment is a segment of a file under its number in the whole input.
type unionSegment struct {
	Segment
	number int
	cols   *unionColumns
	end    func(last bool) error
	closed bool
}

func (g *unionSegment) Number() int { return g.number }

func (g *unionSegment) Read(b *Batch) error {
	return g.cols.read(g.Segment, b)
}

func (g *unionSegment) Close() error {
	if g.closed {
		return nil
	}
	g.closed = true
	return firstErr(g.Segment.Close(), g.end(false))
}

// Pass implements Passer.
func (g *unionSegment) Pass(t SegmentTally) error {
	if g.closed {
		return nil
	}
	g.closed = true
	return firstErr(PassOver(g.Segment, t), g.end(false))
}

// unionColumns puts the columns of a file and its folder columns in the order
// of the uses.
type unionColumns struct {
	from   []int // nil if the file's columns are all there is
	batch  Batch
	cols   []Vector
	consts []Vector // full batches of the folder columns, by use
}

func newUnionColumns(u *union, m *member, uses []Use, from []int) *unionColumns {
	c := &unionColumns{}
	if !slices.Contains(from, -1) {
		return c
	}
	c.from = from
	c.cols = make([]Vector, len(from))
	c.consts = make([]Vector, len(from))
	for k, use := range uses {
		if from[k] < 0 {
			c.consts[k] = m.consts[use.Column-u.real].vector(u.schema.Columns[use.Column].Kind, use.AsNumber, BatchRows)
		}
	}
	return c
}

func (c *unionColumns) read(seg Segment, b *Batch) error {
	if c.from == nil {
		return seg.Read(b)
	}
	b.Rows, b.Cols, b.Marks = 0, nil, nil
	if err := seg.Read(&c.batch); err != nil || c.batch.Rows == 0 {
		return err
	}
	for k, j := range c.from {
		if j >= 0 {
			c.cols[k] = c.batch.Cols[j]
		} else {
			c.cols[k] = cutVector(&c.consts[k], 0, c.batch.Rows)
		}
	}
	b.Rows, b.Cols, b.Marks = c.batch.Rows, c.cols, c.batch.Marks
	return nil
}
