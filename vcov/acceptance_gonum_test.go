package vcov_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// problem is a random model with its data, and the same model built row by row
// for the dense solution.
type problem struct {
	tb    *table
	spec  stream.Spec
	d     *dense
	rows  vcov.Rows
	names []string // error kinds that exist
}

// draw makes a problem of n rows: quays' days with numbers, a category or two,
// clusters, weights, missing cells and a row filter. Every choice is drawn.
func draw(r *rand.Rand, n int) *problem {
	p := &problem{tb: &table{}, d: &dense{}}
	nan := math.NaN()
	x1, x2, x3, y, w := make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n)
	barge, quay := make([]string, n), make([]int64, n)
	quayNull := make([]bool, n)
	clusters := 2 + r.IntN(max(3, n/20))
	shock := make([]float64, clusters)
	for g := range shock {
		shock[g] = r.NormFloat64()
	}
	labels := []string{"motor", "canal", "deck", "lighter"}[:2+r.IntN(3)]
	gaps := r.IntN(2) == 1 // missing cells
	gap := func() bool { return gaps && r.IntN(40) == 0 }
	kind := stream.WeightKind(r.IntN(4))
	for i := range n {
		g := r.IntN(clusters)
		quay[i] = int64(g) + 9_007_199_254_740_993 // beyond 2^53
		x1[i] = 10 + 3*r.NormFloat64()
		x2[i] = math.Exp(r.NormFloat64() / 2)
		x3[i] = float64(r.IntN(2)) + shock[g]/4
		barge[i] = labels[r.IntN(len(labels))]
		y[i] = 30 + 2*x1[i] - x2[i] + 5*x3[i] + shock[g] + (0.5+x2[i])*r.NormFloat64()
		switch kind {
		case stream.Frequency:
			w[i] = float64(r.IntN(4))
		case stream.Precision, stream.Sampling:
			w[i] = 0.25 + 3*r.Float64()
			if r.IntN(50) == 0 {
				w[i] = 0
			}
		}
		if gap() {
			x1[i] = nan
		}
		if gap() {
			x2[i] = nan
		}
		if gap() {
			y[i] = nan
		}
		if gap() {
			barge[i] = ""
		}
		quayNull[i] = gap()
		if kind != stream.NoWeight && gap() {
			w[i] = nan
		}
	}
	p.tb.float("tonnes", x1)
	p.tb.float("hours", x2)
	p.tb.float("wet", x3)
	p.tb.text("barge", barge)
	p.tb.add(stream.Column{Name: "quay", Kind: stream.Int64}, stream.Vector{I64: quay, Null: quayNull})
	p.tb.float("w", w)
	p.tb.float("minutes", y)

	// Each part of the model with its columns of the dense design.
	type part struct {
		text string
		cols func(i int) []float64
	}
	levels := append([]string(nil), labels...) // sorted below
	for i := range levels {
		for j := i + 1; j < len(levels); j++ {
			if levels[j] < levels[i] {
				levels[i], levels[j] = levels[j], levels[i]
			}
		}
	}
	one := func(v []float64) func(int) []float64 { return func(i int) []float64 { return []float64{v[i]} } }
	dummies := func(i int) []float64 {
		d := make([]float64, len(levels)-1)
		for l := range d {
			if barge[i] == levels[l+1] {
				d[l] = 1
			}
		}
		return d
	}
	parts := []part{
		{"tonnes", one(x1)},
		{"log(hours)", func(i int) []float64 { return []float64{math.Log(x2[i])} }},
		{"wet", one(x3)},
		{"tonnes*hours", func(i int) []float64 { return []float64{x1[i] * x2[i]} }},
		{"each(barge)", dummies},
		{"each(barge)*hours", func(i int) []float64 {
			d := dummies(i)
			for l := range d {
				d[l] *= x2[i]
			}
			return d
		}},
	}
	reads := map[string]string{"tonnes": "t", "log(hours)": "h", "wet": "", "tonnes*hours": "th", "each(barge)": "b", "each(barge)*hours": "bh"}
	var used []part
	need := ""
	for _, i := range r.Perm(len(parts))[:1+r.IntN(min(len(parts), 1+n/30))] {
		used = append(used, parts[i])
		need += reads[parts[i].text]
		p.spec.Terms = append(p.spec.Terms, parts[i].text)
	}
	p.spec.Outcome = "minutes"
	p.spec.NoConstant = r.IntN(5) == 0
	if kind != stream.NoWeight {
		p.spec.Weight, p.spec.WeightKind = "w", kind
	}
	where := r.IntN(3) == 0
	if where {
		p.spec.Where = "tonnes > 6 && wet < 10"
	}
	clustered := r.IntN(4) != 0
	if clustered {
		p.spec.Keys = []string{"quay"}
	}
	p.d.kind = kind
	for i := range n {
		p.rows.Read++
		if where && !(x1[i] > 6 && x3[i] < 10) {
			p.rows.Excluded++
			continue
		}
		if math.IsNaN(y[i]) || clustered && quayNull[i] || math.IsNaN(w[i]) ||
			strings.Contains(need, "t") && math.IsNaN(x1[i]) || strings.Contains(need, "h") && math.IsNaN(x2[i]) ||
			strings.Contains(need, "b") && barge[i] == "" {
			p.rows.Missing++
			continue
		}
		wi := 1.0
		if kind != stream.NoWeight {
			wi = w[i]
		}
		if wi == 0 {
			p.rows.ZeroWeight++
			continue
		}
		p.rows.Used++
		var row []float64
		if !p.spec.NoConstant {
			row = append(row, 1)
		}
		for _, u := range used {
			row = append(row, u.cols(i)...)
		}
		p.d.x = append(p.d.x, row)
		p.d.y = append(p.d.y, y[i])
		p.d.w = append(p.d.w, wi)
		p.d.group = append(p.d.group, int(quay[i]-9_007_199_254_740_993))
	}
	p.names = []string{"hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5"}
	if kind != stream.Sampling {
		p.names = append(p.names, "classical")
	}
	if clustered {
		p.names = append(p.names, "cr0", "cr1")
		if kind != stream.Sampling {
			p.names = append(p.names, "cr2", "cr3")
		}
	}
	return p
}

