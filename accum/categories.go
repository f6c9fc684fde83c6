package accum

import (
	"fmt"

	"github.com/tallrow/tallrow/stream"
)

// categories numbers what the rows of one worker have for categories: levels, and
// the combinations that each keyed table is about.
type categories struct {
	lay    *layout
	levels []*interner // for each category
	combos []*tuples   // for each table
	ids    [][]int32   // levels of the rows of the present block
	rows   [][]int32   // combinations of those rows
	pick   [][]int32
}

func newCategories(l *layout) *categories {
	c := &categories{lay: l}
	for i := range l.design.Categories {
		c.levels = append(c.levels, newInterner(l.design.Categories[i].Kind))
		c.ids = append(c.ids, make([]int32, stride))
	}
	for i := range l.tables {
		c.combos = append(c.combos, newTuples(len(l.tables[i].cats)))
		c.rows = append(c.rows, make([]int32, stride))
	}
	return c
}

// number fills rows for a block.
func (c *categories) number(b *stream.Block) {
	for i, in := range c.levels {
		in.ids(&b.Cat[i], b.Rows, c.ids[i])
	}
	for i := range c.combos {
		c.pick = c.pick[:0]
		for _, cat := range c.lay.tables[i].cats {
			c.pick = append(c.pick, c.ids[cat])
		}
		c.combos[i].join(c.pick, c.rows[i][:b.Rows])
	}
}

// split writes the level of each category of combination id of a table.
func (c *categories) split(table int, id int32, dst []Key) []Key {
	cats := c.lay.tables[table].cats
	k := make([]int32, len(cats))
	c.combos[table].split(id, k)
	for i, cat := range cats {
		dst = append(dst, c.levels[cat].key(k[i]))
	}
	return dst
}

// join takes in the levels of o and returns, for each table, the number here of
// its first n(table) combinations.
func (c *categories) join(o *categories, n func(table int) int) [][]int32 {
	level := make([][]int32, len(o.levels))
	for i, in := range o.levels {
		level[i] = joinKeys(c.levels[i], in)
	}
	to := make([][]int32, len(o.combos))
	for i, t := range o.combos {
		to[i] = joinTuples(c.combos[i], t, c.lay.tables[i].cats, level, n(i))
	}
	return to
}

// check refuses category sums, and the solve that follows, beyond memory.
func (c *categories) check(tables []*keyTable, memory int64) error {
	if len(tables) == 0 {
		return nil
	}
	l := c.lay
	var held int64
	columns := int64(l.p0 + 2)
	for i, t := range tables {
		held += t.memory() + c.combos[i].memory()
		if g := l.groupIndex(l.tables[i].cats); g >= 0 {
			columns += int64(len(t.rows)) * int64(len(l.groups[g].parts))
		}
	}
	most, name := 0, ""
	for i, in := range c.levels {
		held += in.memory()
		if n := in.size(); n > most {
			most, name = n, l.design.Categories[i].Text
		}
	}
	// The solve holds about four dense matrices of the internal columns.
	if need := held + 4*8*columns*columns; need > memory {
		return &MemoryError{What: fmt.Sprintf("each(%s) has %d levels or more", name, most), Need: need, Have: memory}
	}
	return nil
}

// joinKeys puts the keys of src into dst and returns their numbers there.
func joinKeys(dst, src *interner) []int32 {
	to := make([]int32, src.size())
	for i := range to {
		to[i] = dst.put(src.key(int32(i)))
	}
	return to
}

// joinTuples returns the ids in dst of the first n combinations of src.
func joinTuples(dst, src *tuples, cats []int, cat [][]int32, n int) []int32 {
	to := make([]int32, n)
	ids := make([]int32, len(cats))
	one := make([][]int32, len(cats))
	for i := range to {
		src.split(int32(i), ids)
		for c, id := range ids {
			one[c] = []int32{cat[cats[c]][id]}
		}
		dst.join(one, to[i:i+1])
	}
	return to
}
