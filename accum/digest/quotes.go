package digest

import (
	"encoding/binary"
	"fmt"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// quoteChain proves that the segments of text were read from where they begin. A part
// may have guessed whether its segments begin inside quotes; the number of quotes in
// each is exact. So the first segment of a file begins outside, and each further one
// inside if the one before does, its quotes being even, or does not, these being odd.
type quoteChain struct {
	runs   []*Run
	run    int
	next   int  // segment of the run
	known  bool // inside says whether it begins inside quotes
	inside bool
	wrong  []wrongStart
}

type wrongStart struct {
	run, segment int
	inside       bool // as it begins
}

// see takes the next record of a segment, in order of runs and segments.
func (c *quoteChain) see(r *accum.Record) error {
	if r.Table < 0 || r.Table >= len(c.runs) || len(r.Key) != 8 {
		return &PoolError{fmt.Sprintf("segment %s of a run that is not there", r.Label)}
	}
	n := int(binary.BigEndian.Uint64(r.Key))
	if r.Table != c.run || n != c.next {
		c.known = false
	}
	c.run, c.next = r.Table, n+1
	if len(r.Sums) < 2 {
		c.known = false
		return nil
	}
	q := stream.Quotes(r.Sums[1].Float(0))
	if q&stream.QuotesFirst != 0 {
		c.known, c.inside = true, false
	}
	if !c.known {
		if run := c.runs[c.run]; len(run.Missing()) == 0 {
			return &PoolError{fmt.Sprintf("segment %d of the input is in none of the %d parts", n-1, run.Parts)}
		}
		return nil
	}
	if c.inside != (q&stream.QuotesInside != 0) {
		c.wrong = append(c.wrong, wrongStart{c.run, n, c.inside})
	}
	c.inside = c.inside != (q&stream.QuotesOdd != 0)
	return nil
}

// QuoteError is the *PoolError of parts that were not read from where they begin.
type QuoteError struct {
	Err   *PoolError
	Again []int // parts to make again, quotes counted
}

func (e *QuoteError) Error() string { return e.Err.Error() }

// Unwrap gives the *PoolError.
func (e *QuoteError) Unwrap() error { return e.Err }

// end returns a *QuoteError if a segment was not read from where it begins.
func (c *quoteChain) end() error {
	if len(c.wrong) == 0 {
		return nil
	}
	first := c.wrong[0]
	parts := c.runs[first.run].Parts
	var again []int
	var list []string
	for i, w := range c.wrong {
		if w.run != first.run {
			break // the next attempt tells
		}
		if p := w.segment % parts; !slices.Contains(again, p) {
			again = append(again, p)
		}
		switch {
		case i < 5:
			was, is := "inside", "outside"
			if w.inside {
				was, is = is, was
			}
			list = append(list, fmt.Sprintf("segment %d was read as beginning %s quotes and begins %s", w.segment, was, is))
		case i == 5:
			list = append(list, fmt.Sprintf("and %d more", len(c.wrong)-i))
		}
	}
	slices.Sort(again)
	return &QuoteError{&PoolError{fmt.Sprintf("by the quotes in all parts %s: make part(s) %s of %d again with --quotes count", strings.Join(list, ", "), numbers(again), parts)}, again}
}
