package stream

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"math"
	"strconv"
	"sync"
)

// errClosed is what a closed scan answers.
var errClosed = errors.New("stream: the scan is closed")

// memoryName is the file name in positions of a memory source.
const memoryName = "memory"

// NewMemory returns a source over columns that are already in memory, cut into
// segments of segmentRows rows (the last one may be shorter).
//
// cols[j] holds all rows of schema.Columns[j]; the vectors are not copied and
// must not be changed while the source is in use. Batches alias them. The
// source can be scanned any number of times, also at the same time, and can be
// sampled. A mark is the number of the row from 0; positions name the file
// "memory". With no columns there are no rows, with no rows no segments.
//
// It panics if segmentRows is not positive, if the numbers of columns differ,
// if a vector has another kind than its column, if the lengths of the vectors
// differ, or if a code lies outside its dictionary: these are mistakes of the
// caller. The check costs O(rows) for text columns.
func NewMemory(schema Schema, cols []Vector, segmentRows int) Source {
	if segmentRows <= 0 {
		panic("stream: segmentRows is not positive")
	}
	if len(cols) != len(schema.Columns) {
		panic("stream: numbers of columns differ")
	}
	rows := -1
	for j := range cols {
		if cols[j].Kind != schema.Columns[j].Kind {
			panic("stream: vector has another kind than its column")
		}
		n := vectorLen(&cols[j])
		if n < 0 {
			panic("stream: bad vector")
		}
		if rows >= 0 && n != rows {
			panic("stream: lengths of vectors differ")
		}
		rows = n
	}
	return &memory{schema: schema, cols: cols, rows: max(rows, 0), size: segmentRows}
}

// vectorLen returns the number of cells, or -1 if v contradicts itself.
func vectorLen(v *Vector) int {
	switch v.Kind {
	case Float64:
		return len(v.F64)
	case Int64, Uint64, Bool, Time:
		if v.Null != nil && len(v.Null) != len(v.I64) {
			return -1
		}
		return len(v.I64)
	case Text:
		values := 0
		if v.Dict != nil {
			values = len(v.Dict.Values)
		}
		for _, c := range v.Code {
			if c < -1 || int(c) >= values {
				return -1
			}
		}
		return len(v.Code)
	}
	return -1
}

type memory struct {
	schema Schema
	cols   []Vector
	rows   int
	size   int
}

func (m *memory) Schema() *Schema { return &m.schema }

func (m *memory) bytes(from, to int) int64 {
	return int64(to-from) * 8 * int64(len(m.cols))
}

func (m *memory) Info() Info {
	return Info{
		Files:       1,
		Bytes:       m.bytes(0, m.rows),
		Rows:        int64(m.rows),
		Segments:    (m.rows + m.size - 1) / m.size,
		Rewindable:  true,
		Sampled:     true,
		Format:      memoryName,
		WorkerBytes: BatchRows * 8 * int64(len(m.cols)+1),
	}
}

// checkUses refuses columns that do not exist and numbers made of what is none.
func checkUses(schema *Schema, uses []Use) error {
	for _, u := range uses {
		if u.Column < 0 || u.Column >= len(schema.Columns) {
			return Usef("stream: no column %d, there are %d", u.Column, len(schema.Columns))
		}
		if c := &schema.Columns[u.Column]; u.AsNumber && !c.Kind.Numeric() {
			return Usef("column %s is %s, not a number", c.Name, c.Kind)
		}
	}
	return nil
}

// checkAt refuses fractions outside [0, 1].
func checkAt(at float64) error {
	if !(at >= 0 && at <= 1) {
		return Usef("stream: cannot sample at %v, want a fraction from 0 to 1", at)
	}
	return nil
}

func (m *memory) Scan(ctx context.Context, uses []Use) (Scan, error) {
	if err := checkUses(&m.schema, uses); err != nil {
		return nil, err
	}
	return &memoryScan{m: m, ctx: ctx, uses: append([]Use(nil), uses...)}, nil
}

func (m *memory) Sample(ctx context.Context, uses []Use, at float64) (Segment, error) {
	if err := checkUses(&m.schema, uses); err != nil {
		return nil, err
	}
	if err := checkAt(at); err != nil {
		return nil, err
	}
	from := min(int(math.Ceil(at*float64(m.rows))), m.rows)
	if at == 1 {
		from = max(0, m.rows-BatchRows)
	}
	return &memorySegment{m: m, ctx: ctx, uses: append([]Use(nil), uses...), number: -1, start: from, at: from, end: m.rows}, nil
}

