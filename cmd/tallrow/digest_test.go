package main

import (
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/vcov"
)

// unloadings writes a Parquet file for each of some days, in groups of 200 rows, and
// returns the folder. pallets has missing cells, and on the second day all are missing.
func unloadings(t *testing.T, days, rows int) string {
	t.Helper()
	dir := t.TempDir()
	rng := rand.New(rand.NewPCG(77, uint64(days)))
	for day := range days {
		cols := []columnar.WriteColumn{{Name: "minutes", Kind: stream.Float64}, {Name: "pallets", Kind: stream.Float64, Optional: true}, {Name: "tonnes", Kind: stream.Float64},
			{Name: "crew", Kind: stream.Int64}, {Name: "wet", Kind: stream.Bool}, {Name: "quay", Kind: stream.Int64}, {Name: "berth", Kind: stream.Uint64},
			{Name: "barge", Kind: stream.Text}, {Name: "day", Kind: stream.Time, DateOnly: true}, {Name: "tide", Kind: stream.Float64, Optional: true}}
		vs := make([]stream.Vector, len(cols))
		vs[7].Dict = &stream.Dict{Values: []string{"canal", "deck", "hatch", "motor"}}
		n := rows + 37*day
		for range n {
			pallets, tonnes, crew, quay := float64(1+rng.IntN(40)), 1+10*rng.Float64(), int64(1+rng.IntN(6)), int64(rng.IntN(23))
			barge, wet, tide := int32(rng.IntN(4)), int64(rng.IntN(2)), math.Round(8*rng.NormFloat64())/8
			minutes := 1e4 + 3*pallets + tonnes - 2*float64(crew) + float64(quay%5) + 4*float64(barge) + (1+pallets/8)*rng.NormFloat64()
			if rng.IntN(30) == 0 || day == 1 {
				pallets = math.NaN()
			}
			if rng.IntN(40) == 0 {
				tide = math.NaN()
			}
			for j, x := range map[int]float64{0: minutes, 1: pallets, 2: tonnes, 9: tide} {
				vs[j].F64 = append(vs[j].F64, x)
			}
			for j, x := range map[int]int64{3: crew, 4: wet, 5: 1000 + quay, 6: -1 - quay/2, 8: int64(20000+3*day+rng.IntN(3)) * 86_400_000_000_000} {
				vs[j].I64 = append(vs[j].I64, x)
			}
			vs[7].Code = append(vs[7].Code, barge)
		}
		for j := range vs {
			vs[j].Kind = cols[j].Kind
		}
		f, err := os.Create(filepath.Join(dir, fmt.Sprintf("day-%02d.parquet", day)))
		if err != nil {
			t.Fatal(err)
		}
		w, err := columnar.NewWriter(f, cols, columnar.WriterOptions{RowsPerGroup: 200})
		if err == nil {
			err = w.WriteColumns(n, vs)
		}
		if err == nil {
			err = w.Close()
		}
		if err == nil {
			err = f.Close()
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

// differences compares two results to a relative tolerance, all but what they say of
// their input and run. It lists the paths of what differs, but for those that begin with
// one of skip.
func differences(t *testing.T, a, b string, near float64, skip ...string) (out []string) {
	t.Helper()
	var x, y any
	for _, p := range []struct {
		text string
		to   *any
	}{{a, &x}, {b, &y}} {
		if err := json.Unmarshal([]byte(p.text), p.to); err != nil {
			t.Fatalf("%v: %s", err, p.text)
		}
	}
	skip = append(skip, "run.", "input.", "rows.lost_elsewhere")
	scale := 0.0 // of the vector or matrix that a number is in
	var walk func(path string, x, y any)
	walk = func(path string, x, y any) {
		if slices.ContainsFunc(skip, func(s string) bool { return strings.HasPrefix(path, s) }) {
			return
		}
		switch u := x.(type) {
		case map[string]any:
			v, ok := y.(map[string]any)
			if !ok {
				out = append(out, path)
				return
			}
			for k := range v {
				if _, ok := u[k]; !ok {
					out = append(out, path+k)
				}
			}
			for k := range u {
				walk(path+k+".", u[k], v[k])
			}
		case []any:
			v, ok := y.([]any)
			if !ok || len(u) != len(v) {
				out = append(out, fmt.Sprintf("%s: %v and %v", path, x, y))
				return
			}
			had := scale
			for _, e := range u {
				if f, ok := e.(float64); ok {
					scale = max(scale, math.Abs(f))
				}
			}
			for i := range u {
				walk(fmt.Sprintf("%s%d.", path, i), u[i], v[i])
			}
			scale = had
		case float64:
			v, ok := y.(float64)
			size := max(math.Abs(u), math.Abs(v))
			if strings.Contains(path, "covariance") {
				size = max(size, 1e-3*scale) // entries near zero have no digits of their own
			}
			if !ok || math.Abs(u-v) > near*size {
				out = append(out, fmt.Sprintf("%s: %v and %v", path, x, y))
			}
		default:
			if x != y {
				out = append(out, fmt.Sprintf("%s: %v and %v", path, x, y))
			}
		}
	}
	walk("", x, y)
	return out
}

// digestCases are models whose digests answer what they were made for.
//
// The digest is made with model, and asks are for what comes after.
var digestCases = []struct{ name, terms, errors, model, asks string }{
	{"numbers", "pallets, tonnes, wet", "classical, hc0, hc1", "", "--adjust holm --hypothesis pallets=3,wet=0"},
	{"no constant", "pallets, tonnes", "hc1, cr1(quay)", "--no-constant", ""},
	{"frequency", "pallets, tonnes", "hc1, cr1(quay)", "--weight crew --weight-kind frequency", ""},
	{"precision", "pallets, tonnes", "hc0, cr1(barge)", "--weight tonnes --weight-kind precision", "--level 0.9"},
	{"sampling", "pallets, wet", "hc1, cr1(quay)", "--weight tonnes --weight-kind sampling", ""},
	{"clusters", "pallets, tonnes", "cr0(quay), cr1(quay), cr2(quay), cr3(quay), cr1(berth), cr1(barge), cr1(day), cr1(wet), cr1(tide)", "", "--cluster-detail --hypothesis pallets=tonnes"},
	{"two ways", "pallets, tonnes", "hc1, cr1(quay, barge)", "", "--adjust bh"},
	{"three ways", "pallets", "cr1(quay, barge, day)", "", ""},
	{"driscoll-kraay", "pallets, tonnes", "driscoll-kraay(day)", "", "--lags 2"},
	{"draws", "pallets, tonnes", "wcr(quay), wcu(barge)", "", "--draws 199 --seed 3 --hypothesis tonnes=1"},
	{"categories", "pallets, each(barge)", "classical", "", ""},
	{"products", "pallets, each(barge) * tonnes, each(wet) * each(quay)", "classical", "", ""},
	{"collinear", "pallets, tonnes, 2*pallets - tonnes, wet", "hc1, cr1(quay)", "", ""},
	{"extended", "pallets, pow(pallets, 2), pow(pallets, 3)", "hc1, cr1(quay)", "--arithmetic extended", ""},
	{"swept", "pallets, tonnes", "classical, cr1(quay), cr2(quay)", "--sweep quay --arithmetic double", "--hypothesis pallets=3"},
	{"where", "pallets, tonnes", "hc1, cr1(quay)", "--where day>\"2024-10-09\"&&quay<1020", ""},
	{"few", "pallets, tonnes", "hc1", "--where pallets==3", ""},
	{"audit", "pallets, tonnes", "cr1(quay)", "", "--audit 10"},
}

// The digest of a run, and the parts of one in any number and grouping, give the bits
// of a fit in one pass.
func TestDigestIsTheFit(t *testing.T) {
	data := unloadings(t, 3, 900)
	for _, c := range digestCases {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			in := func(name string) string { return filepath.Join(dir, name) }
			model := slices.Concat([]string{"--outcome", "minutes", "--terms", c.terms, "--errors", c.errors}, strings.Fields(c.model))
			asks := strings.Fields(c.asks)
			with := func(command string, more ...string) []string {
				return slices.Concat([]string{command}, model, []string{data, "--quiet"}, more)
			}
			want := must(t, with("fit", slices.Concat([]string{"--passes", "1", "--json"}, asks)...)...)
			answer := func(what string, names ...string) string {
				t.Helper()
				got := must(t, slices.Concat([]string{"fit", "--json", "--errors", c.errors}, asks, names)...)
				if d := differences(t, want, got, 0); len(d) > 0 {
					t.Errorf("%s: %s", what, strings.Join(d, "\n"))
				}
				return got
			}
			must(t, with("digest", "-o", in("whole"))...)
			answer("whole", in("whole"))
			split := []int{2, 5}
			if testing.Short() {
				split = split[1:]
			}
			for _, n := range split {
				var parts []string
				for i := range n {
					parts = append(parts, in(fmt.Sprintf("%d-%d", i, n)))
					must(t, with("digest", "--part", fmt.Sprintf("%d/%d", i, n), "--workers", fmt.Sprint(1+i), "-o", parts[i])...)
				}
				slices.Reverse(parts)
				answer(fmt.Sprintf("%d parts", n), parts...)
				must(t, slices.Concat([]string{"pool", "-o", in("pooled")}, parts)...)
				must(t, slices.Concat([]string{"pool", "--partial", "-o", in("some")}, parts[:n/2])...)
				must(t, slices.Concat([]string{"pool", "-o", in("again"), in("some")}, parts[n/2:])...)
				a, err := os.ReadFile(in("pooled"))
				if err != nil {
					t.Fatal(err)
				}
				if b, _ := os.ReadFile(in("again")); string(a) != string(b) {
					t.Error("grouping shows in the bytes of joined digests")
				}
				answer("pooled", in("pooled"))
			}
		})
	}
}

// Days digested one by one answer as one run over all of them does, each in its own
// frame or all in that of the first.
func TestDaysAreTheRun(t *testing.T) {
	data := unloadings(t, 5, 700)
	days, err := filepath.Glob(filepath.Join(data, "*.parquet"))
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range digestCases {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			model := slices.Concat([]string{"--outcome", "minutes", "--terms", c.terms, "--errors", c.errors, "--quiet"}, strings.Fields(c.model))
			asks := slices.Concat([]string{"fit", "--errors", c.errors, "--json"}, strings.Fields(c.asks))
			want := must(t, slices.Concat([]string{"fit", "--passes", "1", "--json", data}, model, strings.Fields(c.asks))...)
			for _, how := range []string{"own", "from"} {
				if how == "own" && c.name == "swept" {
					continue // effects are swept out in one frame only
				}
				var names []string
				for i := range days {
					d := days[len(days)-1-i] // the first have no rows under where
					n := filepath.Join(dir, fmt.Sprintf("%s-%d.digest", how, i))
					more := []string{}
					if how == "from" && i > 0 {
						more = []string{"--frame-from", names[0]}
					}
					must(t, slices.Concat([]string{"digest", d, "-o", n}, model, more)...)
					names = append(names, n)
				}
				slices.Reverse(names)
				near := 1e-12
				if c.name == "extended" {
					near = 1e-11 // powers up to the sixth
				}
				// A constant of rows, or a bound, is not of sums alone.
				if d := differences(t, want, must(t, slices.Concat(asks, names)...), near, "warnings", "condition"); len(d) > 0 {
					t.Errorf("%s frames: %s", how, strings.Join(d, "\n"))
				}
			}
		})
	}
}

