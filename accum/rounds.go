package accum

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strconv"

	"github.com/tallrow/tallrow/stream"
)

// RowHeader is what goes with the records of a pass over rows, beside the sums.
// Headers over disjoint rows are joined by Join.
type RowHeader struct {
	// Meats is the number of RowPass.Weights, Scores its Scores.
	Meats   int   `json:"meats"`
	Scores  []int `json:"scores"`
	Moments bool  `json:"moments"`
	Spread  bool  `json:"spread"`
	Unit    int   `json:"unit"`

	MaxLeverage real  `json:"max_leverage"`
	LoneRows    int64 `json:"lone_rows"`
	HeavyRows   int64 `json:"heavy_rows"`
	LoneUsed    bool  `json:"lone_used"`
	Read        int64 `json:"read"`
	Bytes       int64 `json:"bytes"`

	LoneTerms  []*loneTracker `json:"lone_terms"` // by RowHeader.Scores
	LoneLevels []*loneTracker `json:"lone_levels"`
	Tables     [][]partials   `json:"tables"` // by meat, that of rows of leverage 1 last
	Pairs      [][]partials   `json:"pairs"`
	Seen       []partials     `json:"seen"` // by RowHeader.Scores
}

// Conceal puts hidden keys into what the header knows of single clusters.
func (h *RowHeader) Conceal(kinds []stream.Kind, hide Hide) {
	for i, key := range h.Scores {
		h.LoneTerms[i], h.LoneLevels[i] = h.LoneTerms[i].conceal(key, kinds[key], hide), h.LoneLevels[i].conceal(key, kinds[key], hide)
	}
}

// Join adds what o knows of other rows.
func (h *RowHeader) Join(o *RowHeader) error {
	if h.Meats != o.Meats || !slices.Equal(h.Scores, o.Scores) || h.Moments != o.Moments || h.Spread != o.Spread || h.Unit != o.Unit ||
		len(h.LoneTerms) != len(o.LoneTerms) || len(h.LoneLevels) != len(o.LoneLevels) || len(h.Tables) != len(o.Tables) || len(h.Pairs) != len(o.Pairs) || len(h.Seen) != len(o.Seen) {
		return errors.New("they hold different sums")
	}
	h.MaxLeverage = max(h.MaxLeverage, o.MaxLeverage)
	h.LoneRows += o.LoneRows
	h.HeavyRows += o.HeavyRows
	h.LoneUsed = h.LoneUsed || o.LoneUsed
	h.Read += o.Read
	h.Bytes += o.Bytes
	for i := range h.LoneTerms {
		for _, p := range [][2]*loneTracker{{h.LoneTerms[i], o.LoneTerms[i]}, {h.LoneLevels[i], o.LoneLevels[i]}} {
			if p[0] == nil || p[1] == nil || len(p[0].nonzero) != len(p[1].nonzero) {
				return errSections
			}
			p[0].mergeFrom(p[1])
		}
		h.LoneTerms[i], h.LoneLevels[i] = h.LoneTerms[i].plain(), h.LoneLevels[i].plain()
	}
	join := func(a, b []partials) error {
		if len(a) != len(b) {
			return errSections
		}
		for i := range b {
			a[i].join(&b[i])
		}
		return nil
	}
	for i := range h.Tables {
		if err := join(h.Tables[i], o.Tables[i]); err != nil {
			return err
		}
	}
	for i := range h.Pairs {
		if err := join(h.Pairs[i], o.Pairs[i]); err != nil {
			return err
		}
	}
	return join(h.Seen, o.Seen)
}

// rowMeats lists the meats whose sums are handed out: the last is of the rows of
// leverage 1.
func (w *secondWorker) rowMeats() []*meat { return append(slices.Clone(w.meats), w.lone) }

// RowHeader describes the sums of a pass that was made with RowPass.Retain.
func (r *RowSums) RowHeader() *RowHeader {
	w := r.kept
	h := &RowHeader{Meats: len(w.meats), Scores: list(w.pass.Scores), Moments: len(w.pass.Moments) > 0, Spread: w.pass.Spread, Unit: w.unit,
		MaxLeverage: real(r.MaxLeverage), LoneRows: r.LoneRows, HeavyRows: r.HeavyRows, LoneUsed: w.lone.used, Read: r.read, Bytes: r.Bytes,
	}
	for i := range w.scores {
		h.LoneTerms, h.LoneLevels = append(h.LoneTerms, w.loneT[i].plain()), append(h.LoneLevels, w.loneC[i].plain())
	}
	for _, m := range w.rowMeats() {
		ts, ps := []partials{}, []partials{}
		for _, t := range m.tables {
			ts = append(ts, t.partials)
		}
		for _, b := range m.pairs {
			ps = append(ps, partials{max: b.t.max, bad: b.t.bad})
		}
		h.Tables, h.Pairs = append(h.Tables, ts), append(h.Pairs, ps)
	}
	for _, g := range w.scores {
		h.Seen = append(h.Seen, g.store.seen)
	}
	return h
}

