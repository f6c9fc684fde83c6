package vcov

import (
	"context"
	"slices"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// listed is a model beside whose categories effects are swept out. A first reading
// lists the levels; every level, or combination of them, is then a numeric term under
// the label that it has elsewhere.
type listed struct {
	*solution // of the categories; only its basis is there
	design    *stream.Design
	passes    int
	bytes     int64
}

// mostListed is the number of terms that categories may make beside a sweep.
const mostListed = 200

// listLevels reads the levels of the categories of d in its used rows.
//
// Errors: those of accum.First, and *stream.UseError for a base level that does not
// occur, for too many levels, and for an input that can be read once only.
func listLevels(ctx context.Context, src stream.Source, d *stream.Design, o accum.Options) (*listed, error) {
	unit := d.Keys[d.Sweep].Text
	if !src.Info().Rewindable {
		return nil, stream.Usef("categories beside effects of %s that are swept out take a reading of their levels, and the input can be read once only: give --passes 2 to copy it to --scratch while it is read", unit)
	}
	plain := d.Spec
	plain.Sweep, plain.NoConstant, plain.Crossed = "", false, nil
	if d.Sweep >= len(plain.Keys) { // rows without a unit are not used
		plain.Keys = append(slices.Clone(plain.Keys), d.Spec.Sweep)
	}
	pd, err := stream.NewDesign(plain, src.Schema())
	if err != nil {
		return nil, err
	}
	o.Arithmetic, o.Sample = accum.Double, nil
	s, err := accum.First(ctx, src, pd, accum.Needs{}, o)
	if err != nil {
		return nil, err
	}
	s.Close()
	b, err := newBasis(s)
	if err != nil {
		return nil, err
	}
	l := &listed{solution: &solution{basis: b}, passes: 1 + len(s.Repeated), bytes: s.Bytes * int64(1+len(s.Repeated))}
	made := 0
	spec := d.Spec
	spec.Terms = nil
	for j := 1; j < l.count(); j++ { // 0 is the constant
		u := l.coefficient(j)
		t := &pd.Terms[u.term]
		if len(t.Categories) == 0 {
			spec.Terms = append(spec.Terms, t.Text)
			continue
		}
		if made++; made > mostListed || b.apart != nil {
			return nil, stream.Usef("the categories beside the effects of %s that are swept out have too many levels: they may make %d terms; sweep out the one with most of them", unit, mostListed)
		}
		spec.Terms = append(spec.Terms, b.indicator(t, u))
	}
	if len(spec.Terms) == 0 {
		return nil, stream.Usef("the categories have a single level in the used rows: no term is left beside the effects of %s that are swept out", unit)
	}
	l.design, err = stream.NewDesign(spec, src.Schema())
	return l, err
}

// indicator is the expression of a coefficient of a category term.
func (b *basis) indicator(t *stream.Term, u userColumn) string {
	s := b.state
	c := &s.Columns[u.column]
	var parts []string
	for _, cat := range t.Categories {
		col := &s.Design.Categories[cat]
		k := s.Levels[cat][c.Levels[slices.Index(s.Groups[c.Group].Categories, cat)]]
		label := b.level(cat, k)
		switch {
		case col.Kind == stream.Bool && label == "true":
			parts = append(parts, "("+col.Text+")")
		case col.Kind == stream.Bool:
			parts = append(parts, "!("+col.Text+")")
		case col.Kind == stream.Text || col.Kind == stream.Time:
			parts = append(parts, "("+col.Text+" == "+strconv.Quote(label)+")")
		default:
			parts = append(parts, "("+col.Text+" == "+label+")")
		}
	}
	if t.Dense >= 0 {
		parts = append(parts, "("+s.Design.Dense[t.Dense]+")")
	}
	return strings.Join(parts, " * ")
}

// name gives the coefficients of a basis of the numeric terms the labels of the levels
// that they stand for.
func (l *listed) name(b *basis) {
	for i := range b.cols {
		b.cols[i].label = l.coefficient(1 + i).label
	}
	b.bases, b.notes, b.listed = l.bases, append(b.notes, l.notes...), l
}

// columnsOf is solution.columnsOf for the numeric terms.
func (l *listed) columnsOf(p stream.RestrictionPart) ([]int, error) {
	out, err := l.solution.columnsOf(p)
	for i := range out {
		out[i]--
	}
	return out, err
}
