package main

import (
	"bytes"
	"context"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rogpeppe/go-internal/testscript"
	"github.com/spf13/cobra"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){"tallrow": main})
}

// What differs between equal runs.
var unsteady = []*regexp.Regexp{
	regexp.MustCompile(`[0-9.]+\s+s,\s+[0-9.,]+(\s+million)?\s+rows\s+a\s+second`),
	regexp.MustCompile(`memory\s+at\s+most\s+[0-9.,]+\s+(KiB|MiB|GiB|bytes)`),
	regexp.MustCompile(`"(seconds|peak_bytes|spilled_bytes|spilled_runs)":[^,}]*`),
}

var runLines = regexp.MustCompile(`(?m)^run .*(\n {10}.*)+`)

func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:                 "testdata/script",
		RequireExplicitExec: true,
		RequireUniqueNames:  true,
		UpdateScripts:       *update,
		Setup: func(e *testscript.Env) error {
			e.Vars = append(e.Vars, "TMPDIR="+e.WorkDir+"/tmp")
			return os.Mkdir(filepath.Join(e.WorkDir, "tmp"), 0o755)
		},
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			// status N COMMAND... runs a command that must exit with N.
			"status": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) < 2 {
					ts.Fatalf("usage: status N command args...")
				}
				err := ts.Exec(args[1], args[2:]...)
				got := 0
				var exit interface{ ExitCode() int }
				if errors.As(err, &exit) {
					got = exit.ExitCode()
				} else if err != nil {
					ts.Fatalf("%v", err)
				}
				if fmt.Sprint(got) != args[0] {
					ts.Fatalf("exit status %d, want %s", got, args[0])
				}
			},
			// near PATH WANT compares a number in the last output, a JSON document, to
			// 1e-12 relative; PATH is such as errors.1.se.0.
			"near": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) != 2 {
					ts.Fatalf("usage: near path want")
				}
				var doc any
				ts.Check(json.Unmarshal([]byte(ts.ReadFile("stdout")), &doc))
				for _, key := range strings.Split(args[0], ".") {
					switch d := doc.(type) {
					case map[string]any:
						doc = d[key]
					case []any:
						i, err := strconv.Atoi(key)
						ts.Check(err)
						if i >= len(d) {
							ts.Fatalf("%s: only %d elements", args[0], len(d))
						}
						doc = d[i]
					}
				}
				if args[1] == "null" {
					if doc != nil {
						ts.Fatalf("%s is %v, want null", args[0], doc)
					}
					return
				}
				want, err := strconv.ParseFloat(args[1], 64)
				ts.Check(err)
				got, ok := doc.(float64)
				if !ok || math.Abs(got-want) > 1e-12*math.Abs(want) {
					ts.Fatalf("%s is %v, want %v", args[0], doc, want)
				}
			},
			// bytes FILE HEX... writes a file that is no text.
			"bytes": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) < 2 {
					ts.Fatalf("usage: bytes file hex...")
				}
				data, err := hex.DecodeString(strings.Join(args[1:], ""))
				ts.Check(err)
				ts.Check(os.WriteFile(ts.MkAbs(args[0]), data, 0o644))
			},
			// cut FILE N TO copies the first N bytes of a file.
			"cut": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) != 3 {
					ts.Fatalf("usage: cut file n to")
				}
				n, err := strconv.Atoi(args[1])
				ts.Check(err)
				data := []byte(ts.ReadFile(args[0]))
				ts.Check(os.WriteFile(ts.MkAbs(args[2]), data[:n], 0o644))
			},
			// mode FILE OCTAL checks who may read a file.
			"mode": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) != 2 {
					ts.Fatalf("usage: mode file octal")
				}
				st, err := os.Stat(ts.MkAbs(args[0]))
				ts.Check(err)
				if got := fmt.Sprintf("%o", st.Mode().Perm()); got != args[1] {
					ts.Fatalf("%s has mode %s, want %s", args[0], got, args[1])
				}
			},
			// valid checks the last output against the schema of results.
			"valid": func(ts *testscript.TestScript, neg bool, args []string) {
				ts.Check(validate(t, compiledSchema(t), []byte(ts.ReadFile("stdout"))))
			},
			// steady FILE writes the last output without times and memory to FILE.
			"steady": func(ts *testscript.TestScript, neg bool, args []string) {
				if neg || len(args) != 1 {
					ts.Fatalf("usage: steady file")
				}
				text := []byte(ts.ReadFile("stdout"))
				// Where the line breaks hangs on the length of a time.
				text = runLines.ReplaceAllFunc(text, func(b []byte) []byte { return regexp.MustCompile(`\n +`).ReplaceAll(b, []byte(" ")) })
				for _, re := range unsteady {
					text = re.ReplaceAll(text, []byte("[...]"))
				}
				ts.Check(os.WriteFile(ts.MkAbs(args[0]), text, 0o644))
			},
			"sums": scriptSums,
			"same": scriptSame,
		},
	})
}

