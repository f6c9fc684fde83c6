package accum

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// keyColumn makes a column of rows keys of about n values in random order, with
// values that only whole comparison keeps apart.
func keyColumn(kind stream.Kind, rows, n int, seed uint64) stream.Vector {
	rng := rand.New(rand.NewPCG(seed, 3))
	v := stream.Vector{Kind: kind}
	if kind == stream.Text {
		v.Dict = &stream.Dict{}
		for i := range n {
			s := fmt.Sprintf("quay and crane %07d", i*i%n)
			switch i % 7 {
			case 1:
				s = strings.Repeat("a", i%40)
			case 2:
				s = strings.Repeat("\x00", i%11)
			case 3:
				s = fmt.Sprint(i) + "\xff"
			}
			v.Dict.Values = append(v.Dict.Values, s)
		}
	}
	for range rows {
		i := rng.IntN(n)
		switch kind {
		case stream.Text:
			v.Code = append(v.Code, int32(i))
		case stream.Float64:
			v.F64 = append(v.F64, (float64(i)-float64(n)/2)*math.Ldexp(1, i%5*100-200))
		case stream.Bool:
			v.I64 = append(v.I64, int64(i%2))
		case stream.Uint64:
			v.I64 = append(v.I64, int64(math.MaxUint64-uint64(i)*uint64(i%3)*1e12))
		default:
			v.I64 = append(v.I64, (1<<53+int64(i))*int64(1-i%3))
		}
	}
	return v
}

func clusterTable(kind stream.Kind, rows, n int) *table {
	t := randomTable(rows, 11, nil)
	t.schema.Columns[5].Kind = kind
	t.cols[5] = keyColumn(kind, rows, n, 12)
	return t
}

var clusterSpec = stream.Spec{Outcome: "y", Terms: []string{"x1", "x2"}, Weight: "w", WeightKind: stream.Precision, Keys: []string{"key"}}

// scoresOf runs pass two, or pass one of a pipe, and returns the clusters and what
// went to scratch.
func scoresOf(t *testing.T, src stream.Source, o Options, pipe bool) (all []Cluster, runs int64) {
	t.Helper()
	theta := []float64{0.1, -0.2, 0.3, 1}
	if pipe {
		src := once{unsampled{src}}
		s, err := First(t.Context(), src, design(t, src, clusterSpec), Needs{Clusters: []int{0}}, o)
		if err != nil {
			t.Fatal(err)
		}
		defer s.Close()
		if s.Dropped {
			t.Error("the sums of a pipe were dropped")
		}
		sc, err := s.Scores(0, theta, false)
		if err != nil {
			t.Fatal(err)
		}
		return collect(t, sc), s.pool.scratch.meter.Runs.Load()
	}
	s, err := First(t.Context(), src, design(t, src, clusterSpec), Needs{}, o)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Second(t.Context(), src, s, RowPass{Theta: theta, Scores: []int{0}}, o)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	all = collect(t, r.Scores[0])
	if again := collect(t, r.Scores[0]); !slices.EqualFunc(all, again, sameCluster) {
		t.Error("a second walk gives other clusters")
	}
	return all, r.pool.scratch.meter.Runs.Load()
}

// once hides that a source can be read again.
type once struct{ stream.Source }

func (o once) Info() stream.Info {
	i := o.Source.Info()
	i.Rewindable = false
	return i
}

func sameCluster(a, b Cluster) bool {
	return a.Key == b.Key && a.Rows == b.Rows && slices.EqualFunc(a.S, b.S, func(x, y float64) bool { return math.Float64bits(x) == math.Float64bits(y) })
}

// The same bits for every kind of key, in memory and in runs, numbered or by
// partition, for any number of workers; keys and rows against Go's own maps.
func TestClusterBits(t *testing.T) {
	const rows, n = 9000, 3000
	for _, kind := range []stream.Kind{stream.Int64, stream.Uint64, stream.Float64, stream.Time, stream.Bool, stream.Text} {
		tab := clusterTable(kind, rows, n)
		count := map[stream.KeyValue]int64{}
		for i := range rows {
			count[tab.cols[5].Key(i)]++
		}
		for _, pipe := range []bool{false, true} {
			t.Run(fmt.Sprintf("%v/pipe=%v", kind, pipe), func(t *testing.T) {
				src := tab.source(1500)
				base, runs := scoresOf(t, src, Options{Workers: 1, Memory: 1 << 30}, pipe)
				if runs != 0 || len(base) != len(count) {
					t.Fatalf("%d runs, %d clusters, want none and %d", runs, len(base), len(count))
				}
				for i, c := range base {
					if count[c.Key.KeyValue] != c.Rows {
						t.Fatalf("%v has %d rows, want %d", c.Key, c.Rows, count[c.Key.KeyValue])
					}
					if i > 0 && base[i-1].Key.Compare(c.Key) >= 0 {
						t.Fatalf("%v comes before %v", base[i-1].Key, c.Key)
					}
				}
				for _, c := range []struct {
					held    int64
					workers []int
				}{{0, []int{1, 8}}, {100 << 10, []int{1, 2, 3, 8}}, {12 << 10, []int{3}}} {
					held := c.held
					for _, workers := range c.workers {
						o := Options{Workers: workers, Memory: 1 << 30, Scratch: t.TempDir(), heldMost: held, fewMost: 100}
						all, runs := scoresOf(t, src, o, pipe)
						if !slices.EqualFunc(all, base, sameCluster) {
							t.Errorf("%d workers, %d bytes: other clusters", workers, held)
						}
						if kind != stream.Bool && (runs > 0) != (held > 0) {
							t.Errorf("%d workers, %d bytes: %d runs", workers, held, runs)
						}
						if left, _ := os.ReadDir(o.Scratch); len(left) > 0 {
							t.Errorf("%v is left in the scratch folder", left)
						}
					}
				}
			})
		}
	}
}

