package stream

import (
	"math"
	"testing"
)

// The hashes decide what falls together on every machine, so they never change.
func TestHashesAreFixed(t *testing.T) {
	// FNV-1a of "foobar": the test vectors of draft-eastlake-fnv; of "": its offset.
	if got := fnv1a("foobar"); got != 0x85944171f73967e8 {
		t.Errorf("fnv1a %#x", got)
	}
	if got := fnv1a(""); got != 0xcbf29ce484222325 {
		t.Errorf("fnv1a of nothing %#x", got)
	}
	// The first outputs of SplitMix64 from seed 1234567, as Vigna's splitmix64.c gives
	// them.
	x := uint64(1234567)
	for _, want := range []uint64{6457827717110365317, 3203168211198807973, 9817491932198370423, 4593380528125082431, 16408922859458223821} {
		if got := mix(x); got != want {
			t.Errorf("mix %d, want %d", got, want)
		}
		x += 0x9E3779B97F4A7C15
	}
}

func TestBuckets(t *testing.T) {
	const n = 4096
	quay, crane := make([]int32, n), make([]int64, n)
	dict := &Dict{Values: []string{"north", "south", "east", "west", "lock"}}
	y := make([]float64, n)
	for i := range n {
		quay[i], crane[i], y[i] = int32(i%5), int64(i/7%60), float64(i)
	}
	schema := Schema{Columns: []Column{{Name: "minutes", Kind: Float64}, {Name: "quay", Kind: Text}, {Name: "crane", Kind: Int64}}}
	cols := []Vector{{Kind: Float64, F64: y}, {Kind: Text, Code: quay, Dict: dict}, {Kind: Int64, I64: crane}}
	cells := func(where string, b Buckets, segmentRows int) map[int]int64 {
		t.Helper()
		src := NewMemory(schema, cols, segmentRows)
		d, err := NewDesign(Spec{Outcome: "minutes", Where: where, Keys: []string{"quay", "crane"}, Crossed: [][]int{{0, 1}}, Buckets: &b}, &schema)
		if err != nil {
			t.Fatal(err)
		}
		if d.Buckets != 3 || d.Keys[3].Kind != Int64 || len(d.Parts) != 4 {
			t.Fatalf("buckets %d of %d keys", d.Buckets, len(d.Keys))
		}
		scan, err := d.Scan(t.Context(), src)
		if err != nil {
			t.Fatal(err)
		}
		defer scan.Close()
		out := map[int]int64{}
		e := d.NewEvaluator()
		for {
			seg, err := scan.Next(t.Context())
			if err != nil {
				return out
			}
			e.Segment = seg.Number()
			var batch Batch
			var block Block
			for seg.Read(&batch) == nil {
				if err := e.Eval(&batch, seg.Locate, &block); err != nil {
					t.Fatal(err)
				}
				for i := range block.Rows {
					c := block.Key[3].I64[i]
					if c < 0 || c >= int64(b.Cells) {
						t.Fatalf("cell %d of %d", c, b.Cells)
					}
					out[int(block.Marks[i])] = c
				}
			}
			seg.Close()
		}
	}
	for key, of := range map[int]func(i int) int64{0: func(i int) int64 { return int64(quay[i]) }, 1: func(i int) int64 { return crane[i] }} {
		all := cells("", Buckets{key, 50}, 1000)
		seen := map[int64]int64{}
		for i, c := range all {
			if was, ok := seen[of(i)]; ok && was != c {
				t.Fatalf("value %d of key %d lies in cells %d and %d", of(i), key, was, c)
			}
			seen[of(i)] = c
		}
		// The cell hangs on the value alone: not on segments, not on rows left out.
		for i, c := range cells("minutes > 100 && crane != 3", Buckets{key, 50}, 333) {
			if c != all[i] {
				t.Fatalf("row %d moved from cell %d to %d", i, all[i], c)
			}
		}
	}
	rows := cells("", Buckets{-1, 8}, 1000)
	count := make([]float64, 8)
	for _, c := range rows {
		count[c]++
	}
	chi := 0.0
	for _, c := range count {
		chi += (c - n/8) * (c - n/8) / (n / 8)
	}
	if len(rows) != n || chi > 24.3 { // chi-square on 7, p 0.001
		t.Errorf("rows in cells %v, chi-square %v", count, chi)
	}
	for i, c := range cells("crane != 3", Buckets{-1, 8}, 1000) {
		if c != rows[i] {
			t.Fatalf("row %d moved", i)
		}
	}
	if hashKey(Int64, KeyValue{Bits: 1}) == hashKey(Uint64, KeyValue{Bits: 1}) {
		t.Error("the kind is no part of the hash")
	}
	if hashKey(Float64, KeyValue{Bits: math.Float64bits(0.5)}) == 0 {
		t.Error("no hash")
	}
	for _, b := range []Buckets{{2, 8}, {-2, 8}, {0, 0}, {0, MostCells + 1}} {
		if _, err := NewDesign(Spec{Outcome: "minutes", Keys: []string{"quay", "crane"}, Buckets: &b}, &schema); err == nil {
			t.Errorf("%v: taken", b)
		}
	}
}
