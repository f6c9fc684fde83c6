package vcov

import (
	"fmt"
	"slices"

	"gonum.org/v1/gonum/mathext"

	"github.com/tallrow/tallrow/stream"
)

// spreadTest asks whether the spread of the residuals goes with the terms: N times
// the R2 of the squared residuals on the constant and the terms,
//
//	LM = N c'G^-1 c / (sum e^4 - (sum e^2)^2 / N),   c = sum e^2 (x - mean of x)
//
// with G the centred second moments of the terms, is chi-square on their number where
// the spread is the same for all rows, whatever the shape of the errors (Koenker 1981,
// doi:10.1016/0304-4076(81)90062-2). It needs sum e^2 x and sum e^4: from fourth
// moments, or from the second pass; for category terms those sums stand in the meat
// of hc0. With frequencies every row counts so many times; under other weights the
// sums are not those, and there is no test.
func (f *fitter) spreadTest() SpreadTest {
	x, s := f.sol, f.state
	n := Number(nan)
	none := func(format string, args ...any) SpreadTest {
		return SpreadTest{n, n, n, ptr(fmt.Sprintf(format, args...))}
	}
	p := len(s.Columns)
	var e2, e4 float64
	var e2z []float64 // over internal columns
	switch {
	case x.kind == stream.Precision || x.kind == stream.Sampling:
		return none("there is none under %s weights", weightNames[x.kind])
	case x.df() <= 0:
		return none("there are no degrees of freedom")
	case x.perfect:
		return none("the terms give the outcome exactly")
	case s.Swept != nil:
		return none("there is none with effects that are swept out")
	case x.apart != nil:
		return none("there is none with so many category levels")
	case f.sums != nil:
		e2z, e4 = f.sums.Spread[:1+s.Numeric()], f.sums.Spread[1+s.Numeric()]
		if len(s.Groups) > 0 {
			i := slices.Index(f.kinds, "hc0")
			if i < 0 {
				return none("with categories it needs hc0 or hc1 among the errors")
			}
			e2z = f.sums.Meats[i][:p]
		}
	case f.fourth != nil:
		var gross float64
		e2z = f.fourth[:p]
		if e4, gross = s.FourthPowers(x.theta); f.loss > lossRefuse || 0x1p-53*gross > lossRefuse*e4 {
			return none("fourth moments cancel; use --passes 2")
		}
	default:
		return none("it needs fourth moments or a second pass: hc0 or hc1 among the errors")
	}
	e2 = e2z[0]
	k := x.k()
	one, c := make([]float64, k), make([]float64, k)
	x.projectVec(s.S[:p], one)
	x.projectVec(e2z, c)
	g, gross := make([]float64, k*k), make([]float64, k*k)
	for i := range k {
		gross[i*k+i] = x.e.g[i*k+i]
		t := one[i] / s.S[0]
		for j := range k {
			g[i*k+j] = x.e.g[i*k+j] - t*one[j]
		}
		c[i] -= t * e2
	}
	e := eliminateGross(g, gross, k, aliasPivot)
	df := len(e.kept)
	total := e4 - e2*e2/s.S[0]
	switch {
	case df == 0:
		return none("there is no term beside the constant")
	case total <= 64*0x1p-52*e4:
		return none("all residuals are of one size")
	}
	lm := s.S[0] * dot(c, e.solve(c)) / total
	return SpreadTest{Number(lm), Number(df), Number(mathext.GammaIncRegComp(float64(df)/2, lm/2)), nil}
}
