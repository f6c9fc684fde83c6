package main

import (
	"context"
	"fmt"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// dataOnly are the options that say how data are read, and what is fixed once sums
// are made.
var dataOnly = []string{"no-constant", "sweep", "weight", "weight-kind", "where", "missing", "bad-rows", "first", "format", "no-header", "decimal", "null", "kinds", "zone", "passes", "arithmetic", "plan", "timings"}

// fromDigests answers the question of s from digests.
func (a *app) fromDigests(ctx context.Context, s *settings, names []string) (*fitted, error) {
	s.holdMemory()
	rs, ones, shut, err := a.openDigests(ctx, s, names)
	if err != nil {
		return nil, err
	}
	defer shut()
	start := time.Now()
	one, two := splitRounds(rs)
	if len(one) == 0 {
		return nil, stream.Usef("%s is of a second round: name the digests of the first too", names[0])
	}
	p, err := digest.NewPool(one)
	if err != nil {
		return nil, err
	}
	if err := p.Complete(); err != nil {
		return nil, err
	}
	var rows *digest.Pool
	if len(two) > 0 {
		if rows, err = digest.NewPool(two); err == nil {
			err = rows.Complete()
		}
		if err != nil {
			return nil, err
		}
		if what := p.Meta.Model.Differs(&rows.Meta.Model); what != "" {
			return nil, stream.Usef("%s is of another model than %s: %s", two[0].Path, one[0].Path, what)
		}
	}
	q, err := s.question(p.Meta, rows)
	if err != nil {
		return nil, err
	}
	opts := s.fitOptions(q.req)
	opts.Workers, opts.Memory = s.workers, max(s.memoryBound()-baseBytes, 1<<20)
	opts.Errors = q.req.withClassical(p.Meta.Model.WeightKind == "sampling")
	for i := range opts.Errors {
		if k := &opts.Errors[i]; k.Cluster >= 0 {
			if k.Cluster, err = q.key(p.Meta, k.Cluster); err != nil {
				return nil, err
			}
		}
	}
	if b := q.req.buckets; b != nil {
		deal := *b
		if deal.Key >= 0 {
			if deal.Key, err = q.key(p.Meta, deal.Key); err != nil {
				return nil, err
			}
		}
		opts.Deal = &deal
	}
	kept := vcov.Kept{Fourth: p.Meta.Header.Fourth, Clusters: p.Meta.Header.Clusters}
	needs := accum.Needs{Keep: true}
	for _, k := range opts.Errors {
		switch {
		case k.Name == "hc0" || k.Name == "hc1":
			needs.Fourth = kept.Fourth
		case k.Cluster >= 0:
			for _, key := range vcov.KeysOf(q.whole, k.Cluster) {
				if slices.Contains(kept.Clusters, key) && !slices.Contains(needs.Clusters, key) {
					needs.Clusters = append(needs.Clusters, key)
				}
			}
		}
	}
	if d := opts.Deal; d != nil && slices.Contains(kept.Clusters, d.Key) && !slices.Contains(needs.Clusters, d.Key) {
		needs.Clusters = append(needs.Clusters, d.Key)
	}
	state, err := accum.Load(ctx, q.whole, p.Meta.Header, p.Next, needs, accum.Options{Workers: s.workers, Memory: opts.Memory, Scratch: s.scratch})
	if err != nil {
		return nil, err
	}
	defer state.Close()
	identity := sumsIdentity(&p.Meta.Model, state)
	if rows != nil {
		if rows.Meta.Second.Of != identity {
			return nil, stream.Usef("%s is the second round of other digests than %s", two[0].Path, one[0].Path)
		}
		kept.Rows, kept.Next = rows.Meta.Second.Header, rows.Next
		for _, k := range rows.Meta.Second.Kinds {
			kept.Kinds = append(kept.Kinds, vcov.Kind{Name: k.Name, Cluster: k.Cluster})
		}
	}
	asked, err := state.Ask(q.design)
	if err != nil {
		return nil, stream.Usef("%s; the sums have the outcome %s and the terms %s", err, p.Meta.Model.Outcome, strings.Join(slices.Concat(p.Meta.Model.Terms, p.Meta.Model.Kept), ", "))
	}
	if asked != state && rows != nil {
		return nil, stream.Usef("a second round is for the coefficients of the whole model; leave out --outcome and --terms, or the digest %s", two[0].Path)
	}
	res, err := vcov.FitSums(ctx, asked, kept, opts)
	if err != nil {
		return nil, err
	}
	res.Input.Sums = &vcov.SumsFrom{Identity: identity, Digests: absolute(ones)}
	res.Input.Files, res.Input.Bytes = 0, 0
	for _, r := range p.Meta.Runs {
		res.Input.Files += len(r.Files)
		for _, f := range r.Files {
			res.Input.Bytes += max(0, f.Size)
		}
	}
	columns := make([]string, len(p.Meta.Model.Columns))
	for i, c := range p.Meta.Model.Columns {
		columns[i] = c.Name
	}
	if least, most := vcov.LostElsewhere(state, asked.Design, columns); most > 0 {
		res.Rows.LostElsewhere = &vcov.Lost{Least: least, Most: most}
		text := count(most)
		if least != most {
			text = fmt.Sprintf("between %s and %s", count(least), count(most))
		}
		res.Warnings = append(res.Warnings, vcov.Warning{Code: "lost-elsewhere",
			Text: fmt.Sprintf("%s rows were dropped for a missing cell in a column that this question does not read: digests use the rows in which all that they keep is there", text)})
	}
	res.Model.Errors = q.req.names()
	res.Model.BadRows = "stop"
	if res.Rows.Malformed > 0 {
		res.Model.BadRows = "skip"
	}
	res.Run.Seconds = vcov.Number(time.Since(start).Seconds())
	res.Run.Digests = len(names)
	res.Run.PeakBytes = peakBytes()
	return &fitted{res: res, req: q.req}, nil
}

// absolute makes paths absolute.
func absolute(names []string) []string {
	var out []string
	for _, n := range names {
		if path, err := filepath.Abs(n); err == nil {
			n = path
		}
		out = append(out, n)
	}
	return out
}

// question is what is asked of sums.
type question struct {
	req    request
	whole  *stream.Design // of the sums
	design *stream.Design // of the question
}

// question binds the options of s to what a digest holds; what s leaves open is as
// in the digest.
func (s *settings) question(m *digest.Meta, rows *digest.Pool) (*question, error) {
	for _, name := range dataOnly {
		if s.given(name) && !s.agrees(name, &m.Model) {
			return nil, stream.Usef("%s: fixed when the digest was made; leave it out", s.origin(name))
		}
	}
	q := &question{}
	var err error
	if q.whole, err = m.Model.Design(); err != nil {
		return nil, fmt.Errorf("the model of the digest: %w", err)
	}
	schema, err := m.Model.Schema()
	if err != nil {
		return nil, err
	}
	t := *s
	t.sweep = "" // that of the digest
	if !s.given("errors") {
		t.errors, t.from = sumsOf(m), map[string]string{"errors": "--errors"}
		if rows != nil {
			for _, e := range secondNames(rows.Meta) {
				if !slices.Contains(t.errors, e) {
					t.errors = append(t.errors, e)
				}
			}
		}
		if m.Model.WeightKind == "sampling" {
			t.errors = t.errors[1:]
		}
		if len(s.cluster) > 0 {
			t.errors = append(slices.DeleteFunc(t.errors, func(e string) bool { return strings.HasPrefix(e, "cr1(") }), "cr1")
		}
		if len(t.errors) == 0 {
			return nil, stream.Usef("the digest holds sums for no kind of errors that has a meaning under sampling weights")
		}
	}
	if q.req, err = t.parseErrors(); err != nil {
		return nil, err
	}
	spec := q.whole.Spec
	spec.Terms = m.Model.Terms
	if s.given("terms") {
		spec.Terms = s.terms
	}
	if s.outcome != "" {
		spec.Outcome = s.outcome
	}
	if q.design, err = stream.NewDesign(spec, schema); err != nil {
		return nil, fmt.Errorf("%w (a digest knows only the columns that it was made with)", err)
	}
	for i := range q.design.Keys {
		q.design.Keys[i] = q.whole.Keys[i]
	}
	return q, nil
}

// agrees reports whether an option says what is in the digest anyway, as one of a
// model file does that both were made with.
func (s *settings) agrees(name string, m *digest.Model) bool {
	switch name {
	case "no-constant":
		return s.noConstant == m.NoConstant
	case "sweep":
		return strings.Join(strings.Fields(s.sweep), "") == strings.Join(strings.Fields(m.Sweep), "")
	case "weight":
		return s.weight == m.Weight
	case "weight-kind":
		return s.weightKind == m.WeightKind
	case "where":
		return s.where == m.Where
	case "missing":
		return s.missing == m.Missing
	case "zone":
		return s.zone.String() == m.Zone
	}
	// How data are read does not matter any more, if a model file says it.
	return !strings.HasPrefix(s.origin(name), "--")
}

// key is the key of the digest that stands for a clustering of the request.
func (q *question) key(m *digest.Meta, cluster int) (int, error) {
	find := func(text string) (int, error) {
		for i := range m.Model.Keys {
			if strings.Join(strings.Fields(q.whole.Keys[i].Text), "") == strings.Join(strings.Fields(text), "") {
				return i, nil
			}
		}
		held := "none"
		if len(m.Model.Keys) > 0 {
			held = strings.Join(m.Model.Keys, ", ")
		}
		return 0, stream.Usef("the digest holds no sums of clusters by %s; it holds: %s. Make it with --errors \"cr1(%s)\"", text, held, text)
	}
	if cluster < len(q.req.keys) {
		return find(q.req.keys[cluster])
	}
	var dims []int
	for _, k := range q.req.crossed[cluster-len(q.req.keys)] {
		i, err := find(q.req.keys[k])
		if err != nil {
			return 0, err
		}
		dims = append(dims, i)
	}
	slices.Sort(dims)
	for i, c := range m.Model.Crossed {
		if slices.Equal(c, dims) {
			return len(m.Model.Keys) + i, nil
		}
	}
	return 0, stream.Usef("the digest holds no sums of clusters that %s share; make it with that kind among --errors", q.req.names()[0])
}