// Fewer terms, another order, another outcome, categories left out: from the sums of a
// whole model as from the data, over the same rows.
func TestAsk(t *testing.T) {
	data := unloadings(t, 3, 900)
	rows := "!missing(pallets) && !missing(tide)"
	for _, c := range []struct {
		name, terms, keep, errors, model string
		ask                              []string // --terms, --outcome and what is for fit only
	}{
		{"fewer", "pallets, tonnes, wet, crew, tide", "", "hc0, hc1, cr0(quay), cr1(quay), cr2(quay), cr3(quay)", "", []string{"--terms", "tonnes, crew"}},
		{"order", "pallets, tonnes, wet, crew, tide", "", "hc1, cr2(quay), cr1(quay, barge)", "", []string{"--terms", "tide, wet, crew, tonnes, pallets", "--cluster-detail"}},
		{"none", "pallets, tide", "", "hc1, cr1(quay)", "", []string{"--terms", ""}},
		{"outcome", "pallets, tonnes, crew, tide", "", "hc0, hc1, cr1(quay), cr3(barge)", "", []string{"--outcome", "tonnes", "--terms", "pallets, tide", "--hypothesis", "pallets=tide"}},
		{"outcome kept", "pallets, tide", "log(tonnes), tonnes", "hc1, cr1(quay)", "", []string{"--outcome", "log(tonnes)"}},
		{"interaction", "pallets, tide", "pallets * wet, wet, tonnes, tonnes * tonnes", "hc1, cr1(quay)", "", []string{"--terms", "pallets, wet, pallets * wet, tonnes, tonnes * tonnes, tide", "--adjust", "holm"}},
		{"no constant", "pallets, tonnes, tide", "", "hc1, cr1(quay)", "--no-constant", []string{"--terms", "tonnes, tide"}},
		{"frequency", "pallets, tonnes, tide", "", "hc1, cr1(quay)", "--weight crew --weight-kind frequency", []string{"--terms", "tonnes"}},
		{"sampling", "pallets, tonnes, tide", "", "hc1, cr1(quay)", "--weight crew --weight-kind sampling", []string{"--terms", "tonnes, pallets"}},
		{"draws", "pallets, tonnes, tide", "", "cr1(quay)", "", []string{"--terms", "tonnes", "--errors", "wcr(quay), wcu(quay), cr1(quay)", "--draws", "99", "--seed", "5"}},
		{"driscoll-kraay", "pallets, tonnes, tide", "", "driscoll-kraay(day)", "", []string{"--terms", "tonnes, pallets", "--lags", "3"}},
		{"alias left out", "pallets, tonnes, pallets + tonnes, tide", "", "hc1, cr1(quay)", "", []string{"--terms", "tonnes, pallets"}},
		{"alias asked for", "pallets, tonnes, pallets + tonnes, tide", "", "hc1, cr1(quay)", "", []string{"--terms", "tonnes, pallets + tonnes, pallets"}},
		{"category left out", "pallets, tide, each(barge), each(quay)", "", "classical", "", []string{"--terms", "pallets, each(quay)"}},
		{"categories turned", "pallets, tide, each(barge), each(quay), each(barge) * each(wet)", "", "classical", "", []string{"--terms", "each(quay), each(barge), pallets"}},
		{"crossed kept", "pallets, tide, each(barge) * each(wet)", "", "classical", "", []string{"--terms", "each(barge) * each(wet), tide"}},
		{"all categories left out", "pallets, tide, each(barge)", "", "classical", "", []string{"--terms", "pallets"}},
		{"extended", "pallets, pow(pallets, 2), tide", "", "hc1", "--arithmetic extended", []string{"--terms", "pow(pallets, 2), pallets"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			name := filepath.Join(t.TempDir(), "quay.digest")
			model := slices.Concat([]string{"--quiet", "--where", rows, data}, strings.Fields(c.model))
			must(t, slices.Concat([]string{"digest", "--outcome", "minutes", "--terms", c.terms, "--errors", c.errors, "--keep", c.keep, "-o", name}, model)...)
			ask := c.ask
			if !slices.Contains(ask, "--errors") {
				ask = append(ask, "--errors", c.errors)
			}
			fresh := ask
			for option, value := range map[string]string{"--outcome": "minutes", "--terms": c.terms} {
				if !slices.Contains(ask, option) {
					fresh = append(fresh, option, value)
				}
			}
			want := must(t, slices.Concat([]string{"fit", "--json", "--passes", "1"}, model, fresh)...)
			got := must(t, slices.Concat([]string{"fit", "--json", name}, ask)...)
			if d := differences(t, want, got, 1e-11, "warnings", "condition"); len(d) > 0 {
				t.Errorf("%s", strings.Join(d, "\n"))
			}
		})
	}
}

