package stream

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"testing"
	"time"
)

func TestFormatKey(t *testing.T) {
	zone := amsterdam(t)
	bits := func(v float64) KeyValue { return KeyValue{Bits: math.Float64bits(v)} }
	at := time.Date(2024, 1, 5, 6, 7, 8, 90_000_000, time.UTC)
	ns := KeyValue{Bits: uint64(at.UnixNano())}
	early := KeyValue{Bits: uint64(time.Date(1901, 2, 3, 0, 0, 0, 0, time.UTC).UnixNano())}
	for _, c := range []struct {
		col  KeyColumn
		zone *time.Location
		v    KeyValue
		want string
	}{
		{KeyColumn{Kind: Int64}, nil, KeyValue{Bits: 1<<53 + 1}, "9007199254740993"},
		{KeyColumn{Kind: Int64}, nil, KeyValue{Bits: math.MaxUint64}, "-1"},
		{KeyColumn{Kind: Uint64}, nil, KeyValue{Bits: math.MaxUint64}, "18446744073709551615"},
		{KeyColumn{Kind: Float64}, nil, bits(3), "3"},
		{KeyColumn{Kind: Float64}, nil, bits(0.1), "0.1"},
		{KeyColumn{Kind: Float64}, nil, bits(-2e-9), "-2e-9"},
		{KeyColumn{Kind: Float64}, nil, bits(1e20), "100000000000000000000"},
		{KeyColumn{Kind: Float64}, nil, bits(1e21), "1e+21"},
		{KeyColumn{Kind: Bool}, nil, KeyValue{Bits: 1}, "true"},
		{KeyColumn{Kind: Bool}, nil, KeyValue{}, "false"},
		{KeyColumn{Kind: Text}, nil, KeyValue{Text: " x,"}, " x,"},
		{KeyColumn{Kind: Time}, zone, ns, "2024-01-05T06:07:08.09"},
		{KeyColumn{Kind: Time, Zoned: true}, nil, ns, "2024-01-05T06:07:08.09Z"},
		{KeyColumn{Kind: Time, Zoned: true}, zone, ns, "2024-01-05T07:07:08.09+01:00"},
		{KeyColumn{Kind: Time, DateOnly: true}, zone, ns, "2024-01-05"},
		{KeyColumn{Kind: Time}, nil, early, "1901-02-03T00:00:00"},
		{KeyColumn{Kind: Time, DateOnly: true}, nil, early, "1901-02-03"},
	} {
		got := FormatKey(c.col, c.zone, c.v)
		if got != c.want {
			t.Errorf("%v of %v is %q, want %q", c.v, c.col.Kind, got, c.want)
		}
		if c.col.DateOnly {
			continue // the label has no time of day
		}
		if back, err := ParseKey(c.col, c.zone, got); err != nil || back != c.v {
			t.Errorf("%q reads back as %v, %v; want %v", got, back, err, c.v)
		}
	}
}

func TestParseKeyErrors(t *testing.T) {
	for _, c := range []struct {
		col         KeyColumn
		label, want string
	}{
		{KeyColumn{Kind: Int64}, "3.5", `found "3.5", want a whole number`},
		{KeyColumn{Kind: Uint64}, "-3", `found "-3", want a whole number of zero or more`},
		{KeyColumn{Kind: Float64}, "Inf", `found "Inf", want a number`},
		{KeyColumn{Kind: Bool}, "yes", `found "yes", want true or false`},
		{KeyColumn{Kind: Time}, "5 Jan", `found "5 Jan", want a time such as "2024-01-31" or "2024-01-31T06:00"`},
	} {
		if _, err := ParseKey(c.col, nil, c.label); err == nil || err.Error() != c.want {
			t.Errorf("%q: %v, want %s", c.label, err, c.want)
		}
	}
	if v, err := ParseKey(KeyColumn{Kind: Float64}, nil, "-0"); err != nil || v != (KeyValue{}) {
		t.Errorf("-0 is the key %v, %v; want that of 0", v, err)
	}
}

// Shortest decimals read back as the same bits, by strconv.
func TestFormatFloat(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 9))
	for range 20000 {
		v := math.Float64frombits(r.Uint64())
		if v-v != 0 {
			continue
		}
		s := formatFloat(v)
		back, err := strconv.ParseFloat(s, 64)
		if err != nil || back != v {
			t.Fatalf("%v prints as %s", v, s)
		}
		if short := strconv.FormatFloat(v, 'e', -1, 64); len(s) > len(short)+22 {
			t.Fatalf("%s is longer than %s", s, short)
		}
	}
}

func TestCompareKeys(t *testing.T) {
	bits := func(v float64) KeyValue { return KeyValue{Bits: math.Float64bits(v)} }
	for k, ordered := range map[Kind][]KeyValue{
		Int64:   {{Bits: 1 << 63}, {Bits: math.MaxUint64}, {}, {Bits: 5}},
		Time:    {{Bits: 1 << 63}, {Bits: math.MaxUint64}, {}, {Bits: 5}},
		Uint64:  {{}, {Bits: 5}, {Bits: 1 << 63}},
		Bool:    {{}, {Bits: 1}},
		Float64: {bits(-10), bits(-9.5), bits(0), bits(9), bits(10)},
		Text:    {{}, {Text: "10"}, {Text: "9"}, {Text: "Z"}, {Text: "a"}, {Text: "é"}},
	} {
		shuffled := slices.Clone(ordered)
		slices.Reverse(shuffled)
		slices.SortFunc(shuffled, func(a, b KeyValue) int { return CompareKeys(k, a, b) })
		if fmt.Sprint(shuffled) != fmt.Sprint(ordered) {
			t.Errorf("%v keys sort as %v, want %v", k, shuffled, ordered)
		}
		if CompareKeys(k, ordered[0], ordered[0]) != 0 {
			t.Errorf("a %v key is not equal to itself", k)
		}
	}
}
