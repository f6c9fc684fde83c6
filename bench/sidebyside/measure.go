package main

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"
)

// contestant is one program with one task.
type contestant struct {
	name    string
	workers int
	// compare names those that must give the same numbers; "" for none.
	compare string
	exact   bool // to the last bit; otherwise to tolerance
	outside bool // calculated by nothing of this project
	base    bool // ratios of the contestants with as many workers are against it
	// optional ones that fail in the first round are skipped, with the reason.
	optional bool
	skip     string // a reason not to run at all
	rows     int64  // that must be read; 0 if it says nothing of rows
	bytes    int64  // of the file, for MB/s; 0 if there is none
	cell     *cell
	limit    time.Duration // of one run, and of all rounds together; 0 for the session's
	command  func(check bool) (env, argv []string)
	read     func(measured) (answer, error)
}

// tolerance of standard errors, estimates and sums, relative. Estimates are
// compared on the scale of their error where that is larger.
const tolerance = 1e-8

// apart is the largest relative difference of two answers.
func apart(a, b answer) (float64, error) {
	if a.Rows != b.Rows {
		return 0, fmt.Errorf("%d rows, not %d", a.Rows, b.Rows)
	}
	if len(a.Sums) != len(b.Sums) || len(a.Beta) != len(b.Beta) || len(a.SE) != len(b.SE) {
		return 0, fmt.Errorf("%d sums, %d estimates, %d errors, not %d, %d, %d",
			len(a.Sums), len(a.Beta), len(a.SE), len(b.Sums), len(b.Beta), len(b.SE))
	}
	worst := 0.0
	see := func(x, y, scale float64) {
		// A NaN is as far away as can be.
		if d := math.Abs(x-y) / scale; x != y && !(d <= worst) {
			worst = d
			if d != d {
				worst = math.Inf(1)
			}
		}
	}
	for j := range a.Sums {
		see(a.Sums[j], b.Sums[j], math.Abs(b.Sums[j]))
	}
	for j := range a.SE {
		see(a.SE[j], b.SE[j], math.Abs(b.SE[j]))
	}
	for j := range a.Beta {
		see(a.Beta[j], b.Beta[j], max(math.Abs(b.Beta[j]), math.Abs(b.SE[j])))
	}
	return worst, nil
}

// check compares an answer with the one that it must equal.
func (c *contestant) check(a, want answer) (float64, error) {
	d, err := apart(a, want)
	if err != nil {
		return d, err
	}
	limit := tolerance
	if c.exact {
		limit = 0
	}
	if d > limit {
		return d, fmt.Errorf("relative difference %.2g, more than %.2g", d, limit)
	}
	return d, nil
}

var errPatience = errors.New("stopped, it took too long")

// turn runs a contestant once.
func (c *contestant) turn(ctx context.Context, check bool) (m measured, a answer, err error) {
	ctx, stop := context.WithTimeoutCause(ctx, c.limit, errPatience)
	defer stop()
	env, argv := c.command(check)
	if m, err = runChild(ctx, c.workers, env, argv...); err != nil {
		return m, a, err
	}
	if a, err = c.read(m); err != nil {
		return m, a, err
	}
	if c.rows > 0 && a.Rows != c.rows {
		return m, a, fmt.Errorf("%d rows, want %d", a.Rows, c.rows)
	}
	return m, a, nil
}