// With hidden ids digests answer as those with open ones do, up to the order in which
// clusters are summed, and hold no id; days and parts made with one secret still fit.
func TestHiddenIDs(t *testing.T) {
	data := unloadings(t, 3, 900)
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	if err := os.WriteFile(in("secret"), []byte(strings.Repeat("quay of secrets ", 3)), 0o600); err != nil {
		t.Fatal(err)
	}
	const errs = "hc1, cr1(quay), cr2(barge), cr1(quay, barge), cr1(berth), driscoll-kraay(day)"
	model := []string{"--outcome", "minutes", "--terms", "pallets, tonnes", "--errors", errs, "--quiet"}
	must(t, slices.Concat([]string{"digest", data, "-o", in("open")}, model)...)
	must(t, slices.Concat([]string{"digest", data, "-o", in("whole"), "--hide-ids", in("secret")}, model)...)
	var parts []string
	for i := range 3 {
		parts = append(parts, in(fmt.Sprint(i)))
		must(t, slices.Concat([]string{"digest", data, "-o", parts[i], "--part", fmt.Sprintf("%d/3", i), "--hide-ids", in("secret")}, model)...)
	}
	must(t, slices.Concat([]string{"pool", "-o", in("pooled")}, parts)...)
	ask := []string{"fit", "--json", "--cluster-detail", "--lags", "2", "--errors", errs}
	want := must(t, append(ask, in("open"))...)
	whole := must(t, append(ask, in("whole"))...)
	if d := differences(t, whole, must(t, append(ask, in("pooled"))...), 0); len(d) > 0 {
		t.Errorf("parts with hidden ids: %s", strings.Join(d, "\n"))
	}
	shown := 0
	for _, d := range differences(t, want, whole, 1e-13) {
		if !strings.HasSuffix(d, " and (hidden)") || !strings.Contains(d, "cluster.: ") {
			t.Errorf("hidden and open: %s", d)
		}
		shown++
	}
	if shown == 0 {
		t.Error("no label of a cluster was hidden")
	}

	for _, name := range append(parts, in("whole"), in("pooled")) {
		raw, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		r, err := digest.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		defer r.Close()
		text := string(raw)
		hidden, open := 0, 0
		for {
			rec, err := r.Next()
			if err != nil {
				t.Fatal(err)
			}
			if rec == nil {
				break
			}
			if rec.What != accum.ClusterSums {
				continue
			}
			text += string(rec.Key) + "\n" + rec.Label + "\n"
			if r.Meta.Model.Hidden[rec.Table] {
				if hidden++; rec.Label != "" || len(rec.Key) != 32 {
					t.Fatalf("a hidden id has the key %q and the label %q", rec.Key, rec.Label)
				}
			} else if open++; !strings.HasPrefix(rec.Label, "2024-") {
				t.Fatalf("a period has the label %q", rec.Label)
			}
		}
		for _, id := range []string{"canal", "deck", "hatch", "motor"} {
			if strings.Contains(text, id) {
				t.Errorf("%s holds the id %s", filepath.Base(name), id)
			}
		}
		if hidden == 0 || open == 0 {
			t.Errorf("%d hidden and %d open clusters", hidden, open)
		}
		if st, err := os.Stat(name); err != nil || st.Mode().Perm() != 0o600 {
			t.Errorf("mode %v, %v", st.Mode(), err)
		}
	}
}

