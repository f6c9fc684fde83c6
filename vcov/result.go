package vcov

import (
	"math"
	"strconv"

	"github.com/tallrow/tallrow/stream"
)

// Format is the name and version of the JSON form of a Result.
const Format = "tallrow-fit/1"

// Number is a float64 whose JSON form is the shortest decimal that gives the
// same bits back, and null for NaN and infinities: "does not exist".
type Number float64

// MarshalJSON implements json.Marshaler.
func (n Number) MarshalJSON() ([]byte, error) {
	f := float64(n)
	if math.IsNaN(f) || math.IsInf(f, 0) {
		return []byte("null"), nil
	}
	return strconv.AppendFloat(nil, f, 'g', -1, 64), nil
}

// UnmarshalJSON implements json.Unmarshaler; null gives NaN.
func (n *Number) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*n = Number(math.NaN())
		return nil
	}
	f, err := strconv.ParseFloat(string(b), 64)
	*n = Number(f)
	return err
}

// Exists reports whether the number is there.
func (n Number) Exists() bool { return !math.IsNaN(float64(n)) && !math.IsInf(float64(n), 0) }

// Result is a fitted model: plain data, the same as its JSON form.
type Result struct {
	Format     string            `json:"format"`
	Version    string            `json:"version"`
	Outcome    string            `json:"outcome"`
	Model      Model             `json:"model"`
	Input      Input             `json:"input"`
	Rows       Rows              `json:"rows"`
	N          int64             `json:"n"`
	Weight     WeightSum         `json:"weight"`
	Rank       int               `json:"rank"`
	Terms      []string          `json:"terms"`
	Estimates  []Number          `json:"estimates"`
	Aliased    []Alias           `json:"aliased"`
	BaseLevels map[string]string `json:"base_levels"`
	Residual   Residual          `json:"residual"`
	R2         Number            `json:"r2"`
	R2Adjusted Number            `json:"r2_adjusted"`
	R2Kind     string            `json:"r2_kind"` // "centred", "uncentred" or "within"
	// Sweep says what was swept out; nil if nothing was.
	Sweep      *Sweep       `json:"sweep,omitempty"`
	Errors     []Errors     `json:"errors"`
	Hypotheses []Hypothesis `json:"hypotheses"`
	SpreadTest SpreadTest   `json:"spread_test"`
	// Leverage is there if a kind of errors takes the leverage of every row.
	Leverage *LeverageSummary `json:"leverage,omitempty"`
	// Clusterings describe the clusters of each clustering, if asked for.
	Clusterings []*Clustering `json:"clusterings,omitempty"`
	// Audit holds the errors beside those of replicates, if asked for.
	Audit    *Audit    `json:"audit,omitempty"`
	Run      Run       `json:"run"`
	Warnings []Warning `json:"warnings"`
}

// Model echoes what was asked.
type Model struct {
	Outcome    string   `json:"outcome"`
	Terms      []string `json:"terms"`
	Constant   bool     `json:"constant"`
	Sweep      *string  `json:"sweep,omitempty"` // units whose effects are swept out
	Weight     *string  `json:"weight"`
	WeightKind *string  `json:"weight_kind"` // "frequency", "precision", "sampling"
	Where      *string  `json:"where"`
	Cluster    []string `json:"cluster"`
	Errors     []string `json:"errors"`
	Hypotheses []string `json:"hypotheses"`
	Adjust     string   `json:"adjust"`          // "none", "holm" or "bh"
	Audit      *string  `json:"audit,omitempty"` // see AuditText
	Missing    string   `json:"missing"`         // "skip" or "stop"
	BadRows    string   `json:"bad_rows"`        // "skip" or "stop"
	Level      Number   `json:"level"`
	Zone       string   `json:"zone"`
}

// Sweep says whose effects were swept out of outcome and terms. Effects counts them:
// units of more than one row.
type Sweep struct {
	Units   string `json:"units"` // expression
	Effects int64  `json:"effects"`
}

