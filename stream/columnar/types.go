package columnar

import (
	"fmt"
	"strings"

	"github.com/parquet-go/parquet-go/deprecated"
	"github.com/parquet-go/parquet-go/format"
	"github.com/tallrow/tallrow/stream"
)

// conv says how stored values become cells.
type conv uint8

const (
	convBool conv = iota + 1
	convI32
	convU32
	convI64
	convU64
	convF16
	convF32
	convF64
	convDec32
	convDec64
	convDecFixed
	convDecBytes
	convTime32 // time of day, scale gives the unit
	convTime64 // time of day
	convDate   // days
	convStamp  // timestamp, unit gives nanoseconds a tick
	convInt96  // nanoseconds of the day and Julian day
	convText   // byte array
	convUUID   // 16 bytes
	convHex    // fixed length bytes
)

// convAsText is added to the conversion of a number that is wanted as text.
const convAsText conv = 0x40

// column is one offered column.
type column struct {
	name     string
	leaf     int // index among the leaves of the schema
	maxDef   byte
	phys     format.Type
	width    int // bytes of a stored value, 0 for booleans and byte arrays
	conv     conv
	kind     stream.Kind
	zoned    bool
	dateOnly bool
	scale    int   // decimal digits after the point; for times of day too
	unit     int64 // nanoseconds a tick
}

// Refused is a column of the file that is not offered.
type Refused struct {
	Name   string
	Reason string
}

const (
	maxSchemaDepth = 64
	maxFixed       = 1 << 20 // bytes of a fixed-length value
)

// buildColumns walks the schema.
func buildColumns(meta *format.FileMetaData, name string) (cols []column, refused []Refused, leaves int, err error) {
	pos := stream.Position{File: name}
	s := meta.Schema
	if len(s) == 0 {
		return nil, nil, 0, damage(pos, "its schema is empty")
	}
	taken := map[string]bool{}
	next := 0
	var walk func(path []string, def, rep int, why string) error
	walk = func(path []string, def, rep int, why string) error {
		if next >= len(s) {
			return damage(pos, "its schema has groups with more children than elements")
		}
		e := &s[next]
		root := next == 0
		next++
		if !root {
			path = append(path, e.Name)
			switch e.RepetitionType.V {
			case format.Optional:
				def++
			case format.Repeated:
				def++
				rep++
			case format.Required:
			default:
				return damage(pos, "column %q has the unknown repetition %d", e.Name, e.RepetitionType.V)
			}
		}
		if len(path) > maxSchemaDepth {
			return damage(pos, "its schema is nested more than %d deep", maxSchemaDepth)
		}
		if e.Type.Valid && !root {
			leaf := leaves
			leaves++
			full := strings.Join(path, ".")
			c := column{name: full, leaf: leaf, maxDef: byte(def), phys: e.Type.V}
			if why == "" && rep > 0 {
				why = "it is repeated (a list or map)"
			}
			if why == "" {
				why = c.setType(e)
			}
			if why == "" && taken[full] {
				why = "another column has the same name"
			}
			if why != "" {
				refused = append(refused, Refused{full, why})
				return nil
			}
			taken[full] = true
			cols = append(cols, c)
			return nil
		}
		if _, ok := e.LogicalType.Value.(*format.VariantType); ok && why == "" {
			why = "it is part of a variant"
		}
		for range max(0, int(e.NumChildren.V)) {
			if err := walk(path, def, rep, why); err != nil {
				return err
			}
		}
		return nil
	}
	if err := walk(nil, 0, 0, ""); err != nil {
		return nil, nil, 0, err
	}
	if next != len(s) {
		return nil, nil, 0, damage(pos, "its schema has %d elements of which %d belong to no group", len(s), len(s)-next)
	}
	return cols, refused, leaves, nil
}