// Digests of every version of the format stay readable, with the numbers that they had
// when they were made, which are those of the data. They are never made anew: a new
// version brings new files and new entries of locked.json.
func TestOldDigests(t *testing.T) {
	dir := filepath.Join("..", "..", "accum", "digest", "testdata")
	text, err := os.ReadFile(filepath.Join(dir, "locked.json"))
	if err != nil {
		t.Fatal(err)
	}
	var locked map[string]struct {
		Estimates []float64
		SE        map[string][]float64
	}
	if err := json.Unmarshal(text, &locked); err != nil {
		t.Fatal(err)
	}
	sums := map[string]string{
		"numbers-1": "a93893b2f2ef16cbf894ae1f053b31f76e9dc1e8f57669fe981bd5e36093e49b",
		"levels-1":  "a240fb1781ee3d7b022783d44bea0f24b39fc02c01736b43585b9a77419ad7d7",
	}
	fresh := map[string][]string{
		"numbers": {"--terms", "pallets, tonnes, wet", "--weight", "crew", "--weight-kind", "frequency", "--lags", "2", "--errors", "hc1, cr1(berth), cr2(barge), cr1(berth, barge), driscoll-kraay(start)"},
		"levels":  {"--terms", "pallets, each(barge), each(barge) * tonnes, each(wet)", "--errors", "classical"},
	}
	if len(locked) != len(sums) {
		t.Errorf("%d files are locked, want %d", len(locked), len(sums))
	}
	for name, want := range locked {
		file := filepath.Join(dir, name+".digest")
		raw, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		if got := fmt.Sprintf("%x", sha256.Sum256(raw)); got != sums[name] {
			t.Errorf("%s has the SHA-256 %s, want %s: it must stay as it was", name, got, sums[name])
		}
		kind, _, _ := strings.Cut(name, "-")
		options := fresh[kind]
		at := slices.Index(options, "--errors")
		ask := slices.Concat([]string{"fit", "--json", file}, options[at:])
		if i := slices.Index(options, "--lags"); i >= 0 {
			ask = append(ask, options[i:i+2]...)
		}
		for from, args := range map[string][]string{
			"the digest": ask,
			"its data":   slices.Concat([]string{"fit", "--json", "--outcome", "minutes", filepath.Join(dir, "unloading.csv")}, options),
		} {
			var got vcov.Result
			if err := json.Unmarshal([]byte(must(t, args...)), &got); err != nil {
				t.Fatal(err)
			}
			near := func(what string, a []float64, b []vcov.Number) {
				t.Helper()
				if len(a) != len(b) {
					t.Fatalf("%s from %s: %s has %d numbers, want %d", name, from, what, len(b), len(a))
				}
				for i := range a {
					if !(math.Abs(a[i]-float64(b[i])) <= 1e-12*math.Abs(a[i])) {
						t.Errorf("%s from %s: %s %d is %v, was %v", name, from, what, i, b[i], a[i])
					}
				}
			}
			near("estimate", want.Estimates, got.Estimates)
			if len(got.Errors) != len(want.SE) {
				t.Errorf("%s from %s: %d kinds of errors, want %d", name, from, len(got.Errors), len(want.SE))
			}
			for i := range got.Errors {
				e := &got.Errors[i]
				near(e.Name(), want.SE[e.Name()], e.SE)
			}
		}
	}
}

