package columnar

import (
	"bytes"
	"encoding/hex"
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/google/uuid"
	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/deprecated"
	"github.com/parquet-go/parquet-go/encoding"
	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// typed is a column of the type tests: how it is stored, and for random values
// what its cells must be, by other means than those of the package.
type typed struct {
	name string
	node parquet.Node
	want stream.Column
	make func(r *rand.Rand) (parquet.Value, string)
}

func itoa(v int64) string { return strconv.FormatInt(v, 10) }

// ratio gives unscaled/10^scale rounded by math/big.
func ratio(unscaled *big.Int, scale int) string {
	f, _ := new(big.Rat).SetFrac(unscaled, new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(scale)), nil)).Float64()
	return strconv.FormatFloat(f, 'g', -1, 64)
}

// twos gives the big-endian two's complement of v in n bytes.
func twos(v *big.Int, n int) []byte {
	m := new(big.Int).Mod(v, new(big.Int).Lsh(big.NewInt(1), uint(8*n)))
	return m.FillBytes(make([]byte, n))
}

func randBig(r *rand.Rand, bytes int) *big.Int {
	b := make([]byte, 1+r.IntN(bytes))
	for i := range b {
		b[i] = byte(r.Uint32())
	}
	v := new(big.Int).SetBytes(b)
	v.Rsh(v, 1)
	if r.IntN(2) == 0 {
		v.Neg(v)
	}
	return v
}