var physNames = map[format.Type]string{format.Boolean: "boolean", format.Int32: "INT32", format.Int64: "INT64", format.Int96: "INT96",
	format.Float: "float", format.Double: "double", format.ByteArray: "byte array", format.FixedLenByteArray: "fixed-length byte array"}

// setType fills the column from its schema element; the reason why the column
// is not offered, or "".
func (c *column) setType(e *format.SchemaElement) string {
	switch c.phys {
	case format.Int32, format.Float:
		c.width = 4
	case format.Int64, format.Double:
		c.width = 8
	case format.Int96:
		c.width = 12
	case format.FixedLenByteArray:
		c.width = int(e.TypeLength.V)
		if c.width <= 0 || c.width > maxFixed {
			return fmt.Sprintf("its values have a fixed length of %d bytes", e.TypeLength.V)
		}
	case format.Boolean, format.ByteArray:
	default:
		return fmt.Sprintf("its physical type %d is unknown", int(e.Type.V))
	}
	if why, ok := c.setLogical(e); ok {
		if why != "" {
			return why
		}
		if c.conv == 0 {
			return fmt.Sprintf("its annotation %v does not go with %s", e.LogicalType.Value, physNames[c.phys])
		}
		return ""
	}
	if why, ok := c.setConverted(e); ok {
		if why == "" && c.conv == 0 {
			why = fmt.Sprintf("its annotation %v does not go with %s", e.ConvertedType.V, physNames[c.phys])
		}
		return why
	}
	switch c.phys {
	case format.Boolean:
		c.set(convBool, stream.Bool)
	case format.Int32:
		c.set(convI32, stream.Int64)
	case format.Int64:
		c.set(convI64, stream.Int64)
	case format.Int96:
		c.set(convInt96, stream.Time)
	case format.Float:
		c.set(convF32, stream.Float64)
	case format.Double:
		c.set(convF64, stream.Float64)
	case format.ByteArray:
		c.set(convText, stream.Text)
	case format.FixedLenByteArray:
		c.set(convHex, stream.Text)
	}
	return ""
}

func (c *column) set(v conv, k stream.Kind) { c.conv, c.kind = v, k }

// setLogical reads the logical type. ok is false if there is none. conv stays
// 0 if the physical type does not go with it.
func (c *column) setLogical(e *format.SchemaElement) (why string, ok bool) {
	switch t := e.LogicalType.Value.(type) {
	case *format.StringType, *format.EnumType, *format.JsonType:
		if c.phys == format.ByteArray {
			c.set(convText, stream.Text)
		}
	case *format.IntType:
		c.setInt(int(t.BitWidth), t.IsSigned)
	case *format.DecimalType:
		return c.setDecimal(int(t.Scale)), true
	case *format.DateType:
		if c.phys == format.Int32 {
			c.set(convDate, stream.Time)
			c.dateOnly = true
		}
	case *format.TimeType:
		c.setClock(unitNanos(t.Unit))
	case *format.TimestampType:
		c.setStamp(unitNanos(t.Unit), t.IsAdjustedToUTC)
	case *format.UUIDType:
		if c.phys == format.FixedLenByteArray && c.width == 16 {
			c.set(convUUID, stream.Text)
		}
	case *format.Float16Type:
		if c.phys == format.FixedLenByteArray && c.width == 2 {
			c.set(convF16, stream.Float64)
		}
	case *format.NullType:
		return "it has no type (only nulls)", true
	case *format.BsonType:
		return "it is BSON", true
	case *format.GeometryType, *format.GeographyType:
		return "it is a geometry", true
	default:
		return "", false
	}
	return "", true
}

