//go:build amd64 && !noasm

package kernel

import (
	"testing"
	"time"

	"golang.org/x/sys/cpu"
)

// peakTime is the nanoseconds that the processor needs for so many
// multiply-adds, in the widest registers that are in use.
func peakTime(n float64) float64 {
	const once, lanes512 = 12, 2 * lanes
	from := time.Now()
	if useAVX512 {
		peakAVX512(int(n / (once * lanes512)))
	} else {
		peakAVX2(int(n / (once * lanes)))
	}
	return float64(time.Since(from).Nanoseconds())
}

func BenchmarkPeak(b *testing.B) {
	if !useAVX2 {
		b.Skip("no AVX2 here")
	}
	const n = 96_000
	for b.Loop() {
		peakTime(n)
	}
	b.ReportMetric(2*n*float64(b.N)/float64(b.Elapsed().Nanoseconds()), "GFLOP/s")
}

// TestDisableAVX2: the tests that name both paths do run both.
func TestDisableAVX2(t *testing.T) {
	before := useAVX2
	if before != (cpu.X86.HasAVX2 && cpu.X86.HasFMA) {
		t.Errorf("assembly in use: %v", before)
	}
	wide := cpu.X86.HasAVX512F && cpu.X86.HasAVX512DQ && cpu.X86.HasAVX512VBMI2
	if useAVX512 != (before && wide) {
		t.Errorf("AVX-512 in use: %v", useAVX512)
	}
	restore := DisableAVX2()
	if useAVX2 || useAVX512 {
		t.Error("still in use when disabled")
	}
	inner := DisableAVX2()
	inner()
	if useAVX2 {
		t.Error("the inner restore undid the outer call")
	}
	restore()
	if useAVX2 != before || useAVX512 != (before && wide) {
		t.Errorf("restored to %v, AVX-512 %v", useAVX2, useAVX512)
	}
	restore = DisableAVX512()
	if useAVX512 || useAVX2 != before {
		t.Errorf("without AVX-512: AVX2 %v, AVX-512 %v", useAVX2, useAVX512)
	}
	restore()
	if !before {
		t.Skip("this processor has no AVX2 and FMA: the assembly is not tested")
	}
}

// TestCuts: every tile is reached, and no tile of one column stands beside a
// wider one.
func TestCuts(t *testing.T) {
	for _, cut := range []struct {
		part func(n, most int) int
		most []int
	}{{part, []int{3, 4}}, {evenPart, narrow[1:]}} {
		for _, most := range cut.most {
			for n := 1; n < 50; n++ {
				for left := n; left > 0; {
					p := cut.part(left, most)
					if p < 1 || p > min(left, most) || p == 1 && n > 1 {
						t.Fatalf("%d columns by %d: a tile of %d with %d left", n, most, p, left)
					}
					left -= p
				}
			}
		}
	}
}
