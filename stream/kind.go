package stream

import "fmt"

// Kind is the type of a column or of a key.
type Kind uint8

// The kinds of columns. Time is a moment or a wall-clock time to the
// nanosecond (years 1678 to 2261).
const (
	Float64 Kind = iota + 1
	Int64
	Uint64
	Bool
	Time
	Text
)

var kindNames = [...]string{Float64: "float64", Int64: "int64", Uint64: "uint64", Bool: "bool", Time: "time", Text: "text"}

// String returns the name that --kinds takes.
func (k Kind) String() string {
	if k == 0 || int(k) >= len(kindNames) {
		return fmt.Sprintf("kind(%d)", uint8(k))
	}
	return kindNames[k]
}

// ParseKind returns the kind of that name; ok is false if there is none.
func ParseKind(name string) (k Kind, ok bool) {
	for i, s := range kindNames {
		if s != "" && s == name {
			return Kind(i), true
		}
	}
	return 0, false
}

// Numeric reports whether cells of the kind are numbers in expressions.
func (k Kind) Numeric() bool {
	return k == Float64 || k == Int64 || k == Uint64 || k == Bool
}

// Column describes one column of a Schema.
type Column struct {
	Name string
	Kind Kind
	// Zoned is true for a Time column of instants (stored with a zone or as
	// UTC), false for wall-clock times.
	Zoned bool
	// DateOnly is true for a Time column whose cells are calendar days.
	DateOnly bool
}

// Schema is the ordered list of columns of a Source.
type Schema struct {
	Columns []Column
}

// Lookup returns the index of the column with exactly that name, or -1.
func (s *Schema) Lookup(name string) int {
	for i := range s.Columns {
		if s.Columns[i].Name == name {
			return i
		}
	}
	return -1
}
