package vcov_test

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// waysFit fits y on a, b with errors by clusters in all of the dimensions at once.
func waysFit(t *testing.T, tb *table, kind string, dims int, o vcov.Options) *vcov.Result {
	t.Helper()
	src := tb.source(700)
	spec := stream.Spec{Outcome: "y", Terms: []string{"a", "b"}}
	for i := range dims {
		spec.Keys = append(spec.Keys, fmt.Sprintf("g%d", i))
	}
	for set := 1; set < 1<<dims; set++ {
		var parts []int
		for i := range dims {
			if set>>i&1 == 1 {
				parts = append(parts, i)
			}
		}
		if len(parts) > 1 {
			spec.Crossed = append(spec.Crossed, parts)
		}
	}
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	o.Errors = []vcov.Kind{{Name: "classical", Cluster: -1}, {Name: kind, Cluster: len(d.Keys) - 1}}
	r, err := vcov.Fit(context.Background(), src, d, o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

func waysTable(r *rand.Rand, n int, sizes []int) (*table, [][]int64) {
	a, b, y := make([]float64, n), make([]float64, n), make([]float64, n)
	keys := make([][]int64, len(sizes))
	effect := make([][]float64, len(sizes))
	for d, s := range sizes {
		keys[d], effect[d] = make([]int64, n), make([]float64, s)
		for g := range effect[d] {
			effect[d][g] = r.NormFloat64()
		}
	}
	for i := range n {
		a[i], b[i] = r.NormFloat64(), 3+r.ExpFloat64()
		y[i] = 1 + a[i] - b[i]/2 + r.NormFloat64()
		for d, s := range sizes {
			g := r.IntN(s)
			keys[d][i] = int64(g) * 1_000_003
			a[i] += effect[d][g] / 2
			y[i] += effect[d][g]
		}
	}
	tb := &table{}
	tb.float("y", y)
	tb.float("a", a)
	tb.float("b", b)
	for d := range sizes {
		tb.int(fmt.Sprintf("g%d", d), keys[d])
	}
	return tb, keys
}

// cr0 in several dimensions is the sum over all pairs of rows that share any
// cluster of s_i s_j' (Cameron, Gelbach and Miller 2011, doi:10.1198/jbes.2010.07136,
// section 2.3): inclusion and exclusion counts every pair once.
func TestMultiwayIsPairsThatShareACluster(t *testing.T) {
	for seed := range uint64(8) {
		r := rand.New(rand.NewPCG(seed, 11))
		sizes := []int{14 + r.IntN(10), 12 + r.IntN(20)}
		if seed%2 == 1 {
			sizes = append(sizes, 16)
		}
		n := 500 + r.IntN(300)
		tb, keys := waysTable(r, n, sizes)
		d := &dense{y: tb.cols[0].F64}
		for i := range n {
			d.x = append(d.x, []float64{1, tb.cols[1].F64[i], tb.cols[2].F64[i]})
			d.w = append(d.w, 1)
		}
		d.solve()
		v := d.pairs(func(i, j int) float64 {
			for _, k := range keys {
				if k[i] == k[j] {
					return 1
				}
			}
			return 0
		})
		for _, passes := range []int{1, 2} {
			res := waysFit(t, tb, "cr0", len(sizes), vcov.Options{Passes: passes, Workers: 2})
			e := &res.Errors[1]
			if warned(res, "repaired") {
				t.Fatalf("seed %d: repaired; choose another seed for this test", seed)
			}
			for i := range 3 {
				for j := range 3 {
					if s := math.Sqrt(v.At(i, i) * v.At(j, j)); !near(float64(e.Covariance[i][j]), v.At(i, j), s, 1e-10) {
						t.Errorf("seed %d, %d passes (%d, %d): %v, by pairs %v", seed, passes, i, j, e.Covariance[i][j], v.At(i, j))
					}
				}
			}
			least := math.MaxInt
			for d := range sizes {
				seen := map[int64]bool{}
				for _, k := range keys[d] {
					seen[k] = true
				}
				if e.Groups[d] != int64(len(seen)) {
					t.Errorf("seed %d: %d clusters in dimension %d, want %d", seed, e.Groups[d], d, len(seen))
				}
				least = min(least, len(seen))
			}
			if float64(e.DF[1]) != float64(least-1) {
				t.Errorf("seed %d: df %v, want %d", seed, e.DF[1], least-1)
			}
		}
	}
}

// With few clusters the sum is often not positive semidefinite. The repair is told,
// does not hang on units, and leaves no error where there was no variance.
func TestMultiwayRepairDoesNotHangOnUnits(t *testing.T) {
	repaired := 0
	for seed := range uint64(30) {
		r := rand.New(rand.NewPCG(seed, 12))
		n := 120
		tb, _ := waysTable(r, n, []int{6, 5})
		other := &table{}
		for j, c := range tb.cols {
			if j == 1 || j == 2 {
				x := make([]float64, n)
				for i, v := range c.F64 {
					x[i] = v * []float64{0, 1 << 12, 1.0 / (1 << 9)}[j]
				}
				other.float(tb.schema.Columns[j].Name, x)
				continue
			}
			other.add(tb.schema.Columns[j], c)
		}
		one, two := waysFit(t, tb, "cr1", 2, vcov.Options{}), waysFit(t, other, "cr1", 2, vcov.Options{})
		if warned(one, "repaired") != warned(two, "repaired") {
			t.Fatalf("seed %d: repaired in one unit only", seed)
		}
		if warned(one, "repaired") {
			repaired++
		}
		for j, scale := range []float64{1, 1 << 12, 1.0 / (1 << 9)} {
			a, b := one.Errors[1].SE[j], two.Errors[1].SE[j]
			if a.Exists() != b.Exists() || a.Exists() && !near(float64(b)*scale, float64(a), float64(a), 1e-8) {
				t.Errorf("seed %d: error %v of term %d, in other units %v", seed, a, j, float64(b)*scale)
			}
			if !a.Exists() && one.Errors[1].P[j].Exists() {
				t.Errorf("seed %d: p without an error", seed)
			}
		}
	}
	if repaired < 5 {
		t.Errorf("%d of 30 were repaired; the test needs some", repaired)
	}
}

func TestMultiwayRefusals(t *testing.T) {
	tb, _ := waysTable(rand.New(rand.NewPCG(1, 1)), 100, []int{5, 6, 7})
	src := tb.source(100)
	for _, c := range []struct {
		crossed [][]int
		kind    string
	}{
		{[][]int{{0, 1, 2}}, "cr1"},
		{[][]int{{0, 1}}, "cr2"},
		{[][]int{{0, 1}}, "cr3"},
	} {
		d, err := stream.NewDesign(stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"g0", "g1", "g2"}, Crossed: c.crossed}, src.Schema())
		if err != nil {
			t.Fatal(err)
		}
		_, err = vcov.Fit(t.Context(), src, d, vcov.Options{Errors: []vcov.Kind{{Name: c.kind, Cluster: 3}}})
		if !errors.Is(err, stream.ErrUse) {
			t.Errorf("%s over %v: %v, want a refusal", c.kind, c.crossed, err)
		}
	}
	spec := stream.Spec{Outcome: "y", Terms: []string{"a"}, Keys: []string{"g0"}, Weight: "b", WeightKind: stream.Sampling}
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	if _, err = vcov.Fit(t.Context(), src, d, vcov.Options{Errors: []vcov.Kind{{Name: "cr2", Cluster: 0}}}); !errors.Is(err, stream.ErrUse) {
		t.Errorf("cr2 under sampling weights: %v, want a refusal", err)
	}
}
