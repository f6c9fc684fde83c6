package tail

import "math"

// T returns the two-sided probability p = P(|T| >= |t|) of Student's t with df
// degrees of freedom, and log10 of it, which stays valid where p underflows.
//
// Infinite t gives 0 and -Inf. NaN and df below 1e-9 (zero and negative ones too)
// give NaN. df above 1e100, +Inf included, means the normal distribution. See the
// package comment for accuracy.
func T(t, df float64) (p, log10p float64) {
	if !(df >= least) || math.IsNaN(t) {
		return math.NaN(), math.NaN()
	}
	t = math.Abs(t)
	if t == 0 {
		return 1, 0
	}
	r := studentTails(t, df)
	return r.p, r.logP / math.Ln10
}

func studentTails(t, df float64) sides {
	if df > most {
		df = huge
	}
	if t < 1e-100 {
		// t^2 would underflow; the density is flat here.
		q := t * 2 * centre(df)
		return sides{p: 1, logP: -q, q: q, logQ: math.Log(q), g: 2}
	}
	return tails(t*t, 2*math.Log(t), 1, df)
}

// centre returns the density at 0: gamma((df+1)/2)/(gamma(df/2) sqrt(pi df)).
func centre(df float64) float64 {
	// With n = a + 1/2: gamma(n)/gamma(a) = sqrt(a) (n/a)^a exp(D(n) - D(a) - 1/2).
	a := df / 2
	n := a + 0.5
	d := 0.5 / a
	return math.Exp(a*logExcess(d, n/a)+stirling(n)-stirling(a)) / math.Sqrt(2*math.Pi)
}

// TQuantile returns the t with P(|T| <= t) = level for Student's t with df degrees
// of freedom, to a relative error below 1e-12. For a level very close to 1 use
// TQuantileTail: the level itself carries its tail only to 1e-16 absolute.
//
// Level 0 gives 0, level 1 +Inf. A level outside [0, 1], NaN and df below 1e-9 give
// NaN; a t beyond float64 is +Inf. df above 1e100, +Inf included,
// means the normal distribution.
func TQuantile(level, df float64) float64 { return quantile(level, 1-level, df) }

// TQuantileTail returns the t with P(|T| >= t) = alpha, as TQuantile(1-alpha, df)
// but without the rounding of 1-alpha.
func TQuantileTail(alpha, df float64) float64 { return quantile(1-alpha, alpha, df) }

func quantile(level, alpha, df float64) float64 {
	switch {
	case !(df >= least) || !(level >= 0 && alpha >= 0):
		return math.NaN()
	case alpha == 0:
		return math.Inf(1)
	case level == 0:
		return 0
	}
	if df > most {
		df = huge
	}
	// Newton steps in log(t), in which the logarithm of either tail is concave.
	one := studentTails(1, df)
	if alpha > one.p {
		t := level / (2 * centre(df)) // from below
		for range 100 {
			r := studentTails(t, df)
			step := (math.Log(level) - r.logQ) * r.g / 2
			t *= math.Exp(step)
			if math.Abs(step) < 1e-9 {
				break
			}
		}
		return t
	}
	t := quantileGuess(alpha, df)
	for range 100 {
		r := studentTails(t, df)
		step := (r.logP - math.Log(alpha)) * r.g / 2
		t *= math.Exp(step)
		if math.Abs(step) < 1e-9 || math.IsInf(t, 1) {
			break
		}
	}
	return t
}

// quantileGuess is within a few percent for an alpha below P(|T| >= 1), at least 1
// and finite: a normal deviate z from its leading tail, then Wallace's (1959)
// z = (8 df+1)/(8 df+3) sqrt(df log(1+t^2/df)) turned round.
func quantileGuess(alpha, df float64) float64 {
	k := 2 * (math.Log(2/math.Pi)/2 - math.Log(alpha))
	z := 1.0
	for range 4 {
		z = math.Sqrt(math.Max(1, k-2*math.Log(z)))
	}
	z *= 1 + 2/(8*df+1)
	c := z * z / df
	logT := (math.Log(df) + c) / 2
	if c < 1 {
		logT = (math.Log(df) + math.Log(math.Expm1(c))) / 2
	}
	return math.Exp(math.Min(math.Max(logT, 0), 700))
}
