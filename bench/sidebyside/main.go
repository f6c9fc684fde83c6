// Sidebyside runs the command tallrow and what else does the same work, or a part
// of it, in turn, and writes times, ratios and peak memory as a table and as JSON:
//
//	go run ./bench/sidebyside                              everything; hours, most of them scaling
//	go run ./bench/sidebyside -scenario hc1-parquet,csv    some of it
//	go run ./bench/sidebyside -rows 100000 -repeat 3       small
//	go run ./bench/sidebyside -o bench/recorded/DATE-MACHINE.json
//
// With -o FILE.json the table goes to FILE.md, too. Both are written anew after
// every scenario and say that they are not complete until the last. The exit
// status is 1 if a contestant failed or disagreed, 2 for a wrong flag.
//
// # What is compared
//
// The command, built from the checkout, against:
//
//   - the bare decode of the same columns of the Parquet file, by parquet-go's
//     own pages (ReadPage, each page's Data looked at) and by tallrow's reader
//     (stream/columnar), and the bare reading of the bytes of those columns;
//   - gonum and numpy on columns that are in memory as float64 already: HC1 by
//     its definition, in blocks of rows that fit the cache;
//   - encoding/csv with strconv, reading and parsing the same fields;
//   - an SQL engine (DuckDB by its npm package) that does the sums by hand: one
//     query for the second moments, a second for the products of scores, by id
//     first for cluster errors, with the coefficients as literals (sums.mjs);
//   - itself: passes, arithmetic, workers, rows, terms, clusters.
//
// Before anything is timed every contestant runs once. Standard errors and
// estimates must be within 1e-8, relative, of those of the command, sums of
// columns that were only read within 1e-8 of each other, numbers of rows equal;
// results of different numbers of workers in the scenario scaling equal to the
// last bit. What does not agree gets no time and no ratio. Then all contestants
// of a scenario take turns, A B C A B C, -repeat times (at most three times for
// the largest data, and fewer times for those that use up -patience); times are medians, a ratio is the median of the ratios
// within the rounds, the peak is the largest.
//
// # Which time
//
// Every contestant is a process of its own, on Linux confined to as many
// processors as it has workers. "time" is its own clock: from opening the file to
// the last number, without the start of an interpreter or the loading of data into
// memory. For the command it is the wall time of the whole process less the median
// wall time of `tallrow --version`. "wall" is the whole process for all. Ratios
// use "time". "peak" is the largest resident set of the process by the kernel's
// account; that of the contestants in memory includes the data.
//
// # Limits
//
// Files are in the page cache after the first round if the machine has the
// memory for it; the disk is not measured. The data have no missing cells, no
// text, no nested columns, and Parquet pages without dictionaries. SQL, numpy and
// gonum sum in plain float64 from raw columns; the command also centres, watches
// cancellation and joins exactly, and gives more numbers than are compared. The
// SQL engine does the standard errors in two queries as an analyst would write
// them; somebody who knows it well may find faster ones. Other work on the machine
// shows in the spread (least to most) first.
//
// # Data
//
// Invented unloading times at river freight quays, from fixed seeds: the same
// bytes everywhere for the same -rows. They are made once per size in -dir and stay
// there; files of the scenarios scaling, memory and clusters-1e7, several GB, are
// deleted at the end of the run unless -keep. -rows scales all sizes: text has
// half as many rows, long tables ten times as many.
//
// python3 with numpy and node with npm (which installs the pinned engine into
// -dir) are used if they are there; what needs them is skipped otherwise, with the
// reason.
package main

import (
	"context"
	_ "embed"
	"errors"
	"flag"
	"fmt"
	"io"
	"maps"
	"os"
	"os/exec"
	"os/signal"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"time"
)

// enginePackage is the SQL engine, pinned.
const enginePackage = "@duckdb/node-api@1.5.6-r.1"

//go:embed dense.py
var densePy string

//go:embed sums.mjs
var sumsMJS []byte

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	os.Exit(run(ctx, os.Args[1:], os.Stdout, os.Stderr))
}

func run(ctx context.Context, args []string, out, errw io.Writer) int {
	if len(args) == 2 && args[0] == "task" {
		if err := perform(ctx, args[1], out); err != nil {
			fmt.Fprintln(errw, err)
			return 1
		}
		return 0
	}
	s := &session{progress: errw, install: true, startups: map[int]float64{}, large: map[string]bool{}}
	names, err := s.flags(args, errw)
	if errors.Is(err, flag.ErrHelp) {
		return 0
	}
	if err != nil {
		fmt.Fprintln(errw, "sidebyside:", err)
		return 2
	}
	if err := s.whole(ctx, names); err != nil {
		if s.record != nil && len(s.record.Scenarios) > 0 {
			s.record.render(out) // says that it is not complete
		}
		fmt.Fprintln(errw, "sidebyside:", err)
		return 1
	}
	s.record.render(out)
	bad := s.record.bad()
	for _, b := range bad {
		fmt.Fprintln(errw, "sidebyside:", b)
	}
	if len(bad) > 0 {
		return 1
	}
	return 0
}

