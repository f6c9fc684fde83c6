package accum

import (
	"fmt"
	"runtime"
	"slices"
	"strings"
	"sync"

	"github.com/tallrow/tallrow/accum/internal/kernel"
	"github.com/tallrow/tallrow/stream"
)

// isApart reports whether group g is the one kept apart.
func (s *State) isApart(g int) bool { return s.Apart != nil && s.Apart.Group == g }

// allColumns is the number of internal columns, with v and the group apart if
// there is one.
func (s *State) allColumns() int {
	if a := s.Apart; a != nil {
		return len(s.Columns) + 1 + len(a.Rows)*a.Parts
	}
	return len(s.Columns)
}

// scoreWidth is the number of scores that each cluster holds densely.
func (s *State) scoreWidth() int {
	if s.Apart != nil {
		return s.lay.p0 + 1
	}
	return len(s.Columns)
}

// levelCounts says how many combinations the groups have.
func (s *State) levelCounts() string {
	var list []string
	for gi := range s.Groups {
		var names []string
		for _, c := range s.Groups[gi].Categories {
			names = append(names, "each("+s.Design.Categories[c].Text+")")
		}
		list = append(list, fmt.Sprintf("%s with %d levels", strings.Join(names, " * "), s.Groups[gi].n))
	}
	if list == nil {
		return "the rows"
	}
	return strings.Join(list, ", ")
}

// apartLever holds what the leverage of a row needs beside the rest's inverse Q:
// h = z'(Inv_j + G_j Q G_j')z - 2 z'G_j Q x + x'Q x for a row with cells z in
// combination j and x in the rest.
type apartLever struct {
	parts, p   int
	own, cross []float64
}

func newApartLever(e *Eliminated, quad []float64) *apartLever {
	p, q := e.n-1, e.Parts
	a := &apartLever{parts: q, p: p, own: append([]float64(nil), e.Inv...), cross: make([]float64, len(e.Kept)*p)}
	timesMatrix(e.G, e.n, p, quad, func(i int, row []float64) {
		copy(a.cross[i*p:], row)
		j := i / q
		for k := range q {
			a.own[i*q+k] += dotp(row, e.G[(j*q+k)*e.n:(j*q+k)*e.n+p])
		}
	})
	return a
}

func (a *apartLever) memory() int64 {
	if a == nil {
		return 0
	}
	return int64(len(a.own)+len(a.cross)) * 8
}

// parallel calls f(i) for i < n on all processors. Calls must not depend on each
// other.
func parallel(n int, f func(i int)) {
	var wg sync.WaitGroup
	next := make(chan int)
	for range min(runtime.GOMAXPROCS(0), n) {
		wg.Go(func() {
			for i := range next {
				f(i)
			}
		})
	}
	for i := range n {
		next <- i
	}
	close(next)
	wg.Wait()
}

// apartLeverage is what the group apart adds to x'Qx for row r.
func (w *secondWorker) apartLeverage(r int, idx []int, val []float64) float64 {
	a, g := w.all.lever, w.state.Apart.Group
	q, p := a.parts, a.p
	at := int(w.rowb[g][r]) - p - 1
	parts := w.lay.groups[g].parts
	var s float64
	for i, c := range parts {
		x := w.z[c*stride+r]
		row := a.cross[(at+i)*p : (at+i+1)*p]
		var t float64
		for k, j := range idx {
			t += row[j] * val[k]
		}
		t *= -2
		for k, d := range parts {
			t += a.own[(at+i)*q+k] * w.z[d*stride+r]
		}
		s += x * t
	}
	return s
}

// apartClusters holds all clusters of a key, in order, where there is a group apart.
type apartClusters struct {
	keys   []Key
	rest   []float64 // Scores.P numbers of each
	groups []groupScores
}

// groupScores holds the scores of clusters in the columns of one group: those of
// cluster g are entries start[g] to start[g+1], in order of combination.
type groupScores struct {
	start []int
	combo []int32
	s     []float64 // Parts numbers for each entry
}

