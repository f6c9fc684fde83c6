package accum

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// A table finds whole keys, through growth and equal hashes.
func TestCellTable(t *testing.T) {
	for _, same := range []bool{false, true} {
		tab := newCellTable(&cellSpec{words: 2, width: 1})
		want := map[[2]uint64]int32{}
		r := rand.New(rand.NewPCG(1, 1))
		span := 90
		if same {
			span = 10 // no growth, which takes hashes of its own
		}
		for range 20_000 {
			k := [2]uint64{uint64(r.IntN(span)), uint64(r.IntN(span))}
			h := hashCell(k[:])
			if same {
				h = 7
			}
			id, seen := want[k]
			if !seen {
				id = int32(len(want))
				want[k] = id
			}
			if got := tab.put(h, k[:]); got != id {
				t.Fatalf("key %v is %d, want %d", k, got, id)
			}
		}
		if tab.size() != len(want) {
			t.Errorf("%d keys, want %d", tab.size(), len(want))
		}
	}
}

// Estimates worked out by hand from the formula of Chao (1984).
func TestCellCount(t *testing.T) {
	s := sampleCells{{'a'}: 1, {'b'}: 1, {'c'}: 1, {'d'}: 2, {'e'}: 5}
	o := sampleCells{{'c'}: 4, {'f'}: 1}
	s.join(o)
	c := s.count()
	if (c != CellCount{Rows: 15, Distinct: 6, Once: 3, Twice: 1}) || c.Estimate() != 6+3*2./(2*2) {
		t.Errorf("%+v, estimate %v", c, c.Estimate())
	}
	if e := (CellCount{Rows: 4, Distinct: 4, Once: 4}).Estimate(); e != 4+4*3./2 {
		t.Errorf("estimate %v", e)
	}
}

// cellSource has rows of few values; every third row of y is shifted.
func cellSource(n, values, segment int) (stream.Source, [][]float64) {
	r := rand.New(rand.NewPCG(uint64(n), 2))
	cols := make([][]float64, 3)
	for range n {
		a, b := float64(r.IntN(values)), float64(r.IntN(2))
		if b == 0 && r.IntN(2) == 0 {
			b = math.Copysign(0, -1) // is 0
		}
		cols[0], cols[1], cols[2] = append(cols[0], a), append(cols[1], b), append(cols[2], a+r.NormFloat64())
	}
	var schema stream.Schema
	var data []stream.Vector
	for j, name := range []string{"a", "b", "y"} {
		schema.Columns = append(schema.Columns, stream.Column{Name: name, Kind: stream.Float64})
		data = append(data, stream.Vector{Kind: stream.Float64, F64: cols[j]})
	}
	return stream.NewMemory(schema, data, segment), cols
}

// Sums by cell are the exact sums of the cell's rows but for rounding of its partial
// sums, and the same bits whoever made them and whenever tables were handed over.
func TestCellsAreExactSums(t *testing.T) {
	src, cols := cellSource(30_000, 40, 2000)
	d, err := stream.NewDesign(stream.Spec{Outcome: "y", Terms: []string{"a", "b"}}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	var want string
	for _, o := range []Options{{Workers: 1}, {Workers: 3}, {Workers: 2, fewMost: 10}, {Workers: 8, fewMost: 30}} {
		o.Memory = 1 << 30
		s, err := First(t.Context(), src, d, Needs{Cells: true}, o)
		if err != nil {
			t.Fatal(err)
		}
		c := s.cells
		if s.CellRows() != 80 || s.CellsLost {
			t.Fatalf("%d cells, lost %v; want 80", s.CellRows(), s.CellsLost)
		}
		text := fmt.Sprint(c.rows, c.size, c.x, c.sum)
		if want == "" {
			want = text
		} else if text != want {
			t.Fatalf("%+v: other sums", o)
		}
		f := s.Frame
		for i, n := range c.rows {
			var count int64
			var exact [5]*big.Float
			for k := range exact {
				exact[k] = new(big.Float).SetPrec(400)
			}
			for r := range cols[0] {
				if cols[0][r] != c.x[0][i] || cols[1][r] != c.x[1][i] {
					continue
				}
				count++
				if f.White {
					t.Fatal("this check takes a frame without whitening")
				}
				v := (cols[2][r] - f.YShift) * f.YInv
				for j := range f.H {
					v = math.FMA(-f.H[j], (cols[j][r]-f.Shift[j])*f.Inv[j], v)
				}
				p := new(big.Float).SetPrec(400).SetFloat64(1)
				for k := 1; k < 5; k++ {
					p.Mul(p, new(big.Float).SetFloat64(v))
					exact[k].Add(exact[k], p)
				}
			}
			if n != count {
				t.Errorf("cell %d has %d rows, want %d", i, n, count)
			}
			for k := 1; k < 5; k++ {
				w, _ := exact[k].Float64()
				if math.Abs(c.sum[k][i]-w) > 1e-12*float64(n) {
					t.Errorf("cell %d: sum of power %d is %v, want %v", i, k, c.sum[k][i], w)
				}
			}
		}
		s.Close()
	}
}

// Too many cells are given up, however they came to the workers; one fewer is kept.
func TestCellsBound(t *testing.T) {
	src, _ := cellSource(20_000, 300, 1000) // 600 cells
	d, err := stream.NewDesign(stream.Spec{Outcome: "y", Terms: []string{"a", "b"}}, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	each := newCellSpec(newLayout(d), false, false, 1<<30, 1).bytes()
	for cells := int64(599); cells <= 600; cells++ {
		for _, o := range []Options{{Workers: 1}, {Workers: 3}, {Workers: 8, fewMost: 20}} {
			o.Memory, o.Clusters = 1<<30, cells*each
			s, err := First(t.Context(), src, d, Needs{Cells: true}, o)
			if err != nil {
				t.Fatal(err)
			}
			if s.CellsLost != (cells < 600) || (s.CellRows() == 0) != s.CellsLost {
				t.Errorf("room for %d of 600: lost %v, kept %d", cells, s.CellsLost, s.CellRows())
			}
			if s.CellsLost {
				if _, err := SecondByCells(s, RowPass{}, o); err == nil {
					t.Error("sums of cells that were lost")
				}
			}
			s.Close()
		}
	}
}
