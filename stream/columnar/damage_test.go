package columnar

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"flag"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/encoding/delta"
	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// smallFile is a file of a few kilobytes with nulls, two row groups, several
// pages and a dictionary.
func smallFile(t testing.TB, codec string) []byte {
	r := rand.New(rand.NewPCG(6, 1))
	return writeTable(t, quayColumns, quayTable(r, 30, nulls["half"]), 30, WriterOptions{Codec: codec, RowsPerGroup: 17, PageBytes: 60})
}

// encodedFile is a small file whose columns have the rarer encodings, with V2
// pages.
func encodedFile(t testing.TB) []byte {
	t.Helper()
	root := orderedGroup{Group: parquet.Group{}}
	var makers []typed
	for _, tc := range typedColumns() {
		switch tc.name {
		case "int32", "int64", "double", "bool", "string", "fixed":
			for i, enc := range encodingsOf(tc.node.Type().Kind()) {
				tc := tc
				tc.name = fmt.Sprint(tc.name, i)
				root.Group[tc.name] = parquet.Optional(parquet.Encoded(tc.node, enc))
				root.order = append(root.order, tc.name)
				makers = append(makers, tc)
			}
		}
	}
	var buf bytes.Buffer
	w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root), parquet.DataPageVersion(2), parquet.Compression(&parquet.Zstd))
	r := rand.New(rand.NewPCG(7, 1))
	for range 40 {
		var row parquet.Row
		for j, m := range makers {
			v, _ := m.make(r)
			if r.IntN(4) == 0 {
				row = append(row, parquet.NullValue().Level(0, 0, j))
			} else {
				row = append(row, v.Level(0, 1, j))
			}
		}
		if _, err := w.WriteRows([]parquet.Row{row}); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return buf.Bytes()
}

// tryRead opens and reads data whole; a panic ends the test run, which is the
// point.
func tryRead(data []byte) ([][]string, error) {
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		return nil, err
	}
	defer f.Close()
	rows, err := readAll(f, allUses(f))
	if err != nil {
		return rows, err
	}
	// A sample takes other ways through the pages.
	seg, err := f.Sample(context.Background(), allUses(f), 0.7)
	if err != nil {
		return rows, err
	}
	var b stream.Batch
	if err := seg.Read(&b); err != nil && err != io.EOF {
		return rows, err
	}
	return rows, seg.Close()
}

// watch calls f and fails if it takes longer than a case may.
func watch(t *testing.T, name string, f func()) {
	t.Helper()
	timer := time.AfterFunc(20*time.Second, func() { panic(name + " hangs") })
	start := time.Now()
	f()
	timer.Stop()
	if d := time.Since(start); d > 3*time.Second {
		t.Errorf("%s took %v", name, d)
	}
}

func footerStart(data []byte) int {
	return len(data) - 8 - int(binary.LittleEndian.Uint32(data[len(data)-8:]))
}

func checkDamageError(t *testing.T, name string, err error) {
	t.Helper()
	if !strings.HasPrefix(err.Error(), "quay.parquet") {
		t.Errorf("%s: the error does not name the file: %v", name, err)
	}
	var row *stream.RowError
	if !errors.Is(err, stream.ErrDamaged) && !errors.As(err, &row) && !strings.Contains(err.Error(), "not supported") {
		t.Errorf("%s: neither damage nor unsupported: %v", name, err)
	}
}

var allBits = flag.Bool("allbits", false, "TestFlippedBits flips every bit of every file (some minutes)")

// tinyFile has four columns of ten rows.
func tinyFile(t testing.TB) []byte {
	r := rand.New(rand.NewPCG(9, 1))
	cols := []WriteColumn{quayColumns[0], quayColumns[6], quayColumns[8], quayColumns[9]}
	all := quayTable(r, 10, nulls["half"])
	return writeTable(t, cols, []stream.Vector{all[0], all[6], all[8], all[9]}, 10, WriterOptions{RowsPerGroup: 6})
}

