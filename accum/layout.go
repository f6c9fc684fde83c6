package accum

import (
	"slices"

	"github.com/tallrow/tallrow/stream"
)

// layout says where the columns of a design stand in a row z, and which sums
// of products are kept for which combinations of category levels.
//
//	z = (1, u_1 .. u_p0, v, f_1 .. f_nf)
//
// u are the numeric terms in frame units, v the outcome, f the numeric factors
// of category products, shifted and scaled but never whitened.
type layout struct {
	design  *stream.Design
	p0      int   // numeric terms
	nx      int   // raw dense columns without the outcome
	factors []int // raw dense column of each f
	width   int   // columns of z: p0 + 2 + len(factors)
	groups  []group
	tables  []tableSpec // one for each group, in the same order
	pairs   []pairSpec  // of groups whose common categories are no group
}

// group is the distinct set of categories of one or more terms. Each of its
// level combinations has one internal column for each of its parts.
type group struct {
	cats  []int // ascending
	parts []int // columns of z that multiply the indicator; the first is 0, the 1
}

// pairTables makes the tables of pairs. Counts do where there is nothing to add
// up but ones.
func (l *layout) pairTables(unit int, count bool) []*pairTable {
	var ts []*pairTable
	for i := range l.pairs {
		w := len(l.pairs[i].prods)
		if count && w == 1 {
			w = 0
		}
		ts = append(ts, newPairTable(w, unit))
	}
	return ts
}

// apart chooses the group that is eliminated before the solve, given the number of
// combinations of each: the one with most columns, if all columns together are
// more than dense and the group's indicators are a term; else -1. It also returns
// the number of internal columns beside it.
func (l *layout) apart(combos []int, dense int) (group, rest int) {
	total, most := l.p0+1, 0
	group = -1
	for i := range l.groups {
		n := combos[i] * len(l.groups[i].parts)
		total += n
		if n > most && l.indicators(i) {
			group, most = i, n
		}
	}
	if total <= dense || group < 0 {
		return -1, total
	}
	return group, total - most
}

// indicators reports whether the indicators of a group are a term by themselves.
func (l *layout) indicators(g int) bool {
	return slices.ContainsFunc(l.design.Terms, func(t stream.Term) bool {
		return t.Dense < 0 && len(t.Categories) > 0 && slices.Equal(sortedCopy(t.Categories), l.groups[g].cats)
	})
}

// tableSpec is a keyed table: for each combination of levels of cats, the sums
// of the products of two columns of z.
type tableSpec struct {
	cats  []int
	prods [][2]int
}

// pairSpec is a table of products between two groups, by pairs of their
// combinations.
type pairSpec struct {
	g, h  int      // groups
	prods [][2]int // parts of g times parts of h
}

func (t *tableSpec) add(a, b int) {
	if a > b {
		a, b = b, a
	}
	if !slices.Contains(t.prods, [2]int{a, b}) {
		t.prods = append(t.prods, [2]int{a, b})
	}
}

func (t *tableSpec) index(a, b int) int {
	if a > b {
		a, b = b, a
	}
	return slices.Index(t.prods, [2]int{a, b})
}

func newLayout(d *stream.Design) *layout {
	l := &layout{design: d, nx: len(d.Dense) - 1}
	zcol := map[int]int{}
	for _, t := range d.Terms {
		if len(t.Categories) == 0 {
			l.p0++
		}
	}
	for _, t := range d.Terms {
		if len(t.Categories) > 0 && t.Dense >= 0 {
			if _, ok := zcol[t.Dense]; !ok {
				zcol[t.Dense] = l.p0 + 2 + len(l.factors)
				l.factors = append(l.factors, t.Dense)
			}
		}
	}
	l.width = l.p0 + 2 + len(l.factors)
	for _, t := range d.Terms {
		if len(t.Categories) == 0 {
			continue
		}
		g := l.group(sortedCopy(t.Categories))
		if t.Dense >= 0 && !slices.Contains(g.parts, zcol[t.Dense]) {
			g.parts = append(g.parts, zcol[t.Dense])
		}
	}
	// Products within a group and with every dense column.
	for i := range l.groups {
		g := &l.groups[i]
		s := tableSpec{cats: g.cats}
		for _, a := range g.parts {
			for j := range l.p0 + 2 {
				s.add(a, j)
			}
			for _, b := range g.parts {
				s.add(a, b)
			}
		}
		l.tables = append(l.tables, s)
	}
	// Products between groups: by the combinations of one of them where it holds
	// the other's categories, else by pairs.
	for i := range l.groups {
		for j := range i {
			g, h := &l.groups[i], &l.groups[j]
			if t := l.groupIndex(union(g.cats, h.cats)); t >= 0 {
				for _, a := range g.parts {
					for _, b := range h.parts {
						l.tables[t].add(a, b)
					}
				}
				continue
			}
			s := pairSpec{g: i, h: j}
			for _, a := range g.parts {
				for _, b := range h.parts {
					s.prods = append(s.prods, [2]int{a, b})
				}
			}
			l.pairs = append(l.pairs, s)
		}
	}
	return l
}

func (l *layout) group(cats []int) *group {
	if i := l.groupIndex(cats); i >= 0 {
		return &l.groups[i]
	}
	l.groups = append(l.groups, group{cats: cats, parts: []int{0}})
	return &l.groups[len(l.groups)-1]
}

func (l *layout) groupIndex(cats []int) int {
	return slices.IndexFunc(l.groups, func(g group) bool { return slices.Equal(g.cats, cats) })
}

// v is the column of the outcome in z.
func (l *layout) v() int { return l.p0 + 1 }

func sortedCopy(s []int) []int {
	c := slices.Clone(s)
	slices.Sort(c)
	return c
}

func union(a, b []int) []int {
	c := slices.Concat(a, b)
	slices.Sort(c)
	return slices.Compact(c)
}
