package main

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"time"

	"github.com/google/renameio/v2"
	"github.com/spf13/cobra"

	"github.com/tallrow/tallrow/bench/quaydata"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

func init() { commands = append(commands, newDemo) }

// demoRows is how many rows the demo makes if not told.
const demoRows = 2_000_000

// demoErrors are the kinds of errors that the demo compares.
var demoErrors = []string{"classical", "hc1", "cr1(crane)", "cr1(quay)"}

// demo holds the options of the command.
type demo struct {
	rows rowCount
	dir  string
	csv  bool
	keep bool
	seed uint64
}

// rowCount is the value of --rows.
type rowCount int64

func (r *rowCount) String() string { return fmt.Sprint(int64(*r)) }
func (r *rowCount) Type() string   { return "N" }
func (r *rowCount) Set(t string) error {
	n, err := positive(value{parts: []string{t}})
	if err != nil {
		return stream.Usef("--rows: %s", err)
	}
	*r = rowCount(n)
	return nil
}

func newDemo(a *app) *cobra.Command {
	d := &demo{rows: demoRows}
	cmd := &cobra.Command{
		Use:   "demo",
		Short: "make unloading times of freight quays, fit them, show what robust errors change",
		Long: `Makes invented data with known coefficients: unloading times at 60 river freight quays with
2,000 cranes in a year. Their spread grows with the load, and rows of a crane and of a quay move
together. Then fits them and shows which intervals hold the coefficients that were put in.`,
		Example: `  tallrow demo
  tallrow demo --rows 200000 --dir quays --csv`,
	}
	cmd.Flags().Var(&d.rows, "rows", "how many rows (default: 2,000,000)")
	cmd.Flags().StringVar(&d.dir, "dir", "", "`DIR` for the data, made if need be; they stay there (default: a temporary folder)")
	cmd.Flags().BoolVar(&d.csv, "csv", false, "make CSV in place of Parquet")
	cmd.Flags().BoolVar(&d.keep, "keep", false, "leave the data in the temporary folder")
	cmd.Flags().Uint64Var(&d.seed, "seed", 1, "other data for every `NUMBER`")
	cmd.Flags().SortFlags = false
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		if len(args) > 0 {
			return stream.Usef("demo makes its own data, found %q; tallrow fit reads yours", args[0])
		}
		return a.demo(cmd.Context(), d)
	}
	return cmd
}

func (a *app) demo(ctx context.Context, d *demo) error {
	data, err := quaydata.New(quaydata.Config{Rows: int64(d.rows), Seed: d.seed})
	if err != nil {
		return stream.Usef("%s", err)
	}
	dir, stays, err := a.demoFolder(d)
	if err != nil {
		return err
	}
	file := filepath.Join(dir, "unloading.parquet")
	if d.csv {
		file = filepath.Join(dir, "unloading.csv")
	}
	start := time.Now()
	size, err := a.writeDemo(ctx, data, file, d.csv)
	if err != nil {
		return err
	}
	out := &sink{w: a.stdout}
	say := func(format string, args ...any) error {
		return out.write([]byte(strings.Join(wrap(fmt.Sprintf(format, args...), min(out.width(), widest)), "\n") + "\n"))
	}
	cfg := data.Config()
	fate := " (removed at the end; --dir DIR keeps it)"
	if stays {
		fate = ""
	}
	if err := say("Made %s of invented unloading times (%d quays, %s cranes, %d days) in %.1f s: %s, %s%s.",
		plural(data.Rows(), "row", "rows"), cfg.Quays, count(int64(cfg.Cranes)), cfg.Days, time.Since(start).Seconds(), oneLine(file), sizeText(size), fate); err != nil {
		return err
	}
	s, err := demoSettings(file)
	if err != nil {
		return err
	}
	f, err := a.fit(ctx, s)
	if err != nil {
		return err
	}
	v := newView(f.res, f.req.names())
	v.truth = quaydata.Truth()
	text := "\n" + renderText(v, out.width()) + "\n" + honesty(v, min(out.width(), widest)) + "\n" + goOn(file, stays)
	return out.write([]byte(text))
}

// demoFolder gives the folder for the data and whether it outlives the run.
func (a *app) demoFolder(d *demo) (dir string, stays bool, err error) {
	if d.dir != "" {
		if err := os.MkdirAll(d.dir, 0o777); err != nil {
			return "", false, stream.Usef("--dir %s: %s", d.dir, plainPathError(err))
		}
		return d.dir, true, nil
	}
	dir, err = os.MkdirTemp("", "tallrow-demo-")
	if err != nil {
		return "", false, fmt.Errorf("temporary folder: %s", plainPathError(err))
	}
	if !d.keep {
		a.onExit(func() { os.RemoveAll(dir) })
	}
	return dir, d.keep, nil
}

