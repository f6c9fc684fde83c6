package delimited

import (
	"context"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"slices"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// countingFile counts the bytes that are read.
type countingFile struct {
	*strings.Reader
	n atomic.Int64
}

func (f *countingFile) ReadAt(b []byte, at int64) (int, error) {
	n, err := f.Reader.ReadAt(b, at)
	f.n.Add(int64(n))
	return n, err
}

func (f *countingFile) Close() error { return nil }

func openCounted(t testing.TB, text string, o stream.Options) (stream.Source, *countingFile) {
	t.Helper()
	f := &countingFile{Reader: strings.NewReader(text)}
	src, err := Format{}.Open(context.Background(), stream.Input{Name: "quay.csv", File: f, Size: int64(len(text))}, o)
	if err != nil {
		t.Fatal(err)
	}
	return src, f
}

// piece is what a segment held.
type piece struct {
	rows  []string
	tally stream.SegmentTally
}

// readPieces reads the segments that a scan of src hands out.
func readPieces(t testing.TB, src stream.Source, into map[int]piece) error {
	t.Helper()
	sc, err := src.Scan(context.Background(), allUses(src))
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	for {
		seg, err := sc.Next(context.Background())
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return err
		}
		rows, err := readSegment(t, seg, true)
		if _, twice := into[seg.Number()]; twice {
			t.Fatalf("segment %d comes twice", seg.Number())
		}
		into[seg.Number()] = piece{rows, seg.Tally()}
		if err != nil {
			return err
		}
		seg.Close()
	}
}

// bareSource hides that a source is a Skipper: its quotes are counted.
type bareSource struct{ stream.Source }

// Parts of a text whose cells hold newlines, quotes and delimiters bring the rows of
// the whole wherever the guess is right, and the quotes tell where it is not.
func TestParts(t *testing.T) {
	segments, wrong := 0, 0
	for seed := range uint64(6) {
		r := rand.New(rand.NewPCG(seed, 91))
		text := quayText(r, 800, []byte{',', '\t', ';'}[seed%3], seed%2 == 1)
		for _, size := range []int{97, 512, 4096, 20_000} {
			src, _ := openCounted(t, text, stream.Options{SegmentBytes: size})
			want := map[int]piece{}
			if err := readPieces(t, src, want); err != nil {
				t.Fatal(err)
			}
			n := 2 + r.IntN(6)
			got := map[int]piece{}
			for i := range n {
				if err := readPieces(t, stream.Part(bareSource{src}, i, n), got); err != nil {
					t.Fatal(err)
				}
			}
			samePieces(t, fmt.Sprintf("seed %d, %d bytes, counted", seed, size), got, want)
			for i := range n {
				got := map[int]piece{}
				err := readPieces(t, stream.Part(src, i, n), got)
				for k, p := range got {
					segments++
					if p.tally.Quotes == want[k].tally.Quotes {
						if err == nil && !slices.Equal(p.rows, want[k].rows) {
							t.Fatalf("seed %d, %d bytes: segment %d has other rows", seed, size, k)
						}
						continue
					}
					wrong++
					if p.tally.Quotes != want[k].tally.Quotes^stream.QuotesInside {
						t.Fatalf("seed %d, %d bytes: segment %d has quotes %b, want %b but for where it begins", seed, size, k, p.tally.Quotes, want[k].tally.Quotes)
					}
				}
				if err != nil && !strings.Contains(err.Error(), "--quotes count") {
					t.Fatalf("seed %d, %d bytes: %v", seed, size, err)
				}
			}
		}
	}
	// In a hundred bytes there may be nothing but "\n,\n,": no guess is always right.
	if wrong*100 > segments {
		t.Errorf("%d of %d guesses are wrong", wrong, segments)
	}
	t.Logf("%d of %d guesses are wrong", wrong, segments)
}

func samePieces(t *testing.T, what string, got, want map[int]piece) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d segments, want %d", what, len(got), len(want))
	}
	for k, w := range want {
		if g := got[k]; g.tally.Quotes != w.tally.Quotes || !slices.Equal(g.rows, w.rows) {
			t.Fatalf("%s: segment %d differs: quotes %b, want %b", what, k, g.tally.Quotes, w.tally.Quotes)
		}
	}
}

