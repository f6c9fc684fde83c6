package accum

import (
	"fmt"

	"github.com/tallrow/tallrow/stream"
)

// Needs says what pass one must leave behind beside second moments.
type Needs struct {
	// Fourth asks for fourth moments (no categories).
	Fourth bool
	// Clusters lists the indexes of design keys whose clusters' second moments
	// are wanted (no categories). Where effects of units are swept out, those of
	// other clusters are of use only if State.Nested.
	Clusters []int
	// Keep holds the clusters' second moments however many they are, on scratch if
	// need be: they are wanted for themselves.
	Keep bool
	// Retain keeps all sums in the state as they were added up, for State.Records; an
	// input without used rows is then no error.
	Retain bool
	// Cells asks for unique rows, from which SecondByCells has what a second pass would
	// have. They are given up, and State.CellsLost is set, where there are too many.
	Cells bool
}

// Options say how to scan.
type Options struct {
	Workers int
	Memory  int64 // bound of what the sums take, bytes
	// Clusters bounds the second moments of clusters, in bytes; beyond it they are
	// dropped and State.Dropped is set. It must not depend on Workers, so that the
	// same input always takes the same route. 0 means a sixteenth of Memory. An input
	// that can be read only once keeps them all, on scratch if need be.
	Clusters int64
	// Dense is the number of internal columns up to which the state is one dense
	// matrix; beyond it the group of categories with most columns is kept apart
	// (see State.Apart). 0 means DenseColumns. Like Clusters it shows in the last bits.
	Dense int
	// Scratch is the folder for sums of clusters that do not fit Memory; "" is the
	// system's folder for temporary files.
	Scratch string
	Meter   *Meter
	// Timings, if not nil, learns where the time goes.
	Timings *Timings
	// Arithmetic is Double unless given.
	Arithmetic Arithmetic
	// Sample, if not nil, is what TakeSample gave for the same input and design.
	Sample *Sample
	// Checkpoint, if not nil, keeps the sums of finished segments and has those that it
	// found left out. The input must be one that can be sampled.
	Checkpoint *Checkpoint

	// For tests.
	createScratch func(dir string) (scratchFile, error)
	heldMost      int64 // bytes of sums of clusters in memory
	fewMost       int   // keys that a worker numbers, unique rows that it keeps
}

// MemoryError says that the sums do not fit.
type MemoryError struct {
	What string // what takes the memory
	Need int64
	Have int64
}

func (e *MemoryError) Error() string {
	return fmt.Sprintf("%s: the sums need at least %s and may take %s; raise --memory, or use coarser groups", e.What, size(e.Need), size(e.Have))
}

func size(n int64) string {
	switch {
	case n >= 10<<30:
		return fmt.Sprintf("%d GiB", n>>30)
	case n >= 1<<30:
		return fmt.Sprintf("%.1f GiB", float64(n)/(1<<30))
	case n >= 1<<20:
		return fmt.Sprintf("%d MiB", n>>20)
	}
	return fmt.Sprintf("%d KiB", n>>10)
}

// ChangedError says that the input was not the same in both passes.
type ChangedError struct{ What string }

func (e *ChangedError) Error() string {
	return "the input changed between the first and the second pass: " + e.What
}

// NoRowsError says that no row was left to use.
type NoRowsError struct {
	Tally     stream.Tally
	Malformed int64
}

func (e *NoRowsError) Error() string {
	t := &e.Tally
	read := t.Excluded + t.Missing + t.ZeroWeight + e.Malformed
	if read == 0 {
		return "no rows: the input holds no data rows"
	}
	return fmt.Sprintf("no rows left to use: %d read, %d malformed, %d excluded by --where, %d with a missing cell, %d of zero weight",
		read, e.Malformed, t.Excluded, t.Missing, t.ZeroWeight)
}
