package vcov

import (
	"fmt"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Effects of units that are swept out. With x~ and y~ what is left of terms and outcome
// less their (weighted) means over the rows of each unit, the slopes of the regression
// with one indicator for each unit are those of y~ on x~ (Frisch & Waugh 1933; Lovell
// 1963), with the same residuals. Conventions, for N used rows, L units and k slopes:
//
//   - Units of one row (of frequency 1) say nothing; they are left out and counted, and
//     are neither in N nor in L.
//   - Degrees of freedom are N - L - k, and so is the divisor of hc1; the leverage of a
//     row is w/W_g + w x~'(X~'WX~)^-1 x~. So classical and hc errors are those of the
//     regression with all indicators.
//   - Clusters that hold all rows of each unit: effects do not count in the factor
//     (N-1)/(N-k) of cr1, since a cluster's scores are zero in their directions. Other
//     clusters: they count, (N-1)/(N-L-k). Several ways: they do not count if one of the
//     clusterings holds all rows of each unit.
//   - cr2, cr3 and the bootstrap from the moments within units are those of the
//     regression with all indicators if clusters hold all rows of each unit (Pustejovsky
//     & Tipton 2018), and are not given else.

// fewRows is the mean number of rows of a unit below which hc errors are warned of:
// they are inconsistent for many units of few rows (Stock & Watson 2008).
const fewRows = 20

// meansShare of the memory is what the means of units may take in a second pass.
const meansShare = 2

// unit is the expression of the units whose effects are swept out.
func (x *solution) unit() string {
	d := x.state.Design
	return d.Keys[d.Sweep].Text
}

// scaled is a times t.
func scaled(a []float64, t float64) []float64 {
	out := make([]float64, len(a))
	for i, v := range a {
		out[i] = t * v
	}
	return out
}

// sizeBefore is the root of the sum of squares, before the sweep, of the combination v
// of solved coordinates.
func (x *solution) sizeBefore(v []float64) float64 {
	k := x.k()
	total := x.project(x.state.Swept.Total)
	var q float64
	for i := range k {
		q += v[i] * dot(total[i*k:(i+1)*k], v)
	}
	return math.Sqrt(max(0, q))
}

// sweptNoise bounds what rounding leaves of the outcome's squares within units, in
// units 1/YInv^2.
func (x *solution) sweptNoise() float64 {
	s := x.state
	n := len(s.Columns) + 1
	share := noiseShare
	if s.Extended {
		share *= 0x1p-50
	}
	var q, gross float64
	a := make([]float64, n)
	a[n-1] = 1
	for j, h := range s.Frame.H {
		a[1+j] = h
	}
	for i := range n {
		q += a[i] * dot(s.Swept.Total[i*n:(i+1)*n], a)
		gross += math.Abs(a[i]) * dot(absolute(s.S[i*n:(i+1)*n]), absolute(a))
	}
	return max(share*q, 0x1p-46*gross) // what forms the squares may cancel
}

// sweepLossy reports whether subtracting what lies between units, or solving what is
// left, costs digits that extended arithmetic would keep.
func (f *fitter) sweepLossy() bool {
	s := f.state
	if s.Swept == nil || s.Extended || arithmetics[f.o.Arithmetic] != accum.Auto || !f.info().Rewindable {
		return false
	}
	x := f.sol
	return s.Frame.Lossy() || s.Swept.Loss > sweepLimit || 0x1p-53*x.svv > lossLimit*x.rss || x.condition() > 1e3
}

// sweepLimit is the relative error of moments within units above which pass one is
// repeated in extended arithmetic.
const sweepLimit = 1e-13

// sweepAgain repeats pass one in extended arithmetic.
func (f *fitter) sweepAgain() error {
	f.state.Close()
	o := f.scan
	o.Arithmetic = accum.Extended
	s, err := accum.Again(f.ctx, f.src, f.state, f.plan.needs, o)
	if err != nil {
		return err
	}
	f.count(s)
	f.note("frame-renewed", "the first pass was repeated in extended arithmetic: what varies within %s is small beside what varies between, or nearly collinear", f.sol.unit())
	if err := f.solve(s); err != nil {
		return err
	}
	f.sol.settle()
	f.sumLoss()
	return nil
}

// whyExtended says why arithmetic is extended.
func (f *fitter) whyExtended(fr *accum.Frame) string {
	if f.state.Swept != nil && !fr.Lossy() {
		return "what varies within units may be small beside what varies between them"
	}
	return whyExtended(fr)
}

// clustersBy reports whether errors are asked for by the clusters of a key.
func (f *fitter) clustersBy(key int) bool {
	for _, k := range f.o.Errors {
		if k.Cluster < 0 {
			continue
		}
		w, _ := waysOf(f.d, k.Cluster)
		for _, d := range w.dims {
			if d == key {
				return true
			}
		}
	}
	return false
}

// tellSweep warns of what a sweep does to the errors.
func (f *fitter) tellSweep() {
	x, s := f.sol, f.state
	if s.Swept == nil || x.df() <= 0 || x.perfect {
		return
	}
	if !s.Extended && s.Swept.Loss > lossLimit {
		f.note("digits", "estimates and errors have about %d digits left: what varies within %s is small beside what varies between; --arithmetic extended keeps them", digits(s.Swept.Loss), x.unit())
	}
	if rows := float64(x.n) / float64(s.Swept.Units); rows < fewRows {
		for _, k := range f.o.Errors {
			if rowKind(k.Name) {
				f.warn = append(f.warn, Warning{Code: "few-rows-per-unit", Kind: ptr(k.Name),
					Text: fmt.Sprintf("%s is inconsistent for effects of many units with few rows each (%.1f rows on average); take cr1(%s)", k.Name, rows, x.unit())})
			}
		}
	}
}

// planSweep checks what cannot be had with a sweep.
func (o *Options) planSweep(d *stream.Design) error {
	if d.Sweep < 0 {
		return nil
	}
	if o.Passes == 1 && len(d.Categories) > 0 {
		return stream.Usef("passes: categories beside effects of %s that are swept out take a reading of their levels first; leave out --passes 1", d.Keys[d.Sweep].Text)
	}
	if d.Buckets >= 0 {
		return stream.Usef("audit: not for effects that are swept out of %s in this version", d.Keys[d.Sweep].Text)
	}
	if o.Shape {
		return stream.Usef("the description of clusters is not for effects that are swept out of %s: what is left has mean zero in every cluster that holds all of its rows", d.Keys[d.Sweep].Text)
	}
	for _, k := range o.Errors {
		if inOrder(k.Name) {
			return stream.Usef("errors: %s is not for effects that are swept out of %s in this version; driscoll-kraay with periods is, and cr1(%[2]s)", k.Name, d.Keys[d.Sweep].Text)
		}
	}
	return nil
}

// rowSweep names a kind of errors that needs the rows less the means of their units:
// all but classical errors, those by the units themselves, and those of one way, which
// clusters may give that hold whole units.
func (o *Options) rowSweep(d *stream.Design) string {
	for _, k := range o.Errors {
		switch {
		case rowKind(k.Name):
			return k.Name
		case k.Cluster >= 0 && k.Cluster != d.Sweep && (overTime(k.Name) || d.Parts[k.Cluster] != nil):
			return k.Name + "(" + d.Keys[k.Cluster].Text + ")"
		}
	}
	return ""
}

// outerSweep names a kind of errors by clusters that must hold whole units, unless rows
// are read again less the means of their units.
func (o *Options) outerSweep(d *stream.Design) string {
	for _, k := range o.Errors {
		if k.Cluster >= 0 && k.Cluster != d.Sweep {
			return k.Name + "(" + d.Keys[k.Cluster].Text + ")"
		}
	}
	return ""
}

// planOuter decides whether errors by clusters beyond the units get a second pass, given
// what either way costs a row.
func (p *Plan) planOuter(d *stream.Design, o *Options, info stream.Info, one, two float64) (rows bool) {
	by, unit := o.outerSweep(d), d.Keys[d.Sweep].Text
	switch {
	case by == "" || o.Passes == 2:
		return false // nothing to decide here
	case o.Passes == 1 || !info.Rewindable:
		p.why("each %s keeps which clusters its rows lie in: %s takes one pass if all lie in one cluster, and is not given else", unit, by)
		return false
	case two < one:
		p.why("%s takes the means of units off every row in a second pass (about %.0f ns a row), which is cheaper than second moments of clusters in the first (about %.0f)", by, two, one)
		return true
	}
	p.why("each %s keeps which clusters its rows lie in: %s takes one pass if all lie in one cluster (about %.0f ns a row), else a second (about %.0f)", unit, by, one, two)
	return false
}

// splitKey is a clustering whose sums of pass one are of no use, since rows of a unit lie
// in several of its clusters; -1 for none.
func (f *fitter) splitKey() int {
	for _, key := range f.plan.needs.Clusters {
		if f.state.Swept != nil && !f.state.Nested(key) {
			return key
		}
	}
	return -1
}

// units tells what units take, for c columns.
func (p *Plan) units(d *stream.Design, rows bool, c int64) {
	outer := int64(len(p.needs.Clusters))
	own := slices.Contains(p.needs.Clusters, d.Sweep)
	if own {
		outer--
	}
	text, each := d.Keys[d.Sweep].Text, accum.ClusterBytes(int(c+1+outer))
	switch {
	case own && outer > 0:
		each += p.PerCluster
	case own:
		each = p.PerCluster
	}
	p.why("the effects of %s are swept out of the sums: what each value keeps takes about %d bytes, beyond five eighths of --memory on scratch", text, each)
	if rows {
		p.why("the second pass holds the means of all values of %s in memory, about %d bytes each", text, 8*c+28)
	}
}
