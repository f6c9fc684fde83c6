package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
	"github.com/tallrow/tallrow/vcov"
)

// formats are the kinds of storage that the program reads; the first that
// matches a file opens it.
func formats() []stream.Format {
	return []stream.Format{columnar.Format{}, delimited.Format{}}
}

// baseBytes is what the program holds beside readers and sums.
const baseBytes = 16 << 20

// open opens the data of s. The source must be closed.
func (a *app) open(ctx context.Context, s *settings, o stream.Options) (stream.Source, error) {
	if s.scratch != "" {
		if st, err := os.Stat(s.scratch); err != nil || !st.IsDir() {
			return nil, stream.Usef("%s %s: want a folder that exists", s.origin("scratch"), s.scratch)
		}
	}
	s.holdMemory()
	src, err := stream.Open(ctx, s.data, a.stdin, formats(), o)
	if err != nil {
		return nil, err
	}
	runtime.GC() // what decoding a footer leaves behind can be as large as all that follows
	if s.first > 0 {
		src = stream.First(src, s.first)
	}
	return src, nil
}

// holdMemory has the collector keep to --memory.
func (s *settings) holdMemory() {
	// The limit does not count the program itself.
	debug.SetMemoryLimit(s.memoryBound() - min(baseBytes, s.memoryBound()/8))
	if os.Getenv("GOGC") == "" {
		// Most of what is held is buffers that stay: a smaller heap costs little time
		// and keeps the peak flat where a file has many row groups.
		debug.SetGCPercent(50)
	}
}

// memoryBound is --memory or its default.
func (s *settings) memoryBound() int64 {
	if s.memory == 0 {
		s.memory = defaultMemory("/")
	}
	return s.memory
}

// share divides the memory: as many workers as leave two thirds of it to the
// sums, and what the sums may take.
func (s *settings) share(info stream.Info) (workers int, sums int64) {
	bound := s.memoryBound()
	workers = s.workers
	if info.WorkerBytes > 0 {
		fit := max(1, (bound-baseBytes)/3/info.WorkerBytes)
		workers = int(min(int64(workers), fit))
	}
	return workers, max(bound-baseBytes-int64(workers)*info.WorkerBytes, 1<<20)
}

// clusterMemory bounds the clusters' second moments, beyond which the route is
// another one. It must depend neither on workers nor, unless the user bounds
// the memory, on the machine: the last bits would.
func (s *settings) clusterMemory() int64 {
	const usual = 128 << 20
	bound := s.memoryBound()
	if s.given("memory") {
		return bound / 16
	}
	return min(usual, bound/4)
}

// isPipe reports whether data of that name can be read only once.
func (a *app) isPipe(name string) bool {
	if name == "-" {
		// A file that the shell has put there can be read again.
		if f, ok := a.stdin.(*os.File); ok {
			if st, err := f.Stat(); err == nil {
				return !st.Mode().IsRegular()
			}
		}
		return true
	}
	st, err := os.Stat(name)
	return err == nil && st.Mode()&(os.ModeNamedPipe|os.ModeSocket|os.ModeCharDevice) != 0
}

// wantsSpool reports whether the data, if they come by a pipe, may have to be
// read twice, so that a copy is needed.
func (a *app) wantsSpool(s *settings, req request) bool {
	pipe := false
	for _, d := range s.data {
		pipe = pipe || a.isPipe(d)
	}
	if !pipe || s.passes == 1 {
		return false
	}
	if s.passes == 2 || len(s.terms) > 25 {
		return true
	}
	for _, k := range req.kinds {
		if vcov.NeedsRows(k.Name) {
			return true
		}
		if s.sweep != "" && k.Name != "classical" && (k.Cluster < 0 || k.Cluster >= len(req.keys) || k.Name == "driscoll-kraay") {
			return true // rows less the means of their units
		}
	}
	for _, t := range s.terms {
		if strings.Contains(t, "each(") {
			return true
		}
	}
	return false
}

// newSpool names a new file in the scratch folder that is removed when the run
// ends, however it ends.
func (a *app) newSpool(s *settings) (string, error) {
	dir, err := a.scratchFolder(s)
	return filepath.Join(dir, "pipe"), err
}

// scratchFolder makes a folder in the scratch folder that is removed when the run ends,
// however it ends.
func (a *app) scratchFolder(s *settings) (string, error) {
	dir := s.scratch
	if dir == "" {
		dir = os.TempDir()
	}
	own, err := os.MkdirTemp(dir, "tallrow-")
	if err != nil {
		return "", fmt.Errorf("scratch folder %s: %s", dir, plainPathError(err))
	}
	a.onExit(func() { os.RemoveAll(own) })
	return own, nil
}

// fitted is a result with what was asked for.
type fitted struct {
	res  *vcov.Result
	req  request
	done func() error // see prepared
}

// prepared is an opened input with the model bound to it.
type prepared struct {
	a      *app
	s      *settings
	req    request
	src    stream.Source
	design *stream.Design
	opts   vcov.Options
	done   func() error // of the checkpoint, once the result is out; nil without one
}