// setConverted reads the older annotation. The times of that age are UTC.
func (c *column) setConverted(e *format.SchemaElement) (why string, ok bool) {
	if !e.ConvertedType.Valid {
		return "", false
	}
	switch e.ConvertedType.V {
	case deprecated.UTF8, deprecated.Enum, deprecated.Json:
		if c.phys == format.ByteArray {
			c.set(convText, stream.Text)
		}
	case deprecated.Decimal:
		return c.setDecimal(int(e.Scale.V)), true
	case deprecated.Date:
		if c.phys == format.Int32 {
			c.set(convDate, stream.Time)
			c.dateOnly = true
		}
	case deprecated.TimeMillis:
		c.setClock(1e6)
	case deprecated.TimeMicros:
		c.setClock(1e3)
	case deprecated.TimestampMillis:
		c.setStamp(1e6, true)
	case deprecated.TimestampMicros:
		c.setStamp(1e3, true)
	case deprecated.Uint8:
		c.setInt(8, false)
	case deprecated.Uint16:
		c.setInt(16, false)
	case deprecated.Uint32:
		c.setInt(32, false)
	case deprecated.Uint64:
		c.setInt(64, false)
	case deprecated.Int8:
		c.setInt(8, true)
	case deprecated.Int16:
		c.setInt(16, true)
	case deprecated.Int32:
		c.setInt(32, true)
	case deprecated.Int64:
		c.setInt(64, true)
	case deprecated.Bson:
		return "it is BSON", true
	case deprecated.Interval:
		return "it is an interval of months, days and milliseconds", true
	default:
		return "", false
	}
	return "", true
}

func (c *column) setInt(bits int, signed bool) {
	switch {
	case c.phys == format.Int32 && bits <= 32 && signed:
		c.set(convI32, stream.Int64)
	case c.phys == format.Int32 && bits <= 32:
		c.set(convU32, stream.Int64)
	case c.phys == format.Int64 && bits == 64 && signed:
		c.set(convI64, stream.Int64)
	case c.phys == format.Int64 && bits == 64:
		c.set(convU64, stream.Uint64)
	}
}

func (c *column) setDecimal(scale int) string {
	if scale < 0 || scale > 10000 {
		return fmt.Sprintf("its decimal scale is %d", scale)
	}
	c.scale = scale
	switch c.phys {
	case format.Int32:
		c.set(convDec32, stream.Float64)
	case format.Int64:
		c.set(convDec64, stream.Float64)
	case format.FixedLenByteArray:
		c.set(convDecFixed, stream.Float64)
	case format.ByteArray:
		c.set(convDecBytes, stream.Float64)
	}
	return ""
}

func unitNanos(u format.TimeUnit) int64 {
	switch u.Value.(type) {
	case *format.MilliSeconds:
		return 1e6
	case *format.MicroSeconds:
		return 1e3
	case *format.NanoSeconds:
		return 1
	}
	return 0
}

func (c *column) setClock(unit int64) {
	switch {
	case unit == 1e6 && c.phys == format.Int32:
		c.set(convTime32, stream.Float64)
		c.scale = 3
	case unit == 1e3 && c.phys == format.Int64:
		c.set(convTime64, stream.Float64)
		c.scale = 6
	case unit == 1 && c.phys == format.Int64:
		c.set(convTime64, stream.Float64)
		c.scale = 9
	}
}

func (c *column) setStamp(unit int64, zoned bool) {
	if unit > 0 && c.phys == format.Int64 {
		c.set(convStamp, stream.Time)
		c.unit, c.zoned = unit, zoned
	}
}

// override applies an entry of Options.Kinds.
func (c *column) override(k stream.Kind, file string) error {
	switch {
	case k == c.kind:
		return nil
	case k == stream.Float64 && c.kind.Numeric():
		c.kind = k
		return nil
	case k == stream.Text && c.kind.Numeric() && c.kind != stream.Float64:
		c.kind = k
		c.conv |= convAsText
		return nil
	}
	can := "cannot be read as anything else"
	if c.kind.Numeric() && c.kind != stream.Float64 {
		can = "can be read as float64 or text"
	}
	return stream.Usef("%s: column %s is stored as %s and cannot be read as %s (a Parquet column of kind %s %s)", file, c.name, c.kind, k, c.kind, can)
}
