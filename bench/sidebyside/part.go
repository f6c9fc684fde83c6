package main

import (
	"context"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strings"
	"sync/atomic"
	"time"

	"github.com/parquet-go/parquet-go"
	"golang.org/x/sync/errgroup"

	"github.com/tallrow/tallrow/bench/reference"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
)

// task is what a process of this program is started for.
type task struct {
	Do      string // a key of tasks
	File    string
	Columns []string // of the file
	Workers int
	Sums    bool   // add up every value, to be checked
	Rows    int64  // of an f64 file
	To      string // of a copy
	Layout  layout // of a file to be made
	Dir     string
	Format  string
}

// answer is what a contestant says of its own work: estimates and errors with
// the constant first, or the number of rows and the sums of its columns.
// Seconds is its own clock, from the opening of the file (or, for data in memory,
// from the start of the arithmetic) to the last number.
type answer struct {
	Seconds float64   `json:"seconds"`
	Rows    int64     `json:"rows,omitempty"`
	Bytes   int64     `json:"bytes,omitempty"`
	Sums    []float64 `json:"sums,omitempty"`
	Beta    []float64 `json:"beta,omitempty"`
	SE      []float64 `json:"se,omitempty"`
	// Notes are facts of the run worth recording, such as passes.
	Notes map[string]any `json:"notes,omitempty"`
}

var tasks = map[string]func(context.Context, task) (answer, error){
	"make":  makeData,
	"bytes": readBytes,
	"copy":  copyBytes,
	"pages": decodePages,
	"batch": decodeBatches,
	"gonum": gonumHC1,
	"csv":   parseCSV,
}

// perform runs one task and writes its answer.
func perform(ctx context.Context, spec string, out io.Writer) error {
	var t task
	if err := json.Unmarshal([]byte(spec), &t); err != nil {
		return err
	}
	do := tasks[t.Do]
	if do == nil {
		return fmt.Errorf("no task %q", t.Do)
	}
	a, err := do(ctx, t)
	if err != nil {
		return err
	}
	return json.NewEncoder(out).Encode(a)
}

func makeData(ctx context.Context, t task) (a answer, err error) {
	start := time.Now()
	a.Bytes, err = t.Layout.ensure(ctx, t.Dir, t.Format)
	a.Seconds = time.Since(start).Seconds()
	return a, err
}

// piece is a run of bytes of a file.
type piece struct{ at, length int64 }

// pieces are the chunks of the columns of a Parquet file, or the whole file in
// parts, if there are no columns.
func pieces(f *os.File, size int64, columns []string) (list []piece, rows int64, err error) {
	if len(columns) == 0 {
		const part = 4 << 20
		for at := int64(0); at < size; at += part {
			list = append(list, piece{at, min(part, size-at)})
		}
		return list, 0, nil
	}
	pf, err := openPages(f, size)
	if err != nil {
		return nil, 0, err
	}
	for _, g := range pf.Metadata().RowGroups {
		found := 0
		for _, c := range g.Columns {
			m := &c.MetaData
			if !slices.Contains(columns, strings.Join(m.PathInSchema, ".")) {
				continue
			}
			found++
			at := m.DataPageOffset
			if m.DictionaryPageOffset > 0 {
				at = min(at, m.DictionaryPageOffset)
			}
			list = append(list, piece{at, m.TotalCompressedSize})
		}
		if found != len(columns) {
			return nil, 0, fmt.Errorf("%s has %d of the columns %v", f.Name(), found, columns)
		}
	}
	return list, pf.NumRows(), nil
}

func openPages(f *os.File, size int64) (*parquet.File, error) {
	return parquet.OpenFile(f, size, parquet.SkipPageIndex(true), parquet.SkipBloomFilters(true), parquet.ReadBufferSize(1<<20))
}

// opened is a file and its size.
func opened(name string) (*os.File, int64, error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, 0, err
	}
	st, err := f.Stat()
	if err != nil {
		f.Close()
		return nil, 0, err
	}
	return f, st.Size(), nil
}