func list(x []int) []int { return append([]int{}, x...) }

// Records calls f with every record of a pass that was made with RowPass.Retain, in
// order; see State.Records. run is the place of the input among the runs of the
// state.
func (r *RowSums) Records(run int, f func(*Record) error, hide Hide) error {
	w, s := r.kept, r.kept.state
	var rec Record
	for _, n := range slices.Sorted(maps.Keys(r.checks)) {
		c := r.checks[n]
		n -= RunBase(run)
		rec = Record{What: SegmentCheck, Table: run, Key: binary.BigEndian.AppendUint64(nil, uint64(n)), Label: strconv.Itoa(n), Rows: c.rows, Sums: []Whole{fixed{0, c.sum}.whole()}}
		if err := f(&rec); err != nil {
			return err
		}
	}
	long := func(what What, section int, v superVec) error {
		for j := range v {
			if v[j].special != 0 {
				return errRange
			}
			rec = Record{What: what, Section: section, Table: j, Sums: rec.Sums[:0]}
			rec.Unit, rec.Sums = v[j].limbs(rec.Sums)
			if err := f(&rec); err != nil {
				return err
			}
		}
		return nil
	}
	meats := w.rowMeats()
	for i, m := range meats {
		if err := long(MeatSum, i, m.gramX); err != nil {
			return err
		}
	}
	if w.pass.Spread {
		if err := long(SpreadSum, 0, w.spreadX); err != nil {
			return err
		}
	}
	place := func(table int, id int32) (key []byte, label string) { return s.combinationAt(table, id) }
	for i, m := range meats {
		for ti, t := range m.tables {
			if err := tableRecords(MeatLevels, i, ti, t, place, f); err != nil {
				return err
			}
		}
	}
	for i, m := range meats {
		for pi, b := range m.pairs {
			spec := &s.lay.pairs[pi]
			if err := pairTableRecords(MeatPairs, i, pi, b.t, spec, place, f); err != nil {
				return err
			}
		}
	}
	byKey := map[int]*groups{} // kinds of errors name them in any order
	for i, g := range w.scores {
		byKey[w.pass.Scores[i]] = g
	}
	for _, k := range slices.Sorted(maps.Keys(byKey)) {
		if err := s.clusterRecords(ScoreSums, 0, k, byKey[k].store, f, hide); err != nil {
			return err
		}
	}
	return nil
}

// LoadRows makes what Second would have left from a header and its records, see Load:
// rp must be the pass that they were made with. segments tells whether every segment
// of the state was seen.
//
// Errors: those of next, *ChangedError if a segment held other values than in the
// first round, *UnseenError if segments are missing.
func LoadRows(ctx context.Context, s *State, rp RowPass, h *RowHeader, next func() (*Record, error), o Options) (out *RowSums, err error) {
	if s.Apart != nil && len(rp.Scores) > 0 {
		return nil, errApartRounds
	}
	if h.Meats != len(rp.Weights) || !slices.Equal(h.Scores, rp.Scores) || h.Moments != (len(rp.Moments) > 0) || h.Spread != rp.Spread {
		return nil, errHeader
	}
	pool := newGroupPool(&o)
	defer func() {
		if out == nil {
			pool.close()
		}
	}()
	common := newSecondCommon(s, &rp, h.Unit, &o, pool)
	w := newSecondWorker(s, &rp, h.Unit, common)
	meats := w.rowMeats()
	if len(h.Tables) != len(meats) || len(h.Pairs) != len(meats) || len(h.Seen) != len(w.scores) || len(h.LoneTerms) != len(w.scores) || len(h.LoneLevels) != len(w.scores) {
		return nil, errHeader
	}
	for i, m := range meats {
		m.used = i < len(meats)-1 || h.LoneUsed
		if len(h.Tables[i]) != len(m.tables) || len(h.Pairs[i]) != len(m.pairs) {
			return nil, errHeader
		}
		for j, t := range m.tables {
			t.partials = h.Tables[i][j]
		}
		for j, b := range m.pairs {
			b.t.max, b.t.bad = h.Pairs[i][j].max, h.Pairs[i][j].bad
		}
	}
	for i, g := range w.scores {
		if h.LoneTerms[i] == nil || h.LoneLevels[i] == nil || len(h.LoneTerms[i].nonzero) != len(w.loneT[i].nonzero) || len(h.LoneLevels[i].nonzero) != len(w.loneC[i].nonzero) {
			return nil, errHeader
		}
		w.loneT[i], w.loneC[i] = h.LoneTerms[i], h.LoneLevels[i]
		g.store.seen = h.Seen[i]
	}
	w.maxLever, w.loneRows, w.heavyCount = float64(h.MaxLeverage), h.LoneRows, h.HeavyRows
	p := newPass(nil, nil)
	p.bytes = h.Bytes
	ld := &rowsLoader{sumsLoader: sumsLoader{lay: s.lay, num: places{s}}, w: w, meats: meats}
	if err := takeAll(ctx, next, func(r *Record) error { return ld.take(r, p) }); err != nil {
		return nil, err
	}
	if err := ld.end(); err != nil {
		return nil, err
	}
	if err := s.unchangedPart(p); err != nil {
		return nil, err
	}
	if miss := len(s.checks) - len(p.checks); miss > 0 {
		return nil, &UnseenError{miss, len(s.checks)}
	}
	out, retry, err := s.joinSecond([]*secondWorker{w}, &rp, p, h.Unit, common)
	if err != nil {
		return nil, err
	}
	if retry != h.Unit {
		return nil, errors.New("the sums by level or cluster leave the range that parts have in common")
	}
	out.pool = pool
	return out, nil
}