// try runs a command line in this process.
func try(ctx context.Context, stdin io.Reader, args ...string) (code int, stdout, stderr string) {
	var out, errw bytes.Buffer
	code = run(ctx, args, stdin, &out, &errw)
	return code, out.String(), errw.String()
}

// Wrong use is exit 2, one line on standard error, nothing on standard output.
func TestWrongUse(t *testing.T) {
	model := []string{"fit", "--outcome", "minutes", "--terms", "pallets"}
	with := func(args ...string) []string { return append(model[:len(model):len(model)], args...) }
	cases := []struct {
		args []string
		want string
	}{
		{[]string{"fit"}, "no outcome"},
		{model, "no data"},
		{[]string{"columns"}, "no data"},
		{[]string{"columns", ""}, "empty name"},
		{[]string{"launch", "--seed", "3"}, "no outcome"},
		{[]string{"launch", "--workers", "3"}, "--workers is not an option of launch"},
		{[]string{"fits", "x"}, `unknown command "fits"; did you mean fit?`},
		{[]string{"columns", "--terms", "x", "y"}, "--terms is not an option of columns"},
		{[]string{"--nothing"}, "unknown option --nothing"},
		{[]string{"fit", "-x"}, "unknown option -x"},
		{with("--outcom", "x"), "did you mean --outcome?"},
		{with("--level"), "--level needs a value"},
		{with("--terms", "tonnes", "x.csv"), "--terms is given twice"},
		{with("--first", "0", "x.csv"), "--first: found"},
		{with("--plan", "none.json", "x.csv"), "plan none.json: no such file"},
		{with("--scratch", "none", "x.csv"), "--scratch none: want a folder"},
		{with("-o", filepath.Join("none", "out.txt"), "x.csv"), "the folder does not exist"},
		{with("-o", ".", "x.csv"), "is not a plain file"},
		{[]string{"fit", "none.toml", "x.csv"}, "model file none.toml: no such file"},
	}
	for _, c := range cases {
		code, out, errw := try(context.Background(), strings.NewReader(""), c.args...)
		if code != exitUse || out != "" || !strings.Contains(errw, c.want) || !strings.HasPrefix(errw, "tallrow: ") || strings.Count(errw, "\n") != 1 {
			t.Errorf("%q: status %d, stdout %q, stderr %q, want %q", c.args, code, out, errw, c.want)
		}
	}
}

func TestHelp(t *testing.T) {
	for _, c := range []string{"fit", "plan", "columns", "digest", "pool", "launch"} {
		code, out, errw := try(context.Background(), nil, c, "--help")
		if code != exitDone || errw != "" {
			t.Errorf("%s: status %d, stderr %q", c, code, errw)
		}
		golden(t, "help/"+c+".txt", out)
	}
	if code, out, _ := try(context.Background(), nil, "--version"); code != exitDone || out != "tallrow "+version+"\n" {
		t.Errorf("version: %d %q", code, out)
	}
}

// asks makes f the command "ask" until the returned function is called.
func asks(f func(*app, context.Context) error) (restore func()) {
	old := commands
	defer func() { restore = func() { commands = old } }()
	commands = append(old[:len(old):len(old)], func(a *app) *cobra.Command {
		return &cobra.Command{Use: "ask", RunE: func(cmd *cobra.Command, _ []string) error { return f(a, cmd.Context()) }}
	})
	return nil
}

// A panic becomes one line and exit 1.
func TestPanic(t *testing.T) {
	defer asks(func(*app, context.Context) error { panic("a\nb") })()
	code, out, errw := try(context.Background(), nil, "ask")
	if code != exitFailed || out != "" || strings.Count(errw, "\n") != 1 || !strings.Contains(errw, "internal error: a\\nb; ") || strings.Contains(errw, "goroutine") {
		t.Errorf("status %d, stdout %q, stderr %q", code, out, errw)
	}
	t.Setenv("TALLROW_TRACE", "1")
	if _, _, errw := try(context.Background(), nil, "ask"); !strings.Contains(errw, "goroutine") {
		t.Errorf("with TALLROW_TRACE: %q", errw)
	}
}

