// Package accumtest holds whatever joins tables of keyed moment sums to the laws of
// joining.
//
// A table is an accum.Header and its accum.Records, as one or several scans leave
// them. Laws, for each of Designs:
//
//	L1  parts joined are the whole, bit for bit, however many parts
//	L2  order does not show: any permutation of the tables
//	L3  grouping does not show: tables joined of joined tables
//	L4  a table without rows changes nothing but counts, on either side
//	L5  the tables that go in stay as they are
//	L6  a table alone is itself
//	L7  a table twice is refused, and one of other sums or another width
package accumtest

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Table is a table of sums. Runs are the scans whose sums it holds, in ascending order
// of Scan: their places are Table of the records of segments.
type Table struct {
	Header  *accum.Header
	Records []*accum.Record
	Runs    []Run
}

// Run is a scan in Parts parts of which those in Have are there.
type Run struct {
	Scan  int
	Parts int
	Have  []int
}

// Join is what is under test: the sum of tables of the design. It must not keep
// hold of them.
type Join func(t *testing.T, d *stream.Design, tables ...*Table) (*Table, error)

// Shape is a design with its data.
type Shape struct {
	Name   string
	Spec   stream.Spec
	Rows   int
	Pipe   bool // the data can be read once and not be sampled
	Change func(cols map[string]*stream.Vector)
	// OneFrame says that only tables of one frame have a sum.
	OneFrame bool

	Arithmetic accum.Arithmetic
}

// Shapes are the designs that a table of sums can have.
func Shapes() []Shape {
	keys := []string{"quay", "gate", "tide", "wet", "start", "barge"} // a key of every kind
	return []Shape{
		{Name: "numbers", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "pallets * tonnes"}}},
		{Name: "no constant", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, NoConstant: true, Keys: []string{"quay"}}},
		{Name: "frequency", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Weight: "crew", WeightKind: stream.Frequency, Keys: []string{"quay"}}},
		{Name: "precision", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Weight: "tonnes", WeightKind: stream.Precision, Keys: []string{"quay"}}},
		{Name: "sampling", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Weight: "1 / crew", WeightKind: stream.Sampling, Keys: []string{"barge"}}},
		{Name: "one category", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "each(barge)"}}},
		{Name: "two categories", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "each(barge)", "each(quay)"}}},
		{Name: "crossed categories", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"each(barge)", "each(barge) * each(quay)"}}},
		{Name: "products", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "each(barge) * pallets", "each(quay) * each(wet) * tonnes"}, Weight: "crew", WeightKind: stream.Precision}},
		{Name: "clusters", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: keys}},
		{Name: "crossed clusters", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Keys: []string{"quay", "barge", "start"}, Crossed: [][]int{{0, 1}, {0, 1, 2}}}},
		{Name: "extended", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "pow(pallets, 2)", "pow(pallets, 3)"}, Keys: []string{"quay"}}, Arithmetic: accum.Extended},
		{Name: "pipe", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{"quay", "barge"}}, Pipe: true, Rows: 6000},
		{Name: "pipe of categories", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "each(barge)"}}, Pipe: true, Rows: 6000},
		{Name: "where", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Where: "quay > 5", Keys: []string{"quay"}}},
		{Name: "missing cells", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{"barge"}}, Change: func(c map[string]*stream.Vector) {
			for i := range c["pallets"].F64 {
				if i%7 == 0 {
					c["pallets"].F64[i] = math.NaN()
				}
				if i%11 == 0 {
					c["barge"].Code[i] = -1
				}
			}
		}},
		{Name: "all missing", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Keys: []string{"quay"}}, Change: func(c map[string]*stream.Vector) {
			for i := range c["pallets"].F64 {
				c["pallets"].F64[i] = math.NaN()
			}
		}},
		{Name: "no rows", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Keys: []string{"quay"}}, Rows: -1},
		{Name: "swept", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Sweep: "barge", Keys: []string{"barge"}}, OneFrame: true},
		{Name: "swept, extended", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Sweep: "quay", Keys: []string{"quay"}}, OneFrame: true, Arithmetic: accum.Extended},
		{Name: "wide numbers", Spec: stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes"}, Keys: []string{"quay"}}, Change: func(c map[string]*stream.Vector) {
			for i := range c["tonnes"].F64 {
				c["tonnes"].F64[i] = math.Ldexp(c["tonnes"].F64[i], i%90)
			}
		}},
	}
}

const segmentRows = 128

// Schema is that of the data of all shapes.
func Schema() stream.Schema {
	return stream.Schema{Columns: []stream.Column{{Name: "minutes", Kind: stream.Float64}, {Name: "pallets", Kind: stream.Float64}, {Name: "tonnes", Kind: stream.Float64}, {Name: "crew", Kind: stream.Float64},
		{Name: "quay", Kind: stream.Int64}, {Name: "gate", Kind: stream.Uint64}, {Name: "tide", Kind: stream.Float64}, {Name: "wet", Kind: stream.Bool}, {Name: "start", Kind: stream.Time}, {Name: "barge", Kind: stream.Text}}}
}

