package stream

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// The pairs of extended evaluation are checked against math/big on the same cells;
// size is what the terms of a sum add up to, to which its error is relative.
func TestExtendedEvaluation(t *testing.T) {
	type number = *big.Float
	wide := func(x float64) number { return new(big.Float).SetPrec(600).SetFloat64(x) }
	add := func(a, b number) number { return wide(0).Add(a, b) }
	sub := func(a, b number) number { return wide(0).Sub(a, b) }
	mul := func(a, b number) number { return wide(0).Mul(a, b) }
	quo := func(a, b number) number { return wide(0).Quo(a, b) }
	pow := func(a number, n int) number {
		p := wide(1)
		for range n {
			p = mul(p, a)
		}
		return p
	}
	abs := func(a number) number { return wide(0).Abs(a) }
	cases := []struct {
		text        string
		value, size func(x, z number) number
	}{
		{"pow(x, 10)", func(x, z number) number { return pow(x, 10) }, nil},
		{"pow(x, 2)", func(x, z number) number { return pow(x, 2) }, nil},
		{"pow(x*z, -3)", func(x, z number) number { return quo(wide(1), pow(mul(x, z), 3)) }, nil},
		{"-(x*z)/7", func(x, z number) number { return quo(wide(0).Neg(mul(x, z)), wide(7)) }, nil},
		{"x*x - z", func(x, z number) number { return sub(mul(x, x), z) }, func(x, z number) number { return add(mul(x, x), abs(z)) }},
		{"x*x - pow(x, 2) + z/3", func(x, z number) number { return quo(z, wide(3)) }, func(x, z number) number { return add(mul(x, x), abs(z)) }},
		{"(x + z)*(x - z)/0.1", func(x, z number) number { return quo(mul(add(x, z), sub(x, z)), wide(0.1)) }, nil},
		{"x/z + z/x", func(x, z number) number { return add(quo(x, z), quo(z, x)) }, func(x, z number) number { return add(abs(quo(x, z)), abs(quo(z, x))) }},
	}
	spec := Spec{Outcome: "y", Where: "x > -1.5"}
	for _, c := range cases {
		spec.Terms = append(spec.Terms, c.text)
	}
	spec.Terms = append(spec.Terms, "x", "log(abs(x))", "z > 0")
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "x", Kind: Float64}, {Name: "z", Kind: Float64}}}
	d, err := NewDesign(spec, schema)
	if err != nil {
		t.Fatal(err)
	}
	const n = BatchRows
	r := rand.New(rand.NewPCG(3, 4))
	b := &Batch{Rows: n, Marks: make([]int64, n)}
	for range d.Uses() {
		v := make([]float64, n)
		for i := range v {
			v[i] = r.NormFloat64()
		}
		b.Cols = append(b.Cols, Vector{Kind: Float64, F64: v})
	}
	var x, z []float64
	for i, u := range d.Uses() {
		switch u.Column {
		case 1:
			x = b.Cols[i].F64
		case 2:
			z = b.Cols[i].F64
		}
	}
	for _, dropped := range []bool{false, true} {
		if dropped {
			x[3], z[17] = -2, math.NaN()
		} else {
			for i := range x {
				x[i] = math.Abs(x[i])
			}
		}
		var plain, ext Block
		e := d.NewEvaluator()
		if err := e.Eval(b, nil, &plain); err != nil {
			t.Fatal(err)
		}
		if len(plain.XLow) > 0 {
			t.Error("low parts although nothing was extended")
		}
		w := d.NewEvaluator()
		w.Extended(true)
		if err := w.Eval(b, nil, &ext); err != nil {
			t.Fatal(err)
		}
		if plain.Rows != ext.Rows || dropped == (plain.Rows == n) {
			t.Fatalf("%d rows, extended %d", plain.Rows, ext.Rows)
		}
		at := 0
		for i := range n {
			if x[i] <= -1.5 || math.IsNaN(z[i]) {
				continue
			}
			for j := range d.Dense {
				if math.Float64bits(plain.X[j][at]) != math.Float64bits(ext.X[j][at]) {
					t.Fatalf("%s: %v, extended %v", d.Dense[j], plain.X[j][at], ext.X[j][at])
				}
				if j >= len(cases) {
					if ext.XLow[j] != nil {
						t.Errorf("%s: has low parts", d.Dense[j])
					}
					continue
				}
				c := &cases[j]
				want := c.value(wide(x[i]), wide(z[i]))
				size := abs(want)
				if c.size != nil {
					size = c.size(wide(x[i]), wide(z[i]))
				}
				off, _ := quo(abs(sub(add(wide(ext.X[j][at]), wide(ext.XLow[j][at])), want)), size).Float64()
				if !(off < 0x1p-98) {
					t.Fatalf("%s at x = %v, z = %v: off by %.2g of its size", c.text, x[i], z[i], off)
				}
			}
			at++
		}
	}
}

// Where pairs have no digits left, at the ends of the range, float64 stands alone.
func TestExtendedEvaluationAtTheEnds(t *testing.T) {
	d, err := NewDesign(Spec{Outcome: "x", Terms: []string{"x*x", "x/3"}}, &Schema{Columns: []Column{{Name: "x", Kind: Float64}}})
	if err != nil {
		t.Fatal(err)
	}
	e := d.NewEvaluator()
	e.Extended(true)
	for _, x := range []float64{1e150, 1e-150, 5e-324, 0, -1e-300} {
		var out Block
		if err := e.Eval(&Batch{Rows: 1, Marks: []int64{0}, Cols: []Vector{{Kind: Float64, F64: []float64{x}}}}, nil, &out); err != nil {
			t.Fatal(err)
		}
		if out.X[0][0] != x*x || out.XLow[0][0] != 0 {
			t.Errorf("%v squared is %v + %v", x, out.X[0][0], out.XLow[0][0])
		}
		if out.X[1][0] != x/3 || !(math.Abs(out.XLow[1][0]) <= 0x1p-52*math.Abs(x)) {
			t.Errorf("%v / 3 is %v + %v", x, out.X[1][0], out.XLow[1][0])
		}
	}
}
