package main

import (
	"context"
	"errors"
	"fmt"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// series is one fit for each of several digests.
type series struct {
	Format string      `json:"format"`
	Fits   []seriesFit `json:"fits"`
}

// seriesFit is the fit of one digest, or why there is none.
type seriesFit struct {
	Digest string       `json:"digest"`
	Fit    *vcov.Result `json:"fit"`
	Reason *string      `json:"reason"`

	view *view
}

// eachFit fits every digest by itself. A digest without rows has no fit, with the
// reason; other errors end it.
func (a *app) eachFit(ctx context.Context, s *settings) (*series, error) {
	names, err := digestsAmong(ctx, s.data, false)
	if err != nil {
		return nil, err
	}
	if len(names) == 0 {
		return nil, stream.Usef("--each-digest is for digests; %s is data", s.data[0])
	}
	out := &series{Format: "tallrow-series/1", Fits: []seriesFit{}}
	for _, n := range names {
		x := seriesFit{Digest: n}
		f, err := a.fromDigests(ctx, s, []string{n})
		var none *accum.NoRowsError
		switch {
		case errors.As(err, &none):
			why := err.Error()
			x.Reason = &why
		case err != nil:
			return nil, err
		default:
			x.view = newView(f.res, f.req.names())
			x.Fit = x.view.document()
		}
		out.Fits = append(out.Fits, x)
	}
	return out, nil
}

// render writes, for each term, its estimates digest by digest.
func (x *series) render(width int) string {
	width = min(max(width, narrowest), widest)
	var b strings.Builder
	var terms []string
	lead := ""
	seen := map[string]bool{}
	for _, f := range x.Fits {
		if f.Fit == nil {
			continue
		}
		if f.view.lead != nil && lead == "" {
			lead = f.view.lead.Name()
		}
		for _, t := range f.Fit.Terms {
			if !seen[t] {
				seen[t] = true
				terms = append(terms, t)
			}
		}
	}
	short := sharedAffix(x.Fits)
	for _, t := range terms {
		name, rows := column{head: []string{t}, left: true}, column{head: []string{"rows"}}
		est, err := column{head: []string{"estimate"}}, column{head: []string{"error"}}
		low, high := column{head: []string{"from"}}, column{head: []string{"to"}}
		for _, f := range x.Fits {
			name.cells = append(name.cells, short(f.Digest))
			cells := []string{"", "-", "-", "-", "-"}
			if f.Fit != nil {
				cells[0] = count(f.Fit.Rows.Used)
				for j, o := range f.Fit.Terms {
					if o != t {
						continue
					}
					cells[1] = digits(float64(f.Fit.Estimates[j]), 6)
					if e := f.view.lead; e != nil {
						for i, v := range []vcov.Number{vcov.Number(at(e.SE, j)), vcov.Number(at(e.Low, j)), vcov.Number(at(e.High, j))} {
							if v.Exists() {
								cells[2+i] = digits(float64(v), 5)
							}
						}
					}
				}
			}
			for i, c := range []*column{&rows, &est, &err, &low, &high} {
				c.cells = append(c.cells, cells[i])
			}
		}
		writeTable(&b, []column{name, rows, est, err, low, high}, nil)
		b.WriteByte('\n')
	}
	for _, f := range x.Fits {
		if f.Reason != nil {
			fmt.Fprintf(&b, "%s: no fit: %s\n", f.Digest, *f.Reason)
		}
	}
	if lead != "" {
		for _, l := range wrap(fmt.Sprintf("Errors and intervals by %s, each digest by itself. Intervals of many days are many chances to be wrong: one in twenty misses the truth by chance.", lead), width) {
			b.WriteString(l + "\n")
		}
	}
	for _, l := range wrap(caution, width) {
		b.WriteString(l + "\n")
	}
	return b.String()
}

// sharedAffix gives names without the folder that all share.
func sharedAffix(fits []seriesFit) func(string) string {
	pre := ""
	for i, f := range fits {
		dir := f.Digest[:strings.LastIndexByte(f.Digest, '/')+1]
		if i == 0 {
			pre = dir
		}
		for !strings.HasPrefix(dir, pre) {
			pre = pre[:strings.LastIndexByte(strings.TrimSuffix(pre, "/"), '/')+1]
		}
	}
	return func(s string) string { return strings.TrimPrefix(s, pre) }
}