func typedColumns() []typed {
	col := func(name string, k stream.Kind) stream.Column { return stream.Column{Name: name, Kind: k} }
	var all []typed
	add := func(c stream.Column, node parquet.Node, f func(r *rand.Rand) (parquet.Value, string)) {
		all = append(all, typed{c.Name, node, c, f})
	}
	for _, bits := range []int{8, 16, 32} {
		add(col(fmt.Sprint("int", bits), stream.Int64), parquet.Int(bits), func(r *rand.Rand) (parquet.Value, string) {
			v := int32(r.Uint32()) >> (32 - bits)
			return parquet.Int32Value(v), itoa(int64(v))
		})
		add(col(fmt.Sprint("uint", bits), stream.Int64), parquet.Uint(bits), func(r *rand.Rand) (parquet.Value, string) {
			v := r.Uint32() >> (32 - bits)
			return parquet.Int32Value(int32(v)), itoa(int64(v))
		})
	}
	add(col("int64", stream.Int64), parquet.Int(64), func(r *rand.Rand) (parquet.Value, string) {
		v := int64(r.Uint64()) >> r.IntN(64)
		return parquet.Int64Value(v), itoa(v)
	})
	add(col("uint64", stream.Uint64), parquet.Uint(64), func(r *rand.Rand) (parquet.Value, string) {
		v := r.Uint64() >> r.IntN(64)
		return parquet.Int64Value(int64(v)), strconv.FormatUint(v, 10)
	})
	add(col("float", stream.Float64), parquet.Leaf(parquet.FloatType), func(r *rand.Rand) (parquet.Value, string) {
		v := float32(r.NormFloat64())
		return parquet.FloatValue(v), strconv.FormatFloat(float64(v), 'g', -1, 64)
	})
	add(col("double", stream.Float64), parquet.Leaf(parquet.DoubleType), func(r *rand.Rand) (parquet.Value, string) {
		v := math.Float64frombits(r.Uint64())
		if math.IsNaN(v) {
			return parquet.DoubleValue(v), "-"
		}
		return parquet.DoubleValue(v), strconv.FormatFloat(v, 'g', -1, 64)
	})
	for _, scale := range []int{0, 2, 9} {
		add(col(fmt.Sprint("dec32_", scale), stream.Float64), parquet.Decimal(scale, 9, parquet.Int32Type), func(r *rand.Rand) (parquet.Value, string) {
			v := int32(r.Uint32()) >> r.IntN(32)
			return parquet.Int32Value(v), ratio(big.NewInt(int64(v)), scale)
		})
	}
	for _, scale := range []int{0, 3, 18} {
		add(col(fmt.Sprint("dec64_", scale), stream.Float64), parquet.Decimal(scale, 18, parquet.Int64Type), func(r *rand.Rand) (parquet.Value, string) {
			v := int64(r.Uint64()) >> r.IntN(64)
			return parquet.Int64Value(v), ratio(big.NewInt(v), scale)
		})
	}
	for _, scale := range []int{0, 5, 30} {
		add(col(fmt.Sprint("decfixed_", scale), stream.Float64), parquet.Decimal(scale, 38, parquet.FixedLenByteArrayType(16)), func(r *rand.Rand) (parquet.Value, string) {
			v := randBig(r, 16)
			return parquet.FixedLenByteArrayValue(twos(v, 16)), ratio(v, scale)
		})
		add(col(fmt.Sprint("decbytes_", scale), stream.Float64), parquet.Decimal(scale, 38, parquet.ByteArrayType), func(r *rand.Rand) (parquet.Value, string) {
			v := randBig(r, 20)
			return parquet.ByteArrayValue(twos(v, 20)), ratio(v, scale)
		})
	}
	add(stream.Column{Name: "date", Kind: stream.Time, DateOnly: true}, parquet.Date(), func(r *rand.Rand) (parquet.Value, string) {
		d := time.Date(1700+r.IntN(550), 1, 1+r.IntN(365), 0, 0, 0, 0, time.UTC)
		return parquet.Int32Value(int32(d.Unix() / 86400)), itoa(d.UnixNano())
	})
	for _, u := range []struct {
		name string
		unit parquet.TimeUnit
		d    time.Duration
	}{{"ms", parquet.Millisecond, time.Millisecond}, {"us", parquet.Microsecond, time.Microsecond}, {"ns", parquet.Nanosecond, 1}} {
		for _, zoned := range []bool{false, true} {
			add(stream.Column{Name: fmt.Sprint("t_", u.name, zoned), Kind: stream.Time, Zoned: zoned}, parquet.TimestampAdjusted(u.unit, zoned), func(r *rand.Rand) (parquet.Value, string) {
				v := (int64(r.Uint64()) >> 2) / int64(u.d)
				return parquet.Int64Value(v), itoa(v * int64(u.d))
			})
		}
		add(col("clock_"+u.name, stream.Float64), parquet.Time(u.unit), func(r *rand.Rand) (parquet.Value, string) {
			v := r.Int64N(int64(24*time.Hour)) / int64(u.d)
			want := ratio(big.NewInt(v), map[string]int{"ms": 3, "us": 6, "ns": 9}[u.name])
			if u.name == "ms" {
				return parquet.Int32Value(int32(v)), want
			}
			return parquet.Int64Value(v), want
		})
	}
	add(col("int96", stream.Time), parquet.Leaf(parquet.Int96Type), func(r *rand.Rand) (parquet.Value, string) {
		d := time.Date(1700+r.IntN(550), 1, 1+r.IntN(365), 0, 0, 0, int(r.Int64N(1e9)), time.UTC).Add(time.Duration(r.Int64N(86400)) * time.Second)
		day := d.Truncate(24 * time.Hour)
		nanos := d.Sub(day)
		// 2440588 is the Julian day number of 1970-01-01 (common practice for INT96).
		v := deprecated.Int96{uint32(nanos), uint32(nanos >> 32), uint32(day.Unix()/86400 + 2440588)}
		return parquet.Int96Value(v), itoa(d.UnixNano())
	})
	add(col("uuid", stream.Text), parquet.UUID(), func(r *rand.Rand) (parquet.Value, string) {
		var u uuid.UUID
		for i := range u {
			u[i] = byte(r.Uint32())
		}
		return parquet.FixedLenByteArrayValue(u[:]), strconv.Quote(u.String())
	})
	add(col("fixed", stream.Text), parquet.Leaf(parquet.FixedLenByteArrayType(5)), func(r *rand.Rand) (parquet.Value, string) {
		b := []byte{byte(r.Uint32()), 1, byte(r.IntN(2)), 0xff, 9}
		return parquet.FixedLenByteArrayValue(b), strconv.Quote(hex.EncodeToString(b))
	})
	for name, node := range map[string]parquet.Node{"string": parquet.String(), "enum": parquet.Enum(), "json": parquet.JSON(), "bytes": parquet.Leaf(parquet.ByteArrayType)} {
		add(col(name, stream.Text), node, func(r *rand.Rand) (parquet.Value, string) {
			s := strings.Repeat("quai é", r.IntN(3)) + itoa(int64(r.IntN(50)))
			return parquet.ByteArrayValue([]byte(s)), strconv.Quote(s)
		})
	}
	add(col("bool", stream.Bool), parquet.Leaf(parquet.BooleanType), func(r *rand.Rand) (parquet.Value, string) {
		v := r.IntN(2) == 1
		return parquet.BooleanValue(v), map[bool]string{false: "0", true: "1"}[v]
	})
	return all
}

