package accum

import (
	"cmp"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"maps"
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// Header is what goes with a table of records: how to read it, and all that is not
// a sum. Headers of tables over disjoint rows are joined by Join.
type Header struct {
	Sections []*Section `json:"sections"`
	// Fourth and Clusters say which sums there are: fourth moments, and the second
	// moments of the clusters of which keys of the design.
	Fourth   bool  `json:"fourth"`
	Clusters []int `json:"clusters"`

	Tally     stream.Tally       `json:"tally"`
	Read      int64              `json:"read"`
	Malformed int64              `json:"malformed"`
	Segments  int64              `json:"segments"`
	Bytes     int64              `json:"bytes"`
	Unread    stream.Unread      `json:"unread"`
	Problems  []*stream.RowError `json:"problems,omitempty"`
}

// Section is the rows that were summed in one frame.
type Section struct {
	Frame    *Frame `json:"frame"`
	Extended bool   `json:"extended"`
	Unit     int    `json:"unit"` // of keyed sums

	Rows    int64   `json:"rows"`
	Freq    int64   `json:"frequencies"`
	All     int64   `json:"all"` // of which NonZero are counted: rows, or frequencies
	Reach   real    `json:"reach"`
	NonZero []int64 `json:"nonzero"`
	Value   reals   `json:"value"`
	Varied  []bool  `json:"varied"`

	Lone     []*loneTracker `json:"lone"` // by key
	Tables   []partials     `json:"tables"`
	Pairs    []partials     `json:"pairs"`
	Clusters []partials     `json:"clusters"` // by key
	Units    *partials      `json:"units,omitempty"`

	id string // see ID
}

// plain leaves nothing in the description that hangs on which worker saw which rows:
// counts that are only known to be two or more of both kinds, cells that stand for
// many.
func (s *Section) plain() {
	for j, n := range s.NonZero {
		if n >= 2 && n <= s.All-2 {
			s.NonZero[j], s.Varied[j] = 2, true // nothing hangs on their values
		}
	}
	settleVaried(s.Value, s.Varied)
	for i, t := range s.Lone {
		s.Lone[i] = t.plain()
	}
}

// plain is t without cells that are of no more use: which came first is chance.
func (t *loneTracker) plain() *loneTracker {
	if t == nil {
		return nil
	}
	u := *t
	u.value = slices.Clone(t.value)
	for j := range u.value {
		if u.zero[j].in == inMany {
			u.value[j] = 0
		}
	}
	return &u
}

// ID identifies the frame, the unit and the arithmetic of a section, which must not be
// changed afterwards: sections with one ID are added.
func (s *Section) ID() string {
	if s.id != "" {
		return s.id
	}
	b, err := json.Marshal(struct {
		F *Frame
		X bool
		U int
	}{s.Frame, s.Extended, s.Unit})
	if err != nil {
		panic(err) // plain data
	}
	h := sha256.Sum256(b)
	s.id = hex.EncodeToString(h[:16])
	return s.id
}

// fits reports whether the lengths of the frame are those of a layout.
func (f *Frame) fits(l *layout) bool {
	white := 0
	if f.White {
		white = l.p0 * l.p0
	}
	return f.Terms == l.p0 && len(f.Shift) == l.nx && len(f.Inv) == l.nx && len(f.H) == l.p0 && len(f.T) == white
}

// Header describes the sums of a state that was made with Needs.Retain.
func (s *State) Header() *Header {
	h := &Header{Fourth: s.needs.Fourth, Clusters: slices.Clone(s.needs.Clusters), Tally: s.Tally, Read: s.Read, Malformed: s.Malformed, Segments: s.Segments,
		Bytes: s.Bytes, Unread: s.Unread, Problems: s.Problems}
	for _, e := range s.retained() {
		c := &Section{Frame: e.frame, Extended: e.extended, Unit: e.unit, Rows: e.rows, Freq: e.freq, Reach: real(e.reach),
			NonZero: slices.Clone(e.nonzero), Value: slices.Clone(e.value), Varied: e.varied, Lone: slices.Clone(e.lone)}
		if c.All = e.rows; s.Design.Spec.WeightKind == stream.Frequency && s.Design.Spec.Weight != "" {
			c.All = e.freq
		}
		c.plain()
		for _, t := range e.tables {
			c.Tables = append(c.Tables, t.partials)
		}
		for _, t := range e.pairs {
			c.Pairs = append(c.Pairs, partials{max: t.max, bad: t.bad})
		}
		for _, g := range e.clusters {
			if g == nil {
				c.Clusters = append(c.Clusters, partials{})
			} else {
				c.Clusters = append(c.Clusters, g.seen)
			}
		}
		if e.units != nil {
			seen := e.units.seen
			c.Units = &seen
		}
		h.Sections = append(h.Sections, c)
	}
	return h
}

// retained lists the epochs in the order of their IDs.
func (s *State) retained() []*epoch {
	ids := map[*epoch]string{}
	for _, e := range s.epochs {
		ids[e] = (&Section{Frame: e.frame, Extended: e.extended, Unit: e.unit}).ID()
	}
	return slices.SortedFunc(maps.Keys(ids), func(a, b *epoch) int { return cmp.Compare(ids[a], ids[b]) })
}

// Conceal puts hidden keys into what the header knows of single clusters, and leaves out
// what was found in rows that could not be read.
func (h *Header) Conceal(kinds []stream.Kind, hide Hide) {
	h.Problems = slices.Clone(h.Problems)
	for i, p := range h.Problems {
		h.Problems[i] = &stream.RowError{Pos: p.Pos, Found: "(hidden)", Want: p.Want}
	}
	for _, c := range h.Sections {
		for key, t := range c.Lone {
			c.Lone[key] = t.conceal(key, kinds[key], hide)
		}
	}
}

func (t *loneTracker) conceal(key int, kind stream.Kind, hide Hide) *loneTracker {
	if t == nil {
		return nil
	}
	if _, ok := hide(key, Key{Kind: kind}); !ok {
		return t
	}
	n := *t
	n.nonzero, n.zero = slices.Clone(t.nonzero), slices.Clone(t.zero)
	for _, ws := range [][]where{n.nonzero, n.zero} {
		for i := range ws {
			if ws[i].in == inOne {
				text, _ := hide(key, Key{kind, ws[i].key})
				ws[i].key = stream.KeyValue{Text: text}
			}
		}
	}
	return &n
}

// Join adds what o knows of other rows. Sections are in the order of their IDs.
func (h *Header) Join(o *Header) error {
	if h.Fourth != o.Fourth || !slices.Equal(h.Clusters, o.Clusters) {
		return errors.New("they hold different sums")
	}
	h.Tally.Add(&o.Tally)
	h.Read += o.Read
	h.Malformed += o.Malformed
	h.Segments += o.Segments
	h.Bytes += o.Bytes
	h.Unread.Add(o.Unread)
	// Whatever the order of joining, the first ones by place are kept.
	h.Problems = slices.Concat(h.Problems, o.Problems)
	slices.SortStableFunc(h.Problems, func(a, b *stream.RowError) int {
		p, q := &a.Pos, &b.Pos
		return cmp.Or(cmp.Compare(p.File, q.File), cmp.Compare(p.Group, q.Group), cmp.Compare(p.Line, q.Line), cmp.Compare(p.Offset, q.Offset),
			cmp.Compare(p.Row, q.Row), cmp.Compare(p.Column, q.Column), cmp.Compare(a.Found, b.Found))
	})
	h.Problems = h.Problems[:min(len(h.Problems), stream.MaxProblems)]
	for _, c := range o.Sections {
		i, ok := slices.BinarySearchFunc(h.Sections, c.ID(), func(s *Section, id string) int { return cmp.Compare(s.ID(), id) })
		if !ok {
			h.Sections = slices.Insert(h.Sections, i, c)
		} else if err := h.Sections[i].join(c); err != nil {
			return err
		}
	}
	return nil
}

var errSections = errors.New("their frames are alike and their sums are not")

func (s *Section) join(o *Section) error {
	if len(s.NonZero) != len(o.NonZero) || len(s.Value) != len(o.Value) || len(s.Varied) != len(o.Varied) || len(s.Lone) != len(o.Lone) ||
		len(s.Tables) != len(o.Tables) || len(s.Pairs) != len(o.Pairs) || len(s.Clusters) != len(o.Clusters) {
		return errSections
	}
	s.Rows += o.Rows
	s.Freq += o.Freq
	s.All += o.All
	s.Reach = max(s.Reach, o.Reach)
	s.NonZero = slices.Clone(s.NonZero)
	for j, n := range o.NonZero {
		s.NonZero[j] += n
	}
	s.Value, s.Varied = slices.Clone(s.Value), slices.Clone(s.Varied)
	joinVaried(s.Value, s.Varied, o.Value, o.Varied)
	for k, t := range o.Lone {
		switch {
		case t == nil:
		case s.Lone[k] == nil || len(s.Lone[k].nonzero) != len(t.nonzero):
			return errSections
		default:
			s.Lone[k].mergeFrom(t)
		}
	}
	if (s.Units == nil) != (o.Units == nil) {
		return errSections
	} else if s.Units != nil {
		s.Units.join(o.Units)
	}
	for _, p := range [][2][]partials{{s.Tables, o.Tables}, {s.Pairs, o.Pairs}, {s.Clusters, o.Clusters}} {
		for i := range p[1] {
			p[0][i].join(&p[1][i])
		}
	}
	s.plain()
	return nil
}