// usable says whether the dense solution is good to many more digits than are
// asked for, and no coefficient rests on a single row or cluster.
func (p *problem) usable() bool {
	if len(p.d.x) < 3*len(p.d.x[0])+3 {
		return false
	}
	for j := range p.d.x[0] {
		nonzero := map[int]int{}
		for i := range p.d.x {
			if p.d.x[i][j] != 0 {
				nonzero[p.d.group[i]]++
			}
		}
		if len(nonzero) < 2 {
			return false
		}
	}
	p.d.solve()
	return p.d.kappa < 1e4 && p.d.hMost < 0.95 && p.d.groups() > 2
}

func (p *problem) categories() bool {
	return strings.Contains(strings.Join(p.spec.Terms, " "), "each(")
}

func near(got, want, scale, tol float64) bool { return math.Abs(got-want) <= tol*scale }

// compare holds a result against the dense solution; tol is relative to the
// scale of each number.
func (p *problem) compare(t *testing.T, r *vcov.Result, names []string, tol float64) {
	t.Helper()
	d := p.d
	got := r.Rows
	if got.Read != p.rows.Read || got.Used != p.rows.Used || got.Missing != p.rows.Missing || got.Excluded != p.rows.Excluded || got.ZeroWeight != p.rows.ZeroWeight {
		t.Errorf("rows read %d used %d missing %d excluded %d zero weight %d, want %d %d %d %d %d", got.Read, got.Used, got.Missing, got.Excluded, got.ZeroWeight,
			p.rows.Read, p.rows.Used, p.rows.Missing, p.rows.Excluded, p.rows.ZeroWeight)
	}
	if r.Rank != d.k || len(r.Estimates) != d.k || float64(r.N) != d.n {
		t.Fatalf("rank %d, %d estimates, n %d, want %d, %d, %v; terms %q", r.Rank, len(r.Estimates), r.N, d.k, d.k, d.n, r.Terms)
	}
	sd := math.Sqrt(d.rss / (d.n - float64(d.k)))
	if d.kind == stream.Precision || d.kind == stream.Sampling {
		sd *= math.Sqrt(d.n / d.sumW)
	}
	if !near(float64(r.Residual.SD), sd, sd, tol) {
		t.Errorf("residual sd %v, dense %v", r.Residual.SD, sd)
	}
	// The sum carries the weights as they are, the sd weights of mean one.
	if !near(float64(r.Residual.SS), d.rss, d.rss, tol) || float64(r.Residual.DF) != d.n-float64(d.k) {
		t.Errorf("residual ss %v on df %d, dense %v on %v", r.Residual.SS, r.Residual.DF, d.rss, d.n-float64(d.k))
	}
	r2, adj := d.r2(r.R2Kind == "centred")
	if (r.R2Kind == "centred") == p.spec.NoConstant {
		t.Errorf("R2 is %s, no constant: %v", r.R2Kind, p.spec.NoConstant)
	}
	if !near(float64(r.R2), r2, 1, tol) || !near(float64(r.R2Adjusted), adj, 1, tol) {
		t.Errorf("R2 %v adjusted %v, dense %v %v", r.R2, r.R2Adjusted, r2, adj)
	}
	for _, name := range names {
		e := errorsOf(t, r, name)
		v := d.covariance(name)
		df := d.n - float64(d.k)
		g := float64(d.groups())
		if name[:2] == "cr" {
			df = g - 1
			least, most, median := d.sizes()
			if len(e.Groups) != 1 || e.Groups[0] != int64(g) || e.GroupRows == nil || e.GroupRows.Min != least || e.GroupRows.Max != most || float64(e.GroupRows.Median) != median {
				t.Errorf("%s: groups %v %+v, want %v of %d, %v, %d rows", name, e.Groups, e.GroupRows, g, least, median, most)
			}
		}
		quantile := tQuantile(0.975, df)
		for i := range d.b {
			se := math.Sqrt(v.At(i, i))
			if !near(float64(e.SE[i]), se, se, tol) {
				t.Errorf("%s %s: error %v, dense %v, off by %.1e", name, r.Terms[i], e.SE[i], se, float64(e.SE[i])/se-1)
			}
			if !near(float64(r.Estimates[i]), d.b[i], max(math.Abs(d.b[i]), se), tol) {
				t.Errorf("%s: estimate %v, dense %v", r.Terms[i], r.Estimates[i], d.b[i])
			}
			quantile := quantile
			if name == "cr2" { // Satterthwaite's are held against rows elsewhere
				if d := float64(e.DF[i]); !(d > 0 && d < g) {
					t.Errorf("%s: df %v of %v clusters", name, d, g)
				}
				quantile = tQuantile(0.975, float64(e.DF[i]))
			} else if float64(e.DF[i]) != df {
				t.Errorf("%s: df %v, want %v", name, e.DF[i], df)
			}
			if !near(float64(e.Low[i]), d.b[i]-quantile*se, max(math.Abs(d.b[i]), quantile*se), 10*tol) || !near(float64(e.High[i]), d.b[i]+quantile*se, max(math.Abs(d.b[i]), quantile*se), 10*tol) {
				t.Errorf("%s %s: interval %v to %v, dense %v to %v", name, r.Terms[i], e.Low[i], e.High[i], d.b[i]-quantile*se, d.b[i]+quantile*se)
			}
			for j := range d.b {
				if s := math.Sqrt(v.At(i, i) * v.At(j, j)); !near(float64(e.Covariance[i][j]), v.At(i, j), s, tol) {
					t.Errorf("%s covariance (%d, %d) %v, dense %v", name, i, j, e.Covariance[i][j], v.At(i, j))
				}
			}
		}
		p.overall(t, name, e, g, tol)
		if t.Failed() {
			return
		}
	}
}

