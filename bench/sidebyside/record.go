package main

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"strconv"
	"strings"
)

// Record is a run as JSON.
type Record struct {
	Format    string            `json:"format"`   // tallrow-sidebyside/1
	Complete  bool              `json:"complete"` // false while the run goes on
	Date      string            `json:"date"`
	Commit    string            `json:"commit"`
	Machine   Machine           `json:"machine"`
	Versions  map[string]string `json:"versions"`
	Rows      int64             `json:"rows"`
	Repeat    int               `json:"repeat"`
	Workers   []int             `json:"workers"`
	Startup   []Startup         `json:"startup"`
	Scenarios []*Scenario       `json:"scenarios"`
	// FloorBytes is the peak of this program, below which no peak of a process
	// started by it shows.
	FloorBytes int64 `json:"floor_bytes"`
}

// Machine is where it ran.
type Machine struct {
	CPU    string `json:"cpu"`
	Cores  int    `json:"cores"`
	Memory int64  `json:"memory_bytes"`
	Kernel string `json:"kernel"`
	OS     string `json:"os"`
	Load   string `json:"load_at_start"`
}

// Startup is the wall time of `tallrow --version`, taken off its other times.
type Startup struct {
	Workers int     `json:"workers"`
	Seconds float64 `json:"seconds"`
}

// Scenario is a set of contestants.
type Scenario struct {
	Name    string    `json:"name"`
	What    string    `json:"what"`
	Skipped string    `json:"skipped,omitempty"` // why
	Files   []File    `json:"files"`
	Results []*Result `json:"results"`
	Remarks []string  `json:"remarks"`
}

// File is data that contestants read.
type File struct {
	Name  string `json:"name"`
	Rows  int64  `json:"rows"`
	Bytes int64  `json:"bytes"`
}

// Result is what became of one contestant.
type Result struct {
	Name    string `json:"name"`
	Workers int    `json:"workers"`
	Outside bool   `json:"outside"`
	// Status is ok, skipped, stopped, failed or disagrees; the others than ok have a reason
	// and no times.
	Status string `json:"status"`
	Reason string `json:"reason,omitempty"`
	// Seconds is the median of the contestant's own times.
	Seconds     float64   `json:"seconds,omitempty"`
	Least       float64   `json:"least,omitempty"`
	Most        float64   `json:"most,omitempty"`
	Times       []float64 `json:"times,omitempty"`
	Wall        float64   `json:"wall,omitempty"` // of the whole process, median
	CPU         float64   `json:"cpu,omitempty"`  // user and system, median
	PeakBytes   int64     `json:"peak_bytes,omitempty"`
	NanosPerRow float64   `json:"ns_per_row,omitempty"`
	MBPerSecond float64   `json:"mb_per_second,omitempty"`
	// Ratio is the median over the rounds of this time by that of Against.
	Ratio   *float64 `json:"ratio,omitempty"`
	Against string   `json:"against,omitempty"`
	// Apart is the largest relative difference from the first contestant with
	// the same task.
	Apart *float64       `json:"apart,omitempty"`
	Cell  *cell          `json:"cell,omitempty"`
	Notes map[string]any `json:"notes,omitempty"`
}

// cell is a place in the scaling table.
type cell struct {
	Rows     int64 `json:"rows"`
	Terms    int   `json:"terms"`
	Clusters int64 `json:"clusters"`
}

// bad reports whether something failed or disagreed.
func (r *Record) bad() (names []string) {
	for _, sc := range r.Scenarios {
		for _, x := range sc.Results {
			if x.Status == "failed" || x.Status == "disagrees" {
				names = append(names, fmt.Sprintf("%s, %s, %s: %s: %s", sc.Name, x.Name, workersText(x.Workers), x.Status, x.Reason))
			}
		}
	}
	return names
}

// save writes the record as JSON and, beside it, as a Markdown page.
func (r *Record) save(file string) error {
	text, err := json.MarshalIndent(r, "", " ")
	if err != nil {
		return err
	}
	if err := replace(file, append(text, '\n')); err != nil {
		return err
	}
	var page strings.Builder
	r.render(&page)
	return replace(strings.TrimSuffix(file, filepath.Ext(file))+".md", []byte(page.String()))
}

func replace(file string, text []byte) error {
	if err := os.WriteFile(file+".part", text, 0o644); err != nil {
		return err
	}
	return os.Rename(file+".part", file)
}

