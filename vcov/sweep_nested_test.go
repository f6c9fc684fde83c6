package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// berths is a panel whose cranes lie in many quays, some of which have no crane but of
// one row. Cranes and quays are numbers, times and texts.
func berths(seed uint64, cranes, quays int) (*table, stream.Spec) {
	p := drawPanel(rand.New(rand.NewPCG(seed, 1)), cranes, stream.NoWeight)
	count := map[int64]int{}
	for _, c := range p.crane {
		count[c]++
	}
	names, places, depth := make([]string, len(p.y)), make([]string, len(p.y)), make([]float64, len(p.y))
	for i, c := range p.crane {
		p.quay[i] = (c / 7 * 31) % int64(quays)
		if count[c] == 1 {
			p.quay[i] += int64(quays) * (c % 2)
		}
		names[i], places[i], depth[i] = fmt.Sprintf("crane of the north %d", c), fmt.Sprintf("quay %d", p.quay[i]), float64(p.quay[i])/8-1
	}
	tb := p.table()
	tb.text("name", names)
	tb.text("place", places)
	tb.float("depth", depth)
	return tb, p.spec(stream.NoWeight)
}

// Errors by quays that hold whole cranes are the same in one pass and in two, whatever
// kind of value names cranes and quays, and the bits of one pass hang neither on workers
// nor on what goes to scratch.
func TestSweepNestedOnePass(t *testing.T) {
	tb, spec := berths(21, 6_000, 1_500)
	src := tb.source(1500)
	var ks []vcov.Kind
	for _, name := range []string{"cr0", "cr1", "cr2", "cr3", "wcr"} {
		ks = append(ks, vcov.Kind{Name: name, Cluster: 1})
	}
	ks = append(ks, vcov.Kind{Name: "cr1", Cluster: 2}, vcov.Kind{Name: "cr1", Cluster: 0})
	spec.Keys = []string{"crane", "quay", "depth"}
	o := vcov.Options{Errors: ks, Passes: 2, Draws: 99, Seed: 7}
	want := fit(t, src, spec, o)
	for _, keys := range [][]string{{"crane", "quay", "depth"}, {"name", "place", "quay"}} {
		spec.Sweep, spec.Keys = keys[0], keys
		for _, arithmetic := range []string{"double", "extended"} {
			var bits string
			for _, workers := range []int{1, 2, 3, 8} {
				for _, memory := range []int64{1 << 30, 9 << 20} {
					o := vcov.Options{Errors: ks[:4], Passes: 1, Workers: workers, Memory: memory, Scratch: t.TempDir(), Arithmetic: arithmetic}
					if memory == 1<<30 {
						o.Errors, o.Draws, o.Seed = ks, 99, 7
					}
					r := fit(t, src, spec, o)
					if spilled := r.Run.SpilledRuns > 0; spilled != (memory < 1<<30) || r.Run.Passes != 1 {
						t.Errorf("%v: %d runs went to scratch with %d bytes, %d passes", keys, r.Run.SpilledRuns, memory, r.Run.Passes)
					}
					for i := range r.Errors {
						e, w := &r.Errors[i], &want.Errors[i]
						if e.Status != "ok" {
							t.Fatal(e.Name(), *e.Reason)
						}
						if e.Groups[0] != w.Groups[0] || *e.GroupRows != *w.GroupRows {
							t.Errorf("%s: %d clusters of %+v, want %d of %+v", e.Name(), e.Groups[0], e.GroupRows, w.Groups[0], w.GroupRows)
						}
						for j := range 3 {
							close2(t, e.Name(), e.SE[j], float64(w.SE[j]), 1e-11)
							if math.Abs(float64(e.P[j]-w.P[j])) > 1e-9 {
								t.Errorf("p of %s: %v, want %v", e.Name(), e.P[j], w.P[j])
							}
						}
					}
					if memory == 1<<30 {
						o.Errors = ks[:4]
						r = fit(t, src, spec, o)
					}
					if got := fixed(t, r); bits == "" {
						bits = got
					} else if got != bits {
						t.Fatalf("%v, %s, %d workers, %d bytes: another result", keys, arithmetic, workers, memory)
					}
				}
			}
		}
	}
}