// spread hands the numbers 0..n-1 to workers.
func spread(workers, n int, do func(worker, i int) error) error {
	var next atomic.Int64
	var g errgroup.Group
	for w := range workers {
		g.Go(func() error {
			for {
				i := int(next.Add(1)) - 1
				if i >= n {
					return nil
				}
				if err := do(w, i); err != nil {
					return err
				}
			}
		})
	}
	return g.Wait()
}

// readBytes reads the bytes of the columns, or all, and nothing else.
func readBytes(_ context.Context, t task) (a answer, err error) {
	start := time.Now()
	f, size, err := opened(t.File)
	if err != nil {
		return a, err
	}
	defer f.Close()
	list, rows, err := pieces(f, size, t.Columns)
	if err != nil {
		return a, err
	}
	bufs := make([][]byte, t.Workers)
	for w := range bufs {
		bufs[w] = make([]byte, 1<<20)
	}
	err = spread(t.Workers, len(list), func(w, i int) error {
		for p := list[i]; p.length > 0; {
			n, err := f.ReadAt(bufs[w][:min(int64(len(bufs[w])), p.length)], p.at)
			if err != nil {
				return err
			}
			p.at, p.length = p.at+int64(n), p.length-int64(n)
		}
		return nil
	})
	for _, p := range list {
		a.Bytes += p.length
	}
	a.Rows, a.Seconds = rows, time.Since(start).Seconds()
	return a, err
}

// copyBytes copies the file through a buffer: no sharing of blocks by the file
// system, no copying inside the kernel.
func copyBytes(_ context.Context, t task) (a answer, err error) {
	start := time.Now()
	in, err := os.Open(t.File)
	if err != nil {
		return a, err
	}
	defer in.Close()
	out, err := os.Create(t.To)
	if err != nil {
		return a, err
	}
	defer os.Remove(t.To)
	buf := make([]byte, 1<<20)
	a.Bytes, err = io.CopyBuffer(struct{ io.Writer }{out}, struct{ io.Reader }{in}, buf)
	err = errors.Join(err, out.Close())
	a.Seconds = time.Since(start).Seconds()
	return a, err
}

// decodePages reads the columns by parquet-go's own pages, row group by row
// group, and looks at the first and the last value of each page.
func decodePages(_ context.Context, t task) (a answer, err error) {
	start := time.Now()
	f, size, err := opened(t.File)
	if err != nil {
		return a, err
	}
	defer f.Close()
	pf, err := openPages(f, size)
	if err != nil {
		return a, err
	}
	at := make([]int, len(t.Columns))
	for j, name := range t.Columns {
		leaf, ok := pf.Schema().Lookup(name)
		if !ok {
			return a, fmt.Errorf("%s has no column %s", t.File, name)
		}
		at[j] = leaf.ColumnIndex
	}
	groups := pf.RowGroups()
	sums := make([][]float64, t.Workers)
	for w := range sums {
		sums[w] = make([]float64, len(at))
	}
	var rows, cells atomic.Int64
	err = spread(t.Workers, len(groups), func(w, i int) error {
		rows.Add(groups[i].NumRows())
		chunks := groups[i].ColumnChunks()
		for j, c := range at {
			n, err := decodeChunk(chunks[c], t.Sums, &sums[w][j])
			if err != nil {
				return fmt.Errorf("row group %d, column %s: %w", i, t.Columns[j], err)
			}
			cells.Add(n)
		}
		return nil
	})
	a.Rows, a.Seconds = rows.Load(), time.Since(start).Seconds()
	if err == nil && cells.Load() != a.Rows*int64(len(at)) {
		err = fmt.Errorf("%d cells in %d rows of %d columns", cells.Load(), a.Rows, len(at))
	}
	a.Sums = total(sums, t.Sums)
	return a, err
}

func total(parts [][]float64, wanted bool) []float64 {
	if !wanted {
		return nil
	}
	for _, p := range parts[1:] {
		for j, x := range p {
			parts[0][j] += x
		}
	}
	return parts[0]
}

