package vcov

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// BellMcCaffrey computes CR2, CR3 and Satterthwaite's degrees of freedom from
// their definitions over rows (Bell & McCaffrey 2002, sections 3 and 4): the
// symmetric root of the inverse of a cluster's block of I - H, deletion of a
// cluster, and
// the trace of the quadratic form, all N x N. Exported for tests outside the package.
func BellMcCaffrey(x *mat.Dense, y []float64, group []int, groups int) (cr2, cr3 *mat.Dense, df []float64) {
	n, k := x.Dims()
	var m, b mat.Dense
	m.Mul(x.T(), x)
	if err := m.Inverse(&m); err != nil {
		panic(err)
	}
	var xy, fit mat.Dense
	xy.Mul(x.T(), mat.NewDense(n, 1, y))
	b.Mul(&m, &xy)
	fit.Mul(x, &b)
	var hat, half mat.Dense
	half.Mul(x, &m)
	hat.Mul(&half, x.T())
	cr2, cr3 = mat.NewDense(k, k, nil), mat.NewDense(k, k, nil)
	forms := make([]*mat.Dense, k) // N x G: columns (I - H)_g A_g X_g M c
	for j := range forms {
		forms[j] = mat.NewDense(n, groups, nil)
	}
	for g := range groups {
		var rows []int
		for i, c := range group {
			if c == g {
				rows = append(rows, i)
			}
		}
		ng := len(rows)
		gap := mat.NewSymDense(ng, nil)
		for a, i := range rows {
			for c, j := range rows[:a+1] {
				v := -hat.At(i, j)
				if i == j {
					v++
				}
				gap.SetSym(a, c, v)
			}
		}
		var eig mat.EigenSym
		eig.Factorize(gap, true)
		var vec mat.Dense
		eig.VectorsTo(&vec)
		power := func(e float64) *mat.Dense {
			out, scaled := mat.NewDense(ng, ng, nil), mat.NewDense(ng, ng, nil)
			for q, l := range eig.Values(nil) {
				for i := range ng {
					scaled.Set(i, q, vec.At(i, q)*math.Pow(l, e))
				}
			}
			out.Mul(scaled, vec.T())
			return out
		}
		xg, eg := mat.NewDense(ng, k, nil), mat.NewDense(ng, 1, nil)
		for a, i := range rows {
			xg.SetRow(a, x.RawRowView(i))
			eg.Set(a, 0, y[i]-fit.At(i, 0))
		}
		root := power(-0.5)
		for _, o := range []struct {
			a   *mat.Dense
			sum *mat.Dense
		}{{root, cr2}, {power(-1), cr3}} {
			var t, s, d, v mat.Dense
			t.Mul(o.a, eg)
			s.Mul(xg.T(), &t)
			d.Mul(&m, &s)
			v.Mul(&d, d.T())
			o.sum.Add(o.sum, &v)
		}
		var ax, axm mat.Dense
		ax.Mul(root, xg)
		axm.Mul(&ax, &m)
		for j := range k {
			for i := range n {
				var v float64
				for a, r := range rows {
					w := -hat.At(i, r)
					if i == r {
						w++
					}
					v += w * axm.At(a, j)
				}
				forms[j].Set(i, g, v)
			}
		}
	}
	for j := range k {
		var q mat.Dense
		q.Mul(forms[j].T(), forms[j])
		f := mat.Norm(&q, 2)
		tr := mat.Trace(&q)
		df = append(df, tr*tr/(f*f))
	}
	return cr2, cr3, df
}

