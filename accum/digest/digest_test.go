package digest

import (
	"fmt"
	"path/filepath"
	"slices"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/accumtest"
	"github.com/tallrow/tallrow/stream"
)

// keep writes a table to a file.
func keep(t testing.TB, name string, m Model, x *accumtest.Table) string {
	t.Helper()
	w, err := Create(name)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range x.Records {
		if err := w.Write(r); err != nil {
			t.Fatal(err)
		}
	}
	meta := &Meta{Format: Format, Version: "test", Model: m, Header: x.Header}
	for _, r := range x.Runs {
		meta.Runs = append(meta.Runs, &Run{ID: fmt.Sprintf("%04d/%d", r.Scan, r.Parts), Parts: r.Parts, Have: r.Have, Files: []File{}})
	}
	if err := w.Close(meta); err != nil {
		t.Fatal(err)
	}
	return name
}

// table reads all records that next hands out.
func table(m *Meta, next func() (*accum.Record, error)) (*accumtest.Table, error) {
	x := &accumtest.Table{Header: m.Header}
	for _, r := range m.Runs {
		q := accumtest.Run{Parts: r.Parts, Have: r.Have}
		if _, err := fmt.Sscanf(r.ID, "%d/", &q.Scan); err != nil {
			return nil, err
		}
		x.Runs = append(x.Runs, q)
	}
	for {
		r, err := next()
		if err != nil {
			return nil, err
		}
		if r == nil {
			return x, nil
		}
		c := *r
		c.Key, c.Sums = slices.Clone(r.Key), slices.Clone(r.Sums)
		x.Records = append(x.Records, &c)
	}
}

func openAll(t testing.TB, names []string) []*Reader {
	t.Helper()
	var rs []*Reader
	for _, n := range names {
		r, err := Open(n)
		if err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { r.Close() })
		rs = append(rs, r)
	}
	return rs
}

// joined pools tables through files.
func joined(t *testing.T, d *stream.Design, tables ...*accumtest.Table) (*accumtest.Table, error) {
	t.Helper()
	dir := t.TempDir()
	schema := accumtest.Schema()
	m := NewModel(d, &schema, 0)
	var names []string
	for i, x := range tables {
		names = append(names, keep(t, filepath.Join(dir, fmt.Sprint(i)), m, x))
	}
	rs := openAll(t, names)
	p, err := NewPool(rs)
	if err != nil {
		return nil, err
	}
	x, err := table(p.Meta, p.Next)
	if err != nil {
		return nil, err
	}
	// What was joined can be kept and is the same then.
	r := openAll(t, []string{keep(t, filepath.Join(dir, "all"), m, x)})[0]
	y, err := table(&r.Meta, r.Next)
	if err != nil {
		return nil, err
	}
	if what := accumtest.Differs(t, x, y); what != "" {
		t.Fatalf("kept and read again: %s", what)
	}
	return x, nil
}

func TestPoolLaws(t *testing.T) { accumtest.TestJoin(t, joined) }
