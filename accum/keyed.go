package accum

import "slices"

// defaultUnit is the exponent of the last binary place of fixed-point sums, in
// frame units, where numbers are about 1: sums up to 2^56, places down to 2^-70.
const defaultUnit = -70

const pageKeys = 256 // keys in one page of fixed-point sums

// keyTable sums vectors by key. A partial sum is made in float64, in row order,
// for each key and each fold of foldRows rows counted from the segment's start,
// and is then rounded once to 128-bit fixed point. Adding fixed-point numbers is
// associative, so the sums do not depend on which worker saw which segment.
type keyTable struct {
	width  int
	unit   int
	owners int // as in groupStore
	rows   []int64
	pages  [][]fixed

	slot    []int32 // place in part, by id; -1 outside this fold
	touched []int32
	part    []float64

	partials
}

func newKeyTable(width, unit int) *keyTable {
	return &keyTable{width: width, unit: unit}
}

// at returns the partial sums of a key in the present fold.
func (t *keyTable) at(id int32) []float64 {
	for int(id) >= len(t.slot) {
		t.slot = append(t.slot, -1)
		t.rows = append(t.rows, 0)
	}
	s := t.slot[id]
	if s < 0 {
		s = int32(len(t.touched))
		t.slot[id] = s
		t.touched = append(t.touched, id)
		n := len(t.touched) * t.width
		if n > cap(t.part) {
			t.part = slices.Grow(t.part, max(n-len(t.part), len(t.part)))
		}
		t.part = t.part[:n]
		clear(t.part[n-t.width:])
	}
	return t.part[int(s)*t.width : (int(s)+1)*t.width]
}

// flush ends a fold.
func (t *keyTable) flush() {
	for i, id := range t.touched {
		part := t.part[i*t.width : (i+1)*t.width]
		t.see(part[:t.width-t.owners])
		if !addSums(t.fix(id), part, t.unit, t.owners) {
			t.bad = true
		}
		t.slot[id] = -1
	}
	t.touched = t.touched[:0]
	t.part = t.part[:0]
}

func (t *keyTable) fix(id int32) []fixed {
	p := int(id) / pageKeys
	for p >= len(t.pages) {
		t.pages = append(t.pages, nil)
	}
	if t.pages[p] == nil {
		t.pages[p] = make([]fixed, pageKeys*t.width)
	}
	o := (int(id) % pageKeys) * t.width
	return t.pages[p][o : o+t.width]
}

// mergeFrom adds the sums of o, whose key i is key to[i] here.
func (t *keyTable) mergeFrom(o *keyTable, to []int32) {
	for i := range o.rows {
		id := to[i]
		t.grow(id)
		t.rows[id] += o.rows[i]
		mergeFixed(t.fix(id), o.fix(int32(i)))
	}
	t.join(&o.partials)
}

// reset empties the table after a fold; its memory stays.
func (t *keyTable) reset() {
	t.rows, t.slot = t.rows[:0], t.slot[:0]
	for _, p := range t.pages {
		clear(p)
	}
	t.partials = partials{}
}

func (t *keyTable) grow(id int32) {
	for int(id) >= len(t.slot) {
		t.slot = append(t.slot, -1)
		t.rows = append(t.rows, 0)
	}
}

// memory is about what the table holds, in bytes.
func (t *keyTable) memory() int64 {
	return int64(len(t.pages))*int64(pageKeys*t.width*16) + int64(cap(t.part))*8 + int64(len(t.slot))*12
}

// fits is partials.fits for the unit of the table.
func (t *keyTable) fits(want float64) (overflow, coarse bool) { return t.partials.fits(t.unit, want) }
