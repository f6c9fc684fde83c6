package delimited

import (
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/internal/scan"
)

// guess collects what the first cells of a column could be.
//
// All cells present must agree: int64 if all are whole numbers of that range,
// uint64 if they fit there, float64 if they are numbers (inf and nan in any case
// included), bool if all are true or false in any case, time if all are times,
// and all with a zone or all without (date only: all of them days). Everything
// else is text, and so is a column with a whole number that has leading zeros or
// is beyond uint64 or below int64: these are labels, and as numbers they would
// change. A column without any cell present is float64, because text would
// forbid to compute with it; a later cell that is no number is then an error. In
// a file without rows every column is text.
type guess struct {
	seen                    bool
	fraction, signed, large bool // a float, a negative integer, one beyond int64
	number, truth           bool
	day, clock, zoned       bool
	other                   bool // text, or an integer that must stay a label
}

// see takes in one cell.
func (g *guess) see(cell []byte, quoted bool, r *rules) {
	if !quoted && r.missing(cell) {
		return
	}
	cell = trim(cell)
	if !quoted && (r.missing(cell) || isNaN(cell)) {
		// Blanks or a padded token: missing if the rest are numbers or times.
		return
	}
	g.seen = true
	if i, s := scan.ParseInt(cell); s == scan.OK {
		g.number = true
		g.signed = g.signed || i < 0
		return
	} else if s == scan.Zeros {
		g.other = true
		return
	} else if s == scan.Range {
		_, u := scan.ParseUint(cell)
		g.large = true
		g.number = true
		g.other = g.other || u != scan.OK
		return
	}
	if _, s := scan.ParseFloat(cell, r.point); s != scan.Syntax {
		g.number, g.fraction = true, true
		return
	}
	if isWord(cell, "true") || isWord(cell, "false") {
		g.truth = true
		return
	}
	if _, zoned, dateOnly, ok := parseTime(cell); ok {
		g.day = g.day || dateOnly
		g.clock = g.clock || !dateOnly && !zoned
		g.zoned = g.zoned || zoned
		return
	}
	g.other = true
}

// decide sets the kind.
func (g *guess) decide(c *stream.Column, noRows bool) {
	time := g.day || g.clock || g.zoned
	switch {
	case noRows, g.other, g.number && (g.truth || time), g.truth && time:
		c.Kind = stream.Text
	case !g.seen, g.fraction:
		c.Kind = stream.Float64
	case g.large && g.signed:
		c.Kind = stream.Text
	case g.large:
		c.Kind = stream.Uint64
	case g.number:
		c.Kind = stream.Int64
	case g.truth:
		c.Kind = stream.Bool
	case g.zoned && (g.day || g.clock):
		c.Kind = stream.Text
	default:
		c.Kind = stream.Time
		c.Zoned = g.zoned
		c.DateOnly = !g.clock && !g.zoned
	}
}

// force sets the kind the user asked for.
func (g *guess) force(c *stream.Column, k stream.Kind) {
	*c = stream.Column{Name: c.Name, Kind: k}
	if k == stream.Time {
		c.Zoned = g.zoned
		c.DateOnly = g.day && !g.clock && !g.zoned
	}
}