// encodingsOf lists the encodings of a physical type.
func encodingsOf(k parquet.Kind) []encoding.Encoding {
	enc := []encoding.Encoding{&parquet.Plain}
	if k != parquet.Boolean {
		enc = append(enc, &parquet.RLEDictionary)
	}
	switch k {
	case parquet.Boolean:
		enc = append(enc, &parquet.RLE)
	case parquet.Int32, parquet.Int64:
		enc = append(enc, &parquet.DeltaBinaryPacked, &parquet.ByteStreamSplit)
	case parquet.Float, parquet.Double:
		enc = append(enc, &parquet.ByteStreamSplit)
	case parquet.ByteArray:
		enc = append(enc, &parquet.DeltaLengthByteArray, &parquet.DeltaByteArray)
	case parquet.FixedLenByteArray:
		enc = append(enc, &parquet.DeltaByteArray, &parquet.ByteStreamSplit)
	}
	return enc
}

// Every type in every encoding, required, optional and inside an optional
// group, in both page versions, written by the library's generic interface.
func TestTypes(t *testing.T) {
	const rows = 1300
	r := rand.New(rand.NewPCG(5, 1))
	for _, tc := range typedColumns() {
		for _, enc := range encodingsOf(tc.node.Type().Kind()) {
			for version := 1; version <= 2; version++ {
				t.Run(fmt.Sprintf("%s %s v%d", tc.name, enc, version), func(t *testing.T) {
					node := parquet.Encoded(tc.node, enc)
					root := orderedGroup{Group: parquet.Group{
						"required": node, "optional": parquet.Optional(node),
						"group": parquet.Optional(parquet.Group{"inner": parquet.Optional(node)}),
					}, order: []string{"required", "optional", "group"}}
					var buf bytes.Buffer
					w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root), parquet.DataPageVersion(version), parquet.PageBufferSize(2000), parquet.Compression(&parquet.Snappy))
					want := make([][3]string, rows)
					for i := range rows {
						var row parquet.Row
						for j := range 3 {
							v, s := tc.make(r)
							top := []int{0, 1, 2}[j]
							def := top
							if j > 0 && r.IntN(3) == 0 {
								def = r.IntN(top)
								v, s = parquet.NullValue(), "-"
							}
							want[i][j] = s
							row = append(row, v.Level(0, def, j))
						}
						if _, err := w.WriteRows([]parquet.Row{row}); err != nil {
							t.Fatal(err)
						}
						if i == 700 {
							if err := w.Flush(); err != nil {
								t.Fatal(err)
							}
						}
					}
					if err := w.Close(); err != nil {
						t.Fatal(err)
					}
					f, err := openBytes(buf.Bytes(), stream.Options{})
					if err != nil {
						t.Fatal(err)
					}
					for j, name := range []string{"required", "optional", "group.inner"} {
						c := tc.want
						c.Name = name
						if f.schema.Columns[j] != c {
							t.Errorf("schema has %+v, want %+v", f.schema.Columns[j], c)
						}
					}
					got, err := readAll(f, allUses(f))
					if err != nil {
						t.Fatal(err)
					}
					if len(got) != rows {
						t.Fatalf("%d rows, want %d", len(got), rows)
					}
					for i := range want {
						for j := range want[i] {
							if got[i][j] != want[i][j] {
								t.Fatalf("row %d column %s: %s, want %s", i, f.cols[j].name, got[i][j], want[i][j])
							}
						}
					}
				})
			}
		}
	}
}

