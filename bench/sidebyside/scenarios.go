package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// scenarios in the order in which they run.
var scenarios = []struct {
	name, what string
	run        func(*session, context.Context, *Scenario) error
}{
	{"ceilings", "What the machine can do: reading and copying the bytes of the Parquet file through the page cache, multiplying and adding in registers, and the sums of products of columns that are in the cache.", (*session).ceilings},
	{"startup", "Wall time of `tallrow --help`, beside a program that does nothing.", (*session).startup},
	{"hc1-parquet", "HC1 and classical errors, 8 regressors and a constant, from a Parquet file (snappy, row groups of 122,880 rows, pages of at most 1 MiB before compression, plain encoding): 4 columns of whole numbers stored as integers (pallets, crew, wet, night), 4 of decimals (tonnes, draught, wait with two decimals, wind with one), outcome with two decimals, no missing cell. In memory: the same columns as float64, loaded before the clock starts.", (*session).hc1Parquet},
	{"cr1-1e4", "Errors clustered by 10^4 ids that stand in random order, same table.", (*session).cr1Small},
	{"cr1-1e6", "Errors clustered by 10^6 ids that stand in random order, same table.", (*session).cr1Large},
	{"csv", "8 regressors and the outcome as text, one worker: reading and parsing alone, and HC1 end to end.", (*session).csv},
	{"arithmetic", "HC1 with ten coefficients, in the usual and in extended arithmetic.", (*session).arithmetic},
	{"scaling", "HC1, or CR1 where there are clusters, by rows, terms (and a constant), cluster ids and workers. Results of one cell for different workers are the same to the last bit, or the cell says that it disagrees.", (*session).scaling},
	{"memory", "Peak memory of HC1, 5 regressors, for few and for many rows.", (*session).memory},
	{"clusters-1e7", "CR1 with very many ids in random order, 5 regressors, memory bounded to 1 GiB.", (*session).clusters},
}

// main tables.
func (s *session) table() layout {
	return layout{Rows: s.rows, Terms: 8, IDs: []cluster{quay, crane, barge}}
}

func (s *session) csvTable() layout { return layout{Rows: s.rows / 2, Terms: 8} }

// long tables have a trip of ten rows or so for every id.
func (s *session) longTable(rows int64) layout {
	return layout{Rows: rows, Terms: 5, IDs: []cluster{{"trip", max(s.rows, 2)}}}
}

// data makes the files of a table if need be and lists them. The files are
// deleted at the end of the run if they are large.
func (s *session) data(ctx context.Context, sc *Scenario, l layout, large bool, formats ...string) (paths []string, err error) {
	for _, format := range formats {
		path := l.path(s.dir, format)
		if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
			free, known := freeBytes(s.dir)
			if need := l.storedAtMost(format); known && free < need+need/4 {
				return nil, &noRoom{fmt.Sprintf("%s needs up to %s, and %s are free in %s", filepath.Base(path), size(need), size(free), s.dir)}
			}
			s.say("%s: making %s", sc.Name, filepath.Base(path))
		}
		m, err := runChild(ctx, 0, nil, s.selfArgs(task{Do: "make", Layout: l, Dir: s.dir, Format: format})...)
		if err != nil {
			return nil, err
		}
		a, err := readAnswer(m)
		if err != nil {
			return nil, err
		}
		if large {
			s.large[path] = true
		}
		sc.Files = append(sc.Files, File{filepath.Base(path), l.Rows, a.Bytes})
		paths = append(paths, path)
	}
	return paths, nil
}

// noRoom means that a scenario is skipped.
type noRoom struct{ what string }

func (e *noRoom) Error() string { return e.what }

func (s *session) selfArgs(t task) []string {
	text, err := json.Marshal(t)
	if err != nil {
		panic(err) // a task is plain data
	}
	return []string{s.self, "task", string(text)}
}

// fit is the command on a file.
func (s *session) fit(name, compare, file string, l layout, workers int, args ...string) contestant {
	argv := append([]string{s.tallrow, "fit", "--json", "--quiet", "--outcome", outcome, "--terms", strings.Join(termNames(l.Terms), ","),
		"--workers", strconv.Itoa(workers), "--scratch", s.dir}, args...)
	return contestant{
		name: "tallrow fit " + name, workers: workers, compare: compare, rows: l.Rows,
		command: func(bool) (env, argv2 []string) { return nil, append(slices.Clone(argv), file) },
		read:    readFit(s.startups[workers]),
	}
}

