package accum

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// Polynomial terms are nearly collinear: the frame must whiten them, so that their
// moments are those of uncorrelated columns.
func TestFrameWhitens(t *testing.T) {
	const n, p = 600, 5
	rows := newFrameRows(p)
	rng := rand.New(rand.NewPCG(1, 1))
	for range n {
		x := 1000 + rng.Float64()
		rows.one = append(rows.one, 1)
		for j := range p {
			rows.x[j] = append(rows.x[j], math.Pow(x, float64(j+1)))
		}
		rows.y = append(rows.y, x+rng.NormFloat64())
	}
	f := buildFrame(rows, p, true)
	if !f.White || f.Cond < 1e3 {
		t.Fatalf("white %v, condition %g: polynomials at an offset are nearly collinear", f.White, f.Cond)
	}
	u := make([][]float64, p)
	for i := range n {
		for j := range p {
			var s float64
			for a := 0; a <= j; a++ {
				s += f.T[a*p+j] * (rows.x[a][i] - f.Shift[a]) * f.Inv[a]
			}
			u[j] = append(u[j], s)
		}
	}
	// The first two are resolved by doubles; higher powers are aliased here.
	for a := range 2 {
		for b := range 2 {
			want := 0.0
			if a == b {
				want = n
			}
			if got := dotp(u[a], u[b]); math.Abs(got-want) > 1e-3*n {
				t.Errorf("u%d'u%d = %v, want %v", a, b, got, want)
			}
		}
	}
}

func TestFrameShifts(t *testing.T) {
	rows := newFrameRows(3)
	for i := range 100 {
		rows.one = append(rows.one, 1)
		rows.x[0] = append(rows.x[0], 1e9+float64(i)) // offset
		rows.x[1] = append(rows.x[1], 7)              // constant
		rows.x[2] = append(rows.x[2], 0)
		rows.y = append(rows.y, float64(i%3))
	}
	f := buildFrame(rows, 3, true)
	if f.Shift[0] != math.Trunc(f.Shift[0]) || math.Abs(f.Shift[0]-1e9-49.5) > 4 {
		t.Errorf("shift %v, want a whole number near 1e9+49.5", f.Shift[0])
	}
	if f.Shift[1] != 7 {
		t.Errorf("shift of a constant %v, want 7", f.Shift[1])
	}
	if f := buildFrame(rows, 3, false); f.Shift[0] != 0 || f.YShift != 0 {
		t.Errorf("shifts %v, %v without a constant, want 0", f.Shift[0], f.YShift)
	}
	for _, s := range []float64{f.Inv[0], f.YInv} {
		if m, _ := math.Frexp(s); m != 0.5 {
			t.Errorf("scale %v is no power of two", s)
		}
	}
}

// One row far out must not set the scale.
func TestFrameLeavesOutHeavyRows(t *testing.T) {
	rows := newFrameRows(1)
	for i := range 50 {
		rows.one = append(rows.one, 1)
		rows.x[0] = append(rows.x[0], float64(i%5))
		rows.y = append(rows.y, float64(i%7))
	}
	rows.x[0][20] = 1e6
	f := buildFrame(rows, 1, true)
	if f.Shift[0] > 4 || f.Inv[0] < 0.25 {
		t.Errorf("shift %v, scale %v: the row at 1e6 set them", f.Shift[0], f.Inv[0])
	}
}

// firstBlock loads the first block of a source in a frame.
func firstBlock(t *testing.T, src stream.Source, l *layout, f *Frame) *loader {
	t.Helper()
	ld := newLoader(l, f)
	seg, err := src.Sample(t.Context(), l.design.Uses(), 0)
	if err != nil {
		t.Fatal(err)
	}
	defer seg.Close()
	if err := seg.Read(&ld.batch); err != nil {
		t.Fatal(err)
	}
	if err := ld.eval.Eval(&ld.batch, seg.Locate, &ld.block); err != nil {
		t.Fatal(err)
	}
	ld.load()
	return ld
}

