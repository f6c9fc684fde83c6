package main

import (
	"context"
	"encoding/json"
	"io"
	"os"
	"reflect"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// planFormat is the name and version of a plan.
const planFormat = "tallrow-plan/1"

// planFile is a plan as `plan` prints and writes it and as --plan reads it.
type planFile struct {
	Format  string      `json:"format"`
	Version string      `json:"version"`
	Model   vcov.Model  `json:"model"`
	Reading planReading `json:"reading"`
	Input   planInput   `json:"input"`
	// Unread is what the fit will not read, as its row filter excludes it by
	// statistics and folder names.
	Unread     stream.Unread `json:"unread"`
	Columns    []planColumn  `json:"columns"`
	Terms      []string      `json:"terms"`
	Passes     int           `json:"passes"`
	Route      string        `json:"route"`
	Arithmetic string        `json:"arithmetic"`
	Workers    int           `json:"workers"`
	Memory     int64         `json:"memory"`
	PerCluster int64         `json:"memory_per_cluster"`
	Clusters   int64         `json:"memory_clusters"` // beyond it sums of clusters go to scratch
	PerLevel   int64         `json:"memory_per_level"`
	PerPair    int64         `json:"memory_per_pair"`
	PerUnique  int64         `json:"memory_per_unique_row"`
	Bound      int64         `json:"memory_bound"`
	// Digest estimates the size of a digest for these errors, and of each cluster in it.
	Digest           int64      `json:"digest_bytes"`
	DigestPerCluster int64      `json:"digest_bytes_per_cluster"`
	Costs            []planCost `json:"costs"`
	Reasons          []string   `json:"reasons"`
}

// planReading is how the data are read: part of what must not change.
type planReading struct {
	Format   string            `json:"format"`
	NoHeader bool              `json:"no_header"`
	Decimal  string            `json:"decimal"`
	Null     []string          `json:"null"`
	Kinds    map[string]string `json:"kinds"`
	First    int64             `json:"first"` // 0: all
}

// planInput identifies the data; unknown numbers are -1, the stamp of a pipe is
// empty.
type planInput struct {
	Stamp    string `json:"stamp"`
	Format   string `json:"format"`
	Files    int    `json:"files"`
	Bytes    int64  `json:"bytes"`
	Rows     int64  `json:"rows"`
	Segments int    `json:"segments"`
}

type planColumn struct {
	Name string `json:"name"`
	Kind string `json:"kind"`
	Used bool   `json:"used"`
}

type planCost struct {
	What  string  `json:"what"`
	Share float64 `json:"share"`
}

func (s *settings) planReading() planReading {
	r := planReading{Format: s.format, NoHeader: s.noHeader, Decimal: s.decimal,
		Null: s.reading().Null, Kinds: map[string]string{}, First: s.first}
	for c, k := range s.kinds {
		r.Kinds[c] = k.String()
	}
	return r
}

// newPlanFile writes down a plan.
func newPlanFile(ctx context.Context, p *prepared, plan *vcov.Plan) (*planFile, error) {
	info := p.src.Info()
	pf := &planFile{
		Format: planFormat, Version: version,
		Model: p.s.echo(p.req), Reading: p.s.planReading(),
		Input: planInput{Format: info.Format, Files: info.Files, Bytes: info.Bytes, Rows: info.Rows, Segments: info.Segments},
		Terms: list(plan.Terms), Passes: plan.Passes, Route: plan.Route, Arithmetic: plan.Arithmetic,
		Workers: plan.Workers, Memory: plan.Memory, PerCluster: plan.PerCluster, Clusters: plan.ClusterMemory, PerLevel: plan.PerLevel, PerPair: plan.PerPair, PerUnique: plan.PerUnique, Bound: p.s.memoryBound(),
		Costs: []planCost{}, Reasons: list(plan.Reasons),
	}
	for _, c := range plan.Costs {
		pf.Costs = append(pf.Costs, planCost{c.What, c.Share})
	}
	var err error
	// 0 where an error goes by more than sums: fit has checked all else.
	pf.Digest, pf.DigestPerCluster, _ = vcov.DigestSize(p.design, p.opts)
	if pf.Input.Stamp, err = p.stamp(); err != nil {
		return nil, err
	}
	if pf.Unread, err = p.design.Unread(ctx, p.src); err != nil {
		return nil, err
	}
	pf.Columns = p.columns()
	return pf, nil
}

// stamp identifies the input, "" if it comes by a pipe.
func (p *prepared) stamp() (string, error) {
	for _, d := range p.s.data {
		if p.a.isPipe(d) {
			return "", nil
		}
	}
	return p.src.Stamp()
}

func (p *prepared) columns() []planColumn {
	schema := p.src.Schema()
	used := make([]bool, len(schema.Columns))
	for _, u := range p.design.Uses() {
		used[u.Column] = true
	}
	cols := make([]planColumn, len(schema.Columns))
	for i, c := range schema.Columns {
		cols[i] = planColumn{c.Name, c.Kind.String(), used[i]}
	}
	return cols
}

// readPlan reads what `plan -o FILE` wrote.
func readPlan(name string) (*planFile, error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, stream.Usef("plan %s: %s", name, plainPathError(err))
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, 64<<20))
	if err != nil {
		return nil, stream.Usef("plan %s: %s", name, plainPathError(err))
	}
	var pf planFile
	if err := json.Unmarshal(data, &pf); err != nil {
		return nil, stream.Usef("plan %s: %s; want the file that tallrow plan -o writes", name, err)
	}
	if pf.Format != planFormat {
		return nil, stream.Usef("plan %s: found format %q, want %q", name, pf.Format, planFormat)
	}
	if pf.Passes != 1 && pf.Passes != 2 {
		return nil, stream.Usef("plan %s: found %d passes, want 1 or 2", name, pf.Passes)
	}
	switch pf.Arithmetic {
	case "auto", "double", "extended":
	default:
		return nil, stream.Usef("plan %s: found arithmetic %q, want auto, double or extended", name, pf.Arithmetic)
	}
	return &pf, nil
}

