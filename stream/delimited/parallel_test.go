package delimited

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"slices"
	"sync"
	"testing"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// deadline fails a test that hangs, with the goroutines in the output.
func deadline(t *testing.T, f func()) {
	t.Helper()
	done := make(chan struct{})
	go func() { defer close(done); f() }()
	select {
	case <-done:
	case <-time.After(60 * time.Second):
		panic("the test hangs")
	}
}

// readParallel returns the rows of all segments in order of their numbers.
func readParallel(t *testing.T, src *source, workers int) []string {
	ctx := t.Context()
	sc, err := src.Scan(ctx, allUses(src))
	if err != nil {
		t.Fatal(err)
	}
	defer sc.Close()
	var mu sync.Mutex
	by := map[int][]string{}
	var wg sync.WaitGroup
	for range workers {
		wg.Go(func() {
			for {
				seg, err := sc.Next(ctx)
				if err == io.EOF {
					return
				}
				if err != nil {
					t.Error(err)
					return
				}
				rows, err := readSegment(t, seg, true)
				if err != nil {
					t.Error(err)
				}
				mu.Lock()
				by[seg.Number()] = rows
				mu.Unlock()
				seg.Close()
			}
		})
	}
	wg.Wait()
	var all []string
	for k := range len(by) {
		all = append(all, by[k]...)
	}
	return all
}

func TestParallelScan(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(51, 52)), 2000, ',', false)
	for _, way := range []string{"file", "pipe", "gzip", "spool"} {
		var want []string
		for _, workers := range []int{1, 2, 8} {
			src := openWay(t, way, text, stream.Options{SegmentBytes: 512})
			var got []string
			deadline(t, func() { got = readParallel(t, src, workers) })
			if want == nil {
				want = got
			}
			equalRows(t, fmt.Sprintf("%s, %d workers", way, workers), got, want)
			if way == "spool" {
				deadline(t, func() { got = readParallel(t, src, workers) })
				equalRows(t, "second pass", got, want)
			}
		}
	}
}

// TestAnyOrder reads handed-out segments backwards, skips some and closes some
// early: the others must neither wait for these nor read other rows.
func TestAnyOrder(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(61, 62)), 500, ',', false)
	src := openWay(t, "file", text, stream.Options{SegmentBytes: 256})
	n := src.Info().Segments
	whole := make([][]string, n)
	sc, _ := src.Scan(t.Context(), allUses(src))
	for k := range n {
		seg, err := sc.Next(t.Context())
		if err != nil {
			t.Fatal(err)
		}
		if whole[k], err = readSegment(t, seg, true); err != nil {
			t.Fatal(err)
		}
	}
	r := rand.New(rand.NewPCG(63, 64))
	deadline(t, func() {
		for range 20 {
			sc, err := src.Scan(t.Context(), allUses(src))
			if err != nil {
				t.Error(err)
				return
			}
			var segs []stream.Segment
			for {
				seg, err := sc.Next(t.Context())
				if err == io.EOF {
					break
				}
				if err != nil {
					t.Error(err)
					return
				}
				segs = append(segs, seg)
			}
			r.Shuffle(n, func(i, j int) { segs[i], segs[j] = segs[j], segs[i] })
			var wg sync.WaitGroup
			for i, seg := range segs {
				switch r.IntN(4) {
				case 0:
					seg.Close()
				case 1:
					wg.Go(func() {
						if got, err := readSegment(t, seg, true); err != nil || !slices.Equal(got, whole[seg.Number()]) {
							t.Errorf("segment %d differs: %v", seg.Number(), err)
						}
					})
				default:
					if i%7 != 0 {
						if got, err := readSegment(t, seg, true); err != nil || !slices.Equal(got, whole[seg.Number()]) {
							t.Errorf("segment %d differs: %v", seg.Number(), err)
						}
					}
				}
			}
			wg.Wait()
			sc.Close()
		}
	})
}

func TestCancel(t *testing.T) {
	text := quayText(rand.New(rand.NewPCG(71, 72)), 3000, ',', false)
	for _, way := range []string{"file", "gzip", "pipe", "spool"} {
		for stop := range 12 {
			src := openWay(t, way, text, stream.Options{SegmentBytes: 1024})
			ctx, cancel := context.WithCancel(t.Context())
			sc, err := src.Scan(ctx, allUses(src))
			if err != nil {
				t.Fatal(err)
			}
			deadline(t, func() {
				var wg sync.WaitGroup
				for w := range 4 {
					wg.Go(func() {
						var b stream.Batch
						for k := 0; ; k++ {
							seg, err := sc.Next(ctx)
							if err != nil {
								if err != io.EOF && !errors.Is(err, context.Canceled) && err != errScanClosed {
									t.Error(err)
								}
								return
							}
							for err == nil {
								err = seg.Read(&b)
							}
							if err != io.EOF && !errors.Is(err, context.Canceled) {
								t.Error(err)
							}
							seg.Close()
							if w == 0 && k == stop {
								if stop%2 == 0 {
									cancel()
								} else {
									sc.Close()
								}
							}
						}
					})
				}
				wg.Wait()
				sc.Close()
			})
			cancel()
			src.Close()
		}
	}
}

// TestSilentPipe cancels while a pipe says nothing.
func TestSilentPipe(t *testing.T) {
	pr, pw := io.Pipe()
	defer pw.Close()
	ctx, cancel := context.WithCancel(t.Context())
	time.AfterFunc(20*time.Millisecond, cancel)
	deadline(t, func() {
		if _, err := (Format{}).Open(ctx, stream.Input{Name: "standard input", Pipe: pr}, stream.Options{}); !errors.Is(err, context.Canceled) {
			t.Errorf("got %v", err)
		}
	})
}
