package main

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/stat/distuv"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// design is a way to draw data, and what the reference found for it.
type design struct {
	family, name string
	spec         stream.Spec
	fits         []vcov.Options
	columns      []column
	draw         func(r *rand.Rand) (x1, x2, y []float64, group []int64)
	reference    [][2]float64 // by column, b1 and b2
	refReps      int
	refDF        [2]float64 // mean degrees of freedom of cr2
}

// column is a kind of errors in one of the fits.
type column struct {
	name  string
	fit   int
	kind  string
	plain bool // t on the degrees of freedom of cr1 in place of the kind's own
}

const draws = 399

var (
	spreadColumns = []column{{"classical", 0, "classical", false}, {"hc0", 0, "hc0", false}, {"hc1", 0, "hc1", false},
		{"hc2", 0, "hc2", false}, {"hc3", 0, "hc3", false}, {"hc4", 0, "hc4", false}}
	clusterColumns = []column{{"classical", 0, "classical", false}, {"cr0", 0, "cr0", false}, {"cr1", 0, "cr1", false},
		{"cr2, t(G-1)", 0, "cr2", true}, {"cr2", 0, "cr2", false}, {"cr3", 0, "cr3", false},
		{"wcr, signs", 0, "wcr", false}, {"wcr, six-point", 1, "wcr", false}, {"wcu, signs", 0, "wcu", false}}
)

// The figures are those of the design simulation: numpy, dense.
var designs = []*design{
	unequalSpread(50, 40_000, [][2]float64{{.653, .948}, {.804, .935}, {.815, .943}, {.860, .949}, {.906, .962}, {.943, .967}}),
	unequalSpread(200, 30_000, [][2]float64{{.576, .948}, {.888, .946}, {.890, .948}, {.910, .950}, {.927, .955}, {.949, .960}}),
	unequalSpread(1000, 10_000, [][2]float64{{.524, .947}, {.930, .947}, {.930, .947}, {.936, .948}, {.942, .949}, {.951, .951}}),
	// Which clusters have x2 = 1 is part of the design: sizes differ.
	clusters(8, []int{2, 5}, 10_000, [2]float64{4.4, 1.8}, [][2]float64{{.619, .526}, {.836, .762}, {.864, .789},
		{.912, .862}, {.945, .978}, {.963, .938}, {.944, .965}, {.936, .966}, {.887, .875}}),
	clusters(20, []int{1, 5, 7, 12, 16, 19}, 8_000, [2]float64{11.0, 7.1}, [][2]float64{{.564, .487}, {.892, .873}, {.901, .883},
		{.926, .915}, {.941, .941}, {.954, .943}, {.946, .939}, {.943, .939}, {.935, .926}}),
	clusters(50, []int{2, 3, 6, 11, 24, 25, 27, 28, 30, 36, 41, 42, 47, 48, 49}, 4_000, [2]float64{26.0, 22.2}, [][2]float64{{.551, .485},
		{.922, .925}, {.925, .927}, {.937, .936}, {.941, .944}, {.947, .949}, {.948, .951}, {.945, .947}, {.945, .946}}),
}

func unequalSpread(n, refReps int, reference [][2]float64) *design {
	d := &design{family: "Unequal spread", name: fmt.Sprintf("n = %d", n), columns: spreadColumns, reference: reference, refReps: refReps}
	d.spec = stream.Spec{Outcome: "y", Terms: []string{"x1", "x2"}}
	o := vcov.Options{Workers: 1}
	for _, c := range d.columns {
		o.Errors = append(o.Errors, vcov.Kind{Name: c.kind, Cluster: -1})
	}
	d.fits = []vcov.Options{o}
	d.draw = func(r *rand.Rand) (x1, x2, y []float64, group []int64) {
		for i := range n {
			a, b := math.Exp(0.7*r.NormFloat64()), 0.0
			if i == 0 || i > 1 && r.Float64() < 0.3 {
				b = 1
			}
			x1, x2, y = append(x1, a), append(x2, b), append(y, 1+a+b+(0.3+a)*r.NormFloat64())
		}
		return x1, x2, y, nil
	}
	return d
}

