package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/delimited"
	"github.com/tallrow/tallrow/vcov"
)

// quayNotes is a table with notes of several lines, quotes and commas in them.
func quayNotes(r *rand.Rand, rows int) string {
	var b strings.Builder
	b.WriteString("minutes,pallets,quay,note\n")
	for range rows {
		pallets := r.IntN(60)
		note := []string{"", `""`, "dry", `"wet, cold"`, "\"two\nlines\"", `"say ""stop"""`, "\",\n,\"", `""""`}[r.IntN(8)]
		fmt.Fprintf(&b, "%.2f,%d,q%d,%s\n", 30+2*float64(pallets)+r.NormFloat64(), pallets, r.IntN(12), note)
	}
	return b.String()
}

// gathered makes a digest of part i of n and opens it.
func gathered(t *testing.T, data []string, o stream.Options, i, n int) (*digest.Reader, error) {
	t.Helper()
	ctx := context.Background()
	src, err := stream.Open(ctx, data, nil, []stream.Format{delimited.Format{}}, o)
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	d, err := stream.NewDesign(stream.Spec{Outcome: "minutes", Terms: []string{"pallets"}, Keys: []string{"quay"}}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	state, err := vcov.Gather(ctx, stream.Part(src, i, n), d, vcov.Options{Workers: 2, Errors: []vcov.Kind{{Name: "hc1", Cluster: -1}, {Name: "cr1", Cluster: 0}}}, nil)
	if err != nil {
		return nil, err
	}
	defer state.Close()
	name := filepath.Join(t.TempDir(), "quay.digest")
	w, err := digest.Create(name)
	if err != nil {
		t.Fatal(err)
	}
	m := &digest.Meta{Format: digest.Format, Model: digest.NewModel(d, src.Schema(), 0), Header: state.Header(),
		Runs: []*digest.Run{{ID: "run", Parts: n, Have: []int{i}}}}
	if err := state.Records(w.Write, nil); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(m); err != nil {
		t.Fatal(err)
	}
	r, err := digest.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { r.Close() })
	return r, nil
}

// pooled joins digests and writes down all that is in them but the run.
func pooled(t *testing.T, rs []*digest.Reader) (string, error) {
	t.Helper()
	p, err := digest.NewPool(rs)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Complete(); err != nil {
		t.Fatal(err)
	}
	var b strings.Builder
	for {
		r, err := p.Next()
		if err != nil {
			return "", err
		}
		if r == nil {
			break
		}
		fmt.Fprintf(&b, "%+v\n", *r)
	}
	h := *p.Meta.Header
	for i, c := range h.Sections {
		c := *c
		// Any cells that are not zero serve, and counts up to two.
		c.NonZero, c.Value, c.Lone = nil, nil, nil
		h.Sections[i] = &c
	}
	text, err := json.Marshal(h)
	if err != nil {
		t.Fatal(err)
	}
	return b.String() + string(text), nil
}

// The parts of text with quotes, each read without the others, give every bit of the
// whole, for one file and for several.
func TestTextPartsAreTheWhole(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	for _, files := range []int{1, 3} {
		dir := t.TempDir()
		for i := range files {
			if err := os.WriteFile(filepath.Join(dir, fmt.Sprintf("quay-%d.csv", i)), []byte(quayNotes(r, 700+r.IntN(500))), 0o600); err != nil {
				t.Fatal(err)
			}
		}
		for n := 2; n <= 7; n++ {
			o := stream.Options{SegmentBytes: 300 + r.IntN(3000)}
			one, err := gathered(t, []string{dir}, o, 0, 1)
			if err != nil {
				t.Fatal(err)
			}
			want, err := pooled(t, []*digest.Reader{one})
			if err != nil {
				t.Fatal(err)
			}
			if s := fmt.Sprintf("What:%s", accum.SegmentCheck); strings.Count(want, s) < 3 {
				t.Fatalf("fewer than 3 of %q", s)
			}
			for q := range 12 {
				if label := fmt.Sprintf("Key:%v Label:q%d ", []byte(fmt.Sprintf("q%d", q)), q); !strings.Contains(want, label) {
					t.Errorf("no %q", label)
				}
			}
			var rs []*digest.Reader
			for i := range n {
				part, err := gathered(t, []string{dir}, o, (i+1)%n, n)
				if err != nil {
					t.Fatal(err)
				}
				rs = append(rs, part)
			}
			if got, err := pooled(t, rs); err != nil {
				t.Fatal(err)
			} else if got != want {
				t.Errorf("%d files of %d bytes a segment in %d parts differ from the whole", files, o.SegmentBytes, n)
			}
		}
	}
}

