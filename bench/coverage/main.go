// Coverage counts, in invented data whose true slopes are known, how often nominal
// 95 % intervals hold them, for every kind of errors, and lays the shares beside those
// of an independent simulation:
//
//	go run ./bench/coverage                           as many replications as the reference: minutes
//	go run ./bench/coverage -repeat 500               seconds
//	go run ./bench/coverage -repeat 30000 -o FILE.md  for the record
//
// # Designs
//
// Unequal spread: n = 50, 200, 1000 rows, x1 = exp(0.7 N), x2 = 1 with probability
// 0.3 (the first two rows 1 and 0), y = 1 + x1 + x2 + (0.3 + x1) N.
//
// Clusters: G = 8, 20, 50 of 20 exp(2 i/(G-1)) / mean rows, x1 = N of the cluster + N
// of the row, x2 = 1 in 2, 6, 15 clusters, y = 1 + x1 + x2 + u, u = (sqrt 0.3 N of the
// cluster + sqrt 0.7 N of the row)(1 + 0.3 |x1|).
//
// # What is compared
//
// The reference is the design simulation, 10,000 to 40,000 replications with numpy
// (unequal spread; 4,000 to 10,000 with clusters), dense and without this program's
// code. A share p of R replications lies within its band if it is no further from the
// reference than
//
//	3 sqrt(p (1-p) (1/R + 1/R_ref))
//
// about 0.3 % of the cells are expected outside. The bootstrap has 399 draws. Where
// there are so few clusters that all patterns of signs can be run through, the program
// does that, while the reference drew them.
//
// In each replication the orderings that are theorems must hold: the errors by hc0 are
// at most those by hc1 and by hc2, these at most those by hc3, and those by cr0 at
// most those by cr1.
//
// The exit status is 1 if an ordering is violated or a cell is further from the
// reference than twice its band, 2 for a wrong flag. Same flags, same numbers, whatever
// the number of workers.
package main

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"math"
	"os"
	"os/signal"
	"runtime"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"time"

	"github.com/google/renameio/v2"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	os.Exit(run(ctx, os.Args[1:], os.Stdout, os.Stderr))
}

func run(ctx context.Context, args []string, out, errw io.Writer) int {
	f := flag.NewFlagSet("coverage", flag.ContinueOnError)
	f.SetOutput(errw)
	repeat := f.Int("repeat", 0, "replications of each design; 0: as many as the reference")
	seed := f.Uint64("seed", 1, "seed of the data")
	output := f.String("o", "", "write the tables to this `file`, too")
	workers := f.Int("workers", runtime.GOMAXPROCS(0), "replications done at the same time")
	err := f.Parse(args)
	switch {
	case errors.Is(err, flag.ErrHelp):
		return 0
	case err != nil:
		return 2
	case f.NArg() > 0:
		err = fmt.Errorf("found %q, want flags only", f.Arg(0))
	case *repeat < 0:
		err = fmt.Errorf("-repeat %d: want 0 or more", *repeat)
	case *workers < 1:
		err = fmt.Errorf("-workers %d: want at least 1", *workers)
	}
	if err != nil {
		fmt.Fprintln(errw, "coverage:", err)
		return 2
	}
	start := time.Now()
	var counts []*count
	for _, d := range designs {
		n := *repeat
		if n == 0 {
			n = d.refReps
		}
		begin := time.Now()
		c, err := simulate(ctx, d, *seed, n, *workers)
		if err != nil {
			fmt.Fprintln(errw, "coverage:", err)
			return 1
		}
		fmt.Fprintf(errw, "%s: %d replications, %v\n", d.name, n, time.Since(begin).Round(time.Second))
		counts = append(counts, c)
	}
	var text bytes.Buffer
	bad := render(&text, counts)
	fmt.Fprintf(&text, "\nSeed %d; workers: %d; %v.\n", *seed, *workers, time.Since(start).Round(time.Second))
	out.Write(text.Bytes())
	if *output != "" {
		if err := renameio.WriteFile(*output, text.Bytes(), 0o644); err != nil {
			fmt.Fprintln(errw, "coverage:", err)
			return 1
		}
	}
	if bad {
		return 1
	}
	return 0
}

// count is what the replications of a design came to.
type count struct {
	design     *design
	reps       int
	hits       [][2]int   // by column of the design, b1 and b2
	df         [2]float64 // sums of the degrees of freedom of cr2
	violations []string
	orderings  int // checked
}

