package vcov_test

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// A fit whose clusters do not fit the memory gives the same bytes as one whose
// clusters do, for any number of workers, and says what went to scratch.
func TestSpilledFit(t *testing.T) {
	const rows, n = 20_000, 9_000
	rng := rand.New(rand.NewPCG(21, 4))
	var y, x []float64
	var crane []int64
	var barge []string
	for range rows {
		c := rng.IntN(n)
		x = append(x, rng.NormFloat64()+float64(c%7))
		y = append(y, 3+2*x[len(x)-1]+rng.NormFloat64()*float64(1+c%5))
		crane = append(crane, 1<<60+int64(c)*1_000_003)
		barge = append(barge, fmt.Sprintf("barge of the quay %d", c))
	}
	var tb table
	tb.float("minutes", y)
	tb.float("tonnes", x)
	tb.int("crane", crane)
	tb.text("barge", barge)
	src := stream.NewMemory(tb.schema, tb.cols, 3000)
	d, err := stream.NewDesign(stream.Spec{Outcome: "minutes", Terms: []string{"tonnes"}, Keys: []string{"crane", "barge"}}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	fit := func(memory int64, workers int) *vcov.Result {
		r, err := vcov.Fit(t.Context(), src, d, vcov.Options{Passes: 2, Workers: workers, Memory: memory, ClusterMemory: 1 << 20, Scratch: t.TempDir(),
			Errors: []vcov.Kind{{Name: "cr0", Cluster: 0}, {Name: "cr1", Cluster: 0}, {Name: "cr1", Cluster: 1}}})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	all := fit(1<<30, 1)
	if all.Run.SpilledRuns != 0 || all.Run.SpilledBytes != 0 {
		t.Errorf("%d runs of %d bytes with memory to spare", all.Run.SpilledRuns, all.Run.SpilledBytes)
	}
	for _, workers := range []int{1, 2, 3, 8} {
		r := fit(1<<20, workers)
		if r.Run.SpilledRuns == 0 || r.Run.SpilledBytes < n*24 {
			t.Errorf("%d workers: %d runs of %d bytes went to scratch", workers, r.Run.SpilledRuns, r.Run.SpilledBytes)
		}
		if fixed(t, r) != fixed(t, all) {
			t.Errorf("%d workers: another result when clusters went to scratch", workers)
		}
	}
	// The same clusters under two kinds of names give the same errors.
	for i, se := range all.Errors[1].SE {
		if d := float64(se - all.Errors[2].SE[i]); d > 1e-12*float64(se) || d < -1e-12*float64(se) {
			t.Errorf("error %d is %v by crane and %v by barge", i, se, all.Errors[2].SE[i])
		}
	}
}
