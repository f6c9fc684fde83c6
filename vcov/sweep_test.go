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

// panel is unloading times by crane: terms and outcome with effects of cranes, cranes
// of one row among them, quays that hold whole cranes and nights that cut through them.
type panel struct {
	x           [3][]float64
	y, w        []float64
	crane, quay []int64
	night       []int64
}

func drawPanel(r *rand.Rand, cranes int, weights stream.WeightKind) *panel {
	p := &panel{}
	for c := range cranes {
		n := 1 + r.IntN(6)
		if c%9 == 0 {
			n = 1
		}
		effect := 3 * r.NormFloat64()
		for range n {
			a := r.NormFloat64() + effect/2
			b := math.Exp(r.NormFloat64() / 2)
			d := 0.0
			if r.IntN(3) == 0 {
				d = 1
			}
			p.x[0], p.x[1], p.x[2] = append(p.x[0], 100+a), append(p.x[1], b), append(p.x[2], d)
			p.y = append(p.y, 50+effect+2*a-b+0.5*d+r.NormFloat64()*(0.3+b))
			w := 1.0
			switch weights {
			case stream.Frequency:
				w = float64(1 + r.IntN(3))
			case stream.Precision, stream.Sampling:
				w = math.Exp(r.NormFloat64())
			}
			p.w = append(p.w, w)
			p.crane = append(p.crane, int64(1000+7*c))
			p.quay = append(p.quay, int64(c%8))
			p.night = append(p.night, int64(r.IntN(6)))
		}
	}
	// Rows of a crane do not stand together.
	r.Shuffle(len(p.y), func(i, j int) {
		for k := range p.x {
			p.x[k][i], p.x[k][j] = p.x[k][j], p.x[k][i]
		}
		p.y[i], p.y[j] = p.y[j], p.y[i]
		p.w[i], p.w[j] = p.w[j], p.w[i]
		for _, k := range [][]int64{p.crane, p.quay, p.night} {
			k[i], k[j] = k[j], k[i]
		}
	})
	return p
}

func (p *panel) table() *table {
	tb := &table{}
	tb.float("minutes", p.y)
	for j, name := range []string{"pallets", "tonnes", "wet"} {
		tb.float(name, p.x[j])
	}
	tb.float("w", p.w)
	tb.int("crane", p.crane)
	tb.int("quay", p.quay)
	tb.int("night", p.night)
	return tb
}

func (p *panel) spec(kind stream.WeightKind) stream.Spec {
	s := stream.Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "wet"}, Sweep: "crane", Keys: []string{"crane", "quay", "night"}}
	if kind != stream.NoWeight {
		s.Weight, s.WeightKind = "w", kind
	}
	return s
}

// dense is the regression with one indicator for each crane behind the terms, without
// cranes of one row; clusters are those of the key.
func (p *panel) dense(kind stream.WeightKind, key []int64) (d *dense, units, singles int) {
	count := map[int64]float64{}
	for i, c := range p.crane {
		if kind == stream.Frequency {
			count[c] += p.w[i]
		} else {
			count[c]++
		}
	}
	at := map[int64]int{}
	for _, c := range p.crane {
		if _, ok := at[c]; !ok && count[c] > 1 {
			at[c] = len(at)
		}
	}
	d = &dense{kind: kind}
	for i, c := range p.crane {
		if count[c] == 1 {
			singles++
			continue
		}
		row := make([]float64, 3+len(at))
		for j := range p.x {
			row[j] = p.x[j][i]
		}
		row[3+at[c]] = 1
		d.x, d.y, d.w, d.group = append(d.x, row), append(d.y, p.y[i]), append(d.w, p.w[i]), append(d.group, int(key[i]))
	}
	d.solve()
	return d, len(at), singles
}

func close2(t *testing.T, what string, got vcov.Number, want, tol float64) {
	t.Helper()
	if !(math.Abs(float64(got)-want) <= tol*math.Abs(want)) {
		t.Errorf("%s: %.17g, want %.17g (relative %.1e)", what, float64(got), want, math.Abs(float64(got)/want-1))
	}
}