// session is one run.
type session struct {
	dir, root, output string
	rows              int64
	repeat            int
	patience          time.Duration
	workers           []int
	keep              bool
	self, tallrow     string
	// Interpreters; the reason is empty if they can be used.
	python, noPython       string
	node, sqlScript, noSQL string
	npm                    string          // folder with the engine
	install                bool            // the engine if it is not there
	startups               map[int]float64 // of the command, by workers
	large                  map[string]bool // files to be deleted
	record                 *Record
	progress               io.Writer
}

func (s *session) say(format string, args ...any) {
	fmt.Fprintf(s.progress, time.Now().Format("15:04:05 ")+format+"\n", args...)
}

func (s *session) flags(args []string, errw io.Writer) (names []string, err error) {
	var all []string
	for _, sc := range scenarios {
		all = append(all, sc.name)
	}
	cache, err := os.UserCacheDir()
	if err != nil {
		cache = os.TempDir()
	}
	f := flag.NewFlagSet("sidebyside", flag.ContinueOnError)
	f.SetOutput(errw)
	list := f.String("scenario", "all", "`names`, separated by commas: "+strings.Join(all, ", "))
	f.Int64Var(&s.rows, "rows", 10_000_000, "rows of the main table")
	f.IntVar(&s.repeat, "repeat", 7, "rounds in which everything is timed")
	f.DurationVar(&s.patience, "patience", 2*time.Minute, "most time for one run (five times that for the largest data); contestants whose rounds take longer together get fewer of them")
	workers := f.String("workers", "1,2", "numbers of workers")
	f.StringVar(&s.dir, "dir", filepath.Join(cache, "tallrow-sidebyside"), "`folder` for data and programs")
	f.StringVar(&s.output, "o", "", "write the record to this `file.json`, and the table beside it")
	f.StringVar(&s.tallrow, "tallrow", "", "use this `program` instead of building the command")
	f.BoolVar(&s.keep, "keep", false, "do not delete large data")
	if err := f.Parse(args); err != nil {
		return nil, err
	}
	if f.NArg() > 0 {
		return nil, fmt.Errorf("found %q, want flags only", f.Arg(0))
	}
	if s.rows < 1000 {
		return nil, fmt.Errorf("-rows %d: want at least 1000", s.rows)
	}
	if s.repeat < 1 {
		return nil, fmt.Errorf("-repeat %d: want at least 1", s.repeat)
	}
	if s.patience <= 0 {
		return nil, fmt.Errorf("-patience %v: want more than 0", s.patience)
	}
	if s.output != "" && filepath.Ext(s.output) != ".json" {
		return nil, fmt.Errorf("-o %s: want a name that ends in .json", s.output)
	}
	for w := range strings.SplitSeq(*workers, ",") {
		n, err := strconv.Atoi(strings.TrimSpace(w))
		if err != nil || n < 1 {
			return nil, fmt.Errorf("-workers: found %q, want whole numbers above zero", w)
		}
		if n > runtime.NumCPU() {
			s.say("%d workers left out: there are %d processors", n, runtime.NumCPU())
			continue
		}
		s.workers = append(s.workers, n)
	}
	if len(s.workers) == 0 {
		return nil, fmt.Errorf("-workers %s: there are %d processors", *workers, runtime.NumCPU())
	}
	if *list == "all" {
		return all, nil
	}
	for name := range strings.SplitSeq(*list, ",") {
		name = strings.TrimSpace(name)
		if !slices.Contains(all, name) {
			return nil, fmt.Errorf("no scenario %q; want some of %s", name, strings.Join(all, ", "))
		}
		names = append(names, name)
	}
	return names, nil
}

// whole runs the scenarios of these names.
func (s *session) whole(ctx context.Context, names []string) (err error) {
	if err := s.prepare(ctx); err != nil {
		return err
	}
	s.record.FloorBytes = ownPeak()
	if err := s.save(); err != nil { // not to find out after an hour that it cannot be written
		return err
	}
	defer func() {
		err = errors.Join(err, os.RemoveAll(filepath.Join(s.dir, "sql-scratch")))
		if !s.keep {
			for path := range s.large {
				err = errors.Join(err, os.Remove(path))
			}
		}
	}()
	for _, sc := range scenarios {
		if !slices.Contains(names, sc.name) {
			continue
		}
		made := &Scenario{Name: sc.name, What: sc.what, Files: []File{}, Results: []*Result{}, Remarks: []string{}}
		s.record.Scenarios = append(s.record.Scenarios, made)
		err := sc.run(s, ctx, made)
		var full *noRoom
		if errors.As(err, &full) {
			made.Skipped = full.what
		} else if err != nil {
			return fmt.Errorf("%s: %w", sc.name, err)
		}
		s.record.FloorBytes = ownPeak()
		if err := s.save(); err != nil {
			return err
		}
	}
	s.record.Complete = true
	return s.save()
}

func (s *session) save() error {
	if s.output == "" {
		return nil
	}
	if err := os.MkdirAll(filepath.Dir(s.output), 0o755); err != nil {
		return err
	}
	return s.record.save(s.output)
}