// Scores over category columns by key, spilled, are what they are in memory.
func TestPlacedScoresSpill(t *testing.T) {
	tab := clusterTable(stream.Int64, 6000, 1000)
	src := tab.source(1500)
	d := design(t, src, stream.Spec{Outcome: "y", Terms: []string{"x1", "each(cat)", "each(cat) * x2"}, Keys: []string{"key"}})
	s, err := First(t.Context(), src, d, Needs{}, Options{Workers: 2, Memory: 1 << 30})
	if err != nil {
		t.Fatal(err)
	}
	theta := make([]float64, len(s.Columns)+1)
	for i := range theta {
		theta[i] = 1 / float64(3+i)
	}
	var base []Cluster
	for _, o := range []Options{{Workers: 1, Memory: 1 << 30}, {Workers: 3, Memory: 1 << 30, fewMost: 10}, {Workers: 2, Memory: 1 << 30, fewMost: 10, heldMost: 30 << 10}} {
		r, err := Second(t.Context(), src, s, RowPass{Theta: theta, Scores: []int{0}}, o)
		if err != nil {
			t.Fatal(err)
		}
		all := collect(t, r.Scores[0])
		if base == nil {
			base = all
		} else if !slices.EqualFunc(all, base, sameCluster) {
			t.Errorf("%+v: other scores", o)
		}
		r.Close()
	}
}

// The route must not hang on the memory that happens to be there.
func TestDroppedBySizeAlone(t *testing.T) {
	const rows, n = 9000, 3000
	src := clusterTable(stream.Int64, rows, n).source(1500)
	d := design(t, src, clusterSpec)
	all, _ := scoresOf(t, src, Options{Workers: 1, Memory: 1 << 30}, false)
	bytes := int64(len(all)) * 16 * 4 * 5 / 2
	for _, limit := range []int64{bytes, bytes - 1} {
		for _, workers := range []int{1, 3} {
			for _, held := range []int64{0, 20 << 10} {
				s, err := First(t.Context(), src, d, Needs{Clusters: []int{0}}, Options{Workers: workers, Memory: 1 << 30, Clusters: limit, heldMost: held, fewMost: 100})
				if err != nil {
					t.Fatal(err)
				}
				if s.Dropped != (limit < bytes) {
					t.Errorf("%d workers, %d bytes held, %d for %d: dropped %v", workers, held, limit, bytes, s.Dropped)
				}
				s.Close()
			}
		}
	}
}

// testFile is a scratch file that can go wrong.
type testFile struct {
	scratchFile
	room   *int64 // bytes until the disk is full
	damage int64  // byte that reads back differently, -1 for none
}

func (f *testFile) Write(b []byte) (int, error) {
	if *f.room -= int64(len(b)); *f.room < 0 {
		return 0, &os.PathError{Op: "write", Path: "tallrow-1", Err: syscall.ENOSPC}
	}
	return f.scratchFile.Write(b)
}

func (f *testFile) ReadAt(b []byte, at int64) (int, error) {
	n, err := f.scratchFile.ReadAt(b, at)
	if f.damage >= at && f.damage < at+int64(n) {
		b[f.damage-at] ^= 0x10
	}
	return n, err
}