// Slopes and errors are those of the regression with an indicator for each unit, by
// QR of all columns (Frisch & Waugh 1933, doi:10.2307/1907330; Lovell 1963).
func TestSweepIsTheRegressionWithAllIndicators(t *testing.T) {
	for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Frequency, stream.Precision, stream.Sampling} {
		for _, arithmetic := range []string{"auto", "double", "extended"} {
			t.Run(fmt.Sprint(kind, arithmetic), func(t *testing.T) {
				p := drawPanel(rand.New(rand.NewPCG(5, uint64(kind))), 40, kind)
				src := p.table().source(37)
				names := []string{"hc0", "hc1", "hc2", "hc3", "hc4", "hc4m"}
				clusters := []string{"cr0", "cr1", "cr2", "cr3"}
				if kind != stream.Sampling {
					names = append([]string{"classical"}, names...)
				} else {
					clusters = clusters[:2]
				}
				d, units, singles := p.dense(kind, p.crane)
				check := func(e *vcov.Errors, v func(string) float64, scale float64) {
					t.Helper()
					for j := range 3 {
						_ = v
						close2(t, e.Name(), e.SE[j], math.Sqrt(scale*d.covariance(e.Kind).At(j, j)), 1e-10)
					}
				}
				r := fit(t, src, p.spec(kind), vcov.Options{Errors: kinds(names...), Arithmetic: arithmetic})
				for j := range 3 {
					close2(t, "slope", r.Estimates[j], d.b[j], 1e-10)
				}
				if len(r.Terms) != 3 || r.Rank != 3 || r.Sweep == nil || r.Sweep.Effects != int64(units) || r.Rows.Singleton != int64(singles) || r.N != int64(d.n) {
					t.Errorf("%v, rank %d, %+v, %+v, N %d; want %d units, %d singletons, N %v", r.Terms, r.Rank, r.Sweep, r.Rows, r.N, units, singles, d.n)
				}
				if r.Rows.Used+r.Rows.Singleton != r.Rows.Read || r.Residual.DF != int64(d.n)-int64(d.k) {
					t.Errorf("rows %+v, df %d", r.Rows, r.Residual.DF)
				}
				close2(t, "rss", r.Residual.SS, d.rss, 1e-10)
				var tss float64 // about the means of cranes, weighted
				sum, sw := map[int64]float64{}, map[int64]float64{}
				for i, c := range p.crane {
					sum[c] += p.w[i] * p.y[i]
					sw[c] += p.w[i]
				}
				for i, c := range p.crane {
					tss += p.w[i] * (p.y[i] - sum[c]/sw[c]) * (p.y[i] - sum[c]/sw[c])
				}
				if r.R2Kind != "within" {
					t.Errorf("R2 is %s", r.R2Kind)
				}
				close2(t, "R2", r.R2, 1-d.rss/tss, 1e-10)
				close2(t, "adjusted R2", r.R2Adjusted, 1-d.rss/tss*(d.n-float64(units))/(d.n-float64(d.k)), 1e-10)
				for i := range r.Errors {
					check(&r.Errors[i], nil, 1)
				}
				// Clusters: the cranes themselves and quays, which hold whole cranes, and
				// nights, which do not; in one pass where that is possible.
				for key, col := range [][]int64{p.crane, p.quay, p.night} {
					for _, passes := range []int{1, 2} {
						if passes == 1 && key == 2 {
							continue
						}
						d, _, _ = p.dense(kind, col)
						var ks []vcov.Kind
						for _, c := range clusters {
							ks = append(ks, vcov.Kind{Name: c, Cluster: key})
						}
						r := fit(t, src, p.spec(kind), vcov.Options{Errors: ks, Arithmetic: arithmetic, Passes: passes})
						if r.Run.Passes != passes {
							t.Errorf("%d passes, want %d", r.Run.Passes, passes)
						}
						for i := range r.Errors {
							e := &r.Errors[i]
							adjusted := e.Kind == "cr2" || e.Kind == "cr3"
							if key == 2 && adjusted {
								if e.Status == "ok" || !strings.Contains(*e.Reason, "crane") {
									t.Errorf("%s by clusters that cut through cranes is %s", e.Name(), e.Status)
								}
								continue
							}
							if e.Status != "ok" {
								t.Fatal(e.Name(), *e.Reason)
							}
							scale := 1.0
							if e.Kind == "cr1" && key < 2 {
								scale = (d.n - float64(d.k)) / (d.n - 3)
							}
							check(e, nil, scale)
							if e.Groups[0] != int64(d.groups()) {
								t.Errorf("%s: %d clusters, want %d", e.Name(), e.Groups[0], d.groups())
							}
							least, most, median := d.sizes()
							if g := e.GroupRows; g.Min != least || g.Max != most || float64(g.Median) != median {
								t.Errorf("%s: rows of clusters %+v, want %d %v %d", e.Name(), g, least, median, most)
							}
						}
					}
				}
			})
		}
	}
}

