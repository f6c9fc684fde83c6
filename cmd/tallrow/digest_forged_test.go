package main

import (
	"context"
	"encoding/json"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
)

// Descriptions that somebody made up, under a right checksum: commands may refuse them,
// and must not fall over. All are tried with TALLROW_FAULTS=1.
func TestForgedDigests(t *testing.T) {
	data := unloadings(t, 2, 600)
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	every := 29
	if os.Getenv("TALLROW_FAULTS") != "" {
		every = 1
	}
	for _, c := range []struct{ name, terms, first, second, more string }{
		{"numbers", "pallets, tonnes", "hc1, cr1(quay), cr1(quay, barge)", "hc3, cr1(berth)", ""},
		{"levels", "pallets, each(barge) * tonnes", "classical", "hc1, hc3, cr1(quay)", ""},
		{"swept", "pallets, tonnes", "cr1(quay)", "", "--sweep quay"},
	} {
		model := slices.Concat([]string{"--outcome", "minutes", "--terms", c.terms, "--quiet", data}, strings.Fields(c.more))
		all := c.first
		if c.second != "" {
			all += ", " + c.second
		}
		// Both rounds must have the same keys.
		must(t, slices.Concat([]string{"digest", "--errors", all, "-o", in("one")}, model)...)
		files := []string{in("one")}
		if c.second != "" {
			must(t, "fit", in("one"), "--errors", "classical", "--json", "-o", in("one.json"))
			must(t, slices.Concat([]string{"digest", "--at", in("one.json"), "--errors", all, "-o", in("two")}, model)...)
			files = append(files, in("two"))
		}
		detail := []string{}
		if c.name == "numbers" {
			detail = append(detail, "--cluster-detail")
		}
		must(t, slices.Concat([]string{"fit", "--errors", all, "--memory", "256MB"}, detail, files)...)
		for _, file := range files {
			meta, records := taken(t, file)
			var doc any
			if err := json.Unmarshal(meta, &doc); err != nil {
				t.Fatal(err)
			}
			n, refused, tried := 0, 0, 0
			forge(doc, func() {
				text, err := json.Marshal(doc)
				if err != nil {
					t.Fatal(err)
				}
				var m digest.Meta
				if json.Unmarshal(text, &m) != nil {
					return // refused when it is opened
				}
				if n++; n%every != 0 {
					return
				}
				w, err := digest.Create(in("forged"))
				if err != nil {
					t.Fatal(err)
				}
				for _, r := range records {
					if err := w.Write(r); err != nil {
						t.Fatal(err)
					}
				}
				if err := w.Close(&m); err != nil {
					t.Fatal(err)
				}
				tried++
				names := slices.Clone(files)
				names[slices.Index(files, file)] = in("forged")
				bad := false
				for i, args := range [][]string{
					slices.Concat([]string{"fit", "--errors", all, "--memory", "256MB"}, detail, names),
					slices.Concat([]string{"fit", "--json"}, names),
					{"pool", in("forged"), "-o", in("pooled")},
					{"pool", in("forged"), file, "-o", in("pooled")},
				} {
					code, _, errw := try(context.Background(), nil, args...)
					if strings.Contains(errw, "internal error") || strings.Contains(errw, "panic") || strings.Contains(errw, "runtime error") {
						t.Errorf("%s, %s: %q ends with status %d, %s\n%s", c.name, filepath.Base(file), args[0], code, errw, text)
					}
					bad = bad || code != 0 && i < 2
				}
				if bad {
					refused++
				}
			})
			t.Logf("%s, %s: %d of %d descriptions tried, %d refused", c.name, filepath.Base(file), tried, n, refused)
			if n < 300 || tried < n/every || refused == 0 || refused == tried {
				t.Errorf("%s, %s: %d of %d descriptions tried, %d refused", c.name, filepath.Base(file), tried, n, refused)
			}
		}
	}
}

// taken reads a digest: its description as JSON and its records.
func taken(t *testing.T, name string) ([]byte, []*accum.Record) {
	t.Helper()
	r, err := digest.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	var out []*accum.Record
	for {
		rec, err := r.Next()
		if err != nil {
			t.Fatal(err)
		}
		if rec == nil {
			break
		}
		c := *rec
		c.Key, c.Sums = slices.Clone(rec.Key), slices.Clone(rec.Sums)
		out = append(out, &c)
	}
	text, err := json.Marshal(&r.Meta)
	if err != nil {
		t.Fatal(err)
	}
	return text, out
}

// forge gives every value in a JSON document other values, one at a time.
func forge(doc any, f func()) {
	values := []any{nil, -1, 0, 1, 3, 1e9, 1e18, "", "x", true, []any{}, []any{1e9, nil}, []any{0}, map[string]any{}}
	var walk func(v any, set func(any))
	walk = func(v any, set func(any)) {
		for _, x := range values {
			set(x)
			f()
		}
		set(v)
		switch v := v.(type) {
		case map[string]any:
			for _, k := range slices.Sorted(maps.Keys(v)) {
				x := v[k]
				walk(x, func(y any) { v[k] = y })
			}
		case []any:
			for i, x := range v[:min(2, len(v))] {
				walk(x, func(y any) { v[i] = y })
			}
		}
	}
	m := doc.(map[string]any)
	for _, k := range slices.Sorted(maps.Keys(m)) {
		if k != "format" {
			walk(m[k], func(y any) { m[k] = y })
		}
	}
}
