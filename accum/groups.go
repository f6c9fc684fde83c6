package accum

import (
	"cmp"
	"hash/maphash"
	"math"

	"github.com/tallrow/tallrow/stream"
)

// fewBytes bounds the private sums of a worker that still numbers its clusters:
// they should stay in the second-level cache.
const fewBytes = 8 << 20

// textSeed makes the hashes of texts. It differs from run to run, and so does where
// a key lies in memory; nothing that is returned depends on either.
var textSeed = maphash.MakeSeed()

func textHash(s string) uint64 { return maphash.String(textSeed, s) }

// groups sums the rows of one worker by the keys of a clustering. Within a fold
// the rows of a key are added in row order in float64; at its end the partial sums
// are rounded to fixed point and added to the store, which all workers share.
//
// With many keys whatever is looked up by key in random order misses the caches, so
// the rows of a fold are kept, sorted by partition of the store at its end, and each
// partition is visited once with all its rows. A worker that has met few keys in a
// fold numbers them from then on and keeps their sums to itself, until they are
// many. Both ways give the same partial sums.
type groups struct {
	store *groupStore
	add   rowAdder
	width int // numbers kept of a row
	bases int // column numbers kept of a row

	in   *interner // while keys are numbered
	few  *keyTable
	ids  []int32
	many bool // numbering was given up

	// The rows of the fold, or with few keys of the block.
	rows []float64
	base []int32
	n    int

	// Runs of rows with one key.
	key   []uint64
	text  []string
	start []int32

	dict   *stream.Dict
	hashes []uint64

	order []int32
	table []int32
	place []int32
	batch groupBatch
	seen  partials
	first int // partition to start with, so that workers do not queue
}

// rowAdder adds rows, each of len(rows)/n numbers and len(base)/n column numbers,
// one after the other to the partial sums of their key.
type rowAdder func(part, rows []float64, base []int32, n int)

func newGroups(store *groupStore, width, bases int, add rowAdder) *groups {
	g := &groups{store: store, add: add, width: width, bases: bases}
	g.first = store.pool.turn()
	return g
}

// fewKeys is the number of keys up to which a worker numbers them.
func (g *groups) fewKeys() int {
	return cmp.Or(g.store.pool.few, max(16, fewBytes/(24*g.store.width)))
}

// room returns where n more rows are to be put.
func (g *groups) room(n int) (rows []float64, base []int32) {
	if g.few != nil {
		g.n = 0
	}
	const most = foldBatches * stream.BatchRows
	g.rows = grown(g.rows, g.n*g.width, n*g.width, most*g.width)
	g.base = grown(g.base, g.n*g.bases, n*g.bases, most*g.bases)
	return g.rows[g.n*g.width:], g.base[g.n*g.bases:]
}

// grown returns s with room for n elements after the first held; most is what there
// will be.
func grown[T any](s []T, held, n, most int) []T {
	if held+n > cap(s) {
		t := make([]T, held+n, max(held+n, min(2*(held+n), most)))
		copy(t, s[:held])
		return t
	}
	return s[:held+n]
}

// take takes the rows that were put, with their keys.
func (g *groups) take(v *stream.Vector, n int) {
	w, b := g.width, g.bases
	if g.few != nil {
		g.in.ids(v, n, g.ids)
		for r := 0; r < n; {
			id, from := g.ids[r], r
			for r++; r < n && g.ids[r] == id; r++ {
			}
			part := g.few.at(id)
			g.few.rows[id] += int64(r - from)
			g.add(part, g.rows[from*w:r*w], g.base[from*b:r*b], r-from)
		}
		return
	}
	switch v.Kind {
	case stream.Text:
		if g.dict != v.Dict {
			g.dict, g.hashes = v.Dict, g.hashes[:0]
		}
		for i := len(g.hashes); i < len(v.Dict.Values); i++ {
			g.hashes = append(g.hashes, textHash(v.Dict.Values[i]))
		}
		for r, c := range v.Code[:n] {
			k, s := g.hashes[c], v.Dict.Values[c]
			if last := len(g.key) - 1; last < 0 || g.key[last] != k || g.text[last] != s {
				g.key = append(g.key, k)
				g.text = append(g.text, s)
				g.start = append(g.start, int32(g.n+r))
			}
		}
	case stream.Float64:
		for r, x := range v.F64[:n] {
			g.see(math.Float64bits(x), r)
		}
	default:
		for r, x := range v.I64[:n] {
			g.see(uint64(x), r)
		}
	}
	g.n += n
}