// Two ways are the sum and difference of the clusterings' own (Cameron, Gelbach &
// Miller 2011), each with the slopes' k where one of the clusterings holds whole units.
func TestSweepTwoWays(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(8, 1)), 60, stream.NoWeight)
	spec := p.spec(stream.NoWeight)
	spec.Crossed = [][]int{{0, 2}, {1, 2}}
	r := fit(t, p.table().source(50), spec, vcov.Options{Errors: []vcov.Kind{{Name: "cr1", Cluster: 3}, {Name: "cr1", Cluster: 4}, {Name: "cr0", Cluster: 3}}})
	for i, key := range [][]int64{p.crane, p.quay, p.crane} {
		both := make([]int64, len(key))
		for j := range key {
			both[j] = 100*key[j] + p.night[j]
		}
		var v [3]float64
		for s, col := range [][]int64{key, p.night, both} {
			d, _, _ := p.dense(stream.NoWeight, col)
			c := d.covariance(r.Errors[i].Kind)
			f := 1.0
			if r.Errors[i].Kind == "cr1" {
				f = (d.n - float64(d.k)) / (d.n - 3)
			}
			for j := range v {
				v[j] += map[bool]float64{true: f, false: -f}[s < 2] * c.At(j, j)
			}
		}
		for j := range v {
			close2(t, r.Errors[i].Name(), r.Errors[i].SE[j], math.Sqrt(v[j]), 1e-9)
		}
	}
}

// The older route to the same slopes: a category whose levels are all columns, here
// also eliminated before the solve.
func TestSweepIsTheCategory(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(3, 9)), 300, stream.NoWeight)
	src := p.table().source(100)
	spec := p.spec(stream.NoWeight)
	o := vcov.Options{Errors: append(kinds("classical", "hc1", "hc3"), vcov.Kind{Name: "cr0", Cluster: 0}, vcov.Kind{Name: "cr0", Cluster: 2})}
	r := fit(t, src, spec, o)
	count := map[int64]int{}
	for _, c := range p.crane {
		count[c]++
	}
	q := &panel{}
	for i, c := range p.crane {
		if count[c] > 1 {
			for j := range p.x {
				q.x[j] = append(q.x[j], p.x[j][i])
			}
			q.y, q.w = append(q.y, p.y[i]), append(q.w, 1)
			q.crane, q.quay, q.night = append(q.crane, c), append(q.quay, p.quay[i]), append(q.night, p.night[i])
		}
	}
	spec.Sweep, spec.NoConstant = "", true
	spec.Terms = append(slices.Clone(spec.Terms), `each(crane, base="none")`)
	for _, dense := range []int{0, 50} {
		o.Dense = dense
		w := fit(t, q.table().source(100), spec, o)
		for j := range 3 {
			close2(t, "slope", r.Estimates[j], float64(w.Estimates[j]), 1e-10)
			for i := range r.Errors {
				close2(t, r.Errors[i].Name(), r.Errors[i].SE[j], float64(w.Errors[i].SE[j]), 1e-10)
			}
		}
	}
}

// Offsets between units, far larger than what varies within them, leave slopes and
// errors as they are: cells are sums of an offset and a value of few bits, so that both
// panels are exact.
func TestSweepOffsets(t *testing.T) {
	r := rand.New(rand.NewPCG(17, 2))
	base, far := &panel{}, map[float64]*panel{}
	offsets := []float64{1e5, 1e8}
	for _, o := range offsets {
		far[o] = &panel{}
	}
	add := func(p *panel, x [3]float64, y float64, c int) {
		for j := range x {
			p.x[j] = append(p.x[j], x[j])
		}
		p.y, p.w = append(p.y, y), append(p.w, 1)
		p.crane, p.quay, p.night = append(p.crane, int64(c)), append(p.quay, int64(c%8)), append(p.night, int64(len(p.y)%5))
	}
	few := func(x float64) float64 { return math.Round(1024*x) / 1024 }
	for c := range 200 {
		n := 2 + r.IntN(5)
		o := [4]float64{math.Round(8 * r.NormFloat64()), math.Round(8 * r.NormFloat64()), 0, math.Round(8 * r.NormFloat64())}
		for range n {
			x := [3]float64{few(r.NormFloat64()), few(r.NormFloat64()), float64(r.IntN(2))}
			y := few(x[0] - 2*x[1] + x[2]/2 + r.NormFloat64())
			add(base, x, y, c)
			for off, p := range far {
				z := x
				for j := range z {
					z[j] += off * o[j]
				}
				add(p, z, y+off*o[3], c)
			}
		}
	}
	ks := append(kinds("classical", "hc1", "hc3"), vcov.Kind{Name: "cr1", Cluster: 0}, vcov.Kind{Name: "cr3", Cluster: 1}, vcov.Kind{Name: "cr1", Cluster: 2})
	for _, one := range []bool{false, true} {
		o := vcov.Options{Errors: ks}
		if one {
			o.Errors = append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 0}, vcov.Kind{Name: "cr2", Cluster: 0})
		}
		want := fit(t, base.table().source(97), base.spec(stream.NoWeight), o)
		for _, off := range offsets {
			got := fit(t, far[off].table().source(97), base.spec(stream.NoWeight), o)
			if got.Run.Arithmetic != "extended" {
				t.Errorf("offset %g: %s arithmetic", off, got.Run.Arithmetic)
			}
			for j := range 3 {
				close2(t, fmt.Sprint("slope at ", off), got.Estimates[j], float64(want.Estimates[j]), 1e-12)
				for i := range want.Errors {
					if got.Errors[i].Status != "ok" {
						t.Fatal(got.Errors[i].Name(), *got.Errors[i].Reason)
					}
					close2(t, fmt.Sprint(want.Errors[i].Name(), " at ", off), got.Errors[i].SE[j], float64(want.Errors[i].SE[j]), 1e-11)
				}
			}
		}
		// A pipe has one pass for the sums, in extended arithmetic from the start.
		if one {
			pipe := fit(t, openPipe(t, far[1e5].table().csv(), stream.Options{}), base.spec(stream.NoWeight), vcov.Options{Errors: kinds("classical")})
			for j := range 3 {
				close2(t, "slope by a pipe", pipe.Estimates[j], float64(want.Estimates[j]), 1e-12)
				close2(t, "classical by a pipe", pipe.Errors[0].SE[j], float64(want.Errors[0].SE[j]), 1e-11)
			}
		}
	}
	// Where double arithmetic is asked for, what it has lost is said.
	lost := fit(t, far[1e5].table().source(97), base.spec(stream.NoWeight), vcov.Options{Errors: kinds("classical"), Arithmetic: "double"})
	if !slices.ContainsFunc(lost.Warnings, func(w vcov.Warning) bool { return w.Code == "digits" }) {
		t.Errorf("no warning of lost digits: %+v", lost.Warnings)
	}
}

