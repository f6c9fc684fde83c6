//go:build amd64 && !noasm

package kernel

import (
	"bufio"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

// BenchmarkOpenBLAS holds Gram against OpenBLAS's dsyrk on one thread: blocks of
// 512 rows that stay in the cache, the two taking turns. It needs gcc and libopenblas-dev and runs with
//
//	TALLROW_OPENBLAS=1 go test -run xxx -bench OpenBLAS -benchtime 1x ./accum/internal/kernel
//
// ratio is OpenBLAS's time over ours: above 1 Gram is faster. %peak is the part of
// the processor's multiply-adds that Gram reaches, in registers of the same width.
// The numbers with avx2 are those of the AVX2 tiles alone. OPENBLAS_CORETYPE makes OpenBLAS take the kernels of another processor.
func BenchmarkOpenBLAS(b *testing.B) {
	if os.Getenv("TALLROW_OPENBLAS") == "" {
		b.Skip("compares with another library when TALLROW_OPENBLAS is set")
	}
	other := startDsyrk(b)
	const rows, stride = 512, 520
	for _, cols := range []int{4, 6, 8, 10, 12, 16, 24, 32, 48, 64, 96, 128, 192, 256} {
		b.Run(fmt.Sprintf("openblas=%s/cols=%d", other.core, cols), func(b *testing.B) {
			x := benchBlock(stride, cols)
			dst := make([]float64, cols*(cols+1)/2)
			ours := repeated(func() { Gram(dst, x, stride, rows, cols) })
			const n = 96_000 // multiply-adds
			peak := func(times int) float64 { return peakTime(float64(n * times)) }
			inAVX2 := func(f func(times int) float64) func(times int) float64 {
				return func(times int) float64 {
					defer DisableAVX512()()
					return f(times)
				}
			}
			theirs := func(times int) float64 { return other.run(rows, cols, stride, times) }
			for b.Loop() {
				t := takeTurns(theirs, ours, peak, inAVX2(ours), inAVX2(peak))
				sums := float64(rows * cols * (cols + 1) / 2)
				for i, prefix := range []string{"", "avx2-"} {
					gram, most := t[1+2*i], t[2+2*i]
					b.ReportMetric(2*sums/gram, prefix+"GFLOP/s")
					b.ReportMetric(t[0]/gram, prefix+"ratio")
					b.ReportMetric(100*sums/gram*most/n, prefix+"%peak")
				}
				b.ReportMetric(0, "ns/op")
			}
		})
	}
}

type dsyrk struct {
	b    *testing.B
	in   io.Writer
	out  *bufio.Reader
	core string // the processor whose kernels it chose
}

func startDsyrk(b *testing.B) *dsyrk {
	b.Helper()
	bin := filepath.Join(b.TempDir(), "dsyrk")
	if out, err := exec.Command("gcc", "-O2", "-o", bin, "testdata/dsyrk.c", "-lopenblas").CombinedOutput(); err != nil {
		b.Fatalf("%v\n%s", err, out)
	}
	cmd := exec.Command(bin)
	cmd.Env = append(os.Environ(), "OPENBLAS_NUM_THREADS=1")
	cmd.Stderr = os.Stderr
	in, err := cmd.StdinPipe()
	if err != nil {
		b.Fatal(err)
	}
	out, err := cmd.StdoutPipe()
	if err != nil {
		b.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		b.Fatal(err)
	}
	b.Cleanup(func() {
		_ = in.Close()
		if err := cmd.Wait(); err != nil {
			b.Error(err)
		}
	})
	d := &dsyrk{b: b, in: in, out: bufio.NewReader(out)}
	if _, err := fmt.Fscanln(d.out, &d.core); err != nil {
		b.Fatal(err)
	}
	return d
}

func (d *dsyrk) run(rows, cols, stride, times int) float64 {
	d.b.Helper()
	var ns float64
	if _, err := fmt.Fprintln(d.in, rows, cols, stride, times); err != nil {
		d.b.Fatal(err)
	}
	if _, err := fmt.Fscanln(d.out, &ns); err != nil {
		d.b.Fatal(err)
	}
	return ns
}
