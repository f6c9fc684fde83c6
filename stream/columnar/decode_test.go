package columnar

import (
	"bytes"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/parquet-go/parquet-go/encoding/rle"
)

// Levels of one bit, against the library's decoder and the walk over run headers.
func TestBitLevels(t *testing.T) {
	r := rand.New(rand.NewPCG(17, 1))
	e := rle.Encoding{BitWidth: 1}
	for k := range 3000 {
		n := 1 + r.IntN(200)
		levels := make([]byte, n)
		for i := range levels {
			if i > 0 && r.IntN(20) < k%20 {
				levels[i] = levels[i-1]
			} else {
				levels[i] = byte(r.IntN(2))
			}
		}
		b, err := e.EncodeLevels(nil, levels)
		if err != nil {
			t.Fatal(err)
		}
		got := make([]byte, n+slack)
		if err := bitLevels(got, b, n); err != nil || !bytes.Equal(got[:n], levels) {
			t.Fatalf("%x: %v, %v, want %v", b, got[:n], err, levels)
		}
		// Other bytes: what the checks accept is what the library reads.
		switch r.IntN(3) {
		case 0:
			b[r.IntN(len(b))] ^= 1 << r.IntN(8)
		case 1:
			b = b[:r.IntN(len(b))]
		case 2:
			n += r.IntN(5) - 2
		}
		if n < 1 {
			continue
		}
		got = make([]byte, n+slack)
		err = bitLevels(got, b, n)
		if want := checkRuns(b, 1, n); err == nil && want != nil {
			t.Fatalf("%x, %d levels: accepted, the walk says %v", b, n, want)
		}
		if err == nil {
			lib, err := e.DecodeLevels(nil, b)
			if err != nil || !bytes.Equal(got[:n], lib[:n]) {
				t.Fatalf("%x: %v, the library reads %v, %v", b, got[:n], lib, err)
			}
		}
	}
}

func TestInside(t *testing.T) {
	r := rand.New(rand.NewPCG(18, 1))
	for range 20000 {
		n := []int{0, 1, 2, 1000, 1024, math.MaxInt32}[r.IntN(6)]
		idx := make([]int32, r.IntN(40))
		for i := range idx {
			idx[i] = int32(r.IntN(max(n, 1)))
		}
		if len(idx) > 0 && r.IntN(2) == 0 {
			for range 1 + r.IntN(2) {
				bad := []int32{-1, math.MinInt32, math.MaxInt32, int32(n), int32(n) - 1, int32(r.Uint32())}
				idx[r.IntN(len(idx))] = bad[r.IntN(len(bad))]
			}
		}
		want := !slices.ContainsFunc(idx, func(i int32) bool { return i < 0 || int(i) >= n })
		if got := inside(idx, n); got != want {
			t.Fatalf("%v below %d: %v", idx, n, got)
		}
	}
}

func TestSpreadRuns(t *testing.T) {
	r := rand.New(rand.NewPCG(19, 1))
	for k := range 2000 {
		def := make([]byte, r.IntN(100))
		var want, dst []int64
		for i := range def {
			if r.IntN(10) >= k%11 {
				def[i] = 1
				dst = append(dst, int64(i))
				want = append(want, int64(i))
			} else {
				want = append(want, -7)
			}
		}
		present := len(dst)
		dst = append(dst, make([]int64, len(def)-present)...)
		spreadRuns(dst, present, def, -7)
		if !slices.Equal(dst, want) {
			t.Fatalf("%v: %v", def, dst)
		}
	}
}