// Whether quays hold whole cranes is known only after the pass: a file is read again if
// they do not, what can be read once only gives the reason.
func TestSweepNotNested(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(31, 4)), 48_000, stream.NoWeight)
	spec := p.spec(stream.NoWeight)
	o := vcov.Options{Errors: append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 1}, vcov.Kind{Name: "cr2", Cluster: 0}, vcov.Kind{Name: "wcu", Cluster: 1}), Draws: 99, Workers: 2}
	src := openText(t, p.table().csv(), stream.Options{})
	nested := fit(t, src, spec, o)
	if nested.Run.Passes != 1 || has(nested, "second-pass") {
		t.Errorf("%d passes, %+v", nested.Run.Passes, nested.Warnings)
	}
	// One crane moves to another quay, between rows that lie in segments apart.
	last := len(p.y) - 1
	for slices.Index(p.crane, p.crane[last]) > len(p.y)/8 {
		last--
	}
	if last < len(p.y)/8*7 {
		t.Fatalf("row %d of a crane is too close to its first", last)
	}
	p.quay[last]++
	text := p.table().csv()
	src = openText(t, text, stream.Options{})
	split := fit(t, src, spec, o)
	if split.Run.Passes != 2 || !has(split, "second-pass") {
		t.Errorf("%d passes, %+v", split.Run.Passes, split.Warnings)
	}
	for j := range 3 {
		close2(t, "classical", split.Errors[0].SE[j], float64(nested.Errors[0].SE[j]), 1e-12)
		close2(t, "cr2 by crane", split.Errors[2].SE[j], float64(nested.Errors[2].SE[j]), 1e-11)
		// One row of 160,000 in another of eight clusters; and effects count in cr1.
		f := (float64(split.N) - 3) / float64(split.Residual.DF)
		if q := float64(split.Errors[1].SE[j] / nested.Errors[1].SE[j]); math.Abs(q-math.Sqrt(f)) > 0.05 {
			t.Errorf("cr1 by quay is %.4f of before, want about %.4f", q, math.Sqrt(f))
		}
	}
	if e := split.Errors[3]; e.Status == "ok" {
		t.Error("the bootstrap by quays that do not hold whole cranes")
	}
	// Where clusters are kept for nothing else they are given up once a crane has two.
	var bits string
	for _, workers := range []int{1, 2, 3, 8} {
		for _, memory := range []int64{0, 1 << 10} {
			r := fit(t, src, spec, vcov.Options{Errors: []vcov.Kind{{Name: "cr1", Cluster: 0}, {Name: "cr1", Cluster: 1}, {Name: "cr1", Cluster: 2}}, Workers: workers, ClusterMemory: memory})
			told := slices.DeleteFunc(slices.Clone(r.Warnings), func(w vcov.Warning) bool { return w.Code != "second-pass" })
			if r.Run.Passes != 2 || len(told) != 1 || !strings.Contains(told[0].Text, "several clusters of quay") || r.Errors[2].Status != "ok" {
				t.Errorf("%d passes, %s, %+v", r.Run.Passes, r.Errors[2].Status, r.Warnings)
			}
			close2(t, "cr1 by quay", r.Errors[1].SE[0], float64(split.Errors[1].SE[0]), 1e-12)
			if got := fixed(t, r); bits == "" {
				bits = got
			} else if got != bits {
				t.Fatalf("%d workers, %d bytes for clusters: another result", workers, memory)
			}
		}
	}
	for name, src := range map[string]stream.Source{"pipe": openPipe(t, text, stream.Options{}), "one pass": src} {
		o := o
		if name == "one pass" {
			o.Passes = 1
		}
		r := fit(t, src, spec, o)
		e := r.Errors[1]
		if r.Run.Passes != 1 || e.Status == "ok" || !strings.Contains(*e.Reason, "rows of some crane lie in several clusters of quay") || !strings.Contains(*e.Reason, "--passes 2") {
			t.Errorf("%s: %d passes, %+v", name, r.Run.Passes, e)
		}
		for j := range 3 {
			close2(t, name, r.Errors[2].SE[j], float64(split.Errors[2].SE[j]), 1e-11)
		}
	}
}

