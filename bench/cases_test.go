package bench

import (
	"context"
	"errors"
	"fmt"

	"github.com/tallrow/tallrow/bench/reference"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
	"github.com/tallrow/tallrow/vcov"
)

// benchCase is one thing to measure.
type benchCase struct {
	name  string // key=value/key=value/...
	bytes int64
	run   func(context.Context) (outcome, error)
}

// outcome is what a run leaves behind to be checked.
type outcome struct {
	rows, used int64
	sums       []float64 // of the complete rows, by column; nil if not formed
	se         []float64 // nil if not formed
}

var (
	terms = []string{"pallets", "tonnes", "crew", "wet", "night"}
	// more are eight terms, the last of them products.
	more = append(terms[:len(terms):len(terms)], "pallets*wet", "tonnes*night", "pallets*crew")
)

func spec(terms []string, keys ...string) stream.Spec {
	return stream.Spec{Outcome: "minutes", Terms: terms, Keys: keys}
}

func open(ctx context.Context, file string) (stream.Source, error) {
	return stream.Open(ctx, []string{file}, nil, []stream.Format{columnar.Format{}, delimited.Format{}}, stream.Options{})
}

// keysOf are the clusterings that an error kind needs: cranes are 2,000 ids in
// random order, the harder case.
func keysOf(kind string) []string {
	if kind == "cr1" {
		return []string{"crane"}
	}
	return nil
}

func fitCases(d *dataset) (cases []benchCase) {
	for _, format := range []string{"csv", "parquet"} {
		for _, e := range []struct {
			kind   string
			passes int
			terms  []string
		}{{"classical", 1, terms}, {"hc1", 1, terms}, {"hc1", 2, terms}, {"cr1", 1, terms}, {"cr1", 2, terms}, {"hc1", 1, more}, {"hc1", 2, more}} {
			for _, workers := range []int{1, 2} {
				cases = append(cases, benchCase{
					name:  fmt.Sprintf("format=%s/errors=%s/passes=%d/terms=%d/workers=%d", format, e.kind, e.passes, len(e.terms), workers),
					bytes: d.sizes[format],
					run: func(ctx context.Context) (outcome, error) {
						return fit(ctx, d.files[format], e.terms, e.kind, e.passes, workers)
					},
				})
			}
		}
	}
	return cases
}

// fit opens the file and fits the model with one kind of errors, as the command
// does. It fails if the fit took another number of passes than asked.
func fit(ctx context.Context, file string, terms []string, kind string, passes, workers int) (out outcome, err error) {
	src, err := open(ctx, file)
	if err != nil {
		return out, err
	}
	defer func() { err = errors.Join(err, src.Close()) }()
	design, err := stream.NewDesign(spec(terms, keysOf(kind)...), src.Schema())
	if err != nil {
		return out, err
	}
	k := vcov.Kind{Name: kind, Cluster: len(design.Keys) - 1}
	r, err := vcov.Fit(ctx, src, design, vcov.Options{Errors: []vcov.Kind{k}, Passes: passes, Workers: workers})
	if err != nil {
		return out, err
	}
	if r.Run.Passes != passes {
		return out, fmt.Errorf("%s took %d passes, want %d", kind, r.Run.Passes, passes)
	}
	for _, e := range r.Errors {
		if e.Status != "ok" {
			return out, fmt.Errorf("%s is %s: %s", kind, e.Status, *e.Reason)
		}
		for _, v := range e.SE {
			out.se = append(out.se, float64(v))
		}
	}
	out.rows, out.used = r.Rows.Read, r.Rows.Used
	return out, nil
}

func decodeCases(d *dataset) (cases []benchCase) {
	for _, format := range []string{"csv", "parquet"} {
		for _, kind := range []string{"hc1", "cr1"} {
			columns := len(terms) + 1 + len(keysOf(kind))
			for _, workers := range []int{1, 2} {
				cases = append(cases, benchCase{
					name:  fmt.Sprintf("format=%s/columns=%d/workers=%d", format, columns, workers),
					bytes: d.sizes[format],
					run: func(ctx context.Context) (outcome, error) {
						return decode(ctx, d.files[format], kind, columns, workers)
					},
				})
			}
		}
	}
	return cases
}

// decode opens the file and reads the columns that a fit with that kind of
// errors reads, once, and does nothing with them.
func decode(ctx context.Context, file, kind string, columns, workers int) (out outcome, err error) {
	src, err := open(ctx, file)
	if err != nil {
		return out, err
	}
	defer func() { err = errors.Join(err, src.Close()) }()
	design, err := stream.NewDesign(spec(terms, keysOf(kind)...), src.Schema())
	if err != nil {
		return out, err
	}
	uses := design.Uses()
	if len(uses) != columns {
		return out, fmt.Errorf("the model reads %d columns, want %d", len(uses), columns)
	}
	out.rows, err = reference.Decode(ctx, src, uses, workers, nil)
	return out, err
}