// apartCommon sums the scores of the clusters of one key by group, for all workers.
type apartCommon struct {
	mu   sync.Mutex
	keys *interner
	sums []*pairTable // by group: cluster, combination
}

func newApartCommon(s *State, key, unit int) *apartCommon {
	c := &apartCommon{keys: newInterner(s.lay.design.Keys[key].Kind)}
	for i := range s.lay.groups {
		c.sums = append(c.sums, newPairTable(len(s.lay.groups[i].parts), unit))
	}
	return c
}

// apartScores is one worker's part of it.
type apartScores struct {
	common  *apartCommon
	keys    *interner
	ids     []int32
	number  []int32 // of clusters as this worker numbers them
	buffers []*pairBuffer
	vals    []float64
}

func newApartScores(c *apartCommon) *apartScores {
	a := &apartScores{common: c, keys: newInterner(c.keys.kind), ids: make([]int32, stream.BatchRows)}
	for _, t := range c.sums {
		a.buffers = append(a.buffers, &pairBuffer{t: t})
	}
	return a
}

// add takes in the scores of a block.
func (a *apartScores) add(w *secondWorker, keys *stream.Vector) {
	kid := a.ids[:w.block.Rows]
	a.keys.ids(keys, len(kid), kid)
	if n := len(a.number); n < a.keys.size() {
		a.common.mu.Lock()
		for ; n < a.keys.size(); n++ {
			a.number = append(a.number, a.common.keys.put(a.keys.key(int32(n))))
		}
		a.common.mu.Unlock()
	}
	for g := range w.lay.groups {
		rows, parts := w.cats.rows[g], w.lay.groups[g].parts
		for r, id := range kid {
			m := w.e[r]
			if w.root != nil {
				m *= w.block.Weight[r]
			}
			a.vals = a.vals[:0]
			for _, c := range parts {
				a.vals = append(a.vals, m*w.z[c*stride+r])
			}
			a.buffers[g].put(a.number[id], rows[r], a.vals...)
		}
	}
}

// flush ends a fold and returns the bytes of the common tables, and of the keys.
func (a *apartScores) flush() int64 {
	a.common.mu.Lock()
	held := a.common.keys.memory()
	a.common.mu.Unlock()
	held += a.keys.memory()
	for _, b := range a.buffers {
		b.flush()
		held += b.t.memory()
	}
	return held
}

// join puts all clusters, with their scores by group, into sc.
func (c *apartCommon) join(s *State, sc *Scores) (over bool, unit int, err error) {
	sorted := newInterner(c.keys.kind)
	all := &apartClusters{}
	err = sc.Each(func(k *Cluster) error {
		all.keys = append(all.keys, sorted.key(sorted.put(k.Key)))
		all.rest = append(all.rest, k.S...)
		return nil
	})
	if err != nil {
		return false, 0, err
	}
	place := make([]int32, c.keys.size())
	for i := range place {
		place[i] = sorted.find(c.keys.key(int32(i)))
	}
	unit = -1074
	for g, t := range c.sums {
		o, _ := t.fits(0, s.Rows)
		over, unit = over || o, max(unit, t.betterUnit(s.Rows))
		q := len(s.lay.groups[g].parts)
		gs := groupScores{start: make([]int, len(all.keys)+1)}
		t.each(func(a, _ int32, _ []float64) { gs.start[place[a]+1]++ })
		for i := range all.keys {
			gs.start[i+1] += gs.start[i]
		}
		n := gs.start[len(all.keys)]
		gs.combo, gs.s = make([]int32, n), make([]float64, n*q)
		next := slices.Clone(gs.start)
		t.each(func(a, b int32, vals []float64) {
			at := next[place[a]]
			next[place[a]]++
			gs.combo[at] = b
			copy(gs.s[at*q:], vals)
		})
		for i := range all.keys {
			sortEntries(gs.combo[gs.start[i]:gs.start[i+1]], gs.s[gs.start[i]*q:gs.start[i+1]*q], q)
		}
		all.groups = append(all.groups, gs)
	}
	sc.apart = all
	return over, unit, nil
}

