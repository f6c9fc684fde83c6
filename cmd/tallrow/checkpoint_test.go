package main

import (
	"bytes"
	"context"
	"crypto/sha256"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
)

// unloading writes rows of unloading times as text of several segments and as Parquet
// of several row groups, to one folder.
func unloading(t *testing.T, textRows, parquetRows int) string {
	t.Helper()
	r := rand.New(rand.NewPCG(9, 9))
	dir := filepath.Join(t.TempDir(), "days")
	if err := os.Mkdir(dir, 0o700); err != nil {
		t.Fatal(err)
	}
	draw := func() (minutes, pallets, tonnes float64, crane int64, quay int32) {
		pallets, tonnes, crane, quay = float64(r.IntN(40)), float64(r.IntN(9000))/100, int64(r.IntN(700)), int32(r.IntN(5))
		return 20 + 2*pallets + tonnes/3 + float64(quay) + (1+pallets/9)*r.NormFloat64(), pallets, tonnes, crane, quay
	}
	names := []string{"east", "north", "south", "west", "basin"}
	text := []byte("minutes,pallets,tonnes,crane,quay,remarks\n")
	for range textRows {
		minutes, pallets, tonnes, crane, quay := draw()
		text = strconv.AppendFloat(text, minutes, 'g', -1, 64)
		text = fmt.Appendf(text, ",%g,%g,%d,%s,\"nothing, or \"\"little\"\"\"\n", pallets, tonnes, crane, names[quay])
	}
	if err := os.WriteFile(filepath.Join(dir, "a.csv"), text, 0o600); err != nil {
		t.Fatal(err)
	}
	cols := []columnar.WriteColumn{{Name: "minutes", Kind: stream.Float64}, {Name: "pallets", Kind: stream.Float64}, {Name: "tonnes", Kind: stream.Float64},
		{Name: "crane", Kind: stream.Int64}, {Name: "quay", Kind: stream.Text}, {Name: "remarks", Kind: stream.Text}}
	vecs := make([]stream.Vector, len(cols))
	for range parquetRows {
		minutes, pallets, tonnes, crane, quay := draw()
		for j, x := range []float64{minutes, pallets, tonnes} {
			vecs[j].F64 = append(vecs[j].F64, x)
		}
		vecs[3].I64 = append(vecs[3].I64, crane)
		vecs[4].Code, vecs[5].Code = append(vecs[4].Code, quay), append(vecs[5].Code, 0)
	}
	vecs[4].Dict, vecs[5].Dict = &stream.Dict{Values: names}, &stream.Dict{Values: []string{"none"}}
	for j := range vecs {
		vecs[j].Kind = cols[j].Kind
	}
	var buf bytes.Buffer
	w, err := columnar.NewWriter(&buf, cols, columnar.WriterOptions{RowsPerGroup: 2000})
	if err == nil {
		err = w.WriteColumns(parquetRows, vecs)
	}
	if err == nil {
		err = w.Close()
	}
	if err == nil {
		err = os.WriteFile(filepath.Join(dir, "b.parquet"), buf.Bytes(), 0o600)
	}
	if err != nil {
		t.Fatal(err)
	}
	return dir
}

var timesAndSizes = regexp.MustCompile(`"(seconds|peak_bytes|spilled_bytes|spilled_runs|workers)":[^,}]*`)

