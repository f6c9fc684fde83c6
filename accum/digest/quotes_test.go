package digest

import (
	"encoding/binary"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// check is the record of a segment; quotes is 0 for one that is not text.
func check(run, segment int, quotes stream.Quotes) *accum.Record {
	r := &accum.Record{What: accum.SegmentCheck, Table: run, Key: binary.BigEndian.AppendUint64(nil, uint64(segment)), Sums: make([]accum.Whole, 1)}
	if quotes != 0 {
		r.Sums = append(r.Sums, accum.Whole{15: byte(quotes)})
	}
	return r
}

func TestQuoteChain(t *testing.T) {
	const (
		known = stream.QuotesKnown
		in    = known | stream.QuotesInside
		odd   = known | stream.QuotesOdd
		first = known | stream.QuotesFirst
	)
	whole := &Run{Parts: 3, Have: []int{0, 1, 2}}
	some := &Run{Parts: 3, Have: []int{0, 2}}
	for _, c := range []struct {
		name string
		runs []*Run
		recs []*accum.Record
		want string // "" for sound
	}{
		{"nothing", nil, nil, ""},
		{"no text", []*Run{whole}, []*accum.Record{check(0, 0, 0), check(0, 1, 0)}, ""},
		{"even", []*Run{whole}, []*accum.Record{check(0, 0, first), check(0, 1, known), check(0, 2, known)}, ""},
		{"odd", []*Run{whole}, []*accum.Record{check(0, 0, first|odd), check(0, 1, in), check(0, 2, in|odd), check(0, 3, known)}, ""},
		{"new file", []*Run{whole}, []*accum.Record{check(0, 0, first|odd), check(0, 1, first), check(0, 2, 0), check(0, 3, first|odd), check(0, 4, in)}, ""},
		{"new run", []*Run{whole, whole}, []*accum.Record{check(0, 0, first|odd), check(1, 0, first), check(1, 1, known)}, ""},
		{"taken outside", []*Run{whole}, []*accum.Record{check(0, 0, first|odd), check(0, 1, known), check(0, 2, in)},
			"segment 1 was read as beginning outside quotes and begins inside: make part(s) 1 of 3 again with --quotes count"},
		{"taken inside", []*Run{whole}, []*accum.Record{check(0, 0, first), check(0, 1, in|odd), check(0, 2, in)},
			"segment 1 was read as beginning inside quotes and begins outside: make part(s) 1 of 3"},
		{"many", []*Run{whole}, []*accum.Record{check(0, 0, first), check(0, 1, in), check(0, 2, in), check(0, 3, in), check(0, 4, in), check(0, 5, in), check(0, 6, in), check(0, 7, in)},
			"and 2 more: make part(s) 0, 1, 2 of 3"},
		{"gap", []*Run{whole}, []*accum.Record{check(0, 0, first), check(0, 2, known)}, "segment 1 of the input is in none of the 3 parts"},
		{"no beginning", []*Run{whole}, []*accum.Record{check(0, 1, known)}, "segment 0 of the input is in none"},
		{"gap of a part to come", []*Run{some}, []*accum.Record{check(0, 0, first), check(0, 2, in), check(0, 3, known)}, ""},
		{"unknown run", []*Run{whole}, []*accum.Record{check(1, 0, first)}, "a run that is not there"},
	} {
		q := &quoteChain{runs: c.runs}
		var err error
		for _, r := range c.recs {
			if err = q.see(r); err != nil {
				break
			}
		}
		if err == nil {
			err = q.end()
		}
		if (err == nil) != (c.want == "") || err != nil && !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %q", c.name, err, c.want)
		}
	}
}
