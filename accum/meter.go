package accum

import (
	"sync/atomic"
	"time"
)

// Meter shows how far a scan is. All fields may be read at any time.
type Meter struct {
	Rows  atomic.Int64 // rows read in the present pass
	Bytes atomic.Int64 // bytes read in the present pass, as stored
	Pass  atomic.Int32 // 1 or 2; 0 before the first
	Total atomic.Int64 // bytes of one pass, -1 if unknown

	// Of all passes: sorted runs of sums of clusters that were written to scratch,
	// and their bytes.
	Runs, Spilled atomic.Int64
}

// Stage is a part of the work on rows.
type Stage uint8

// The stages, in the order in which a row meets them.
const (
	StageRead     Stage = iota // read, decompress and decode cells
	StageTerms                 // evaluate filter, terms, weights and keys
	StageFrame                 // bring rows into the frame
	StageSecond                // second moments
	StageLevels                // sums by category level
	StageClusters              // sums by cluster
	StageCells                 // sums by unique row
	StageFourth                // fourth moments
	StageRows                  // pass two: residuals, leverages and meats
	StageJoin                  // join segments and folds
	stages
)

// String names a stage for reports.
func (s Stage) String() string {
	return [stages]string{"read", "terms", "frame", "second moments", "levels", "clusters", "unique rows", "fourth moments", "row pass", "join"}[s]
}

// Timings adds up where the time of all workers goes, by Stage. Taking the time
// costs about half a nanosecond a row; no number of a result depends on it.
type Timings struct {
	spent [stages]atomic.Int64
}

// Spent is the time in a stage, over all workers and passes.
func (t *Timings) Spent(s Stage) time.Duration { return time.Duration(t.spent[s].Load()) }

// Stages lists the stages.
func Stages() []Stage {
	out := make([]Stage, stages)
	for i := range out {
		out[i] = Stage(i)
	}
	return out
}

// stopwatch is one worker's share of Timings. Without Timings it does nothing.
type stopwatch struct {
	to    *Timings
	last  time.Time
	spent [stages]time.Duration
}

// start begins the next stage.
func (w *stopwatch) start() {
	if w.to != nil {
		w.last = time.Now()
	}
}

// lap puts the time since the last call down to a stage.
func (w *stopwatch) lap(s Stage) {
	if w.to == nil {
		return
	}
	now := time.Now()
	w.spent[s] += now.Sub(w.last)
	w.last = now
}

// hand gives what was taken to Timings.
func (w *stopwatch) hand() {
	if w.to == nil {
		return
	}
	for s, d := range w.spent {
		w.to.spent[s].Add(int64(d))
	}
	clear(w.spent[:])
}