// A pipe gives errors by quay in one pass, with weights of each kind.
func TestSweepNestedByPipe(t *testing.T) {
	for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Frequency, stream.Precision, stream.Sampling} {
		p := drawPanel(rand.New(rand.NewPCG(41, uint64(kind))), 40, kind)
		r := fit(t, openPipe(t, p.table().csv(), stream.Options{}), p.spec(kind), vcov.Options{Errors: []vcov.Kind{{Name: "cr0", Cluster: 1}, {Name: "cr1", Cluster: 1}}})
		d, _, _ := p.dense(kind, p.quay)
		for i, scale := range []float64{1, (d.n - float64(d.k)) / (d.n - 3)} {
			e := &r.Errors[i]
			if e.Status != "ok" || r.Run.Passes != 1 {
				t.Fatal(e.Name(), e.Status, r.Run.Passes)
			}
			for j := range 3 {
				close2(t, e.Name(), e.SE[j], math.Sqrt(scale*d.covariance(e.Kind).At(j, j)), 1e-10)
			}
		}
	}
}

// What sums within units have lost is told: a file is read again, a pipe says how many
// digits are left, or gives nothing.
func TestSweepNestedDigits(t *testing.T) {
	for offset, want := range map[float64]string{1e3: "ok", 1e6: "unavailable"} {
		p := drawPanel(rand.New(rand.NewPCG(51, 1)), 300, stream.NoWeight)
		for i, c := range p.crane {
			p.y[i] += offset * float64(c%13)
			p.x[0][i] += offset * float64(c%17)
		}
		o := vcov.Options{Errors: []vcov.Kind{{Name: "cr1", Cluster: 1}}}
		file := fit(t, p.table().source(100), p.spec(stream.NoWeight), o)
		pipe := fit(t, openPipe(t, p.table().csv(), stream.Options{}), p.spec(stream.NoWeight), o)
		if file.Run.Passes < 2 || file.Errors[0].Status != "ok" || pipe.Run.Passes != 1 || pipe.Errors[0].Status != want {
			t.Fatalf("offset %g: %d passes, %s; pipe %d, %s", offset, file.Run.Passes, file.Errors[0].Status, pipe.Run.Passes, pipe.Errors[0].Status)
		}
		if want != "ok" {
			continue
		}
		if !has(pipe, "digits") {
			t.Errorf("no warning of lost digits: %+v", pipe.Warnings)
		}
		for j := range 3 {
			close2(t, "cr1 by a pipe", pipe.Errors[0].SE[j], float64(file.Errors[0].SE[j]), 1e-7)
		}
	}
}

// Second moments of clusters beyond their share give way to a second pass; numbers of
// clusters beyond theirs are refused.
func TestSweepNestedMemory(t *testing.T) {
	tb, spec := berths(61, 20_000, 5_000)
	o := vcov.Options{Errors: []vcov.Kind{{Name: "cr1", Cluster: 1}}, Scratch: t.TempDir(), ClusterMemory: 1 << 16}
	r := fit(t, tb.source(3000), spec, o)
	if r.Run.Passes != 2 || !has(r, "second-pass") {
		t.Errorf("%d passes, %+v", r.Run.Passes, r.Warnings)
	}
	o.ClusterMemory, o.Passes = 0, 1
	w := fit(t, tb.source(3000), spec, o)
	for j := range 3 {
		close2(t, "cr1", w.Errors[0].SE[j], float64(r.Errors[0].SE[j]), 1e-11)
	}
	spec.Keys[1] = "place"
	o.Memory, o.Workers = 3<<20, 1
	_, err := tryFit(tb.source(3000), spec, o)
	var short *accum.MemoryError
	if !errors.As(err, &short) || !strings.Contains(err.Error(), "values of place") {
		t.Errorf("numbers of clusters that do not fit: %v", err)
	}
}
