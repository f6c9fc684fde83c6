package tail

import "math"

// Degrees of freedom below least are not served; huge stands for infinity: every x
// in use is then 1 and every term in 1/df vanishes.
const (
	least = 1e-9
	most  = 1e100
	huge  = 1e200
)

// weight returns e and c with x^a y^b/B(a, b) = c exp(e), see the package
// comment; f is finite and positive.
func weight(f, df1, df2 float64) (e, c float64) {
	a, b := df2/2, df1/2
	den := df2 + df1*f
	q := (df1 + df2) / den // x n/a; y n/b is f q
	e = a*logExcess((1-f)*(df1/den), q) + b*logExcess((f-1)*(df2/den), f*q)
	return e, scale(a, b)
}

func scale(a, b float64) float64 {
	n := a + b
	return math.Sqrt(a/n*b/(2*math.Pi)) * math.Exp(stirling(n)-stirling(a)-stirling(b))
}

// logExcess returns log(q) - d for q = 1 + d, both given so that neither is a
// rounded difference.
func logExcess(d, q float64) float64 {
	if d < -0.5 || d > 1 {
		return math.Log(q) - d
	}
	// log(1+d) = 2 atanh(r) and 2 r - d = -d r
	r := d / (2 + d)
	return r * (2*r*r*atanhSum(r*r) - d)
}

// atanhSum returns (atanh(r)/r - 1)/r^2 = 1/3 + q/5 + q^2/7 + ... for q = r^2 <= 1/9.
func atanhSum(q float64) float64 {
	s := 0.0
	for _, c := range atanhSeries {
		s = s*q + c
	}
	return s
}

// 1/37, 1/35, ..., 1/3
var atanhSeries = func() (c [18]float64) {
	for i := range c {
		c[i] = 1 / float64(37-2*i)
	}
	return c
}()

// expExcess returns exp(s) - 1 - s for |s| < 1.
func expExcess(s float64) float64 {
	t := 0.0
	for _, c := range expSeries {
		t = t*s + c
	}
	return t * s * s
}

// 1/20!, 1/19!, ..., 1/2!
var expSeries = func() (c [19]float64) {
	f := 1.0
	for i := range c {
		f *= float64(i + 2)
		c[len(c)-1-i] = 1 / f
	}
	return c
}()

// stirling returns log gamma(z) - [(z-1/2) log z - z + log(2 pi)/2] for z > 0:
// the series of Abramowitz & Stegun 6.1.41 from 10 on, below that after steps up.
func stirling(z float64) float64 {
	up := 0.0
	for ; z < 1; z++ {
		up += (z+0.5)*(math.Log1p(z)-math.Log(z)) - 1
	}
	for ; z < 10; z++ {
		// (z+1/2) log((z+1)/z) - 1, by atanh(1/(2z+1))
		q := 1 / ((2*z + 1) * (2*z + 1))
		up += q * atanhSum(q)
	}
	q := 1 / z / z
	s := 0.0
	for _, c := range stirlingSeries {
		s = s*q + c
	}
	return s/z + up
}

// B_2k/(2k(2k-1)), last first.
var stirlingSeries = [...]float64{
	43867.0 / 244188, -3617.0 / 122400, 1.0 / 156, -691.0 / 360360, 1.0 / 1188, -1.0 / 1680, 1.0 / 1260, -1.0 / 360, 1.0 / 12,
}

// curve is K of the package comment for y = 1 - x; it is not negative.
func curve(s, x, y float64) float64 {
	if y > 0.5 {
		x, y, s = y, x, -s
	}
	switch {
	case math.Abs(s) < 1:
		d := y * math.Expm1(s)
		return logExcess(d, 1+d) + y*expExcess(s)
	case s < 300:
		return math.Log1p(y*math.Expm1(s)) - y*s
	}
	return x*s + math.Log(y+x*math.Exp(-s))
}

// integral returns G of the package comment for slope >= 0.
func integral(n, slope, x, y float64) float64 {
	psi := func(s float64) float64 { return slope*s + n*curve(s, x, y) }
	// Beyond end the integrand is below exp(-40), and the rest is less still.
	const enough = 40
	end := 1.0
	for psi(end) < enough {
		end *= 2
	}
	for low := 0.0; end-low > end*1e-9; {
		mid := (low + end) / 2
		v := psi(mid)
		if v < enough {
			low = mid
			continue
		}
		end = mid
		if v < enough+4 {
			break
		}
	}
	// From straight on psi is a straight line.
	sum := 0.0
	if straight := 40 + math.Max(0, math.Log(x/y)); end > straight {
		end = straight
		sum = math.Exp(-psi(end)) / (slope + n*x)
	}
	// psi has its singularities at a distance of pi from the real line.
	panels := math.Max(8, math.Ceil(end/4))
	half := end / panels / 2
	for i := panels - 1; i >= 0; i-- { // the small ones first
		mid := (2*i + 1) * half
		part := 0.0
		for j, r := range gauss.node {
			part += gauss.weight[j] * (math.Exp(-psi(mid-half*r)) + math.Exp(-psi(mid+half*r)))
		}
		sum += part * half
	}
	return sum
}

const gaussPoints = 20

// gauss holds the positive nodes and the weights of Gauss-Legendre integration.
var gauss = func() (g struct{ node, weight [gaussPoints / 2]float64 }) {
	for i := range g.node {
		z := math.Cos(math.Pi * (float64(i) + 0.75) / (gaussPoints + 0.5))
		for range 8 {
			p, d := legendre(z)
			z -= p / d
		}
		_, d := legendre(z)
		g.node[i], g.weight[i] = z, 2/((1-z)*(1+z)*d*d)
	}
	return g
}()

// legendre returns the Legendre polynomial of degree gaussPoints and its derivative.
func legendre(z float64) (p, d float64) {
	p0, p1 := 1.0, z
	for k := 2.0; k <= gaussPoints; k++ {
		p0, p1 = p1, ((2*k-1)*z*p1-(k-1)*p0)/k
	}
	return p1, gaussPoints * (p0 - z*p1) / ((1 - z) * (1 + z))
}
