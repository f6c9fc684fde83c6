// Package vcov turns moment sums into coefficients and standard errors that hold
// when the spread of the errors is unequal or rows move together.
//
// # Vocabulary
//
// X is the N x k matrix of the kept terms, k its rank. The bread is (X'WX)^-1, the
// meat the estimated variance of the score X'We, and a sandwich bread meat bread.
// h_i is the leverage of a row, G the number of clusters.
//
// # Conventions
//
//	matter      rule
//	k, N        k = rank in every factor; N = sum of frequencies, else rows with weight above 0
//	classical   t on N - k; joint F = W/q on (q, N - k)
//	hc0..hc3    t on N - k; hc1 carries N/(N - k); joint F = W/q on (q, N - k)
//	cr0, cr1    t on G - 1; cr1 carries G/(G-1) (N-1)/(N-k); joint (G-q)/((G-1)q) W on F(q, G-q)
//	hac         t on N - k; N/(N - k); lags by used rows, or by period with gaps as scores of zero; joint F = W/q on (q, N - k)
//	hypotheses  a single restriction by t, with the df of cr2's combination; several jointly, as above
//	R2          centred if the constant lies in the span of the terms, else uncentred
//	sigma       with weights of mean 1
//	perfect fit errors 0, no t and p
//
// # Weights
//
//	kind        bread      meat (hc)       score      leverage             N
//	frequency   X'FX       sum f e^2 xx'   f x e      x'(X'FX)^-1 x        sum f
//	precision   X'WX       sum w^2 e^2 xx' w x e      w x'(X'WX)^-1 x      rows
//	sampling    as precision; classical errors have no meaning (Fuller 1975, Binder 1983)
//
// # Lone rows and clusters
//
// Where one row has leverage 1, or one cluster alone holds a direction of the
// terms, the coefficients that it decides have no p and no interval under the kinds
// that rest on its residual, and no error of hc2 or higher; all others stay right.
//
// # Tests
//
// Hypotheses are linear restrictions, reduced exactly and tested under every kind
// (hypothesis.go). SpreadTest asks whether the classical kind's assumption holds
// (spread.go), Extremes how far off it can be for any combination of terms
// (extremes.go), PAdjusted what is left of the p of many terms (several.go).
//
// # Numbers
//
// Everything is solved in the coordinates of the sums (see package accum) and mapped
// to the coefficients at the end. From extended sums the solution is refined and
// mapped with twice the digits; errors are float64 of sums that are right. What does
// not exist is NaN here, null in JSON, and has a reason in Errors.Reason or
// Result.Warnings. A Result is the same to the last bit for any number of workers.
package vcov