func TestRefused(t *testing.T) {
	root := orderedGroup{Group: parquet.Group{
		"list": parquet.List(parquet.Int(64)), "tags": parquet.Repeated(parquet.String()), "bson": parquet.BSON(), "span": parquet.IntervalNode(),
		"crane": parquet.Int(64),
	}, order: []string{"list", "tags", "crane", "bson", "span"}}
	var buf bytes.Buffer
	w := parquet.NewGenericWriter[any](&buf, parquet.NewSchema("rows", root))
	for i := range 10 {
		row := parquet.Row{parquet.Int64Value(1).Level(0, 1, 0), parquet.Int64Value(2).Level(1, 1, 0), parquet.NullValue().Level(0, 0, 1),
			parquet.Int64Value(int64(i)).Level(0, 0, 2), parquet.ByteArrayValue([]byte("x")).Level(0, 0, 3), parquet.FixedLenByteArrayValue(make([]byte, 12)).Level(0, 0, 4)}
		if _, err := w.WriteRows([]parquet.Row{row}); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	f, err := openBytes(buf.Bytes(), stream.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if len(f.schema.Columns) != 1 || f.schema.Columns[0].Name != "crane" {
		t.Fatalf("columns %+v, want crane alone", f.schema.Columns)
	}
	if len(f.Refused()) != 4 {
		t.Errorf("refused %+v, want four columns", f.Refused())
	}
	got, err := readAll(f, allUses(f))
	if err != nil || len(got) != 10 || got[9][0] != "9" {
		t.Errorf("got %v, %v", got, err)
	}
	_, err = openBytes(buf.Bytes(), stream.Options{Kinds: map[string]stream.Kind{"tags": stream.Text}})
	if err == nil || !strings.Contains(err.Error(), "column tags cannot be used: it is repeated") {
		t.Errorf("asking for a repeated column: %v", err)
	}
}

// IEEE 754-2008 binary16, examples from the standard's parameters.
func TestFloat16(t *testing.T) {
	for bits, want := range map[uint16]float64{0x0000: 0, 0x3c00: 1, 0xc000: -2, 0x7bff: 65504, 0x0001: 0x1p-24, 0x0400: 0x1p-14, 0x03ff: 1023 * 0x1p-24, 0x3555: 0x1.554p-2, 0x7c00: math.Inf(1), 0xfc00: math.Inf(-1)} {
		if got := float16(bits); got != want {
			t.Errorf("%04x: %v, want %v", bits, got, want)
		}
	}
	if !math.IsNaN(float16(0x7e00)) {
		t.Error("7e00 is a number")
	}
	e := format.SchemaElement{}
	e.Type.V, e.Type.Valid = format.FixedLenByteArray, true
	e.TypeLength.V, e.TypeLength.Valid = 2, true
	e.LogicalType.Value = new(format.Float16Type)
	c := column{phys: format.FixedLenByteArray}
	if why := c.setType(&e); why != "" || c.conv != convF16 || c.kind != stream.Float64 {
		t.Errorf("%q %+v", why, c)
	}
}

// The edges of int64 nanoseconds.
func TestTimeEdges(t *testing.T) {
	last := math.MaxInt64 / int64(86400e9)
	for _, tc := range []struct {
		days, nanos int64
		want        string
	}{
		{0, 0, "0"}, {-1, 86400e9 - 1, "-1"}, {last, math.MaxInt64 - last*86400e9, itoa(math.MaxInt64)},
		{last, math.MaxInt64 - last*86400e9 + 1, ""}, {last + 1, 0, ""}, {-last - 1, 0, ""},
		{-last - 1, (last+1)*86400e9 - 1 + math.MinInt64 + 1, itoa(math.MinInt64)}, {0, -1, ""}, {0, 86400e9 + 1, ""},
	} {
		b := make([]byte, 12)
		le.PutUint64(b, uint64(tc.nanos))
		le.PutUint32(b[8:], uint32(tc.days+2440588))
		got := ""
		if v, ok := int96(b); ok {
			got = itoa(v)
		}
		if got != tc.want {
			t.Errorf("%d days %d ns: %q, want %q", tc.days, tc.nanos, got, tc.want)
		}
	}
}