func clusters(groups int, treated []int, refReps int, refDF [2]float64, reference [][2]float64) *design {
	d := &design{family: "Clusters", name: fmt.Sprintf("G = %d", groups), columns: clusterColumns, reference: reference, refReps: refReps, refDF: refDF}
	d.spec = stream.Spec{Outcome: "y", Terms: []string{"x1", "x2"}, Keys: []string{"g"}}
	signs := vcov.Options{Workers: 1, Draws: draws, BootWeights: "signs", Errors: []vcov.Kind{{Name: "classical", Cluster: -1}}}
	for _, k := range []string{"cr0", "cr1", "cr2", "cr3", "wcr", "wcu"} {
		signs.Errors = append(signs.Errors, vcov.Kind{Name: k, Cluster: 0})
	}
	six := signs
	six.BootWeights, six.Errors = "six-point", []vcov.Kind{{Name: "wcr", Cluster: 0}}
	d.fits = []vcov.Options{signs, six}

	size := make([]float64, groups)
	mean := 0.0
	for i := range size {
		size[i] = math.Exp(2 * float64(i) / float64(groups-1))
		mean += size[i] / float64(groups)
	}
	with := make([]float64, groups)
	for _, g := range treated {
		with[g] = 1
	}
	d.draw = func(r *rand.Rand) (x1, x2, y []float64, group []int64) {
		for g, s := range size {
			of, shock := r.NormFloat64(), r.NormFloat64()
			for range max(4, int(math.RoundToEven(20*s/mean))) {
				a := of + r.NormFloat64()
				u := (math.Sqrt(0.3)*shock + math.Sqrt(0.7)*r.NormFloat64()) * (1 + 0.3*math.Abs(a))
				x1, x2, y, group = append(x1, a), append(x2, with[g]), append(y, 1+a+with[g]+u), append(group, int64(g))
			}
		}
		return x1, x2, y, group
	}
	return d
}

// sample is what one replication shows.
type sample struct {
	held       [][2]bool // by column
	df         [2]float64
	orderings  int
	violations []string
}

// smaller holds the orderings that are theorems.
var smaller = [][2]string{{"hc0", "hc1"}, {"hc0", "hc2"}, {"hc2", "hc3"}, {"cr0", "cr1"}}

// sample draws and fits a replication: which of its intervals hold the slopes, both 1.
func (d *design) sample(ctx context.Context, seed, rep uint64) (*sample, error) {
	x1, x2, y, group := d.draw(rand.New(rand.NewPCG(seed, rep)))
	var schema stream.Schema
	var cols []stream.Vector
	for i, v := range [][]float64{x1, x2, y} {
		schema.Columns = append(schema.Columns, stream.Column{Name: []string{"x1", "x2", "y"}[i], Kind: stream.Float64})
		cols = append(cols, stream.Vector{Kind: stream.Float64, F64: v})
	}
	if group != nil {
		schema.Columns = append(schema.Columns, stream.Column{Name: "g", Kind: stream.Int64})
		cols = append(cols, stream.Vector{Kind: stream.Int64, I64: group})
	}
	src := stream.NewMemory(schema, cols, 4096)
	bound, err := stream.NewDesign(d.spec, src.Schema())
	if err != nil {
		return nil, err
	}
	by := make([]map[string]*vcov.Errors, len(d.fits))
	var est []vcov.Number
	for i, o := range d.fits {
		o.Seed = seed<<32 + rep
		r, err := vcov.Fit(ctx, src, bound, o)
		if err != nil {
			return nil, err
		}
		est = r.Estimates
		by[i] = map[string]*vcov.Errors{}
		for j := range r.Errors {
			e := &r.Errors[j]
			if e.Status != "ok" {
				return nil, fmt.Errorf("%s: %s", e.Name(), *e.Reason)
			}
			by[i][e.Kind] = e
		}
	}
	s := &sample{held: make([][2]bool, len(d.columns))}
	for i, c := range d.columns {
		e := by[c.fit][c.kind]
		for j := range 2 {
			low, high := float64(e.Low[j+1]), float64(e.High[j+1])
			if c.plain {
				half := distuv.StudentsT{Sigma: 1, Nu: float64(by[c.fit]["cr1"].DF[j+1])}.Quantile(0.975) * float64(e.SE[j+1])
				low, high = float64(est[j+1])-half, float64(est[j+1])+half
			}
			// An interval without an end is null there, and infinite.
			s.held[i][j] = !(low > 1) && !(high < 1)
		}
		if c.kind == "cr2" {
			s.df = [2]float64{float64(e.DF[1]), float64(e.DF[2])}
		}
	}
	for _, o := range smaller {
		a, b := by[0][o[0]], by[0][o[1]]
		if a == nil || b == nil {
			continue
		}
		for j := range a.SE {
			s.orderings++
			// 1e-12 leaves room for rounding where both are equal.
			if !(float64(a.SE[j])*(1-1e-12) <= float64(b.SE[j])) {
				s.violations = append(s.violations, fmt.Sprintf("term %d: %s %v above %s %v", j, o[0], a.SE[j], o[1], b.SE[j]))
			}
		}
	}
	return s, nil
}