// Source makes data for a shape, others for each seed.
func (s *Shape) Source(seed uint64) stream.Source {
	rng := rand.New(rand.NewPCG(seed, 3))
	n := s.Rows
	switch {
	case n < 0:
		n = 0
	case n == 0:
		n = 1500
	}
	schema := Schema()
	cols := make([]stream.Vector, len(schema.Columns))
	names := map[string]*stream.Vector{}
	for j := range cols {
		cols[j].Kind = schema.Columns[j].Kind
		names[schema.Columns[j].Name] = &cols[j]
		switch cols[j].Kind {
		case stream.Float64:
			cols[j].F64 = []float64{}
		case stream.Text:
			cols[j].Code, cols[j].Dict = []int32{}, &stream.Dict{Values: []string{"Zander", "Aal", "", "Hecht", "Äsche", "Barbe\x00"}}
		default:
			cols[j].I64 = []int64{}
		}
	}
	for range n {
		pallets, tonnes, crew := float64(1+rng.IntN(40)), 3*rng.ExpFloat64()+0.1, float64(1+rng.IntN(5))
		quay, barge := int64(rng.IntN(23)), int32(rng.IntN(6))
		for name, x := range map[string]float64{"minutes": 20 + 3*pallets - crew + float64(quay%5) + tonnes*rng.NormFloat64(), "pallets": pallets, "tonnes": tonnes, "crew": crew, "tide": float64(rng.IntN(9)-4) / 4} {
			names[name].F64 = append(names[name].F64, x)
		}
		names["barge"].Code = append(names["barge"].Code, barge)
		for name, x := range map[string]int64{"quay": quay - 7, "gate": -1 - quay, "wet": int64(rng.IntN(2)), "start": (rng.Int64N(30) - 10) * 86_400_000_000_000} {
			names[name].I64 = append(names[name].I64, x)
		}
	}
	if s.Change != nil {
		s.Change(names)
	}
	src := stream.NewMemory(schema, cols, segmentRows)
	if s.Pipe {
		return once{src}
	}
	return src
}

// once is a source that cannot be sampled.
type once struct{ stream.Source }

func (o once) Info() stream.Info {
	i := o.Source.Info()
	i.Sampled, i.Rewindable = false, false
	return i
}