// part is a process of this program.
func (s *session) part(name, compare string, t task) contestant {
	return contestant{
		name: name, workers: t.Workers, compare: compare,
		command: func(check bool) (env, argv []string) {
			t := t
			t.Sums = check && compare != ""
			return nil, s.selfArgs(t)
		},
		read: readAnswer,
	}
}

func (s *session) decoders(file string, columns []string, rows int64, workers int) []contestant {
	pages := s.part("decode by parquet-go's pages", "columns read", task{Do: "pages", File: file, Columns: columns, Workers: workers})
	pages.outside = true
	list := []contestant{
		s.part("decode by tallrow's reader", "columns read", task{Do: "batch", File: file, Columns: columns, Workers: workers}),
		pages,
		s.part("read the bytes of the same columns", "", task{Do: "bytes", File: file, Columns: columns, Workers: workers}),
	}
	for i := range list {
		list[i].rows = rows
	}
	return list
}

func (s *session) gonum(file string, l layout, workers int) contestant {
	c := s.part("gonum hc1, in memory", "hc1", task{Do: "gonum", File: file, Columns: make([]string, l.Terms+2), Workers: workers, Rows: l.Rows})
	c.outside, c.rows = true, l.Rows
	return c
}

func (s *session) numpy(kind, file string, l layout, workers int) contestant {
	text, err := json.Marshal(map[string]any{"file": file, "columns": l.Terms + 2, "errors": kind, "workers": workers})
	if err != nil {
		panic(err)
	}
	return contestant{
		name: "numpy " + kind + ", in memory", workers: workers, compare: kind, outside: true, rows: l.Rows, skip: s.noPython,
		command: func(bool) (env, argv []string) {
			return []string{"OPENBLAS_NUM_THREADS=1"}, []string{s.python, "-c", densePy, string(text)}
		},
		read: readAnswer,
	}
}

// sql is the SQL engine; kind "sums" only reads and adds up.
func (s *session) sql(kind, file string, l layout, workers int, id, memory string) contestant {
	var kinds [][2]string
	for _, c := range l.columns() {
		kind := "DOUBLE"
		if c.Kind == stream.Int64 {
			kind = "BIGINT"
		}
		kinds = append(kinds, [2]string{c.Name, kind})
	}
	scratch := filepath.Join(s.dir, "sql-scratch")
	text, err := json.Marshal(map[string]any{"file": file, "outcome": outcome, "terms": termNames(l.Terms), "kinds": kinds,
		"cluster": id, "errors": kind, "threads": workers, "memory": memory, "scratch": scratch})
	if err != nil {
		panic(err)
	}
	c := contestant{
		name: "SQL engine " + kind, workers: workers, compare: kind, outside: true, rows: l.Rows, skip: s.noSQL,
		command: func(bool) (env, argv []string) { return nil, []string{s.node, s.sqlScript, string(text)} },
		read:    readAnswer,
	}
	if kind == "sums" {
		c.compare = "columns read"
	}
	return c
}

func fitColumns(l layout, ids ...string) []string {
	return append(append(termNames(l.Terms), outcome), ids...)
}

func (s *session) ceilings(ctx context.Context, sc *Scenario) error {
	l := s.table()
	paths, err := s.data(ctx, sc, l, false, "parquet")
	if err != nil {
		return err
	}
	var list []contestant
	for _, w := range s.workers {
		list = append(list, s.part("read the file", "", task{Do: "bytes", File: paths[0], Workers: w}))
	}
	list = append(list, s.part("copy the file", "", task{Do: "copy", File: paths[0], To: filepath.Join(s.dir, "copy.part"), Workers: 1}))
	for i := range list {
		list[i].bytes = sc.Files[0].Bytes
	}
	if err := s.compete(ctx, sc, list, s.repeat); err != nil {
		return err
	}
	for _, pattern := range []string{"^BenchmarkPeak$", "^BenchmarkGram$/^rows=512$/^cols=(10|64)$"} {
		m, err := runChild(ctx, 1, nil, "go", "-C", s.root, "test", "-run", "^$", "-benchtime", "200ms", "-bench", pattern, "./accum/internal/kernel")
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if err != nil {
			sc.Remarks = append(sc.Remarks, pattern+": "+err.Error())
		}
		for line := range strings.Lines(string(m.out)) {
			if strings.HasPrefix(line, "Benchmark") {
				sc.Remarks = append(sc.Remarks, strings.Join(strings.Fields(line), " "))
			}
		}
	}
	return nil
}

