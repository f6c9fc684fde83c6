package tail

import "math"

// F returns the probability p that a variable with the F distribution on df1 and
// df2 degrees of freedom is f or more, and log10 of it, which stays valid where p
// underflows.
//
// Negative f gives 1, +Inf gives 0 and -Inf. NaN, degrees of freedom below 1e-9
// (zero and negative ones too) and df1 above 1e100 give NaN. df2 above 1e100, +Inf
// included, means infinite: f df1 is then chi-squared. See the package comment for
// accuracy.
func F(f, df1, df2 float64) (p, log10p float64) {
	if !(df1 >= least) || !(df2 >= least) || df1 > most || math.IsNaN(f) {
		return math.NaN(), math.NaN()
	}
	if df2 > most {
		df2 = huge
	}
	if f <= 0 {
		return 1, 0
	}
	r := tails(f, math.Log(f), df1, df2)
	return r.p, r.logP / math.Ln10
}

// sides holds both tails of F and the logarithms of them, and g, the integral of
// the smaller tail: d log(tail)/d log(f) = 1/g in size.
type sides struct {
	p, logP float64 // of the upper tail
	q, logQ float64 // of the lower tail
	g       float64
}

// tails takes log(f) besides f because f may have overflowed.
func tails(f, logF, df1, df2 float64) sides {
	a, b := df2/2, df1/2
	if f > 1e150 {
		if df2 == huge { // exp(-b f) and lesser factors
			return sides{q: 1, logP: -b * f, g: 1 / f / b}
		}
		if logW := math.Log(df1) - math.Log(df2) + logF; logW > 300 {
			// x^a/(a B(a, b)) is all that is left of the series in x.
			n := a + b
			r := sides{g: 1 / a}
			r.logP = math.Min(a*(math.Log(n/a)-logW)+b*math.Log(n/b)+math.Log(scale(a, b)/a), 0)
			r.p = math.Exp(r.logP)
			r.q, r.logQ = 1-r.p, math.Log1p(-r.p)
			return r
		}
	}
	den := df2 + df1*f
	x, y := df2/den, df1*f/den
	slope := (f - 1) * x * b // a y - b x
	e, c := weight(f, df1, df2)
	var r sides
	if f >= 1 {
		r.g = integral(a+b, slope, x, y)
		r.p, r.logP = small(e, c*r.g)
		r.q, r.logQ = 1-r.p, math.Log1p(-r.p)
		return r
	}
	r.g = integral(a+b, -slope, y, x)
	r.q, r.logQ = small(e, c*r.g)
	r.p, r.logP = 1-r.q, math.Log1p(-r.q)
	return r
}

// small returns the probability c exp(e) and its logarithm.
func small(e, c float64) (v, logV float64) {
	logV = math.Min(e+math.Log(c), 0) // rounding may reach beyond 1
	if e > -600 {
		return math.Min(c*math.Exp(e), 1), logV
	}
	return math.Exp(logV), logV
}