// Both rounds together: keys in any order, clusters described from what the first round
// keeps, and refused where only scores are there.
func TestRoundsTogether(t *testing.T) {
	data := unloadings(t, 3, 900)
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	rounds := func(terms, errors string) (fit []string, one, two string) {
		t.Helper()
		model := []string{"--outcome", "minutes", "--terms", terms, "--errors", errors, data, "--quiet"}
		must(t, slices.Concat([]string{"digest", "-o", in("one")}, model)...)
		must(t, "fit", in("one"), "--errors", "classical", "--json", "-o", in("one.json"))
		must(t, slices.Concat([]string{"digest", "--at", in("one.json"), "-o", in("two")}, model)...)
		return slices.Concat([]string{"fit", "--json"}, model), in("one"), in("two")
	}
	const errs = "cr1(quay, barge), cr1(berth), hc3, cr1(barge)"
	fit, one, two := rounds("pallets, tonnes", errs)
	want := must(t, append(fit, "--cluster-detail")...)
	got := must(t, "fit", "--json", "--errors", errs, "--cluster-detail", one, two)
	if d := differences(t, want, got, 1e-12, "leverage"); len(d) > 0 {
		t.Errorf("%s", strings.Join(d, "\n"))
	}
	_, one, two = rounds("pallets, each(barge)", "hc1, cr1(quay)")
	must(t, "fit", one, two)
	fails(t, exitUse, "--cluster-detail: needs second moments of the clusters of quay", "fit", one, two, "--cluster-detail")
}