// overall checks the joint test: W/q on F(q, N-k), under clusters
// (G-q)/((G-1)q) W on F(q, G-q), none when q > G-1.
func (p *problem) overall(t *testing.T, name string, e *vcov.Errors, g, tol float64) {
	t.Helper()
	d := p.d
	from := 1
	if p.spec.NoConstant {
		from = 0
	}
	q := float64(d.k - from)
	f, df2 := d.wald(d.covariance(name), from)/q, d.n-float64(d.k)
	if name[:2] == "cr" {
		if q > g-1 {
			if e.Overall != nil && e.Overall.F.Exists() {
				t.Errorf("%s: overall F %v with %v coefficients and %v clusters, want none", name, e.Overall.F, q, g)
			}
			return
		}
		f, df2 = f*(g-q)/(g-1), g-q
	}
	if e.Overall == nil {
		t.Errorf("%s: no overall test, dense F %v", name, f)
		return
	}
	// Few clusters make V nearly singular: its inverse loses digits.
	if !near(float64(e.Overall.F), f, f, 1e4*tol) || float64(e.Overall.DF1) != q || float64(e.Overall.DF2) != df2 {
		t.Errorf("%s: overall F %v on %v, %v; dense %v on %v, %v", name, e.Overall.F, e.Overall.DF1, e.Overall.DF2, f, q, df2)
	}
}

