package accum

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// exactSum is the sum by big.Float with more bits than float64 has range, and
// one rounding at the end, to nearest even.
func exactSum(xs []float64) float64 {
	s := new(big.Float).SetPrec(2400)
	for _, x := range xs {
		s.Add(s, new(big.Float).SetFloat64(x))
	}
	v, _ := s.Float64()
	return v
}

// wild draws bit patterns of finite values: every exponent, subnormals too.
func wild(rng *rand.Rand) float64 {
	for {
		x := math.Float64frombits(rng.Uint64())
		if rng.IntN(8) == 0 {
			x = math.Float64frombits(rng.Uint64() &^ (0x7ff << 52))
		}
		if !math.IsNaN(x) && !math.IsInf(x, 0) {
			return x
		}
	}
}

// samples are lists that float64 sums get wrong.
func samples(rng *rand.Rand) map[string][]float64 {
	m := map[string][]float64{
		"empty":          {},
		"zero":           {0, math.Copysign(0, -1)},
		"one":            {1},
		"max":            {math.MaxFloat64},
		"half ulp down":  {1, 0x1p-53},
		"half ulp up":    {1 + 0x1p-52, 0x1p-53},
		"above half":     {1, 0x1p-53, math.SmallestNonzeroFloat64},
		"below half":     {1, 0x1p-53, -math.SmallestNonzeroFloat64},
		"negative half":  {-1, -0x1p-53, -math.SmallestNonzeroFloat64},
		"overflow":       {math.MaxFloat64, math.MaxFloat64},
		"overflow back":  {math.MaxFloat64, math.MaxFloat64, -math.MaxFloat64},
		"half above max": {math.MaxFloat64, 0x1p970},
		"just below it":  {math.MaxFloat64, 0x1p970, -math.SmallestNonzeroFloat64},
		"-overflow":      {-math.MaxFloat64, -0x1p970},
		"subnormal":      {3 * math.SmallestNonzeroFloat64, -math.SmallestNonzeroFloat64},
		"to normal":      {0x1p-1022 - math.SmallestNonzeroFloat64, math.SmallestNonzeroFloat64},
		"from normal":    {0x1p-1022, -math.SmallestNonzeroFloat64},
		"two magnitudes": {1e308, 1, -1e308},
	}
	var same, gone, narrow, all []float64
	for range 3000 {
		x := wild(rng)
		all = append(all, x)
		narrow = append(narrow, rng.NormFloat64()*math.Ldexp(1, rng.IntN(40)))
		gone = append(gone, x, -x)
	}
	gone = append(gone, 1e-300, math.Pi*1e-310)
	rng.Shuffle(len(gone), func(i, j int) { gone[i], gone[j] = gone[j], gone[i] })
	for range 5000 {
		same = append(same, math.MaxFloat64)
	}
	for range 4999 {
		same = append(same, -math.MaxFloat64)
	}
	m["all exponents"], m["cancels"], m["narrow"], m["carries"] = all, gone, narrow, same
	var tiny []float64
	for range 3000 {
		tiny = append(tiny, math.Float64frombits(rng.Uint64()&(1<<63|1<<54-1)))
	}
	m["around the smallest"] = tiny
	return m
}

func bitsOf(x float64) uint64 { return math.Float64bits(x) }

func TestSuperSum(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	for name, xs := range samples(rng) {
		want := exactSum(xs)
		if want == 0 {
			want = 0 // big.Float keeps -0; an exact zero here is +0
		}
		var one, all superSum
		for _, x := range xs {
			one.add(x)
		}
		all.addAll(xs)
		for _, s := range []*superSum{&one, &all} {
			if got := s.value(); bitsOf(got) != bitsOf(want) {
				t.Errorf("%s: %x, math/big %x", name, got, want)
			}
		}
		before := all
		all.value()
		if all != before {
			t.Errorf("%s: value changed the sum", name)
		}
	}
}

func TestSuperSumShort(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	for range 20000 {
		xs := make([]float64, 1+rng.IntN(5))
		center := rng.IntN(2046)
		for i := range xs {
			e := min(max(center+rng.IntN(130)-65, 0), 2046)
			// Few set bits make ties frequent.
			m := rng.Uint64() & rng.Uint64() & rng.Uint64() & rng.Uint64() & (1<<52 - 1)
			xs[i] = math.Float64frombits(uint64(rng.IntN(2))<<63 | uint64(e)<<52 | m)
		}
		var s superSum
		s.addAll(xs)
		if got, want := s.value(), exactSum(xs); got != want {
			t.Fatalf("%x: %x, math/big %x", xs, got, want)
		}
	}
}