func (s *session) startup(ctx context.Context, sc *Scenario) error {
	command := func(name string, argv ...string) contestant {
		return contestant{name: name, workers: slices.Max(s.workers),
			command: func(bool) (env, a []string) { return nil, argv },
			read:    func(m measured) (answer, error) { return answer{Seconds: m.wall}, nil }}
	}
	return s.compete(ctx, sc, []contestant{command("tallrow --help", s.tallrow, "--help"), command("true", "true")}, 3*s.repeat)
}

func (s *session) hc1Parquet(ctx context.Context, sc *Scenario) error {
	l := s.table()
	paths, err := s.data(ctx, sc, l, false, "parquet", "f64")
	if err != nil {
		return err
	}
	file, dense := paths[0], paths[1]
	var list []contestant
	for _, w := range s.workers {
		base := s.fit("hc1, two passes", "hc1", file, l, w, "--errors", "hc1", "--passes", "2")
		base.base = true
		list = append(list, base,
			s.fit("hc1, one pass", "hc1", file, l, w, "--errors", "hc1", "--passes", "1"),
			s.fit("classical", "classical", file, l, w, "--errors", "classical"))
		list = append(list, s.decoders(file, fitColumns(l), l.Rows, w)...)
		list = append(list,
			s.sql("sums", file, l, w, "", ""), s.sql("hc1", file, l, w, "", ""), s.sql("classical", file, l, w, "", ""),
			s.gonum(dense, l, w), s.numpy("hc1", dense, l, w), s.numpy("classical", dense, l, w))
	}
	return s.compete(ctx, sc, list, s.repeat)
}

func (s *session) cr1Small(ctx context.Context, sc *Scenario) error { return s.cr1(ctx, sc, crane) }
func (s *session) cr1Large(ctx context.Context, sc *Scenario) error { return s.cr1(ctx, sc, barge) }

func (s *session) cr1(ctx context.Context, sc *Scenario, id cluster) error {
	l := s.table()
	paths, err := s.data(ctx, sc, l, false, "parquet")
	if err != nil {
		return err
	}
	var list []contestant
	for _, w := range s.workers {
		base := s.fit("cr1", "cr1", paths[0], l, w, "--errors", "cr1", "--cluster", id.Name)
		base.base = true
		list = append(list, base)
		list = append(list, s.decoders(paths[0], fitColumns(l, id.Name), l.Rows, w)...)
		list = append(list, s.sql("cr1", paths[0], l, w, id.Name, ""))
	}
	return s.compete(ctx, sc, list, s.repeat)
}

func (s *session) csv(ctx context.Context, sc *Scenario) error {
	l := s.csvTable()
	paths, err := s.data(ctx, sc, l, false, "csv")
	if err != nil {
		return err
	}
	file, columns := paths[0], fitColumns(l)
	base := s.fit("hc1", "hc1", file, l, 1, "--errors", "hc1")
	base.base = true
	reader := s.part("encoding/csv and strconv", "columns read", task{Do: "csv", File: file, Columns: columns, Workers: 1})
	reader.outside = true
	list := []contestant{
		base,
		s.fit("hc1, two passes", "hc1", file, l, 1, "--errors", "hc1", "--passes", "2"),
		s.part("scan and parse by tallrow's reader", "columns read", task{Do: "batch", File: file, Columns: columns, Workers: 1}),
		reader,
		s.sql("sums", file, l, 1, "", ""),
		s.sql("hc1", file, l, 1, "", ""),
		s.part("read the file", "", task{Do: "bytes", File: file, Workers: 1}),
	}
	for i := range list {
		list[i].bytes = sc.Files[0].Bytes
		if list[i].compare != "" {
			list[i].rows = l.Rows
		}
	}
	return s.compete(ctx, sc, list, s.repeat)
}

