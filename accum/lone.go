package accum

import "slices"

// loneTracker remembers, for each numeric term, whether its nonzero cells lie in
// one cluster only, and whether its zero cells do. Such a term's effect is
// confounded with that cluster: the cluster's score is zero by construction and
// the cluster error of the term means nothing.
type loneTracker struct {
	nonzero, zero []int32 // cluster id, none, or many
	open          int     // entries that are not many
}

const (
	none int32 = -1
	many int32 = -2
)

func newLoneTracker(terms int) *loneTracker {
	t := &loneTracker{nonzero: make([]int32, terms), zero: make([]int32, terms), open: 2 * terms}
	for i := range terms {
		t.nonzero[i], t.zero[i] = none, none
	}
	return t
}

func (t *loneTracker) add(ids []int32, x [][]float64) {
	if t.open == 0 {
		return
	}
	for j := range t.nonzero {
		if t.nonzero[j] == many && t.zero[j] == many {
			continue
		}
		for r, id := range ids {
			p := &t.zero[j]
			if x[j][r] != 0 {
				p = &t.nonzero[j]
			}
			t.see(p, id)
		}
	}
}

func (t *loneTracker) see(p *int32, id int32) {
	switch {
	case *p == none:
		*p = id
	case *p >= 0 && *p != id:
		*p = many
		t.open--
	}
}

func (t *loneTracker) mergeFrom(o *loneTracker, to []int32) {
	join := func(p *int32, q int32) {
		switch {
		case q >= 0:
			t.see(p, to[q])
		case q == many && *p != many:
			*p = many
			t.open--
		}
	}
	for j := range t.nonzero {
		join(&t.nonzero[j], o.nonzero[j])
		join(&t.zero[j], o.zero[j])
	}
}

// lone reports the terms that a single cluster identifies.
func (t *loneTracker) lone() []bool {
	out := make([]bool, len(t.nonzero))
	for j := range out {
		out[j] = t.nonzero[j] >= 0 || t.zero[j] >= 0
	}
	return out
}

func anyTrue(s []bool) bool { return slices.Contains(s, true) }