// sortEntries sorts combos, and their q numbers with them.
func sortEntries(combo []int32, vals []float64, q int) {
	order := same(len(combo))
	slices.SortFunc(order, func(a, b int32) int { return int(combo[a] - combo[b]) })
	c, v := slices.Clone(combo), slices.Clone(vals)
	for i, o := range order {
		combo[i] = c[o]
		copy(vals[i*q:(i+1)*q], v[int(o)*q:(int(o)+1)*q])
	}
}

// ClusterMeat is the sum over clusters of the products of their scores, where
// there is a group apart.
type ClusterMeat struct {
	Rest   []float64 // (P+1) x (P+1), of the rest less what was eliminated
	Within []float64 // with each column of the group apart, rows of P+1
	Own    []float64 // of the columns of each combination, Parts x Parts
	Base   []float64 // of each column of the group apart with those of combination base
}

// ClusterMeat sums the products of scores s of clusters in the columns of the
// group apart, and x = (rest) - sum_j G_j's_j: what Eliminated.Reduce, Within and
// Blocks.D are for sums over rows. base is the combination whose products with all
// others are wanted, or -1. Time O(C P^2 + E P) for C clusters and E pairs of a
// cluster and a level.
func (s *State) ClusterMeat(sc *Scores, e *Eliminated, base int) *ClusterMeat {
	n, q := e.n, e.Parts
	m := &ClusterMeat{Within: make([]float64, len(e.G)), Own: make([]float64, len(e.Inv)), Base: make([]float64, len(e.Inv))}
	const chunk = 256
	const wide = chunk + 8
	packed := make([]float64, n*(n+1)/2)
	x, turned := make([]float64, chunk*n), make([]float64, wide*n)
	all := sc.apart
	own := &all.groups[s.Apart.Group]
	baseAt := make([]float64, q)
	for at := 0; at < len(all.keys); at += chunk {
		rows := min(chunk, len(all.keys)-at)
		clear(x)
		for r := range rows {
			c, row := at+r, x[r*n:(r+1)*n]
			copy(row, all.rest[c*sc.P:(c+1)*sc.P])
			for g := range s.Groups {
				if g == s.Apart.Group {
					continue
				}
				gs, parts := &all.groups[g], len(s.Groups[g].Parts)
				for i := gs.start[c]; i < gs.start[c+1]; i++ {
					copy(row[s.Groups[g].first+int(gs.combo[i])*parts:], gs.s[i*parts:(i+1)*parts])
				}
			}
			for i := own.start[c]; i < own.start[c+1]; i++ {
				for k, t := range own.s[i*q : (i+1)*q] {
					if t != 0 {
						g := (int(own.combo[i])*q + k) * n
						kernel.Axpy(-t, e.G[g:g+n], row)
					}
				}
			}
			clear(baseAt)
			if i, ok := slices.BinarySearch(own.combo[own.start[c]:own.start[c+1]], int32(base)); ok {
				copy(baseAt, own.s[(own.start[c]+i)*q:])
			}
			for i := own.start[c]; i < own.start[c+1]; i++ {
				j := int(own.combo[i])
				for k, t := range own.s[i*q : (i+1)*q] {
					if t == 0 {
						continue
					}
					kernel.Axpy(t, row, m.Within[(j*q+k)*n:(j*q+k+1)*n])
					for l := range q {
						m.Own[(j*q+k)*q+l] += t * own.s[i*q+l]
						m.Base[(j*q+k)*q+l] += t * baseAt[l]
					}
				}
			}
		}
		columns(turned, x, n, rows, wide)
		kernel.Gram(packed, turned, wide, rows, n)
	}
	m.Rest = unpack(packed, n)
	return m
}
