package digest

import (
	"cmp"
	"errors"
	"fmt"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/accum"
)

// Pool is the sum of several digests: a stream of the records of all, added where
// they have the same place. It holds one record of each digest at a time. The result
// does not depend on order or grouping.
type Pool struct {
	Meta    *Meta
	readers []*Reader
	heap    []*feed
	rec     accum.Record
	quotes  *quoteChain // nil when all segments have been seen
}

// feed is the records of one digest, with places in the pool.
type feed struct {
	r        *Reader
	sections []int
	runs     []int
	rec      accum.Record
}

// PoolError says why digests do not go together.
type PoolError struct{ Msg string }

func (e *PoolError) Error() string { return e.Msg }

// Together checks from their descriptions alone whether digests go together, and
// returns what all of them are: NewPool without headers and sums. Readers may be
// closed.
//
// Errors: *PoolError for another model, a part that is there twice, sources that
// overlap.
func Together(readers []*Reader) (*Meta, error) {
	if len(readers) == 0 {
		return nil, &PoolError{"no digests"}
	}
	first := readers[0]
	m := &Meta{Format: Format, Version: first.Meta.Version, Model: first.Meta.Model}
	runs := map[string]*Run{}
	from := map[string]map[int]string{} // run and part: the file that has it
	type claim struct{ run, path string }
	paths, sums, cells := map[string]claim{}, map[string]claim{}, map[string]string{}
	for _, r := range readers {
		if a, b := r.Meta.Model.Fingerprint(), first.Meta.Model.Fingerprint(); a != b {
			return nil, &PoolError{fmt.Sprintf("%s and %s are of different models: %s", first.Path, r.Path, first.Meta.Model.Differs(&r.Meta.Model))}
		}
		if (r.Meta.Second == nil) != (first.Meta.Second == nil) {
			return nil, &PoolError{fmt.Sprintf("%s and %s are of different rounds; fit takes both, pool one", first.Path, r.Path)}
		}
		m.Version = max(m.Version, r.Meta.Version)
		for _, run := range r.Meta.Runs {
			have := runs[run.ID]
			if have == nil {
				have = &Run{ID: run.ID, Parts: run.Parts, Files: run.Files, Content: run.Content}
				runs[run.ID], from[run.ID] = have, map[int]string{}
				for _, f := range run.Files {
					same := fmt.Sprint(f.Size, " ", f.Checksum)
					if c, ok := paths[f.Path]; ok && f.Checksum != "" && c.run != run.ID {
						what := ""
						if s, ok := sums[same]; !ok || s.run != c.run {
							what = ", which was not the same then; if it held other rows, give it a name of its own and make its digest again"
						}
						return nil, &PoolError{fmt.Sprintf("%s and %s overlap: both have read %s%s", c.path, r.Path, f.Path, what)}
					}
					if c, ok := sums[same]; ok && f.Checksum != "" && !f.Empty && c.run != run.ID {
						return nil, &PoolError{fmt.Sprintf("%s and %s overlap: %s has the content of a file that the other has read", c.path, r.Path, f.Path)}
					}
					paths[f.Path], sums[same] = claim{run.ID, r.Path}, claim{run.ID, r.Path}
				}
				if c, ok := cells[run.Content]; ok && run.Content != "" {
					return nil, &PoolError{fmt.Sprintf("%s and %s overlap: they have used the same cells, perhaps once from a file and once from a pipe", c, r.Path)}
				}
				cells[run.Content] = r.Path
			}
			if have.Parts != run.Parts {
				return nil, &PoolError{fmt.Sprintf("%s: found a run in %d parts, want %d as in another digest", r.Path, run.Parts, have.Parts)}
			}
			for _, i := range run.Have {
				if f, ok := from[run.ID][i]; ok {
					return nil, &PoolError{fmt.Sprintf("part %d of %d is there twice: in %s and in %s", i, run.Parts, f, r.Path)}
				}
				from[run.ID][i] = r.Path
				have.Have = append(have.Have, i)
			}
		}
	}
	for _, r := range runs {
		slices.Sort(r.Have)
		m.Runs = append(m.Runs, r)
	}
	slices.SortFunc(m.Runs, func(a, b *Run) int { return cmp.Compare(a.ID, b.ID) })
	return m, nil
}

// NewPool joins digests of one model over disjoint rows. Reader.Meta of them is of no
// more use afterwards.
//
// Errors: those of Together and of the files.
func NewPool(readers []*Reader) (*Pool, error) {
	m, err := Together(readers)
	if err != nil {
		return nil, err
	}
	first := readers[0]
	p := &Pool{readers: readers, Meta: m}
	if first.Meta.Second != nil {
		return p, p.secondRound()
	}
	p.quotes = &quoteChain{runs: p.Meta.Runs}
	ids := make([][]string, len(readers))
	for i, r := range readers {
		for _, c := range r.Meta.Header.Sections {
			ids[i] = append(ids[i], c.ID())
		}
		if i == 0 {
			p.Meta.Header = r.Meta.Header
		} else if err := p.Meta.Header.Join(r.Meta.Header); err != nil {
			return nil, &PoolError{fmt.Sprintf("%s and %s: %s", first.Path, r.Path, err)}
		}
	}
	var all []string
	for _, c := range p.Meta.Header.Sections {
		all = append(all, c.ID())
	}
	for i, r := range readers {
		f := &feed{r: r}
		for _, id := range ids[i] {
			f.sections = append(f.sections, slices.Index(all, id))
		}
		for _, run := range r.Meta.Runs {
			f.runs = append(f.runs, slices.IndexFunc(p.Meta.Runs, func(x *Run) bool { return x.ID == run.ID }))
		}
		if err := p.push(f); err != nil {
			return nil, err
		}
	}
	p.heapify()
	return p, nil
}