// A run that cannot be woken is left behind at once, its files removed, and
// the message says how far it was.
func TestInterrupt(t *testing.T) {
	dir := t.TempDir()
	for _, c := range []struct {
		sig  syscall.Signal
		code int
		word string
	}{{syscall.SIGINT, 130, "interrupted"}, {syscall.SIGTERM, 143, "terminated"}, {syscall.SIGHUP, 129, "stopped by signal"}} {
		ctx, cancel := context.WithCancelCause(context.Background())
		restore := asks(func(a *app, _ context.Context) error {
			s := newSettings()
			s.scratch = dir
			spool, err := a.newSpool(s)
			if err != nil {
				return err
			}
			if err := os.WriteFile(spool, []byte("x"), 0o644); err != nil {
				return err
			}
			m := new(accum.Meter)
			m.Pass.Store(1)
			m.Rows.Store(1_234_567)
			m.Bytes.Store(34)
			m.Total.Store(100)
			a.watch(s, m)
			cancel(interrupt{c.sig})
			select {} // a read of a silent pipe
		})
		start := time.Now()
		code, out, errw := try(ctx, nil, "ask")
		restore()
		if took := time.Since(start); took > 10*grace {
			t.Errorf("%s took %s", c.word, took)
		}
		want := "tallrow: " + c.word
		if code != c.code || out != "" || !strings.HasPrefix(errw, want) || !strings.Contains(errw, "in pass 1 after 1,234,567 rows (34 % of the bytes); nothing was written\n") {
			t.Errorf("status %d, stdout %q, stderr %q", code, out, errw)
		}
		if left, err := os.ReadDir(dir); err != nil || len(left) > 0 {
			t.Errorf("left behind: %v %v", left, err)
		}
	}
}

// The whole way of a real signal is tried by a process of its own.
func TestSignal(t *testing.T) {
	ctx, stop := withSignals(context.Background())
	defer stop()
	if err := syscall.Kill(os.Getpid(), syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	select {
	case <-ctx.Done():
	case <-time.After(5 * time.Second):
		t.Fatal("the signal did not arrive")
	}
	var in interrupt
	if !errors.As(context.Cause(ctx), &in) || in.code() != 143 {
		t.Errorf("cause %v", context.Cause(ctx))
	}
}

func TestOneLine(t *testing.T) {
	if got := oneLine(" a\nb\rc\td\x1b[31m\x00 "); got != `a\nb\rc\td`+"\uFFFD[31m\uFFFD" {
		t.Errorf("%q", got)
	}
	if code := exitCode(fmt.Errorf("x: %w", stream.Usef("y"))); code != exitUse {
		t.Errorf("a wrapped wrong use is status %d", code)
	}
}

// A failing run leaves the old file as it was, and no temporary one.
func TestOutputIsAllOrNothing(t *testing.T) {
	dir := t.TempDir()
	out := filepath.Join(dir, "out.json")
	if err := os.WriteFile(out, []byte("old"), 0o600); err != nil {
		t.Fatal(err)
	}
	data := filepath.Join(dir, "bad.csv")
	if err := os.WriteFile(data, []byte("a,b\n1,2\n1\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	code, _, errw := try(context.Background(), nil, "columns", "--json", "-o", out, data)
	if code != exitFailed || !strings.Contains(errw, "line 3") {
		t.Errorf("status %d, stderr %q", code, errw)
	}
	if text, err := os.ReadFile(out); err != nil || string(text) != "old" {
		t.Errorf("the old file is %q, %v", text, err)
	}
	if code, _, errw := try(context.Background(), nil, "columns", "-o", data, data); code != exitUse || !strings.Contains(errw, "would write over the data") {
		t.Errorf("status %d, stderr %q", code, errw)
	}
	if err := os.WriteFile(data, []byte("a,b\n1,2\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	code, stdout, errw := try(context.Background(), nil, "columns", "--json", "-o", out, data)
	if code != exitDone || stdout != "" || errw != "" {
		t.Errorf("status %d, stdout %q, stderr %q", code, stdout, errw)
	}
	st, err := os.Stat(out)
	if err != nil || st.Mode().Perm() != 0o600 {
		t.Errorf("permissions %v, %v", st.Mode(), err)
	}
	if list, err := os.ReadDir(dir); err != nil || len(list) != 2 {
		t.Errorf("left behind: %v %v", list, err)
	}
}
