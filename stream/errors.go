package stream

import (
	"errors"
	"fmt"
	"strings"
)

// Sentinels for errors.Is.
var (
	// ErrDamaged marks an input whose bytes contradict its own structure.
	ErrDamaged = errors.New("damaged input")
	// ErrNoSample is returned by Sample of a source that cannot seek.
	ErrNoSample = errors.New("stream: the source cannot be sampled")
	// ErrUse marks a wrong model or option (exit status 2), see UseError.
	ErrUse = errors.New("wrong use")
)

// UseError is a mistake in the model or the options, not in the data. It wraps
// ErrUse.
type UseError struct{ Msg string }

func (e *UseError) Error() string { return e.Msg }

// Unwrap returns ErrUse.
func (e *UseError) Unwrap() error { return ErrUse }

// Usef returns a *UseError.
func Usef(format string, args ...any) error {
	return &UseError{fmt.Sprintf(format, args...)}
}

// Position names a place in an input. Zero fields are unknown.
type Position struct {
	File   string
	Line   int64 // 1-based line of a text file in which the row starts
	Offset int64 `json:",omitzero"` // of its first byte, where the lines before were not counted
	Row    int64 // 1-based data row within the file
	Group  int   // 1-based row group
	Column string
}

// String gives "f.csv line 17 column pallets".
func (p Position) String() string {
	var b strings.Builder
	b.WriteString(p.File)
	if p.Line > 0 {
		fmt.Fprintf(&b, " line %d", p.Line)
	}
	if p.Offset > 0 {
		fmt.Fprintf(&b, " offset %d", p.Offset)
	}
	if p.Group > 0 {
		fmt.Fprintf(&b, " row group %d", p.Group)
	}
	if p.Row > 0 {
		fmt.Fprintf(&b, " row %d", p.Row)
	}
	if p.Column != "" {
		fmt.Fprintf(&b, " column %s", p.Column)
	}
	return b.String()
}

// RowError is a row that cannot be used as asked.
type RowError struct {
	Pos Position
	// Found is what stands there, in quotes if it is a cell.
	Found string
	// Want is what would be right.
	Want string
}

// Error gives `f.csv line 17 column pallets: found "x", want a number`.
func (e *RowError) Error() string {
	return fmt.Sprintf("%s: found %s, want %s", e.Pos, e.Found, e.Want)
}

// DamageError says where an input is damaged. It wraps ErrDamaged.
type DamageError struct {
	Pos  Position
	What string
}

func (e *DamageError) Error() string { return fmt.Sprintf("%s: damaged: %s", e.Pos, e.What) }

// Unwrap returns ErrDamaged.
func (e *DamageError) Unwrap() error { return ErrDamaged }
