package stream

import "time"

// Spec is a model as the user writes it, before it meets a schema.
type Spec struct {
	Outcome    string   // expression
	Terms      []string // expressions, in order
	NoConstant bool
	Weight     string // expression, "" for none
	WeightKind WeightKind
	Where      string         // boolean expression, "" for none
	Stop       bool           // --missing stop: the first row with a missing cell is an error
	Keys       []string       // cluster expressions, each one clustering
	Crossed    [][]int        // clusterings by several of Keys at once: ascending indexes
	Buckets    *Buckets       // nil for none
	Sweep      string         // units whose effects are swept out, "" for none; the constant is swept out with them
	Zone       *time.Location // for hour, weekday, month, date of instants; nil is UTC
}

// WeightKind says what a weight means. See the table in package vcov.
type WeightKind uint8

// The kinds of weights.
const (
	NoWeight WeightKind = iota
	Frequency
	Precision
	Sampling
)

// Design is a Spec bound to a schema: every name resolved, every kind checked.
// It is immutable and may be shared by goroutines.
type Design struct {
	Spec Spec
	// Dense names the columns of Block.X, by the text of their expressions:
	// the numeric terms in term order, then numeric factors of category products
	// that are not terms themselves, then the outcome (always last).
	Dense []string
	// Terms in the user's order, the constant not among them.
	Terms []Term
	// Categories are the distinct each(...) of all terms, as in Block.Cat.
	Categories []Category
	// Keys are the clusterings, as in Block.Key.
	Keys []KeyColumn
	// Sweep is the key among Keys whose effects are swept out, -1 without. Spec.Keys
	// stand first.
	Sweep int
	// Parts has, for each of Keys, the keys that it crosses; nil for an expression.
	// Crossed keys follow the others. Their values are for KeyLabel.
	Parts [][]int
	// Buckets is the place in Keys of the key that Spec.Buckets asks for, the last
	// one; -1 without.
	Buckets int

	prog *program
}

// Term is one term of the model.
type Term struct {
	// Text is the canonical text of the expression.
	Text string
	// Dense is the column of Block.X with the term's numeric part: the whole
	// term, or the factor that multiplies the indicators; -1 for a pure category.
	Dense int
	// Categories are indexes into Design.Categories whose indicators are
	// multiplied; empty for a numeric term.
	Categories []int
}

// Category is one each(...) expression.
type Category struct {
	Text string // of the argument
	KeyColumn
	// Base is the label of the base level; valid when HasBase.
	Base    string
	HasBase bool // each(c, base="x")
	NoBase  bool // each(c, base="none"): every level is kept
}

// KeyColumn describes a column of keys.
type KeyColumn struct {
	Text     string // expression
	Kind     Kind
	Zoned    bool
	DateOnly bool
	Hidden   bool // hashes stand for the values, which labels do not show
}

// Block is the used rows of one batch: inside --where, nothing missing,
// weight above zero.
type Block struct {
	Rows int
	// X has one contiguous column for each of Design.Dense: X[j][:Rows].
	X [][]float64
	// XLow has, after Evaluator.Extended, what X leaves off: X[j] + XLow[j] is the
	// column to about twice the digits of float64. Nil for columns that are exact,
	// as cells are, or whose function has no such form. XLow itself is nil without.
	XLow [][]float64
	// Weight is nil without weights.
	Weight []float64
	// Cat and Key hold the keys of Design.Categories and Design.Keys; none is
	// missing. Kind Float64 keys are canonical: -0 is 0.
	Cat []Vector
	Key []Vector
	// Marks of the rows, see Batch.Marks.
	Marks []int64
}

// Tally counts rows by what became of them. Read is the sum of all others.
type Tally struct {
	Used, Excluded, Missing, ZeroWeight int64
	// MissingBy counts, for each column that the outcome, terms, weight and
	// keys read (and for each term whose value does not exist, such as log of a
	// non-positive number), the dropped rows in which it was missing. A row can
	// count under several names.
	MissingBy map[string]int64
	// NoValue counts by expression the rows where an operation on present cells
	// had no value (log of a non-positive number, 0/0).
	NoValue map[string]int64
}