// Input identifies what was read.
type Input struct {
	Fingerprint string `json:"fingerprint"`
	Files       int    `json:"files"`
	Bytes       int64  `json:"bytes"`
	// Sums says from which sums the result comes, if from digests.
	Sums *SumsFrom `json:"sums,omitempty"`
}

// SumsFrom names digests and what identifies their sums.
type SumsFrom struct {
	Identity string   `json:"identity"`
	Digests  []string `json:"digests"` // absolute paths
}

// Rows accounts for every row: Read is the sum of the others.
type Rows struct {
	Read       int64            `json:"read"`
	Used       int64            `json:"used"`
	Missing    int64            `json:"missing"`
	Excluded   int64            `json:"excluded"`
	Malformed  int64            `json:"malformed"`
	ZeroWeight int64            `json:"zero_weight"`
	Singleton  int64            `json:"singleton"` // units of one row, whose effects are swept out
	MissingBy  map[string]int64 `json:"missing_by"`
	// LostElsewhere is of answers from sums: see Lost.
	LostElsewhere *Lost `json:"lost_elsewhere,omitempty"`
	// Problems describes the first malformed rows, one line each.
	Problems []string `json:"-"`
}

// Lost bounds the missing rows that lack only what the question does not read: sums
// use the rows in which all that they keep is there.
type Lost struct {
	Least int64 `json:"least"`
	Most  int64 `json:"most"`
}

// WeightSum says which weights were used; Kind is nil without weights.
type WeightSum struct {
	Kind *string `json:"kind"`
	Sum  Number  `json:"sum"`
}

// Alias names a term that is a linear combination of others.
type Alias struct {
	Term      string   `json:"term"`
	DependsOn []string `json:"depends_on"` // empty: the term is zero in every row
}

// Residual describes the residuals.
type Residual struct {
	DF int64  `json:"df"`
	SD Number `json:"sd"`
	SS Number `json:"ss"`
}

// Errors holds the standard errors of one kind and all that follows from them.
// Slices run over Result.Terms; what does not exist is NaN (JSON null).
type Errors struct {
	Kind      string   `json:"kind"`     // see Kind.Name
	Clusters  []string `json:"clusters"` // the clustering expression of a cr kind
	Groups    []int64  `json:"groups"`   // number of clusters
	GroupRows *Spread  `json:"group_rows,omitempty"`
	Status    string   `json:"status"` // "ok" or "unavailable"
	Reason    *string  `json:"reason"`
	Factor    Number   `json:"factor"`
	SE        []Number `json:"se"`
	DF        []Number `json:"df"`
	T         []Number `json:"t"`
	P         []Number `json:"p"`
	Log10P    []Number `json:"log10_p"`
	// PAdjusted is P adjusted for the number of terms by Model.Adjust; the constant is
	// no test. Nil under "none".
	PAdjusted []Number `json:"p_adjusted,omitempty"`
	Low       []Number `json:"low"`
	High      []Number `json:"high"`
	Overall   *Overall `json:"overall"`
	// Extremes is nil for the classical kind and where there is no such combination.
	Extremes *Extremes `json:"extremes,omitempty"`
	// Bootstrap says how wcr and wcu were drawn; se and t are those of cr1.
	Bootstrap *Bootstrap `json:"bootstrap,omitempty"`
	// Lags says how far driscoll-kraay or hac reached.
	Lags *Lags `json:"lags,omitempty"`
	// Covariance is present up to 200 terms, or on request.
	Covariance [][]Number `json:"covariance,omitempty"`
}

// Name gives "hc1" or "cr1(quay)".
func (e *Errors) Name() string {
	if len(e.Clusters) == 0 {
		return e.Kind
	}
	s := e.Kind + "(" + e.Clusters[0]
	for _, c := range e.Clusters[1:] {
		s += ", " + c
	}
	return s + ")"
}

