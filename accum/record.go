package accum

import (
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"math"

	"github.com/tallrow/tallrow/stream"
)

// Whole is a whole number of 128 bits in two's complement, high byte first.
type Whole [16]byte

func (f fixed) whole() (w Whole) {
	binary.BigEndian.PutUint64(w[:8], uint64(f.hi))
	binary.BigEndian.PutUint64(w[8:], f.lo)
	return w
}

func (w *Whole) fixed() fixed {
	return fixed{int64(binary.BigEndian.Uint64(w[:8])), binary.BigEndian.Uint64(w[8:])}
}

// Float returns w 2^unit rounded to nearest, ties to even.
func (w Whole) Float(unit int) float64 { return w.fixed().float(unit) }

// What says what a record is the sum of.
type What uint8

// The kinds of records, in the order in which they are handed out.
const (
	// SegmentCheck identifies what a segment held: Key is its number, Sums[0] a hash
	// of its column sums, Table the run that read it. Of text in byte ranges Sums[1]
	// is stream.Quotes.
	SegmentCheck What = iota
	// WeightSum is the sum of the weights.
	WeightSum
	// SecondMoment is the sum of w z_i z_j: Table is j(j+1)/2 + i, i <= j.
	SecondMoment
	// FourthMoment is the sum of a product of four entries of z, Table its place in
	// the order of quartic.
	FourthMoment
	// LevelSums are the sums of products of one combination of levels, PairSums of a
	// pair of combinations.
	LevelSums
	PairSums
	// ClusterSums are the packed second moments of the rows of one cluster.
	ClusterSums
	// Of a second round, over rows when the coefficients are known: MeatSum is an
	// entry of meat Section, SpreadSum one of RowSums.Spread, MeatLevels and MeatPairs
	// are by combinations of levels, ScoreSums the score of one cluster.
	MeatSum
	SpreadSum
	MeatLevels
	MeatPairs
	ScoreSums
	// UnitSums are sums of w z over the rows of a unit whose effect is swept out, in
	// extended arithmetic with what they leave off behind them.
	UnitSums
)

var whatNames = [...]string{"segment", "weight", "second", "fourth", "level", "pair", "cluster",
	"meat", "spread", "meat-level", "meat-pair", "score", "unit"}

func (w What) String() string { return whatNames[w] }

// ParseWhat is the inverse of String.
func ParseWhat(name string) (What, bool) {
	for i, s := range whatNames {
		if s == name {
			return What(i), true
		}
	}
	return 0, false
}

// Record is one row of the table of keyed moment sums. Two records with the same
// What, Section, Table and Key are added by Add; that is all that joining tables
// takes.
type Record struct {
	What    What
	Section int // frame in which z is, index into Header.Sections
	Table   int
	Key     []byte
	Label   string // Key in words, "" where there is none
	Rows    int64
	// Sums are in units of 2^Unit. WeightSum, SecondMoment and
	// FourthMoment are one number each, exact however long: the sum over i of
	// Sums[i] 2^(96 i).
	Unit int
	Sums []Whole
}

// Compare orders records by what, section, table and key.
func (r *Record) Compare(o *Record) int {
	return cmp.Or(cmp.Compare(r.What, o.What), cmp.Compare(r.Section, o.Section), cmp.Compare(r.Table, o.Table), compareBytes(r.Key, o.Key))
}

func compareBytes(a, b []byte) int { return cmp.Compare(string(a), string(b)) }

// long reports whether Sums are the limbs of one number.
func (r *Record) long() bool {
	switch r.What {
	case WeightSum, SecondMoment, FourthMoment, MeatSum, SpreadSum:
		return true
	}
	return false
}

// ErrTwice is returned for a segment that was read twice.
var ErrTwice = errors.New("a segment was read twice")