// Design binds the shape.
func (s *Shape) Design(t *testing.T) *stream.Design {
	t.Helper()
	src := s.Source(1)
	d, err := stream.NewDesign(s.Spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// Needs are all sums that the shape can have.
func (s *Shape) Needs(d *stream.Design) accum.Needs {
	n := accum.Needs{Keep: true, Retain: true}
	switch {
	case d.Sweep >= 0:
		n.Clusters = []int{d.Sweep}
	case len(d.Categories) == 0:
		n.Fourth = true
		for k := range d.Keys {
			n.Clusters = append(n.Clusters, k)
		}
	}
	return n
}

// Scan sums part i of n of the data of a seed.
func (s *Shape) Scan(t *testing.T, d *stream.Design, seed uint64, i, n, workers int) *Table {
	t.Helper()
	src := s.Source(seed)
	if n > 1 {
		src = stream.Part(src, i, n)
	}
	state, err := accum.First(t.Context(), src, d, s.Needs(d), accum.Options{Workers: workers, Memory: 64 << 20, Arithmetic: s.Arithmetic})
	if err != nil {
		t.Fatal(err)
	}
	defer state.Close()
	return Keep(t, state, int(seed), i, n)
}

// Keep copies the sums of a state.
func Keep(t testing.TB, state *accum.State, scan, i, n int) *Table {
	t.Helper()
	out := &Table{Header: cloneHeader(t, state.Header()), Runs: []Run{{scan, n, []int{i}}}}
	if err := state.Records(func(r *accum.Record) error {
		out.Records = append(out.Records, cloneRecord(r))
		return nil
	}, nil); err != nil {
		t.Fatal(err)
	}
	return out
}

// Clone copies a table.
func (x *Table) Clone(t *testing.T) *Table {
	out := &Table{Header: cloneHeader(t, x.Header)}
	for _, r := range x.Runs {
		out.Runs = append(out.Runs, Run{r.Scan, r.Parts, slices.Clone(r.Have)})
	}
	for _, r := range x.Records {
		out.Records = append(out.Records, cloneRecord(r))
	}
	return out
}

func cloneHeader(t testing.TB, h *accum.Header) *accum.Header {
	t.Helper()
	text, err := json.Marshal(h)
	if err != nil {
		t.Fatal(err)
	}
	out := new(accum.Header)
	if err := json.Unmarshal(text, out); err != nil {
		t.Fatal(err)
	}
	return out
}

func cloneRecord(r *accum.Record) *accum.Record {
	c := *r
	c.Key, c.Sums = slices.Clone(r.Key), slices.Clone(r.Sums)
	return &c
}

// Differs names the first difference of the sums of two tables, "" if there is none.
func Differs(t *testing.T, a, b *Table) string {
	t.Helper()
	x, err := json.Marshal(a.Header)
	if err != nil {
		t.Fatal(err)
	}
	y, err := json.Marshal(b.Header)
	if err != nil {
		t.Fatal(err)
	}
	if string(x) != string(y) {
		return fmt.Sprintf("headers differ:\n%s\n%s", x, y)
	}
	if len(a.Records) != len(b.Records) {
		return fmt.Sprintf("%d records and %d", len(a.Records), len(b.Records))
	}
	for i, r := range a.Records {
		o := b.Records[i]
		if r.Compare(o) != 0 || r.Label != o.Label || r.Rows != o.Rows || r.Unit != o.Unit || !slices.Equal(r.Sums, o.Sums) {
			return fmt.Sprintf("record %d is %+v and %+v", i, r, o)
		}
	}
	return ""
}

// TestJoin runs the laws over all shapes.
func TestJoin(t *testing.T, join Join) {
	for _, s := range Shapes() {
		t.Run(s.Name, func(t *testing.T) {
			t.Parallel()
			s.laws(t, join)
		})
	}
}

func (s *Shape) laws(t *testing.T, join Join) {
	d := s.Design(t)
	must := func(tables ...*Table) *Table {
		t.Helper()
		out, err := join(t, d, tables...)
		if err != nil {
			t.Fatal(err)
		}
		return out
	}
	same := func(law string, a, b *Table) {
		t.Helper()
		if what := Differs(t, a, b); what != "" {
			t.Fatalf("%s: %s", law, what)
		}
	}
	whole := s.Scan(t, d, 1, 0, 1, 2)
	same("L6: alone", must(whole), whole)

	rng := rand.New(rand.NewPCG(11, 12))
	var parts []*Table
	if !s.Pipe { // a pipe cannot be read in parts
		for _, n := range []int{2, 3, 7} {
			parts = nil
			for i := range n {
				parts = append(parts, s.Scan(t, d, 1, i, n, 1+i%3))
			}
			rng.Shuffle(n, func(i, j int) { parts[i], parts[j] = parts[j], parts[i] })
			same(fmt.Sprintf("L1: %d parts", n), must(parts...), whole)
		}
	}

	tables := slices.Clone(parts)
	if s.Pipe {
		tables = append(tables, whole)
	}
	if !s.OneFrame {
		tables = append(tables, s.Scan(t, d, 2, 0, 1, 1), s.Scan(t, d, 3, 0, 1, 3))
	}
	for i, x := range tables { // rows that could not be read, more than are kept
		for j := range 3 {
			x.Header.Problems = append(x.Header.Problems, &stream.RowError{Pos: stream.Position{File: "day.csv", Line: int64(7*j + i)}, Found: fmt.Sprint(i), Want: "a number"})
		}
	}
	var before []*Table
	for _, x := range tables {
		before = append(before, x.Clone(t))
	}
	all := must(tables...)
	for i, x := range tables {
		same("L5: argument", x, before[i])
	}
	for range 2 {
		rng.Shuffle(len(tables), func(i, j int) { tables[i], tables[j] = tables[j], tables[i] })
		same("L2: order", must(tables...), all)
		group := slices.Clone(tables)
		for len(group) > 1 {
			n := 1 + rng.IntN(min(4, len(group)))
			joined := must(group[:n]...)
			group = append(group[n:], joined)
		}
		same("L3: grouping", group[0], all)
	}

	none := Shape{Spec: s.Spec, Rows: -1, Pipe: s.Pipe, Arithmetic: s.Arithmetic}
	empty := none.Scan(t, d, 4, 0, 1, 1)
	same("L4: empty behind", must(all, empty), all)
	same("L4: empty before", must(empty, all), all)

	if len(whole.Header.Sections) == 0 {
		return
	}
	if _, err := join(t, d, whole, whole); err == nil {
		t.Error("L7: a table was joined to itself")
	}
	other := s.Scan(t, d, 5, 0, 1, 1)
	other.Header.Fourth = !other.Header.Fourth
	if _, err := join(t, d, whole, other); err == nil {
		t.Error("L7: tables of different sums were joined")
	}
	for _, what := range []accum.What{accum.SecondMoment, accum.LevelSums, accum.ClusterSums, accum.UnitSums} {
		bad := s.Scan(t, d, 1, 0, 1, 1)
		i := slices.IndexFunc(bad.Records, func(r *accum.Record) bool { return r.What == what })
		if i < 0 {
			continue
		}
		bad.Records = slices.DeleteFunc(bad.Records, func(r *accum.Record) bool { return r.What == accum.SegmentCheck })
		i = slices.IndexFunc(bad.Records, func(r *accum.Record) bool { return r.What == what })
		bad.Runs[0].Scan = 6
		if what == accum.SecondMoment {
			bad.Records[i].Unit++
		} else {
			bad.Records[i].Sums = append(bad.Records[i].Sums, accum.Whole{})
		}
		if _, err := join(t, d, whole, bad); err == nil {
			t.Errorf("L7: %s sums of another width were joined", what)
		}
	}
}
