package accum

// loneTracker remembers, for each numeric term, whether its nonzero cells lie in
// one cluster only, and whether its zero cells do while all others are equal.
// Such a term's effect is confounded with that cluster: the cluster's score is
// zero by construction and the cluster error of the term means nothing.
type loneTracker struct {
	nonzero, zero []int32   // cluster id, none, or many
	value         []float64 // a nonzero cell, if there is one
	open          int       // entries that are not many
}

const (
	none int32 = -1
	many int32 = -2
)

func newLoneTracker(terms int) *loneTracker {
	t := &loneTracker{nonzero: make([]int32, terms), zero: make([]int32, terms), value: make([]float64, terms), open: 2 * terms}
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
			v := x[j][r]
			if v == 0 {
				t.see(&t.zero[j], id)
				continue
			}
			t.equal(j, v)
			t.see(&t.nonzero[j], id)
		}
	}
}

// equal notes a nonzero cell: zero cells count only beside a single other value.
func (t *loneTracker) equal(j int, v float64) {
	if t.nonzero[j] == none {
		t.value[j] = v
	} else if v != t.value[j] {
		t.close(&t.zero[j])
	}
}

func (t *loneTracker) close(p *int32) {
	if *p != many {
		*p = many
		t.open--
	}
}

func (t *loneTracker) see(p *int32, id int32) {
	switch {
	case *p == none:
		*p = id
	case *p >= 0 && *p != id:
		t.close(p)
	}
}

func (t *loneTracker) mergeFrom(o *loneTracker, to []int32) {
	join := func(p *int32, q int32) {
		switch {
		case q >= 0:
			t.see(p, to[q])
		case q == many:
			t.close(p)
		}
	}
	for j := range t.nonzero {
		if o.nonzero[j] != none {
			t.equal(j, o.value[j])
		}
		join(&t.nonzero[j], o.nonzero[j])
		join(&t.zero[j], o.zero[j])
	}
}

// lone reports the terms whose nonzero cells lie in one cluster, and those that are
// zero in one cluster only and have one value elsewhere.
func (t *loneTracker) lone() (nonzero, zero []bool) {
	nonzero, zero = make([]bool, len(t.nonzero)), make([]bool, len(t.nonzero))
	for j := range nonzero {
		nonzero[j], zero[j] = t.nonzero[j] >= 0, t.zero[j] >= 0
	}
	return nonzero, zero
}