// UnseenError says that segments of the first round are missing in the second.
type UnseenError struct{ Missing, All int }

func (e *UnseenError) Error() string {
	return fmt.Sprintf("%d of the %d segments of the first round are missing in the second", e.Missing, e.All)
}

var errApartRounds = errors.New("a category with too many levels stands apart: clusters beside it are summed in one run only")

// unchangedPart is unchanged for some of the segments.
func (s *State) unchangedPart(p *pass) error {
	for n, q := range p.checks {
		if c, ok := s.checks[n]; !ok || q != c {
			if was, is := s.quotes[n], p.quotes[n]; was != 0 && is != 0 && was != is {
				return &ChangedError{fmt.Sprintf("segment %d begins inside quotes in one round and outside in the other; read this part with --quotes count", n)}
			}
			return &ChangedError{fmt.Sprintf("segment %d holds other values", n)}
		}
	}
	return nil
}

// rowsLoader puts the records of a pass over rows into a worker.
type rowsLoader struct {
	sumsLoader
	w     *secondWorker
	meats []*meat
}

func (ld *rowsLoader) take(r *Record, p *pass) error {
	if r.What == SegmentCheck {
		return ld.sumsLoader.take(r, p)
	}
	long := func(v superVec) error {
		if r.Table < 0 || r.Table >= len(v) {
			return errPlace
		}
		return v[r.Table].setLimbs(r)
	}
	if r.What == SpreadSum {
		return long(ld.w.spreadX)
	}
	if r.What == ScoreSums {
		i := slices.Index(ld.w.pass.Scores, r.Table)
		if i < 0 {
			return errPlace
		}
		return ld.cluster(ld.w.scores[i].store, r)
	}
	if r.Section < 0 || r.Section >= len(ld.meats) {
		return errPlace
	}
	m := ld.meats[r.Section]
	switch r.What {
	case MeatSum:
		return long(m.gramX)
	case MeatLevels:
		if r.Table < 0 || r.Table >= len(m.tables) {
			return errPlace
		}
		id, rest, err := ld.combo(r.Table, r.Key)
		if err != nil {
			return err
		}
		return ld.level(m.tables[r.Table], id, rest, r)
	case MeatPairs:
		if r.Table < 0 || r.Table >= len(m.pairs) {
			return errPlace
		}
		spec := &ld.lay.pairs[r.Table]
		a, rest, err := ld.combo(spec.g, r.Key)
		if err != nil {
			return err
		}
		b, rest, err := ld.combo(spec.h, rest)
		if err != nil {
			return err
		}
		return ld.pairInto(m.pairs[r.Table].t, a, b, rest, r)
	}
	return errPlace
}

// Identity says of which rows and frames the sums of a state are.
func (s *State) Identity() string {
	id := s.Fingerprint
	for _, e := range s.retained() {
		id += " " + (&Section{Frame: e.frame, Extended: e.extended, Unit: e.unit}).ID()
	}
	return id
}

// number moves the numbers of segments to those of a state.
func (p *pass) number(base int) {
	if base == 0 {
		return
	}
	checks := map[int]segCheck{}
	for n, c := range p.checks {
		checks[n+base] = c
	}
	p.checks = checks
	quotes := map[int]stream.Quotes{}
	for n, q := range p.quotes {
		quotes[n+base] = q
	}
	p.quotes = quotes
}

// RunBase is what is added to the segment numbers of a run of a state that was loaded
// from several.
func RunBase(run int) int { return run << runShift }

const runShift = 40