// prepare builds the command, finds the interpreters and describes the machine.
func (s *session) prepare(ctx context.Context) (err error) {
	if s.dir, err = filepath.Abs(s.dir); err != nil {
		return err
	}
	if err := os.MkdirAll(s.dir, 0o755); err != nil {
		return err
	}
	if s.self, err = os.Executable(); err != nil {
		return err
	}
	m, err := runChild(ctx, 0, nil, "go", "list", "-m", "-f", "{{.Dir}}", "github.com/tallrow/tallrow")
	if err != nil {
		return err
	}
	s.root = strings.TrimSpace(string(m.out))
	s.record = &Record{
		Format: "tallrow-sidebyside/1", Date: time.Now().UTC().Format(time.RFC3339), Commit: commit(s.root),
		Machine: machine(), Versions: map[string]string{}, Rows: s.rows, Repeat: s.repeat, Workers: s.workers,
	}
	libraries(s.record.Versions)
	if s.tallrow == "" {
		s.say("building the command")
		s.tallrow = filepath.Join(s.dir, "tallrow")
		if _, err := runChild(ctx, 0, nil, "go", "-C", s.root, "build", "-o", s.tallrow, "./cmd/tallrow"); err != nil {
			return err
		}
	} else if s.tallrow, err = exec.LookPath(s.tallrow); err != nil {
		return err
	} else if s.tallrow, err = filepath.Abs(s.tallrow); err != nil {
		return err
	}
	if s.npm == "" {
		s.npm = filepath.Join(s.dir, "npm")
	}
	s.findPython(ctx)
	s.findSQL(ctx)
	if err := ctx.Err(); err != nil {
		return err
	}
	for _, w := range s.workers {
		var walls []float64
		for range 11 {
			m, err := runChild(ctx, w, nil, s.tallrow, "--version")
			if err != nil {
				return err
			}
			walls = append(walls, m.wall)
			s.record.Versions["tallrow"] = strings.TrimPrefix(strings.TrimSpace(string(m.out)), "tallrow ")
		}
		s.startups[w] = median(walls)
		s.record.Startup = append(s.record.Startup, Startup{w, s.startups[w]})
	}
	return nil
}

// findPython looks for an interpreter with numpy, the system's first.
func (s *session) findPython(ctx context.Context) {
	for _, name := range []string{"/usr/bin/python3", "python3"} {
		m, err := runChild(ctx, 0, nil, name, "-c", "import sys, numpy; print(sys.version.split()[0], numpy.__version__)")
		if v := strings.Fields(string(m.out)); err == nil && len(v) == 2 {
			s.python = name
			s.record.Versions["python"], s.record.Versions["numpy"] = v[0], v[1]
			return
		}
	}
	s.noPython = "no python3 with numpy here (Debian: apt-get install python3-numpy libopenblas0-pthread)"
	s.say("%s", s.noPython)
}

// findSQL installs the engine into the folder unless it is there.
func (s *session) findSQL(ctx context.Context) {
	folder := s.npm
	s.sqlScript = filepath.Join(folder, "sums.mjs")
	if err := func() error {
		var err error
		if s.node, err = exec.LookPath("node"); err != nil {
			return err
		}
		if err := os.MkdirAll(folder, 0o755); err != nil {
			return err
		}
		if err := replace(s.sqlScript, sumsMJS); err != nil {
			return err
		}
		version := func() (m measured, err error) {
			text, err := os.ReadFile(filepath.Join(folder, "node_modules/@duckdb/node-api/package.json"))
			if err != nil {
				return m, err
			}
			if want := enginePackage[strings.LastIndex(enginePackage, "@")+1:]; !strings.Contains(string(text), `"version": "`+want+`"`) {
				return m, fmt.Errorf("the engine in %s is not %s", folder, enginePackage)
			}
			return runChild(ctx, 0, nil, s.node, "--input-type=module", "-e",
				`import duckdb from '`+filepath.ToSlash(folder)+`/node_modules/@duckdb/node-api/lib/index.js'; console.log(process.version, duckdb.version())`)
		}
		m, err := version()
		if err != nil {
			if !s.install {
				return err
			}
			s.say("installing %s into %s", enginePackage, folder)
			if _, err := runChild(ctx, 0, nil, "npm", "install", "--prefix", folder, "--no-audit", "--no-fund", "--save-exact", enginePackage); err != nil {
				return err
			}
			if m, err = version(); err != nil {
				return err
			}
		}
		v := strings.Fields(string(m.out))
		if len(v) != 2 {
			return fmt.Errorf("the engine says %q", m.out)
		}
		s.record.Versions["node"], s.record.Versions["SQL engine"] = v[0], "DuckDB "+v[1]+" ("+enginePackage+")"
		return nil
	}(); err != nil {
		s.noSQL = "no SQL engine: " + err.Error()
		s.say("%s", s.noSQL)
	}
}

func sortedKeys[V any](m map[string]V) []string { return slices.Sorted(maps.Keys(m)) }
