package main

import (
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"maps"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// lattice says which package may import which: "a b < c" means that c may import
// a and b. Do not change this table to make a build pass: it is the plan of the
// program, and a change of it is a change of that plan.
//
// Names whose first part has no dot are packages of this module; what one of
// them may import of these, those that may import it may too. The others are
// modules from outside, only for the package that names them. The standard
// library is open to all. A package in an internal folder that the table does
// not name may import what its owner may; any other package that the table does
// not name must be entered first.
const lattice = `
golang.org/x/sys/cpu < accum/internal/kernel

golang.org/x/text < stream
nothing < stream/internal/scan
stream stream/internal/scan github.com/klauspost/compress < stream/delimited
stream stream/internal/scan github.com/parquet-go/parquet-go < stream/columnar
github.com/klauspost/compress github.com/andybalholm/brotli github.com/pierrec/lz4 < stream/columnar
stream < stream/streamtest

stream accum/internal/kernel gonum.org/v1/gonum golang.org/x/sync < accum
accum github.com/parquet-go/parquet-go < accum/digest
accum < accum/accumtest

accum gonum.org/v1/gonum < vcov

stream stream/columnar < bench/quaydata
stream gonum.org/v1/gonum golang.org/x/sync < bench/reference
stream/delimited stream/columnar accum/digest vcov bench/quaydata bench/reference < bench
stream/delimited stream/columnar bench/reference < bench/sidebyside
github.com/parquet-go/parquet-go golang.org/x/sync golang.org/x/sys < bench/sidebyside
stream vcov gonum.org/v1/gonum github.com/google/renameio < bench/coverage
bench/quaydata < bench/days

stream/delimited stream/columnar accum/digest vcov bench/quaydata < cmd/tallrow
github.com/spf13/cobra github.com/spf13/pflag github.com/pelletier/go-toml < cmd/tallrow
github.com/schollz/progressbar github.com/mattn/go-isatty golang.org/x/term < cmd/tallrow
github.com/google/renameio < cmd/tallrow
`

const modulePath = "github.com/tallrow/tallrow"

// outside reports whether an import is neither of the standard library nor of
// this module.
func outside(name string) bool {
	first, _, _ := strings.Cut(name, "/")
	return strings.Contains(first, ".")
}

// below reports whether name is the module or package m or lies in it.
func below(name, m string) bool {
	return name == m || strings.HasPrefix(name, m+"/")
}

// readLattice returns for each package what it may import.
func readLattice(text string) (map[string][]string, error) {
	direct := make(map[string][]string)
	for line := range strings.Lines(text) {
		line = strings.TrimSpace(line)
		if line == "" {
			continue
		}
		left, right, ok := strings.Cut(line, " < ")
		if !ok || strings.Contains(right, " ") {
			return nil, fmt.Errorf("no line of the lattice: %q", line)
		}
		if left == "nothing" {
			left = ""
		}
		direct[right] = append(direct[right], strings.Fields(left)...)
	}
	closed := make(map[string][]string)
	for p := range direct {
		seen := make(map[string]bool)
		todo := direct[p]
		for len(todo) > 0 {
			q := todo[0]
			todo = todo[1:]
			if seen[q] {
				continue
			}
			seen[q] = true
			if outside(q) {
				continue
			}
			if _, ok := direct[q]; !ok {
				return nil, fmt.Errorf("%s may import %s, which the lattice does not define", p, q)
			}
			for _, r := range direct[q] {
				if !outside(r) {
					todo = append(todo, r)
				}
			}
		}
		if seen[p] {
			return nil, fmt.Errorf("%s may import itself", p)
		}
		closed[p] = slices.Sorted(maps.Keys(seen))
	}
	return closed, nil
}

// importFault says why a package must not import that path, or "".
func importFault(allowed map[string][]string, pkg, imported string) string {
	owner := pkg
	rights, ok := allowed[pkg]
	if !ok {
		if before, _, found := strings.Cut(pkg, "/internal/"); found {
			owner = before
			rights, ok = allowed[before]
		}
	}
	if !ok {
		return "the lattice does not name this package"
	}
	if below(imported, modulePath) {
		name := strings.TrimPrefix(strings.TrimPrefix(imported, modulePath), "/")
		if slices.Contains(rights, name) {
			return ""
		}
		// An internal package without a line of its own serves its owner.
		if _, named := allowed[name]; !named && below(name, owner+"/internal") {
			return ""
		}
		return "the lattice does not allow it"
	}
	if !outside(imported) || slices.ContainsFunc(rights, func(m string) bool { return outside(m) && below(imported, m) }) {
		return ""
	}
	return "the lattice does not allow it"
}

// program reports whether a file may end the process, read its arguments and
// print: commands and the programs among the benchmarks.
func program(pkg, name string) bool {
	return below(pkg, "cmd") || below(pkg, "bench") && name == "main"
}

// speechFaults lists where a file uses what only programs may.
func speechFaults(file *ast.File) (faults []ast.Node, what []string) {
	forbidden := map[string][]string{
		"os":  {"Exit", "Args", "Stdout", "Stderr", "Stdin"},
		"fmt": {"Print", "Printf", "Println", "Scan", "Scanf", "Scanln"},
	}
	report := func(n ast.Node, s string) { faults, what = append(faults, n), append(what, s) }
	local := make(map[string]string) // name in the file: path
	for _, spec := range file.Imports {
		p, _ := strconv.Unquote(spec.Path.Value)
		name := path.Base(p)
		if spec.Name != nil {
			name = spec.Name.Name
		}
		local[name] = p
		switch {
		case p == "log" || p == "flag":
			report(spec, p)
		case name == "." && forbidden[p] != nil:
			report(spec, "import . "+p)
		}
	}
	ast.Inspect(file, func(n ast.Node) bool {
		switch n := n.(type) {
		case *ast.SelectorExpr:
			if x, ok := n.X.(*ast.Ident); ok && slices.Contains(forbidden[local[x.Name]], n.Sel.Name) {
				report(n, x.Name+"."+n.Sel.Name)
			}
		case *ast.CallExpr:
			if x, ok := n.Fun.(*ast.Ident); ok && (x.Name == "print" || x.Name == "println") {
				report(n, x.Name)
			}
		}
		return true
	})
	return faults, what
}

// eachGoFile parses the Go files of the module, without tests, nested modules
// and testdata, and calls f with the package path below the module's.
func eachGoFile(t *testing.T, f func(fset *token.FileSet, pkg string, file *ast.File)) (files int) {
	t.Helper()
	root := filepath.Join("..", "..")
	fset := token.NewFileSet()
	err := filepath.WalkDir(root, func(p string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		name := d.Name()
		if d.IsDir() {
			if p == root {
				return nil
			}
			if name == "testdata" || strings.HasPrefix(name, ".") || strings.HasPrefix(name, "_") {
				return fs.SkipDir
			}
			if _, err := os.Stat(filepath.Join(p, "go.mod")); err == nil {
				return fs.SkipDir
			}
			return nil
		}
		if !strings.HasSuffix(name, ".go") || strings.HasSuffix(name, "_test.go") {
			return nil
		}
		file, err := parser.ParseFile(fset, p, nil, parser.SkipObjectResolution)
		if err != nil {
			return err
		}
		rel, err := filepath.Rel(root, filepath.Dir(p))
		if err != nil {
			return err
		}
		files++
		f(fset, filepath.ToSlash(rel), file)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return files
}

func TestLattice(t *testing.T) {
	allowed, err := readLattice(lattice)
	if err != nil {
		t.Fatal(err)
	}
	seen := make(map[string]bool)
	files := eachGoFile(t, func(fset *token.FileSet, pkg string, file *ast.File) {
		seen[pkg] = true
		for _, spec := range file.Imports {
			imported, err := strconv.Unquote(spec.Path.Value)
			if err != nil {
				t.Fatal(err)
			}
			if why := importFault(allowed, pkg, imported); why != "" {
				t.Errorf("%s: %s imports %s: %s", fset.Position(spec.Pos()), pkg, imported, why)
			}
		}
	})
	for _, pkg := range []string{"stream", "stream/delimited", "stream/columnar", "accum", "vcov", "cmd/tallrow"} {
		if !seen[pkg] {
			t.Errorf("package %s was not found among %d files", pkg, files)
		}
	}
}

func TestOnlyProgramsPrint(t *testing.T) {
	eachGoFile(t, func(fset *token.FileSet, pkg string, file *ast.File) {
		if program(pkg, file.Name.Name) {
			return
		}
		faults, what := speechFaults(file)
		for i, n := range faults {
			t.Errorf("%s: %s uses %s, which only programs may", fset.Position(n.Pos()), pkg, what[i])
		}
	})
}

// The two checks find what they look for.
func TestLatticeChecks(t *testing.T) {
	allowed, err := readLattice(lattice)
	if err != nil {
		t.Fatal(err)
	}
	const m = modulePath + "/"
	for _, c := range []struct {
		pkg, imported string
		ok            bool
	}{
		{"stream", "context", true},
		{"stream", "golang.org/x/text/unicode/norm", true},
		{"stream", "golang.org/x/sync/errgroup", false},
		{"stream", m + "accum", false},
		{"stream", m + "stream/delimited", false},
		{"stream/delimited", m + "stream/internal/scan", true},
		{"stream/delimited", m + "stream/columnar", false},
		{"accum", m + "stream", true},
		{"accum", m + "stream/delimited", false},
		{"accum", m + "vcov", false},
		{"accum/internal/table", m + "stream", true},
		{"accum", m + "accum/internal/table", true},
		{"accum/internal/kernel", m + "stream", false},
		{"vcov", m + "stream", true},
		{"vcov", m + "accum/internal/table", false},
		{"vcov", "golang.org/x/sync/errgroup", false},
		{"vcov", "gonum.org/v1/gonum/mat", true},
		{"vcov", "gonum.org/v1/gonumx", false},
		{"vcov", "github.com/pelletier/go-toml/v2", false},
		{"cmd/tallrow", m + "stream", true},
		{"cmd/tallrow", m + "stream/columnar", true},
		{"cmd/tallrow", "github.com/pelletier/go-toml/v2", true},
		{"somewhere/else", "context", false},
	} {
		if why := importFault(allowed, c.pkg, c.imported); (why == "") != c.ok {
			t.Errorf("%s imports %s: %q", c.pkg, c.imported, why)
		}
	}
	for _, bad := range []string{"a b", "a < b c", "stream < vcov", "nothing < a\na < b\nb < a"} {
		if _, err := readLattice(bad); err == nil {
			t.Errorf("lattice %q: no error", bad)
		}
	}
	for source, want := range map[string]string{
		`import "os"; func f() { os.Exit(1) }`:                    "os.Exit",
		`import o "os"; var a = o.Args`:                           "o.Args",
		`import "fmt"; func f() { fmt.Println() }`:                "fmt.Println",
		`import "fmt"; func f() { fmt.Fprintln(nil) }`:            "",
		`import . "fmt"; func f() { Println() }`:                  "import . fmt",
		`import "log"; func f() { log.Fatal() }`:                  "log",
		`func f() { println(1) }`:                                 "println",
		`import "math/big"; var fmt big.Int; var s = fmt.Print()`: "",
	} {
		file, err := parser.ParseFile(token.NewFileSet(), "f.go", "package p; "+source, parser.SkipObjectResolution)
		if err != nil {
			t.Fatal(err)
		}
		if _, what := speechFaults(file); strings.Join(what, " ") != want {
			t.Errorf("%s: found %q, want %q", source, what, want)
		}
	}
	for _, c := range []struct {
		pkg, name string
		want      bool
	}{{"cmd/tallrow", "main", true}, {"bench/gram", "main", true}, {"bench/quaydata", "quaydata", false}, {"stream", "stream", false}, {"commands", "main", false}} {
		if program(c.pkg, c.name) != c.want {
			t.Errorf("program(%s, %s) = %v", c.pkg, c.name, !c.want)
		}
	}
}
