package stream

import (
	"encoding/binary"
	"fmt"
	"math"
	"strings"
)

// A crossed key is a tuple of other keys: rows agree in it if they agree in all of
// its parts. Its cells are text: the parts one after another, each so encoded that
// bytewise order is order by value.

// crossing makes the cells of one crossed key. Codes are given out in order of
// first sight; a full dictionary is replaced by a new one.
type crossing struct {
	parts []int // of Block.Key
	dict  *Dict
	codes map[string]int32
	buf   []byte
	out   []int32
}

// crossedMost is how many values a dictionary of tuples holds.
const crossedMost = 1 << 16

// cross fills key from the keys it is made of.
func (x *crossing) cross(keys []Vector, rows int, out *Vector) {
	if len(x.out) < rows {
		x.out = make([]int32, rows)
	}
	if x.dict == nil || len(x.dict.Values) > crossedMost {
		x.dict, x.codes = new(Dict), map[string]int32{}
	}
	for i := range rows {
		if i > 0 && x.same(keys, i) {
			x.out[i] = x.out[i-1]
			continue
		}
		x.buf = x.buf[:0]
		for _, p := range x.parts {
			x.buf = appendKey(x.buf, &keys[p], i)
		}
		c, ok := x.codes[string(x.buf)]
		if !ok {
			c = int32(len(x.dict.Values))
			s := string(x.buf)
			x.dict.Values = append(x.dict.Values, s)
			x.codes[s] = c
		}
		x.out[i] = c
	}
	*out = Vector{Kind: Text, Code: x.out[:rows], Dict: x.dict}
}

// same reports whether row i has the parts of the row before.
func (x *crossing) same(keys []Vector, i int) bool {
	for _, p := range x.parts {
		switch v := &keys[p]; v.Kind {
		case Text:
			if v.Code[i] != v.Code[i-1] {
				return false
			}
		case Float64:
			if v.F64[i] != v.F64[i-1] {
				return false
			}
		default:
			if v.I64[i] != v.I64[i-1] {
				return false
			}
		}
	}
	return true
}

// appendKey appends the key of row i: 8 bytes in order of value, or text with its
// zero bytes doubled to 0 255 and ended by 0 0.
func appendKey(b []byte, v *Vector, i int) []byte {
	const sign = 1 << 63
	switch v.Kind {
	case Text:
		s := v.Dict.Values[v.Code[i]]
		for {
			z := strings.IndexByte(s, 0)
			if z < 0 {
				return append(append(b, s...), 0, 0)
			}
			b = append(append(b, s[:z]...), 0, 255)
			s = s[z+1:]
		}
	case Float64:
		u := math.Float64bits(v.F64[i])
		if u&sign != 0 {
			u = ^u
		} else {
			u |= sign
		}
		return binary.BigEndian.AppendUint64(b, u)
	case Uint64, Bool:
		return binary.BigEndian.AppendUint64(b, uint64(v.I64[i]))
	}
	return binary.BigEndian.AppendUint64(b, uint64(v.I64[i])^sign)
}

// splitKey reads a part of a crossed key back, and returns what follows it.
func splitKey(kind Kind, s string) (KeyValue, string, error) {
	const sign = 1 << 63
	if kind == Text {
		var text strings.Builder
		for {
			z := strings.IndexByte(s, 0)
			if z < 0 || z+1 >= len(s) {
				return KeyValue{}, "", fmt.Errorf("stream: text without an end in a crossed key")
			}
			text.WriteString(s[:z])
			end := s[z+1] == 0
			s = s[z+2:]
			if end {
				return KeyValue{Text: text.String()}, s, nil
			}
			text.WriteByte(0)
		}
	}
	if len(s) < 8 {
		return KeyValue{}, "", fmt.Errorf("stream: crossed key of %d bytes, want 8 or more", len(s))
	}
	u := binary.BigEndian.Uint64([]byte(s[:8]))
	switch {
	case kind == Float64 && u&sign != 0, kind == Int64, kind == Time:
		u ^= sign
	case kind == Float64:
		u = ^u
	}
	return KeyValue{Bits: u}, s[8:], nil
}

// KeyLabel is the label of a value of Keys[key]: FormatKey, and for a crossed key
// the labels of its parts joined by " and ".
func (d *Design) KeyLabel(key int, v KeyValue) string {
	if d.Parts[key] == nil || d.Keys[key].Hidden {
		return FormatKey(d.Keys[key], d.Spec.Zone, v)
	}
	var labels []string
	rest := v.Text
	for _, p := range d.Parts[key] {
		part, after, err := splitKey(d.Keys[p].Kind, rest)
		if err != nil {
			return v.Text
		}
		labels = append(labels, FormatKey(d.Keys[p], d.Spec.Zone, part))
		rest = after
	}
	return strings.Join(labels, " and ")
}

// crossedKeys adds the keys that Spec.Crossed asks for.
func (c *compiler) crossedKeys() error {
	d := c.d
	simple := len(d.Keys)
	d.Parts = make([][]int, simple)
	for _, parts := range d.Spec.Crossed {
		var texts []string
		for i, p := range parts {
			if p < 0 || p >= simple {
				return Usef("a crossed cluster is made of cluster %d, want 0 to %d", p, simple-1)
			}
			if i > 0 && parts[i-1] >= p {
				return Usef("the parts of a crossed cluster are not in ascending order")
			}
			texts = append(texts, d.Keys[p].Text)
		}
		if len(parts) < 2 {
			return Usef("a crossed cluster has %d part, want two or more", len(parts))
		}
		d.Keys = append(d.Keys, KeyColumn{Text: strings.Join(texts, ", "), Kind: Text})
		d.Parts = append(d.Parts, parts)
	}
	return nil
}