func machine() Machine {
	m := Machine{CPU: "unknown", Cores: runtime.NumCPU(), Kernel: "unknown", OS: runtime.GOOS + "/" + runtime.GOARCH, Load: "unknown"}
	if v := field("/proc/cpuinfo", "model name"); v != "" {
		m.CPU = v
		family, model := field("/proc/cpuinfo", "cpu family"), field("/proc/cpuinfo", "model")
		m.CPU += fmt.Sprintf(" (family %s, model %s)", family, model)
	}
	m.Memory = kibibytes("/proc/meminfo", "MemTotal")
	if text, err := os.ReadFile("/proc/sys/kernel/osrelease"); err == nil {
		m.Kernel = strings.TrimSpace(string(text))
	}
	if text, err := os.ReadFile("/proc/loadavg"); err == nil {
		m.Load = strings.TrimSpace(string(text))
	}
	return m
}

// field is the first value of "name : value" in a file of the kernel.
func field(file, name string) string {
	f, err := os.Open(file)
	if err != nil {
		return ""
	}
	defer f.Close()
	for lines := bufio.NewScanner(f); lines.Scan(); {
		if key, v, ok := strings.Cut(lines.Text(), ":"); ok && strings.TrimSpace(key) == name {
			return strings.TrimSpace(v)
		}
	}
	return ""
}

func kibibytes(file, name string) int64 {
	n, err := strconv.ParseInt(strings.TrimSuffix(field(file, name), " kB"), 10, 64)
	if err != nil {
		return 0
	}
	return n << 10
}

// ownPeak is the largest resident set of this program, without that of the one
// that started it, which rusage counts in.
func ownPeak() int64 { return kibibytes("/proc/self/status", "VmHWM") }

func commit(root string) string {
	git := func(args ...string) (string, error) {
		out, err := exec.Command("git", append([]string{"-C", root}, args...)...).Output()
		return strings.TrimSpace(string(out)), err
	}
	id, err := git("rev-parse", "HEAD")
	if err != nil {
		return "unknown"
	}
	if changes, err := git("status", "--porcelain"); err != nil || changes != "" {
		id += ", with changes"
	}
	return id
}

func libraries(into map[string]string) {
	into["go"] = runtime.Version()
	if info, ok := debug.ReadBuildInfo(); ok {
		for _, d := range info.Deps {
			switch d.Path {
			case "github.com/parquet-go/parquet-go", "gonum.org/v1/gonum":
				into[d.Path] = d.Version
			}
		}
	}
}

// render writes the record as Markdown, which reads as plain text, too.
func (r *Record) render(w io.Writer) {
	fmt.Fprintf(w, "# Side by side, %s\n\n", r.Date)
	if !r.Complete {
		fmt.Fprint(w, "**Not complete: the run was still going on, or was stopped.**\n\n")
	}
	m := r.Machine
	fmt.Fprintf(w, "- machine: %s, %d cores, %s memory, %s, kernel %s, load at start %s\n", m.CPU, m.Cores, size(m.Memory), m.OS, m.Kernel, m.Load)
	fmt.Fprintf(w, "- commit: %s\n", r.Commit)
	var versions []string
	for _, name := range sortedKeys(r.Versions) {
		versions = append(versions, name+" "+r.Versions[name])
	}
	fmt.Fprintf(w, "- versions: %s\n", strings.Join(versions, ", "))
	fmt.Fprintf(w, "- rows %d, medians of up to %d rounds\n", r.Rows, r.Repeat)
	for _, s := range r.Startup {
		fmt.Fprintf(w, "- start of the command, confined to %d: %s, taken off its times below (not off wall)\n", s.Workers, seconds(s.Seconds))
	}
	fmt.Fprintf(w, "- no peak below %s can show\n", size(r.FloorBytes))
	for _, sc := range r.Scenarios {
		sc.render(w)
	}
}

func (sc *Scenario) render(w io.Writer) {
	fmt.Fprintf(w, "\n## %s\n\n%s\n\n", sc.Name, sc.What)
	if sc.Skipped != "" {
		fmt.Fprintf(w, "Skipped: %s\n", sc.Skipped)
		return
	}
	for _, f := range sc.Files {
		fmt.Fprintf(w, "- %s: %s\n", f.Name, size(f.Bytes))
	}
	for _, remark := range sc.Remarks {
		fmt.Fprintf(w, "- %s\n", remark)
	}
	fmt.Fprintln(w)
	if sc.pivot(w) {
		return
	}
	rows := [][]string{{"contestant", "workers", "rounds", "time", "least to most", "wall", "cpu", "peak", "ns/row", "MB/s", "by base", "apart", "notes"}}
	for _, x := range sc.Results {
		row := []string{x.Name, strconv.Itoa(x.Workers)}
		if x.Status != "ok" {
			row = append(row, "", x.Status, "", "", "", "", "", "", "", "", x.Reason)
		} else {
			row = append(row, strconv.Itoa(len(x.Times)), seconds(x.Seconds), seconds(x.Least)+" to "+seconds(x.Most), seconds(x.Wall), seconds(x.CPU),
				size(x.PeakBytes), number(x.NanosPerRow), number(x.MBPerSecond), ratio(x.Ratio), difference(x.Apart), x.notes())
		}
		rows = append(rows, row)
	}
	table(w, rows)
	for _, x := range sc.Results {
		if x.Against != "" {
			fmt.Fprintf(w, "\nby base: time by that of \"%s\" with as many workers; above 1 is slower than it.\n", x.Against)
			break
		}
	}
}