// Spread describes the sizes of clusters, in rows.
type Spread struct {
	Min    int64  `json:"min"`
	Median Number `json:"median"`
	Max    int64  `json:"max"`
}

// Overall is the joint test that all terms but the constant are zero.
type Overall struct {
	DF1 Number `json:"df1"`
	DF2 Number `json:"df2"`
	F   Number `json:"f"`
	P   Number `json:"p"`
}

// Extremes are the linear combinations of terms, but the constant, whose errors are
// the largest and the smallest multiples of the classical ones. A combination is given
// by weights over Result.Terms, of which the one that carries most of it is 1.
type Extremes struct {
	WorstRatio Number   `json:"worst_ratio"`
	Worst      []Number `json:"worst"`
	BestRatio  Number   `json:"best_ratio"`
	Best       []Number `json:"best"`
}

// SpreadTest is Koenker's test of equal spread: whether the squared residuals go with
// the terms.
type SpreadTest struct {
	Statistic Number  `json:"statistic"` // chi-square
	DF        Number  `json:"df"`
	P         Number  `json:"p"`
	Reason    *string `json:"reason"` // why there is none
}

// Hypothesis is a test that was asked for, under one kind of errors: all of its
// restrictions jointly. A single one is also estimated: all terms brought to the
// left, all numbers to the right of the equation, Estimate is what stands on the
// left, and t that less the number over the error.
type Hypothesis struct {
	Text     string  `json:"text"`
	Errors   string  `json:"errors"` // name of the kind
	DF1      Number  `json:"df1"`    // number of independent restrictions
	DF2      Number  `json:"df2"`
	F        Number  `json:"f"`
	P        Number  `json:"p"`
	Estimate Number  `json:"estimate"` // of a single restriction, as SE, T, Low and High
	SE       Number  `json:"se"`
	T        Number  `json:"t"`
	Low      Number  `json:"low"`
	High     Number  `json:"high"`
	Reason   *string `json:"reason"` // why there is no test
}

// Run says how the numbers came about.
type Run struct {
	Passes     int    `json:"passes"`
	Route      string `json:"route"`      // "second moments", "fourth moments", "row pass", "cluster sums", "unique rows"
	Arithmetic string `json:"arithmetic"` // "double" or "extended"
	// ArithmeticReason says why extended arithmetic was taken; empty for double.
	ArithmeticReason string `json:"arithmetic_reason,omitempty"`
	Workers          int    `json:"workers"`
	Segments         int64  `json:"segments"`
	// Digests is how many the sums came from, where no data were read.
	Digests int `json:"digests,omitempty"`
	// Unread is what the row filter excludes by statistics and folder names alone:
	// its rows are among Rows.Excluded, its segments among Segments, its bytes not
	// among Bytes.
	Unread    stream.Unread `json:"unread"`
	Bytes     int64         `json:"bytes"` // read, all passes
	Seconds   Number        `json:"seconds"`
	PeakBytes int64         `json:"peak_bytes"` // of the process; set by the caller
	// SpilledBytes were written to scratch, in SpilledRuns sorted runs, because the
	// sums of clusters did not fit the memory.
	SpilledBytes int64 `json:"spilled_bytes"`
	SpilledRuns  int64 `json:"spilled_runs"`
	// UniqueRows is how many unique rows the errors come from; 0 if from all.
	UniqueRows int    `json:"unique_rows,omitempty"`
	Condition  Number `json:"condition"` // of the terms as the sums hold them
	// Timings says where the time of all workers went, if asked for.
	Timings []Timing `json:"timings,omitempty"`
}

// Timing is the time of one stage of the work, over all workers and passes.
type Timing struct {
	Stage   string `json:"stage"`
	Seconds Number `json:"seconds"`
}

// Warning is something the reader of the numbers must know.
type Warning struct {
	Code string  `json:"code"` // lower-case words joined by -
	Term *string `json:"term"`
	Kind *string `json:"kind"` // name of an error kind
	Text string  `json:"text"`
}