// writeDemo writes the data to a new file that appears when it is complete.
func (a *app) writeDemo(ctx context.Context, data *quaydata.Data, file string, csv bool) (size int64, err error) {
	if _, err := os.Lstat(file); !errors.Is(err, fs.ErrNotExist) {
		if err != nil {
			return 0, fmt.Errorf("%s: %s", file, plainPathError(err))
		}
		return 0, stream.Usef("%s is there already: name another --dir, or remove it", file)
	}
	f, err := renameio.NewPendingFile(file, renameio.WithPermissions(0o644))
	if err != nil {
		return 0, fmt.Errorf("%s: %s", file, plainPathError(err))
	}
	drop := a.onExit(func() { f.Cleanup() })
	defer drop()
	failed := func(err error) (int64, error) {
		if ctx.Err() != nil {
			return 0, err
		}
		return 0, fmt.Errorf("writing %s: %s", file, plainPathError(err))
	}
	w := bufio.NewWriterSize(f, 1<<20)
	if csv {
		err = data.WriteCSV(ctx, w, nil)
	} else {
		err = data.WriteParquet(ctx, w, nil)
	}
	if err == nil {
		err = w.Flush()
	}
	if err != nil {
		return failed(err)
	}
	st, err := f.Stat()
	if err != nil {
		return failed(err)
	}
	if err := f.CloseAtomicallyReplace(); err != nil {
		return failed(err)
	}
	return st.Size(), nil
}

// demoSettings is the model of the demo over the file.
func demoSettings(file string) (*settings, error) {
	s := newSettings()
	for name, text := range map[string]string{
		"outcome": quaydata.Outcome,
		"terms":   strings.Join(quaydata.Terms(), ", "),
		"errors":  strings.Join(demoErrors, ", "),
	} {
		if err := s.give(optionNamed(name), value{parts: []string{text}}, "--"+name); err != nil {
			return nil, err
		}
	}
	s.data = []string{file}
	return s, nil
}

// honesty shows, for each term and kind of error, whether the interval holds
// the coefficient that was put in, and how many errors the estimate is off.
func honesty(v *view, width int) string {
	term := column{head: []string{"term"}, left: true}
	truth := column{head: []string{"true"}}
	off := column{head: []string{"estimate", "is off by"}}
	var rows []int
	var offs, truths []string
	for j, t := range v.res.Terms {
		x, ok := v.truth[t]
		b := at(v.res.Estimates, j)
		if !ok || math.IsNaN(b) {
			continue
		}
		rows = append(rows, j)
		term.cells = append(term.cells, shorten(t, termWidth))
		truths = append(truths, digits(x, 5))
		offs = append(offs, digits(b-x, 2))
	}
	truth.cells, off.cells = align(truths, numberWidth), align(offs, numberWidth)
	cols := []column{term, truth, off}
	for _, e := range v.shown {
		if e.Status != "ok" {
			continue
		}
		c := column{head: []string{"interval", "by " + shorten(e.Name(), 18)}, left: true}
		var cells []string
		for _, j := range rows {
			cells = append(cells, v.verdict(e, j))
		}
		c.cells = cells
		cols = append(cols, c)
	}
	var b strings.Builder
	for _, l := range wrap(fmt.Sprintf("Which %s intervals hold the true coefficient (in brackets: how many errors of that kind the estimate is off)", levelText(v.res.Model.Level)), width) {
		b.WriteString(l + "\n")
	}
	writeTable(&b, cols, nil)
	for _, l := range wrap("One data set is one draw: intervals that are right in the long run miss now and then, too (--seed draws others). Off by many errors is another matter: such an error is too small.", width) {
		b.WriteString(l + "\n")
	}
	return b.String()
}

// verdict is one cell of that table.
func (v *view) verdict(e *vcov.Errors, j int) string {
	x := v.truth[v.res.Terms[j]]
	low, high, se := at(e.Low, j), at(e.High, j), at(e.SE, j)
	if math.IsNaN(low) || math.IsNaN(high) || !(se > 0) {
		return none
	}
	word := "holds"
	if x < low || high < x {
		word = "MISSES"
	}
	return fmt.Sprintf("%-6s (%.1f)", word, math.Abs(at(v.res.Estimates, j)-x)/se)
}

// goOn gives the command that fitted the demo, or would on a file of the
// user's.
func goOn(file string, stays bool) string {
	var b strings.Builder
	fit := func(data string) {
		fmt.Fprintf(&b, "  tallrow fit --outcome %s --terms %q \\\n    --errors %q %s\n", quaydata.Outcome, strings.Join(quaydata.Terms(), ", "), strings.Join(demoErrors, ", "), data)
	}
	if stays {
		b.WriteString("The same fit again:\n")
		fit(shellWord(file))
	}
	b.WriteString("With a file of your own (CSV or Parquet), first see its columns, then name yours:\n")
	b.WriteString("  tallrow columns FILE\n")
	b.WriteString("  tallrow fit --outcome OUTCOME --terms \"TERM, TERM, each(CATEGORY)\" --cluster WHO FILE\n")
	return b.String()
}

// shellWord quotes a name for a POSIX shell if it needs that.
func shellWord(s string) string {
	plain := func(r rune) bool {
		return r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || strings.ContainsRune("/._-+:@%", r)
	}
	if s != "" && strings.IndexFunc(s, func(r rune) bool { return !plain(r) }) < 0 {
		return s
	}
	return "'" + strings.ReplaceAll(s, "'", `'\''`) + "'"
}
