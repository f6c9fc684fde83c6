package accum

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
	"sync"

	"github.com/tallrow/tallrow/stream"
)

// categories numbers what the rows of one worker have for categories: levels, and
// the combinations that each keyed table is about, as all workers number them.
type categories struct {
	lay    *layout
	common numberer
	levels []*interner // for each category, as this worker met them
	level  [][]int32   // their numbers
	combos []*tuples   // for each table of several categories
	combo  [][]int32
	ids    [][]int32 // levels of the rows of the present block
	rows   [][]int32 // combinations of those rows, by table
	pick   [][]int32
}

// numberer gives out the numbers that all workers share.
type numberer interface {
	level(category int, k Key) (int32, error)
	combo(table int, levels []int32) (int32, error)
}

func newCategories(l *layout, common numberer) *categories {
	c := &categories{lay: l, common: common, level: make([][]int32, len(l.design.Categories)), combo: make([][]int32, len(l.tables))}
	for i := range l.design.Categories {
		c.levels = append(c.levels, newInterner(l.design.Categories[i].Kind))
		c.ids = append(c.ids, make([]int32, stride))
	}
	for i := range l.tables {
		cats := l.tables[i].cats
		if len(cats) == 1 {
			c.combos = append(c.combos, nil)
			c.rows = append(c.rows, c.ids[cats[0]])
			continue
		}
		c.combos = append(c.combos, newTuples(len(cats)))
		c.rows = append(c.rows, make([]int32, stride))
	}
	return c
}

// number fills rows for a block.
func (c *categories) number(b *stream.Block) error {
	for i, in := range c.levels {
		ids := c.ids[i][:b.Rows]
		in.ids(&b.Cat[i], b.Rows, ids)
		for n := len(c.level[i]); n < in.size(); n++ {
			to, err := c.common.level(i, in.key(int32(n)))
			if err != nil {
				return err
			}
			c.level[i] = append(c.level[i], to)
		}
		for r, id := range ids {
			ids[r] = c.level[i][id]
		}
	}
	for i, t := range c.combos {
		if t == nil {
			continue
		}
		cats := c.lay.tables[i].cats
		c.pick = c.pick[:0]
		for _, cat := range cats {
			c.pick = append(c.pick, c.ids[cat])
		}
		rows := c.rows[i][:b.Rows]
		t.join(c.pick, rows)
		for n := len(c.combo[i]); n < t.size(); n++ {
			k := make([]int32, len(cats))
			t.split(int32(n), k)
			to, err := c.common.combo(i, k)
			if err != nil {
				return err
			}
			c.combo[i] = append(c.combo[i], to)
		}
		for r, id := range rows {
			rows[r] = c.combo[i][id]
		}
	}
	return nil
}

// numbering is the numberer of pass one: in order of first sight, which shows in
// no result, since states order levels by value.
type numbering struct {
	mu     sync.Mutex
	lay    *layout
	levels []*interner
	combos []*tuples // nil for tables of one category
}

func newNumbering(l *layout) *numbering {
	n := &numbering{lay: l}
	for i := range l.design.Categories {
		n.levels = append(n.levels, newInterner(l.design.Categories[i].Kind))
	}
	for i := range l.tables {
		var t *tuples
		if k := len(l.tables[i].cats); k > 1 {
			t = newTuples(k)
		}
		n.combos = append(n.combos, t)
	}
	return n
}

func (n *numbering) level(cat int, k Key) (int32, error) {
	n.mu.Lock()
	defer n.mu.Unlock()
	return n.levels[cat].put(k), nil
}

func (n *numbering) combo(table int, levels []int32) (int32, error) {
	n.mu.Lock()
	defer n.mu.Unlock()
	one := make([][]int32, len(levels))
	for i := range levels {
		one[i] = levels[i : i+1]
	}
	var id [1]int32
	n.combos[table].join(one, id[:])
	return id[0], nil
}

// sizes is the number of combinations of each table so far.
func (n *numbering) sizes() []int {
	out := make([]int, len(n.combos))
	for i, t := range n.combos {
		if t == nil {
			out[i] = n.levels[n.lay.tables[i].cats[0]].size()
		} else {
			out[i] = t.size()
		}
	}
	return out
}

// split returns the level numbers of combination id of a table.
func (n *numbering) split(table int, id int32) []int32 {
	k := make([]int32, len(n.lay.tables[table].cats))
	if t := n.combos[table]; t != nil {
		t.split(id, k)
	} else {
		k[0] = id
	}
	return k
}

// check refuses category sums, and the solve that follows, beyond memory. tables
// are those of one of the workers, pairs are common to all.
func (n *numbering) check(tables []*keyTable, pairs []*pairTable, b *budget) error {
	l := n.lay
	if len(l.tables) == 0 {
		return nil
	}
	n.mu.Lock()
	defer n.mu.Unlock()
	var held int64
	for _, t := range tables {
		held += t.memory() * int64(max(1, b.workers))
	}
	for _, t := range pairs {
		held += t.memory()
	}
	for _, in := range n.levels {
		held += in.memory()
	}
	for _, t := range n.combos {
		if t != nil {
			held += t.memory()
		}
	}
	sizes := n.sizes()
	group, rest := l.apart(sizes, b.dense)
	need := held + solveBytes(l, sizes, group, rest)
	if need <= b.memory {
		return nil
	}
	type count struct {
		name string
		n    int
	}
	var counts []count
	for i := range l.tables {
		var names []string
		for _, c := range l.tables[i].cats {
			names = append(names, "each("+l.design.Categories[c].Text+")")
		}
		counts = append(counts, count{strings.Join(names, " * "), sizes[i]})
	}
	slices.SortStableFunc(counts, func(a, b count) int { return cmp.Compare(b.n, a.n) })
	what := fmt.Sprintf("%s has %d levels or more", counts[0].name, counts[0].n)
	for i, c := range counts[1:] {
		switch {
		case i == 0:
			what += fmt.Sprintf(", beside it %s %d", c.name, c.n)
		case i < 4:
			what += fmt.Sprintf(", %s %d", c.name, c.n)
		}
	}
	if group >= 0 {
		what += fmt.Sprintf("; all but the largest make a dense matrix of %d columns", rest)
	} else if rest > b.dense {
		what += fmt.Sprintf("; they make a dense matrix of %d columns, since no category is a term by itself", rest)
	}
	return &MemoryError{What: what, Need: need, Have: b.memory}
}

// solveBytes is about what the solve holds: dense matrices of the columns beside
// the group that is eliminated, and that group's products with them.
func solveBytes(l *layout, combos []int, group, rest int) int64 {
	r := int64(rest + 1)
	n := solveMatrices * 8 * r * r
	if group >= 0 {
		n += apartMatrices * 8 * r * int64(combos[group]*len(l.groups[group].parts))
	}
	return n
}

const (
	solveMatrices = 6 // dense matrices of the solve
	apartMatrices = 4 // products of the eliminated group with the rest, and their like
)

// same maps the first n numbers to themselves.
func same(n int) []int32 {
	to := make([]int32, n)
	for i := range to {
		to[i] = int32(i)
	}
	return to
}
