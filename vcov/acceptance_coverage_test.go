package vcov_test

import (
	"math"
	"math/rand/v2"
	"runtime"
	"sync"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// cover counts, for each error kind and coefficient, the intervals that hold
// the true value.
type cover struct {
	mu   sync.Mutex
	hits map[string][2]int
	reps int
}

// simulate fits reps data sets made by draw, whose true slopes are both 1, and
// checks in each the orderings that are theorems (a ratio of 1 - 1e-12 leaves
// room for rounding where both sides are equal).
func simulate(t *testing.T, reps int, spec stream.Spec, names []string, draw func(r *rand.Rand) *table) *cover {
	t.Helper()
	c := &cover{hits: map[string][2]int{}, reps: reps}
	var wg sync.WaitGroup
	n := runtime.GOMAXPROCS(0)
	for w := range n {
		wg.Add(1)
		go func() {
			defer wg.Done()
			for rep := w; rep < reps; rep += n {
				tb := draw(rand.New(rand.NewPCG(12, uint64(rep))))
				r, err := tryFit(tb.source(4096), spec, vcov.Options{Errors: kinds(names...), Workers: 1, Draws: 399, Seed: uint64(rep)})
				if err != nil {
					t.Errorf("replication %d: %v", rep, err)
					return
				}
				se := map[string][]vcov.Number{}
				for i := range r.Errors {
					e := &r.Errors[i]
					se[e.Kind] = e.SE
					c.mu.Lock()
					h := c.hits[e.Kind]
					for j := range h {
						if e.Low[j+1] <= 1 && 1 <= e.High[j+1] {
							h[j]++
						}
					}
					c.hits[e.Kind] = h
					c.mu.Unlock()
				}
				for _, o := range [][2]string{{"hc0", "hc1"}, {"hc0", "hc2"}, {"hc2", "hc3"}, {"cr0", "cr1"}} {
					for j := range se[o[0]] {
						if a, b := se[o[0]][j], se[o[1]][j]; a*(1-1e-12) > b {
							t.Errorf("replication %d: %s %v above %s %v", rep, o[0], a, o[1], b)
						}
					}
				}
			}
		}()
	}
	wg.Wait()
	return c
}

// check compares with published shares from refReps replications: within three
// standard errors of the difference of two shares.
func (c *cover) check(t *testing.T, kind string, want [2]float64, refReps int) {
	t.Helper()
	for j, p := range want {
		got := float64(c.hits[kind][j]) / float64(c.reps)
		se := math.Sqrt(p * (1 - p) * (1/float64(c.reps) + 1/float64(refReps)))
		t.Logf("%s b%d: %.3f, reference %.3f (standard error %.4f)", kind, j+1, got, p, se)
		if math.Abs(got-p) > 3*se {
			t.Errorf("%s b%d: coverage %.3f, reference %.3f, standard error %.4f", kind, j+1, got, p, se)
		}
	}
}

// The design and the shares come from an independent simulation (numpy, 40,000
// replications): x1 = exp(0.7 N), x2 = 1 with probability 0.3 (the first two
// rows 1 and 0), y = 1 + x1 + x2 + (0.3 + x1) N, n = 50, nominal 95 %.
func TestCoverageUnequalSpread(t *testing.T) {
	reps := 3000
	if testing.Short() {
		reps = 500
	}
	c := simulate(t, reps, stream.Spec{Outcome: "y", Terms: []string{"x1", "x2"}}, []string{"classical", "hc0", "hc1", "hc2", "hc3", "hc4"}, func(r *rand.Rand) *table {
		const n = 50
		x1, x2, y := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range n {
			x1[i] = math.Exp(0.7 * r.NormFloat64())
			if i == 0 || i > 1 && r.Float64() < 0.3 {
				x2[i] = 1
			}
			y[i] = 1 + x1[i] + x2[i] + (0.3+x1[i])*r.NormFloat64()
		}
		tb := &table{}
		tb.float("x1", x1)
		tb.float("x2", x2)
		tb.float("y", y)
		return tb
	})
	for kind, p := range map[string][2]float64{
		"classical": {0.653, 0.948}, "hc0": {0.804, 0.935}, "hc1": {0.815, 0.943}, "hc2": {0.860, 0.949}, "hc3": {0.906, 0.962},
		"hc4": {0.943, 0.967},
	} {
		c.check(t, kind, p, 40_000)
	}
}

// 20 clusters of 6 to 46 rows; x1 = cluster N + row N; x2 = 1 in six clusters; u
// = (sqrt 0.3 cluster N + sqrt 0.7 row N)(1 + 0.3 |x1|). Shares from an
// independent simulation (numpy, 8,000 replications).
func TestCoverageClusters(t *testing.T) {
	reps := 3000
	if testing.Short() {
		reps = 500
	}
	size := []int{6, 7, 8, 8, 9, 10, 12, 13, 14, 16, 18, 20, 22, 24, 27, 30, 33, 37, 41, 46}
	treated := map[int]bool{1: true, 5: true, 7: true, 12: true, 16: true, 19: true}
	c := simulate(t, reps, stream.Spec{Outcome: "y", Terms: []string{"x1", "x2"}, Keys: []string{"g"}}, []string{"classical", "cr0", "cr1", "cr2", "cr3", "wcr"}, func(r *rand.Rand) *table {
		var x1, x2, y []float64
		var g []int64
		for k, n := range size {
			cx, cu := r.NormFloat64(), r.NormFloat64()
			d := 0.0
			if treated[k] {
				d = 1
			}
			for range n {
				a := cx + r.NormFloat64()
				u := (math.Sqrt(0.3)*cu + math.Sqrt(0.7)*r.NormFloat64()) * (1 + 0.3*math.Abs(a))
				x1, x2, y, g = append(x1, a), append(x2, d), append(y, 1+a+d+u), append(g, int64(k))
			}
		}
		tb := &table{}
		tb.float("x1", x1)
		tb.float("x2", x2)
		tb.float("y", y)
		tb.int("g", g)
		return tb
	})
	for kind, p := range map[string][2]float64{"classical": {0.564, 0.487}, "cr0": {0.892, 0.873}, "cr1": {0.901, 0.883},
		// cr2 on Satterthwaite's degrees of freedom; wcr with signs
		"cr2": {0.941, 0.941}, "cr3": {0.954, 0.943}, "wcr": {0.946, 0.939}} {
		c.check(t, kind, p, 8_000)
	}
}
