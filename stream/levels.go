package stream

import (
	"cmp"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// KeyValue is one value of a key, comparable with == and usable as a map key.
// The kind of the column is not part of it. Bits holds the value of every kind
// but Text: an int64, a uint64, 0 or 1, nanoseconds, or the bits of a canonical
// float64.
type KeyValue struct {
	Bits uint64
	Text string
}

// Key returns the value of row i of a vector of a Block.
func (v *Vector) Key(i int) KeyValue {
	switch v.Kind {
	case Text:
		return KeyValue{Text: v.Dict.Values[v.Code[i]]}
	case Float64:
		return KeyValue{Bits: math.Float64bits(v.F64[i])}
	}
	return KeyValue{Bits: uint64(v.I64[i])}
}

// CompareKeys orders two keys of one kind: numbers and times by value, false
// before true, text bytewise.
func CompareKeys(k Kind, a, b KeyValue) int {
	switch k {
	case Text:
		return strings.Compare(a.Text, b.Text)
	case Float64:
		return cmp.Compare(math.Float64frombits(a.Bits), math.Float64frombits(b.Bits))
	case Uint64, Bool:
		return cmp.Compare(a.Bits, b.Bits)
	}
	return cmp.Compare(int64(a.Bits), int64(b.Bits))
}

// FormatKey returns the label of a key: decimal digits, the shortest decimal
// that reads back as the same float64, true or false, a calendar day, a time in
// ISO 8601 with as many decimals of the second as it has, or the text itself. An
// instant is shown in the zone (nil is UTC) with its offset, Z for UTC.
func FormatKey(c KeyColumn, zone *time.Location, v KeyValue) string {
	if c.Hidden {
		return "(hidden)"
	}
	switch c.Kind {
	case Text:
		return v.Text
	case Float64:
		return formatFloat(math.Float64frombits(v.Bits))
	case Uint64:
		return strconv.FormatUint(v.Bits, 10)
	case Bool:
		return strconv.FormatBool(v.Bits != 0)
	case Time:
		t := time.Unix(0, int64(v.Bits)).UTC()
		switch {
		case c.DateOnly:
			return t.Format("2006-01-02")
		case !c.Zoned:
			return t.Format("2006-01-02T15:04:05.999999999")
		case zone != nil:
			t = t.In(zone)
		}
		return t.Format(time.RFC3339Nano)
	}
	return strconv.FormatInt(int64(v.Bits), 10)
}

// ParseKey reads a label of the key column: the inverse of FormatKey, which
// also takes other spellings of a float64 (3.0 for 3), 0 and 1 for truth values
// and times in the forms of string literals in expressions. The error says what
// was found and what would be right.
func ParseKey(c KeyColumn, zone *time.Location, label string) (KeyValue, error) {
	bad := func(want string) (KeyValue, error) {
		return KeyValue{}, fmt.Errorf("found %q, want %s", label, want)
	}
	switch c.Kind {
	case Text:
		return KeyValue{Text: label}, nil
	case Float64:
		v, err := strconv.ParseFloat(label, 64)
		if err != nil || v-v != 0 {
			return bad("a number")
		}
		return KeyValue{Bits: math.Float64bits(v + 0)}, nil
	case Int64:
		v, err := strconv.ParseInt(label, 10, 64)
		if err != nil {
			return bad("a whole number")
		}
		return KeyValue{Bits: uint64(v)}, nil
	case Uint64:
		v, err := strconv.ParseUint(label, 10, 64)
		if err != nil {
			return bad("a whole number of zero or more")
		}
		return KeyValue{Bits: v}, nil
	case Bool:
		switch label {
		case "true", "1":
			return KeyValue{Bits: 1}, nil
		case "false", "0":
			return KeyValue{}, nil
		}
		return bad("true or false")
	case Time:
		ns, err := parseTime(label, c.Zoned, zone)
		if err != nil {
			return KeyValue{}, fmt.Errorf("found %q, %w", label, err)
		}
		return KeyValue{Bits: uint64(ns)}, nil
	}
	return bad("a label")
}

// formatFloat gives the shortest decimal that reads back as v, with an exponent
// only below 1e-6 and from 1e21.
func formatFloat(v float64) string {
	if a := math.Abs(v); a != 0 && (a < 1e-6 || a >= 1e21) {
		s := strconv.FormatFloat(v, 'e', -1, 64)
		// e-09 to e-9
		if n := len(s); n >= 4 && s[n-4] == 'e' && s[n-2] == '0' {
			s = s[:n-2] + s[n-1:]
		}
		return s
	}
	return strconv.FormatFloat(v, 'f', -1, 64)
}