// Add adds the sums of o, which has the same place, exactly: the order of additions
// does not show. o stays as it is.
//
// Errors: ErrTwice; a description of sums that do not belong together.
func (r *Record) Add(o *Record) error {
	switch {
	case r.What == SegmentCheck:
		return ErrTwice
	case r.long():
		var a, b superSum
		if err := a.setLimbs(r); err != nil {
			return err
		}
		if err := b.setLimbs(o); err != nil {
			return err
		}
		a.merge(&b)
		r.Unit, r.Sums = a.limbs(r.Sums[:0])
	case len(r.Sums) != len(o.Sums) || r.Unit != o.Unit:
		return fmt.Errorf("the sums of %s have %d numbers in units of 2^%d, others %d in units of 2^%d", r.What, len(r.Sums), r.Unit, len(o.Sums), o.Unit)
	default:
		for i := range r.Sums {
			r.Sums[i] = r.Sums[i].fixed().add(o.Sums[i].fixed()).whole()
		}
	}
	r.Rows += o.Rows
	return nil
}

// limbDigits digits of a superSum make one limb.
const limbDigits = 3

// limbs appends the sum as whole numbers of up to 96 bits, all of its sign, without
// zeros at either end: a form that hangs on the value alone.
func (s *superSum) limbs(dst []Whole) (unit int, _ []Whole) {
	t, neg := s.magnitude()
	first, top := 0, superDigits-1
	for top >= 0 && t.digit[top] == 0 {
		top--
	}
	if top < 0 {
		return 0, dst
	}
	for t.digit[first] == 0 {
		first++
	}
	for i := first; i <= top; i += limbDigits {
		var f fixed
		for j := limbDigits - 1; j >= 0; j-- {
			f = fixed{f.hi<<32 | int64(f.lo>>32), f.lo << 32}
			if i+j <= top {
				f = f.add(fixed{0, uint64(t.digit[i+j])})
			}
		}
		if neg {
			f = f.negated()
		}
		dst = append(dst, f.whole())
	}
	return 32*first - 1074, dst
}

func (f fixed) negated() fixed { return fixed{^f.hi, ^f.lo}.add(fixed{0, 1}) }

var errLimbs = errors.New("the limbs of a sum are out of range")

// setLimbs sets s to the number in a record.
func (s *superSum) setLimbs(r *Record) error {
	*s = superSum{}
	if len(r.Sums) == 0 {
		return nil
	}
	at := r.Unit + 1074
	if at < 0 || at%32 != 0 || at/32+limbDigits*(len(r.Sums)-1) >= superDigits {
		return errLimbs
	}
	at /= 32
	for i := range r.Sums {
		f := r.Sums[i].fixed()
		sign := int64(1)
		if f.hi < 0 {
			f, sign = f.negated(), -1
		}
		if f.hi < 0 || f.hi>>32 != 0 {
			return errLimbs
		}
		for j, d := range [limbDigits]uint64{f.lo & math.MaxUint32, f.lo >> 32, uint64(f.hi)} {
			if d == 0 {
				continue
			}
			if k := at + limbDigits*i + j; k < superDigits {
				s.digit[k] += sign * int64(d)
			} else {
				return errLimbs
			}
		}
	}
	s.carry()
	return nil
}

// Value is the number of a record of one number, rounded once.
func (r *Record) Value() float64 {
	var s superSum
	if s.setLimbs(r) != nil {
		return math.NaN()
	}
	return s.value()
}

// appendKey appends the bytes of a key: of a text its own, else eight that sort as
// the values do.
func appendKey(dst []byte, k Key) []byte {
	if k.Kind == stream.Text {
		return append(dst, k.Text...)
	}
	return binary.BigEndian.AppendUint64(dst, ordOf(k.Kind, k.Bits))
}

var errKey = errors.New("a key has the wrong length")

func parseKey(kind stream.Kind, b []byte) (Key, error) {
	k := Key{Kind: kind}
	if kind == stream.Text {
		k.Text = string(b)
		return k, nil
	}
	if len(b) != 8 {
		return k, errKey
	}
	k.Bits = keyOf(kind, binary.BigEndian.Uint64(b))
	return k, nil
}

// appendPart appends one of several keys, with its length in front.
func appendPart(dst []byte, k Key) []byte {
	b := appendKey(nil, k)
	return append(binary.AppendUvarint(dst, uint64(len(b))), b...)
}

// parsePart is the inverse; it returns what follows.
func parsePart(kind stream.Kind, b []byte) (Key, []byte, error) {
	n, m := binary.Uvarint(b)
	if m <= 0 || n > uint64(len(b)-m) {
		return Key{}, nil, errKey
	}
	k, err := parseKey(kind, b[m:m+int(n)])
	return k, b[m+int(n):], err
}
