package accum

import (
	"context"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

func big300(x float64) *big.Float { return new(big.Float).SetPrec(300).SetFloat64(x) }

func bigWide(x Wide) *big.Float { return new(big.Float).SetPrec(300).Add(big300(x.Hi), big300(x.Lo)) }

// offBy is |got/want - 1|, or |got| where want is 0.
func offBy(got Wide, want *big.Float) float64 {
	d := new(big.Float).SetPrec(300).Sub(bigWide(got), want)
	if want.Sign() != 0 {
		d.Quo(d, want)
	}
	f, _ := d.Float64()
	return math.Abs(f)
}

// Every operation against math/big, sums also where they cancel.
func TestWide(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	number := func() Wide {
		h := math.Ldexp(r.NormFloat64(), r.IntN(60)-30)
		return Wide{h, 0}.Add(Widen(h * 0x1p-54 * r.NormFloat64()))
	}
	op := func(f func(z, x, y *big.Float) *big.Float, a, b Wide) *big.Float {
		return f(new(big.Float).SetPrec(300), bigWide(a), bigWide(b))
	}
	for range 20_000 {
		a, b := number(), number()
		if r.IntN(3) == 0 { // most of it cancels
			b = a.Neg().Add(Widen(a.Hi * math.Ldexp(r.NormFloat64(), -r.IntN(100))))
		}
		for _, c := range []struct {
			name string
			got  Wide
			want *big.Float
		}{
			{"+", a.Add(b), op((*big.Float).Add, a, b)},
			{"-", a.Sub(b), op((*big.Float).Sub, a, b)},
			{"*", a.Mul(b), op((*big.Float).Mul, a, b)},
			{"* float64", a.Times(b.Hi), op((*big.Float).Mul, a, Widen(b.Hi))},
			{"/", a.Div(b), op((*big.Float).Quo, a, b)},
		} {
			if off := offBy(c.got, c.want); !(off < 0x1p-100) {
				t.Fatalf("%v %s %v = %v, off by %.2g", a, c.name, b, c.got, off)
			}
			if c.got.Hi != c.got.Hi+c.got.Lo {
				t.Fatalf("%v %s %v = %v: Hi is not the rounded sum", a, c.name, b, c.got)
			}
		}
		if a.Hi > 0 {
			if off := offBy(a.Sqrt(), new(big.Float).SetPrec(300).Sqrt(bigWide(a))); !(off < 0x1p-100) {
				t.Fatalf("root of %v, off by %.2g", a, off)
			}
		}
	}
	if (Wide{}).Sqrt() != (Wide{}) || !math.IsNaN(Widen(-1).Sqrt().Hi) {
		t.Error("roots of 0 and -1")
	}
}

// The sums of an accumulator come out with both parts, whatever came first.
func TestSuperSumWide(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for range 200 {
		var a, b superSum
		want := new(big.Float).SetPrec(3000)
		var xs []float64
		for range 50 {
			xs = append(xs, math.Ldexp(r.NormFloat64(), r.IntN(200)-100))
		}
		for i, x := range xs {
			a.add(x)
			b.add(xs[len(xs)-1-i])
			want.Add(want, new(big.Float).SetPrec(3000).SetFloat64(x))
		}
		got := a.wide()
		if off := offBy(got, want); !(off < 0x1p-105) || got != b.wide() {
			t.Fatalf("%v and %v, off by %.2g", got, b.wide(), off)
		}
	}
	var s superSum
	s.add(math.Inf(1))
	if w := s.wide(); !math.IsInf(w.Hi, 1) || w.Lo != 0 {
		t.Errorf("infinity is %v", w)
	}
}

// Extended rows and their sums against math/big in the state's frame: shift, scale,
// whitening and provisional fit are maps with exactly these coefficients, also where
// the frame changed on the way.
func TestExtendedSums(t *testing.T) {
	tb := randomTable(1500, 5, func(i int, row []float64) {
		row[1] = 20 + 0.01*row[1]
		row[2] = row[1] + 1e-7*row[2]
		row[0] += 1e3 * row[1]
	})
	for _, kind := range []stream.WeightKind{stream.NoWeight, stream.Precision} {
		spec := stream.Spec{Outcome: "y/3", Terms: []string{"x1", "x2", "x1*x2"}, WeightKind: kind}
		if kind != stream.NoWeight {
			spec.Weight = "w"
		}
		for _, seek := range []bool{true, false} {
			src := tb.source(600)
			if !seek {
				src = unsampled{src}
			}
			d := design(t, src, spec)
			s, err := First(context.Background(), src, d, Needs{}, Options{Workers: 2, Arithmetic: Extended})
			if err != nil {
				t.Fatal(err)
			}
			if !s.Extended || !seek != (len(s.epochs) > 1) {
				t.Fatalf("extended %v, %d epochs", s.Extended, len(s.epochs))
			}
			// z = (1, u, v) of every row.
			f, p := s.Frame, 3
			if !f.White {
				t.Fatal("the frame is not whitened")
			}
			n := p + 2
			want, size := make([]*big.Float, n*n), make([]float64, n*n)
			for i := range want {
				want[i] = big300(0)
			}
			num := func() *big.Float { return new(big.Float).SetPrec(300) }
			for r := range tb.rows {
				x1, x2 := big300(tb.cols[1].F64[r]), big300(tb.cols[2].F64[r])
				raw := []*big.Float{x1, x2, num().Mul(x1, x2)}
				z := []*big.Float{big300(1)}
				for j := range p {
					u := num()
					for i := 0; i <= j; i++ {
						c := num().Sub(raw[i], big300(f.Shift[i]))
						c.Mul(c, big300(f.Inv[i]))
						u.Add(u, c.Mul(c, big300(f.T[i*p+j])))
					}
					z = append(z, u)
				}
				v := num().Sub(num().Quo(big300(tb.cols[0].F64[r]), big300(3)), big300(f.YShift))
				v.Mul(v, big300(f.YInv))
				for j, h := range f.H {
					v.Sub(v, num().Mul(big300(h), z[1+j]))
				}
				z = append(z, v)
				for i := range z {
					for j := range z {
						q := num().Mul(z[i], z[j])
						if kind != stream.NoWeight {
							q.Mul(q, big300(tb.cols[3].F64[r]))
						}
						want[i*n+j].Add(want[i*n+j], q)
						a, _ := q.Float64()
						size[i*n+j] += math.Abs(a)
					}
				}
			}
			for i := range want {
				off, _ := num().Sub(bigWide(s.Wide[i]), want[i]).Float64()
				if !(math.Abs(off) <= 1e-22*size[i]) {
					t.Errorf("weights %d, seek %v: sum %d of products is off by %.1e of %.3g", kind, seek, i, off, size[i])
				}
			}
			// S has the same, rounded.
			if s.S[n*1+2] != s.Wide[n*1+2].Hi || s.S[n*n-1] != s.Wide[n*n-1].Hi {
				t.Error("S differs from Wide")
			}
		}
	}
}

// Auto decides by the digits that double arithmetic would leave: powers of a column
// far from zero, but not one that float64 squares exactly, nor a large offset, nor
// columns that are merely correlated.
func TestAutoChooses(t *testing.T) {
	tb := randomTable(6000, 6, func(i int, row []float64) {
		row[1] = 50 + row[1]
		row[2] = 1e9 + math.Round(row[2]*10)
		row[0] = row[1]/7 + row[2]/1e9 + math.Sin(row[1])
	})
	for _, c := range []struct {
		terms []string
		want  bool
	}{
		{[]string{"x1", "pow(x1, 2)", "pow(x1, 3)", "pow(x1, 4)"}, true},
		{[]string{"x1", "pow(x1, 2)"}, false},
		{[]string{"x2"}, false},
		{[]string{"x1", "x1 + 0.05*x2"}, false},
		{[]string{"key", "pow(key, 2)", "pow(key, 3)"}, false},
	} {
		for _, seek := range []bool{true, false} {
			src := tb.source(2000)
			if !seek {
				src = unsampled{src}
			}
			s, err := First(context.Background(), src, design(t, src, stream.Spec{Outcome: "y", Terms: c.terms}), Needs{}, Options{Workers: 2, Arithmetic: Auto})
			if err != nil {
				t.Fatal(err)
			}
			if s.Extended != c.want || (s.Wide != nil) != c.want {
				t.Errorf("%v, seek %v: extended %v at %.1f digits, condition %.2g", c.terms, seek, s.Extended, s.Frame.Digits, s.Frame.Cond)
			}
		}
	}
}
