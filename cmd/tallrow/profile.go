package main

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"runtime/debug"
	"slices"
	"strings"
	"sync"
	"sync/atomic"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// maxDistinct is how many different values of a column are counted.
const maxDistinct = 10_000

// shownValues is how many values stand beside a column.
const shownValues = 3

// columnProfile gathers what is told of one column. Profiles of consecutive
// segments are merged in order.
type columnProfile struct {
	col      stream.Column
	asNumber bool // a whole-number column read as float64

	missing  int64
	infinite int64
	n        int64 // finite numbers
	mean, m2 float64
	low      float64 // what mean lacks, so that an offset costs m2 no digits
	fraction bool    // a whole-number column with fractions
	beyond   bool    // a whole-number column read as float64 with values past 2^53

	seen     bool
	min, max stream.KeyValue
	first    []stream.KeyValue // the first different values

	values map[stream.KeyValue]int64 // nil once there are too many
	codes  []int64                   // counts by code of dict, not yet in values
	dict   *stream.Dict
	noted  int // codes of dict already in min, max
}

func newColumnProfile(col stream.Column, asNumber bool) *columnProfile {
	return &columnProfile{col: col, asNumber: asNumber, values: map[stream.KeyValue]int64{}}
}

// kind is the kind of the vectors that arrive.
func (c *columnProfile) kind() stream.Kind {
	if c.asNumber {
		return stream.Float64
	}
	return c.col.Kind
}

// add takes the cells of one batch. many is true once any part of the column
// is known to have too many values to count.
func (c *columnProfile) add(v *stream.Vector, many *atomic.Bool) {
	if c.values != nil && many.Load() {
		c.values, c.codes = nil, nil
	}
	switch v.Kind {
	case stream.Float64:
		c.addFloats(v.F64)
	case stream.Text:
		c.addText(v)
	default:
		c.addWhole(v)
	}
	if c.values == nil {
		many.Store(true)
	}
}

func (c *columnProfile) addFloats(x []float64) {
	finite := make([]float64, 0, stream.BatchRows)
	for _, f := range x {
		switch {
		case math.IsNaN(f):
			c.missing++
			continue
		case math.IsInf(f, 0):
			c.infinite++
		default:
			finite = append(finite, f)
		}
		if c.asNumber && c.col.Kind != stream.Bool {
			c.fraction = c.fraction || f != math.Trunc(f)
			c.beyond = c.beyond || math.Abs(f) > 1<<53
		}
		// f + 0 makes -0 the same value as 0.
		c.note(stream.KeyValue{Bits: math.Float64bits(f + 0)}, 1)
	}
	c.moments(finite)
}

func (c *columnProfile) addWhole(v *stream.Vector) {
	numbers := v.Kind != stream.Time
	finite := make([]float64, 0, stream.BatchRows)
	for i, x := range v.I64 {
		if v.Null != nil && v.Null[i] {
			c.missing++
			continue
		}
		c.note(stream.KeyValue{Bits: uint64(x)}, 1)
		if !numbers {
			continue
		}
		if v.Kind == stream.Uint64 {
			finite = append(finite, float64(uint64(x)))
		} else {
			finite = append(finite, float64(x))
		}
	}
	c.moments(finite)
}

func (c *columnProfile) addText(v *stream.Vector) {
	if v.Dict != c.dict {
		c.flush()
		c.dict, c.noted = v.Dict, 0
	}
	if v.Dict != nil && c.values != nil {
		for len(c.codes) < len(v.Dict.Values) {
			c.codes = append(c.codes, 0)
		}
	}
	for _, code := range v.Code {
		if code < 0 {
			c.missing++
			continue
		}
		if c.values != nil {
			c.codes[code]++
		}
		if len(c.first) < shownValues {
			c.noteFirst(stream.KeyValue{Text: v.Dict.Values[code]})
		}
		if int(code) >= c.noted {
			// Values of a dictionary that no row has do not count, but codes
			// come nearly in order, so this looks at each value few times.
			c.noteEnds(stream.KeyValue{Text: v.Dict.Values[code]})
			if int(code) == c.noted {
				c.noted++
			}
		}
	}
	if c.values != nil && len(c.codes) > 4*maxDistinct {
		c.flush()
	}
}

// flush moves counts by code into counts by value.
func (c *columnProfile) flush() {
	if c.dict != nil && c.values != nil {
		for code, n := range c.codes {
			if n > 0 {
				c.tally(stream.KeyValue{Text: c.dict.Values[code]}, n)
			}
			c.codes[code] = 0
		}
	}
	c.codes = c.codes[:0]
}