// A cell that holds a table is read as rows by a part that sees nothing else: pooling
// refuses it, says what to make again, and that gives the bits of the whole.
func TestTextPartsGuessedWrong(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	dry := func(rows int) string {
		var b strings.Builder
		for range rows {
			fmt.Fprintf(&b, "%.2f,%d,q%d,dry\n", 90+r.NormFloat64(), r.IntN(60), r.IntN(12))
		}
		return b.String()
	}
	text := "minutes,pallets,quay,note\n" + dry(400) + "90,5,q1,\"copied:\n" + dry(900) + "\"\n" + dry(400)
	name := filepath.Join(t.TempDir(), "quay.csv")
	if err := os.WriteFile(name, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	const n = 3
	o := stream.Options{SegmentBytes: 4096}
	one, err := gathered(t, []string{name}, o, 0, 1)
	if err != nil {
		t.Fatal(err)
	}
	want, err := pooled(t, []*digest.Reader{one})
	if err != nil {
		t.Fatal(err)
	}
	counted := o
	counted.CountQuotes = true
	guessed := func(i int, o stream.Options) *digest.Reader {
		part, err := gathered(t, []string{name}, o, i, n)
		if err != nil {
			t.Fatal(err)
		}
		return part
	}
	for mask := range 1 << n { // of parts that count
		var rs []*digest.Reader
		var again []string
		for i := range n {
			if mask>>i&1 == 1 {
				rs = append(rs, guessed(i, counted))
			} else {
				rs = append(rs, guessed(i, o))
				again = append(again, fmt.Sprint(i))
			}
		}
		got, err := pooled(t, rs)
		if mask == 1<<n-1 {
			if err != nil || got != want {
				t.Errorf("counted parts differ from the whole: %v", err)
			}
			continue
		}
		// The cell covers segments of every part.
		list := strings.Join(again, ", ")
		var e *digest.PoolError
		for _, part := range []string{"was read as beginning outside quotes and begins inside", "make part(s) " + list + " of 3 again with --quotes count"} {
			if !errors.As(err, &e) || !strings.Contains(e.Msg, part) {
				t.Errorf("parts %s have guessed: %v, want %q", list, err, part)
			}
		}
	}
}

// Whatever stands in the cells, parts give the whole or say that they do not.
func TestTextPartsAreNeverWrongInSilence(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 12))
	same, refused := 0, 0
	for range 20 {
		var b strings.Builder
		b.WriteString("minutes,pallets,quay,note\n")
		row := func(note string) {
			fmt.Fprintf(&b, "%.1f,%d,q%d,%s\n", 90+r.NormFloat64(), r.IntN(60), r.IntN(5), note)
		}
		for range 40 + r.IntN(40) {
			switch r.IntN(12) {
			case 0: // a table
				b.WriteString("90,1,q1,\"")
				quote := []string{"wet", `""wet""`}[r.IntN(2)]
				for range r.IntN(150) {
					row([]string{"dry", "", quote}[r.IntN(3)])
				}
				b.WriteString("\"\n")
			case 1: // delimiters and ends of rows
				row(`"` + strings.Repeat([]string{",", "\n", ",\n", `"",""`, "\n\"\"\n"}[r.IntN(5)], r.IntN(200)) + `"`)
			default:
				row([]string{"", `""`, `"wet, cold"`, "dry"}[r.IntN(4)])
			}
		}
		name := filepath.Join(t.TempDir(), "quay.csv")
		if err := os.WriteFile(name, []byte(b.String()), 0o600); err != nil {
			t.Fatal(err)
		}
		o := stream.Options{SegmentBytes: 200 + r.IntN(1500)}
		one, err := gathered(t, []string{name}, o, 0, 1)
		if err != nil {
			t.Fatal(err)
		}
		want, err := pooled(t, []*digest.Reader{one})
		if err != nil {
			t.Fatal(err)
		}
		n := 2 + r.IntN(4)
		var rs []*digest.Reader
		for i := range n {
			var part *digest.Reader
			if part, err = gathered(t, []string{name}, o, i, n); err != nil {
				break
			}
			rs = append(rs, part)
		}
		got := ""
		if err == nil {
			got, err = pooled(t, rs)
		}
		switch {
		case err != nil && strings.Contains(err.Error(), "--quotes count"):
			refused++
		case err != nil:
			t.Fatal(err)
		case got != want:
			t.Fatalf("other sums and no error for\n%s", b.String())
		default:
			same++
		}
	}
	if same < 5 || refused < 5 {
		t.Errorf("%d the same, %d refused: want some of both", same, refused)
	}
}

