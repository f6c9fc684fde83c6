package accum

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// table is random data for the engine: y, x1, x2, w, cat, key.
type table struct {
	schema stream.Schema
	cols   []stream.Vector
	rows   int
}

func randomTable(rows int, seed uint64, change func(i int, row []float64)) *table {
	rng := rand.New(rand.NewPCG(seed, 7))
	t := &table{rows: rows, schema: stream.Schema{Columns: []stream.Column{
		{Name: "y", Kind: stream.Float64}, {Name: "x1", Kind: stream.Float64}, {Name: "x2", Kind: stream.Float64},
		{Name: "w", Kind: stream.Float64}, {Name: "cat", Kind: stream.Text}, {Name: "key", Kind: stream.Int64}}}}
	f := make([][]float64, 4)
	var code []int32
	var key []int64
	for i := range rows {
		row := []float64{0, rng.NormFloat64(), rng.ExpFloat64(), float64(1 + rng.IntN(3))}
		c, k := rng.IntN(4), rng.IntN(37)
		row[0] = 2 + row[1] - 3*row[2] + float64(c) + rng.NormFloat64()*(1+row[2])
		if change != nil {
			change(i, row)
		}
		for j := range f {
			f[j] = append(f[j], row[j])
		}
		code = append(code, int32(c))
		key = append(key, int64(k))
	}
	for _, x := range f {
		t.cols = append(t.cols, stream.Vector{Kind: stream.Float64, F64: x})
	}
	t.cols = append(t.cols,
		stream.Vector{Kind: stream.Text, Code: code, Dict: &stream.Dict{Values: []string{"delta", "alpha", "charlie", "bravo"}}},
		stream.Vector{Kind: stream.Int64, I64: key})
	return t
}

func (t *table) source(segmentRows int) stream.Source {
	return stream.NewMemory(t.schema, t.cols, segmentRows)
}

// unsampled hides that a source can seek.
type unsampled struct{ stream.Source }

func (u unsampled) Info() stream.Info {
	i := u.Source.Info()
	i.Sampled = false
	return i
}

func (u unsampled) Sample(context.Context, []stream.Use, float64) (stream.Segment, error) {
	return nil, stream.ErrNoSample
}

