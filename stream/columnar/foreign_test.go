package columnar

import (
	"encoding/hex"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/parquet-go/parquet-go"
	"github.com/tallrow/tallrow/stream"
)

// foreignCell writes a value of the generic interface as a column's cell; ok is
// false for types that have tests of their own.
func foreignCell(c *column, v parquet.Value) (s string, ok bool) {
	float := func(f float64) (string, bool) {
		if math.IsNaN(f) {
			return "-", true
		}
		return strconv.FormatFloat(f, 'g', -1, 64), true
	}
	switch {
	case v.IsNull():
		return "-", true
	case c.conv == convBool && v.Boolean():
		return "1", true
	case c.conv == convBool:
		return "0", true
	case c.conv == convI32:
		return strconv.FormatInt(int64(v.Int32()), 10), true
	case c.conv == convU32:
		return strconv.FormatUint(uint64(v.Uint32()), 10), true
	case c.conv == convI64:
		return strconv.FormatInt(v.Int64(), 10), true
	case c.conv == convU64:
		return strconv.FormatUint(v.Uint64(), 10), true
	case c.conv == convF32:
		return float(float64(v.Float()))
	case c.conv == convF64:
		return float(v.Double())
	case c.conv == convText:
		return strconv.Quote(string(v.ByteArray())), true
	case c.conv == convHex:
		return strconv.Quote(hex.EncodeToString(v.ByteArray())), true
	case c.conv == convDate:
		return strconv.FormatInt(int64(v.Int32())*86400e9, 10), true
	case c.conv == convStamp:
		return strconv.FormatInt(v.Int64()*c.unit, 10), true
	case c.conv == convInt96:
		d := v.Int96()
		return strconv.FormatInt((int64(d[2])-2440588)*86400e9+int64(d[1])<<32+int64(d[0]), 10), true
	case c.conv == convDec32 && c.scale <= 4:
		return float(float64(v.Int32()) / math.Pow10(c.scale))
	case c.conv == convDec64 && c.scale <= 4:
		return float(float64(v.Int64()) / math.Pow10(c.scale))
	}
	return "", false
}

// Files that other engines wrote: the test data of the Parquet library, most of
// it from the format's own collection. Each offered column is compared with the
// library's generic row interface.
func TestForeignFiles(t *testing.T) {
	out, err := exec.Command("go", "list", "-m", "-f", "{{.Dir}}", "github.com/parquet-go/parquet-go").Output()
	names, _ := filepath.Glob(filepath.Join(strings.TrimSpace(string(out)), "testdata", "*.parquet"))
	if err != nil || len(names) == 0 {
		t.Skipf("the library's test files are not here: %v", err)
	}
	cells := 0
	for _, name := range names {
		base := filepath.Base(name)
		t.Run(base, func(t *testing.T) {
			data, err := os.ReadFile(name)
			if err != nil {
				t.Fatal(err)
			}
			f, err := openBytes(data, stream.Options{})
			if base == "repeated_no_annotation.parquet" {
				if err == nil || err.Error() != "quay.parquet: damaged: its row groups have 6 rows, its footer says 0" {
					t.Errorf("got %v", err)
				}
				return
			}
			if err != nil {
				t.Fatal(err)
			}
			rows, err := readAll(f, allUses(f))
			if base == "nested_structs.rust.parquet" {
				// Nanoseconds in a column of microseconds.
				if err == nil || !strings.Contains(err.Error(), "ul_observation_date.min: found 1608822900000000000 ticks of 1µs since 1970") {
					t.Errorf("got %v", err)
				}
				return
			}
			if err != nil {
				t.Fatal(err)
			}
			if strings.HasPrefix(base, "lz4") {
				return // see checkFile
			}
			lib := readLibrary(t, data)
			if len(lib) != len(rows) {
				t.Fatalf("%d rows, the library reads %d", len(rows), len(lib))
			}
			for i, row := range rows {
				byLeaf := map[int]parquet.Value{}
				for _, v := range lib[i] {
					byLeaf[v.Column()] = v
				}
				for j := range f.cols {
					c := &f.cols[j]
					want, ok := foreignCell(c, byLeaf[c.leaf])
					if ok && row[j] != want {
						t.Fatalf("row %d column %s: %s, the library reads %s", i, c.name, row[j], want)
					}
					if ok {
						cells++
					}
				}
			}
		})
	}
	if cells < 500_000 {
		t.Errorf("only %d cells were compared", cells)
	}
}