func (g *groups) see(k uint64, r int) {
	if last := len(g.key) - 1; last < 0 || g.key[last] != k {
		g.key = append(g.key, k)
		g.start = append(g.start, int32(g.n+r))
	}
}

// keys is a lower bound of the number of keys that all workers have seen.
func (g *groups) keys() int64 {
	n := g.store.keys.Load()
	if g.in != nil {
		n = max(n, int64(g.in.size()))
	}
	return n
}

// fold ends a fold.
func (g *groups) fold() error {
	if g.few != nil {
		g.few.flush()
		if g.in.size() <= g.fewKeys() {
			return nil
		}
		g.n, g.many = 0, true
		return g.hand()
	}
	runs := len(g.key)
	if runs == 0 {
		return nil
	}
	g.start = append(g.start, int32(g.n))
	var at [groupParts + 1]int32
	for _, k := range g.key {
		at[partOf(k)+1]++
	}
	for p := range groupParts {
		at[p+1] += at[p]
	}
	g.order = grown(g.order, 0, runs, runs)
	next := at
	for i, k := range g.key {
		p := partOf(k)
		g.order[next[p]] = int32(i)
		next[p]++
	}
	keys := 0
	for i := range groupParts {
		p := (g.first + i) % groupParts
		if at[p] == at[p+1] {
			continue
		}
		g.gather(g.order[at[p]:at[p+1]])
		keys += len(g.batch.key)
		if err := g.store.add(p, &g.batch); err != nil {
			return err
		}
	}
	g.key, g.start, g.n = g.key[:0], g.start[:0], 0
	clear(g.text)
	g.text = g.text[:0]
	if !g.many && keys <= g.fewKeys() {
		g.in = newInterner(g.store.kind)
		g.few = newKeyTable(g.store.width, g.store.unit)
		g.few.owners = g.store.owners
		g.ids = make([]int32, stream.BatchRows)
	}
	return nil
}

// gather fills the batch with the partial sums of runs, which belong to one
// partition and are in row order.
func (g *groups) gather(runs []int32) {
	b, w := &g.batch, g.store.width
	b.reset()
	size := 4
	for size < 2*len(runs) {
		size *= 2
	}
	g.table = grown(g.table, 0, size, size)
	clear(g.table)
	// First the places of all runs, then their rows: those lie far apart and are
	// waited for together, not in turn.
	g.place = grown(g.place, 0, len(runs), len(runs))
	for j, i := range runs {
		k := g.key[i]
		h := hashInt(int64(k)) >> 24 & uint64(size-1)
		var d int
		for {
			d = int(g.table[h])
			if d == 0 || b.key[d-1] == k && (!g.store.text || b.text[d-1] == g.text[i]) {
				break
			}
			h = (h + 1) & uint64(size-1)
		}
		if d == 0 {
			b.key = append(b.key, k)
			if g.text != nil {
				b.text = append(b.text, g.text[i])
			}
			d = len(b.key)
			g.table[h] = int32(d)
		}
		g.place[j] = int32(d - 1)
	}
	b.rows = grown(b.rows, 0, len(b.key), 0)
	clear(b.rows)
	b.part = grown(b.part, 0, len(b.key)*w, 0)
	clear(b.part)
	for j, i := range runs {
		d := int(g.place[j])
		from, to := int(g.start[i]), int(g.start[i+1])
		b.rows[d] += int64(to - from)
		g.add(b.part[d*w:(d+1)*w], g.rows[from*g.width:to*g.width], g.base[from*g.bases:to*g.bases], to-from)
	}
	for d := range b.key {
		g.seen.see(b.part[d*w : (d+1)*w-g.store.owners])
	}
}

