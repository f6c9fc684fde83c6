package delimited

import (
	"bytes"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// TestNoAllocationPerBatch reads the middle of a segment, where no text is new.
func TestNoAllocationPerBatch(t *testing.T) {
	row := "12.25,7,true,2024-02-29 10:00,\"quay \"\"a\"\"\",NA,0.12345678901234567,1e5\n"
	text := []byte("minutes,pallets,wet,t,quay,crew,tonnes,night\n")
	text = append(text, bytes.Repeat([]byte(row), 60*stream.BatchRows)...)
	in := stream.Input{Name: "q.csv", File: memory{bytes.NewReader(text)}, Size: int64(len(text))}
	src, err := Format{}.Open(t.Context(), in, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	sc, err := src.Scan(t.Context(), allUses(src))
	if err != nil {
		t.Fatal(err)
	}
	seg, err := sc.Next(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var b stream.Batch
	n := testing.AllocsPerRun(40, func() {
		if err := seg.Read(&b); err != nil || b.Rows != stream.BatchRows {
			t.Fatal(b.Rows, err)
		}
	})
	if n > 0 {
		t.Errorf("%v allocations for a batch", n)
	}
}