// TestSuperSumOrder: permutations and merge trees give the same bits.
func TestSuperSumOrder(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	for name, xs := range samples(rng) {
		want := exactSum(xs)
		for range 20 {
			rng.Shuffle(len(xs), func(i, j int) { xs[i], xs[j] = xs[j], xs[i] })
			parts := make([]superSum, 1+rng.IntN(40))
			for _, x := range xs {
				parts[rng.IntN(len(parts))].add(x)
			}
			for len(parts) > 1 {
				i := rng.IntN(len(parts) - 1)
				last := parts[len(parts)-1]
				kept := last
				parts[i].merge(&last)
				if last != kept {
					t.Fatalf("%s: merge changed its argument", name)
				}
				parts = parts[:len(parts)-1]
			}
			if got := parts[0].value(); got != want || got == 0 && math.Signbit(got) {
				t.Fatalf("%s: %x, math/big %x", name, got, want)
			}
		}
	}
}

// TestSuperSumMergeLimit merges sums whose digits are as full as they may be.
func TestSuperSumMergeLimit(t *testing.T) {
	full := func(n int, x float64) *superSum {
		var s superSum
		for range n {
			s.add(x)
		}
		return &s
	}
	x := math.Nextafter(0x1p32, 0) // the largest shift within a digit
	for _, n := range []int{1, 1023, 2046, 2047, 2048, 4094} {
		for _, k := range []int{1, 1024, 2046, 2047, 2048} {
			s := full(n, x)
			count := n
			for range 5 {
				s.merge(full(k, x))
				count += k
			}
			s.merge(s)
			count *= 2
			p, _ := new(big.Float).SetPrec(200).Mul(big.NewFloat(x), big.NewFloat(float64(count))).Float64()
			if got := s.value(); got != p {
				t.Errorf("%d + 5 x %d: %x, want %x", n, k, got, p)
			}
		}
	}
}

func TestSuperSumSpecial(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	for _, c := range []struct {
		xs   []float64
		want float64
	}{
		{[]float64{1, inf, -math.MaxFloat64}, inf},
		{[]float64{-inf, math.MaxFloat64, math.MaxFloat64}, -inf},
		{[]float64{inf, inf}, inf},
		{[]float64{inf, 3, -inf}, nan},
		{[]float64{nan, 3, inf}, nan},
		{[]float64{5, nan}, nan},
	} {
		for at := range c.xs {
			var a, b superSum
			for i := range c.xs {
				x := c.xs[(i+at)%len(c.xs)]
				if i == 0 {
					a.add(x)
				} else {
					b.add(x)
				}
			}
			b.merge(&a)
			if got := b.value(); got != c.want && !(math.IsNaN(got) && math.IsNaN(c.want)) {
				t.Errorf("%v: %v, want %v", c.xs, got, c.want)
			}
		}
	}
}

func TestSuperVec(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	const n = 7
	a, b := make(superVec, n), make(superVec, n)
	columns := make([][]float64, n)
	for range 300 {
		xs := make([]float64, n)
		for i := range xs {
			xs[i] = rng.NormFloat64() * math.Ldexp(1, rng.IntN(200)-100)
			columns[i] = append(columns[i], xs[i])
		}
		if rng.IntN(2) == 0 {
			a.addVec(xs)
		} else {
			b.addVec(xs)
		}
	}
	a.merge(b)
	got := make([]float64, n)
	a.values(got)
	for i, xs := range columns {
		if want := exactSum(xs); got[i] != want {
			t.Errorf("element %d: %x, math/big %x", i, got[i], want)
		}
	}
	for name, f := range map[string]func(){
		"addVec": func() { a.addVec(got[:3]) }, "merge": func() { a.merge(b[:3]) }, "values": func() { a.values(got[:3]) },
	} {
		panicsOnLength(t, name, f)
	}
}

func panicsOnLength(t *testing.T, name string, f func()) {
	t.Helper()
	defer func() {
		if got := recover(); got != badVecLen {
			t.Errorf("%s: panic %v, want %q", name, got, badVecLen)
		}
	}()
	f()
}

func BenchmarkSuperSum(b *testing.B) {
	rng := rand.New(rand.NewPCG(5, 5))
	xs := make([]float64, 1000)
	for i := range xs {
		xs[i] = rng.NormFloat64()
	}
	per := func(b *testing.B, n int) {
		b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/value")
	}
	b.Run("one", func(b *testing.B) {
		var s superSum
		for b.Loop() {
			s.addAll(xs)
		}
		per(b, len(xs))
	})
	b.Run("vector", func(b *testing.B) {
		v := make(superVec, len(xs))
		for b.Loop() {
			v.addVec(xs)
		}
		per(b, len(xs))
	})
	b.Run("merge", func(b *testing.B) {
		v, o := make(superVec, len(xs)), make(superVec, len(xs))
		o.addVec(xs)
		for b.Loop() {
			v.merge(o)
		}
		per(b, len(xs))
	})
	b.Run("value", func(b *testing.B) {
		v := make(superVec, len(xs))
		v.addVec(xs)
		dst := make([]float64, len(xs))
		for b.Loop() {
			v.values(dst)
		}
		per(b, len(xs))
	})
}
