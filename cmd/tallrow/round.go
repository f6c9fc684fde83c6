package main

import (
	"context"
	"encoding/json"
	"fmt"
	"os"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// firstRound is what a result says of the digests it came from.
type firstRound struct {
	meta  *digest.Meta
	state *accum.State
}

// readRound loads the sums that a result was made from, for the design of the data,
// whose model m must be that of the digests.
func (a *app) readRound(ctx context.Context, s *settings, d *stream.Design, m *digest.Model, o vcov.Options) (*firstRound, error) {
	from := s.origin("at") + " " + s.at
	text, err := os.ReadFile(s.at)
	if err != nil {
		return nil, stream.Usef("%s: %s", from, plainPathError(err))
	}
	var res struct {
		Format string `json:"format"`
		Input  struct {
			Sums *vcov.SumsFrom `json:"sums"`
		} `json:"input"`
	}
	if err := json.Unmarshal(text, &res); err != nil || res.Format != vcov.Format {
		return nil, stream.Usef("%s: found no result, want what tallrow fit --json has printed", from)
	}
	if res.Input.Sums == nil {
		return nil, stream.Usef("%s: is a fit of data, want one of digests: the first round", from)
	}
	rs, _, shut, err := a.openDigests(ctx, s, res.Input.Sums.Digests)
	if err != nil {
		return nil, fmt.Errorf("%s: the digests of the first round: %w", from, err)
	}
	defer shut()
	p, err := digest.NewPool(rs)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", from, err)
	}
	if err := p.Complete(); err != nil {
		return nil, err
	}
	if what := p.Meta.Model.Differs(m); what != "" {
		return nil, stream.Usef("%s is of another model: %s", from, what)
	}
	state, err := accum.Load(ctx, d, p.Meta.Header, p.Next, accum.Needs{Keep: true, Retain: true}, accum.Options{Workers: o.Workers, Memory: o.Memory, Scratch: o.Scratch})
	if err != nil {
		return nil, fmt.Errorf("%s: %w", from, err)
	}
	if id := sumsIdentity(&p.Meta.Model, state); id != res.Input.Sums.Identity {
		state.Close()
		return nil, fmt.Errorf("%s: its digests are not what they were when it was made, want those", from)
	}
	return &firstRound{p.Meta, state}, nil
}

// sumsIdentity says of which model, rows and frames sums are.
func sumsIdentity(m *digest.Model, s *accum.State) string {
	return hash(m.Fingerprint(), s.Identity())
}

// sameFiles finds the run of the first round that read files.
func sameFiles(m *digest.Meta, files []digest.File) int {
	return slices.IndexFunc(m.Runs, func(r *digest.Run) bool {
		return slices.EqualFunc(r.Files, files, func(a, b digest.File) bool {
			return a.Size == b.Size && a.Checksum == b.Checksum && (a.Checksum != "" || a.Path == b.Path)
		})
	})
}

// secondRound makes a digest of row sums at the coefficients of a first round.
func (a *app) secondRound(ctx context.Context, s *settings) (*made, error) {
	hide, by, err := s.hiding()
	if err != nil {
		return nil, err
	}
	p, err := a.prepare(ctx, s)
	if err != nil {
		return nil, err
	}
	defer p.src.Close()
	if !p.src.Info().Rewindable {
		return nil, stream.Usef("--at: this input can be read only once, and the first round has read it")
	}
	if err := a.openCheckpoint(ctx, s, p, "digest", onDigest); err != nil {
		return nil, err
	}
	o := p.opts
	o.Errors = slices.DeleteFunc(slices.Clone(p.req.kinds), func(k vcov.Kind) bool { return k.Name == "classical" })
	if len(o.Errors) == 0 {
		return nil, stream.Usef("--at: classical errors need no second round; ask for others with --errors")
	}
	files, err := s.inputFiles(ctx)
	if err != nil {
		return nil, err
	}
	stamp, err := p.src.Stamp()
	if err != nil {
		return nil, err
	}
	model := digest.NewModel(p.design, p.src.Schema(), len(s.keep))
	if hide != nil {
		if err := hideKeys(&model, p.design, p.req.kinds, by); err != nil {
			return nil, err
		}
	}
	first, err := a.readRound(ctx, s, p.design, &model, o)
	if err != nil {
		return nil, err
	}
	defer first.state.Close()
	run := sameFiles(first.meta, files)
	if run < 0 {
		return nil, stream.Usef("--at %s: these files are not an input of the first round as it was", s.at)
	}
	w, err := digest.Create(s.output)
	if err != nil {
		return nil, fmt.Errorf("%s %s: %s", s.origin("output"), s.output, plainPathError(err))
	}
	defer a.onExit(w.Abort)()
	parts, src := max(1, s.parts), p.src
	if parts > 1 {
		src = stream.Part(src, s.part, parts)
	}
	stop := a.watch(s, o.Meter)
	sums, err := vcov.SecondRound(ctx, src, first.state, accum.RunBase(run), o)
	stop()
	if err != nil {
		return nil, err
	}
	defer sums.Close()
	m := &digest.Meta{Format: digest.Format, Version: vcov.Version, Model: model,
		Second: &digest.Second{Of: sumsIdentity(&first.meta.Model, first.state), Header: sums.RowHeader()}}
	for _, k := range o.Errors {
		m.Second.Kinds = append(m.Second.Kinds, digest.Kind{Name: k.Name, Cluster: k.Cluster})
	}
	r := &digest.Run{Parts: parts, Have: []int{s.part}, Files: files, ID: hash(model.Fingerprint(), stamp, fmt.Sprint(parts), m.Second.Of)}
	m.Runs = []*digest.Run{r}
	m.Second.Places = []int{run}
	veil, kinds := hidden(p.design, &model, hide)
	if veil != nil {
		m.Second.Header.Conceal(kinds, veil)
	}
	d, err := s.finish(w, m, sums.Records(run, w.Write, veil))
	if err != nil {
		return nil, err
	}
	d.done = p.done
	return d, nil
}

// splitRounds parts digests into those of first and second rounds.
func splitRounds(rs []*digest.Reader) (first, second []*digest.Reader) {
	for _, r := range rs {
		if r.Meta.Second != nil {
			second = append(second, r)
		} else {
			first = append(first, r)
		}
	}
	return first, second
}

// secondNames gives the kinds of a second round as words.
func secondNames(m *digest.Meta) []string {
	var out []string
	for _, k := range m.Second.Kinds {
		switch keys := m.Model.Keys; {
		case k.Cluster < 0:
			out = append(out, k.Name)
		case k.Cluster < len(keys):
			out = append(out, k.Name+"("+keys[k.Cluster]+")")
		default:
			var names []string
			for _, c := range m.Model.Crossed[k.Cluster-len(keys)] {
				names = append(names, keys[c])
			}
			out = append(out, k.Name+"("+strings.Join(names, ", ")+")")
		}
	}
	return out
}