// hand gives the sums of numbered keys to the store.
func (g *groups) hand() error {
	var byPart [groupParts][]int32
	keys := make([]uint64, g.in.size())
	for id := range keys {
		if g.store.text {
			keys[id] = textHash(g.in.texts[id])
		} else {
			keys[id] = uint64(g.in.vals[id])
		}
		p := partOf(keys[id])
		byPart[p] = append(byPart[p], int32(id))
	}
	b := &g.batch
	for i := range groupParts {
		p := (g.first + i) % groupParts
		if len(byPart[p]) == 0 {
			continue
		}
		b.reset()
		for _, id := range byPart[p] {
			b.key = append(b.key, keys[id])
			if g.store.text {
				b.text = append(b.text, g.in.texts[id])
			}
			b.rows = append(b.rows, g.few.rows[id])
			b.fix = append(b.fix, g.few.fix(id)...)
		}
		if err := g.store.add(p, b); err != nil {
			return err
		}
	}
	b.reset()
	g.seen.join(&g.few.partials)
	g.in, g.few, g.ids = nil, nil, nil
	return nil
}

// finish gives everything to the store. Call it once, after the last fold, and not
// at the same time as finish of another worker.
func (g *groups) finish() error {
	if g.few != nil {
		if err := g.hand(); err != nil {
			return err
		}
	}
	g.store.seen.join(&g.seen)
	g.rows, g.base, g.batch = nil, nil, groupBatch{}
	return nil
}

// addSquares adds the packed products of all pairs of a row's numbers.
func addSquares(part, rows []float64, _ []int32, n int) {
	p := len(rows) / n
	for ; len(rows) > 0; rows = rows[p:] {
		z := rows[:p]
		k := 0
		for j, x := range z {
			dst := part[k : k+j+1]
			for i := range dst {
				dst[i] = math.FMA(z[i], x, dst[i])
			}
			k += j + 1
		}
	}
}

// addScaled adds a row's numbers but the first, times the first.
func addScaled(part, rows []float64, _ []int32, n int) {
	p := len(rows) / n
	for ; len(rows) > 0; rows = rows[p:] {
		m := rows[0]
		z := rows[1:p]
		part := part[:len(z)]
		for j, x := range z {
			part[j] = math.FMA(m, x, part[j])
		}
	}
}

// addPlaced is addScaled for rows of which only the first dense numbers have the
// same column in every row; those of each group of categories, parts of them, lie
// from the row's column number on.
func addPlaced(dense int, parts []int) rowAdder {
	return func(part, rows []float64, base []int32, n int) {
		p := len(rows) / n
		for ; len(rows) > 0; rows, base = rows[p:], base[len(parts):] {
			m := rows[0]
			z := rows[1:p]
			for j, x := range z[:dense] {
				part[j] = math.FMA(m, x, part[j])
			}
			z = z[dense:]
			for g, k := range parts {
				dst := part[base[g]:]
				for j, x := range z[:k] {
					dst[j] = math.FMA(m, x, dst[j])
				}
				z = z[k:]
			}
		}
	}
}

// addMoments adds scores and packed second moments over p columns: of a row's
// numbers the first multiplies the score, the second is the weight. Columns as in
// addPlaced.
func addMoments(p, dense int, parts []int) rowAdder {
	var at []int
	for j := range dense {
		at = append(at, j)
	}
	return func(part, rows []float64, base []int32, n int) {
		width := len(rows) / n
		for ; len(rows) > 0; rows, base = rows[width:], base[len(parts):] {
			m, w := rows[0], rows[1]
			z := rows[2:width]
			at = at[:dense]
			for g, k := range parts {
				for j := range k {
					at = append(at, int(base[g])+j)
				}
			}
			for i, a := range at {
				part[a] = math.FMA(m, z[i], part[a])
				x := w * z[i]
				for j, b := range at[:i+1] {
					lo, hi := min(a, b), max(a, b)
					q := p + hi*(hi+1)/2 + lo
					part[q] = math.FMA(x, z[j], part[q])
				}
			}
		}
	}
}

// transpose writes rows, each of ld numbers, of which cols are columns at and
// following.
func transpose(dst []float64, ld, at int, cols [][]float64) {
	if len(cols) == 0 {
		return
	}
	const tile = 64 // rows that stay in the first-level cache
	n := len(cols[0])
	for from := 0; from < n; from += tile {
		to := min(from+tile, n)
		for j, c := range cols {
			i := from*ld + at + j
			for _, x := range c[from:to] {
				dst[i] = x
				i += ld
			}
		}
	}
}