// edges are row counts around blocks of 512 rows and segments.
var edges = []int{30, 100, 511, 512, 513, 700, 701, 1023, 1024, 1025, 1399, 1400, 1401, 2100}

func forProblems(t *testing.T, count int, do func(t *testing.T, r *rand.Rand, p *problem)) {
	if testing.Short() {
		count = (count + 3) / 4
	}
	done := 0
	for seed := uint64(1); done < count; seed++ {
		if seed > 50*uint64(count) {
			t.Fatalf("only %d of %d random problems were usable", done, count)
		}
		r := rand.New(rand.NewPCG(seed, 4))
		p := draw(r, edges[r.IntN(len(edges))])
		if len(p.d.x) == 0 || !p.usable() {
			continue
		}
		done++
		name := fmt.Sprintf("seed=%d,n=%d,weight=%d,where=%v,constant=%v,terms=%s", seed, len(p.d.x), p.spec.WeightKind, p.spec.Where != "", !p.spec.NoConstant, strings.Join(p.spec.Terms, ";"))
		t.Run(name, func(t *testing.T) { do(t, r, p) })
	}
}

// onePass lists the kinds that one pass gives: by unique rows, those of rows too, but
// with categories none over clusters.
func (p *problem) onePass() []string {
	var out []string
	for _, n := range p.names {
		if !p.categories() || n[:2] != "cr" {
			out = append(out, n)
		}
	}
	return out
}

// fourthMoments lists the kinds without those that take leverages.
func (p *problem) fourthMoments() []string {
	var out []string
	for _, n := range p.names {
		if n == "hc0" || n == "hc1" || n[:2] != "hc" {
			out = append(out, n)
		}
	}
	return out
}

// Streaming sums give what a dense QR in memory gives.
func TestStreamingEqualsDense(t *testing.T) {
	forProblems(t, 120, func(t *testing.T, r *rand.Rand, p *problem) {
		segment := []int{512, 700, 1024, 100_000}[r.IntN(4)]
		res := fit(t, p.tb.source(segment), p.spec, vcov.Options{Errors: kinds(p.names...)})
		p.compare(t, res, p.names, 1e-10)
		for _, names := range [][]string{p.onePass(), p.fourthMoments()} {
			o := vcov.Options{Errors: kinds(names...), Passes: 1}
			if p.categories() && slices.ContainsFunc(names, func(n string) bool { return n[:2] == "cr" }) {
				if _, err := tryFit(p.tb.source(segment), p.spec, o); !errors.Is(err, stream.ErrUse) {
					t.Errorf("one pass over categories and clusters: %v, want a refusal", err)
				}
				continue
			}
			p.compare(t, fit(t, p.tb.source(segment), p.spec, o), names, 1e-10)
		}
	})
}