func (s *session) arithmetic(ctx context.Context, sc *Scenario) error {
	l := layout{Rows: s.rows / 5, Terms: 9}
	paths, err := s.data(ctx, sc, l, false, "parquet", "f64")
	if err != nil {
		return err
	}
	var list []contestant
	for _, w := range s.workers {
		for _, passes := range []string{"2", "1"} {
			base := s.fit("hc1, --passes "+passes+" --arithmetic double", "hc1", paths[0], l, w, "--errors", "hc1", "--passes", passes, "--arithmetic", "double")
			base.base = passes == "2"
			other := s.fit("hc1, --passes "+passes+" --arithmetic extended", "hc1", paths[0], l, w, "--errors", "hc1", "--passes", passes, "--arithmetic", "extended")
			other.optional = true // not every version has it
			list = append(list, base, other)
		}
		list = append(list, s.numpy("hc1", paths[1], l, w))
	}
	return s.compete(ctx, sc, list, s.repeat)
}

func (s *session) scaling(ctx context.Context, sc *Scenario) error {
	var list []contestant
	for _, rows := range []int64{s.rows / 10, s.rows} {
		l := layout{Rows: rows, Terms: maxTerms, IDs: []cluster{quay, crane, barge}}
		paths, err := s.data(ctx, sc, l, true, "parquet")
		if err != nil {
			return err
		}
		for _, terms := range []int{2, 8, 24, 64} {
			few := l
			few.Terms = terms
			for _, id := range []cluster{{}, quay, crane, barge} {
				for _, w := range s.workers {
					args := []string{"--errors", "hc1"}
					if id.Count > 0 {
						args = []string{"--errors", "cr1", "--cluster", id.Name}
					}
					name := fmt.Sprintf("%d rows, %d terms, %d clusters", rows, terms, id.Count)
					c := s.fit(name, name, paths[0], few, w, args...)
					c.exact, c.optional, c.cell = true, true, &cell{rows, terms, id.Count}
					list = append(list, c)
				}
			}
		}
	}
	return s.compete(ctx, sc, list, s.repeat)
}

// seldom is how often something is repeated that takes a minute; it also gets
// more time.
func (s *session) seldom(list []contestant) int {
	for i := range list {
		list[i].limit = 5 * s.patience
	}
	return min(s.repeat, 3)
}

func (s *session) memory(ctx context.Context, sc *Scenario) error {
	w := slices.Max(s.workers)
	var list []contestant
	for _, rows := range []int64{s.rows / 5, 10 * s.rows} {
		l := s.longTable(rows)
		paths, err := s.data(ctx, sc, l, true, "parquet")
		if err != nil {
			return err
		}
		for _, passes := range []string{"2", "1"} {
			c := s.fit(fmt.Sprintf("hc1, %d rows, --passes %s", rows, passes), fmt.Sprintf("hc1 of %d rows", rows), paths[0], l, w, "--errors", "hc1", "--passes", passes)
			list = append(list, c)
		}
		sql := s.sql("hc1", paths[0], l, w, "", "")
		sql.name += fmt.Sprintf(", %d rows", rows)
		sql.compare = fmt.Sprintf("hc1 of %d rows", rows)
		list = append(list, sql)
	}
	if err := s.compete(ctx, sc, list, s.seldom(list)); err != nil {
		return err
	}
	half := len(list) / 2
	for i, small := range sc.Results[:half] {
		if big := sc.Results[half+i]; small.PeakBytes > 0 && big.PeakBytes > 0 {
			sc.Remarks = append(sc.Remarks, fmt.Sprintf("%s: peak %s, and %s for %d rows: %.2f times", small.Name,
				size(small.PeakBytes), size(big.PeakBytes), 10*s.rows, float64(big.PeakBytes)/float64(small.PeakBytes)))
		}
	}
	return nil
}

func (s *session) clusters(ctx context.Context, sc *Scenario) error {
	w := slices.Max(s.workers)
	l := s.longTable(10 * s.rows)
	paths, err := s.data(ctx, sc, l, true, "parquet")
	if err != nil {
		return err
	}
	id := l.IDs[0].Name
	base := s.fit("cr1, --memory 1GiB", "cr1", paths[0], l, w, "--errors", "cr1", "--cluster", id, "--memory", "1GiB")
	base.base = true
	bounded := s.sql("cr1", paths[0], l, w, id, "1GiB")
	bounded.name += ", memory_limit 1GiB"
	bounded.optional = true // it may not manage
	list := []contestant{
		base,
		s.fit("cr1, memory as by default", "cr1", paths[0], l, w, "--errors", "cr1", "--cluster", id),
		bounded,
		s.sql("cr1", paths[0], l, w, id, ""),
	}
	list = append(list, s.decoders(paths[0], fitColumns(l, id), l.Rows, w)...)
	return s.compete(ctx, sc, list, s.seldom(list))
}
