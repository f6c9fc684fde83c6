package vcov_test

import (
	"encoding/csv"
	"math/big"
	"os"
	"testing"
)

// exactFit solves least squares on the decimals of a file with numbers of 1200
// bits, 360 digits, so that no rounding of data, powers or sums is seen (the
// worst set, Filip, loses about 30 digits). The estimators are written from
// their definitions.
type exactFit struct {
	n, k  int
	beta  []*big.Float
	inv   [][]*big.Float // (X'X)^-1
	x     [][]*big.Float
	resid []*big.Float
	rss   *big.Float
	tss   *big.Float // about the mean, or about 0 without a constant
}

// exactCSV reads y and the columns of x; degree > 0 makes powers 1..degree of
// the only column.
func exactCSV(t testing.TB, file string, degree int, constant bool) *exactFit {
	t.Helper()
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	recs, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var x [][]*big.Float
	var y []*big.Float
	for _, rec := range recs[1:] {
		var cells []*big.Float
		for _, c := range rec {
			r, ok := wide().SetString(c)
			if !ok {
				t.Fatalf("%s: cell %q", file, c)
			}
			cells = append(cells, r)
		}
		y = append(y, cells[0])
		var row []*big.Float
		if constant {
			row = append(row, whole(1))
		}
		if degree > 0 {
			p := whole(1)
			for range degree {
				p = wide().Mul(p, cells[1])
				row = append(row, p)
			}
		} else {
			row = append(row, cells[1:]...)
		}
		x = append(x, row)
	}
	return exact(t, x, y, constant)
}

func wide() *big.Float               { return new(big.Float).SetPrec(1200) }
func whole(n int) *big.Float         { return wide().SetInt64(int64(n)) }
func mul(a, b *big.Float) *big.Float { return wide().Mul(a, b) }
func sub(a, b *big.Float) *big.Float { return wide().Sub(a, b) }
func quo(a, b *big.Float) *big.Float { return wide().Quo(a, b) }

func exact(t testing.TB, x [][]*big.Float, y []*big.Float, constant bool) *exactFit {
	t.Helper()
	n, k := len(x), len(x[0])
	// Gauss-Jordan on [X'X | X'y | I].
	m := make([][]*big.Float, k)
	for i := range m {
		m[i] = make([]*big.Float, 2*k+1)
		for j := range m[i] {
			m[i][j] = wide()
		}
		for r := range x {
			for j := range k {
				m[i][j].Add(m[i][j], mul(x[r][i], x[r][j]))
			}
			m[i][k].Add(m[i][k], mul(x[r][i], y[r]))
		}
		m[i][k+1+i].SetInt64(1)
	}
	for p := range k {
		if m[p][p].Sign() == 0 {
			t.Fatal("singular") // a positive definite matrix has positive pivots
		}
		inv := quo(whole(1), m[p][p])
		for j := range m[p] {
			m[p][j] = mul(m[p][j], inv)
		}
		for i := range m {
			if i == p || m[i][p].Sign() == 0 {
				continue
			}
			f := wide().Set(m[i][p])
			for j := range m[i] {
				m[i][j] = sub(m[i][j], mul(f, m[p][j]))
			}
		}
	}
	e := &exactFit{n: n, k: k, x: x, rss: wide(), tss: wide()}
	for i := range m {
		e.beta = append(e.beta, m[i][k])
		e.inv = append(e.inv, m[i][k+1:])
	}
	mean := wide()
	if constant {
		for _, v := range y {
			mean.Add(mean, v)
		}
		mean.Quo(mean, whole(n))
	}
	for r := range x {
		fit := wide()
		for j := range k {
			fit.Add(fit, mul(x[r][j], e.beta[j]))
		}
		u := sub(y[r], fit)
		e.resid = append(e.resid, u)
		e.rss.Add(e.rss, mul(u, u))
		v := sub(y[r], mean)
		e.tss.Add(e.tss, mul(v, v))
	}
	return e
}

func toFloat(r *big.Float) float64 {
	f, _ := r.Float64()
	return f
}

func root(r *big.Float) float64 { return toFloat(wide().Sqrt(r)) }

func (e *exactFit) coefficients() []float64 {
	out := make([]float64, e.k)
	for j, b := range e.beta {
		out[j] = toFloat(b)
	}
	return out
}

func (e *exactFit) sigma2() *big.Float {
	return quo(e.rss, whole(e.n-e.k))
}

func (e *exactFit) classical() []float64 {
	out := make([]float64, e.k)
	for j := range out {
		out[j] = root(mul(e.sigma2(), e.inv[j][j]))
	}
	return out
}

func (e *exactFit) r2() float64 {
	return toFloat(sub(whole(1), quo(e.rss, e.tss)))
}

// hc gives HC0 (power 0), HC2 (1) or HC3 (2): M sum e^2 (1-h)^-power xx' M,
// MacKinnon and White (1985), doi:10.1016/0304-4076(85)90158-7.
func (e *exactFit) hc(power int) []float64 {
	out := make([]*big.Float, e.k)
	for j := range out {
		out[j] = wide()
	}
	for r, x := range e.x {
		l := make([]*big.Float, e.k) // M x
		h := wide()
		for i := range l {
			l[i] = wide()
			for j := range x {
				l[i].Add(l[i], mul(e.inv[i][j], x[j]))
			}
			h.Add(h, mul(l[i], x[i]))
		}
		w := mul(e.resid[r], e.resid[r])
		for range power {
			w.Quo(w, sub(whole(1), h))
		}
		for i := range l {
			out[i].Add(out[i], mul(w, mul(l[i], l[i])))
		}
	}
	se := make([]float64, e.k)
	for i := range se {
		se[i] = root(out[i])
	}
	return se
}

// The committed figures must be what the definitions give.
func TestCommittedFiguresAreExact(t *testing.T) {
	for _, s := range nistSets(t) {
		e := s.exact(t)
		if d := least(e.coefficients(), parseAll(t, s.Certified.B)); d < 13.5 {
			t.Errorf("%s: certified coefficients agree to %.1f digits with the exact solution", s.Name, d)
		}
		if s.ExactFit {
			if e.rss.Cmp(quo(e.tss, wide().SetMantExp(whole(1), 1500))) > 0 {
				t.Errorf("%s: residual sum of squares %.3g, want 0", s.Name, e.rss)
			}
			continue
		}
		if d := least(e.classical(), parseAll(t, s.Certified.SE)); d < 13.5 {
			t.Errorf("%s: certified errors agree to %.1f digits", s.Name, d)
		}
		for name, power := range map[string]int{"HC0": 0, "HC2": 1, "HC3": 2} {
			if d := least(e.hc(power), parseAll(t, s.HC[name])); d < 15 {
				t.Errorf("%s %s: committed figures agree to %.1f digits", s.Name, name, d)
			}
		}
	}
}
