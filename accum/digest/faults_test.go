package digest

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/accumtest"
	"github.com/tallrow/tallrow/stream"
)

// small makes the digest of a shape, of few rows.
func small(t testing.TB, shape string) (name string, m *Meta, x *accumtest.Table) {
	t.Helper()
	for _, s := range accumtest.Shapes() {
		if s.Name != shape {
			continue
		}
		s.Rows = 200
		schema := accumtest.Schema()
		d, err := stream.NewDesign(s.Spec, &schema)
		if err != nil {
			t.Fatal(err)
		}
		state, err := accum.First(t.Context(), s.Source(1), d, s.Needs(d), accum.Options{Workers: 1, Memory: 64 << 20})
		if err != nil {
			t.Fatal(err)
		}
		defer state.Close()
		x = accumtest.Keep(t, state, 0, 0, 1)
		name = keep(t, filepath.Join(t.TempDir(), "quay.digest"), NewModel(d, &schema, 0), x)
		r, err := Open(name)
		if err != nil {
			t.Fatal(err)
		}
		defer r.Close()
		return name, &r.Meta, x
	}
	t.Fatalf("no shape %q", shape)
	return
}

// Every byte of a digest, changed in one bit and in all; every length it can be cut
// to; what is put behind it.
func TestDamageIsSeen(t *testing.T) {
	name, _, _ := small(t, "precision")
	whole, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	f, err := os.OpenFile(name, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	opens := func() error {
		r, err := Open(name)
		if err == nil {
			r.Close()
		}
		return err
	}
	put := func(b []byte, at int) {
		t.Helper()
		if _, err := f.WriteAt(b, int64(at)); err != nil {
			t.Fatal(err)
		}
	}
	step := 1
	if testing.Short() {
		step = 7
	}
	tried := 0
	for i := 0; i < len(whole); i += step {
		for _, mask := range []byte{1 << (i % 8), 0xff} {
			put([]byte{whole[i] ^ mask}, i)
			if err := opens(); !errors.Is(err, stream.ErrDamaged) {
				t.Errorf("byte %d changed by %#x: %v", i, mask, err)
			}
			if !Is(name) {
				t.Errorf("byte %d changed by %#x: not taken as a digest any more", i, mask)
			}
			tried++
		}
		put(whole[i:i+1], i)
	}
	if err := opens(); err != nil {
		t.Fatalf("the whole file: %v", err)
	}
	for _, more := range [][]byte{{0}, []byte("PAR1"), whole, bytes.Repeat([]byte{0}, 4096)} {
		put(more, len(whole))
		if err := opens(); !errors.Is(err, stream.ErrDamaged) {
			t.Errorf("with %d bytes behind: %v", len(more), err)
		}
		if err := f.Truncate(int64(len(whole))); err != nil {
			t.Fatal(err)
		}
		tried++
	}
	for n := len(whole) - 1; n >= 0; n -= step {
		if err := f.Truncate(int64(n)); err != nil {
			t.Fatal(err)
		}
		if err := opens(); !errors.Is(err, stream.ErrDamaged) {
			t.Errorf("cut to %d bytes: %v", n, err)
		}
		tried++
	}
	if want := 3 * len(whole) / step; tried < want {
		t.Errorf("%d damages tried, want %d", tried, want)
	}
	t.Logf("%d damages of %d bytes", tried, len(whole))
}

// sign puts the right checksum into the bytes of a digest.
func sign(b []byte) []byte {
	at, ok := findHash(b)
	if !ok {
		return b
	}
	b = bytes.Clone(b)
	copy(b[at:], strings.Repeat("0", 2*sha256.Size))
	h := sha256.Sum256(b)
	copy(b[at:], hex.EncodeToString(h[:]))
	return b
}

// use does with a digest all that a program would. It may fail, not panic.
func use(names ...string) error {
	var rs []*Reader
	defer func() {
		for _, r := range rs {
			r.Close()
		}
	}()
	for _, n := range names {
		r, err := Open(n)
		if err != nil {
			return err
		}
		rs = append(rs, r)
	}
	p, err := NewPool(rs)
	if err != nil {
		return err
	}
	p.Complete()
	d, err := p.Meta.Model.Design()
	if err != nil {
		return err
	}
	if p.Meta.Header == nil {
		for {
			if r, err := p.Next(); r == nil || err != nil {
				return err
			}
		}
	}
	needs := accum.Needs{Keep: true, Retain: true, Fourth: p.Meta.Header.Fourth, Clusters: p.Meta.Header.Clusters}
	s, err := accum.Load(context.Background(), d, p.Meta.Header, p.Next, needs, accum.Options{Workers: 1, Memory: 64 << 20})
	if err != nil {
		return err
	}
	s.Close()
	return nil
}

// Damage under a right checksum: a file that somebody made so. Errors are welcome,
// panics are not; nor is memory without end.
func TestForgedBytes(t *testing.T) {
	for _, shape := range []string{"precision", "products", "clusters", "swept"} {
		name, _, _ := small(t, shape)
		whole, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		rng := rand.New(rand.NewPCG(5, 6))
		n := 200
		if os.Getenv("TALLROW_FAULTS") != "" {
			n = 5000
		}
		to := filepath.Join(t.TempDir(), "forged.digest")
		failed := 0
		for range n {
			b := bytes.Clone(whole)
			for range 1 + rng.IntN(3) {
				b[rng.IntN(len(b))] ^= byte(1 << rng.IntN(8))
			}
			if err := os.WriteFile(to, sign(b), 0o600); err != nil {
				t.Fatal(err)
			}
			if use(to) != nil {
				failed++
			}
		}
		if failed < n/2 {
			t.Errorf("%s: %d of %d forged files refused: is the checksum right?", shape, failed, n)
		}
	}
}

// again writes the records of a table under another description.
func again(t testing.TB, name string, x *accumtest.Table, text string) {
	t.Helper()
	w, err := Create(name)
	if err != nil {
		t.Fatal(err)
	}
	defer w.Abort()
	for _, r := range x.Records {
		if err := w.Write(r); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.finish(text); err != nil {
		t.Fatal(err)
	}
}

// hostile gives every value in a JSON document every value of a list, one at a time.
func hostile(doc any, f func()) {
	values := []any{nil, -1, 0, 1, 1e18, 9.3e18, "", "x", true, []any{}, []any{1e9, nil}, map[string]any{}}
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
				delete(v, k)
				f()
				v[k] = x
			}
		case []any:
			for i, x := range v {
				if i < 2 {
					walk(x, func(y any) { v[i] = y })
				}
			}
		}
	}
	m := doc.(map[string]any)
	for _, k := range slices.Sorted(maps.Keys(m)) {
		walk(m[k], func(y any) { m[k] = y })
	}
}