func TestAdjustedClustersAreBellMcCaffrey(t *testing.T) {
	for seed := range uint64(12) {
		r := rand.New(rand.NewPCG(seed, 5))
		groups := 4 + r.IntN(12)
		var group []int
		for g := range groups {
			for range 3 + r.IntN(4*(g+1)) {
				group = append(group, g)
			}
		}
		if seed%3 == 2 { // many clusters, each a small share: the power series
			groups, group = 200, nil
			for i := range 600 {
				group = append(group, i%200)
			}
		}
		n := len(group)
		x := mat.NewDense(n, 4, nil)
		cols := make([][]float64, 4)
		effect := make([]float64, groups)
		for g := range effect {
			effect[g] = r.NormFloat64()
		}
		for i := range n {
			a := r.NormFloat64() + effect[group[i]]
			b := 40 + 5*r.ExpFloat64()
			c := float64(group[i] % 2)
			y := 3 + a - b/4 + c + r.NormFloat64() + effect[group[i]]
			x.SetRow(i, []float64{1, a, b, c})
			for j, v := range []float64{y, a, b, c} {
				cols[j] = append(cols[j], v)
			}
		}
		cr2, cr3, df := BellMcCaffrey(x, cols[0], group, groups)

		s, sol := solveMemory(t, []string{"y", "a", "b", "c"}, cols, stream.Spec{Outcome: "y", Terms: []string{"a", "b", "c"}})
		// a + 2 b is the coefficient of a where b is replaced by b - 2a.
		turned := mat.NewDense(n, 4, nil)
		for i := range n {
			turned.SetRow(i, []float64{1, x.At(i, 1), x.At(i, 2) - 2*x.At(i, 1), x.At(i, 3)})
		}
		_, _, dfTurned := BellMcCaffrey(turned, cols[0], group, groups)
		list, err := s.Design.ParseHypothesis("a + 2 * b = 1")
		if err != nil {
			t.Fatal(err)
		}
		if err := sol.resolve([][]stream.Restriction{list}); err != nil {
			t.Fatal(err)
		}
		adj := newAdjusted(sol)
		f := s.Frame
		const p = 4
		for g := range groups {
			az, sc := make([]float64, p*p), make([]float64, p)
			for i := range n {
				if group[i] != g {
					continue
				}
				z := internalRow(f, []float64{cols[1][i], cols[2][i], cols[3][i]}, cols[0][i])
				e := dot(sol.theta, z)
				for a := range p {
					axpy(z[a], z[:p], az[a*p:(a+1)*p])
				}
				axpy(e, z[:p], sc)
			}
			adj.add(az, sc)
		}
		for _, want := range []struct {
			kind string
			v    *mat.Dense
		}{{"cr2", cr2}, {"cr3", cr3}} {
			got := sol.covariance(adj.estimate(want.kind).v)
			for i := range p {
				for j := range p {
					scale := math.Sqrt(want.v.At(i, i) * want.v.At(j, j))
					if d := math.Abs(got[i*p+j]-want.v.At(i, j)) / scale; !(d < 1e-10) {
						t.Errorf("seed %d %s (%d, %d): %v, by rows %v", seed, want.kind, i, j, got[i*p+j], want.v.At(i, j))
					}
				}
			}
		}
		if d := adj.estimate("cr2").comboDFs[0]; !(math.Abs(d/dfTurned[1]-1) < 1e-10) {
			t.Errorf("seed %d: df %v of a + 2 b, by rows %v", seed, d, dfTurned[1])
		}
		for j, d := range adj.estimate("cr2").dfs {
			if !(math.Abs(d/df[j]-1) < 1e-10) {
				t.Errorf("seed %d: df %v of coefficient %d, by rows %v", seed, d, j, df[j])
			}
		}
	}
}

// solveMemory fits columns in memory.
func solveMemory(t *testing.T, names []string, cols [][]float64, spec stream.Spec) (*accum.State, *solution) {
	t.Helper()
	var schema stream.Schema
	var data []stream.Vector
	for j, name := range names {
		schema.Columns = append(schema.Columns, stream.Column{Name: name, Kind: stream.Float64})
		data = append(data, stream.Vector{Kind: stream.Float64, F64: cols[j]})
	}
	src := stream.NewMemory(schema, data, 1<<20)
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	s, err := accum.First(t.Context(), src, d, accum.Needs{}, accum.Options{Workers: 1, Memory: 1 << 30})
	if err != nil {
		t.Fatal(err)
	}
	b, err := newBasis(s)
	if err != nil {
		t.Fatal(err)
	}
	return s, solve(b)
}

// internalRow is (1, u, v) of a row, see accum.Frame.
func internalRow(f *accum.Frame, x []float64, y float64) []float64 {
	z := []float64{1}
	for j := range x {
		var u float64
		for i := range j + 1 {
			t := 0.0
			switch {
			case f.White:
				t = f.T[i*f.Terms+j]
			case i == j:
				t = 1
			}
			u += t * (x[i] - f.Shift[i]) * f.Inv[i]
		}
		z = append(z, u)
	}
	v := (y - f.YShift) * f.YInv
	for j, h := range f.H {
		v -= h * z[1+j]
	}
	return append(z, v)
}
