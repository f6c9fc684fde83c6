package accum

import (
	"errors"
	"math"
	"slices"
)

// Scores holds the scores of all clusters of one key, in order of key.
type Scores struct {
	Keys []Key
	Rows []int64
	// S has one row of P numbers for each cluster: sum w e z over the internal
	// columns, e in units 1/YInv. With a group apart it stops at the numeric terms
	// and Groups holds what belongs to categories.
	S      []float64
	P      int
	Groups []GroupScores
	// Lone tells for each internal column (numeric terms by their raw values)
	// whether all its nonzero cells lie in one cluster; LoneZero whether it is zero
	// in one cluster only and has one value elsewhere, so that it and the constant
	// together live in that cluster. Columns of the group apart stand as in
	// State.Column.
	Lone, LoneZero []bool
	// Gross is the sum over clusters of the square of what was added up; nil for
	// scores that were summed row by row.
	Gross []float64
}

// sortScores turns a table of scores into Scores.
func sortScores(in *interner, t *keyTable) *Scores {
	order := keyOrder(in)
	sc := &Scores{P: t.width, S: make([]float64, len(order)*t.width)}
	for i, id := range order {
		sc.Keys = append(sc.Keys, in.key(id))
		sc.Rows = append(sc.Rows, t.rows[id])
		for j, f := range t.fix(id) {
			sc.S[i*t.width+j] = f.float(t.unit)
		}
	}
	return sc
}

func keyOrder(in *interner) []int32 {
	order := make([]int32, in.size())
	for i := range order {
		order[i] = int32(i)
	}
	slices.SortFunc(order, func(a, b int32) int { return in.key(a).Compare(in.key(b)) })
	return order
}

// Scores forms the scores of the clusters of a key from their second moments:
// s_g = sum_c theta_c (z z')_{.c}, theta over (1, u, v) as in RowPass.Theta. The
// state must have been made with that key among Needs.Clusters and without
// categories. Time O(G k^2), memory O(G k).
func (s *State) Scores(key int, theta []float64) (*Scores, error) {
	if s.Dropped || len(s.epochs) == 0 || s.epochs[0].clusters[key] == nil {
		return nil, errors.New("accum: the sums of these clusters were not kept")
	}
	l := s.lay
	p := l.p0 + 2
	k := l.p0 + 1
	all := newInterner(l.design.Keys[key].Kind)
	lone := newLoneTracker(l.p0)
	to := make([][]int32, len(s.epochs))
	for i, e := range s.epochs {
		to[i] = joinKeys(all, e.keys[key])
		lone.mergeFrom(e.lone[key], to[i])
	}
	order := keyOrder(all)
	place := make([]int32, len(order))
	sc := &Scores{P: k, S: make([]float64, len(order)*k), Rows: make([]int64, len(order)), Lone: make([]bool, k), LoneZero: make([]bool, k)}
	for i, id := range order {
		place[id] = int32(i)
		sc.Keys = append(sc.Keys, all.key(id))
	}
	nonzero, zero := lone.lone()
	copy(sc.Lone[1:], nonzero)
	copy(sc.LoneZero[1:], zero)
	gross := make([]float64, k)
	z := make([]float64, p*(p+1)/2)
	vec, mag := make([]float64, k), make([]float64, k)
	at := s.denseAt()
	for i, e := range s.epochs {
		// theta in the epoch's frame, and the map of scores back.
		j := s.maps[i]
		th := make([]float64, p)
		for a := range p {
			for b := range p {
				th[b] += theta[at[a]] * j[a*l.width+b]
			}
		}
		t := e.clusters[key]
		for id := range t.rows {
			for q, f := range t.fix(int32(id)) {
				z[q] = f.float(t.unit)
			}
			for a := range k {
				vec[a], mag[a] = 0, 0
				for b := range p {
					lo, hi := min(a, b), max(a, b)
					x := th[b] * z[hi*(hi+1)/2+lo]
					vec[a] += x
					mag[a] += max(x, -x)
				}
			}
			g := place[to[i][id]]
			sc.Rows[g] += t.rows[id]
			dst := sc.S[int(g)*k : (int(g)+1)*k]
			for a := range k {
				var m float64
				for b := range k {
					x := j[a*l.width+b]
					dst[a] += x * vec[b]
					m += max(x, -x) * mag[b]
				}
				gross[a] += m * m
			}
		}
	}
	sc.Gross = gross
	return sc, nil
}

// LeverageBound is a bound of the leverage of every row (times its weight) from
// sums of squares alone, |W|^2 max_B sum_{i in B} w_i |z_i|^2 over the blocks B:
// where it is small no row can have a leverage near 1, and pass two need not form
// leverages to find such rows. whitener is as in RowPass. Infinite with categories.
func (s *State) LeverageBound(whitener []float64) float64 {
	if len(s.Groups) > 0 {
		return math.Inf(1)
	}
	k, width := s.lay.p0+1, s.lay.width
	bound := 0.0
	for i, e := range s.epochs {
		size := 0.0
		for a := range k {
			row := s.maps[i][a*width : a*width+k]
			size += dotp(row, row)
		}
		if e.frame == s.Frame {
			size = 1
		}
		bound = max(bound, size*e.reach)
	}
	return dotp(whitener, whitener) * bound
}

// Fourth contracts the fourth moments with the residual direction theta (over the
// internal columns and v): the (P+1) x (P+1) matrix, last row and column unused,
// of sum w^2 e^2 z z' (w for frequencies). With abs set every product enters with
// its absolute value: the size of what cancels. ok is false if the state holds no
// fourth moments. Time O(k^4) for each epoch.
func (s *State) Fourth(theta []float64, abs bool) (m []float64, ok bool) {
	if s.quart == nil {
		return nil, false
	}
	l := s.lay
	p, k := l.p0+2, l.p0+1
	n := len(s.Columns) + 1
	at := s.denseAt()
	m = make([]float64, n*n)
	for i, e := range s.epochs {
		j := s.maps[i]
		th := make([]float64, p)
		for a := range p {
			for b := range p {
				th[b] += theta[at[a]] * j[a*l.width+b]
			}
		}
		c := s.quart.contract(e.fourth, th, k, abs)
		jk := make([]float64, k*k)
		for a := range k {
			for b := range k {
				x := j[a*l.width+b]
				if abs {
					x = max(x, -x)
				}
				jk[a*k+b] = x
			}
		}
		c = congruence(jk, c, k)
		for a := range k {
			for b := range k {
				m[a*n+b] += c[a*k+b]
			}
		}
	}
	return m, true
}