func design(t testing.TB, src stream.Source, spec stream.Spec) *stream.Design {
	t.Helper()
	d, err := stream.NewDesign(spec, src.Schema())
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// wants are the model shapes that the engine must sum.
func specs() map[string]stream.Spec {
	return map[string]stream.Spec{
		"plain":       {Outcome: "y", Terms: []string{"x1", "x2", "x1 * x2"}, Keys: []string{"key"}},
		"no constant": {Outcome: "y", Terms: []string{"x1", "x2"}, NoConstant: true, Keys: []string{"key"}},
		"collinear":   {Outcome: "y", Terms: []string{"x2", "pow(x2, 2)", "pow(x2, 3)", "pow(x2, 4)"}, Keys: []string{"key"}},
		"precision":   {Outcome: "y", Terms: []string{"x1", "x2"}, Weight: "w", WeightKind: stream.Precision, Keys: []string{"key"}},
		"categories":  {Outcome: "y", Terms: []string{"x1", "each(cat)", "each(cat) * x2", "each(key)"}, Keys: []string{"key"}},
		"products":    {Outcome: "y", Terms: []string{"x1", "each(cat) * each(key) * x2"}, Weight: "w", WeightKind: stream.Frequency, Keys: []string{"key"}},
	}
}

// columnsOf computes the internal columns and v of every row by their definition.
func columnsOf(s *State, t *table) (z [][]float64, w []float64) {
	f, d := s.Frame, s.Design
	value := func(text string, i int) float64 {
		x1, x2 := t.cols[1].F64[i], t.cols[2].F64[i]
		switch text {
		case "x1":
			return x1
		case "x2":
			return x2
		case "x1 * x2":
			return x1 * x2
		case "pow(x2, 2)":
			return x2 * x2
		case "pow(x2, 3)":
			return math.Pow(x2, 3)
		case "pow(x2, 4)":
			return math.Pow(x2, 4)
		}
		panic(text)
	}
	for i := range t.rows {
		p := len(s.Columns)
		row := make([]float64, p+1)
		row[0] = 1
		c := make([]float64, f.Terms)
		for j := range f.Terms {
			c[j] = (value(d.Dense[j], i) - f.Shift[j]) * f.Inv[j]
		}
		v := (t.cols[0].F64[i] - f.YShift) * f.YInv
		for j := range f.Terms {
			u := c[j]
			if f.White {
				u = 0
				for a := 0; a <= j; a++ {
					u += f.T[a*f.Terms+j] * c[a]
				}
			}
			row[1+j] = u
			v -= f.H[j] * u
		}
		row[p] = v
		for gi, g := range s.Groups {
			combo := make([]int32, len(g.Categories))
			for k, cat := range g.Categories {
				var key Key
				if d.Categories[cat].Kind == stream.Text {
					key = Key{stream.Text, stream.KeyValue{Text: t.cols[4].Dict.Values[t.cols[4].Code[i]]}}
				} else {
					key = Key{stream.Int64, stream.KeyValue{Bits: uint64(t.cols[5].I64[i])}}
				}
				for l, have := range s.Levels[cat] {
					if have == key {
						combo[k] = int32(l)
					}
				}
			}
			for part, dense := range g.Parts {
				x := 1.0
				if dense >= 0 {
					x = (value(d.Dense[dense], i) - f.Shift[dense]) * f.Inv[dense]
				}
				row[s.Column(gi, combo, part)] = x
			}
		}
		z = append(z, row)
		wt := 1.0
		if d.Spec.Weight != "" {
			wt = t.cols[3].F64[i]
		}
		w = append(w, wt)
	}
	return z, w
}

// collect lists the clusters.
func collect(t testing.TB, sc *Scores) (all []Cluster) {
	t.Helper()
	err := sc.Each(func(c *Cluster) error {
		d := *c
		d.Key.Text = strings.Clone(c.Key.Text)
		d.S = slices.Clone(c.S)
		all = append(all, d)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return all
}

func bothArithmetics(t *testing.T, test func(*testing.T, Arithmetic)) {
	t.Run("double", func(t *testing.T) { test(t, Double) })
	t.Run("extended", func(t *testing.T) { test(t, Extended) })
}

func close12(t *testing.T, what string, got, want, scale float64) {
	t.Helper()
	if !(math.Abs(got-want) <= 1e-12*scale) {
		t.Errorf("%s = %v, want %v (scale %v)", what, got, want, scale)
	}
}

// Second moments of every model shape, sampled and in epochs, against the
// definition row by row, and the same bits for any number of workers.
func TestFirstSums(t *testing.T) { bothArithmetics(t, firstSums) }

func firstSums(t *testing.T, a Arithmetic) {
	tab, few := randomTable(5000, 1, nil), randomTable(1500, 1, nil)
	for name, spec := range specs() {
		tab := tab
		if name == "products" {
			tab = few // 300 columns
		}
		for _, epochs := range []bool{false, true} {
			t.Run(fmt.Sprintf("%s/epochs=%v", name, epochs), func(t *testing.T) {
				var src stream.Source = tab.source(700)
				if epochs {
					src = unsampled{src}
				}
				d := design(t, src, spec)
				var base *State
				for _, workers := range []int{1, 2, 3, 8} {
					s, err := First(t.Context(), src, d, Needs{}, Options{Workers: workers, Memory: 1 << 30, Arithmetic: a})
					if err != nil {
						t.Fatal(err)
					}
					if base == nil {
						base = s
						continue
					}
					for i, x := range s.S {
						if math.Float64bits(x) != math.Float64bits(base.S[i]) {
							t.Fatalf("%d workers: S[%d] = %v, one worker %v", workers, i, x, base.S[i])
						}
					}
					if s.Fingerprint != base.Fingerprint {
						t.Error("the fingerprint depends on workers")
					}
				}
				z, w := columnsOf(base, tab)
				n := len(base.Columns) + 1
				for a := range n {
					for b := a; b < n; b++ {
						var sum, scale float64
						for i := range z {
							sum += w[i] * z[i][a] * z[i][b]
							scale += w[i] * math.Abs(z[i][a]*z[i][b])
						}
						close12(t, fmt.Sprintf("S[%d,%d]", a, b), base.S[a*n+b], sum, scale+1)
					}
				}
			})
		}
	}
}

// Meats, leverages, scores of pass two against the definition.
func TestSecondSums(t *testing.T) { bothArithmetics(t, secondSums) }

func secondSums(t *testing.T, a Arithmetic) {
	tab := randomTable(1500, 2, nil)
	for name, spec := range specs() {
		t.Run(name, func(t *testing.T) {
			src := tab.source(700)
			d := design(t, src, spec)
			s, err := First(t.Context(), src, d, Needs{}, Options{Workers: 2, Memory: 1 << 30, Arithmetic: a})
			if err != nil {
				t.Fatal(err)
			}
			p := len(s.Columns)
			rng := rand.New(rand.NewPCG(3, 3))
			theta := make([]float64, p+1)
			whiten := make([]float64, p*2)
			for i := range theta {
				theta[i] = rng.NormFloat64() / 4
			}
			for i := range whiten {
				whiten[i] = rng.NormFloat64() / 100
			}
			theta[p] = 1
			g := func(h float64) float64 { return 1 + 10*h }
			var base *RowSums
			for _, workers := range []int{1, 3} {
				r, err := Second(t.Context(), src, s, RowPass{Theta: theta, Whitener: whiten, K: 2,
					Weights: []func(float64) float64{g}, Scores: []int{0}}, Options{Workers: workers, Memory: 1 << 30, Arithmetic: a})
				if err != nil {
					t.Fatal(err)
				}
				if base != nil {
					for i, x := range r.Meats[0] {
						if x != base.Meats[0][i] {
							t.Fatalf("meat differs between workers: %v, %v", x, base.Meats[0][i])
						}
					}
					want := collect(t, base.Scores[0])
					for i, c := range collect(t, r.Scores[0]) {
						if !slices.Equal(c.S, want[i].S) {
							t.Fatalf("scores differ between workers: %v, %v", c, want[i])
						}
					}
				}
				base = r
			}
			z, w := columnsOf(s, tab)
			n := p + 1
			meat, scale := make([]float64, n*n), make([]float64, n*n)
			score := map[int64][]float64{}
			for i := range z {
				var e, h float64
				for c := range n {
					e += theta[c] * z[i][c]
				}
				for k := range 2 {
					var t float64
					for c := range p {
						t += whiten[c*2+k] * z[i][c]
					}
					h += t * t
				}
				m := w[i] * w[i]
				if spec.WeightKind == stream.Frequency {
					m = w[i]
				} else {
					h *= w[i]
				}
				key := tab.cols[5].I64[i]
				if score[key] == nil {
					score[key] = make([]float64, p)
				}
				for a := range p {
					score[key][a] += w[i] * e * z[i][a]
					for b := range p {
						x := m * e * e * g(h) * z[i][a] * z[i][b]
						meat[a*n+b] += x
						scale[a*n+b] += math.Abs(x)
					}
				}
			}
			for a := range p {
				for b := range p {
					close12(t, fmt.Sprintf("meat[%d,%d]", a, b), base.Meats[0][a*n+b], meat[a*n+b], scale[a*n+b]+1)
				}
			}
			sc := collect(t, base.Scores[0])
			if len(sc) != len(score) {
				t.Fatalf("%d clusters, want %d", len(sc), len(score))
			}
			for i, c := range sc {
				if i > 0 && sc[i-1].Key.Compare(c.Key) >= 0 {
					t.Error("clusters are not in order of key")
				}
				for a := range p {
					close12(t, fmt.Sprintf("score %d of cluster %d", a, c.Key.Bits), c.S[a], score[int64(c.Key.Bits)][a], 1e4)
				}
			}
		})
	}
}

// Fourth moments and cluster sums of pass one give what pass two sums row by row.
func TestOnePassIsTwoPass(t *testing.T) { bothArithmetics(t, onePassIsTwoPass) }

func onePassIsTwoPass(t *testing.T, a Arithmetic) {
	tab := randomTable(6000, 4, nil)
	for _, name := range []string{"plain", "no constant", "collinear", "precision"} {
		spec := specs()[name]
		for _, epochs := range []bool{false, true} {
			t.Run(fmt.Sprintf("%s/epochs=%v", name, epochs), func(t *testing.T) {
				var src stream.Source = tab.source(512)
				if epochs {
					src = unsampled{src}
				}
				d := design(t, src, spec)
				s, err := First(t.Context(), src, d, Needs{Fourth: true, Clusters: []int{0}}, Options{Workers: 2, Memory: 1 << 30, Arithmetic: a})
				if err != nil {
					t.Fatal(err)
				}
				p := len(s.Columns)
				theta := make([]float64, p+1)
				for i := range theta {
					theta[i] = 0.1 / float64(1+i)
				}
				theta[p] = 1
				r, err := Second(t.Context(), src, s, RowPass{Theta: theta, Weights: []func(float64) float64{func(float64) float64 { return 1 }}, Scores: []int{0}}, Options{Workers: 2, Memory: 1 << 30, Arithmetic: a})
				if err != nil {
					t.Fatal(err)
				}
				m, ok := s.Fourth(theta, false)
				if !ok {
					t.Fatal("no fourth moments")
				}
				abs, _ := s.Fourth(theta, true)
				n := p + 1
				for a := range p {
					for b := range p {
						close12(t, fmt.Sprintf("meat[%d,%d]", a, b), m[a*n+b], r.Meats[0][a*n+b], math.Sqrt(r.Meats[0][a*n+a]*r.Meats[0][b*n+b]))
						if math.Abs(m[a*n+b]) > abs[a*n+b]*(1+1e-12) {
							t.Errorf("the sum of absolute values %v is below the sum %v", abs[a*n+b], m[a*n+b])
						}
					}
				}
				sc, err := s.Scores(0, theta, false)
				if err != nil {
					t.Fatal(err)
				}
				want := collect(t, r.Scores[0])
				for i, c := range collect(t, sc) {
					if c.Key != want[i].Key || c.Rows != want[i].Rows {
						t.Fatalf("cluster %d: %v %d, want %v %d", i, c.Key, c.Rows, want[i].Key, want[i].Rows)
					}
					for a := range p {
						close12(t, "score", c.S[a], want[i].S[a], 1e3)
					}
				}
			})
		}
	}
}

// Values that the frame rows did not announce: keyed sums must change their unit
// and not wrap.
func TestUnitIsRenewed(t *testing.T) {
	for _, size := range []float64{1e13, 1e-13} {
		tab := randomTable(3000, 5, func(i int, row []float64) {
			if i >= 1500 && size > 1 {
				row[1] *= size
			}
			if size < 1 {
				if i < 600 {
					row[0], row[1] = 1e13*row[0], 1e13*row[1]
				} else {
					row[0], row[1] = 1e-6*row[0], 1e-6*row[1]
				}
			}
		})
		// The frame comes from the first rows only.
		src := firstRows{tab.source(3000)}
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}, Keys: []string{"key"}})
		s, err := First(t.Context(), src, d, Needs{Clusters: []int{0}}, Options{Workers: 1, Memory: 1 << 30})
		if err != nil {
			t.Fatal(err)
		}
		theta := []float64{0.1, -0.2, 1}
		sc, err := s.Scores(0, theta, false)
		if err != nil {
			t.Fatal(err)
		}
		r, err := Second(t.Context(), src, s, RowPass{Theta: theta, Scores: []int{0}}, Options{Workers: 1, Memory: 1 << 30})
		if err != nil {
			t.Fatal(err)
		}
		want := collect(t, r.Scores[0])
		for i, c := range collect(t, sc) {
			for j, a := range c.S {
				if b := want[i].S[j]; math.IsNaN(a) || math.Abs(a-b) > 1e-9*(math.Abs(a)+math.Abs(b)) && size > 1 {
					t.Fatalf("size %g: score %v from sums, %v from rows", size, a, b)
				}
			}
		}
		if size > 1 && len(s.Repeated) == 0 {
			t.Error("the sums did not change their unit")
		}
	}
}

