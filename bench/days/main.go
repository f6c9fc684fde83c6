// Command days keeps a month of day digests and answers questions from them, beside
// reading the data again:
//
//	go run ./bench/days -rows 1000000 -o bench/recorded/days.md
//
// Every day has a Parquet file of its own. Answers from the digests are compared with
// fits of the data over the same rows; the largest relative difference of estimates and errors is printed
// beside the times, which are those of whole processes, the best of -repeat.
package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"io"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"time"

	"github.com/tallrow/tallrow/bench/quaydata"
)

func main() {
	if err := run(context.Background(), os.Args[1:], os.Stderr); err != nil {
		fmt.Fprintln(os.Stderr, "days:", err)
		os.Exit(1)
	}
}

// session is one run of the program.
type session struct {
	ctx    context.Context
	log    io.Writer
	bin    string
	dir    string
	repeat int
	out    bytes.Buffer
}

func run(ctx context.Context, args []string, log io.Writer) error {
	fs := flag.NewFlagSet("days", flag.ContinueOnError)
	fs.SetOutput(log)
	days := fs.Int("days", 30, "days")
	rows := fs.Int64("rows", 1_000_000, "rows of a day")
	repeat := fs.Int("repeat", 3, "runs of each, of which the best counts")
	work := fs.String("dir", "", "folder for data and digests; a temporary one unless given")
	output := fs.String("o", "", "write the record there instead of standard output")
	if err := fs.Parse(args); err != nil {
		return err
	}
	s := &session{ctx: ctx, log: log, dir: *work, repeat: *repeat}
	if s.dir == "" {
		dir, err := os.MkdirTemp("", "days-")
		if err != nil {
			return err
		}
		defer os.RemoveAll(dir)
		s.dir = dir
	}
	s.bin = filepath.Join(s.dir, "tallrow")
	if out, err := exec.CommandContext(ctx, "go", "build", "-o", s.bin, "github.com/tallrow/tallrow/cmd/tallrow").CombinedOutput(); err != nil {
		return fmt.Errorf("building tallrow: %w\n%s", err, out)
	}
	if err := s.month(*days, *rows); err != nil {
		return err
	}
	if *output == "" {
		_, err := os.Stdout.Write(s.out.Bytes())
		return err
	}
	return os.WriteFile(*output, s.out.Bytes(), 0o644)
}

var model = []string{"--outcome", "minutes", "--terms", "pallets, tonnes, crew, wet, night", "--errors", "hc1, cr1(quay), cr1(crane)", "--keep", "pallets*tonnes, log(minutes)", "--quiet"}

// questions are asked of the month; fit says how the data answer the same one.
var questions = []struct {
	what    string
	ask, of []string
}{
	{what: "the whole model, classical, hc1, cr1(quay), cr1(crane)"},
	{what: "without crew and night, hc1", ask: []string{"--terms", "pallets, tonnes, wet", "--errors", "hc1"}, of: []string{"--terms", "pallets, tonnes, wet", "--errors", "hc1", "--where", "!missing(crew)"}},
	{what: "with pallets*tonnes, cr2(quay), and a hypothesis", ask: []string{"--terms", "pallets, tonnes, crew, wet, night, pallets*tonnes", "--errors", "cr2(quay)", "--hypothesis", "pallets = 2"},
		of: []string{"--terms", "pallets, tonnes, crew, wet, night, pallets*tonnes", "--errors", "cr2(quay)", "--hypothesis", "pallets = 2"}},
	{what: "another outcome, log(minutes), cr1(quay)", ask: []string{"--outcome", "log(minutes)", "--errors", "cr1(quay)"}, of: []string{"--outcome", "log(minutes)", "--errors", "cr1(quay)"}},
	{what: "wild cluster bootstrap by quay, 9,999 draws", ask: []string{"--errors", "wcr(quay)"}, of: []string{"--errors", "wcr(quay)"}},
}

