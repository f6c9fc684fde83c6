package main

import (
	"bufio"
	"context"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"math/bits"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
)

const (
	seed       = 20_260_601
	dataFormat = "v1" // in the names of cached files; another generator, another name
	blockRows  = 16 * stream.BatchRows
	groupRows  = 122_880 // a common length of row groups
	pageBytes  = 1 << 20
	outcome    = "minutes"
	maxTerms   = 64
)

// layout says which table: its outcome, then that many terms, then ids.
type layout struct {
	Rows  int64
	Terms int
	IDs   []cluster
}

// cluster is a column of ids, drawn for each row on its own: rows of one id
// are spread over the whole file.
type cluster struct {
	Name  string
	Count int64
}

var (
	quay  = cluster{"quay", 100}
	crane = cluster{"crane", 10_000}
	barge = cluster{"barge", 1_000_000}
)

// quayTerms are the first terms; after them come tonnes stowed in the bays of
// the barge.
var quayTerms = []struct {
	name  string
	whole bool
}{
	{"pallets", true}, {"tonnes", false}, {"crew", true}, {"wet", true},
	{"night", true}, {"draught", false}, {"wind", false}, {"wait", false},
}

// termNames are the first n terms.
func termNames(n int) []string {
	names := make([]string, n)
	for j := range names {
		if j < len(quayTerms) {
			names[j] = quayTerms[j].name
		} else {
			names[j] = fmt.Sprintf("bay%02d", j+1-len(quayTerms))
		}
	}
	return names
}

func (l layout) columns() []columnar.WriteColumn {
	cols := []columnar.WriteColumn{{Name: outcome, Kind: stream.Float64}}
	for j, name := range termNames(l.Terms) {
		kind := stream.Float64
		if j < len(quayTerms) && quayTerms[j].whole {
			kind = stream.Int64
		}
		cols = append(cols, columnar.WriteColumn{Name: name, Kind: kind})
	}
	for _, c := range l.IDs {
		cols = append(cols, columnar.WriteColumn{Name: c.Name, Kind: stream.Int64})
	}
	return cols
}

// path of the table as a file: "parquet", "csv", or "f64": float64 values as they
// stand in memory, a constant, the terms and the outcome one after another.
func (l layout) path(dir, format string) string {
	name := fmt.Sprintf("unloading-%s-rows%d-terms%d", dataFormat, l.Rows, l.Terms)
	for _, c := range l.IDs {
		name += fmt.Sprintf("-%s%d", c.Name, c.Count)
	}
	return filepath.Join(dir, name+"."+format)
}

// storedAtMost bounds the size of a file.
func (l layout) storedAtMost(format string) int64 {
	cell := int64(9)
	return l.Rows*cell*int64(2+l.Terms+len(l.IDs)) + 1<<20
}

// dice are numbers of one block of rows.
type dice struct{ pcg *rand.PCG }

// unit is uniform on [0, 1), a multiple of 2^-53.
func (d dice) unit() float64 { return float64(d.pcg.Uint64()>>11) * 0x1p-53 }

// below is uniform on 0..n-1, to within n/2^64.
func (d dice) below(n int64) int64 {
	hi, _ := bits.Mul64(d.pcg.Uint64(), uint64(n))
	return int64(hi)
}

// shock has mean 0, standard deviation 1 and lies within 3 of zero.
func (d dice) shock() float64 {
	sum := d.unit() + d.unit()
	sum += d.unit()
	return 2 * (sum - 1.5)
}

// share is a lasting trait of an id, spread over [-1/2, 1/2): the output function
// of splitmix64 (Steele, Lea and Flood, 2014, doi:10.1145/2714064.2660195).
func share(column int, id int64) float64 {
	z := uint64(column+1)<<56 + uint64(id+1)*0x9e3779b97f4a7c15
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	z ^= z >> 31
	return float64(z>>11)*0x1p-53 - 0.5
}

// label spreads the numbers of ids over 40 bits, each another: odd factors are
// invertible modulo powers of two.
func label(id int64) int64 {
	return int64(uint64(id) * 0x9e3779b97f4a7c15 & (1<<40 - 1))
}

func rounded(x, parts float64) float64 { return math.Round(x*parts) / parts }

// fill makes the rows from at on, at most blockRows of them, into vectors as in
// columns; at is a multiple of blockRows. Errors of minutes differ in spread with
// pallets and rain and go together within each id.
func (l layout) fill(at int64, cols []stream.Vector) int {
	n := int(min(blockRows, l.Rows-at))
	d := dice{rand.NewPCG(seed, uint64(at/blockRows))}
	for j, c := range l.columns() {
		v := &cols[j]
		v.Kind = c.Kind
		if c.Kind == stream.Float64 {
			v.F64 = sized(v.F64, n)
		} else {
			v.I64 = sized(v.I64, n)
		}
	}
	x := make([]float64, l.Terms)
	for i := range n {
		trait, lasting := 0.0, 0.0
		for c, column := range l.IDs {
			id := d.below(column.Count)
			cols[1+l.Terms+c].I64[i] = label(id)
			trait += share(c, id)
			lasting += 8 * share(c+len(l.IDs), id)
		}
		minutes := 60 + lasting
		for j := range x {
			x[j] = term(j, x, trait, d)
			minutes += slope(j) * x[j]
			if v := &cols[1+j]; v.Kind == stream.Float64 {
				v.F64[i] = x[j]
			} else {
				v.I64[i] = int64(x[j])
			}
		}
		spread := 4 + 0.08*x[0]
		if l.Terms > 3 {
			spread += 3 * x[3]
		}
		cols[0].F64[i] = rounded(minutes+spread*d.shock(), 100)
	}
	return n
}