// Stamp hashes schema and cells.
func (m *memory) Stamp() (string, error) {
	h := fnv.New64a()
	var b [8]byte
	word := func(x uint64) {
		binary.LittleEndian.PutUint64(b[:], x)
		h.Write(b[:])
	}
	text := func(s string) {
		word(uint64(len(s)))
		io.WriteString(h, s)
	}
	for j := range m.cols {
		text(fmt.Sprintf("%+v", m.schema.Columns[j]))
		v := &m.cols[j]
		for _, x := range v.F64 {
			word(math.Float64bits(x))
		}
		for i, x := range v.I64 {
			if v.Null != nil && v.Null[i] {
				text("null")
			} else {
				word(uint64(x))
			}
		}
		for _, c := range v.Code {
			if c < 0 {
				word(math.MaxUint64)
			} else {
				text(v.Dict.Values[c])
			}
		}
	}
	return memoryName + " " + strconv.Itoa(m.rows) + " rows " + strconv.FormatUint(h.Sum64(), 16), nil
}

func (m *memory) Close() error { return nil }

type memoryScan struct {
	m    *memory
	ctx  context.Context
	uses []Use
	mu   sync.Mutex
	next int
	err  error
}

func (s *memoryScan) Next(ctx context.Context) (Segment, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.err == nil {
		s.err = firstErr(ctx.Err(), s.ctx.Err())
	}
	if s.err != nil {
		return nil, s.err
	}
	from := s.next * s.m.size
	if from >= s.m.rows {
		return nil, io.EOF
	}
	seg := &memorySegment{m: s.m, ctx: s.ctx, uses: s.uses, number: s.next,
		start: from, at: from, end: min(from+s.m.size, s.m.rows)}
	s.next++
	return seg, nil
}

func (s *memoryScan) Close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.err == nil {
		s.err = errClosed
	}
	return nil
}

// firstErr returns the first of errs that is not nil.
func firstErr(errs ...error) error {
	for _, err := range errs {
		if err != nil {
			return err
		}
	}
	return nil
}

type memorySegment struct {
	m              *memory
	ctx            context.Context
	uses           []Use
	number         int
	start, at, end int
	cols           []Vector
	marks          []int64
	numbers        [][]float64 // buffers of AsNumber columns, by use
}

func (g *memorySegment) Number() int { return g.number }

func (g *memorySegment) Read(b *Batch) error {
	b.Rows, b.Cols, b.Marks = 0, nil, nil
	if err := g.ctx.Err(); err != nil {
		return err
	}
	n := min(BatchRows, g.end-g.at)
	if n == 0 {
		return io.EOF
	}
	if g.cols == nil {
		g.cols = make([]Vector, len(g.uses))
		g.marks = make([]int64, BatchRows)
		g.numbers = make([][]float64, len(g.uses))
	}
	for k, u := range g.uses {
		v := cutVector(&g.m.cols[u.Column], g.at, g.at+n)
		if u.AsNumber && v.Kind != Float64 {
			if g.numbers[k] == nil {
				g.numbers[k] = make([]float64, BatchRows)
			}
			v = numberCells(&v, g.numbers[k][:n])
		}
		g.cols[k] = v
	}
	for i := range n {
		g.marks[i] = int64(g.at + i)
	}
	g.at += n
	b.Rows, b.Cols, b.Marks = n, g.cols, g.marks[:n]
	return nil
}

// cutVector returns rows from to to of v, sharing its memory.
func cutVector(v *Vector, from, to int) Vector {
	out := Vector{Kind: v.Kind, Dict: v.Dict}
	switch v.Kind {
	case Float64:
		out.F64 = v.F64[from:to:to]
	case Text:
		out.Code = v.Code[from:to:to]
	default:
		out.I64 = v.I64[from:to:to]
		if v.Null != nil {
			for _, null := range v.Null[from:to] {
				if null {
					out.Null = v.Null[from:to:to]
					break
				}
			}
		}
	}
	return out
}

// numberCells writes the cells of the numeric vector v as float64 into dst.
func numberCells(v *Vector, dst []float64) Vector {
	for i, x := range v.I64 {
		switch {
		case v.Null != nil && v.Null[i]:
			dst[i] = math.NaN()
		case v.Kind == Uint64:
			dst[i] = float64(uint64(x))
		default:
			dst[i] = float64(x)
		}
	}
	return Vector{Kind: Float64, F64: dst}
}

func (g *memorySegment) Locate(mark int64) Position {
	return Position{File: memoryName, Row: mark + 1}
}

func (g *memorySegment) Tally() SegmentTally {
	return SegmentTally{Rows: int64(g.at - g.start), Bytes: g.m.bytes(g.start, g.at)}
}

func (g *memorySegment) Close() error { return nil }