func (c *columnProfile) note(k stream.KeyValue, n int64) {
	c.noteEnds(k)
	if len(c.first) < shownValues {
		c.noteFirst(k)
	}
	c.tally(k, n)
}

func (c *columnProfile) noteEnds(k stream.KeyValue) {
	if !c.seen {
		c.seen, c.min, c.max = true, k, k
		return
	}
	if stream.CompareKeys(c.kind(), k, c.min) < 0 {
		c.min = k
	}
	if stream.CompareKeys(c.kind(), k, c.max) > 0 {
		c.max = k
	}
}

func (c *columnProfile) noteFirst(k stream.KeyValue) {
	if len(c.first) < shownValues && !slices.Contains(c.first, k) {
		// A view into a reader's memory must not outlive it.
		k.Text = strings.Clone(k.Text)
		c.first = append(c.first, k)
	}
}

func (c *columnProfile) tally(k stream.KeyValue, n int64) {
	if c.values == nil {
		return
	}
	c.values[k] += n
	if len(c.values) > maxDistinct {
		c.values, c.codes = nil, nil
	}
}

// moments adds a batch of numbers by its own mean and squared deviations, which
// loses no digits to a large offset.
func (c *columnProfile) moments(x []float64) {
	if len(x) == 0 {
		return
	}
	sum := 0.0
	for _, f := range x {
		sum += f / float64(len(x))
	}
	m2, rest := 0.0, 0.0
	for _, f := range x {
		d := f - sum
		rest += d
		m2 += float64(d * d)
	}
	m2 -= rest * rest / float64(len(x))
	c.combine(int64(len(x)), sum, rest/float64(len(x)), max(m2, 0))
}

// combine merges means and sums of squared deviations: Chan, Golub, LeVeque
// (1983), The American Statistician 37, doi:10.1080/00031305.1983.10483115.
// The other mean is mean + low.
func (c *columnProfile) combine(n int64, mean, low, m2 float64) {
	if n == 0 {
		return
	}
	if c.n == 0 {
		c.n, c.mean, c.low, c.m2 = n, mean, low, m2
		return
	}
	total := float64(c.n + n)
	d := (mean - c.mean) + (low - c.low)
	step := c.low + d*(float64(n)/total)
	moved := c.mean + step
	c.low = step - (moved - c.mean)
	c.mean = moved
	c.m2 += m2 + d*d*(float64(c.n)/total)*float64(n)
	c.n += n
}

// merge adds the profile of the segments that follow.
func (c *columnProfile) merge(o *columnProfile) {
	o.flush()
	c.missing += o.missing
	c.infinite += o.infinite
	c.fraction = c.fraction || o.fraction
	c.beyond = c.beyond || o.beyond
	c.combine(o.n, o.mean, o.low, o.m2)
	if o.seen {
		o.min.Text, o.max.Text = strings.Clone(o.min.Text), strings.Clone(o.max.Text)
		c.noteEnds(o.min)
		c.noteEnds(o.max)
	}
	for _, k := range o.first {
		c.noteFirst(k)
	}
	if o.values == nil {
		c.values = nil
		return
	}
	for k, n := range o.values {
		if c.values == nil {
			return
		}
		if _, ok := c.values[k]; !ok {
			k.Text = strings.Clone(k.Text)
		}
		c.tally(k, n)
	}
}

// frequent lists the most frequent values; ties by value. It is empty when
// there were too many to count.
func (c *columnProfile) frequent() []valueCount {
	all := make([]valueCount, 0, len(c.values))
	for k, n := range c.values {
		all = append(all, valueCount{k, n})
	}
	slices.SortFunc(all, func(a, b valueCount) int {
		if d := cmp.Compare(b.n, a.n); d != 0 {
			return d
		}
		return stream.CompareKeys(c.kind(), a.key, b.key)
	})
	return all[:min(len(all), shownValues)]
}

type valueCount struct {
	key stream.KeyValue
	n   int64
}

// sd is the sample standard deviation, NaN below two numbers.
func (c *columnProfile) sd() float64 {
	if c.n < 2 {
		return math.NaN()
	}
	return math.Sqrt(c.m2 / float64(c.n-1))
}

// profile is what one pass tells of the columns.
type profile struct {
	rows, malformed int64
	problems        []*stream.RowError
	cols            []*columnProfile
}

// segmentProfile is the profile of one segment, or why there is none.
type segmentProfile struct {
	profile
	number int
	err    error
}

