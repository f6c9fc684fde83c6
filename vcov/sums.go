package vcov

import (
	"context"
	"slices"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// SumsFor says which sums of one pass answer the kinds of errors in o: fourth moments
// for hc0 and hc1, the second moments of all clusters for the others. later are the
// kinds that take a second round, see SecondRound.
//
// Errors: *stream.UseError for a wrong model or option.
func SumsFor(d *stream.Design, o Options) (needs accum.Needs, later []Kind, err error) {
	needs = accum.Needs{Keep: true, Retain: true}
	o = o.withDefaults()
	if err := o.validate(d); err != nil {
		return needs, nil, err
	}
	if d.Sweep >= 0 {
		err := sumsSwept(d, o, &needs)
		return needs, nil, err
	}
	cats := slices.ContainsFunc(d.Terms, func(t stream.Term) bool { return len(t.Categories) > 0 })
	for _, k := range o.Errors {
		switch {
		case k.Name == "classical":
		case inOrder(k.Name):
			return needs, nil, stream.Usef("errors: %s goes by the order of rows, which sums do not keep; fit the data", k.Name)
		case cats || leverages(k.Name):
			later = append(later, k)
		case k.Name == "hc0" || k.Name == "hc1":
			needs.Fourth = true
		case k.Cluster >= 0:
			w, _ := waysOf(d, k.Cluster)
			for _, key := range w.keys {
				if !slices.Contains(needs.Clusters, key) {
					needs.Clusters = append(needs.Clusters, key)
				}
			}
		default:
			return needs, nil, stream.Usef("errors: %s cannot be formed from sums; fit the data", k.Name)
		}
	}
	slices.Sort(needs.Clusters)
	return needs, later, nil
}

// sumsSwept is SumsFor where effects of units are swept out: classical errors, and those
// by the units from their second moments.
func sumsSwept(d *stream.Design, o Options, needs *accum.Needs) error {
	unit := d.Keys[d.Sweep].Text
	if len(d.Categories) > 0 {
		return stream.Usef("sweep: a digest keeps no categories beside effects that are swept out of %s; fit the data", unit)
	}
	for _, k := range o.Errors {
		switch {
		case k.Name == "classical":
		case k.Cluster == d.Sweep && !overTime(k.Name):
			needs.Clusters = []int{d.Sweep}
		default:
			return stream.Usef("errors: where effects are swept out of %s, a digest keeps classical errors and those by %[1]s; for %s fit the data", unit, k.Name)
		}
	}
	return nil
}

// Gather reads the source once and leaves the sums that SumsFor names, with all that
// State.Header and State.Records hand out. sample, if not nil, has the frame to sum in.
// Close the state.
func Gather(ctx context.Context, src stream.Source, d *stream.Design, o Options, sample *accum.Sample) (*accum.State, error) {
	o = o.withDefaults()
	needs, _, err := SumsFor(d, o)
	if err != nil {
		return nil, err
	}
	arithmetic := arithmetics[o.Arithmetic]
	if d.Sweep >= 0 && arithmetic == accum.Auto {
		arithmetic = accum.Extended // what varies within units is known when all rows are read
	}
	return accum.First(ctx, src, d, needs, accum.Options{Workers: o.Workers, Memory: o.Memory, Dense: o.Dense, Scratch: o.Scratch, Meter: o.Meter, Arithmetic: arithmetic, Sample: sample, Checkpoint: o.Checkpoint})
}

// Kept is what sums allow: those of one pass, and of a second round, if there are any.
type Kept struct {
	Fourth   bool
	Clusters []int
	Rows     *accum.RowHeader
	Kinds    []Kind // of the second round
	Next     func() (*accum.Record, error)
}

// forRows is the fitter of a second round over a state.
func forRows(ctx context.Context, s *accum.State, o Options) (*fitter, error) {
	if err := o.validate(s.Design); err != nil {
		return nil, err
	}
	f := &fitter{ctx: ctx, d: s.Design, o: o, told: map[string]bool{}, route: "sums", plan: &Plan{Route: "sums"},
		scan: accum.Options{Workers: o.Workers, Memory: o.Memory, Scratch: o.Scratch, Meter: o.Meter, Checkpoint: o.Checkpoint}}
	if f.scan.Meter == nil {
		f.scan.Meter = new(accum.Meter)
	}
	for _, k := range o.Errors {
		f.plan.moments = f.plan.moments || o.wantsMoments(s.Design, k)
	}
	if err := f.solveSums(s); err != nil {
		return nil, err
	}
	return f, nil
}

// SecondRound sums what the kinds of errors in o need of single rows, at the
// coefficients that the sums of s give: the meats of hc0 to hc5, the scores of
// clusters. The source may be a part of what s is made of; segments of it have the
// numbers of s less base. Close the sums.
//
// Errors: *stream.UseError, those of accum.Second; with hc5 where the weights depend
// on the largest leverage of all rows FitSums says so.
func SecondRound(ctx context.Context, src stream.Source, s *accum.State, base int, o Options) (*accum.RowSums, error) {
	if _, _, err := SumsFor(s.Design, o); err != nil {
		return nil, err
	}
	f, err := forRows(ctx, s, o.withDefaults())
	if err != nil {
		return nil, err
	}
	switch {
	case f.sol.df() <= 0:
		return nil, stream.Usef("the first round has %d rows for %d terms: there are no errors to be summed", f.sol.n, f.sol.rank())
	case f.sol.perfect:
		return nil, stream.Usef("the terms give the outcome exactly: errors are 0 and take no second round")
	}
	rp, _ := f.passOver(nil)
	rp.Retain, rp.Base, rp.Over = true, base, nil // parts know nothing of all rows' leverages
	return accum.Second(ctx, src, s, rp, f.scan)
}

// rows takes in the sums of a second round.
func (f *fitter) rows(kept *Kept) error {
	o := f.o
	o.Errors, o.Shape = kept.Kinds, false // as they were when the sums were made
	g, err := forRows(f.ctx, f.state, o)
	if err != nil {
		return err
	}
	rp, _ := g.passOver(nil)
	rp.Over = nil
	if f.sums, err = accum.LoadRows(f.ctx, f.state, rp, kept.Rows, kept.Next, f.scan); err != nil {
		return err
	}
	f.kinds, f.keys, f.route = g.kinds, g.keys, "sums, rows"
	if n := f.sums.HeavyRows; n > 0 && slices.ContainsFunc(f.kinds, leverages) {
		f.note("high-leverage", "%d rows have leverage above %.2f", n, accum.HeavyAt)
	}
	return nil
}

// FitSums is Fit from the sums of a state, without any data. A kind of errors that
// they do not give is an error that says what to keep. The design of s is the model;
// keys are those of o.
func FitSums(ctx context.Context, s *accum.State, kept Kept, o Options) (*Result, error) {
	start := time.Now()
	d := s.Design
	o = o.withDefaults()
	if err := o.validate(d); err != nil {
		return nil, err
	}
	hypotheses, err := o.parseHypotheses(d)
	if err != nil {
		return nil, err
	}
	f := &fitter{ctx: ctx, d: d, o: o, told: map[string]bool{}, route: "sums", plan: &Plan{Route: "sums", hypotheses: hypotheses},
		scan: accum.Options{Workers: o.Workers, Memory: o.Memory, Scratch: o.Scratch, Meter: new(accum.Meter)}}
	defer func() {
		if f.sums != nil {
			f.sums.Close()
		}
	}()
	f.plan.needs.Keep = true
	byRow := func(k Kind) bool {
		return kept.Rows != nil && slices.ContainsFunc(kept.Kinds, func(o Kind) bool {
			return o == k || o.Name == "hc0" && k.Name == "hc1" || o.Name == "hc1" && k.Name == "hc0"
		})
	}
	if d.Sweep >= 0 {
		if err := sumsSwept(d, o, new(accum.Needs)); err != nil {
			return nil, err
		}
	}
	held := func(k Kind) bool { // second moments of its clusters
		return !slices.ContainsFunc(KeysOf(d, k.Cluster), func(key int) bool { return !slices.Contains(kept.Clusters, key) })
	}
	rows := false
	for _, k := range o.Errors {
		moments := k.Cluster >= 0 && o.wantsMoments(d, k)
		switch {
		case k.Name == "classical":
		case inOrder(k.Name):
			return nil, stream.Usef("errors: %s goes by the order of rows, which sums do not keep; fit the data", k.Name)
		case byRow(k) && !(moments && held(k)):
			if moments && !kept.Rows.Moments {
				return nil, stream.Usef("--cluster-detail: needs second moments of the clusters of %s, which a second round keeps for cr2 and cr3 only; leave it out, or fit the data", d.Keys[k.Cluster].Text)
			}
			rows = true
		case (k.Name == "hc0" || k.Name == "hc1") && kept.Fourth:
			f.plan.needs.Fourth = true
		case len(d.Categories) > 0:
			return nil, stream.Usef("errors: %s with category terms is summed row by row, when the coefficients are known; make a second round (tallrow digest --at), or fit the data", k.Name)
		case k.Name == "hc0" || k.Name == "hc1":
			return nil, stream.Usef("errors: %s needs fourth moments, which these sums do not hold; make the digest with --errors %s, or a second round with --at", k.Name, k.Name)
		case k.Cluster >= 0:
			w, _ := waysOf(d, k.Cluster)
			for _, key := range w.keys {
				if !slices.Contains(kept.Clusters, key) {
					return nil, stream.Usef("errors: %s by %s needs sums of those clusters, which were not kept; make the digest with --errors \"cr1(%s)\", or a second round with --at", k.Name, d.Keys[key].Text, d.Keys[key].Text)
				}
				if !slices.Contains(f.plan.needs.Clusters, key) {
					f.plan.needs.Clusters = append(f.plan.needs.Clusters, key)
				}
			}
		default:
			return nil, stream.Usef("errors: %s depends on every row, which these sums do not hold; make a second round (tallrow digest --at), or fit the data", k.Name)
		}
	}
	if o.Deal != nil {
		switch key := o.Deal.Key; {
		case key < 0:
			return nil, stream.Usef("audit: rows cannot be dealt to buckets where only their sums are left; deal clusters that are held, such as auto(quay), or fit the data")
		case !slices.Contains(kept.Clusters, key):
			return nil, stream.Usef("audit: it needs the second moments of the clusters of %s, which were not kept; make the digest with --errors \"cr1(%s)\"", d.Keys[key].Text, d.Keys[key].Text)
		case !slices.Contains(f.plan.needs.Clusters, key):
			f.plan.needs.Clusters = append(f.plan.needs.Clusters, key)
		}
	}
	if err := f.solveSums(s); err != nil {
		return nil, err
	}
	f.sumLoss()
	if err := f.second(); err != nil {
		return nil, err
	}
	if rows {
		if err := f.rows(&kept); err != nil {
			return nil, err
		}
	}
	r, err := f.answer()
	if err != nil {
		return nil, err
	}
	r.Run.Seconds = Number(time.Since(start).Seconds())
	return r, nil
}

// solveSums solves a state that cannot be summed anew in another frame.
func (f *fitter) solveSums(s *accum.State) error {
	if err := f.solve(s); err != nil {
		return err
	}
	if len(s.Groups) > 0 || f.sol.rss == f.sol.svv {
		f.sol.settle()
	}
	return nil
}

// info is what is known of the input; nothing of one that only sums are left of.
func (f *fitter) info() stream.Info {
	if f.src == nil {
		return stream.Info{Bytes: -1, Rows: -1, Segments: -1}
	}
	return f.src.Info()
}

// LostElsewhere bounds the rows of s that were dropped although the question d does
// not read what was missing in them: sums drop rows over all columns they keep.
// Counts by column do not say which columns were missing together.
func LostElsewhere(s *accum.State, d *stream.Design, columns []string) (least, most int64) {
	read := map[string]bool{}
	for _, u := range d.Uses() {
		read[columns[u.Column]] = true
	}
	own := map[string]bool{}
	for i := range d.Terms {
		own[d.Terms[i].Text] = true
	}
	own[d.OutcomeText()] = true
	var inside, largest, outside int64
	for name, n := range s.Tally.MissingBy {
		if read[name] || own[name] {
			inside += n
			largest = max(largest, n)
		} else {
			outside += n
		}
	}
	return max(0, s.Tally.Missing-inside), min(s.Tally.Missing-largest, outside)
}

// KeysOf lists the keys whose clusters errors by a key need: itself, or every set of
// those that it crosses.
func KeysOf(d *stream.Design, key int) []int {
	w, _ := waysOf(d, key)
	return w.keys
}

// Sizes of a digest in bytes, measured on the demo's data: what is always there, and
// for each number that is kept, after compression.
const (
	digestBase    = 3600
	digestSecond  = 22
	digestFourth  = 11
	digestCluster = 5
	digestPair    = 7 // of a cluster
)

// DigestSize estimates the size of a digest of the sums that SumsFor names, and what
// each cluster adds; levels of categories come on top.
func DigestSize(d *stream.Design, o Options) (bytes, cluster int64, err error) {
	needs, _, err := SumsFor(d, o)
	if err != nil {
		return 0, 0, err
	}
	p := int64(2)
	for _, t := range d.Terms {
		if len(t.Categories) == 0 {
			p++
		}
	}
	bytes = digestBase + digestSecond*p*(p+1)/2
	if needs.Fourth {
		bytes += digestFourth * ((p + 3) * (p + 2) * (p + 1) * p / 24)
	}
	if len(needs.Clusters) > 0 {
		cluster = digestCluster + digestPair*p*(p+1)/2
	}
	return bytes, cluster, nil
}
