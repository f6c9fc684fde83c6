package delimited

import (
	"bytes"
	"io"
	"sync/atomic"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// countedReader counts what was read from it.
type countedReader struct {
	io.Reader
	n atomic.Int64
}

func (c *countedReader) Read(b []byte) (int, error) {
	n, err := c.Reader.Read(b)
	c.n.Add(int64(n))
	return n, err
}

func (c *countedReader) Close() error { return nil }

// While the only worker is busy with the first segment, three million bytes of
// text are read and decoded.
func TestReadsAhead(t *testing.T) {
	text := string(logText(60_000))
	if len(text) < 3_000_000 {
		t.Fatal(len(text))
	}
	for way, data := range map[string][]byte{"pipe": []byte(text), "gzip pipe": gz(t, text), "zstd pipe": zs(t, text)} {
		t.Run(way, func(t *testing.T) {
			pipe := &countedReader{Reader: &slowPipe{r: bytes.NewReader(data), step: 1 << 16}}
			src, err := Format{}.Open(t.Context(), stream.Input{Name: "p", Pipe: pipe}, stream.Options{SegmentBytes: 1 << 16})
			if err != nil {
				t.Fatal(err)
			}
			defer src.Close()
			sc, err := src.Scan(t.Context(), allUses(src))
			if err != nil {
				t.Fatal(err)
			}
			defer sc.Close()
			seg, err := sc.Next(t.Context())
			if err != nil {
				t.Fatal(err)
			}
			defer seg.Close()
			deadline(t, func() {
				for pipe.n.Load() < int64(len(data)) {
					time.Sleep(time.Millisecond)
				}
			})
		})
	}
}
