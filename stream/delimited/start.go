package delimited

import (
	"bytes"
	"math"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

const (
	// lookBack is how much text before a range is read if its own leaves open
	// whether it starts inside quotes.
	lookBack = 64 << 10
	// leastRows is how many rows must fit to be evidence.
	leastRows = 16
)

// startInside reports whether b[1] is inside quotes, if the text from there on
// says so. In a text without malformed rows only one of the two assumptions can be
// contradicted by the place of a quote. If neither is, by no quote in b, one must
// make rows that fit the schema, and the other none to speak of; if
// both are, the one that lasts longer must have made such rows before.
//
// It is a guess all the same: a cell may hold a table. Time in proportion to the
// text up to the first contradiction.
func (s *source) startInside(b []byte) (inside, sure bool) {
	in, out := s.suppose(b[:min(lookBack, len(b))], true), s.suppose(b[:min(lookBack, len(b))], false)
	for n := lookBack; n < len(b) && in.contradiction == math.MaxInt && out.contradiction == math.MaxInt; n *= 8 {
		if bytes.IndexByte(b[n:], '"') < 0 {
			break
		}
		in, out = s.suppose(b[:min(8*n, len(b))], true), s.suppose(b[:min(8*n, len(b))], false)
	}
	inside = in.contradiction > out.contradiction
	if in.contradiction == out.contradiction {
		inside = in.good > out.good
	}
	keep, drop := out, in
	if inside {
		keep, drop = in, out
	}
	switch {
	case drop.contradiction == math.MaxInt:
		return inside, keep.rows() && 10*drop.good <= keep.good
	case keep.contradiction == math.MaxInt:
		return inside, keep.good >= 10*keep.bad
	}
	return inside, keep.rows() && drop.good == 0
}

// rows reports whether the assumption makes rows of the text.
func (e *evidence) rows() bool { return e.good >= leastRows && e.good >= 10*e.bad }

// guessStart guesses whether the range from lo on starts inside quotes; b holds it
// and the byte before. If it does not say, some text before it may.
func (p *plainScan) guessStart(lo int64, b []byte) (inside, sure bool, err error) {
	if inside, sure = p.src.startInside(b); sure {
		return inside, true, nil
	}
	if lo-lookBack <= p.src.head.start {
		return false, false, nil // to count from the start costs no more
	}
	from := lo - 1 - lookBack
	text := make([]byte, lookBack, lookBack+len(b))
	if err := readAt(p.src.in.Name, p.ra, text, from); err != nil {
		return false, false, err
	}
	quotes, _ := scan.Count(text[1:])
	if b[0] == '"' {
		quotes++
	}
	inside, sure = p.src.startInside(append(text, b...))
	return inside != (quotes&1 == 1), sure, nil
}

// guessedWrong says what a wrong guess was.
func (s *source) guessedWrong(lo int64, inside bool) error {
	e := &stream.RowError{Pos: stream.Position{File: s.in.Name, Offset: lo}, Found: "rows from there on that look like text inside quotes"}
	if inside {
		e.Found = "text inside quotes from there on that looks like rows"
	}
	e.Want = "that this part is read with --quotes count, which counts the quotes before it"
	return e
}

// quotesOf describes range k.
func quotesOf(k int, inside bool, quotes int) stream.Quotes {
	q := stream.QuotesKnown
	if k == 0 {
		q |= stream.QuotesFirst
	}
	if inside {
		q |= stream.QuotesInside
	}
	if quotes&1 == 1 {
		q |= stream.QuotesOdd
	}
	return q
}
