package accum

import (
	"encoding/binary"
	"hash/fnv"
	"math"

	"github.com/tallrow/tallrow/stream"
)

// CellCount says how many unique rows there are among sampled rows.
type CellCount struct {
	Rows     int64
	Distinct int64
	Once     int64 // of them met once, and twice
	Twice    int64
}

// Estimate is a lower bound of the unique rows of the whole input, those met once and
// twice telling of the ones not met,
//
//	Distinct + Once (Once - 1) / (2 (Twice + 1))
//
// (Chao 1984, Scandinavian Journal of Statistics 11, 265-270, in the form without
// bias). It is a guess where rows that lie together are alike.
func (c CellCount) Estimate() float64 {
	once := float64(c.Once)
	return float64(c.Distinct) + once*(once-1)/(2*float64(c.Twice+1))
}

// sampleCells counts rows by what makes them equal, as cells do: by hashes, since what
// they tell is an estimate anyway, but by the same ones in every run.
type sampleCells map[[16]byte]int64

func (s sampleCells) add(b *stream.Block, l *layout) {
	var key []byte
	number := func(x float64) { key = binary.LittleEndian.AppendUint64(key, math.Float64bits(x+0)) }
	weighted := b.Weight != nil && l.design.Spec.WeightKind != stream.Frequency
	h := fnv.New128a()
	for r := range b.Rows {
		key = key[:0]
		for j := range l.nx {
			number(b.X[j][r])
		}
		for i := range b.Cat {
			k := b.Cat[i].Key(r)
			key = binary.LittleEndian.AppendUint64(key, k.Bits)
			key = binary.AppendUvarint(key, uint64(len(k.Text)))
			key = append(key, k.Text...)
		}
		if weighted {
			number(b.Weight[r])
		}
		h.Reset()
		h.Write(key)
		var sum [16]byte
		h.Sum(sum[:0])
		s[sum]++
	}
}

func (s sampleCells) join(o sampleCells) {
	for k, n := range o {
		s[k] += n
	}
}

func (s sampleCells) count() CellCount {
	var c CellCount
	for _, n := range s {
		c.Rows += n
		c.Distinct++
		switch n {
		case 1:
			c.Once++
		case 2:
			c.Twice++
		}
	}
	return c
}
