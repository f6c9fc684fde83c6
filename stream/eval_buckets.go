package stream

import "math/bits"

// Buckets adds a key to a design that deals its rows to cells at random: by a fixed
// hash, the same on every machine and in every run. Its values are the numbers of
// the cells, from 0.
type Buckets struct {
	// Key is the place in Spec.Keys of what stays together: rows that agree in it
	// fall into one cell. -1 deals rows one by one, by the number of their segment and
	// their mark in it.
	Key int
	// Cells is how many there are, 1 to MostCells.
	Cells int
}

// Cell is the cell of a value of the key.
func (b *Buckets) Cell(k Kind, v KeyValue) int64 { return b.of(hashKey(k, v)) }

// of is the cell of a hash: the share of 2^64 that it falls into.
func (b *Buckets) of(hash uint64) int64 {
	cell, _ := bits.Mul64(hash, uint64(b.Cells))
	return int64(cell)
}

// MostCells bounds Buckets.Cells.
const MostCells = 1 << 16

// dealer makes the cells of rows for one evaluator.
type dealer struct {
	Buckets
	out  []int64
	dict *Dict // whose codes cells are of
	cell []int64
}

// deal fills out with the cells of the rows of a block whose other keys are there.
func (d *dealer) deal(segment int, b *Block, out *Vector) {
	n := b.Rows
	if len(d.out) < n {
		d.out = make([]int64, n)
	}
	dst := d.out[:n]
	*out = Vector{Kind: Int64, I64: dst}
	if d.Key < 0 {
		base := mix(uint64(segment))
		for i, m := range b.Marks[:n] {
			dst[i] = d.of(mix(base ^ uint64(m)))
		}
		return
	}
	v := &b.Key[d.Key]
	if v.Kind != Text {
		for i := range dst {
			dst[i] = d.Cell(v.Kind, v.Key(i))
		}
		return
	}
	if d.dict != v.Dict {
		d.dict, d.cell = v.Dict, d.cell[:0]
	}
	for i := len(d.cell); i < len(v.Dict.Values); i++ {
		d.cell = append(d.cell, d.Cell(Text, KeyValue{Text: v.Dict.Values[i]}))
	}
	for i, c := range v.Code[:n] {
		dst[i] = d.cell[c]
	}
}

// hashKey is a fixed hash of kind and value of a key. Texts go through FNV-1a
// (Fowler, Noll & Vo 1991).
func hashKey(k Kind, v KeyValue) uint64 {
	x := v.Bits
	if k == Text {
		x = fnv1a(v.Text)
	}
	return mix(mix(uint64(k)) ^ x)
}

func fnv1a(s string) uint64 {
	h := uint64(0xCBF29CE484222325)
	for i := range len(s) {
		h = (h ^ uint64(s[i])) * 0x100000001B3
	}
	return h
}

// mix is a step of SplitMix64 (Steele, Lea & Flood 2014): a bijection under which
// every bit of the result hangs on all bits of x.
func mix(x uint64) uint64 {
	x += 0x9E3779B97F4A7C15
	x = (x ^ x>>30) * 0xBF58476D1CE4E5B9
	x = (x ^ x>>27) * 0x94D049BB133111EB
	return x ^ x>>31
}

// bucketKey adds the key that Spec.Buckets asks for, after all others.
func (c *compiler) bucketKey() error {
	d := c.d
	d.Buckets = -1
	b := d.Spec.Buckets
	if b == nil {
		return nil
	}
	if b.Cells < 1 || b.Cells > MostCells {
		return Usef("buckets: found %d cells, want 1 to %d", b.Cells, MostCells)
	}
	if b.Key < -1 || b.Key >= len(d.Spec.Keys) {
		return Usef("buckets: found cluster %d, want -1 to %d", b.Key, len(d.Spec.Keys)-1)
	}
	d.Buckets = len(d.Keys)
	d.Keys = append(d.Keys, KeyColumn{Text: "buckets", Kind: Int64})
	d.Parts = append(d.Parts, []int{})
	return nil
}
