package vcov_test

import (
	"context"
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// unloading is a random unbalanced design with clusters of three kinds, of very
// different sizes, and its rows for the definitions.
type unloading struct {
	tb               *table
	spec             stream.Spec
	d                *dense
	quay, crane, day []int
}

func drawUnloading(r *rand.Rand, kind stream.WeightKind) *unloading {
	u := &unloading{tb: &table{}, d: &dense{kind: kind}}
	n := 60 + r.IntN(200)
	quays, cranes, days := 6+r.IntN(3), 12+r.IntN(10), 25+r.IntN(25)
	uneven := func(groups int) int { return int(float64(groups) * math.Pow(r.Float64(), 1.7)) }
	shock := func(groups int) []float64 {
		s := make([]float64, groups)
		for i := range s {
			s[i] = r.NormFloat64()
		}
		return s
	}
	byQuay, byCrane, byDay := shock(quays), shock(cranes), shock(days)
	var tonnes, pallets, wet, minutes, weight []float64
	var barge []string
	var keys [3][]int64
	far := math.Pow(10, float64(r.IntN(3)))
	categories := r.IntN(2) == 0
	for range n {
		q, c, d := uneven(quays), uneven(cranes), uneven(days)
		u.quay, u.crane, u.day = append(u.quay, q), append(u.crane, c), append(u.day, 7*d/3)
		a, b := far+r.NormFloat64()+byQuay[q]/2, math.Exp(0.6*r.NormFloat64())
		w, row := float64(r.IntN(2)), []float64{1}
		label := []string{"canal", "deck", "motor"}[r.IntN(3)]
		y := 20 + a - 2*b + 3*w + byQuay[q] + byCrane[c] + byDay[d]/2 + (0.5+b)*r.NormFloat64()
		row = append(row, a, b, w)
		if categories {
			for _, l := range []string{"deck", "motor"} {
				row = append(row, map[bool]float64{true: 1}[l == label])
			}
		}
		f := 1.0
		switch kind {
		case stream.Frequency:
			f = float64(1 + r.IntN(4))
		case stream.Precision, stream.Sampling:
			f = math.Exp(r.NormFloat64())
		}
		u.d.x, u.d.y, u.d.w = append(u.d.x, row), append(u.d.y, y), append(u.d.w, f)
		tonnes, pallets, wet, minutes, weight, barge = append(tonnes, a), append(pallets, b), append(wet, w), append(minutes, y), append(weight, f), append(barge, label)
	}
	for i, k := range [][]int{u.quay, u.crane, u.day} {
		for _, v := range k {
			keys[i] = append(keys[i], int64(v))
		}
	}
	u.tb.float("tonnes", tonnes)
	u.tb.float("pallets", pallets)
	u.tb.float("wet", wet)
	u.tb.text("barge", barge)
	u.tb.float("minutes", minutes)
	u.tb.float("weight", weight)
	u.tb.int("quay", keys[0])
	u.tb.int("crane", keys[1])
	u.tb.int("day", keys[2])
	u.spec = stream.Spec{Outcome: "minutes", Terms: []string{"tonnes", "pallets", "wet"},
		Keys: []string{"quay", "crane", "day"}, Crossed: [][]int{{0, 1}, {0, 2}, {1, 2}, {0, 1, 2}}}
	if categories {
		u.spec.Terms = append(u.spec.Terms, "each(barge)")
	}
	if kind != stream.NoWeight {
		u.spec.Weight, u.spec.WeightKind = "weight", kind
	}
	u.d.group = u.quay
	u.d.solve()
	return u
}

// usable: the definitions keep digits, and no term rests on one row or cluster.
func (u *unloading) usable() bool {
	if u.d.kappa > 1e4 || u.d.hMost > 0.9 {
		return false
	}
	for j := range u.d.k {
		for _, v := range []bool{true, false} {
			seen := map[int]bool{}
			for i, x := range u.d.x {
				if (x[j] != 0) == v {
					seen[u.quay[i]] = true
				}
			}
			if len(seen) == 1 || v && len(seen) < 3 {
				return false
			}
		}
	}
	return true
}

// clustered is the covariance by a kind with the clusters of all keys at once:
// inclusion and exclusion of the intersections, each with its own factor (Cameron,
// Gelbach and Miller 2011, doi:10.1198/jbes.2010.07136, section 2.3).
func (u *unloading) clustered(kind string, keys ...[]int) *mat.Dense {
	out := mat.NewDense(u.d.k, u.d.k, nil)
	for set := 1; set < 1<<len(keys); set++ {
		d, sign := *u.d, -1.0
		d.group = make([]int, len(d.x))
		ids := map[string]int{}
		for i := range d.x {
			id := ""
			for k := range keys {
				if set>>k&1 == 1 {
					id += fmt.Sprint(keys[k][i], " ")
				}
			}
			if _, ok := ids[id]; !ok {
				ids[id] = len(ids)
			}
			d.group[i] = ids[id]
		}
		for k := range keys {
			if set>>k&1 == 1 {
				sign = -sign
			}
		}
		var v mat.Dense
		v.Scale(sign, d.covariance(kind))
		out.Add(out, &v)
	}
	return out
}

// satterthwaite is the degrees of freedom of cr2 from rows: times the root of
// precision weights, or repeated.
func (u *unloading) satterthwaite(group []int) []float64 {
	var x, y []float64
	var g []int
	ids := map[int]int{}
	for i, row := range u.d.x {
		times, by := 1, 1.0
		switch u.d.kind {
		case stream.Frequency:
			times = int(u.d.w[i])
		case stream.Precision:
			by = math.Sqrt(u.d.w[i])
		}
		if _, ok := ids[group[i]]; !ok {
			ids[group[i]] = len(ids)
		}
		for range times {
			for _, v := range row {
				x = append(x, v*by)
			}
			y, g = append(y, u.d.y[i]*by), append(g, ids[group[i]])
		}
	}
	_, _, df := vcov.BellMcCaffrey(mat.NewDense(len(y), u.d.k, x), y, g, len(ids))
	return df
}

// byPatterns is p of R b = r over all patterns of signs: for each the outcome is made
// anew row by row, from the least squares fit under the hypothesis (imposed) or the fit
// itself, and fitted again (Cameron, Gelbach and Miller 2008,
// doi:10.1162/rest.90.3.414, section IV).
func (d *dense) byPatterns(r *mat.Dense, value []float64, imposed bool) float64 {
	at := wald(d.b, d.covariance("cr1"), r, value)
	beta, null := slices.Clone(d.b), value
	var rb mat.Dense
	rb.Mul(r, mat.NewDense(d.k, 1, d.b))
	if imposed {
		var rm, rmr, mult, step mat.Dense
		rm.Mul(r, d.m)
		rmr.Mul(&rm, r.T())
		gap := mat.DenseCopyOf(&rb)
		gap.Sub(gap, mat.NewDense(len(value), 1, value))
		if err := mult.Solve(&rmr, gap); err != nil {
			panic(err)
		}
		step.Mul(rm.T(), &mult)
		for j := range beta {
			beta[j] -= step.At(j, 0)
		}
	} else {
		null = mat.Col(nil, 0, &rb)
	}
	place := map[int]int{}
	for _, g := range d.group {
		if _, ok := place[g]; !ok {
			place[g] = len(place)
		}
	}
	n := 0
	for pattern := range 1 << len(place) {
		draw := &dense{x: d.x, w: d.w, kind: d.kind, group: d.group, y: make([]float64, len(d.y))}
		for i, x := range d.x {
			fit := 0.0
			for j, v := range x {
				fit += v * beta[j]
			}
			draw.y[i] = fit + float64(1-2*(pattern>>place[d.group[i]]&1))*(d.y[i]-fit)
		}
		draw.solve()
		if wald(draw.b, draw.covariance("cr1"), r, null) >= at*(1-1e-9) {
			n++
		}
	}
	return float64(n) / float64(int(1)<<len(place))
}

// worst collects the largest relative differences, by what and by weights.
type worst map[string]map[stream.WeightKind]*differences

type differences struct {
	most  float64
	count int
}

func (w worst) see(what string, kind stream.WeightKind, got, want, scale float64) {
	if w[what] == nil {
		w[what] = map[stream.WeightKind]*differences{}
	}
	if w[what][kind] == nil {
		w[what][kind] = &differences{}
	}
	d := math.Abs(got-want) / scale
	if math.IsNaN(d) {
		d = math.Inf(1)
	}
	if got == want {
		d = 0
	}
	w[what][kind].most = max(w[what][kind].most, d)
	w[what][kind].count++
}

var weightKinds = []stream.WeightKind{stream.NoWeight, stream.Frequency, stream.Precision, stream.Sampling}

func (w worst) String() string {
	var b strings.Builder
	fmt.Fprintf(&b, "| %-27s | numbers | no weights | frequency | precision | sampling |\n|---|---|---|---|---|---|\n", "largest relative difference")
	for _, what := range slices.Sorted(maps.Keys(w)) {
		n := 0
		for _, v := range w[what] {
			n += v.count
		}
		fmt.Fprintf(&b, "| %-27s | %d |", what, n)
		for _, k := range weightKinds {
			if v, ok := w[what][k]; ok {
				fmt.Fprintf(&b, " %.1e |", v.most)
			} else {
				b.WriteString(" - |")
			}
		}
		b.WriteString("\n")
	}
	return b.String()
}

// Every kind of errors, with every kind of weights it is defined for, against its
// definition over rows in memory, in double and extended arithmetic, in one pass and in
// two: no number is off by more than 1e-10. The orderings that are theorems hold.
//
//	go test -v -run EveryKind ./vcov                        prints the table
//	TALLROW_DIGITS=500 go test -v -run EveryKind ./vcov     of more designs for each kind of weights
func TestEveryKindIsItsDefinition(t *testing.T) {
	count := 16
	if testing.Short() {
		count = 4
	}
	if v := os.Getenv("TALLROW_DIGITS"); v != "" {
		var err error
		if count, err = strconv.Atoi(v); err != nil {
			t.Fatalf("TALLROW_DIGITS: %v", err)
		}
	}
	w := worst{}
	for _, kind := range weightKinds {
		done := 0
		for seed := uint64(1); done < count; seed++ {
			if seed > 50*uint64(count) {
				t.Fatalf("only %d of %d designs were usable", done, count)
			}
			r := rand.New(rand.NewPCG(seed, 60+uint64(kind)))
			if u := drawUnloading(r, kind); u.usable() {
				done++
				u.hold(t, w, r, seed, done%8 == 1)
			}
		}
	}
	t.Logf("%d designs for each kind of weights\n%s", count, w)
	for what, by := range w {
		for kind, d := range by {
			if d.most > 1e-10 {
				t.Errorf("%s, weights %d: off by %.1e", what, kind, d.most)
			}
		}
	}
	for _, what := range []string{"estimates", "hc5", "cr3", "df of cr2", "cr1, two ways", "cr1, three ways", "driscoll-kraay", "F of two equations", "p of wcr", "p of wcu, joint"} {
		if len(w[what]) < 2 {
			t.Errorf("%s was not compared: %v", what, w[what])
		}
	}
}

// hold fits a design in every way and compares.
func (u *unloading) hold(t *testing.T, w worst, r *rand.Rand, seed uint64, patterns bool) {
	t.Helper()
	d := u.d
	type kernel struct {
		name  string
		lags  int64
		width float64
	}
	k := []kernel{{"bartlett", 0, 1}, {"bartlett", 5, 6}, {"parzen", 7, 8}, {"quadratic", 3, 3}}[r.IntN(4)]
	// Covariances by definition.
	want := map[string]*mat.Dense{}
	ways := map[string][]vcov.Kind{}
	ask := func(name string, kind string, cluster int, v *mat.Dense) {
		want[name], ways[name] = v, []vcov.Kind{{Name: kind, Cluster: cluster}}
	}
	for _, n := range []string{"classical", "hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5"} {
		if n != "classical" || d.kind != stream.Sampling {
			ask(n, n, -1, d.covariance(n))
		}
	}
	for _, n := range []string{"cr0", "cr1", "cr2", "cr3"} {
		if d.kind == stream.Sampling && (n == "cr2" || n == "cr3") {
			continue
		}
		ask(n, n, 0, u.clustered(n, u.quay))
		ask(n+" of crane", n, 1, u.clustered(n, u.crane))
	}
	for _, n := range []string{"cr0", "cr1"} {
		ask(n+", two ways", n, 3, u.clustered(n, u.quay, u.crane))
		ask(n+", three ways", n, 6, u.clustered(n, u.quay, u.crane, u.day))
	}
	ask("driscoll-kraay", "driscoll-kraay", 2, d.pairs(func(i, j int) float64 { return kernelAt(k.name, float64(u.day[i]-u.day[j])/k.width) }))
	ask("wcr", "wcr", 0, want["cr1"])
	ask("wcu", "wcu", 0, want["cr1"])
	df := map[string][]float64{}
	if d.kind != stream.Sampling {
		df["cr2"], df["cr2 of crane"] = u.satterthwaite(u.quay), u.satterthwaite(u.crane)
	}
	restrict, value := mat.NewDense(2, d.k, nil), []float64{0.75, -1.5}
	restrict.Set(0, 1, 1)
	restrict.Set(1, 2, 1)
	restrict.Set(1, 3, 0.5)
	joint := "tonnes = 0.75, pallets + 0.5 * wet = -1.5"
	single := "pallets + 0.5 * wet = -1.5"
	p := map[string][2]float64{}
	if patterns {
		for _, n := range []string{"wcr", "wcu"} {
			p[n] = [2]float64{d.byPatterns(restrict.Slice(1, 2, 0, d.k).(*mat.Dense), value[1:], n == "wcr"), d.byPatterns(restrict, value, n == "wcr")}
		}
	}
	for _, o := range []vcov.Options{{}, {Passes: 2, Arithmetic: "double"}, {Passes: 1, Arithmetic: "double"}} {
		names := slices.Sorted(maps.Keys(want))
		if o.Passes == 1 {
			if len(u.spec.Terms) > 3 {
				continue // categories take two passes
			}
			names = slices.DeleteFunc(names, func(n string) bool { return strings.HasPrefix(n, "hc") && n != "hc0" && n != "hc1" })
		}
		for _, n := range names {
			o.Errors = append(o.Errors, ways[n]...)
		}
		o.Kernel, o.Lags, o.BootWeights, o.Hypotheses = k.name, k.lags, "signs", []string{joint, single}
		src := u.tb.source(64 + r.IntN(200))
		design, err := stream.NewDesign(u.spec, src.Schema())
		if err != nil {
			t.Fatal(err)
		}
		res, err := vcov.Fit(context.Background(), src, design, o)
		if err != nil {
			t.Fatalf("seed %d: %v", seed, err)
		}
		for j, b := range d.b {
			w.see("estimates", d.kind, float64(res.Estimates[j]), b, max(math.Abs(b), math.Sqrt(want["hc1"].At(j, j))))
		}
		se := map[string][]vcov.Number{}
		for at, n := range names {
			e := &res.Errors[at]
			if e.Status != "ok" {
				t.Fatalf("seed %d: %s: %s", seed, n, *e.Reason)
			}
			if slices.ContainsFunc(res.Warnings, func(w vcov.Warning) bool {
				return w.Code == "repaired" && strings.Contains(w.Text, e.Name())
			}) {
				continue
			}
			se[n] = e.SE
			what := strings.TrimSuffix(n, " of crane")
			v := want[n]
			for i := range d.b {
				for j := range d.b {
					w.see(what, d.kind, float64(e.Covariance[i][j]), v.At(i, j), math.Sqrt(v.At(i, i)*v.At(j, j)))
				}
				if df[n] != nil {
					w.see("df of cr2", d.kind, float64(e.DF[i]), df[n][i], df[n][i])
				}
			}
			h, s := res.Hypotheses[at], res.Hypotheses[len(names)+at]
			f, g := wald(d.b, v, restrict, value)/2, float64(0)
			if ways[n][0].Cluster >= 0 {
				g = float64(slices.Min(e.Groups))
				f *= (g - 2) / (g - 1)
			}
			// Equations whose estimates go together leave fewer digits to F.
			var rv mat.Dense
			rv.Product(restrict, v, restrict.T())
			apart := 1 - rv.At(0, 1)*rv.At(0, 1)/(rv.At(0, 0)*rv.At(1, 1))
			w.see("F of two equations", d.kind, float64(h.F), f, f/apart)
			if e.Bootstrap != nil && patterns {
				if !e.Bootstrap.All {
					t.Errorf("seed %d: %+v", seed, e.Bootstrap)
				}
				w.see("p of "+n, d.kind, float64(s.P), p[n][0], 1)
				w.see("p of "+n+", joint", d.kind, float64(h.P), p[n][1], 1)
			}
		}
		for _, o := range [][2]string{{"hc0", "hc1"}, {"hc0", "hc2"}, {"hc2", "hc3"}, {"cr0", "cr1"}, {"cr0 of crane", "cr1 of crane"}} {
			for j := range se[o[1]] {
				if a, b := float64(se[o[0]][j]), float64(se[o[1]][j]); !(a*(1-1e-12) <= b) {
					t.Errorf("seed %d, weights %d, term %d: %s %v above %s %v", seed, d.kind, j, o[0], a, o[1], b)
				}
			}
		}
	}
}