// A program that is killed at any moment goes on, and ends with the bits of one that was
// not: fits in two passes, digests of a part and of a second round, over text and Parquet, with any number of
// workers. TALLROW_KILLS asks for more kills than the usual ones.
func TestKilledAtAnyMoment(t *testing.T) {
	kills := 60
	if n, err := strconv.Atoi(os.Getenv("TALLROW_KILLS")); err == nil {
		kills = n
	} else if testing.Short() {
		kills = 8
	}
	dir := unloading(t, 180_000, 60_000)
	work := t.TempDir()
	at := func(name string) string { return filepath.Join(work, name) }
	model := []string{"--outcome", "minutes", "--terms", "pallets, tonnes, pallets * tonnes", "--quiet"}
	commands := []struct {
		args   []string
		result func() string // what it left, as a text
		out    string
	}{
		{append([]string{"fit", dir, "--errors", "hc1, hc3, cr1(crane), cr1(quay, crane)", "--passes", "2", "--json", "-o", at("fit.json")}, model...), func() string {
			b, err := os.ReadFile(at("fit.json"))
			if err != nil {
				t.Fatal(err)
			}
			return timesAndSizes.ReplaceAllString(string(b), "")
		}, at("fit.json")},
		{append([]string{"digest", dir, "--errors", "hc1, cr1(crane)", "--part", "0/2", "-o", at("0.digest")}, model...), func() string {
			must(t, "pool", at("0.digest"), at("1.digest"), "-o", at("days.digest"))
			return timesAndSizes.ReplaceAllString(must(t, "fit", at("days.digest"), "--errors", "hc1, cr1(crane)", "--json", "--quiet"), "")
		}, at("0.digest")},
		{append([]string{"digest", dir, "--errors", "hc3, cr1(crane)", "--at", at("first.json"), "-o", at("rows.digest")}, model...), func() string {
			return timesAndSizes.ReplaceAllString(must(t, "fit", at("first.digest"), at("rows.digest"), "--errors", "hc3", "--json", "--quiet"), "")
		}, at("rows.digest")},
	}
	must(t, append([]string{"digest", dir, "--errors", "hc1, cr1(crane)", "--part", "1/2", "-o", at("1.digest")}, model...)...)
	must(t, append([]string{"digest", dir, "--errors", "cr1(crane)", "-o", at("first.digest")}, model...)...)
	must(t, "fit", at("first.digest"), "--errors", "classical", "--json", "--quiet", "-o", at("first.json"))
	r := rand.New(rand.NewPCG(uint64(time.Now().UnixNano()), 1)) // the moments are not the same twice anyway
	workers := []string{"1", "2", "3", "8"}
	killed, wentOn := 0, 0
	for i, c := range commands {
		result := c.result
		if strings.HasSuffix(c.out, ".digest") {
			c.result = func() string { // the file too has the same bytes
				b, err := os.ReadFile(c.out)
				if err != nil {
					t.Fatal(err)
				}
				return fmt.Sprintf("%x\n%s", sha256.Sum256(b), result())
			}
		}
		start := time.Now()
		must(t, c.args...)
		took := time.Since(start)
		want := c.result()
		most := kills / len(commands) * (i + 1)
		for run := 0; killed < most; run++ {
			if run > 20*kills {
				t.Fatalf("%d runs and only %d of them were killed in time", run, killed)
			}
			ck := at("sums.ck")
			_, err := os.Stat(ck)
			found := err == nil
			cmd := exec.Command("tallrow", append(slices.Clone(c.args), "--checkpoint", ck, "--workers", workers[r.IntN(len(workers))])...)
			cmd.Env = append(os.Environ(), saveEvery+"=1")
			var errw bytes.Buffer
			cmd.Stderr = &errw
			if err := cmd.Start(); err != nil {
				t.Fatal(err)
			}
			timer := time.AfterFunc(time.Duration(r.Int64N(int64(2*took))), func() { cmd.Process.Kill() })
			err = cmd.Wait()
			timer.Stop()
			if cmd.ProcessState.ExitCode() == -1 {
				killed++
				continue
			}
			if err != nil {
				t.Fatalf("run %d: %v: %s", run, err, errw.String())
			}
			if got := c.result(); got != want {
				t.Fatalf("%q after kills:\n%s\nwithout:\n%s", c.args, got, want)
			}
			if found {
				wentOn++
			}
			if _, err := os.Stat(ck); err == nil {
				t.Fatal("the checkpoint is there after the run was done")
			}
			os.Remove(c.out)
		}
		// What the last kill left is brought to an end.
		must(t, append(slices.Clone(c.args), "--checkpoint", at("sums.ck"))...)
		if got := c.result(); got != want {
			t.Fatalf("%q after kills:\n%s\nwithout:\n%s", c.args, got, want)
		}
	}
	if wentOn == 0 && kills > 20 {
		t.Error("no run went on from a checkpoint of a killed one")
	}
	t.Logf("%d runs were killed, %d went on to the end", killed, wentOn)
}

