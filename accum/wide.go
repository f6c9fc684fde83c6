package accum

import "math"

// Wide is a number of about 106 bits as an unevaluated sum Hi + Lo, Hi the sum
// rounded to float64 (Dekker 1971). Its operations have a relative error of some
// 2^-103, sums also where they cancel. The zero value is 0. Operations near the
// ends of the range of float64 lose digits; what is not finite makes Lo NaN.
type Wide struct{ Hi, Lo float64 }

// Widen returns x as a Wide.
func Widen(x float64) Wide { return Wide{x, 0} }

// Float returns a rounded to float64.
func (a Wide) Float() float64 { return a.Hi }

// Neg returns -a.
func (a Wide) Neg() Wide { return Wide{-a.Hi, -a.Lo} }

// Add returns a + b.
func (a Wide) Add(b Wide) Wide {
	s, e := twoSum(a.Hi, b.Hi)
	t, f := twoSum(a.Lo, b.Lo)
	s, e = twoSum(s, e+t)
	s, e = twoSum(s, e+f)
	return Wide{s, e}
}

// Sub returns a - b.
func (a Wide) Sub(b Wide) Wide { return a.Add(b.Neg()) }

// Mul returns a b.
func (a Wide) Mul(b Wide) Wide {
	p := float64(a.Hi * b.Hi)
	e := math.FMA(a.Hi, b.Hi, -p)
	e = math.FMA(a.Hi, b.Lo, e)
	e = math.FMA(a.Lo, b.Hi, e)
	p, e = twoSum(p, e)
	return Wide{p, e}
}

// Times returns a x.
func (a Wide) Times(x float64) Wide {
	p := float64(a.Hi * x)
	e := math.FMA(a.Lo, x, math.FMA(a.Hi, x, -p))
	p, e = twoSum(p, e)
	return Wide{p, e}
}

// Div returns a / b.
func (a Wide) Div(b Wide) Wide {
	q := a.Hi / b.Hi
	rest := a.Sub(b.Times(q))
	p, e := twoSum(q, rest.Hi/b.Hi)
	return Wide{p, e}
}

// Sqrt returns the square root of a.
func (a Wide) Sqrt() Wide {
	if a.Hi <= 0 {
		return Wide{math.Sqrt(a.Hi), 0}
	}
	r := math.Sqrt(a.Hi)
	rest := math.FMA(-r, r, a.Hi) + a.Lo
	p, e := twoSum(r, rest/(2*r))
	return Wide{p, e}
}

// twoSum returns a + b and, exactly, what was rounded off (Knuth 1969).
func twoSum(a, b float64) (s, rest float64) {
	s = a + b
	t := s - a
	return s, (a - (s - t)) + (b - t)
}

// wide returns the sum to about 106 bits. Where value is not finite so is Hi, and
// Lo is 0.
func (s *superSum) wide() Wide {
	hi := s.value()
	if math.IsNaN(hi) || math.IsInf(hi, 0) {
		return Widen(hi)
	}
	rest := *s
	rest.add(-hi)
	return Wide{hi, rest.value()}
}

// wideSums joins sums of products: hi are the rounded sums, lo what they leave off.
func (v superVec) wides(hi, lo []float64) {
	if len(hi) != len(v) || len(lo) != len(v) {
		panic(badVecLen)
	}
	for i := range v {
		w := v[i].wide()
		hi[i], lo[i] = w.Hi, w.Lo
	}
}