func (p *Pool) push(f *feed) error {
	ok, err := f.next()
	if ok {
		p.heap = append(p.heap, f)
	}
	return err
}

func (p *Pool) heapify() {
	for i := len(p.heap)/2 - 1; i >= 0; i-- {
		p.sink(i)
	}
}

// secondRound joins digests of a second round: their places are those of the first.
func (p *Pool) secondRound() error {
	first := p.readers[0]
	all := *first.Meta.Second
	places := map[string]int{}
	for i, r := range p.readers {
		s := r.Meta.Second
		switch {
		case s.Of != all.Of:
			return &PoolError{fmt.Sprintf("%s and %s are of different first rounds", first.Path, r.Path)}
		case !slices.Equal(s.Kinds, all.Kinds):
			return &PoolError{fmt.Sprintf("%s and %s were made for different kinds of errors", first.Path, r.Path)}
		}
		for j, run := range r.Meta.Runs {
			places[run.ID] = s.Places[j]
		}
		if i > 0 {
			if err := all.Header.Join(s.Header); err != nil {
				return &PoolError{fmt.Sprintf("%s and %s: %s", first.Path, r.Path, err)}
			}
		}
		if err := p.push(&feed{r: r}); err != nil {
			return err
		}
	}
	all.Places = nil
	for _, run := range p.Meta.Runs {
		all.Places = append(all.Places, places[run.ID])
	}
	p.Meta.Second = &all
	p.heapify()
	return nil
}

// next reads a record and moves it to its place in the pool.
func (f *feed) next() (bool, error) {
	r, err := f.r.Next()
	if r == nil || err != nil {
		return false, err
	}
	to := func(x *int, places []int) error {
		if *x < 0 || *x >= len(places) {
			return &DamageError{f.r.Path, "a row names a section or run that is not there"}
		}
		*x = places[*x]
		return nil
	}
	if f.r.Meta.Second != nil {
		err = nil // places are those of the first round
	} else if r.What == accum.SegmentCheck {
		err = to(&r.Table, f.runs)
	} else {
		err = to(&r.Section, f.sections)
	}
	f.rec, *r = *r, f.rec // keeps what both have allocated
	return err == nil, err
}

// Next returns the next record, nil after the last. It is valid until the next call.
//
// Errors: *PoolError for a segment that is there twice, *QuoteError for one that was not
// read from where it begins; *DamageError; those of the files.
func (p *Pool) Next() (*accum.Record, error) {
	r, err := p.merge()
	if err != nil || p.quotes == nil {
		return r, err
	}
	if r != nil && r.What == accum.SegmentCheck {
		err = p.quotes.see(r)
	} else {
		err = p.quotes.end()
		p.quotes = nil
	}
	if err != nil {
		return nil, err
	}
	return r, nil
}

// merge adds the records of one place.
func (p *Pool) merge() (*accum.Record, error) {
	if len(p.heap) == 0 {
		return nil, nil
	}
	n := 0
	for len(p.heap) > 0 && (n == 0 || p.heap[0].rec.Compare(&p.rec) == 0) {
		f := p.heap[0]
		if n == 0 {
			p.rec, f.rec = f.rec, p.rec
		} else if err := p.rec.Add(&f.rec); err != nil {
			if errors.Is(err, accum.ErrTwice) {
				err = &PoolError{fmt.Sprintf("%s: segment %s of its input is also in another digest", f.r.Path, f.rec.Label)}
			}
			return nil, err
		}
		n++
		ok, err := f.next()
		if err != nil {
			return nil, err
		}
		if !ok {
			p.heap[0] = p.heap[len(p.heap)-1]
			p.heap = p.heap[:len(p.heap)-1]
		}
		p.sink(0)
	}
	return &p.rec, nil
}

func (p *Pool) sink(i int) {
	h := p.heap
	for {
		j := 2*i + 1
		if j >= len(h) {
			return
		}
		if j+1 < len(h) && h[j+1].rec.Compare(&h[j].rec) < 0 {
			j++
		}
		if h[j].rec.Compare(&h[i].rec) >= 0 {
			return
		}
		h[i], h[j] = h[j], h[i]
		i = j
	}
}

// MissingError lists the parts of runs that are not there.
type MissingError struct{ Runs []*Run }

func (e *MissingError) Error() string {
	var list []string
	for _, r := range e.Runs {
		list = append(list, fmt.Sprintf("part(s) %s of %d", numbers(r.Missing()), r.Parts))
	}
	return "incomplete: " + strings.Join(list, "; ") + " missing"
}

// numbers gives "0, 3 and 12 more".
func numbers(list []int) string {
	var out []string
	for i, x := range list {
		if i == 20 {
			out = append(out, fmt.Sprintf("and %d more", len(list)-i))
			break
		}
		out = append(out, fmt.Sprint(x))
	}
	return strings.Join(out, ", ")
}

// Complete returns a *MissingError if parts of a run are missing.
func (p *Pool) Complete() error {
	var e MissingError
	for _, r := range p.Meta.Runs {
		if len(r.Missing()) > 0 {
			e.Runs = append(e.Runs, r)
		}
	}
	if e.Runs == nil {
		return nil
	}
	return &e
}