// The quotes of segments by their definition: those in the text before.
func TestQuotes(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(1, 92)), 1000, ',', false)
	src, _ := openCounted(t, text, stream.Options{SegmentBytes: 300})
	pieces := map[int]piece{}
	if err := readPieces(t, src, pieces); err != nil {
		t.Fatal(err)
	}
	start := strings.IndexByte(text, '\n') + 1
	for k := range len(pieces) {
		lo := start + k*300
		hi := min(lo+300, len(text))
		want := stream.QuotesKnown
		if k == 0 {
			want |= stream.QuotesFirst
		}
		if strings.Count(text[:lo], `"`)%2 == 1 {
			want |= stream.QuotesInside
		}
		if strings.Count(text[lo:hi], `"`)%2 == 1 {
			want |= stream.QuotesOdd
		}
		if got := pieces[k].tally.Quotes; got != want {
			t.Errorf("segment %d: quotes %b, want %b", k, got, want)
		}
	}
	for _, way := range []string{"gzip", "pipe"} {
		pieces := map[int]piece{}
		if err := readPieces(t, openWay(t, way, text, stream.Options{SegmentBytes: 300}), pieces); err != nil || len(pieces) < 2 || pieces[1].tally.Quotes != 0 {
			t.Errorf("%s: %v, quotes of %d segments", way, err, len(pieces))
		}
	}
}

// A part reads little more than its share.
func TestPartReads(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 93))
	var quoted, empty strings.Builder
	quoted.WriteString("minutes,pallets,note\n")
	empty.WriteString("minutes,pallets,note\n")
	for i := range 80_000 {
		fmt.Fprintf(&quoted, "%d,%d,\"crane %d, wet\nsecond \"\"hook\"\"\"\n", i, r.IntN(60), r.IntN(9))
		fmt.Fprintf(&empty, "%d.5,%d,\"\"\n", i, r.IntN(60))
	}
	for name, text := range map[string]string{"numbers": string(logText(40_000)), "quoted": quoted.String(), "empty cells": empty.String()} {
		const n = 5
		o := stream.Options{SegmentBytes: 128 << 10}
		src, f := openCounted(t, text, o)
		want, got := map[int]piece{}, map[int]piece{}
		if err := readPieces(t, src, want); err != nil {
			t.Fatal(err)
		}
		for i := range n {
			f.n.Store(0)
			if err := readPieces(t, stream.Part(src, i, n), got); err != nil {
				t.Fatal(err)
			}
			share := float64(f.n.Load()) / float64(len(text))
			if share > 1.0/n+0.06 {
				t.Errorf("%s: part %d reads %.3f of the bytes, want %.3f or little more", name, i, share, 1.0/n)
			}
		}
		samePieces(t, name, got, want)
		// Counting reads up to the last segment of the part.
		o.CountQuotes = true
		src, f = openCounted(t, text, o)
		f.n.Store(0)
		got = map[int]piece{}
		if err := readPieces(t, stream.Part(src, n-1, n), got); err != nil {
			t.Fatal(err)
		}
		if share := float64(f.n.Load()) / float64(len(text)); share < 0.5 {
			t.Errorf("%s: counting has read %.3f of the bytes", name, share)
		}
		for k, p := range got {
			if !slices.Equal(p.rows, want[k].rows) {
				t.Errorf("%s: segment %d differs when quotes are counted", name, k)
			}
		}
	}
}

// The same over several files, each of which begins outside of quotes.
func TestPartsOfUnion(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 94))
	var texts []string
	for range 4 {
		texts = append(texts, quayText(r, 200+r.IntN(400), ',', false))
	}
	dir := t.TempDir()
	for i, text := range texts {
		if err := os.WriteFile(fmt.Sprintf("%s/quay-%d.csv", dir, i), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	open := func(o stream.Options) stream.Source {
		src, err := stream.Open(t.Context(), []string{dir}, nil, []stream.Format{Format{}}, o)
		if err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { src.Close() })
		return src
	}
	want := map[int]piece{}
	if err := readPieces(t, open(stream.Options{SegmentBytes: 2000}), want); err != nil {
		t.Fatal(err)
	}
	first := 0
	for k := range want {
		if want[k].tally.Quotes&stream.QuotesFirst != 0 {
			first++
		}
	}
	if first != len(texts) {
		t.Errorf("%d segments are the first of a file, want %d", first, len(texts))
	}
	for n := 2; n <= 7; n++ {
		got := map[int]piece{}
		src := open(stream.Options{SegmentBytes: 2000})
		for i := range n {
			if err := readPieces(t, stream.Part(src, i, n), got); err != nil {
				t.Fatal(err)
			}
		}
		samePieces(t, fmt.Sprintf("%d parts", n), got, want)
	}
}