// A map between two frames maps every row.
func TestChangeOfFrame(t *testing.T) {
	tab := randomTable(800, 11, nil)
	src := tab.source(800)
	d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1", "x2", "pow(x2, 2)", "each(cat)", "each(cat) * x2"}})
	l := newLayout(d)
	rng := rand.New(rand.NewPCG(5, 5))
	frame := func(white bool) *Frame {
		f := trivialFrame(l)
		for j := range f.Shift {
			f.Shift[j] = rng.NormFloat64()
			f.Inv[j] = math.Ldexp(1, rng.IntN(5)-2)
		}
		f.YShift, f.YInv = rng.NormFloat64(), 4
		for j := range f.H {
			f.H[j] = rng.NormFloat64()
		}
		if f.White = white; white {
			f.T = make([]float64, l.p0*l.p0)
			for i := range l.p0 {
				for j := i; j < l.p0; j++ {
					f.T[i*l.p0+j] = rng.NormFloat64() + 2
				}
			}
		}
		return f
	}
	for _, w := range [][2]bool{{false, false}, {true, false}, {false, true}, {true, true}} {
		a, b := frame(w[0]), frame(w[1])
		j := denseMap(l, a, b)
		za, zb := firstBlock(t, src, l, a).z, firstBlock(t, src, l, b).z
		for r := range 512 {
			for i := range l.width {
				var got, scale float64
				for k := range l.width {
					got += j[i*l.width+k] * za[k*stride+r]
					scale += math.Abs(j[i*l.width+k] * za[k*stride+r])
				}
				if math.Abs(got-zb[i*stride+r]) > 1e-12*(scale+1) {
					t.Fatalf("white %v: row %d column %d: %v, want %v", w, r, i, got, zb[i*stride+r])
				}
			}
		}
	}
}

// Numbers of keys and combinations against Go's own maps.
func TestInterner(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 9))
	in := newInterner(stream.Int64)
	want := map[int64]int32{}
	dst := make([]int32, 512)
	for range 200 {
		v := stream.Vector{Kind: stream.Int64, I64: make([]int64, 512)}
		for i := range v.I64 {
			v.I64[i] = int64(rng.IntN(30000)) * (1 << 40)
			if rng.IntN(3) == 0 {
				v.I64[i] = math.MinInt64 + int64(rng.IntN(3))
			}
		}
		in.ids(&v, 512, dst)
		for i, x := range v.I64 {
			id, ok := want[x]
			if !ok {
				id = int32(len(want))
				want[x] = id
			}
			if dst[i] != id {
				t.Fatalf("id of %d is %d, want %d", x, dst[i], id)
			}
			if k := in.key(id); int64(k.Bits) != x || in.find(k) != id {
				t.Fatalf("key %d reads back as %d", x, int64(k.Bits))
			}
		}
	}
	if in.size() != len(want) {
		t.Errorf("%d keys, want %d", in.size(), len(want))
	}
	tu := newTuples(3)
	combos := map[[3]int32]int32{}
	for range 20000 {
		c := [3]int32{int32(rng.IntN(50)), int32(rng.IntN(40)), int32(rng.IntN(30))}
		id := []int32{0}
		tu.join([][]int32{c[:1], c[1:2], c[2:]}, id)
		if have, ok := combos[c]; ok && have != id[0] {
			t.Fatalf("%v is %d and %d", c, have, id[0])
		}
		combos[c] = id[0]
		var back [3]int32
		tu.split(id[0], back[:])
		if back != c {
			t.Fatalf("%v splits into %v", c, back)
		}
	}
	seen := map[int32]bool{}
	for _, id := range combos {
		if seen[id] {
			t.Fatal("two combinations share a number")
		}
		seen[id] = true
	}
}

// Keyed sums do not depend on how segments fall to workers, and leave nothing
// unnoticed when they overflow.
func TestKeyTable(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	type cell struct {
		id int32
		x  float64
	}
	var folds [][]cell
	for range 40 {
		var f []cell
		for range 100 {
			f = append(f, cell{int32(rng.IntN(20)), rng.NormFloat64() * math.Exp(10*rng.Float64())})
		}
		folds = append(folds, f)
	}
	same := make([]int32, 20)
	for i := range same {
		same[i] = int32(i)
	}
	sum := func(split int) string {
		ts := []*keyTable{newKeyTable(1, defaultUnit), newKeyTable(1, defaultUnit)}
		for i, f := range folds {
			tab := ts[0]
			if i%7 < split {
				tab = ts[1]
			}
			for _, c := range f {
				tab.at(c.id)[0] += c.x
			}
			tab.flush()
		}
		ts[0].mergeFrom(ts[1], same[:len(ts[1].rows)])
		out := ""
		for id := range int32(20) {
			out += fmt.Sprintln(ts[0].fix(id)[0])
		}
		if over, _ := ts[0].fits(1); over {
			t.Error("sums of about 1e4 overflow 2^56")
		}
		return out
	}
	for split := 1; split < 7; split++ {
		if sum(split) != sum(0) {
			t.Fatalf("split %d gives other sums", split)
		}
	}
	big := newKeyTable(1, defaultUnit)
	for range 5 {
		big.at(0)[0] = math.Ldexp(0.9, 55)
		big.flush()
	}
	if over, _ := big.fits(1); !over {
		t.Error("5 x 0.9 x 2^55 exceeds the range and was not noticed")
	}
	if u := big.betterUnit(); u <= defaultUnit || u > -60 {
		t.Errorf("unit %d for sums of 2^58", u)
	}
	if u := newKeyTable(1, defaultUnit).betterUnit(); u > -1000 {
		t.Errorf("a table that holds nothing wants unit %d", u)
	}
	small := newKeyTable(1, defaultUnit)
	small.at(0)[0] = 1e-15
	small.flush()
	if _, coarse := small.fits(1e-15); !coarse {
		t.Error("1e-15 has 6 digits above 2^-70 and was not noticed")
	}
}

