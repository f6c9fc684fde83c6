package delimited

import (
	"bytes"
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// FuzzCSV compares rows and cells with encoding/csv, over segment sizes and for
// a file and a pipe. Known differences, evened out here: a carriage return
// before a newline inside quotes is kept by us; a byte order mark is data to
// encoding/csv; texts with NUL bytes, in UTF-16 or without rows we refuse;
// without quotes the empty cell is missing to us. encoding/csv splits the row
// that a bare quote makes malformed otherwise than we do, so what follows the
// first malformed row is not compared.
func FuzzCSV(f *testing.F) {
	for _, s := range []string{
		"a,b\n1,2\n", "a;b;c\r\n1;\"x;y\";\"\"\r\n", "a\tb\n\n\n\"p\nq\"\t\"\"\"\"", "x\n\"", "a,b\n\"x\"y,1\n", "a,b\n1,2\"\n3,4\n",
		"\ufeffa,b\n1,2", "a,b\n1\n", "a\r\n\r\nb\r", "\"a\r\n\",b\n\"\r\",\r\n", "a,b\n1,\"2\"\r", "\"\"\n\"\"\"\"\n",
		",\n,\n\",\",\"\n,\n\"\n",
	} {
		f.Add([]byte(s), uint8(3))
	}
	f.Fuzz(func(t *testing.T, text []byte, size uint8) {
		if len(text) > 1<<10 || bytes.HasPrefix(text, []byte{0xff, 0xfe}) || bytes.HasPrefix(text, []byte{0xfe, 0xff}) || bytes.IndexByte(text, 0) >= 0 {
			return
		}
		data := bytes.TrimPrefix(text, mark)
		for _, in := range []stream.Input{
			{Name: "f", File: memory{bytes.NewReader(text)}, Size: int64(len(text))},
			{Name: "p", Pipe: io.NopCloser(bytes.NewReader(text))},
		} {
			o := stream.Options{NoHeader: true, SegmentBytes: 1 + int(size)}
			opened, err := Format{}.Open(context.Background(), in, o)
			delim := ','
			if err == nil {
				delim = rune(opened.(*source).head.delim)
			} else {
				tok := &tokens{text: append(bytes.Clone(data), '\n'), delim: ','}
				if i := skipBlank(tok, 0); i < len(data) {
					delim = rune(sniff(tok.text, i, false))
				}
			}
			r := csv.NewReader(bytes.NewReader(data))
			r.Comma = delim
			var want []string
			var werr error
			for {
				row, e := r.Read()
				if e == io.EOF {
					break
				}
				if e != nil {
					werr = e
					break
				}
				for i, c := range row {
					row[i] = fmt.Sprintf("%q", newlines(c))
				}
				want = append(want, strings.Join(row, "|"))
			}
			if err != nil {
				if werr == nil && len(want) > 0 || werr != nil && len(want) > 1 {
					t.Fatalf("Open(%q): %v; encoding/csv has %d rows, %v", text, err, len(want), werr)
				}
				continue
			}
			src := opened.(*source)
			asText(src)
			got, _, err := readAll(t, src, allUses(src), false)
			src.Close()
			for i := range got {
				cells := strings.Split(got[i], "|-")
				got[i] = strings.Join(cells, `|""`)
				for strings.Contains(got[i], `\r\n`) {
					got[i] = strings.ReplaceAll(got[i], `\r\n`, `\n`)
				}
				if strings.HasPrefix(got[i], "-") {
					got[i] = `""` + got[i][1:]
				}
			}
			if (err == nil) != (werr == nil) {
				t.Fatalf("%q: error %v, encoding/csv %v", text, err, werr)
			}
			if strings.Contains(string(text), "|-") {
				continue
			}
			equalRows(t, fmt.Sprintf("%q", text), got, want)
		}
	})
}

// newlines takes away carriage returns before newlines.
func newlines(s string) string {
	for strings.Contains(s, "\r\n") {
		s = strings.ReplaceAll(s, "\r\n", "\n")
	}
	return s
}

type memory struct{ *bytes.Reader }

func (memory) Close() error { return nil }

// FuzzOptions reads anything with inferred kinds: no panic, the same outcome in
// one segment and in many, by one way and another.
func FuzzOptions(f *testing.F) {
	f.Add([]byte("a,b\n1,2024-01-01\n,NA\n"), uint8(1), uint8(0))
	f.Add([]byte("a;b\n1,5;true\nx;y\n"), uint8(9), uint8(3))
	f.Add([]byte("\x1f\x8b\x08\x00\x00\x00\x00\x00\x00\x03"), uint8(9), uint8(3))
	f.Add([]byte("\x28\xb5\x2f\xfd\x04\x00"), uint8(9), uint8(2))
	f.Fuzz(func(t *testing.T, text []byte, size, bits uint8) {
		if len(text) > 1<<10 {
			return
		}
		var first string
		for k, length := range []int{1 << 20, 1 + int(size)} {
			for _, in := range []stream.Input{
				{Name: "f", File: memory{bytes.NewReader(text)}, Size: int64(len(text))},
				{Name: "f", Pipe: io.NopCloser(bytes.NewReader(text))},
			} {
				o := stream.Options{SkipBad: bits&1 != 0, DecimalComma: bits&2 != 0, NoHeader: bits&4 != 0, SegmentBytes: length}
				src, err := Format{}.Open(context.Background(), in, o)
				s := ""
				if err == nil {
					var rows []string
					var tally stream.SegmentTally
					rows, tally, err = readAll(t, src, allUses(src), false)
					s = fmt.Sprintf("%v %v %d", src.Schema().Columns, rows, tally.Malformed)
					if src.Info().Sampled {
						if seg, e := src.Sample(context.Background(), allUses(src), float64(size)/255); e == nil {
							if _, e := readSegment(t, seg, true); e != nil {
								t.Fatal(e)
							}
							seg.Close()
						}
					}
					src.Close()
				}
				s = fmt.Sprintf("%s %v", s, err)
				if first == "" {
					first = s
				}
				if s != first {
					t.Fatalf("%q, way %d: %s\nfirst %s", text, k, s, first)
				}
			}
		}
	})
}
