package stream

import (
	"cmp"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// Rows agree in a crossed key exactly where they agree in its parts, its bytes sort
// as its parts do, and its label gives them back.
func TestCrossedKeys(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	names := []string{"", "a", "a\x00", "a\x00\x00b", "a\x00\xff", "b", "\xff"}
	n := 3000
	schema := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "i", Kind: Int64}, {Name: "u", Kind: Uint64}, {Name: "f", Kind: Float64}, {Name: "s", Kind: Text}, {Name: "b", Kind: Bool}}}
	d, err := NewDesign(Spec{Outcome: "y", Keys: []string{"i", "u", "f", "s", "b"}, Crossed: [][]int{{0, 3}, {1, 2, 3, 4}, {2, 3}}}, schema)
	if err != nil {
		t.Fatal(err)
	}
	if got, want := d.Keys[6].Text, "u, f, s, b"; got != want {
		t.Errorf("text %q, want %q", got, want)
	}
	cols := make([]Vector, 6)
	for range n {
		cols[0].F64 = append(cols[0].F64, 1)
		cols[1].I64 = append(cols[1].I64, int64(r.IntN(5)-2)<<(r.IntN(2)*61))
		cols[2].I64 = append(cols[2].I64, int64(uint64(r.IntN(3))<<62))
		cols[3].F64 = append(cols[3].F64, []float64{-1e300, -1, 0, 0.5, 1e-310, 3}[r.IntN(6)])
		cols[4].Code = append(cols[4].Code, int32(r.IntN(len(names))))
		cols[5].I64 = append(cols[5].I64, int64(r.IntN(2)))
	}
	cols[4].Dict = &Dict{Values: names}
	for j := range cols {
		cols[j].Kind = schema.Columns[j].Kind
	}
	batch := Batch{Rows: n, Marks: make([]int64, n)}
	for _, u := range d.Uses() {
		batch.Cols = append(batch.Cols, cols[u.Column])
	}
	var out Block
	if err := d.NewEvaluator().Eval(&batch, nil, &out); err != nil {
		t.Fatal(err)
	}
	for k := 5; k < 8; k++ {
		for range 20_000 {
			a, b := r.IntN(n), r.IntN(n)
			want := 0
			for _, p := range d.Parts[k] {
				want = cmp.Or(want, CompareKeys(d.Keys[p].Kind, out.Key[p].Key(a), out.Key[p].Key(b)))
			}
			if got := CompareKeys(Text, out.Key[k].Key(a), out.Key[k].Key(b)); got != want {
				t.Fatalf("%s, rows %d and %d: order %d, by parts %d", d.Keys[k].Text, a, b, got, want)
			}
		}
		for i := range n {
			var parts []string
			for _, p := range d.Parts[k] {
				parts = append(parts, FormatKey(d.Keys[p], nil, out.Key[p].Key(i)))
			}
			if got, want := d.KeyLabel(k, out.Key[k].Key(i)), strings.Join(parts, " and "); got != want {
				t.Fatalf("label %q, want %q", got, want)
			}
		}
	}
	for _, bad := range [][]int{{0}, {1, 1}, {3, 2}, {0, 9}, {}} {
		if _, err := NewDesign(Spec{Outcome: "y", Keys: []string{"i", "u", "f", "s", "b"}, Crossed: [][]int{bad}}, schema); err == nil {
			t.Errorf("parts %v are taken", bad)
		}
	}
	if !slices.Equal(d.Parts[0], nil) {
		t.Error(fmt.Sprint("parts of a plain key: ", d.Parts[0]))
	}
}

// A full dictionary of tuples is replaced, and equal tuples keep equal bytes.
func TestCrossedKeysRenewTheirDictionary(t *testing.T) {
	keys := []Vector{{Kind: Int64, I64: make([]int64, 512)}, {Kind: Int64, I64: make([]int64, 512)}}
	x := crossing{parts: []int{0, 1}}
	var out Vector
	seen := map[*Dict]bool{}
	for b := range 300 {
		for i := range 512 {
			keys[0].I64[i], keys[1].I64[i] = int64(b), int64(i)
		}
		x.cross(keys, 512, &out)
		seen[out.Dict] = true
		if len(out.Dict.Values) > crossedMost+512 {
			t.Fatalf("%d values in one dictionary", len(out.Dict.Values))
		}
		for i := range 512 {
			if v, _, _ := splitKey(Int64, out.Dict.Values[out.Code[i]][8:]); int64(v.Bits) != int64(i) {
				t.Fatalf("batch %d row %d: second part %d", b, i, int64(v.Bits))
			}
		}
	}
	if len(seen) < 3 {
		t.Errorf("%d dictionaries for 153,600 tuples", len(seen))
	}
}