// term draws term j; earlier ones are known. trait is that of the row's ids.
func term(j int, x []float64, trait float64, d dice) float64 {
	u := d.unit()
	flag := func(p float64) float64 {
		if u < p {
			return 1
		}
		return 0
	}
	switch j {
	case 0: // pallets
		return 1 + math.Floor(80*u)
	case 1: // tonnes
		return rounded(x[0]*(0.3+0.5*u)+2*d.unit(), 100)
	case 2: // crew
		return 3 + math.Floor(5*u+trait)
	case 3: // wet
		return flag(0.25 + 0.2*trait)
	case 4: // night
		return flag(0.3 + 0.2*trait)
	case 5: // draught, metres
		return rounded(1.5+2.2*u+0.4*trait, 100)
	case 6: // wind, metres a second
		return rounded(14*u*u, 10)
	case 7: // wait, minutes
		return rounded(90*u*u, 100)
	default: // tonnes in a bay
		return rounded(40*u, 10)
	}
}

func slope(j int) float64 {
	slopes := []float64{1.9, 0.35, -3, 7, 4, 2.5, 0.4, 0.05}
	if j < len(slopes) {
		return slopes[j]
	}
	return 0.02 * float64(j%5-2)
}

func sized[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}

// ensure makes the file unless it is there, and returns its size. A file under
// its final name is complete.
func (l layout) ensure(ctx context.Context, dir, format string) (size int64, err error) {
	path := l.path(dir, format)
	if st, err := os.Stat(path); err == nil {
		return st.Size(), nil
	}
	part := path + ".part"
	f, err := os.Create(part)
	if err != nil {
		return 0, err
	}
	defer os.Remove(part) // gone already if all went well
	defer f.Close()
	write := map[string]func(context.Context, *os.File) error{"parquet": l.writeParquet, "csv": l.writeCSV, "f64": l.writeF64}[format]
	if err := write(ctx, f); err != nil {
		return 0, err
	}
	if err := f.Close(); err != nil {
		return 0, err
	}
	st, err := os.Stat(part)
	if err != nil {
		return 0, err
	}
	return st.Size(), os.Rename(part, path)
}

// each calls f with every block of rows in order; another goroutine makes the
// next ones meanwhile.
func (l layout) each(ctx context.Context, f func(at int64, rows int, cols []stream.Vector) error) error {
	type block struct {
		at   int64
		rows int
		cols []stream.Vector
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	free, full := make(chan *block, 3), make(chan *block)
	for range cap(free) {
		free <- &block{cols: make([]stream.Vector, len(l.columns()))}
	}
	go func() {
		defer close(full)
		for at := int64(0); at < l.Rows; at += blockRows {
			var b *block
			select {
			case <-ctx.Done():
				return
			case b = <-free:
			}
			b.at, b.rows = at, l.fill(at, b.cols)
			select {
			case <-ctx.Done():
				return
			case full <- b:
			}
		}
	}()
	for b := range full {
		if err := f(b.at, b.rows, b.cols); err != nil {
			return err
		}
		free <- b
	}
	return ctx.Err()
}

func (l layout) writeParquet(ctx context.Context, f *os.File) error {
	w := bufio.NewWriterSize(f, 1<<20)
	out, err := columnar.NewWriter(w, l.columns(), columnar.WriterOptions{RowsPerGroup: groupRows, PageBytes: pageBytes, Codec: "snappy"})
	if err != nil {
		return err
	}
	if err := l.each(ctx, func(_ int64, rows int, cols []stream.Vector) error { return out.WriteColumns(rows, cols) }); err != nil {
		return err
	}
	if err := out.Close(); err != nil {
		return err
	}
	return w.Flush()
}

func (l layout) writeCSV(ctx context.Context, f *os.File) error {
	w := bufio.NewWriterSize(f, 1<<20)
	for j, c := range l.columns() {
		if j > 0 {
			io.WriteString(w, ",")
		}
		io.WriteString(w, c.Name)
	}
	io.WriteString(w, "\n")
	var line []byte
	err := l.each(ctx, func(_ int64, rows int, cols []stream.Vector) error {
		for i := range rows {
			line = line[:0]
			for j := range cols {
				if j > 0 {
					line = append(line, ',')
				}
				if v := &cols[j]; v.Kind == stream.Float64 {
					line = strconv.AppendFloat(line, v.F64[i], 'f', -1, 64)
				} else {
					line = strconv.AppendInt(line, v.I64[i], 10)
				}
			}
			if _, err := w.Write(append(line, '\n')); err != nil {
				return err
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	return w.Flush()
}

func (l layout) writeF64(ctx context.Context, f *os.File) error {
	buf := make([]byte, 8*blockRows)
	put := func(column int, at int64, rows int, value func(i int) float64) error {
		for i := range rows {
			binary.LittleEndian.PutUint64(buf[8*i:], math.Float64bits(value(i)))
		}
		_, err := f.WriteAt(buf[:8*rows], 8*(int64(column)*l.Rows+at))
		return err
	}
	return l.each(ctx, func(at int64, rows int, cols []stream.Vector) error {
		if err := put(0, at, rows, func(int) float64 { return 1 }); err != nil {
			return err
		}
		for j := range l.Terms + 1 { // terms, then the outcome
			v := &cols[(1+j)%(l.Terms+1)]
			value := func(i int) float64 { return v.F64[i] }
			if v.Kind != stream.Float64 {
				value = func(i int) float64 { return float64(v.I64[i]) }
			}
			if err := put(1+j, at, rows, value); err != nil {
				return err
			}
		}
		return nil
	})
}
