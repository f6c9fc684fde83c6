package accum

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"strconv"

	"github.com/tallrow/tallrow/stream"
)

// real is a float64 that keeps its value in JSON, NaN and infinities included.
type real float64

func (x real) MarshalJSON() ([]byte, error) {
	f := float64(x)
	if math.IsNaN(f) || math.IsInf(f, 0) {
		return json.Marshal(strconv.FormatFloat(f, 'g', -1, 64))
	}
	return strconv.AppendFloat(nil, f, 'g', -1, 64), nil
}

func (x *real) UnmarshalJSON(b []byte) error {
	f, err := strconv.ParseFloat(string(bytes.Trim(b, `"`)), 64)
	*x = real(f)
	return err
}

type reals []float64

func (v reals) MarshalJSON() ([]byte, error) {
	if v == nil {
		return []byte("null"), nil
	}
	out := []byte{'['}
	for i, x := range v {
		if i > 0 {
			out = append(out, ',')
		}
		b, _ := real(x).MarshalJSON()
		out = append(out, b...)
	}
	return append(out, ']'), nil
}

func (v *reals) UnmarshalJSON(b []byte) error {
	var list []real
	if err := json.Unmarshal(b, &list); err != nil {
		return err
	}
	*v = nil
	if list != nil {
		*v = make(reals, len(list))
	}
	for i, x := range list {
		(*v)[i] = float64(x)
	}
	return nil
}

type frameDoc struct {
	Terms          int   `json:"terms"`
	Shift          reals `json:"shift"`
	Scale          reals `json:"scale"`
	White          bool  `json:"white"`
	T              reals `json:"triangle"`
	YShift         real  `json:"outcome_shift"`
	YScale         real  `json:"outcome_scale"`
	H              reals `json:"fit"`
	Sample         real  `json:"sample"`
	Cond           real  `json:"condition"`
	Digits         real  `json:"digits"`
	ConstantDigits real  `json:"constant_digits"`
	LowSquares     reals `json:"low_squares"`
	LowRows        real  `json:"low_rows"`
}

// MarshalJSON writes the frame so that UnmarshalJSON gives the same bits.
func (f *Frame) MarshalJSON() ([]byte, error) {
	return json.Marshal(frameDoc{f.Terms, f.Shift, f.Inv, f.White, f.T, real(f.YShift), real(f.YInv), f.H,
		real(f.Sample), real(f.Cond), real(f.Digits), real(f.constantDigits), f.lowSquares, real(f.lowRows)})
}

// UnmarshalJSON is the inverse of MarshalJSON.
func (f *Frame) UnmarshalJSON(b []byte) error {
	var d frameDoc
	if err := json.Unmarshal(b, &d); err != nil {
		return err
	}
	*f = Frame{d.Terms, d.Shift, d.Scale, d.White, d.T, float64(d.YShift), float64(d.YScale), d.H,
		float64(d.Sample), float64(d.Cond), float64(d.Digits), float64(d.ConstantDigits), d.LowSquares, float64(d.LowRows)}
	return nil
}

type partialsDoc struct {
	Max   real  `json:"max"`
	Count int64 `json:"count"`
	Bad   bool  `json:"bad,omitempty"`
}

func (p partials) MarshalJSON() ([]byte, error) {
	return json.Marshal(partialsDoc{real(p.max), p.count, p.bad})
}

func (p *partials) UnmarshalJSON(b []byte) error {
	var d partialsDoc
	err := json.Unmarshal(b, &d)
	*p = partials{float64(d.Max), d.Count, d.Bad}
	return err
}

type whereDoc struct {
	In   uint8  `json:"in"`
	Bits uint64 `json:"bits,omitempty"`
	Text []byte `json:"text,omitempty"`
}

type loneDoc struct {
	NonZero []whereDoc `json:"nonzero"`
	Zero    []whereDoc `json:"zero"`
	Value   reals      `json:"value"`
}

func (t *loneTracker) MarshalJSON() ([]byte, error) {
	list := func(ws []where) []whereDoc {
		out := make([]whereDoc, len(ws))
		for i, w := range ws {
			out[i] = whereDoc{w.in, w.key.Bits, []byte(w.key.Text)}
		}
		return out
	}
	return json.Marshal(loneDoc{list(t.nonzero), list(t.zero), t.value})
}

func (t *loneTracker) UnmarshalJSON(b []byte) error {
	var d loneDoc
	if err := json.Unmarshal(b, &d); err != nil {
		return err
	}
	if len(d.NonZero) != len(d.Zero) || len(d.Zero) != len(d.Value) {
		return errors.New("lengths differ")
	}
	*t = *newLoneTracker(len(d.Zero))
	t.value = d.Value
	fill := func(ws []where, ds []whereDoc) {
		for i, w := range ds {
			ws[i] = where{w.In, stream.KeyValue{Bits: w.Bits, Text: string(w.Text)}}
			if w.In == inMany {
				t.open--
			}
		}
	}
	fill(t.nonzero, d.NonZero)
	fill(t.zero, d.Zero)
	return nil
}