func TestScratchTrouble(t *testing.T) {
	for _, kind := range []stream.Kind{stream.Int64, stream.Text} {
		src := clusterTable(kind, 6000, 2000).source(1500)
		d := design(t, src, clusterSpec)
		opts := func(room, damage int64) Options {
			o := Options{Workers: 2, Memory: 1 << 30, Scratch: t.TempDir(), heldMost: 50 << 10, fewMost: 100}
			o.createScratch = func(dir string) (scratchFile, error) {
				f, err := createScratch(dir)
				return &testFile{f, &room, damage}, err
			}
			return o
		}
		s, err := First(t.Context(), src, d, Needs{}, opts(0, -1))
		if err != nil {
			t.Fatal(err)
		}
		rp := RowPass{Theta: []float64{0.1, -0.2, 0.3, 1}, Scores: []int{0}}
		t.Run(fmt.Sprintf("%v/full disk", kind), func(t *testing.T) {
			o := opts(30<<10, -1)
			_, err := Second(t.Context(), src, s, rp, o)
			var e *ScratchError
			if !errors.As(err, &e) || !errors.Is(err, syscall.ENOSPC) || e.Need < 20<<10 {
				t.Fatalf("error %v, want a *ScratchError of a full disk", err)
			}
			for _, want := range []string{o.Scratch, "no space left", "KiB", "--scratch", "--memory"} {
				if !strings.Contains(err.Error(), want) {
					t.Errorf("%q does not say %q", err, want)
				}
			}
		})
		t.Run(fmt.Sprintf("%v/no folder", kind), func(t *testing.T) {
			o := opts(0, -1)
			o.createScratch = nil
			o.Scratch = filepath.Join(o.Scratch, "none")
			_, err := Second(t.Context(), src, s, rp, o)
			var e *ScratchError
			if !errors.As(err, &e) || !strings.Contains(err.Error(), o.Scratch) {
				t.Fatalf("error %v, want a *ScratchError that names %s", err, o.Scratch)
			}
		})
		t.Run(fmt.Sprintf("%v/damage", kind), func(t *testing.T) {
			for at := int64(0); at < 100; at += 3 {
				r, err := Second(t.Context(), src, s, rp, opts(1<<30, at*41))
				if err != nil {
					t.Fatal(err)
				}
				err = r.Scores[0].Each(func(*Cluster) error { return nil })
				r.Close()
				var e *DamageError
				if !errors.As(err, &e) || e.At > at*41 {
					t.Fatalf("byte %d changed: error %v, want a *DamageError", at*41, err)
				}
			}
		})
		t.Run(fmt.Sprintf("%v/stopped", kind), func(t *testing.T) {
			ctx, cancel := context.WithCancel(t.Context())
			o := opts(1<<30, -1)
			create := o.createScratch
			o.createScratch = func(dir string) (scratchFile, error) {
				cancel()
				return create(dir)
			}
			if _, err := Second(ctx, src, s, rp, o); !errors.Is(err, context.Canceled) {
				t.Errorf("error %v, want the context's", err)
			}
			if left, _ := os.ReadDir(o.Scratch); len(left) > 0 {
				t.Errorf("%v is left in the scratch folder", left)
			}
		})
	}
}

// Packed numbers against themselves, and what they take.
func TestPackFixed(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 8))
	check := func(f fixed) {
		t.Helper()
		b := appendFixed([]byte{1}, []fixed{f})
		if len(b) > 18 {
			t.Fatalf("%v takes %d bytes", f, len(b)-1)
		}
		got, n := readFixed(append(slices.Clone(b[1:]), make([]byte, 20)...))
		if got != f || n != len(b)-1 {
			t.Fatalf("%x comes back as %x, %d bytes of %d", f, got, n, len(b)-1)
		}
	}
	for i := range 128 {
		one := fixed{0, 1 << (i & 63)}
		if i >= 64 {
			one = fixed{1 << (i & 63), 0}
		}
		check(one)
		check(fixed{-1, math.MaxUint64}.add(one))
		check(fixed{^one.hi, ^one.lo}.add(fixed{0, 1}))
	}
	check(fixed{})
	for range 100000 {
		f := fixed{int64(rng.Uint64()), rng.Uint64()}
		switch rng.IntN(4) {
		case 0:
			f.hi >>= rng.IntN(64)
		case 1:
			f = fixed{int64(f.lo) >> 63, f.lo}
		case 2:
			f.lo = f.lo >> rng.IntN(64) << rng.IntN(64)
		}
		check(f)
	}
	x, _ := toFixed(0.7, defaultUnit)
	if b := appendFixed(nil, []fixed{x}); len(b) > 9 {
		t.Errorf("a float64 takes %d bytes", len(b))
	}
}

// Numbers in the order of keys, and the sort by them, against the order of keys.
func TestKeyOrder(t *testing.T) {
	for _, kind := range []stream.Kind{stream.Int64, stream.Uint64, stream.Float64, stream.Time, stream.Bool} {
		v := keyColumn(kind, 2000, 500, 4)
		var refs []ref
		for i := range 2000 {
			bits := v.Key(i).Bits
			if keyOf(kind, ordOf(kind, bits)) != bits {
				t.Fatalf("%v %x does not come back", kind, bits)
			}
			refs = append(refs, ref{ordOf(kind, bits), uint64(i)})
		}
		refs = radixSort(refs)
		for i, r := range refs[1:] {
			a, b := v.Key(int(refs[i].at)), v.Key(int(r.at))
			if c := stream.CompareKeys(kind, a, b); c > 0 || c == 0 && refs[i].at > r.at || c != cmp.Compare(refs[i].ord, r.ord) {
				t.Fatalf("%v: %v before %v", kind, a, b)
			}
		}
	}
}
