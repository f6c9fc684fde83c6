package quaydata

import (
	"hash/fnv"
	"math"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

func mustNew(t testing.TB, c Config) *Data {
	t.Helper()
	d, err := New(c)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// image turns a batch into numbers that can be compared bit for bit.
const golden = 0xf6d94e9a87f75a05

func image(b *stream.Batch) [][]uint64 {
	rows := make([][]uint64, b.Rows)
	for i := range rows {
		r := []uint64{uint64(b.Marks[i])}
		for j := range b.Cols {
			v := &b.Cols[j]
			switch {
			case v.Null != nil && v.Null[i]:
				r = append(r, math.MaxUint64)
			case v.Kind == stream.Float64:
				r = append(r, math.Float64bits(v.F64[i]))
			case v.Kind == stream.Text:
				r = append(r, uint64(v.Code[i]))
			default:
				r = append(r, uint64(v.I64[i]))
			}
		}
		rows[i] = r
	}
	return rows
}

func TestAnyCutGivesTheSameRows(t *testing.T) {
	d := mustNew(t, Config{Rows: 5000, Quays: 7, Cranes: 31, Days: 9, Seed: 5})
	var b stream.Batch
	if got := d.Fill(&b, 0, 10_000); got != 5000 {
		t.Fatalf("Fill gave %d rows of 5000", got)
	}
	whole := image(&b)
	other := mustNew(t, Config{Rows: 5000, Quays: 7, Cranes: 31, Days: 9, Seed: 5})
	for _, n := range []int{1, 7, 512, 513, 4999} {
		var c stream.Batch
		at := 0
		for {
			got := other.Fill(&c, int64(at), n)
			if got == 0 {
				break
			}
			for i, r := range image(&c) {
				for j := range r {
					if r[j] != whole[at+i][j] {
						t.Fatalf("cut %d: row %d column %d: %x, whole %x", n, at+i, j-1, r[j], whole[at+i][j])
					}
				}
			}
			at += got
		}
		if at != 5000 {
			t.Fatalf("cut %d: %d rows", n, at)
		}
	}
	seed := mustNew(t, Config{Rows: 5000, Quays: 7, Cranes: 31, Days: 9, Seed: 6})
	seed.Fill(&b, 0, 5000)
	same := 0
	for i, r := range image(&b) {
		if r[ColMinutes+1] == whole[i][ColMinutes+1] {
			same++
		}
	}
	if same > 50 {
		t.Errorf("another seed gave %d of 5000 equal outcomes", same)
	}
}

// The figure guards the promise of equal bits on every machine and in later
// versions; it was written down when the generator was made.
func TestBitsStayTheSame(t *testing.T) {
	d := mustNew(t, Config{Rows: 100_000, Seed: 1})
	var b stream.Batch
	d.Fill(&b, 31_337, 1000)
	h := fnv.New64a()
	for _, r := range image(&b) {
		for _, w := range r {
			var buf [8]byte
			for k := range buf {
				buf[k] = byte(w >> (8 * k))
			}
			h.Write(buf[:])
		}
	}
	if got, want := h.Sum64(), uint64(golden); got != want {
		t.Errorf("hash of 1000 rows is %#x, was %#x", got, want)
	}
}

func TestRowsArePlausible(t *testing.T) {
	d := mustNew(t, Config{Rows: 200_000})
	var b stream.Batch
	n := float64(d.Fill(&b, 0, 200_000))
	cranes := map[int64]int64{}
	perQuay := map[int64]int{}
	var crewGone, tonnesGone, wet, night float64
	barges := map[int32]int{}
	last := int64(math.MinInt64)
	for i := range b.Rows {
		q, c := b.Cols[ColQuay].I64[i], b.Cols[ColCrane].I64[i]
		if was, ok := cranes[c]; ok && was != q {
			t.Fatalf("crane %d at quays %d and %d", c, was, q)
		}
		cranes[c] = q
		perQuay[q]++
		barges[b.Cols[ColBarge].Code[i]]++
		if p := b.Cols[ColPallets].I64[i]; p < 4 || p > 76 {
			t.Fatalf("row %d: %d pallets", i, p)
		}
		if b.Cols[ColCrew].Null[i] {
			crewGone++
		} else if v := b.Cols[ColCrew].I64[i]; v < 1 || v > 7 {
			t.Fatalf("row %d: crew of %d", i, v)
		}
		if v := b.Cols[ColTonnes].F64[i]; math.IsNaN(v) {
			tonnesGone++
		} else if v < 11 || v > 59 {
			t.Fatalf("row %d: %g tonnes", i, v)
		}
		if v := b.Cols[ColMinutes].F64[i]; !(v > 0 && v < 400) {
			t.Fatalf("row %d: %g minutes", i, v)
		}
		wet += float64(b.Cols[ColWet].I64[i])
		night += float64(b.Cols[ColNight].I64[i])
		ts := b.Cols[ColT].I64[i]
		if ts < last {
			t.Fatalf("row %d goes back in time", i)
		}
		last = ts
		h := time.Unix(0, ts).UTC().Hour()
		if (h < 6 || h >= 22) != (b.Cols[ColNight].I64[i] == 1) {
			t.Fatalf("row %d: hour %d, night %d", i, h, b.Cols[ColNight].I64[i])
		}
	}
	if first, end := b.Cols[ColT].I64[0], last; time.Unix(0, first).UTC().Format(time.DateOnly) != "2025-01-01" || time.Unix(0, end).UTC().Format(time.DateOnly) != "2025-12-31" {
		t.Errorf("times from %v to %v", time.Unix(0, first).UTC(), time.Unix(0, end).UTC())
	}
	if len(perQuay) != 60 || len(cranes) != 2000 {
		t.Errorf("%d quays and %d cranes", len(perQuay), len(cranes))
	}
	small, large := math.MaxInt, 0
	for _, v := range perQuay {
		small, large = min(small, v), max(large, v)
	}
	if r := float64(large) / float64(small); r < 5 || r > 10 {
		t.Errorf("largest quay has %.1f times the rows of the smallest, designed: about 7", r)
	}
	// Four standard errors of a share.
	share := func(what string, got, want float64) {
		if sd := math.Sqrt(want * (1 - want) / n); math.Abs(got/n-want) > 4*sd {
			t.Errorf("%s: share %.5f, designed %.5f", what, got/n, want)
		}
	}
	share("crew missing", crewGone, 0.003)
	share("tonnes missing", tonnesGone, 0.001)
	share("night", night, 0.2)
	for i, want := range []float64{0.2, 0.25, 0.25, 0.15, 0.15} {
		share(Barges()[i], float64(barges[int32(i)]), want)
	}
	if wet/n < 0.2 || wet/n > 0.4 {
		t.Errorf("wet: share %.3f, designed about 0.3", wet/n)
	}
}

var truth = Truth()

// errorOf is the outcome without its systematic part; ok is false where a cell
// is missing.
func errorOf(b *stream.Batch, i int) (e float64, ok bool) {
	tonnes := b.Cols[ColTonnes].F64[i]
	if b.Cols[ColCrew].Null[i] || math.IsNaN(tonnes) {
		return 0, false
	}
	return b.Cols[ColMinutes].F64[i] - truth["constant"] - truth["barge = "+Barges()[b.Cols[ColBarge].Code[i]]] - truth["tonnes"]*tonnes -
		truth["pallets"]*float64(b.Cols[ColPallets].I64[i]) - truth["crew"]*float64(b.Cols[ColCrew].I64[i]) -
		truth["wet"]*float64(b.Cols[ColWet].I64[i]) - truth["night"]*float64(b.Cols[ColNight].I64[i]), true
}

type sums struct{ n, s, ss float64 }

func (a *sums) add(v float64)     { a.n++; a.s += v; a.ss += v * v }
func (a *sums) mean() float64     { return a.s / a.n }
func (a *sums) variance() float64 { return (a.ss - a.s*a.s/a.n) / (a.n - 1) }

// between estimates the variance of group effects by one-way analysis of
// variance: (MSB - MSW) / n0 (Searle, Casella and McCulloch, Variance
// Components, 1992, section 3.6).
func between(groups map[int64]*sums) (effect, within float64) {
	var n, s, ss, ssb, n2 float64
	for _, g := range groups {
		n += g.n
		s += g.s
		ss += g.ss
		ssb += g.s * g.s / g.n
		n2 += g.n * g.n
	}
	k := float64(len(groups))
	within = (ss - ssb) / (n - k)
	return ((ssb-s*s/n)/(k-1) - within) / ((n - n2/n) / (k - 1)), within
}

func TestErrorsHaveTheDesignedShape(t *testing.T) {
	rows := int64(1_000_000)
	if testing.Short() {
		rows = 300_000
	}
	// Few quays by day leave every group large; many quays make their variance
	// estimable (relative error of a variance from g groups: sqrt(2/g)).
	d := mustNew(t, Config{Rows: rows, Quays: 300, Cranes: 3000, Days: 30, Seed: 3})
	byQuay, byCrane, byDay := map[int64]*sums{}, map[int64]*sums{}, map[int64]*sums{}
	bySize := map[int64]*sums{}
	effect := map[int64]float64{}
	for _, c := range d.crane {
		effect[c.id] = c.effect
	}
	first := d.start / (86400 * 1e9)
	put := func(m map[int64]*sums, k int64, v float64) {
		g := m[k]
		if g == nil {
			g = &sums{}
			m[k] = g
		}
		g.add(v)
	}
	var b stream.Batch
	for at := int64(0); ; {
		n := d.Fill(&b, at, 65_536)
		if n == 0 {
			break
		}
		at += int64(n)
		for i := range n {
			e, ok := errorOf(&b, i)
			if !ok {
				continue
			}
			q, c := b.Cols[ColQuay].I64[i], b.Cols[ColCrane].I64[i]
			day := b.Cols[ColT].I64[i] / (86400 * 1e9)
			put(byQuay, q, e)
			put(byCrane, c, e-d.quay[q-1].effect)
			e -= d.quay[q-1].effect + effect[c]
			put(byDay, q<<32|day, e)
			p := b.Cols[ColPallets].I64[i]
			put(bySize, p/8, (e-d.day[(q-1)*30+day-first].effect)/(sdRow+sdRowPallet*float64(p)))
		}
	}
	check := func(what string, got, want, rel float64) {
		t.Logf("%s: %.4g, designed %.4g", what, got, want)
		if math.Abs(got/want-1) > rel {
			t.Errorf("%s: %.4g, designed %.4g", what, got, want)
		}
	}
	vq, _ := between(byQuay)
	check("variance between quays", vq, sdQuay*sdQuay, 4*math.Sqrt(2.0/300))
	vc, _ := between(byCrane)
	check("variance between cranes", vc, sdCrane*sdCrane, 4*math.Sqrt(2.0/3000))
	vd, within := between(byDay)
	check("variance between days of a quay", vd, sdDay*sdDay, 0.1)
	t.Logf("intraclass correlation of a quay: %.3f", vq/(vq+vd+within))
	for k := int64(1); k < 9; k++ {
		g := bySize[k]
		check("spread of the row's error in units of 1.5 + 0.15 pallets", math.Sqrt(g.variance()), 1, 4*math.Sqrt(0.5/g.n))
		if se := 1 / math.Sqrt(g.n); math.Abs(g.mean()) > 4*se {
			t.Errorf("mean error from %d pallets: %.4f, standard error %.4f", 8*k, g.mean(), se)
		}
	}
}

func TestWhatVariesBetweenWhom(t *testing.T) {
	d := mustNew(t, Config{Rows: 300_000, Days: 60, Seed: 2})
	var b stream.Batch
	n := d.Fill(&b, 0, 300_000)
	share := func(key func(i int) int64, val func(i int) float64) float64 {
		m := map[int64]*sums{}
		var all sums
		for i := range n {
			if b.Cols[ColCrew].Null[i] || math.IsNaN(b.Cols[ColTonnes].F64[i]) {
				continue
			}
			g := m[key(i)]
			if g == nil {
				g = &sums{}
				m[key(i)] = g
			}
			g.add(val(i))
			all.add(val(i))
		}
		_, within := between(m)
		return 1 - within/all.variance()
	}
	quay := func(i int) int64 { return b.Cols[ColQuay].I64[i] }
	crane := func(i int) int64 { return b.Cols[ColCrane].I64[i] }
	quayDay := func(i int) int64 { return quay(i)<<32 | b.Cols[ColT].I64[i]/(86400*1e9) }
	whole := func(c int) func(int) float64 { return func(i int) float64 { return float64(b.Cols[c].I64[i]) } }
	for _, c := range []struct {
		what     string
		got      float64
		low, upp float64
	}{
		{"crew between quays", share(quay, whole(ColCrew)), 0.85, 1},
		{"wet between days of a quay", share(quayDay, whole(ColWet)), 1 - 1e-9, 1 + 1e-9},
		{"tonnes between cranes", share(crane, func(i int) float64 { return b.Cols[ColTonnes].F64[i] }), 0.8, 0.95},
		{"pallets between cranes", share(crane, whole(ColPallets)), -0.01, 0.02},
		{"night between quays", share(quay, whole(ColNight)), -0.01, 0.01},
	} {
		t.Logf("%s: %.4f", c.what, c.got)
		if c.got < c.low || c.got > c.upp {
			t.Errorf("%s: %.4f, designed %.2f to %.2f", c.what, c.got, c.low, c.upp)
		}
	}
}

// The least that minutes can be under the bounds of the shocks, for each class.
func TestMinutesCannotBeNegative(t *testing.T) {
	for class, name := range Barges() {
		for p := 4.0; p <= 4+bargeRoom[class]; p++ {
			low := trueConstant + truePallets*p + trueTonnes*11 + trueCrew*7 + trueBarge[class] -
				3*(sdQuay+sdDay+sdCrane+sdRow+sdRowPallet*p)
			if low <= 0 {
				t.Errorf("%s with %g pallets can take %.1f minutes", name, p, low)
			}
		}
	}
}

func TestBadConfigsAreRefused(t *testing.T) {
	for _, c := range []Config{{Rows: -1}, {Quays: -1}, {Quays: 10, Cranes: 9}, {Days: -3}, {Days: 100_000}} {
		if _, err := New(c); err == nil {
			t.Errorf("%+v was taken", c)
		}
	}
	d := mustNew(t, Config{Rows: 3, Quays: 1, Cranes: 1, Days: 1})
	var b stream.Batch
	if n := d.Fill(&b, 3, 512); n != 0 || b.Rows != 0 {
		t.Errorf("rows beyond the end: %d", n)
	}
}

func TestAliasDrawsAsWeighted(t *testing.T) {
	w := []float64{1, 2, 3.5, 0.25, 8}
	a := newAlias(w)
	s := at(1, 99, 0)
	count := make([]float64, len(w))
	const n = 200_000
	for range n {
		count[a.draw(&s)]++
	}
	for i, v := range w {
		p := v / 14.75
		if sd := math.Sqrt(p * (1 - p) / n); math.Abs(count[i]/n-p) > 4*sd {
			t.Errorf("weight %g: share %.4f, want %.4f", v, count[i]/n, p)
		}
	}
}

func BenchmarkFill(b *testing.B) {
	d := mustNew(b, Config{})
	var batch stream.Batch
	b.SetBytes(8 * numCols * stream.BatchRows)
	at := int64(0)
	for b.Loop() {
		d.Fill(&batch, at, stream.BatchRows)
		at = (at + stream.BatchRows) % 1_000_000
	}
}