// A table inside a cell, longer than a segment, looks like rows.
func TestTableInCell(t *testing.T) {
	text := "minutes,pallets,note\n" + strings.Repeat("90,4,dry\n", 300) + "91,5,\"copied:\n" + strings.Repeat("90,4,wet\n", 2000) + "\"\n" + strings.Repeat("90,4,dry\n", 300)
	const size, n = 4096, 3
	want := map[int]piece{}
	src, _ := openCounted(t, text, stream.Options{SegmentBytes: size})
	if err := readPieces(t, src, want); err != nil {
		t.Fatal(err)
	}
	wrong := 0
	for i := range n {
		got := map[int]piece{}
		if err := readPieces(t, stream.Part(src, i, n), got); err != nil && !strings.Contains(err.Error(), "--quotes count") {
			t.Fatal(err)
		}
		for k, p := range got {
			if p.tally.Quotes != want[k].tally.Quotes {
				wrong++
			}
		}
	}
	if wrong == 0 {
		t.Error("no guess is wrong: the test tests nothing")
	}
	src, _ = openCounted(t, text, stream.Options{SegmentBytes: size, CountQuotes: true})
	got := map[int]piece{}
	for i := range n {
		if err := readPieces(t, stream.Part(src, i, n), got); err != nil {
			t.Fatal(err)
		}
	}
	samePieces(t, "counted", got, want)
}

// A malformed row in a part is named as in the whole; one that only seems so,
// because the guess was wrong, is not named.
func TestPartErrors(t *testing.T) {
	good := strings.Repeat("90,4,\"dry\nwet\"\n", 400)
	text := "minutes,pallets,note\n" + good + "x,5,dry\n" + good
	o := stream.Options{SegmentBytes: 1024, Kinds: map[string]stream.Kind{"minutes": stream.Int64}}
	src, _ := openCounted(t, text, o)
	whole := readPieces(t, src, map[int]piece{})
	found := 0
	for i := range 4 {
		if err := readPieces(t, stream.Part(src, i, 4), map[int]piece{}); err != nil {
			found++
			if whole == nil || err.Error() != whole.Error() {
				t.Errorf("part %d: %v, want %v", i, err, whole)
			}
		}
	}
	if found != 1 {
		t.Errorf("%d parts have found the row", found)
	}

	o.SkipBad = true
	src, _ = openCounted(t, text, o)
	found = 0
	for i := range 4 {
		got := map[int]piece{}
		if err := readPieces(t, stream.Part(src, i, 4), got); err != nil {
			t.Fatal(err)
		}
		for _, p := range got {
			for _, e := range p.tally.Problems {
				found++
				if at := int64(strings.Index(text, "x,5")); e.Pos.Offset != at || e.Pos.Line != 0 || !strings.HasPrefix(e.Error(), fmt.Sprintf("quay.csv offset %d column minutes: found", at)) {
					t.Errorf("%+v, want the offset %d: %v", e.Pos, at, e)
				}
			}
		}
	}
	if found != 1 {
		t.Errorf("%d rows were passed over", found)
	}

	// Inside the cell its rows look sound, and the row after it does not.
	text = "minutes,pallets,note\n" + strings.Repeat("90,4,dry\n", 300) + "91,5,\"copied:\n" + strings.Repeat("90,4,wet\n", 2000) + "(end),(of),(table)\n\"\n"
	src, _ = openCounted(t, text, stream.Options{SegmentBytes: 20_000})
	if src.Info().Segments != 2 {
		t.Fatal(src.Info().Segments)
	}
	err := readPieces(t, stream.Part(src, 1, 2), map[int]piece{})
	if e := asRowError(t, err); !strings.Contains(e.Want, "--quotes count") || !strings.Contains(e.Found, "looks like rows") {
		t.Error(err)
	}
}
