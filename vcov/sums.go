package vcov

import (
	"context"
	"slices"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// SumsFor says which sums answer the kinds of errors in o from one pass: fourth
// moments for hc0 and hc1, the second moments of all clusters for the others.
//
// Errors: *stream.UseError for a kind that sums do not give.
func SumsFor(d *stream.Design, o Options) (accum.Needs, error) {
	needs := accum.Needs{Keep: true, Retain: true}
	o = o.withDefaults()
	if err := o.validate(d); err != nil {
		return needs, err
	}
	cats := slices.ContainsFunc(d.Terms, func(t stream.Term) bool { return len(t.Categories) > 0 })
	for _, k := range o.Errors {
		switch {
		case k.Name == "classical":
			continue
		case cats:
			return needs, stream.Usef("errors: %s with category terms is summed row by row, when the coefficients are known; a digest keeps sums of a first reading only: ask for classical", k.Name)
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
			return needs, stream.Usef("errors: %s depends on every row, which sums of a first reading do not hold; hc1 and the cluster kinds can be kept", k.Name)
		}
	}
	slices.Sort(needs.Clusters)
	return needs, nil
}

// Gather reads the source once and leaves the sums that SumsFor names, with all that
// State.Header and State.Records hand out. sample, if not nil, has the frame to sum in.
// Close the state.
func Gather(ctx context.Context, src stream.Source, d *stream.Design, o Options, sample *accum.Sample) (*accum.State, error) {
	o = o.withDefaults()
	needs, err := SumsFor(d, o)
	if err != nil {
		return nil, err
	}
	return accum.First(ctx, src, d, needs, accum.Options{Workers: o.Workers, Memory: o.Memory, Dense: o.Dense, Scratch: o.Scratch, Meter: o.Meter, Arithmetic: arithmetics[o.Arithmetic], Sample: sample})
}

// FitSums is Fit from the sums of a state, without any data. kept are the needs that
// the sums were made for; a kind that they do not give is an error that says what to
// keep. The design of s is the model; keys are those of o.
func FitSums(ctx context.Context, s *accum.State, kept accum.Needs, o Options) (*Result, error) {
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
	f := &fitter{ctx: ctx, d: d, o: o, told: map[string]bool{}, route: "sums", plan: &Plan{Route: "sums", hypotheses: hypotheses}, scan: accum.Options{Meter: new(accum.Meter)}}
	f.plan.needs.Keep = true
	for _, k := range o.Errors {
		switch {
		case k.Name == "classical":
		case (k.Name == "hc0" || k.Name == "hc1") && kept.Fourth:
			f.plan.needs.Fourth = true
		case k.Name == "hc0" || k.Name == "hc1":
			return nil, stream.Usef("errors: %s needs fourth moments, which these sums do not hold; make the digest with --errors %s", k.Name, k.Name)
		case k.Cluster >= 0:
			w, _ := waysOf(d, k.Cluster)
			for _, key := range w.keys {
				if !slices.Contains(kept.Clusters, key) {
					return nil, stream.Usef("errors: %s by %s needs sums of those clusters, which were not kept; make the digest with --errors \"cr1(%s)\"", k.Name, d.Keys[key].Text, d.Keys[key].Text)
				}
				if !slices.Contains(f.plan.needs.Clusters, key) {
					f.plan.needs.Clusters = append(f.plan.needs.Clusters, key)
				}
			}
		default:
			return nil, stream.Usef("errors: %s depends on every row, which these sums do not hold; fit the data", k.Name)
		}
	}
	if err := f.solve(s); err != nil {
		return nil, err
	}
	if len(s.Groups) > 0 || f.sol.rss == f.sol.svv {
		f.sol.settle()
	}
	f.sumLoss()
	if err := f.second(); err != nil {
		return nil, err
	}
	if err := f.clusters(); err != nil {
		return nil, err
	}
	r := f.result()
	if f.fail != nil {
		return nil, f.fail
	}
	r.Run.Seconds = Number(time.Since(start).Seconds())
	return r, nil
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
	var inside, outside int64
	for name, n := range s.Tally.MissingBy {
		if read[name] || own[name] {
			inside += n
		} else {
			outside += n
		}
	}
	return max(0, s.Tally.Missing-inside), min(s.Tally.Missing, outside)
}

// KeysOf lists the keys whose clusters errors by a key need: itself, or every set of
// those that it crosses.
func KeysOf(d *stream.Design, key int) []int {
	w, _ := waysOf(d, key)
	return w.keys
}