func decodeChunk(chunk parquet.ColumnChunk, all bool, sum *float64) (cells int64, err error) {
	pages := chunk.Pages()
	defer pages.Close()
	for {
		p, err := pages.ReadPage()
		if errors.Is(err, io.EOF) {
			return cells, nil
		}
		if err != nil {
			return cells, err
		}
		cells += p.NumValues()
		data := p.Data()
		if p.Dictionary() != nil {
			return cells, errors.New("pages with dictionaries are not compared")
		}
		switch kind := p.Type().Kind(); kind {
		case parquet.Double:
			*sum += look(data.Double(), all)
		case parquet.Int64:
			*sum += look(data.Int64(), all)
		default:
			return cells, fmt.Errorf("pages of type %v are not compared", kind)
		}
		parquet.Release(p)
	}
}

// look adds up all values, or the first and the last one.
func look[T int64 | float64](v []T, all bool) (sum float64) {
	if len(v) == 0 {
		return 0
	}
	if !all {
		return float64(v[0]) + float64(v[len(v)-1])
	}
	for _, x := range v {
		sum += float64(x)
	}
	return sum
}

// decodeBatches reads the columns by the project's own reader, as a fit does.
func decodeBatches(ctx context.Context, t task) (a answer, err error) {
	start := time.Now()
	src, err := stream.Open(ctx, []string{t.File}, nil, []stream.Format{columnar.Format{}, delimited.Format{}}, stream.Options{})
	if err != nil {
		return a, err
	}
	defer func() { err = errors.Join(err, src.Close()) }()
	var uses []stream.Use
	for _, name := range t.Columns {
		c := src.Schema().Lookup(name)
		if c < 0 {
			return a, fmt.Errorf("%s has no column %s", t.File, name)
		}
		uses = append(uses, stream.Use{Column: c, AsNumber: true})
	}
	var each func(int, *stream.Batch)
	sums := make([][]float64, t.Workers)
	if t.Sums {
		for w := range sums {
			sums[w] = make([]float64, len(uses))
		}
		each = func(w int, b *stream.Batch) {
			for j := range b.Cols {
				sums[w][j] += look(b.Cols[j].F64[:b.Rows], true)
			}
		}
	}
	a.Rows, err = reference.Decode(ctx, src, uses, t.Workers, each)
	a.Seconds = time.Since(start).Seconds()
	a.Sums = total(sums, t.Sums)
	return a, err
}

// gonumHC1 works on an f64 file that was read before the clock starts.
func gonumHC1(_ context.Context, t task) (a answer, err error) {
	f, size, err := opened(t.File)
	if err != nil {
		return a, err
	}
	defer f.Close()
	p := len(t.Columns)
	if size != 8*t.Rows*int64(p) {
		return a, fmt.Errorf("%s has %d bytes, not %d rows of %d columns", t.File, size, t.Rows, p)
	}
	table := &reference.Table{Rows: int(t.Rows)}
	buf := make([]byte, 1<<20)
	for range p {
		col := make([]float64, t.Rows)
		for at := 0; at < len(col); {
			n := min(len(buf)/8, len(col)-at)
			if _, err := io.ReadFull(f, buf[:8*n]); err != nil {
				return a, err
			}
			for i := range n {
				col[at+i] = math.Float64frombits(binary.LittleEndian.Uint64(buf[8*i:]))
			}
			at += n
		}
		table.Cols = append(table.Cols, col)
	}
	start := time.Now()
	a.Beta, a.SE, err = reference.HC1(table, t.Workers)
	a.Rows, a.Seconds = t.Rows, time.Since(start).Seconds()
	return a, err
}

func parseCSV(_ context.Context, t task) (a answer, err error) {
	start := time.Now()
	p, err := reference.ParseCSV(t.File, t.Columns)
	a.Rows, a.Seconds, a.Sums = p.Rows, time.Since(start).Seconds(), p.Sums
	return a, err
}
