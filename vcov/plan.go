package vcov

import (
	"cmp"
	"context"
	"fmt"
	"runtime"
	"slices"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Plan is the route of a fit: plain data, fixed by the input and the model
// before the scan.
type Plan struct {
	Passes     int        `json:"passes"`
	Route      string     `json:"route"`
	Arithmetic string     `json:"arithmetic"` // "double", "extended"; "auto": decided while reading
	Workers    int        `json:"workers"`
	Segments   int        `json:"segments"` // -1: not known before the scan
	Rows       int64      `json:"rows"`     // -1: not known
	Bytes      int64      `json:"bytes"`    // -1: not known
	Memory     int64      `json:"memory"`   // estimate of readers and sums, without clusters and levels
	Reasons    []string   `json:"reasons"`
	Costs      []PassCost `json:"costs"` // of the work of one row, all passes
	Terms      []string   `json:"terms"`
	// PerCluster and PerLevel are bytes for each cluster and each category level
	// and worker; their numbers are not known before the scan.
	PerCluster int64 `json:"per_cluster"`
	PerLevel   int64 `json:"per_level"`
	// ClusterMemory is what the sums of clusters may take in memory; beyond it they
	// go to scratch in sorted runs.
	ClusterMemory int64 `json:"cluster_memory"`
	// PerUnique is bytes for each unique row, where those are kept.
	PerUnique int64 `json:"per_unique_row"`
	// PerPair is bytes for each pair of levels of two categories, all workers
	// together.
	PerPair int64 `json:"per_pair"`

	needs  accum.Needs
	sample *accum.Sample // nil unless the plan hangs on it
	rows   bool          // a row pass is needed
	// moments: the row pass sums the second moments of clusters.
	moments bool
	// deals: the row pass sums the buckets of the audit.
	deals bool

	hypotheses [][]stream.Restriction
}

// PassCost is a share of the work, estimated from measured costs on one machine:
// for comparison only.
type PassCost struct {
	What  string  `json:"what"`
	Share float64 `json:"share"` // of the whole
}

// Costs of one row in nanoseconds, measured on one core with the AVX2 kernel, 3 to
// 12 columns, Parquet and CSV: only their ratios matter. They are the same on every
// machine, so that the route hangs on input and model alone; without AVX2 fourth
// moments cost ten times as much, and --passes 2 is worth a try from 6 terms on.
const (
	costParquetColumn = 3.5
	costCSVField      = 9.5
	costGramPair      = 0.1   // for each product of two columns
	costExtended      = 8.0   // second moments in extended arithmetic, to double
	costQuartic       = 0.045 // for each product of four
	costRowTerm       = 0.3   // row pass, for each term
	costRowPair       = 0.05  // row pass, leverage, for each pair of terms
	costKey           = 15.0  // finding the cluster of a row
	costClusterPair   = 2.0   // second moments of clusters, for each product
	costScore         = 2.0   // scores of clusters, for each term
	costMean          = 2.0   // taking the mean of a unit off, for each term
	costCell          = 4.0   // sums of a unique row
	costCellWord      = 3.0   // finding it, for each number or level that makes it
	costCellMiss      = 8e-4  // the caches that it misses, for each of them there is
	costLag           = 0.1   // lags of scores, for each term and lag
	maxPipeTerms      = 25    // beyond it fourth moments cost more than a copy of the input
)

// defaultMemory bounds the sums when the caller does not.
const defaultMemory = 2 << 30

func (o Options) withDefaults() Options {
	if o.Level == 0 {
		o.Level = 0.95
	}
	if o.Adjust == "" {
		o.Adjust = "none"
	}
	if o.Workers <= 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	if o.Memory <= 0 {
		o.Memory = defaultMemory
	}
	if o.ClusterMemory <= 0 {
		o.ClusterMemory = o.Memory / 16
	}
	return o
}

// dense is Dense or its default.
func (o *Options) dense() int { return cmp.Or(o.Dense, accum.DenseColumns) }

func (o *Options) validate(d *stream.Design) error {
	if !(o.Level > 0 && o.Level < 1) {
		return stream.Usef("level: found %v, want a number between 0 and 1, such as 0.95", o.Level)
	}
	if !slices.Contains(adjustments, o.Adjust) {
		return stream.Usef("adjust: found %q, want none, holm or bh", o.Adjust)
	}
	if o.Passes < 0 || o.Passes > 2 {
		return stream.Usef("passes: found %d, want 1 or 2", o.Passes)
	}
	if err := o.checkBootstrap(); err != nil {
		return err
	}
	if err := o.checkLags(); err != nil {
		return err
	}
	if err := o.checkAudit(d); err != nil {
		return err
	}
	if _, ok := arithmetics[o.Arithmetic]; !ok {
		return stream.Usef("arithmetic: found %q, want auto, double or extended", o.Arithmetic)
	}
	for _, k := range o.Errors {
		switch k.Name {
		case "classical", "hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5":
		case "hac":
			if err := o.checkOrder(d); err != nil {
				return err
			}
		case "cr0", "cr1", "cr2", "cr3", "wcr", "wcu", "driscoll-kraay":
			if k.Cluster < 0 || k.Cluster >= len(d.Keys) {
				return stream.Usef("errors: %s needs a clustering", k.Name)
			}
			switch w, ok := waysOf(d, k.Cluster); {
			case !ok:
				return stream.Usef("errors: %s by %s needs the crossing of every set of them", k.Name, d.Keys[k.Cluster].Text)
			case overTime(k.Name) && len(w.dims) == 1:
				if err := checkPeriod(k.Name, d.Keys[k.Cluster]); err != nil {
					return err
				}
			case len(w.dims) > 1 && k.Name != "cr0" && k.Name != "cr1":
				return stream.Usef("errors: %s is for one clustering; cr0 and cr1 take several", k.Name)
			case adjusts(k.Name) && d.Spec.WeightKind == stream.Sampling:
				return stream.Usef("errors: %s has no meaning under sampling weights, which say nothing of the spread of a row; cr1 has", k.Name)
			}
		default:
			return stream.Usef("errors: found %q, want classical, hc0, hc1, hc2, hc3, hc4, hc4m, hc5, cr0, cr1, cr2, cr3, wcr, wcu, driscoll-kraay or hac", k.Name)
		}
	}
	return nil
}

// wantsMoments reports whether a kind takes the second moments of its clusters.
func (o *Options) wantsMoments(d *stream.Design, k Kind) bool {
	return adjusts(k.Name) || bootstraps(k.Name) || o.Shape && k.Cluster >= 0 && d.Parts[k.Cluster] == nil && !overTime(k.Name)
}

// PlanFit chooses the route from the schema and the model, and arithmetic, where
// that is open, from rows at places spread over the input.
func PlanFit(ctx context.Context, src stream.Source, d *stream.Design, o Options) (*Plan, error) {
	o = o.withDefaults()
	if err := o.validate(d); err != nil {
		return nil, err
	}
	if err := o.planSweep(d); err != nil {
		return nil, err
	}
	hypotheses, err := o.parseHypotheses(d)
	if err != nil {
		return nil, err
	}
	info := src.Info()
	p := &Plan{hypotheses: hypotheses, Workers: o.Workers, Segments: info.Segments, Rows: info.Rows, Bytes: info.Bytes}
	k, groups, cats := 1, 0, false
	for _, t := range d.Terms {
		p.Terms = append(p.Terms, t.Text)
		if len(t.Categories) > 0 && d.Sweep < 0 {
			cats = true
			groups++
		} else {
			k++
		}
	}
	var hc, rows bool
	var byRow string
	ordered := false
	clusters, full := map[int]bool{}, map[int]bool{}
	for _, e := range o.Errors {
		switch e.Name {
		case "hc0", "hc1":
			hc = true
		case "hc2", "hc3", "hc4", "hc4m", "hc5":
			rows, byRow = true, e.Name
			p.why("%s depends on the leverage of every row, which is known only after the first pass", e.Name)
		case "hac":
			rows, byRow, ordered = true, e.Name, true
			p.why("hac takes the scores of rows in order, which are known only after the first pass")
			if o.AutoLags {
				p.why("a pass between chooses its lags from autocovariances")
			}
		case "cr0", "cr1", "driscoll-kraay":
			w, _ := waysOf(d, e.Cluster)
			for _, k := range w.keys {
				clusters[k] = true
			}
		case "cr2", "cr3", "wcr", "wcu":
			clusters[e.Cluster] = true
		}
		if o.wantsMoments(d, e) {
			full[e.Cluster] = true
		}
	}
	if d.Sweep >= 0 && !rows {
		if byRow = o.rowSweep(d); byRow != "" {
			rows = true
			p.why("%s takes the means of units off every row, which are known only after the first pass", byRow)
		}
	}
	columns := float64(len(d.Uses()))
	read := columns * costCSVField
	if info.Format == "parquet" {
		read = columns * costParquetColumn
	}
	c := float64(k + 1)
	gram := c * (c + 1) / 2 * costGramPair
	quartic := (c + 2) * (c + 1) * c * (c + 3) / 24 * costQuartic
	row := gram + c*costRowTerm + c*c*costRowPair
	second := read + row
	keys := float64(len(clusters))
	moments, scores := keys*(costKey+c*(c+1)/2*costClusterPair), keys*(costKey+c*costScore)
	unique := cellCosts{byRow: rows || cats && hc, one: moments, two: second + scores, quartic: quartic, second: second}
	if len(full) > 0 {
		unique.two += moments - scores
	}
	if d.Sweep >= 0 && !rows {
		rows = p.planOuter(d, &o, info, moments+costKey, unique.two+costKey+c*costMean)
	}
	if !ordered && d.Sweep < 0 && !(cats && d.Buckets >= 0) && ((rows || hc) && len(clusters) == 0 || rows && !cats) {
		if err := p.planCells(ctx, src, d, &o, &unique); err != nil {
			return nil, err
		}
	}
	if p.needs.Cells {
		rows, hc = false, false
	}
	if o.Passes == 1 && rows {
		return nil, stream.Usef("passes: %s needs two passes%s; leave out --passes 1 or that kind of errors", byRow, unique.against)
	}
	if cats && (hc || len(clusters) > 0) {
		if o.Passes == 1 {
			return nil, stream.Usef("passes: robust errors with category terms need two passes%s; leave out --passes 1", unique.against)
		}
		rows = true
		p.why("robust errors with category terms are summed row by row")
	}
	if cats && d.Buckets >= 0 {
		if o.Passes == 1 {
			return nil, stream.Usef("passes: the audit with category terms needs two passes; leave out --passes 1")
		}
		if !rows {
			p.why("the buckets of the audit with category terms are summed in a second pass")
		}
		rows, p.deals = true, true
	}
	if len(clusters) > 0 && len(full) == 0 && !rows && d.Sweep < 0 && !p.needs.Cells && o.Passes == 0 && info.Rewindable {
		one := moments
		if hc {
			one += quartic
		}
		if rows = second+scores < one; rows {
			p.why("a second pass that sums the scores of clusters (about %.0f ns a row) is cheaper than second moments of clusters%s in the first (about %.0f)",
				second+scores, map[bool]string{true: " and fourth moments"}[hc], one)
		}
	}
	if hc && !rows {
		switch pipe := !info.Rewindable; {
		case o.Passes == 2:
			rows = true
			p.why("two passes were asked for")
		case o.Passes == 1:
			p.why("one pass was asked for")
		case pipe && k <= maxPipeTerms:
			p.why("a pipe can be read once; fourth moments of %d terms fit", k)
		case pipe:
			rows = true
			p.why("fourth moments of %d terms cost more than copying the pipe to scratch and reading it again", k)
		case second < quartic:
			rows = true
			p.why("a second pass (about %.0f ns a row) is cheaper than fourth moments (about %.0f)", second, quartic)
		default:
			p.why("fourth moments (about %.0f ns a row) are cheaper than a second pass (about %.0f)", quartic, second)
		}
	}
	if len(clusters) > 0 && !rows && o.Passes == 2 {
		rows = true
		p.why("two passes were asked for")
	}
	p.rows = rows
	p.Passes = 1
	var route []string
	p.cost("read", read)
	p.cost("second moments", gram)
	if p.needs.Cells {
		p.cost("unique rows", unique.cells)
		route = append(route, "unique rows")
	}
	if hc && !rows {
		p.needs.Fourth = true
		p.cost("fourth moments", quartic)
		route = append(route, "fourth moments")
	}
	if len(full) > 0 {
		p.why("cr2, cr3, the bootstrap and the description of clusters take the second moments of every cluster")
	}
	if len(full) > 0 && (cats || d.Sweep >= 0 && rows) {
		p.moments = true
	}
	if len(clusters) > 0 && (!rows || len(full) > 0 && !p.moments) {
		for i := range d.Keys {
			if clusters[i] && !rows || full[i] {
				p.needs.Clusters = append(p.needs.Clusters, i)
			}
		}
		p.needs.Keep = len(full) > 0 || d.Sweep >= 0 && o.Passes == 1
		p.PerCluster = accum.ClusterBytes(int(c * (c + 1) / 2))
		p.ClusterMemory = accum.HeldClusters(o.Memory)
		p.cost("cluster sums", moments)
		route = append(route, "cluster sums")
		switch {
		case p.needs.Keep: // the reason stands above
		case d.Sweep >= 0 && !slices.Contains(p.needs.Clusters, d.Sweep):
			p.why("clusters keep their second moments; beyond a sixteenth of --memory a second pass is made with the means of each %s, if those fit", d.Keys[d.Sweep].Text)
		case d.Sweep >= 0:
			p.why("each %s keeps its second moments, so that errors that join its rows need no second pass; beyond a sixteenth of --memory one is made with its means, if those fit", d.Keys[d.Sweep].Text)
		case info.Rewindable:
			p.why("clusters keep their second moments; beyond a sixteenth of --memory a second pass keeps scores only")
		default:
			p.why("clusters keep their second moments, since a pipe can be read once")
		}
	}
	if rows {
		p.Passes = 2
		switch {
		case p.moments: // and as much for each pair of columns that levels add
			p.PerCluster = accum.ClusterBytes(int((c - 1) * (c + 2) / 2))
		case p.needs.Clusters == nil:
			p.PerCluster = accum.ClusterBytes(int(c) - 1)
		}
		p.ClusterMemory = accum.HeldClusters(o.Memory)
		p.cost("second read", read)
		p.cost("row pass", row+scores)
		if ordered {
			p.cost("lags", c*(c+float64(o.Lags))*costLag)
		}
		route = append(route, "row pass")
	}
	if d.Buckets >= 0 {
		if !cats {
			p.needs.Clusters = append(p.needs.Clusters, d.Buckets)
			p.needs.Keep = true
		}
		p.cost("buckets", costKey+c*(c+1)/2*costClusterPair)
		route = append(route, "buckets")
	}
	if d.Sweep >= 0 {
		p.units(d, rows, int64(c)-1)
		if !slices.Contains(p.needs.Clusters, d.Sweep) {
			p.cost("unit sums", costKey+c*costScore)
			route = append([]string{"unit sums"}, route...)
		}
	}
	if len(route) == 0 {
		route = append(route, "second moments")
	}
	if cats {
		meats := 0
		if rows {
			meats = rowMeats(o.Errors)
		}
		p.PerLevel = int64(1+meats) * (16*int64(c+1) + 12)
		if groups > 1 {
			p.PerPair = 8
			if d.Spec.Weight != "" {
				p.PerPair = 16
			}
			p.PerPair = max(p.PerPair, 16*int64(meats))
		}
		p.why("beyond %d levels and terms in all, the category with most levels is eliminated before the solve; the others make dense matrices", o.dense())
	}
	if d.Sweep >= 0 && len(d.Categories) > 0 {
		p.Passes++
		p.cost("levels", read)
		p.why("a first reading lists the levels of categories; each is then a numeric term, up to %d of them", mostListed)
	}
	p.Route = strings.Join(route, ", ")
	sums := int64(o.Workers) * (560*int64(c*(c+1)/2) + 2*8*stream.BatchRows*int64(c))
	if p.needs.Fourth {
		n := int64((c + 2) * (c + 1) * c * (c + 3) / 24)
		sums += int64(o.Workers) * n * (560 + 8)
	}
	if sums > o.Memory {
		return nil, &accum.MemoryError{What: fmt.Sprintf("%d terms over %d workers", k, o.Workers), Need: sums, Have: o.Memory}
	}
	if err := p.chooseArithmetic(ctx, src, d, o); err != nil {
		return nil, err
	}
	if p.Arithmetic != "double" {
		sums += int64(o.Workers) * 2 * 8 * stream.BatchRows * int64(c) * 2
		p.Costs[1].Share *= costExtended
	}
	if ordered && o.Lags < 1<<30 {
		sums += int64(o.Workers) * 8 * int64(c) * (6*o.Lags + 2*stream.BatchRows)
	}
	p.Memory = sums + int64(o.Workers)*info.WorkerBytes
	var all float64
	for _, c := range p.Costs {
		all += c.Share
	}
	for i := range p.Costs {
		p.Costs[i].Share /= all
	}
	return p, nil
}

// chooseArithmetic samples the input where that decides.
func (p *Plan) chooseArithmetic(ctx context.Context, src stream.Source, d *stream.Design, o Options) error {
	switch o.Arithmetic {
	case "double", "extended":
		p.Arithmetic = o.Arithmetic
		return nil
	}
	if d.Sweep >= 0 && !src.Info().Rewindable {
		p.Arithmetic = "extended"
		p.why("the input can be read once only, and whether what varies within %s is small beside what varies between is not known before", d.Keys[d.Sweep].Text)
		return nil
	}
	s, err := p.takeSample(ctx, src, d, &o)
	if err != nil {
		return err
	}
	switch {
	case s.Frame == nil:
		p.Arithmetic = "auto"
		p.why("the input cannot be sampled: its first rows decide whether arithmetic is double or extended")
	case s.NeedsExtended():
		p.Arithmetic = "extended"
		p.why("%s", whyExtended(s.Frame))
	default:
		p.Arithmetic = "double"
	}
	return nil
}

// takeSample looks into the input, once.
func (p *Plan) takeSample(ctx context.Context, src stream.Source, d *stream.Design, o *Options) (*accum.Sample, error) {
	if p.sample == nil {
		s, err := accum.TakeSample(ctx, src, d, o.Workers)
		if err != nil {
			return nil, err
		}
		p.sample = s
	}
	return p.sample, nil
}

// whyExtended says why auto took extended arithmetic.
func whyExtended(f *accum.Frame) string {
	if f.Lossy() {
		return fmt.Sprintf("terms are nearly collinear: double arithmetic would keep about %d digits of the estimates", int(f.Digits))
	}
	return "the input is small, and extended arithmetic saves last digits at no cost"
}

// rowMeats counts the meats that a row pass sums for kinds: hc0 and hc1 share one.
func rowMeats(kinds []Kind) int {
	seen := map[string]bool{}
	for _, k := range kinds {
		switch {
		case k.Name == "hc1":
			seen["hc0"] = true
		case strings.HasPrefix(k.Name, "hc"):
			seen[k.Name] = true
		}
	}
	return len(seen)
}

func (p *Plan) why(format string, args ...any) {
	p.Reasons = append(p.Reasons, fmt.Sprintf(format, args...))
}

func (p *Plan) cost(what string, ns float64) {
	p.Costs = append(p.Costs, PassCost{what, ns})
}
