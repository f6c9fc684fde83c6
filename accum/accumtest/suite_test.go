package accumtest

import (
	"context"
	"errors"
	"slices"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// inMemory joins tables by Header.Join and Record.Add alone.
func inMemory(t *testing.T, _ *stream.Design, tables ...*Table) (*Table, error) {
	out := &Table{}
	ids := make([][]string, len(tables))
	for i, x := range tables {
		h := cloneHeader(t, x.Header)
		for _, c := range h.Sections {
			ids[i] = append(ids[i], c.ID())
		}
		if i == 0 {
			out.Header = h
		} else if err := out.Header.Join(h); err != nil {
			return nil, err
		}
	}
	var all []string
	for _, c := range out.Header.Sections {
		all = append(all, c.ID())
	}
	at := func(scan int) int {
		return slices.IndexFunc(out.Runs, func(r Run) bool { return r.Scan == scan })
	}
	for _, x := range tables {
		for _, r := range x.Runs {
			if i := at(r.Scan); i >= 0 {
				out.Runs[i].Have = append(slices.Clone(out.Runs[i].Have), r.Have...)
			} else {
				out.Runs = append(out.Runs, r)
			}
		}
	}
	slices.SortFunc(out.Runs, func(a, b Run) int { return a.Scan - b.Scan })
	for i, x := range tables {
		for _, r := range x.Records {
			r = cloneRecord(r)
			if r.What == accum.SegmentCheck {
				r.Table = at(x.Runs[r.Table].Scan)
			} else {
				r.Section = slices.Index(all, ids[i][r.Section])
			}
			out.Records = append(out.Records, r)
		}
	}
	slices.SortStableFunc(out.Records, (*accum.Record).Compare)
	n := 0
	for _, r := range out.Records {
		if n > 0 && out.Records[n-1].Compare(r) == 0 {
			if err := out.Records[n-1].Add(r); err != nil {
				return nil, err
			}
			continue
		}
		out.Records[n] = r
		n++
	}
	out.Records = out.Records[:n]
	return out, nil
}

// Sums without a file.
func TestInMemory(t *testing.T) { TestJoin(t, inMemory) }

// loaded joins tables and has a state take them in: what it hands out are the same.
func loaded(t *testing.T, d *stream.Design, tables ...*Table) (*Table, error) {
	x, err := inMemory(t, d, tables...)
	if err != nil {
		return nil, err
	}
	h := cloneHeader(t, x.Header)
	n := 0
	next := func() (*accum.Record, error) {
		if n == len(x.Records) {
			return nil, nil
		}
		n++
		return cloneRecord(x.Records[n-1]), nil
	}
	needs := accum.Needs{Keep: true, Retain: true, Fourth: h.Fourth, Clusters: h.Clusters}
	s, err := accum.Load(context.Background(), d, h, next, needs, accum.Options{Workers: 1, Memory: 64 << 20})
	if none := new(accum.NoRowsError); errors.As(err, &none) && len(h.Sections) == 0 {
		return x, nil // no state to make
	}
	if err != nil {
		return nil, err
	}
	defer s.Close()
	out := Keep(t, s, 0, 0, 1)
	out.Runs = x.Runs
	if what := Differs(t, out, x); what != "" {
		t.Fatalf("from records to a state and back: %s", what)
	}
	return out, nil
}

// Records of a state that was made from records.
func TestLoaded(t *testing.T) { TestJoin(t, loaded) }

// The suite must notice every law that is broken.
func TestSuiteNotices(t *testing.T) {
	s := Shapes()[1]
	d := s.Design(t)
	a, b := s.Scan(t, d, 1, 0, 1, 1), s.Scan(t, d, 2, 0, 1, 1)
	if Differs(t, a, b) == "" || Differs(t, a, a.Clone(t)) != "" {
		t.Fatal("tables are not told apart")
	}
	for _, change := range []func(x *Table){
		func(x *Table) { x.Header.Tally.Used++ },
		func(x *Table) { x.Header.Sections[0].Rows++ },
		func(x *Table) { x.Records[20].Sums[0][15]++ },
		func(x *Table) { x.Records[20].Unit++ },
		func(x *Table) { x.Records = x.Records[1:] },
	} {
		c := a.Clone(t)
		change(c)
		if Differs(t, a, c) == "" {
			t.Error("a change is not noticed")
		}
	}
}