// Every bit of the pages and their headers in a tiny file, some of the others:
// an error or the right rows. Bits of the footer, which has no checksum: no
// panic, no hang.
func TestFlippedBits(t *testing.T) {
	for name, data := range map[string][]byte{"tiny": tinyFile(t), "snappy": smallFile(t, "snappy"), "none": smallFile(t, "none"), "encodings": encodedFile(t)} {
		t.Run(name, func(t *testing.T) {
			want, err := tryRead(data)
			if err != nil {
				t.Fatal(err)
			}
			end := footerStart(data)
			step, footerStep := 101, 101
			if name == "tiny" {
				step, footerStep = 1, 7
			}
			if testing.Short() {
				step, footerStep = 10*step, 10*footerStep
			}
			if *allBits {
				step, footerStep = 1, 1
			}
			damaged, same := 0, 0
			for i := 0; i < len(data); i++ {
				for bit := 0; bit < 8; bit++ {
					if k := 8*i + bit; i < end && k%step != 0 || i >= end && k%footerStep != 0 {
						continue
					}
					bad := bytes.Clone(data)
					bad[i] ^= 1 << bit
					at := fmt.Sprintf("byte %d of %d bit %d", i, end, bit)
					watch(t, at, func() {
						rows, err := tryRead(bad)
						switch {
						case err != nil:
							damaged++
							if i < end {
								checkDamageError(t, at, err)
							}
						case i < end && !slices.EqualFunc(rows, want, slices.Equal[[]string]):
							t.Errorf("%s: no error and other rows", at)
						default:
							same++
						}
					})
				}
			}
			t.Logf("%d bytes: %d flips are errors, %d do no harm", len(data), damaged, same)
		})
	}
}

// The same without checksums, where values may come out wrong, but nothing else
// may happen.
func TestFlippedBitsWithoutChecksums(t *testing.T) {
	verifyChecksums = false
	defer func() { verifyChecksums = true }()
	files := map[string][]byte{"encodings": encodedFile(t)}
	for codec := range codecs {
		files[codec] = smallFile(t, codec)
	}
	r := rand.New(rand.NewPCG(8, 1))
	n := 300
	if testing.Short() {
		n = 30
	}
	for name, data := range files {
		t.Run(name, func(t *testing.T) {
			end := footerStart(data)
			panics := 0
			for range n {
				bad := bytes.Clone(data)
				for range 1 + r.IntN(3) {
					bad[4+r.IntN(end-4)] ^= byte(1 + r.IntN(255))
				}
				watch(t, name, func() {
					_, err := tryRead(bad)
					if err != nil {
						checkDamageError(t, name, err)
						if strings.Contains(err.Error(), "its values cannot be decoded") {
							panics++
							t.Log(err)
						}
					}
				})
			}
			t.Logf("%d of %d came from a panic", panics, n)
		})
	}
}

func TestTruncated(t *testing.T) {
	data := smallFile(t, "zstd")
	for n := range len(data) {
		if _, err := openBytes(data[:n], stream.Options{}); !errors.Is(err, stream.ErrDamaged) {
			t.Fatalf("%d of %d bytes: %v", n, len(data), err)
		}
	}
}

// Bytes taken out of the middle leave both ends whole.
func TestBytesMissing(t *testing.T) {
	data := smallFile(t, "snappy")
	want, err := tryRead(data)
	if err != nil {
		t.Fatal(err)
	}
	for i := 4; i < footerStart(data); i += 3 {
		bad := slices.Concat(data[:i], data[i+1:])
		if rows, err := tryRead(bad); err == nil && !slices.EqualFunc(rows, want, slices.Equal[[]string]) {
			t.Fatalf("without byte %d: no error and other rows", i)
		}
	}
}

func TestNotParquet(t *testing.T) {
	for _, tc := range []struct{ data, want string }{
		{"", "quay.parquet: damaged: it has 0 bytes, too few for a Parquet file"},
		{"PAR1", "quay.parquet: damaged: it has 4 bytes, too few for a Parquet file"},
		{"minutes,pallets\n31.5,12\n", `quay.parquet: damaged: it begins with "minu", a Parquet file begins with "PAR1"`},
		{"PAR1" + strings.Repeat("x", 40), `quay.parquet: damaged: it ends with "xxxx", a Parquet file ends with "PAR1" (was it cut off?)`},
		{"PAR1" + strings.Repeat("x", 40) + "\xff\xff\xff\xffPAR1", "quay.parquet: damaged: a footer of 4294967295 bytes does not fit into a file of 52 bytes"},
		{"PAR1" + strings.Repeat("\x00", 40) + "\x20\x00\x00\x00PAR1", "quay.parquet: damaged: the footer cannot be read: missing required field"},
		{"PARE" + strings.Repeat("x", 40) + "\x20\x00\x00\x00PARE", "quay.parquet: the file is encrypted, which is not supported"},
	} {
		_, err := openBytes([]byte(tc.data), stream.Options{})
		if err == nil || !strings.HasPrefix(err.Error(), tc.want) {
			t.Errorf("%q: %v, want %s", tc.data, err, tc.want)
		}
	}
}

