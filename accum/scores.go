package accum

import (
	"errors"
	"math"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// Scores gives the scores of all clusters of one key.
type Scores struct {
	// P is the length of a score: a number for each internal column. With a group
	// apart it stops at the numeric terms, and ClusterMeat knows the rest.
	P int
	// Lone tells for each internal column (numeric terms by their raw values)
	// whether all its nonzero cells lie in one cluster; LoneZero whether it is zero
	// in one cluster only and has one value elsewhere, so that it and the constant
	// together live in that cluster. Columns of the group apart stand as in
	// State.Column.
	Lone, LoneZero []bool
	// Gross is the sum over clusters of the square of what was added up, set by
	// Each; nil for scores that were summed row by row.
	Gross []float64

	apart   *apartClusters // where there is a group apart
	kind    stream.Kind
	stores  []*groupStore
	moments bool
	// form fills S, and A if there is one, from the sums of a cluster.
	form func(c *Cluster, parts []groupPart)
	skip func(parts []groupPart) bool // clusters that do not count; nil for none
}

// Cluster is the rows of one key.
type Cluster struct {
	Key  Key
	Rows int64
	// S has P numbers: sum w e z over the internal columns, e in units 1/YInv.
	S []float64
	// A is the P x P matrix sum w z z' over the internal columns, row by row; nil
	// unless second moments were asked for.
	A []float64
}

// Moments reports whether clusters come with second moments.
func (sc *Scores) Moments() bool { return sc.moments }

// Each calls f for each cluster in order of key, and stops at an error. What f gets
// is valid until it returns. Sums on scratch are read once more for every call of
// Each. Time O(G log(runs) + G P), for scores from second moments O(G P^2).
//
// Errors are those of f, *ScratchError and *DamageError.
func (sc *Scores) Each(f func(c *Cluster) error) error {
	if sc.Gross != nil {
		clear(sc.Gross)
	}
	c := Cluster{Key: Key{Kind: sc.kind}, S: make([]float64, sc.P)}
	if sc.moments {
		c.A = make([]float64, sc.P*sc.P)
	}
	return mergeGroups(sc.stores, func(parts []groupPart) error {
		if sc.skip != nil && sc.skip(parts) {
			return nil
		}
		c.Rows = 0
		for i := range parts {
			c.Rows += parts[i].rows
		}
		if sc.kind == stream.Text {
			c.Key.Text = parts[0].text
		} else {
			c.Key.Bits = keyOf(sc.kind, parts[0].ord)
		}
		sc.form(&c, parts)
		return f(&c)
	})
}

// storeScores is the scores, over p columns, that a store holds as they are, and
// with moments the packed second moments after them.
func storeScores(s *groupStore, p int, moments bool) *Scores {
	return &Scores{P: p, kind: s.kind, stores: []*groupStore{s}, moments: moments, form: func(c *Cluster, parts []groupPart) {
		sums := parts[0].sums
		for j, f := range sums[:p] {
			c.S[j] = f.float(s.unit)
		}
		if !moments {
			return
		}
		for j, k := 0, p; j < p; j++ {
			for i := range j + 1 {
				x := sums[k].float(s.unit)
				c.A[j*p+i], c.A[i*p+j] = x, x
				k++
			}
		}
	}}
}

// Scores forms the scores of the clusters of a key from their second moments:
// s_g = sum_c theta_c (z z')_{.c}, theta over (1, u, v) as in RowPass.Theta. The
// state must have been made with that key among Needs.Clusters and without
// categories. With moments set clusters come with A too.
func (s *State) Scores(key int, theta []float64, moments bool) (*Scores, error) {
	if s.Dropped || len(s.epochs) == 0 || s.epochs[0].clusters[key] == nil {
		return nil, errors.New("accum: the sums of these clusters were not kept")
	}
	l := s.lay
	w := s.epochWidth()
	p := s.epochTerms() + 2 // of the epochs
	k := l.p0 + 1
	sc := &Scores{P: k, Lone: make([]bool, k), LoneZero: make([]bool, k), Gross: make([]float64, k), kind: l.design.Keys[key].Kind, moments: moments}
	lone := newLoneTracker(p - 2)
	ths := make([][]float64, len(s.epochs)) // theta in each epoch's frame
	for i, e := range s.epochs {
		lone.mergeFrom(e.lone[key])
		sc.stores = append(sc.stores, e.clusters[key])
		ths[i] = s.epochTheta(i, theta)
	}
	nonzero, zero := lone.lone()
	for j := range l.p0 {
		n := j
		if s.base != nil {
			n = s.from[j]
		}
		sc.Lone[1+j], sc.LoneZero[1+j] = nonzero[n], zero[n]
	}
	switch n := s.nest(key); {
	case n != nil && n.split:
		return nil, errors.New("accum: rows of a unit lie in several of these clusters")
	case n != nil:
		s.nestedScores(sc, theta, n)
		return sc, nil
	case s.Swept != nil:
		s.sweptScores(sc, theta)
		return sc, nil
	}
	z := make([]float64, p*(p+1)/2)
	vec, mag := make([]float64, p), make([]float64, p)
	block, half := make([]float64, p*p), make([]float64, k*p)
	sc.form = func(c *Cluster, parts []groupPart) {
		dst := c.S
		clear(dst)
		clear(c.A)
		for i := range parts {
			th, j := ths[parts[i].tag], s.maps[parts[i].tag]
			unit := sc.stores[parts[i].tag].unit
			for q, f := range parts[i].sums {
				z[q] = f.float(unit)
			}
			for a := range p {
				vec[a], mag[a] = 0, 0
				for b := range p {
					lo, hi := min(a, b), max(a, b)
					x := th[b] * z[hi*(hi+1)/2+lo]
					vec[a] += x
					mag[a] += max(x, -x)
				}
			}
			for a := range k {
				var m float64
				for b := range p {
					x := j[a*w+b]
					if x == 0 {
						continue
					}
					dst[a] += x * vec[b]
					m += max(x, -x) * mag[b]
				}
				sc.Gross[a] += m * m
			}
			if !moments {
				continue
			}
			same := s.base == nil && s.epochs[parts[i].tag].frame == s.Frame
			if same {
				for a := range k {
					for b := range a + 1 {
						x := z[a*(a+1)/2+b]
						c.A[a*k+b] += x
						if a != b {
							c.A[b*k+a] += x
						}
					}
				}
				continue
			}
			for a := range p {
				for b := range a + 1 {
					x := z[a*(a+1)/2+b]
					block[a*p+b], block[b*p+a] = x, x
				}
			}
			congruent(c.A, j, w, block, half, k, p)
		}
	}
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
	if s.base != nil {
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
	w, p, k := s.epochWidth(), s.epochTerms()+2, s.lay.p0+1
	n := len(s.Columns) + 1
	m = make([]float64, n*n)
	half, c2 := make([]float64, k*p), make([]float64, k*k)
	for i, e := range s.epochs {
		j := s.maps[i]
		if abs {
			j = absolutes(j)
		}
		c := s.quart.contract(e.fourth, s.epochTheta(i, theta), p, abs)
		clear(c2)
		congruent(c2, j, w, c, half, k, p)
		for a := range k {
			for b := range k {
				m[a*n+b] += c2[a*k+b]
			}
		}
	}
	return m, true
}

// congruent adds J A J' to dst, for the leading k x p of J, whose rows are ld long,
// and A p x p. half has k p numbers.
func congruent(dst, j []float64, ld int, a, half []float64, k, p int) {
	for r := range k {
		row := half[r*p : (r+1)*p]
		clear(row)
		for t := range p {
			if x := j[r*ld+t]; x != 0 {
				kernel.Axpy(x, a[t*p:(t+1)*p], row)
			}
		}
	}
	for r := range k {
		for c := range k {
			dst[r*k+c] += dotp(half[r*p:(r+1)*p], j[c*ld:c*ld+p])
		}
	}
}

func absolutes(x []float64) []float64 {
	out := make([]float64, len(x))
	for i, v := range x {
		out[i] = math.Abs(v)
	}
	return out
}

// epochTheta is theta over (1, u, v) in the frame of epoch i.
func (s *State) epochTheta(i int, theta []float64) []float64 {
	at, j, w, p := s.denseAt(), s.maps[i], s.epochWidth(), s.epochTerms()+2
	th := make([]float64, p)
	for a := range s.lay.p0 + 2 {
		for b := range p {
			th[b] += theta[at[a]] * j[a*w+b]
		}
	}
	return th
}

// FourthPowers is sum e^4 (each row as often as its frequency) from the fourth
// moments, and the size of what was added up for it.
func (s *State) FourthPowers(theta []float64) (sum, gross float64) {
	p := s.epochTerms() + 2
	for i, e := range s.epochs {
		th := s.epochTheta(i, theta)
		net, all := s.quart.contract(e.fourth, th, p, false), s.quart.contract(e.fourth, th, p, true)
		for a := range p {
			for b := range p {
				sum += th[a] * th[b] * net[a*p+b]
				gross += math.Abs(th[a]*th[b]) * all[a*p+b]
			}
		}
	}
	return sum, gross
}