// prepare opens the data and binds the model. The source must be closed.
func (a *app) prepare(ctx context.Context, s *settings) (*prepared, error) {
	if err := s.checkModel(); err != nil {
		return nil, err
	}
	req, err := s.parseErrors()
	if err != nil {
		return nil, err
	}
	var pf *planFile
	o := s.reading()
	if s.plan != "" {
		if pf, err = readPlan(s.plan); err != nil {
			return nil, err
		}
		if err := pf.adopt(s, &o); err != nil {
			return nil, err
		}
	}
	if a.wantsSpool(s, req) {
		if o.Spool, err = a.newSpool(s); err != nil {
			return nil, err
		}
	}
	src, err := a.open(ctx, s, o)
	if err != nil {
		return nil, err
	}
	p := &prepared{a: a, s: s, req: req, src: src}
	if p.design, err = stream.NewDesign(s.spec(req), src.Schema()); err == nil {
		// From here on clusterings go by their canonical text.
		for i := range p.req.keys {
			p.req.keys[i] = p.design.Keys[i].Text
		}
		if pf != nil {
			err = pf.check(p)
		}
	}
	if err != nil {
		if headOnly(ctx, src) {
			names := strings.Join(s.data, ", ")
			if names == "-" {
				names = "standard input"
			}
			err = fmt.Errorf("%s: there is a header and no row, want data rows", names)
		}
		src.Close()
		return nil, err
	}
	p.opts = s.fitOptions(req)
	p.opts.Workers, p.opts.Memory = s.share(src.Info())
	p.opts.Scratch = s.scratch
	p.opts.ClusterMemory = s.clusterMemory()
	return p, nil
}

// fitOptions is what the options say of errors and arithmetic.
func (s *settings) fitOptions(req request) vcov.Options {
	return vcov.Options{
		Errors: req.withClassical(s.weightKind == "sampling"),
		Level:  s.level, Hypotheses: s.hypotheses, Adjust: s.adjust, Passes: s.passes, Arithmetic: s.arithmetic, Meter: new(accum.Meter), Timings: s.timings, Shape: s.clusterDetail,
		Draws: int(s.draws), Seed: uint64(s.seed), BootWeights: s.drawWeights, Kernel: s.kernel, Lags: s.lags, AutoLags: !s.fixedLags, Order: req.order, Buckets: s.audit.buckets,
	}
}

// headOnly reports whether the input has columns but not one row. Their kinds
// are then unknown, and what is said of them would mislead.
func headOnly(ctx context.Context, src stream.Source) bool {
	for _, c := range src.Schema().Columns {
		if c.Kind != stream.Text {
			return false
		}
	}
	scan, err := src.Scan(ctx, []stream.Use{{Column: 0}})
	if err != nil {
		return false
	}
	defer scan.Close()
	for {
		seg, err := scan.Next(ctx)
		if err != nil {
			return errors.Is(err, io.EOF)
		}
		var b stream.Batch
		err = seg.Read(&b)
		seg.Close()
		if !errors.Is(err, io.EOF) {
			return false
		}
	}
}

// fit reads, solves and completes the result with what only the program knows.
func (a *app) fit(ctx context.Context, s *settings) (*fitted, error) {
	names, err := digestsAmong(ctx, s.data, s.outcome != "")
	if err != nil {
		return nil, err
	}
	if len(names) > 0 {
		if err := s.noCheckpoint("digests are read in moments, there is nothing to keep; leave it out"); err != nil {
			return nil, err
		}
		return a.fromDigests(ctx, s, names)
	}
	p, err := a.prepare(ctx, s)
	if err != nil {
		return nil, err
	}
	defer p.src.Close()
	if err := a.openCheckpoint(ctx, s, p, "fit", onFit); err != nil {
		return nil, err
	}
	stop := a.watch(s, p.opts.Meter)
	res, err := vcov.Fit(ctx, p.src, p.design, p.opts)
	stop()
	if err != nil {
		return nil, err
	}
	if len(res.Errors) != len(p.opts.Errors) {
		return nil, &internalError{fmt.Sprintf("%d kinds of errors for %d asked", len(res.Errors), len(p.opts.Errors))}
	}
	res.Model.Errors = p.req.names()
	res.Model.BadRows = s.badRows
	res.Run.PeakBytes = peakBytes()
	if n := p.src.Info().Skipped; n > 0 {
		res.Warnings = append(res.Warnings, vcov.Warning{Code: "skipped-files", Text: fmt.Sprintf("%s in folders passed over because the name starts with _ or .", plural(int64(n), "file", "files"))})
	}
	return &fitted{res, p.req, p.done}, nil
}

// echo says in full what was asked.
func (s *settings) echo(req request) vcov.Model {
	opt := func(t string) *string {
		if t == "" {
			return nil
		}
		return &t
	}
	return vcov.Model{
		Outcome: s.outcome, Terms: list(s.terms), Constant: !s.noConstant && s.sweep == "", Sweep: opt(s.sweep),
		Weight: opt(s.weight), WeightKind: opt(s.weightKind), Where: opt(s.where),
		Cluster: list(req.keys[:req.clusters:req.clusters]), Errors: list(req.names()), Hypotheses: list(s.hypotheses), Adjust: s.adjust,
		Audit: s.auditText(req), Missing: s.missing, BadRows: s.badRows, Level: vcov.Number(s.level), Zone: s.zone.String(),
	}
}

// list keeps JSON from writing null for an empty list.
func list(x []string) []string {
	if x == nil {
		return []string{}
	}
	return x
}

// makePlan asks the planner without reading the data through.
func (a *app) makePlan(ctx context.Context, s *settings) (*prepared, *vcov.Plan, error) {
	p, err := a.prepare(ctx, s)
	if err != nil {
		return nil, nil, err
	}
	plan, err := vcov.PlanFit(ctx, p.src, p.design, p.opts)
	if err != nil {
		p.src.Close()
		return nil, nil, err
	}
	return p, plan, nil
}
