package vcov_test

import (
	"math"
	"math/rand/v2"
	"sort"
	"testing"

	"gonum.org/v1/gonum/mat"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// hard is a design that costs digits: rows of x in the form in which the dense
// solution is well conditioned (centred by known exact shifts), and the
// affine map from its coefficients to those of the asked model.
type hard struct {
	name  string
	tb    *table
	terms []string
	d     *dense
	back  *mat.Dense // asked = back * dense
	// from is the first coefficient that is compared: the constant of a model
	// with a large offset is not where the difficulty lies.
	from int
	tol  float64
}

func hardProblems(n int) []hard {
	r := rand.New(rand.NewPCG(9, 9))
	var all []hard
	quays := make([]int64, n)
	group := make([]int, n)
	ones := make([]float64, n)
	for i := range n {
		group[i] = r.IntN(40)
		quays[i] = int64(group[i])
		ones[i] = 1
	}
	make1 := func(name string, shift float64, u, v, y []float64, tol float64) hard {
		tb := &table{}
		x := make([]float64, n)
		d := &dense{y: y, w: ones, group: group}
		for i := range n {
			x[i] = u[i] + shift // exact: u is a multiple of a large power of two
			d.x = append(d.x, []float64{1, u[i], v[i]})
		}
		tb.float("x", x)
		tb.float("z", v)
		tb.float("y", y)
		tb.int("quay", quays)
		d.solve()
		return hard{name: name, tb: tb, terms: []string{"x", "z"}, d: d, from: 1, tol: tol,
			back: mat.NewDense(3, 3, []float64{1, -shift, 0, 0, 1, 0, 0, 0, 1})}
	}
	noise := func(u, v []float64) []float64 {
		y := make([]float64, n)
		for i := range n {
			y[i] = 3 + 2*u[i] - v[i] + (0.2+math.Abs(u[i]))*r.NormFloat64()
		}
		return y
	}
	grid := func(x float64) float64 { return math.Round(x*1024) / 1024 }
	u, v := make([]float64, n), make([]float64, n)
	for i := range n {
		u[i], v[i] = grid(r.NormFloat64()), r.NormFloat64()
	}
	all = append(all, make1("offset 1e9", 1e9, u, v, noise(u, v), 1e-10))

	sorted := append([]float64(nil), u...)
	sort.Float64s(sorted)
	all = append(all, make1("sorted on x", 0, sorted, v, noise(sorted, v), 1e-10))

	// Sorted so that the first rows hardly vary: the first block's spread is about
	// 1e-4 of the whole.
	tight := make([]float64, n)
	for i := range n {
		tight[i] = grid(r.NormFloat64())
		if i < 4096 && i < n/4 {
			tight[i] = math.Round(r.NormFloat64()*1e-4*0x1p30) / 0x1p30
		}
	}
	all = append(all, make1("first rows alike, 1e-4", 0, tight, v, noise(tight, v), 1e-10))

	// A calendar year and its square: with c = year - 2010,
	// b year + g year^2 = (b + 4020 g) c + g c^2 + constant.
	tb := &table{}
	years := make([]int64, n)
	d := &dense{w: ones, group: group, y: make([]float64, n)}
	for i := range n {
		c := float64(r.IntN(21) - 10)
		years[i] = 2010 + int64(c)
		d.x = append(d.x, []float64{1, c, c * c})
		d.y[i] = 5 + 0.3*c + 0.02*c*c + (1+0.1*math.Abs(c))*r.NormFloat64()
	}
	tb.int("year", years)
	tb.float("y", d.y)
	tb.int("quay", quays)
	d.solve()
	all = append(all, hard{name: "year and year squared", tb: tb, terms: []string{"year", "pow(year, 2)"}, d: d, from: 0, tol: 1e-9,
		back: mat.NewDense(3, 3, []float64{1, -2010, 2010 * 2010, 0, 1, -4020, 0, 0, 1})})
	return all
}

// Sorted files, large offsets and nearly collinear powers keep their digits, in
// one pass, two passes and through a pipe.
func TestHardDesigns(t *testing.T) {
	n := 40_000
	if testing.Short() {
		n = 12_000
	}
	names := []string{"classical", "hc0", "hc1", "cr0", "cr1"}
	for _, h := range hardProblems(n) {
		text := h.tb.csv()
		for _, way := range []string{"one pass", "two passes", "pipe"} {
			t.Run(h.name+"/"+way, func(t *testing.T) {
				o := vcov.Options{Errors: kinds(names...), Passes: 1}
				src := h.tb.source(5000)
				switch way {
				case "two passes":
					o.Passes = 2
				case "pipe":
					o.Passes = 0
					src = openPipe(t, text, stream.Options{SegmentBytes: 1 << 16})
				}
				r := fit(t, src, stream.Spec{Outcome: "y", Terms: h.terms, Keys: []string{"quay"}}, o)
				var b mat.VecDense
				b.MulVec(h.back, mat.NewVecDense(3, h.d.b))
				worst := 0.0
				for _, name := range names {
					var v mat.Dense
					v.Product(h.back, h.d.covariance(name), h.back.T())
					e := errorsOf(t, r, name)
					for j := h.from; j < 3; j++ {
						se := math.Sqrt(v.At(j, j))
						off := math.Abs(float64(e.SE[j])/se - 1)
						worst = math.Max(worst, off)
						if !(off <= h.tol) {
							t.Errorf("%s %s: error %v, dense %v, off by %.1e", name, r.Terms[j], e.SE[j], se, off)
						}
						if d := math.Abs(float64(r.Estimates[j])-b.AtVec(j)) / math.Max(math.Abs(b.AtVec(j)), se); !(d <= h.tol) {
							t.Errorf("%s: estimate %v, dense %v, off by %.1e", r.Terms[j], r.Estimates[j], b.AtVec(j), d)
						}
					}
				}
				t.Logf("errors within %.1e of the dense solution; %d passes, %s", worst, r.Run.Passes, r.Run.Route)
			})
		}
	}
}
