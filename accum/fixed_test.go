package accum

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

func (f fixed) big() *big.Int {
	z := new(big.Int).Lsh(big.NewInt(f.hi), 64)
	return z.Add(z, new(big.Int).SetUint64(f.lo))
}

// bigFixed is x/2^unit rounded to nearest, ties away, by big.Rat and big.Int.
func bigFixed(x float64, unit int) (*big.Int, bool) {
	r := new(big.Rat).SetFloat64(x)
	if r == nil {
		return nil, false
	}
	scale := new(big.Rat).SetInt(new(big.Int).Lsh(big.NewInt(1), uint(max(unit, -unit))))
	if unit > 0 {
		scale.Inv(scale)
	}
	r.Mul(r, scale)
	limit := new(big.Rat).SetInt(new(big.Int).Lsh(big.NewInt(1), 126))
	if new(big.Rat).Abs(r).Cmp(limit) >= 0 {
		return nil, false
	}
	half := big.NewRat(int64(r.Sign()), 2)
	r.Add(r, half)
	return new(big.Int).Quo(r.Num(), r.Denom()), true // Quo truncates
}

func TestToFixed(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	check := func(x float64, unit int) {
		t.Helper()
		got, ok := toFixed(x, unit)
		want, wantOK := bigFixed(x, unit)
		if ok != wantOK || ok && got.big().Cmp(want) != 0 || !ok && got != (fixed{}) {
			t.Fatalf("toFixed(%x, %d) = %v %v, math/big %v %v", x, unit, got.big(), ok, want, wantOK)
		}
		if neg, _ := toFixed(-x, unit); neg.add(got) != (fixed{}) {
			t.Fatalf("toFixed(%x, %d) is not odd in x", x, unit)
		}
	}
	for _, x := range []float64{0, 1, 0.5, 1.5, 2.5, 0.49999999999999994, 3, math.Pi, 0x1p125, 0x1p126, math.Nextafter(0x1p126, 0),
		0x1p-1022, math.SmallestNonzeroFloat64, math.MaxFloat64, math.Inf(1), math.Inf(-1), math.NaN()} {
		for _, unit := range []int{0, 1, -1, 2, -52, -60, -126, -1074, -1073, -1200, -1500, 900, 1024, 1100} {
			check(x, unit)
		}
	}
	for range 20000 {
		x := wild(rng)
		_, e := math.Frexp(x)
		check(x, e-rng.IntN(200)+10)
	}
}

func TestFixedFloat(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	for range 30000 {
		f := fixed{int64(rng.Uint64()), rng.Uint64()}
		switch rng.IntN(4) {
		case 0: // few bits set: ties
			f.hi &= int64(rng.Uint64() & rng.Uint64() & rng.Uint64())
			f.lo &= rng.Uint64() & rng.Uint64() & rng.Uint64()
		case 1:
			f.hi >>= rng.IntN(64)
		case 2:
			f = fixed{0, f.lo >> rng.IntN(64)}
		}
		unit := rng.IntN(2400) - 1300
		z := new(big.Float).SetPrec(200).SetInt(f.big())
		want, _ := z.SetMantExp(z, unit).Float64()
		if got := f.float(unit); got != want {
			t.Fatalf("%v at unit %d: %x, math/big %x", f.big(), unit, got, want)
		}
	}
	if got := (fixed{math.MinInt64, 0}).float(-127); got != -1 {
		t.Errorf("-2^127 at unit -127: %v", got)
	}
}

// TestFixedOrder: sums do not depend on order or grouping and are within half a
// unit for each value.
func TestFixedOrder(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	const n, unit = 5000, -90
	xs := make([]float64, n)
	for i := range xs {
		xs[i] = rng.NormFloat64() * math.Ldexp(1, rng.IntN(60)-40)
	}
	var first fixed
	for round := range 20 {
		parts := make([]fixed, 1+rng.IntN(30))
		for _, x := range xs {
			f, ok := toFixed(x, unit)
			if !ok {
				t.Fatalf("%g does not fit", x)
			}
			i := rng.IntN(len(parts))
			parts[i] = parts[i].add(f)
		}
		var sum fixed
		for _, i := range rng.Perm(len(parts)) {
			sum = sum.add(parts[i])
		}
		if round == 0 {
			first = sum
		}
		if sum != first {
			t.Fatalf("%v, first %v", sum, first)
		}
		rng.Shuffle(n, func(i, j int) { xs[i], xs[j] = xs[j], xs[i] })
	}
	if got, want := first.float(unit), exactSum(xs); math.Abs(got-want) > n*0x1p-91 {
		t.Errorf("%v, math/big %v", got, want)
	}
}

func TestAddFixed(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	const n, unit = 9, -70
	a, b, want := make([]fixed, n), make([]fixed, n), make([]fixed, n)
	for range 300 {
		xs := make([]float64, n)
		for i := range xs {
			xs[i] = rng.NormFloat64() * math.Ldexp(1, rng.IntN(150)-120)
			f, _ := toFixed(xs[i], unit)
			want[i] = want[i].add(f)
		}
		dst := a
		if rng.IntN(2) == 0 {
			dst = b
		}
		if !addFixed(dst, xs, unit) {
			t.Fatal("addFixed refused values that fit")
		}
	}
	mergeFixed(a, b)
	for i := range want {
		if a[i] != want[i] {
			t.Errorf("element %d: %v, want %v", i, a[i], want[i])
		}
	}
	for _, x := range []float64{0x1p56, -0x1p56, math.Inf(-1), math.NaN()} {
		if addFixed(make([]fixed, 3), []float64{1, x, 2}, unit) {
			t.Errorf("addFixed took %g", x)
		}
	}
	panicsOnLength(t, "addFixed", func() { addFixed(a, make([]float64, 3), unit) })
	panicsOnLength(t, "mergeFixed", func() { mergeFixed(a, b[:3]) })
}

func BenchmarkAddFixed(b *testing.B) {
	rng := rand.New(rand.NewPCG(5, 5))
	xs := make([]float64, 1000)
	for i := range xs {
		xs[i] = rng.NormFloat64()
	}
	dst := make([]fixed, len(xs))
	for b.Loop() {
		addFixed(dst, xs, -80)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(xs)), "ns/value")
}