// Descriptions that do not fit the sums, under a right checksum; all of them with
// TALLROW_FAULTS=1.
func TestForgedDescription(t *testing.T) {
	dir := t.TempDir()
	other, _, _ := small(t, "clusters")
	for _, shape := range []string{"clusters", "crossed clusters", "products", "swept"} {
		_, m, x := small(t, shape)
		text, err := json.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		var doc any
		if err := json.Unmarshal(text, &doc); err != nil {
			t.Fatal(err)
		}
		to := filepath.Join(dir, "forged.digest")
		n, tried, failed := 0, 0, 0
		every := 17 // each takes a sync of the disk
		if os.Getenv("TALLROW_FAULTS") != "" {
			every = 1
		}
		hostile(doc, func() {
			if n++; n%every != 0 {
				return
			}
			tried++
			text, err := json.Marshal(doc)
			if err != nil {
				t.Fatal(err)
			}
			again(t, to, x, string(text))
			if use(to) != nil {
				failed++
			}
			if tried%5 == 0 {
				use(to, other)
				use(other, to)
			}
		})
		t.Logf("%s: %d descriptions, %d refused", shape, tried, failed)
		if n < 500 || failed < tried/2 {
			t.Errorf("%s: %d of %d descriptions tried, %d refused", shape, tried, n, failed)
		}
	}
}

// A newer format is refused by its name.
func TestNewerFormat(t *testing.T) {
	_, m, x := small(t, "numbers")
	name := filepath.Join(t.TempDir(), "new.digest")
	for _, format := range []string{"tallrow-digest/2", "tallrow-digest/10", "", "other/1"} {
		m.Format = format
		text, err := json.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		again(t, name, x, string(text))
		var v *VersionError
		if err := use(name); !errors.As(err, &v) || v.Found != format || !strings.Contains(err.Error(), "\""+format+"\"") {
			t.Errorf("format %q: %v", format, err)
		}
	}
}

// entries lists a folder.
func entries(t *testing.T, dir string) (out []string) {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range list {
		out = append(out, e.Name())
	}
	return out
}

// What is not closed leaves nothing; what is closed is for the owner only.
func TestWriterLeavesNothingHalf(t *testing.T) {
	_, m, x := small(t, "numbers")
	dir := t.TempDir()
	name := filepath.Join(dir, "quay.digest")
	w, err := Create(name)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range x.Records {
		if err := w.Write(r); err != nil {
			t.Fatal(err)
		}
	}
	if got := entries(t, dir); len(got) != 1 || !strings.HasPrefix(got[0], ".quay.digest.") {
		t.Errorf("while writing: %q, want one hidden file", got)
	}
	w.Abort()
	w.Abort()
	if got := entries(t, dir); len(got) != 0 {
		t.Errorf("given up: %q, want nothing", got)
	}

	keep(t, name, m.Model, x)
	st, err := os.Stat(name)
	if err != nil {
		t.Fatal(err)
	}
	if st.Mode().Perm() != 0o600 {
		t.Errorf("mode %v, want 0600", st.Mode())
	}
	// Where the name cannot be taken nothing is left.
	taken := filepath.Join(dir, "taken")
	if err := os.MkdirAll(filepath.Join(taken, "x"), 0o755); err != nil {
		t.Fatal(err)
	}
	if w, err = Create(taken); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(m); err == nil {
		t.Error("a folder gave its name to a digest")
	}
	if got := entries(t, dir); len(got) != 2 {
		t.Errorf("after a failure: %q", got)
	}
	if _, err := Create(filepath.Join(dir, "none", "x")); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("a folder that is not there: %v", err)
	}
}
