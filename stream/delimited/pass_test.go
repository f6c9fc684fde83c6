package delimited

import (
	"errors"
	"fmt"
	"io"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// watched notes the lowest offset that is read.
type watched struct {
	stream.ReaderAtCloser
	lowest atomic.Int64
}

func (w *watched) ReadAt(b []byte, at int64) (int, error) {
	for low := w.lowest.Load(); at < low && !w.lowest.CompareAndSwap(low, at); low = w.lowest.Load() {
	}
	return w.ReaderAtCloser.ReadAt(b, at)
}

// Segments that were read in an earlier scan are not read again, and the others hold
// what they held: quotes run over borders here, and places are counted in lines.
func TestPassOver(t *testing.T) {
	var b strings.Builder
	b.WriteString("pallets,remarks\n")
	for i := range 400 {
		fmt.Fprintf(&b, "%d,\"%s\"\n", i, strings.Repeat("wet, \"\"or\"\" not\n", i%5))
	}
	const size = 500
	in := fileInput(t, "quay.csv", []byte(b.String()))
	file := &watched{ReaderAtCloser: in.File}
	in.File = file
	src, err := Format{}.Open(t.Context(), in, stream.Options{SegmentBytes: size}.WithDefaults())
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	type held struct {
		rows  string
		tally stream.SegmentTally
	}
	// scan reads the segments that are not passed over.
	scan := func(known []held, pass func(k int) bool) (out []held) {
		sc, err := src.Scan(t.Context(), []stream.Use{{Column: 0}, {Column: 1}})
		if err != nil {
			t.Fatal(err)
		}
		defer sc.Close()
		for k := 0; ; k++ {
			seg, err := sc.Next(t.Context())
			if errors.Is(err, io.EOF) {
				return out
			}
			if err != nil {
				t.Fatal(err)
			}
			var h held
			if pass(k) {
				if err := stream.PassOver(seg, known[k].tally); err != nil {
					t.Fatal(err)
				}
				out = append(out, h)
				continue
			}
			var batch stream.Batch
			for err = seg.Read(&batch); err == nil; err = seg.Read(&batch) {
				for r := range batch.Rows {
					v := &batch.Cols[1]
					text := ""
					if c := v.Code[r]; c >= 0 {
						text = v.Dict.Values[c]
					}
					h.rows += fmt.Sprintf("%s: %s\n", seg.Locate(batch.Marks[r]), text)
				}
			}
			if !errors.Is(err, io.EOF) {
				t.Fatal(err)
			}
			h.tally = seg.Tally()
			if err := seg.Close(); err != nil {
				t.Fatal(err)
			}
			out = append(out, h)
		}
	}
	whole := scan(nil, func(int) bool { return false })
	inside := 0
	for _, h := range whole {
		if h.tally.Quotes&stream.QuotesInside != 0 {
			inside++
		}
	}
	if len(whole) < 20 || inside < 3 {
		t.Fatalf("%d segments, %d of them begin inside quotes: too few for this test", len(whole), inside)
	}
	for cut := range len(whole) {
		for name, pass := range map[string]func(int) bool{
			"all before": func(k int) bool { return k < cut },
			"with holes": func(k int) bool { return k <= cut && k != cut-1 && k != cut-4 },
		} {
			file.lowest.Store(1 << 40)
			for k, h := range scan(whole, pass) {
				if !pass(k) && h.rows != whole[k].rows {
					t.Fatalf("%s %d: segment %d holds\n%s\nwant\n%s", name, cut, k, h.rows, whole[k].rows)
				}
			}
			if low := src.(*source).head.start + int64(cut)*size - 1; name == "all before" && cut > 0 && file.lowest.Load() < low {
				t.Fatalf("all before %d: read from %d, want nothing before %d", cut, file.lowest.Load(), low)
			}
		}
	}
}