// pivot writes results that are cells as ns/row by rows and terms against
// clusters and workers; it reports whether there are any.
func (sc *Scenario) pivot(w io.Writer) bool {
	type key struct {
		rows     int64
		terms    int
		clusters int64
		workers  int
	}
	text := make(map[key]string)
	var lines, columns []key
	var reasons []string
	add := func(list []key, k key) []key {
		for _, have := range list {
			if have == k {
				return list
			}
		}
		return append(list, k)
	}
	for _, x := range sc.Results {
		if x.Cell == nil {
			return false
		}
		k := key{x.Cell.Rows, x.Cell.Terms, x.Cell.Clusters, x.Workers}
		text[k] = number(x.NanosPerRow)
		if x.Status != "ok" {
			text[k] = x.Status
			reasons = append(reasons, fmt.Sprintf("%s, %s: %s: %s", x.Name, workersText(x.Workers), x.Status, x.Reason))
		}
		lines = add(lines, key{rows: k.rows, terms: k.terms})
		columns = add(columns, key{clusters: k.clusters, workers: k.workers})
	}
	if len(lines) == 0 {
		return false
	}
	head := []string{"rows", "terms"}
	for _, c := range columns {
		kind := "hc1"
		if c.clusters > 0 {
			kind = fmt.Sprintf("cr1, %d ids", c.clusters)
		}
		head = append(head, kind+", "+workersText(c.workers))
	}
	rows := [][]string{head}
	for _, l := range lines {
		row := []string{strconv.FormatInt(l.rows, 10), strconv.Itoa(l.terms)}
		for _, c := range columns {
			row = append(row, text[key{l.rows, l.terms, c.clusters, c.workers}])
		}
		rows = append(rows, row)
	}
	fmt.Fprint(w, "Nanoseconds a row, median.\n\n")
	table(w, rows)
	if len(reasons) > 0 {
		fmt.Fprintf(w, "\n- %s\n", strings.Join(reasons, "\n- "))
	}
	return true
}

// table writes rows, the first of them the head, as a Markdown table with
// columns of even width.
func table(w io.Writer, rows [][]string) {
	width := make([]int, len(rows[0]))
	for _, row := range rows {
		for j, s := range row {
			width[j] = max(width[j], len([]rune(s)))
		}
	}
	width[len(width)-1] = 3 // the last column may be long
	for i, row := range rows {
		for j, s := range row {
			fmt.Fprintf(w, "| %-*s ", width[j], strings.ReplaceAll(s, "|", "/"))
		}
		fmt.Fprintln(w, "|")
		if i == 0 {
			for _, n := range width {
				fmt.Fprintf(w, "|%s", strings.Repeat("-", n+2))
			}
			fmt.Fprintln(w, "|")
		}
	}
}

func workersText(n int) string {
	if n == 1 {
		return "1 worker"
	}
	return strconv.Itoa(n) + " workers"
}

func seconds(s float64) string {
	switch {
	case s >= 1:
		return number(s) + " s"
	default:
		return number(s*1e3) + " ms"
	}
}

// number has three digits.
func number(x float64) string {
	switch {
	case x == 0:
		return ""
	case math.Abs(x) >= 100:
		return strconv.FormatFloat(x, 'f', 0, 64)
	default:
		digits := 2 - int(math.Floor(math.Log10(math.Abs(x))))
		return strconv.FormatFloat(x, 'f', max(digits, 0), 64)
	}
}

func size(b int64) string {
	switch {
	case b == 0:
		return ""
	case b >= 1<<30:
		return number(float64(b)/(1<<30)) + " GiB"
	default:
		return number(float64(b)/(1<<20)) + " MiB"
	}
}

func ratio(r *float64) string {
	if r == nil {
		return ""
	}
	if *r < 0.1 {
		return strconv.FormatFloat(*r, 'g', 2, 64)
	}
	return strconv.FormatFloat(*r, 'f', 2, 64)
}

func difference(d *float64) string {
	if d == nil {
		return ""
	}
	return strconv.FormatFloat(*d, 'g', 2, 64)
}

func (x *Result) notes() string {
	var parts []string
	for _, k := range sortedKeys(x.Notes) {
		if k == "fit_seconds" { // in the JSON only
			continue
		}
		v := x.Notes[k]
		if f, ok := v.(float64); ok {
			v = strconv.FormatFloat(f, 'f', -1, 64)
		}
		parts = append(parts, fmt.Sprintf("%s %v", k, v))
	}
	return strings.Join(parts, "; ")
}
