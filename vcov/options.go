package vcov

import (
	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Kind asks for standard errors of one kind.
type Kind struct {
	Name string // classical, hc0 .. hc5, hc4m, cr0 .. cr3, wcr, wcu, driscoll-kraay, hac
	// Cluster is an index into Design.Keys for the kinds with clusters or periods, a
	// crossed key for cr0 and cr1 in several ways; else -1.
	Cluster int
}

// Options say what to compute and how.
type Options struct {
	Errors []Kind
	Level  float64 // of intervals; 0 means 0.95
	// Hypotheses are tested under each of Errors, see stream.Design.ParseHypothesis.
	Hypotheses []string
	// Adjust is how the p of the terms are adjusted for their number: "holm", "bh" or
	// "none" (also the empty string).
	Adjust string
	// Passes forces one or two passes; 0 lets the planner choose.
	Passes int
	// Arithmetic is "double", "extended", or "auto" (also the empty string): extended
	// where the first rows say that coefficients would lose digits.
	Arithmetic string
	// Workers is the number of goroutines that read and sum; 0 means one for
	// each processor.
	Workers int
	// Memory bounds what the sums may take, in bytes; 0 means 2 GiB.
	Memory int64
	// ClusterMemory bounds the clusters' second moments: beyond it a second pass
	// keeps scores only. 0 means a sixteenth of Memory. It must not be derived
	// from Workers, or the last bits would depend on them.
	ClusterMemory int64
	// Scratch is the folder for sums of clusters that do not fit Memory; "" is the
	// system's folder for temporary files.
	Scratch string
	// Covariance asks for the matrix beyond 200 terms.
	Covariance bool
	// Dense is the number of columns up to which the sums are solved as one dense
	// matrix; beyond it the category with most levels is eliminated first. 0 means
	// the default of accum.Options.Dense. The last bits depend on it.
	Dense int
	// Meter, if not nil, is counted up while the scan runs.
	Meter *accum.Meter
	// Draws, Seed and BootWeights are of the wild bootstrap: 0 draws are 9,999;
	// weights are "signs", "six-point" or, by the number of clusters, "auto".
	Draws       int
	Seed        uint64
	BootWeights string
	// Kernel of driscoll-kraay and hac is "bartlett" unless given; Lags their reach in
	// periods (of hac rows, without a period), or chosen by the data with AutoLags.
	Kernel   string
	Lags     int64
	AutoLags bool
	// Order places rows in time for hac; nil for the order of the input.
	Order *RowOrder
	// Buckets is how many replicates the audit has, LeastBuckets to MostBuckets, or 0
	// for as many as the data give, up to UsualBuckets. There is one if the design
	// deals rows to cells (stream.Spec.Buckets), as many as AuditCells says; of FitSums
	// if Deal deals the clusters of a key that the sums hold.
	Buckets int
	Deal    *stream.Buckets
	// Shape asks for Result.Clusterings.
	Shape bool
	// Timings asks for Run.Timings.
	Timings bool
	// Checkpoint, if not nil, keeps the sums of finished segments, for a run that goes on
	// after it was stopped. Not for hac, nor for an input that cannot be sampled.
	Checkpoint *accum.Checkpoint
}
