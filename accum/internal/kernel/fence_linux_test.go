package kernel

import (
	"syscall"
	"testing"
	"unsafe"
)

// fenced returns n elements that end, or begin, where the memory of the process
// does: to read or write one past them is a fault.
func fenced(t *testing.T, n int, atEnd bool) []float64 {
	t.Helper()
	page := syscall.Getpagesize()
	size := (8*n + page - 1) / page * page
	m, err := syscall.Mmap(-1, 0, page+size+page, syscall.PROT_READ|syscall.PROT_WRITE, syscall.MAP_ANON|syscall.MAP_PRIVATE)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := syscall.Munmap(m); err != nil {
			t.Error(err)
		}
	})
	for _, fence := range [][]byte{m[:page], m[page+size:]} {
		if err := syscall.Mprotect(fence, syscall.PROT_NONE); err != nil {
			t.Fatal(err)
		}
	}
	at := page
	if atEnd {
		at += size - 8*n
	}
	return unsafe.Slice((*float64)(unsafe.Pointer(&m[at])), n)
}

func TestNothingOutsideIsTouched(t *testing.T) {
	for _, atEnd := range []bool{false, true} {
		a, b := fenced(t, 7*25, atEnd), fenced(t, 8*25, atEnd)
		d, e := fenced(t, 64, atEnd), fenced(t, 64, atEnd)
		cut := func(x []float64, n int) []float64 {
			if atEnd {
				return x[len(x)-n:]
			}
			return x[:n]
		}
		for rows := 1; rows <= 25; rows++ {
			for colsA := 1; colsA <= 7; colsA++ {
				Gram(cut(d, colsA*(colsA+1)/2), cut(a, colsA*rows), rows, rows, colsA)
				for colsB := 1; colsB <= 8; colsB++ {
					Cross(cut(d, colsA*colsB), colsB, cut(a, colsA*rows), rows, colsA, cut(b, colsB*rows), rows, colsB, rows)
				}
			}
			Scale(cut(d, rows), cut(a, rows), cut(b, rows))
			Axpy(2, cut(a, rows), cut(d, rows))
			for cols := 1; cols <= 5; cols++ {
				n := cols * (cols + 1) / 2
				GramWide(cut(d, n), cut(e, n), cut(a, cols*rows), cut(b, cols*rows), rows, rows, cols)
			}
			Combine(cut(d, rows), cut(a, 5*rows), rows, rows, 5, cut(e, 5))
			ScaleColumns(cut(a, 5*rows), rows, cut(b, 5*rows), rows, rows, 5, cut(e, rows))
			Zeros(cut(a, rows))
			Whiten(cut(d, 9), 3, cut(a, 3*rows), rows, rows)
			Leverage(cut(d, rows), cut(a, 3*rows), rows, rows, 3, cut(e, 9), 3)
			ShiftScale(cut(d, rows), cut(a, rows), 1, 2)
			AxpyWide(2, 0, cut(a, rows), cut(b, rows), cut(d, rows), cut(e, rows))
			ScaleWide(cut(d, rows), cut(e, rows), cut(a, rows), cut(b, rows), 2)
			ShiftScaleWide(cut(d, rows), cut(e, rows), cut(a, rows), cut(b, rows), 1, 0, 2)
		}
	}
}