// gap is the largest relative difference of two results; scale of a
// coefficient is the larger of it and its error, of a covariance sqrt(V_ii V_jj).
func gap(t *testing.T, a, b *vcov.Result, names []string) float64 {
	t.Helper()
	worst := 0.0
	see := func(x, y vcov.Number, scale float64) {
		if x.Exists() != y.Exists() {
			worst = math.Inf(1)
		} else if x != y {
			worst = math.Max(worst, math.Abs(float64(x)-float64(y))/scale)
		}
	}
	if len(a.Estimates) != len(b.Estimates) || a.N != b.N || a.Rank != b.Rank {
		return math.Inf(1)
	}
	see(a.Residual.SS, b.Residual.SS, math.Abs(float64(a.Residual.SS)))
	see(a.R2, b.R2, 1)
	for _, name := range names {
		e, f := errorsOf(t, a, name), errorsOf(t, b, name)
		for i := range a.Estimates {
			see(a.Estimates[i], b.Estimates[i], math.Max(math.Abs(float64(a.Estimates[i])), float64(e.SE[i])))
			see(e.SE[i], f.SE[i], float64(e.SE[i]))
			if e.P[i].Exists() != f.P[i].Exists() || e.Low[i].Exists() != f.Low[i].Exists() {
				worst = math.Inf(1)
			}
			for j := range a.Estimates {
				see(e.Covariance[i][j], f.Covariance[i][j], float64(e.SE[i]*e.SE[j]))
			}
		}
	}
	return worst
}

func TestOnePassEqualsTwo(t *testing.T) {
	forProblems(t, 60, func(t *testing.T, r *rand.Rand, p *problem) {
		names := p.onePass()
		one := fit(t, p.tb.source(700), p.spec, vcov.Options{Errors: kinds(names...), Passes: 1})
		two := fit(t, p.tb.source(700), p.spec, vcov.Options{Errors: kinds(names...), Passes: 2})
		if one.Run.Passes != 1 || two.Run.Passes < 2 { // hc5 may take a third
			t.Fatalf("passes %d and %d, asked 1 and 2 or more", one.Run.Passes, two.Run.Passes)
		}
		if d := gap(t, one, two, names); d > 1e-12 {
			t.Errorf("one and two passes differ by %.1e", d)
		}
	})
}

func TestWorkersDoNotChangeABit(t *testing.T) {
	forProblems(t, 24, func(t *testing.T, r *rand.Rand, p *problem) {
		segment := []int{64, 129, 512, 700}[r.IntN(4)]
		for passes := range 3 {
			names := p.names
			if passes == 1 {
				names = p.onePass()
			}
			var want string
			for _, workers := range []int{1, 2, 3, 8} {
				res := fit(t, p.tb.source(segment), p.spec, vcov.Options{Errors: kinds(names...), Passes: passes, Workers: workers})
				got := fixed(t, res)
				if workers == 1 {
					want = got
				} else if got != want {
					t.Fatalf("%d passes: %d workers and 1 differ:\n%s\n%s", passes, workers, got, want)
				}
			}
		}
	})
}

// The same rows from text, from Parquet, from a pipe and from memory.
func TestEveryWayInGivesTheSame(t *testing.T) {
	forProblems(t, 24, func(t *testing.T, r *rand.Rand, p *problem) {
		names := p.fourthMoments()
		if r.IntN(2) == 0 {
			names = p.onePass() // pipes by unique rows
		}
		o := vcov.Options{Errors: kinds(names...)}
		text := p.tb.csv()
		so := stream.Options{SegmentBytes: 1 << (12 + r.IntN(6)), Kinds: map[string]stream.Kind{"barge": stream.Text, "wet": stream.Float64, "w": stream.Float64}}
		memory := fit(t, p.tb.source(700), p.spec, o)
		po := so
		if p.categories() { // perhaps two passes, so the pipe is copied while it is read
			po.Spool = filepath.Join(t.TempDir(), "pipe")
		}
		results := map[string]*vcov.Result{
			"text file":    fit(t, openText(t, text, so), p.spec, o),
			"text pipe":    fit(t, openPipe(t, text, po), p.spec, o),
			"Parquet file": fit(t, openParquet(t, p.tb, 700), p.spec, o),
		}
		for what, res := range results {
			if res.Rows.Read != memory.Rows.Read || res.Rows.Missing != memory.Rows.Missing || res.Rows.Excluded != memory.Rows.Excluded || res.Rows.ZeroWeight != memory.Rows.ZeroWeight {
				t.Errorf("%s: rows %+v, in memory %+v", what, res.Rows, memory.Rows)
			}
			if d := gap(t, memory, res, names); d > 1e-12 {
				t.Errorf("%s and memory differ by %.1e", what, d)
			}
		}
	})
}