func (s *session) month(days int, rows int64) error {
	var data, digests []string
	var stored, kept int64
	var making, reading time.Duration
	for d := range days {
		file := filepath.Join(s.dir, fmt.Sprintf("day-%02d.parquet", d+1))
		if _, err := os.Stat(file); err != nil {
			if err := write(s.ctx, file, rows, uint64(d+1)); err != nil {
				return err
			}
		}
		st, err := os.Stat(file)
		if err != nil {
			return err
		}
		stored += st.Size()
		name := strings.TrimSuffix(file, ".parquet") + ".digest"
		args := slices.Concat([]string{"digest"}, model, []string{file, "-o", name})
		if d > 0 {
			args = append(args, "--frame-from", digests[0])
		}
		t, _, err := s.best(args...)
		if err != nil {
			return err
		}
		making += t
		t, _, err = s.best(slices.Concat([]string{"fit"}, model[:6], []string{"--quiet", "--json", file})...)
		if err != nil {
			return err
		}
		reading += t
		if st, err = os.Stat(name); err != nil {
			return err
		}
		kept += st.Size()
		data, digests = append(data, file), append(digests, name)
		fmt.Fprintf(s.log, "day %d\n", d+1)
	}
	pooled := filepath.Join(s.dir, "month.digest")
	pool, _, err := s.best(slices.Concat([]string{"pool"}, digests, []string{"-o", pooled})...)
	if err != nil {
		return err
	}
	st, err := os.Stat(pooled)
	if err != nil {
		return err
	}
	n := float64(days)
	fmt.Fprintf(&s.out, "# %d days of %d rows\n\n%s; %d processors; whole processes, the best of %d runs.\n\n", days, rows, time.Now().Format("2006-01-02"), runtime.NumCPU(), s.repeat)
	fmt.Fprintf(&s.out, "| | |\n|---|---|\n| a day of data | %s |\n| its digest (7 columns kept, hc1, 60 quays, 2,000 cranes) | %s |\n| making a digest, a day | %.3f s |\n| fitting the day (hc1, cr1, cr1), for comparison | %.3f s |\n| pooling %d digests | %.3f s |\n| the pooled digest | %s |\n\n",
		size(stored/int64(days)), size(kept/int64(days)), making.Seconds()/n, reading.Seconds()/n, days, pool.Seconds(), size(st.Size()))
	fmt.Fprint(&s.out, "| question | of the pooled digest | of the digests | of the data | data / pooled | largest relative difference |\n|---|---|---|---|---|---|\n")
	for _, q := range questions {
		one, a, err := s.best(slices.Concat([]string{"fit"}, q.ask, []string{"--quiet", "--json", pooled})...)
		if err != nil {
			return err
		}
		many, b, err := s.best(slices.Concat([]string{"fit"}, q.ask, []string{"--quiet", "--json"}, digests)...)
		if err != nil {
			return err
		}
		base := model[:6]
		if q.of != nil {
			base = without(base, q.of)
		}
		all, c, err := s.best(slices.Concat([]string{"fit"}, base, q.of, []string{"--quiet", "--json"}, data)...)
		if err != nil {
			return err
		}
		diff := math.Max(apart(a, c), apart(b, c))
		if math.IsNaN(diff) {
			return fmt.Errorf("%s: answers are of different form", q.what)
		}
		fmt.Fprintf(&s.out, "| %s | %.3f s | %.3f s | %.3f s | %.0f | %.1e |\n", q.what, one.Seconds(), many.Seconds(), all.Seconds(), all.Seconds()/one.Seconds(), diff)
		fmt.Fprintln(s.log, q.what)
	}
	series, _, err := s.best(slices.Concat([]string{"fit", "--each-digest", "--json", "--quiet"}, digests)...)
	if err != nil {
		return err
	}
	fmt.Fprintf(&s.out, "\nDay by day (`--each-digest`, %d fits): %.3f s, against %.3f s of reading each day again.\n", days, series.Seconds(), reading.Seconds())
	return nil
}

// without drops the options of args that more gives anew.
func without(args, more []string) []string {
	var out []string
	for i := 0; i+1 < len(args); i += 2 {
		if !slices.Contains(more, args[i]) {
			out = append(out, args[i], args[i+1])
		}
	}
	return out
}

func write(ctx context.Context, name string, rows int64, seed uint64) (err error) {
	d, err := quaydata.New(quaydata.Config{Rows: rows, Seed: seed})
	if err != nil {
		return err
	}
	f, err := os.Create(name)
	if err != nil {
		return err
	}
	return errors.Join(d.WriteParquet(ctx, f, nil), f.Close())
}

// best runs tallrow and returns its shortest time and output.
func (s *session) best(args ...string) (time.Duration, []byte, error) {
	best := time.Duration(math.MaxInt64)
	var out []byte
	for range s.repeat {
		var stdout, stderr bytes.Buffer
		cmd := exec.CommandContext(s.ctx, s.bin, args...)
		cmd.Stdout, cmd.Stderr = &stdout, &stderr
		start := time.Now()
		if err := cmd.Run(); err != nil {
			return 0, nil, fmt.Errorf("tallrow %q: %w\n%s", args, err, stderr.String())
		}
		best, out = min(best, time.Since(start)), stdout.Bytes()
	}
	return best, out, nil
}

// apart is the largest relative difference of estimates and errors, NaN if the answers
// are of different form.
func apart(a, b []byte) float64 {
	type answer struct {
		Estimates []float64 `json:"estimates"`
		Errors    []struct {
			Kind     string    `json:"kind"`
			Clusters []string  `json:"clusters"`
			SE       []float64 `json:"se"`
		} `json:"errors"`
	}
	var x, y answer
	if json.Unmarshal(a, &x) != nil || json.Unmarshal(b, &y) != nil || len(x.Estimates) == 0 || len(x.Estimates) != len(y.Estimates) {
		return math.NaN()
	}
	worst := 0.0
	see := func(p, q []float64) {
		for i := range p {
			worst = math.Max(worst, math.Abs(p[i]-q[i])/math.Max(math.Abs(p[i]), math.Abs(q[i])))
		}
	}
	see(x.Estimates, y.Estimates)
	found := 0
	for _, e := range x.Errors {
		for _, o := range y.Errors {
			if e.Kind == o.Kind && slices.Equal(e.Clusters, o.Clusters) && len(e.SE) == len(o.SE) {
				see(e.SE, o.SE)
				found++
			}
		}
	}
	if found == 0 {
		return math.NaN()
	}
	return worst
}

func size(n int64) string {
	switch {
	case n >= 1<<30:
		return fmt.Sprintf("%.2f GiB", float64(n)/(1<<30))
	case n >= 1<<20:
		return fmt.Sprintf("%.1f MiB", float64(n)/(1<<20))
	}
	return fmt.Sprintf("%.0f KiB", float64(n)/(1<<10))
}
