package accum

import (
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// loneTracker remembers, for each numeric term, whether its nonzero cells lie in
// one cluster only, and whether its zero cells do while all others are equal.
// Such a term's effect is confounded with that cluster: the cluster's score is
// zero by construction and the cluster error of the term means nothing.
type loneTracker struct {
	nonzero, zero []where
	value         []float64 // a nonzero cell, if there is one
	open          int       // entries that are not in many
}

// where cells lie: in no cluster, in one, or in many.
type where struct {
	in  uint8
	key stream.KeyValue // of the one
}

const (
	inNone uint8 = iota
	inOne
	inMany
)

func newLoneTracker(terms int) *loneTracker {
	return &loneTracker{nonzero: make([]where, terms), zero: make([]where, terms), value: make([]float64, terms), open: 2 * terms}
}

// add takes in the cells of n rows with their clusters.
func (t *loneTracker) add(keys *stream.Vector, x [][]float64, n int) {
	if t.open == 0 {
		return
	}
	for j := range t.nonzero {
		zero, nonzero := &t.zero[j], &t.nonzero[j]
		for r, v := range x[j][:n] {
			if zero.in == inMany && nonzero.in == inMany {
				break
			}
			if v == 0 {
				t.see(zero, keys, r)
				continue
			}
			t.equal(j, v)
			t.see(nonzero, keys, r)
		}
	}
}

// equal notes a nonzero cell: zero cells count only beside a single other value.
func (t *loneTracker) equal(j int, v float64) {
	if t.nonzero[j].in == inNone {
		t.value[j] = v
	} else if v != t.value[j] {
		t.close(&t.zero[j])
	}
}

func (t *loneTracker) close(w *where) {
	if w.in != inMany {
		*w = where{in: inMany}
		t.open--
	}
}

// see notes that a cell lies in the cluster of row r.
func (t *loneTracker) see(w *where, keys *stream.Vector, r int) {
	if w.in != inMany {
		t.put(w, keys.Key(r))
	}
}

func (t *loneTracker) put(w *where, k stream.KeyValue) {
	switch {
	case w.in == inNone:
		k.Text = strings.Clone(k.Text) // the reader's may keep a whole page alive
		*w = where{inOne, k}
	case w.key != k:
		t.close(w)
	}
}

func (t *loneTracker) mergeFrom(o *loneTracker) {
	join := func(w *where, q where) {
		switch {
		case q.in == inMany:
			t.close(w)
		case q.in == inOne && w.in != inMany:
			t.put(w, q.key)
		}
	}
	for j := range t.nonzero {
		if o.nonzero[j].in != inNone {
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
		nonzero[j], zero[j] = t.nonzero[j].in == inOne, t.zero[j].in == inOne
	}
	return nonzero, zero
}