// profileSource reads all columns once, several segments at a time; the result
// does not depend on how many.
func profileSource(ctx context.Context, src stream.Source, workers int, m *accum.Meter) (*profile, error) {
	schema := src.Schema()
	text := strings.HasPrefix(src.Info().Format, "csv")
	uses := make([]stream.Use, len(schema.Columns))
	for i, c := range schema.Columns {
		// In a text file a whole-number column may turn out to have fractions;
		// that is worth a note, not an error.
		uses[i] = stream.Use{Column: i, AsNumber: text && c.Kind == stream.Int64}
	}
	fresh := func() []*columnProfile {
		cols := make([]*columnProfile, len(uses))
		for i, u := range uses {
			cols[i] = newColumnProfile(schema.Columns[i], u.AsNumber)
		}
		return cols
	}
	scan, err := src.Scan(ctx, uses)
	if err != nil {
		return nil, err
	}
	defer scan.Close()
	m.Total.Store(src.Info().Bytes)
	m.Pass.Store(1)

	many := make([]atomic.Bool, len(uses))
	// A ticket is held from the handing out of a segment until it is merged, so
	// that fast workers do not pile up profiles behind a slow one.
	tickets := make(chan struct{}, 2*workers)
	results := make(chan segmentProfile, workers)
	// After a fault no new segment is begun, but those in work are finished: an
	// earlier one may hold an earlier fault.
	var stop atomic.Bool
	halt := make(chan struct{})
	fail := func() {
		if stop.CompareAndSwap(false, true) {
			close(halt)
		}
	}
	var wg sync.WaitGroup
	for range workers {
		wg.Go(func() {
			number := math.MaxInt
			defer func() {
				if v := recover(); v != nil {
					fail()
					results <- segmentProfile{number: number, err: panicked(v)}
				}
			}()
			for {
				select {
				case tickets <- struct{}{}:
				case <-halt:
					return
				}
				if stop.Load() {
					return
				}
				number = math.MaxInt
				seg, err := scan.Next(ctx)
				if err != nil {
					if !errors.Is(err, io.EOF) {
						fail()
						results <- segmentProfile{number: number, err: err}
					}
					return
				}
				number = seg.Number()
				p := segmentProfile{number: number}
				p.cols = fresh()
				p.err = p.read(ctx, seg, many, m)
				if p.err != nil {
					fail()
				}
				results <- p
			}
		})
	}
	go func() { wg.Wait(); close(results) }()

	total := &profile{cols: fresh()}
	pending := map[int]segmentProfile{}
	next := 0
	var failed *segmentProfile
	for p := range results {
		if p.err != nil {
			// The first fault of the input wins, whoever found one first.
			if failed == nil || p.number < failed.number {
				failed = &p
			}
			continue
		}
		pending[p.number] = p
		for {
			q, ok := pending[next]
			if !ok {
				break
			}
			delete(pending, next)
			next++
			total.merge(&q.profile)
			<-tickets
		}
	}
	if failed != nil {
		return nil, failed.err
	}
	return total, ctx.Err()
}

// panicked turns a panic of a worker into an error.
func panicked(v any) error {
	if os.Getenv("TALLROW_TRACE") != "" {
		debug.PrintStack()
	}
	return &internalError{oneLine(fmt.Sprint(v))}
}

// read profiles one segment.
func (p *segmentProfile) read(ctx context.Context, seg stream.Segment, many []atomic.Bool, m *accum.Meter) error {
	defer seg.Close()
	var b stream.Batch
	var before stream.SegmentTally
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		err := seg.Read(&b)
		t := seg.Tally()
		m.Rows.Add(t.Rows - before.Rows)
		m.Bytes.Add(t.Bytes - before.Bytes)
		before = t
		if errors.Is(err, io.EOF) {
			p.rows, p.malformed, p.problems = t.Rows, t.Malformed, t.Problems
			for _, c := range p.cols {
				c.flush()
			}
			return nil
		}
		if err != nil {
			return err
		}
		for i := range b.Cols {
			p.cols[i].add(&b.Cols[i], &many[i])
		}
	}
}

// merge adds the profile of the segment that follows.
func (p *profile) merge(o *profile) {
	p.rows += o.rows
	p.malformed += o.malformed
	for _, e := range o.problems {
		if len(p.problems) < stream.MaxProblems {
			p.problems = append(p.problems, e)
		}
	}
	for i, c := range p.cols {
		c.merge(o.cols[i])
	}
}