// simulate runs the replications of a design.
func simulate(ctx context.Context, d *design, seed uint64, reps, workers int) (*count, error) {
	samples := make([]*sample, reps)
	errs := make([]error, workers)
	var next atomic.Int64
	var wg sync.WaitGroup
	for w := range workers {
		wg.Go(func() {
			for ctx.Err() == nil {
				rep := int(next.Add(1)) - 1
				if rep >= reps {
					return
				}
				s, err := d.sample(ctx, seed, uint64(rep))
				if err != nil {
					errs[w] = fmt.Errorf("%s, replication %d: %w", d.name, rep, err)
					return
				}
				samples[rep] = s
			}
		})
	}
	wg.Wait()
	if err := errors.Join(append(errs, ctx.Err())...); err != nil {
		return nil, err
	}
	c := &count{design: d, reps: reps, hits: make([][2]int, len(d.columns))}
	for rep, s := range samples {
		for i, held := range s.held {
			for j, h := range held {
				if h {
					c.hits[i][j]++
				}
			}
		}
		for j, df := range s.df {
			c.df[j] += df
		}
		c.orderings += s.orderings
		for _, v := range s.violations {
			c.violations = append(c.violations, fmt.Sprintf("%s, replication %d: %s", d.name, rep, v))
		}
	}
	return c, nil
}

// band is three standard errors of the difference of two shares.
func band(p float64, reps, refReps int) float64 {
	return 3 * math.Sqrt(p*(1-p)*(1/float64(reps)+1/float64(refReps)))
}

// render writes the tables; true if an ordering is violated or a cell far outside.
func render(w io.Writer, counts []*count) (bad bool) {
	fmt.Fprintf(w, "# Coverage of nominal 95 %% intervals\n\n"+
		"Share of replications whose interval holds the true slope, of b1 / b2; in brackets the same share in the design\n"+
		"simulation, %d to %d replications with numpy, and the band within which a share agrees with it:\n"+
		"3 sqrt(p (1-p) (1/R + 1/R_ref)). Cells outside it are **bold**. The designs stand in the package comment.\n", 4000, 40_000)
	cells, outside, orderings := 0, 0, 0
	var violations []string
	family := ""
	for _, c := range counts {
		d := c.design
		if d.family != family {
			family = d.family
			fmt.Fprintf(w, "\n## %s\n\n| design | R | R_ref |", family)
			for _, col := range d.columns {
				fmt.Fprintf(w, " %s |", col.name)
			}
			fmt.Fprintf(w, "\n|---|---|---|%s\n", strings.Repeat("---|", len(d.columns)))
		}
		fmt.Fprintf(w, "| %s | %d | %d |", d.name, c.reps, d.refReps)
		for i, ref := range d.reference {
			var got, want, within [2]string
			for j, p := range ref {
				share := float64(c.hits[i][j]) / float64(c.reps)
				b := band(p, c.reps, d.refReps)
				got[j], want[j], within[j] = fmt.Sprintf("%.3f", share), fmt.Sprintf("%.3f", p), fmt.Sprintf("%.3f", b)
				cells++
				if off := math.Abs(share - p); off > b {
					outside++
					got[j] = "**" + got[j] + "**"
					bad = bad || off > 2*b
				}
			}
			fmt.Fprintf(w, " %s / %s (%s ± %s / %s ± %s) |", got[0], got[1], want[0], within[0], want[1], within[1])
		}
		fmt.Fprintln(w)
		orderings += c.orderings
		violations = append(violations, c.violations...)
	}
	fmt.Fprintln(w)
	for _, c := range counts {
		if d := c.design; d.refDF[0] > 0 {
			n := float64(c.reps)
			fmt.Fprintf(w, "- %s: mean degrees of freedom of cr2 %.1f / %.1f (design simulation %.1f / %.1f)\n", d.name, c.df[0]/n, c.df[1]/n, d.refDF[0], d.refDF[1])
		}
	}
	fmt.Fprintf(w, "- cells outside their band: %d of %d; %.1f are expected if all agree\n", outside, cells, 0.0027*float64(cells))
	fmt.Fprintf(w, "- orderings that are theorems (hc0 ≤ hc1, hc0 ≤ hc2 ≤ hc3, cr0 ≤ cr1): %d violated of %d\n", len(violations), orderings)
	for _, v := range violations[:min(len(violations), 10)] {
		fmt.Fprintf(w, "  - %s\n", v)
	}
	return bad || len(violations) > 0
}
