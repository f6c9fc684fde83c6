package delimited

import (
	"bytes"
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math/rand/v2"
	"strconv"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

func benchText(rows int) []byte {
	r := rand.New(rand.NewPCG(1, 1))
	var b bytes.Buffer
	b.WriteString("minutes,pallets,tonnes,crew,wet,night,barge,quay,crane\n")
	for range rows {
		fmt.Fprintf(&b, "%.2f,%d,%.3f,%d,%d,%d,%d,%d,%d\n", 90+30*r.NormFloat64(), r.IntN(60), r.Float64()*1000, 3+r.IntN(5), r.IntN(2), r.IntN(2), r.IntN(4), r.IntN(60), r.IntN(2000))
	}
	return b.Bytes()
}

func BenchmarkRead(b *testing.B) {
	text := benchText(200_000)
	for _, c := range []struct {
		name  string
		uses  []int
		kinds map[string]stream.Kind
	}{
		{"cols=9", []int{0, 1, 2, 3, 4, 5, 6, 7, 8}, nil},
		{"cols=2", []int{0, 2}, nil},
		{"cols=0", nil, nil},
		{"cols=9/text=3", []int{0, 1, 2, 3, 4, 5, 6, 7, 8}, map[string]stream.Kind{"barge": stream.Text, "quay": stream.Text, "crane": stream.Text}},
	} {
		b.Run(c.name, func(b *testing.B) {
			src, err := Format{}.Open(context.Background(), stream.Input{Name: "m", File: memory{bytes.NewReader(text)}, Size: int64(len(text))}, stream.Options{Kinds: c.kinds})
			if err != nil {
				b.Fatal(err)
			}
			var uses []stream.Use
			for _, u := range c.uses {
				uses = append(uses, stream.Use{Column: u, AsNumber: src.Schema().Columns[u].Kind.Numeric()})
			}
			b.SetBytes(int64(len(text)))
			b.ReportAllocs()
			for b.Loop() {
				sc, err := src.Scan(context.Background(), uses)
				if err != nil {
					b.Fatal(err)
				}
				var batch stream.Batch
				rows := 0
				for {
					seg, err := sc.Next(context.Background())
					if err != nil {
						break
					}
					for seg.Read(&batch) == nil {
						rows += batch.Rows
					}
					seg.Close()
				}
				if rows != 200_000 {
					b.Fatal(rows)
				}
			}
		})
	}
}

// BenchmarkReference is what the standard library does for the same work.
func BenchmarkReference(b *testing.B) {
	text := benchText(20_000)
	b.SetBytes(int64(len(text)))
	for b.Loop() {
		r := csv.NewReader(bytes.NewReader(text))
		r.ReuseRecord = true
		if _, err := r.Read(); err != nil {
			b.Fatal(err)
		}
		sum := 0.0
		for {
			row, err := r.Read()
			if err == io.EOF {
				break
			}
			for _, c := range row {
				v, err := strconv.ParseFloat(c, 64)
				if err != nil {
					b.Fatal(err)
				}
				sum += v
			}
		}
	}
}