// adopt refuses a plan that reads in another way and takes over passes and
// kinds.
func (pf *planFile) adopt(s *settings, o *stream.Options) error {
	if what, then, now := difference(pf.Reading, s.planReading()); what != "" {
		return stream.Usef("--plan %s reads the data in another way: %s is %s there and %s here", s.plan, what, then, now)
	}
	if s.passes != 0 && s.passes != pf.Passes {
		return stream.Usef("%s %d: the plan %s has %d", s.origin("passes"), s.passes, s.plan, pf.Passes)
	}
	s.passes = pf.Passes
	if s.arithmetic != "auto" && s.arithmetic != pf.Arithmetic {
		return stream.Usef("%s %s: the plan %s has %s", s.origin("arithmetic"), s.arithmetic, s.plan, pf.Arithmetic)
	}
	s.arithmetic = pf.Arithmetic
	if strings.HasPrefix(pf.Input.Format, "csv") {
		// The first rows of a pipe may be others this time. What a time means
		// (zone, day) is not in its kind, so those are left to the reader.
		kinds := map[string]stream.Kind{}
		for _, c := range pf.Columns {
			if k, ok := stream.ParseKind(c.Kind); ok && k != stream.Time {
				kinds[c.Name] = k
			}
		}
		for c, k := range s.kinds {
			kinds[c] = k
		}
		o.Kinds = kinds
	}
	return nil
}

// check refuses a plan of another model or input.
func (pf *planFile) check(p *prepared) error {
	if what, then, now := difference(pf.Model, p.s.echo(p.req)); what != "" {
		return stream.Usef("--plan %s is of another model: %s is %s there and %s here", p.s.plan, what, then, now)
	}
	stamp, err := p.stamp()
	if err != nil {
		return err
	}
	switch {
	case pf.Input.Stamp == "" && stamp != "":
		return stream.Usef("--plan %s is of a pipe, the data are files", p.s.plan)
	case stamp == "" && pf.Input.Stamp != "":
		return stream.Usef("--plan %s is of files, the data come by a pipe", p.s.plan)
	case pf.Input.Stamp != stamp:
		return stream.Usef("--plan %s is of other data: names, sizes or times of the files have changed", p.s.plan)
	}
	now := p.columns()
	for i, c := range pf.Columns {
		if i >= len(now) || now[i].Name != c.Name || now[i].Kind != c.Kind {
			return stream.Usef("--plan %s is of other data: column %d is %s %s there", p.s.plan, i+1, c.Name, c.Kind)
		}
	}
	if len(now) > len(pf.Columns) {
		return stream.Usef("--plan %s is of other data: column %s is new", p.s.plan, now[len(pf.Columns)].Name)
	}
	return nil
}

// difference names the first field, by its JSON name, in which two structs of
// one type differ, and gives both values.
func difference[T any](a, b T) (what, then, now string) {
	x, y := reflect.ValueOf(a), reflect.ValueOf(b)
	for i := range x.NumField() {
		f, g := x.Field(i).Interface(), y.Field(i).Interface()
		j1, err1 := json.Marshal(f)
		j2, err2 := json.Marshal(g)
		if err1 != nil || err2 != nil || string(j1) != string(j2) {
			name, _, _ := strings.Cut(x.Type().Field(i).Tag.Get("json"), ",")
			return strings.ReplaceAll(name, "_", "-"), string(j1), string(j2)
		}
	}
	return "", "", ""
}
