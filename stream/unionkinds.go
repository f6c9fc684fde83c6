package stream

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
)

// csvFormat is the name of the format whose kinds are guesses from the first
// rows, so that they may be settled by what other files hold.
const csvFormat = "csv"

// join makes the schema of the union: the columns of the first file in its
// order, then those that only later files have, then the folder columns.
func (u *union) join(ctx context.Context, folders []Column) error {
	index := make(map[string]int)
	for i, m := range u.members {
		if i > 0 && slices.Equal(m.schema.Columns, u.members[0].schema.Columns) {
			m.schema = u.members[0].schema // one copy for thousands of equal files
			continue
		}
		for _, c := range m.schema.Columns {
			if _, ok := index[c.Name]; !ok {
				index[c.Name] = len(u.schema.Columns)
				u.schema.Columns = append(u.schema.Columns, c)
			}
		}
	}
	u.real = len(u.schema.Columns)
	for _, m := range u.members {
		m.cols = make([]int, u.real)
		m.widen = make([]bool, u.real)
		for c := range m.cols {
			m.cols[c] = -1
		}
		for j, c := range m.schema.Columns {
			m.cols[index[c.Name]] = j
		}
	}
	for c := range u.real {
		if err := u.settle(ctx, c); err != nil {
			return err
		}
	}
	for k, f := range folders {
		if c, ok := index[f.Name]; ok {
			file := slices.IndexFunc(u.members, func(m *member) bool { return m.cols[c] >= 0 })
			dir := slices.IndexFunc(u.members, func(m *member) bool { return m.consts[k].present })
			return fmt.Errorf("column %s: found in %s and also as folder %s of %s, want one of them",
				f.Name, u.members[file].name, u.members[dir].consts[k].folder, u.members[dir].name)
		}
		u.schema.Columns = append(u.schema.Columns, f)
	}
	return nil
}

// column returns the member's description of column c of the union, or nil.
func (m *member) column(c int) *Column {
	if m.cols[c] < 0 {
		return nil
	}
	return &m.schema.Columns[m.cols[c]]
}

// settle finds one kind for column c. Stored kinds must agree. A kind that was
// guessed gives way: with no cell behind it to any other, otherwise only to a
// wider one (int64 to uint64 or float64, days to times).
func (u *union) settle(ctx context.Context, c int) error {
	target := &u.schema.Columns[c]
	equal := true
	for _, m := range u.members {
		if col := m.column(c); col != nil && *col != *target {
			equal = false
		}
	}
	if equal {
		return nil
	}
	empty := make([]bool, len(u.members))
	err := eachMember(len(u.members), func(i int) (err error) {
		if m := u.members[i]; m.guesses && !m.pipe && m.column(c) != nil {
			empty[i], err = m.emptyAtFirst(ctx, m.cols[c])
		}
		return err
	})
	if err != nil {
		return err
	}
	from := -1 // the file that the target comes from
	fixed := false
	for i, m := range u.members {
		col := m.column(c)
		if col == nil || empty[i] {
			continue
		}
		if from < 0 {
			*target, from, fixed = *col, i, !m.guesses
			continue
		}
		joined, ok := joinColumns(*target, *col, fixed, !m.guesses)
		if !ok {
			return u.mismatch(c, u.members[from], m)
		}
		if joined != *target {
			*target, from = joined, i
		}
		fixed = fixed || !m.guesses
	}
	for i, m := range u.members {
		col := m.column(c)
		switch {
		case col == nil || col.Kind == target.Kind:
		case !empty[i] && target.Kind == Float64:
			m.widen[c] = true
		case m.pipe: // its first rows are read and gone
			return u.mismatch(c, u.members[from], m)
		default:
			if m.kinds == nil {
				m.kinds = make(map[string]Kind)
			}
			m.kinds[col.Name] = target.Kind
			m.mu.Lock()
			err := m.shut()
			m.mu.Unlock()
			if err != nil {
				return err
			}
		}
	}
	return nil
}

func (u *union) mismatch(c int, a, b *member) error {
	ca, cb := a.column(c), b.column(c)
	hint := ""
	if a.guesses || b.guesses {
		hint = fmt.Sprintf(` (--kinds "%s=text", or another kind, sets it for all)`, ca.Name)
	}
	return fmt.Errorf("column %s: found %s in %s but %s in %s, want one kind%s",
		ca.Name, describe(ca), a.name, describe(cb), b.name, hint)
}

func describe(c *Column) string {
	switch {
	case c.Kind != Time:
		return c.Kind.String()
	case c.DateOnly:
		return "time (days)"
	case c.Zoned:
		return "time (with zone)"
	}
	return "time (without zone)"
}

// joinColumns returns what can hold the cells of a and b. A column that is
// fixed cannot be widened.
func joinColumns(a, b Column, aFixed, bFixed bool) (Column, bool) {
	wide := a
	switch {
	case a == b:
		return a, true
	case a.Kind == Time && b.Kind == Time && a.Zoned == b.Zoned:
		wide.DateOnly = false
	case !widens(a.Kind) || !widens(b.Kind):
		return a, false
	case a.Kind == Float64 || b.Kind == Float64:
		wide.Kind = Float64
	default:
		wide.Kind = Uint64 // of int64 and uint64
	}
	return wide, !(aFixed && wide != a) && !(bFixed && wide != b)
}

func widens(k Kind) bool { return k == Int64 || k == Uint64 || k == Float64 }

// guessRows is how many rows emptyAtFirst looks at: those that guesses of kinds
// come from.
const guessRows = 1000

// emptyAtFirst reports whether the first rows have no cell in column j, so that
// its kind says nothing.
func (m *member) emptyAtFirst(ctx context.Context, j int) (empty bool, err error) {
	src, err := m.acquire(ctx)
	if err != nil {
		return false, err
	}
	defer func() { err = firstErr(err, m.release()) }()
	sc, err := src.Scan(ctx, []Use{{Column: j}})
	if err != nil {
		return false, err
	}
	defer func() { err = firstErr(err, sc.Close()) }()
	var b Batch
	for rows := 0; rows < guessRows; {
		seg, err := sc.Next(ctx)
		if err == io.EOF {
			break
		}
		if err != nil {
			return false, err
		}
		for rows < guessRows && err == nil {
			if err = seg.Read(&b); err == nil {
				rows += b.Rows
				if hasCell(&b.Cols[0]) {
					return false, seg.Close()
				}
			}
		}
		if close := seg.Close(); err == io.EOF || err == nil {
			err = close
		}
		if err != nil {
			// A cell that does not fit the kind was not there for the guess.
			var row *RowError
			if errors.As(err, &row) && row.Pos.Column == m.schema.Columns[j].Name {
				break
			}
			return false, err
		}
	}
	return true, nil
}

// hasCell reports whether any cell is there.
func hasCell(v *Vector) bool {
	switch v.Kind {
	case Float64:
		return slices.ContainsFunc(v.F64, func(x float64) bool { return x == x })
	case Text:
		return slices.ContainsFunc(v.Code, func(c int32) bool { return c >= 0 })
	}
	return len(v.I64) > 0 && (v.Null == nil || slices.Contains(v.Null, false))
}
