// Package tail has the tails of the t and F distributions, for any degrees of
// freedom up to 1e100 and infinity and however small the probability.
//
// # Method
//
// Both are the incomplete beta function I_x(a, b) with a = df2/2, b = df1/2 and
// x = df2/(df2 + df1 f); t is f = t^2 with df1 = 1. With v = log(df1 f/df2) as
// the variable of integration
//
//	I_x(a, b) = W G,   W = x^a y^b / B(a, b),   y = 1 - x,   n = a + b
//	G = integral from 0 to infinity of exp(-psi(s)) ds
//	psi(s) = (a y - b x) s + n K(s)
//	K(s) = log(1 + y (e^s - 1)) - y s
//
// From f >= 1 on both terms of psi are positive and convex, so the integrand is
// smooth and falls at least exponentially: Gauss-Legendre panels give G to the last
// digits for every a and b, large or small. Below f = 1 the same holds for the
// lower tail, with x and y exchanged; from df1 = 1 on it is less than 0.7, and the
// upper tail is its complement.
//
// W is taken in the form of Loader (Fast and accurate computation of binomial
// probabilities, 2000),
//
//	W = sqrt(a b/(2 pi n)) exp(a L(x n/a - 1) + b L(y n/b - 1) + D(n) - D(a) - D(b))
//	L(d) = log(1 + d) - d,   D(z) = the error of Stirling's formula for log gamma(z)
//
// whose terms do not cancel: x n/a - 1 and y n/b - 1 are multiples of f - 1. No
// difference of log gammas and no 1 - CDF of a small tail is ever formed.
//
// # Accuracy
//
// Relative error of p below 1e-12 while p > 1e-300, of log10 p below 1e-13, of
// quantiles below 1e-12. Below df1 = 1 the errors grow as 1/df1 where f < 1. A tail
// costs 10 to 30 microseconds, a quantile three to six tails.
package tail