func TestLoneTracker(t *testing.T) {
	x := [][]float64{{1, 0, 0, 2}, {0, 0, 3, 0}, {0, 3, 3, 0}, {5, 5, 5, 5}, {0, 2, 3, 0}}
	keys := func(k ...int64) *stream.Vector { return &stream.Vector{Kind: stream.Int64, I64: k} }
	a := newLoneTracker(5)
	a.add(keys(0, 1, 2, 0), x, 4)
	all := func(t *loneTracker) []bool {
		nonzero, zero := t.lone()
		for j, z := range zero {
			nonzero[j] = nonzero[j] || z
		}
		return nonzero
	}
	got := all(a)
	// Nonzero only in cluster 0; only in 2; zero only in 0 and 3 elsewhere; never
	// zero; zero only in 0, but a number like any other.
	want := []bool{true, true, true, false, false}
	for j := range want {
		if got[j] != want[j] {
			t.Errorf("term %d lone %v, want %v", j, got[j], want[j])
		}
	}
	if got, _ := a.lone(); !got[0] || got[2] {
		t.Errorf("nonzero in one cluster %v, want term 0 and not term 2", got)
	}
	b := newLoneTracker(5)
	b.add(keys(9), [][]float64{{1}, {1}, {3}, {1}, {2}}, 1)
	a.mergeFrom(b)
	if got := all(a); got[0] || got[1] || !got[2] || got[3] {
		t.Errorf("after the merge %v, want only term 2", got)
	}
	c := newLoneTracker(5)
	c.add(keys(4), [][]float64{{1}, {1}, {4}, {1}, {2}}, 1)
	a.mergeFrom(c)
	if got := all(a); got[2] {
		t.Error("term 2 is 3 and 4 outside its zero cells: no single cluster decides it")
	}
}

func TestSpread(t *testing.T) {
	want := []float64{0, 1, 0.5, 0.25, 0.75, 0.125, 0.625, 0.375, 0.875}
	for i, w := range want {
		if got := spread(i); got != w {
			t.Errorf("place %d is %v, want %v", i, got, w)
		}
	}
}

// In an ill-conditioned frame u must be the linear map of x to the last digits:
// against big.Float arithmetic of 200 bits.
func TestWhitenCarefully(t *testing.T) {
	tab := randomTable(512, 12, nil)
	src := tab.source(512)
	d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1", "x2", "x1 * x2"}})
	l := newLayout(d)
	f := trivialFrame(l)
	rng := rand.New(rand.NewPCG(6, 6))
	f.White, f.Cond = true, 1e9
	f.T = make([]float64, 9)
	for i := range 3 {
		f.Shift[i] = 0.1 * rng.Float64()
		for j := i; j < 3; j++ {
			f.T[i*3+j] = 1e9 * rng.NormFloat64()
		}
	}
	ld := firstBlock(t, src, l, f)
	for r := range 512 {
		for j := range 3 {
			sum := new(big.Float).SetPrec(200)
			for i := 0; i <= j; i++ {
				c := new(big.Float).SetPrec(200).Sub(big.NewFloat(ld.block.X[i][r]), big.NewFloat(f.Shift[i]))
				sum.Add(sum, c.Mul(c, big.NewFloat(f.T[i*3+j])))
			}
			want, _ := sum.Float64()
			if got := ld.z[(1+j)*stride+r]; math.Abs(got-want) > 1e-15*math.Abs(want)+1e-15 {
				t.Fatalf("row %d: u%d = %v, want %v", r, j, got, want)
			}
		}
	}
}