// One message, whole, of a page damaged in its data.
func TestDamageMessage(t *testing.T) {
	data := smallFile(t, "snappy")
	f, err := openBytes(data, stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	quay := f.schema.Lookup("quay")
	m := f.meta.RowGroups[1].Columns[f.cols[quay].leaf]
	data[m.DataPageOffset+m.TotalCompressedSize-(m.DataPageOffset-m.DictionaryPageOffset)-1] ^= 0x10
	_, err = tryRead(data)
	if err == nil || !strings.HasPrefix(err.Error(), "quay.parquet row group 2 column quay: damaged: the checksum of the page at byte ") {
		t.Errorf("got %v", err)
	}
	// The damage does not matter to who does not read the column.
	f, _ = openBytes(data, stream.Options{})
	if _, err := readAll(f, []stream.Use{{Column: 0}}); err != nil {
		t.Errorf("another column: %v", err)
	}
}

// Lengths that a damaged or hostile file may claim.
func TestChecks(t *testing.T) {
	uv := binary.AppendUvarint
	for _, tc := range []struct {
		name string
		err  error
		ok   bool
	}{
		{"runs", checkRuns(append(uv(nil, 10<<1), 1), 1, 10), true},
		{"packed run", checkRuns(append(uv(nil, 2<<1|1), 1, 1), 1, 10), true},
		{"too few", checkRuns(append(uv(nil, 9<<1), 1), 1, 10), false},
		{"endless run", checkRuns(append(uv(nil, 1<<31), 1), 1, 10), false},
		{"run beyond the end", checkRuns(uv(nil, 3<<1|1), 8, 10), false},
		{"no width, no run", checkRuns(nil, 0, 10), true},
		{"overlong number", checkRuns(bytes.Repeat([]byte{0xff}, 12), 1, 10), false},
	} {
		if (tc.err == nil) != tc.ok {
			t.Errorf("%s: %v", tc.name, tc.err)
		}
	}
	// 10,000 values that repeat a prefix of a million bytes.
	var e delta.BinaryPackedEncoding
	lengths := make([]int32, 10000)
	suffixes, err := e.EncodeInt32(nil, append([]int32{1e6}, lengths[1:]...))
	if err != nil {
		t.Fatal(err)
	}
	for i := range lengths[1:] {
		lengths[i+1] = 1e6
	}
	prefixes, err := e.EncodeInt32(nil, lengths)
	if err != nil {
		t.Fatal(err)
	}
	if err := checkLengths(append(prefixes, suffixes...), format.DeltaByteArray, len(lengths)); err == nil || !strings.Contains(err.Error(), "would unpack to 9") {
		t.Errorf("long prefixes: %v", err)
	}
	// A list and a string of 2^31 items in the footer.
	for _, b := range [][]byte{{0x19, 0xfc, 0xff, 0xff, 0xff, 0xff, 0x07}, {0x18, 0xff, 0xff, 0xff, 0xff, 0x07}, bytes.Repeat([]byte{0x1c}, 1000), bytes.Repeat([]byte{0x19}, 1000)} {
		w := wire{b: b}
		if err := w.skipStruct(0); err == nil {
			t.Errorf("% x is taken for a structure", b[:6])
		}
	}
}

// FuzzParquet: mutated files, checksums not looked at. -fuzzminimizetime 5x
// keeps it from spending its time on making inputs smaller.
func FuzzParquet(f *testing.F) {
	verifyChecksums = false
	f.Cleanup(func() { verifyChecksums = true })
	for _, codec := range []string{"snappy", "none", "lz4"} {
		f.Add(smallFile(f, codec))
	}
	f.Add(encodedFile(f))
	f.Fuzz(func(t *testing.T, data []byte) {
		if len(data) > 1<<20 {
			return
		}
		watch(t, "reading", func() {
			if _, err := tryRead(data); err != nil && !errors.Is(err, os.ErrNotExist) && !strings.HasPrefix(err.Error(), "quay.parquet") {
				t.Errorf("the error does not name the file: %v", err)
			}
		})
	})
}