// firstRows samples only the start of the input.
type firstRows struct{ stream.Source }

func (f firstRows) Sample(ctx context.Context, uses []stream.Use, _ float64) (stream.Segment, error) {
	return f.Source.Sample(ctx, uses, 0)
}

func TestRefusals(t *testing.T) {
	tab := randomTable(4000, 6, nil)
	src := tab.source(700)
	opts := Options{Workers: 2, Memory: 1 << 20}
	t.Run("levels beyond memory", func(t *testing.T) {
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"each(x1)"}})
		few := opts
		few.Memory = 1 << 18 // well below what 4,000 levels take, however workers share them
		_, err := First(t.Context(), src, d, Needs{}, few)
		var m *MemoryError
		if !errors.As(err, &m) || !strings.Contains(err.Error(), "each(x1) has") {
			t.Errorf("error %v, want a *MemoryError that names each(x1)", err)
		}
	})
	t.Run("clusters beyond their share are dropped", func(t *testing.T) {
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}, Keys: []string{"x2"}})
		s, err := First(t.Context(), src, d, Needs{Clusters: []int{0}}, opts)
		if err != nil {
			t.Fatal(err)
		}
		if !s.Dropped {
			t.Error("4000 clusters of 6 sums fit 64 KiB")
		}
		if _, err := s.Scores(0, []float64{0, 0, 1}, false); err == nil {
			t.Error("dropped sums gave scores")
		}
	})
	t.Run("no rows", func(t *testing.T) {
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}, Where: "x1 > 100"})
		_, err := First(t.Context(), src, d, Needs{}, opts)
		var n *NoRowsError
		if !errors.As(err, &n) || n.Tally.Excluded != 4000 {
			t.Errorf("error %v, want a *NoRowsError with 4000 excluded", err)
		}
	})
	t.Run("other values in pass two", func(t *testing.T) {
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}})
		s, err := First(t.Context(), src, d, Needs{}, opts)
		if err != nil {
			t.Fatal(err)
		}
		tab.cols[0].F64[3999] += 1e-9
		_, err = Second(t.Context(), src, s, RowPass{Theta: []float64{0, 0, 1}}, opts)
		tab.cols[0].F64[3999] -= 1e-9
		var c *ChangedError
		if !errors.As(err, &c) {
			t.Errorf("error %v, want a *ChangedError", err)
		}
	})
	t.Run("sums beyond float64", func(t *testing.T) {
		big := randomTable(2000, 8, func(i int, row []float64) {
			if i == 1999 {
				row[1] = 1e300
			}
		})
		src := firstRows{big.source(2000)}
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}})
		if _, err := First(t.Context(), src, d, Needs{}, opts); err == nil || !strings.Contains(err.Error(), "range of float64") {
			t.Errorf("error %v, want one about the range of float64", err)
		}
	})
	t.Run("cancelled", func(t *testing.T) {
		ctx, cancel := context.WithCancel(t.Context())
		cancel()
		d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}})
		if _, err := First(ctx, src, d, Needs{}, opts); !errors.Is(err, context.Canceled) {
			t.Errorf("error %v, want context.Canceled", err)
		}
	})
}

// The error of the lowest segment wins, whatever the number of workers.
func TestFirstErrorWins(t *testing.T) {
	tab := randomTable(20000, 9, func(i int, row []float64) {
		if i == 5123 || i == 9000 || i == 19999 {
			row[1] = math.Inf(1)
		}
	})
	src := tab.source(1000)
	d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1"}})
	for _, workers := range []int{1, 2, 8} {
		_, err := First(t.Context(), src, d, Needs{}, Options{Workers: workers, Memory: 1 << 30})
		var re *stream.RowError
		if !errors.As(err, &re) || re.Pos.Row != 5124 {
			t.Errorf("%d workers: error %v, want one at row 5124", workers, err)
		}
	}
}