// The same from the command line: a refused pool leaves nothing.
func TestTextPartsCommand(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 10))
	row := func(b *strings.Builder) {
		fmt.Fprintf(b, "%.6f,%d,q%d,%s\n", 90+r.NormFloat64(), r.IntN(60), r.IntN(12), strings.Repeat("dry ", 50))
	}
	var b strings.Builder
	b.WriteString("minutes,pallets,quay,note\n")
	for b.Len() < 5<<20 {
		row(&b)
	}
	b.WriteString("90,5,q1,\"copied:\n")
	for b.Len() < 14<<20 {
		row(&b)
	}
	b.WriteString("\"\n")
	for b.Len() < 17<<20 {
		row(&b)
	}
	dir := t.TempDir()
	in := func(name string) string { return filepath.Join(dir, name) }
	if err := os.WriteFile(in("quay.csv"), []byte(b.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	part := func(i int, more ...string) []string {
		return append([]string{"digest", "--outcome", "minutes", "--terms", "pallets", "--quiet", in("quay.csv"), "--part", fmt.Sprintf("%d/3", i), "-o", in(fmt.Sprintf("%d.digest", i))}, more...)
	}
	pool := []string{"pool", in("0.digest"), in("1.digest"), in("2.digest"), "-o", in("whole.digest")}
	for i := range 3 {
		must(t, part(i)...)
	}
	// Segment 2 lies within the cell; segment 3 has its end.
	fails(t, exitFailed, "segment 2 was read as beginning outside quotes and begins inside: make part(s) 2 of 3 again with --quotes count", pool...)
	fails(t, exitFailed, "make part(s) 2 of 3 again", "fit", in("0.digest"), in("1.digest"), in("2.digest"))
	if left, _ := filepath.Glob(in("*whole*")); left != nil {
		t.Errorf("left %q", left)
	}
	must(t, part(2, "--quotes", "count")...)
	must(t, pool...)
	must(t, "fit", in("whole.digest"), "--json", "-o", in("pooled.json"))
	must(t, "fit", "--outcome", "minutes", "--terms", "pallets", "--quiet", in("quay.csv"), "--passes", "1", "--json", "-o", in("whole.json"))
	got, want := result(t, in("pooled.json")), result(t, in("whole.json"))
	if got.Rows.Used != want.Rows.Used || fmt.Sprint(got.Estimates, got.Errors[0].SE) != fmt.Sprint(want.Estimates, want.Errors[0].SE) {
		t.Errorf("%d rows, %v; want %d, %v", got.Rows.Used, got.Estimates, want.Rows.Used, want.Estimates)
	}

	// A second round guesses the same and is held to the first.
	must(t, "fit", in("whole.digest"), "--errors", "classical", "--json", "-o", in("first.json"))
	second := func(i int, more ...string) []string {
		return append(part(i, more...), "--errors", "hc3", "--at", in("first.json"))
	}
	for i := range 2 {
		must(t, second(i)...)
	}
	fails(t, exitFailed, "segment 2 begins inside quotes in one round and outside in the other; read this part with --quotes count", second(2)...)
	must(t, second(2, "--quotes", "count")...)
	must(t, "fit", in("whole.digest"), in("0.digest"), in("1.digest"), in("2.digest"), "--errors", "hc3", "--json", "-o", in("pooled.json"))
	must(t, "fit", "--outcome", "minutes", "--terms", "pallets", "--quiet", in("quay.csv"), "--errors", "hc3", "--passes", "2", "--json", "-o", in("whole.json"))
	if got, want := result(t, in("pooled.json")), result(t, in("whole.json")); fmt.Sprint(got.Errors[0].SE) != fmt.Sprint(want.Errors[0].SE) {
		t.Errorf("hc3 %v, want %v", got.Errors[0].SE, want.Errors[0].SE)
	}
}