// What cannot be taken up again is refused before the data are read, by name.
func TestCheckpointRefusals(t *testing.T) {
	dir := unloading(t, 2000, 2000)
	work := t.TempDir()
	ck := filepath.Join(work, "sums.ck")
	t.Setenv(saveEvery, "1")
	model := []string{"fit", "--outcome", "minutes", "--terms", "pallets, tonnes", "--quiet", "--checkpoint", ck}
	with := func(args ...string) []string { return append(slices.Clone(model), args...) }
	csv := filepath.Join(dir, "a.csv")
	text, err := os.ReadFile(csv)
	if err != nil {
		t.Fatal(err)
	}
	fails(t, exitUse, "does not go with --first", with("--first", "10", csv)...)
	fails(t, exitUse, "hac goes by the order of rows", with("--errors", "hac", csv)...)
	fails(t, exitUse, "--checkpoint is not an option of plan", "plan", "--checkpoint", ck, csv)
	code, _, errw := try(context.Background(), bytes.NewReader(text), with("-")...)
	if code != exitUse || !strings.Contains(errw, "can be read only once") {
		t.Errorf("a pipe: status %d, %s", code, errw)
	}
	in := func(name string) []string {
		return []string{"fit", "--outcome", "minutes", "--terms", "pallets", "--quiet", "--checkpoint", name, dir}
	}
	fails(t, exitUse, "would be among the data", in(filepath.Join(dir, "sums.ck"))...)
	fails(t, exitUse, "would be among the data", in(csv)...)
	fails(t, exitUse, "is the output too", append(in(ck), "-o", ck)...)
	fails(t, exitUse, "want a file name", in("")...)
	fails(t, exitFailed, "the file is no checkpoint", "fit", "--outcome", "minutes", "--terms", "pallets", "--quiet", "--checkpoint", csv, filepath.Join(dir, "b.parquet"))
	fails(t, exitFailed, "no file can be made there", in(filepath.Join(work, "none", "sums.ck"))...)
	digested := filepath.Join(work, "days.digest")
	must(t, "digest", dir, "--outcome", "minutes", "--terms", "pallets", "--quiet", "-o", digested)
	fails(t, exitUse, "digests are read in moments", "fit", digested, "--checkpoint", ck)
	fails(t, exitUse, "does not go with --each-digest", "fit", digested, "--each-digest", "--checkpoint", ck)

	// A row that cannot be read stops the run; the sums before it stay, and are of no use
	// once the file is mended: the input is another then.
	bad := filepath.Join(work, "bad.csv")
	var long []byte
	for len(long) < 9<<20 {
		long = append(long, text[bytes.IndexByte(text, '\n')+1:]...)
	}
	head := text[:bytes.IndexByte(text, '\n')+1]
	long = slices.Concat(head, long, []byte("x,1,1,1,east,-\n"))
	if err := os.WriteFile(bad, long, 0o600); err != nil {
		t.Fatal(err)
	}
	fails(t, exitFailed, "column minutes", with("--workers", "1", bad)...)
	if _, err := os.Stat(ck); err != nil {

		t.Fatalf("no checkpoint of the segments before the bad row: %v", err)
	}
	fails(t, exitFailed, "is of another run: --terms was \"pallets, tonnes\" and is now \"pallets\"", append(in(ck)[:8], bad)...)
	fails(t, exitFailed, "is of another run: --bad-rows (\"skip\") is new", with("--bad-rows", "skip", bad)...)
	fails(t, exitFailed, "is of another run: the command was fit and is now digest", slices.Concat([]string{"digest"}, with("-o", digested, bad)[1:])...)
	if err := os.WriteFile(bad, long[:len(long)-len("x,1,1,1,east,-\n")], 0o600); err != nil {
		t.Fatal(err)
	}
	fails(t, exitFailed, "is of another run: the input "+bad+" was", with(bad)...)
	if err := os.Remove(ck); err != nil {
		t.Fatal(err)
	}
	must(t, with(bad)...)
	if left, _ := os.ReadDir(work); len(left) != 2 {
		t.Errorf("%d files are there, want the digest and the data", len(left))
	}
}