// Bits do not depend on workers or memory.
func TestSweepWorkersAndMemory(t *testing.T) {
	p := drawPanel(rand.New(rand.NewPCG(2, 2)), 20_000, stream.NoWeight)
	src := p.table().source(3000)
	for name, c := range map[string]struct {
		kinds  []vcov.Kind
		keep   int64 // of clusters' second moments
		passes int
	}{
		"units":         {append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 0}), 1 << 30, 1},
		"units dropped": {append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 0}), 1 << 16, 2},
		"rows":          {append(kinds("hc1", "hc2"), vcov.Kind{Name: "cr1", Cluster: 1}, vcov.Kind{Name: "cr1", Cluster: 0}), 1 << 30, 2},
		"one pass":      {kinds("classical"), 1 << 30, 1},
	} {
		for _, arithmetic := range []string{"double", "extended"} {
			var want string
			for _, workers := range []int{1, 2, 3, 8} {
				for _, memory := range []int64{1 << 30, 5 << 20} {
					r := fit(t, src, p.spec(stream.NoWeight), vcov.Options{Errors: c.kinds, Workers: workers, Memory: memory, ClusterMemory: c.keep, Scratch: t.TempDir(), Arithmetic: arithmetic})
					if spilled := r.Run.SpilledRuns > 0; spilled != (memory < 1<<30) {
						t.Errorf("%s: %d runs went to scratch with %d bytes", name, r.Run.SpilledRuns, memory)
					}
					if r.Run.Passes != c.passes {
						t.Errorf("%s: %d passes", name, r.Run.Passes)
					}
					if got := fixed(t, r); want == "" {
						want = got
					} else if got != want {
						t.Fatalf("%s, %s, %d workers, %d bytes: another result", name, arithmetic, workers, memory)
					}
				}
			}
		}
	}
	// Where neither the units' second moments nor their means fit, the former go to scratch.
	o := vcov.Options{Errors: append(kinds("classical"), vcov.Kind{Name: "cr1", Cluster: 0}), Scratch: t.TempDir()}
	all := fit(t, src, p.spec(stream.NoWeight), o)
	o.Memory = 2 << 20
	few := fit(t, src, p.spec(stream.NoWeight), o)
	if few.Run.SpilledRuns == 0 || few.Run.Passes != 2 || few.Run.Route != "cluster sums" {
		t.Errorf("%+v", few.Run)
	}
	for j := range 3 {
		close2(t, "error from scratch", few.Errors[1].SE[j], float64(all.Errors[1].SE[j]), 1e-12)
	}
	_, err := tryFit(src, p.spec(stream.NoWeight), vcov.Options{Errors: kinds("hc1"), Memory: 1 << 20, Scratch: t.TempDir(), Workers: 1})
	var short *accum.MemoryError
	if !errors.As(err, &short) || !strings.Contains(err.Error(), "crane") {
		t.Errorf("means that do not fit: %v", err)
	}
}