// compete runs the contestants one after another, once to see that they agree
// (and to bring the files into the page cache) and then repeat times, all of them
// in every round, so that a machine that slows down does so for all. Those that
// fail or do not agree get no times.
func (s *session) compete(ctx context.Context, sc *Scenario, list []contestant, repeat int) error {
	first := make(map[string]answer) // by compare
	outside := make(map[string]bool)
	answers := make([]answer, len(list))
	rounds := make([][]measured, len(list))
	own := make([][]float64, len(list))
	results := make([]*Result, len(list))
	turns := make([]int, len(list)) // how many it gets
	defer func() {                  // also when the run is stopped
		for i, r := range results {
			switch {
			case r == nil || r.Status != "ok":
			case len(own[i]) == 0:
				r.Status, r.Reason = "stopped", "before it was timed"
			default:
				r.fill(&list[i], rounds[i], own[i])
			}
		}
	}()
	for i := range list {
		c := &list[i]
		if c.limit == 0 {
			c.limit = s.patience
		}
		r := &Result{Name: c.name, Workers: c.workers, Status: "ok", Outside: c.outside, Cell: c.cell}
		results[i] = r
		sc.Results = append(sc.Results, r)
		if c.skip != "" {
			r.Status, r.Reason = "skipped", c.skip
			continue
		}
		s.say("%s: check of %s, %s", sc.Name, c.name, workersText(c.workers))
		m, a, err := c.turn(ctx, true)
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if err != nil {
			r.Status, r.Reason = "failed", err.Error()
			if errors.Is(err, errPatience) {
				r.Status, r.Reason = "stopped", fmt.Sprintf("took longer than %v", c.limit)
			} else if c.optional {
				r.Status = "skipped"
			}
			continue
		}
		turns[i] = max(1, min(repeat, int(c.limit.Seconds()/m.wall)))
		answers[i], r.Notes = a, a.Notes
		if c.compare == "" {
			continue
		}
		want, ok := first[c.compare]
		if !ok {
			first[c.compare] = a
			continue
		}
		d, err := c.check(a, want)
		if err != nil {
			r.Status, r.Reason = "disagrees", err.Error()
			continue
		}
		r.Apart = &d
		outside[c.compare] = outside[c.compare] || c.outside
	}
	told := make(map[string]bool) // what nothing from outside confirms
	for i := range list {
		c := &list[i]
		if c.compare == "" || c.exact || outside[c.compare] || told[c.compare] || results[i].Status != "ok" {
			continue
		}
		told[c.compare] = true
		sc.Remarks = append(sc.Remarks, c.compare+": nothing from outside the project ran to confirm the numbers")
	}
	for round := range repeat {
		s.say("%s: round %d of %d", sc.Name, round+1, repeat)
		for i := range list {
			c, r := &list[i], results[i]
			if r.Status != "ok" || round >= turns[i] {
				continue
			}
			m, a, err := c.turn(ctx, false)
			if ctx.Err() != nil {
				return ctx.Err()
			}
			if err == nil && len(a.SE) > 0 {
				if d, _ := apart(a, answers[i]); d > tolerance {
					err = errors.New("another answer than in the round before")
				}
			}
			if errors.Is(err, errPatience) {
				if turns[i] = round; round == 0 {
					r.Status, r.Reason = "stopped", fmt.Sprintf("took longer than %v", c.limit)
				}
				continue
			}
			if err != nil {
				r.Status, r.Reason = "failed", err.Error()
				continue
			}
			rounds[i] = append(rounds[i], m)
			own[i] = append(own[i], a.Seconds)
		}
	}
	for i := range list {
		c, r := &list[i], results[i]
		if r.Status != "ok" {
			continue
		}
		for k := range list {
			if b := &list[k]; b.base && b.workers == c.workers && results[k].Status == "ok" {
				var ratios []float64
				for round := range min(len(own[i]), len(own[k])) {
					ratios = append(ratios, own[i][round]/own[k][round])
				}
				q := median(ratios)
				r.Ratio, r.Against = &q, b.name
			}
		}
	}
	return nil
}

func (r *Result) fill(c *contestant, rounds []measured, own []float64) {
	r.Times = own
	r.Seconds, r.Least, r.Most = median(own), slices.Min(own), slices.Max(own)
	var wall, cpu []float64
	for _, m := range rounds {
		wall, cpu = append(wall, m.wall), append(cpu, m.cpu)
		r.PeakBytes = max(r.PeakBytes, m.peak)
	}
	r.Wall, r.CPU = median(wall), median(cpu)
	if c.rows > 0 && r.Seconds > 0 {
		r.NanosPerRow = r.Seconds * 1e9 / float64(c.rows)
	}
	if c.bytes > 0 && r.Seconds > 0 {
		r.MBPerSecond = float64(c.bytes) / 1e6 / r.Seconds
	}
}

// median of at least one number; the mean of the middle two of an even number.
func median(x []float64) float64 {
	x = slices.Sorted(slices.Values(x))
	n := len(x)
	return (x[(n-1)/2] + x[n/2]) / 2
}
