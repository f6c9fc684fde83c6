package stream

import "math"

// Extended evaluation. Beside the registers in float64, which stay as they are and
// decide alone which rows are used, sums, products, quotients and whole powers
// have a second value as a pair of numbers hi + lo of about 106 bits (Dekker
// 1971); what they read is a pair too, or a float64 with lo = 0: cells, constants
// and the values of all other operations.

// wideEval holds the pairs of one evaluator.
type wideEval struct {
	list   []int       // instructions with a pair, in order
	hi, lo [][]float64 // by register; nil for those without
	zero   []float64
	diff   [][]float64 // pair minus float64 of each dense column, nil for those without
	out    [][]float64 // the used rows of diff
}

// Extended makes Eval fill Block.XLow. The rest of the block does not change.
func (e *Evaluator) Extended(on bool) {
	switch {
	case !on:
		e.wide = nil
	case e.wide == nil:
		e.wide = newWideEval(e.prog, e.rows)
	}
}

func newWideEval(p *program, rows int) *wideEval {
	n := len(p.code)
	w := &wideEval{hi: make([][]float64, n), lo: make([][]float64, n), zero: make([]float64, rows),
		diff: make([][]float64, len(p.dense)), out: make([][]float64, len(p.dense))}
	wanted := make([]bool, n)
	for _, r := range p.dense {
		wanted[r] = true
	}
	for r := n - 1; r >= 0; r-- {
		if in := &p.code[r]; wanted[r] && in.rational() {
			wanted[in.a] = true
			if in.code == codeAdd || in.code == codeSub || in.code == codeMul || in.code == codeDiv {
				wanted[in.b] = true
			}
		}
	}
	for r := range p.code {
		if wanted[r] && p.code[r].rational() {
			w.list = append(w.list, r)
			w.hi[r], w.lo[r] = make([]float64, rows), make([]float64, rows)
		}
	}
	for j, r := range p.dense {
		if w.hi[r] != nil {
			w.diff[j] = make([]float64, rows)
		}
	}
	return w
}

// rational reports whether the operation has a pair.
func (in *instr) rational() bool {
	switch in.code {
	case codeNeg, codeAdd, codeSub, codeMul, codeDiv, codeSquare, codePowInt:
		return true
	}
	return false
}

// run computes the pairs of n rows from the registers of e.
func (w *wideEval) run(e *Evaluator, n int) {
	if len(w.zero) < n {
		*w = *newWideEval(e.prog, e.rows)
	}
	pair := func(r int) (hi, lo []float64) {
		if w.hi[r] != nil {
			return w.hi[r][:n], w.lo[r][:n]
		}
		return e.num[r][:n], w.zero[:n]
	}
	for _, r := range w.list {
		in := &e.prog.code[r]
		hi, lo := w.hi[r][:n], w.lo[r][:n]
		a, aLow := pair(in.a)
		switch in.code {
		case codeNeg:
			for i := range hi {
				hi[i], lo[i] = -a[i], -aLow[i]
			}
		case codeSquare:
			for i := range hi {
				hi[i], lo[i] = mulPair(a[i], aLow[i], a[i], aLow[i])
			}
		case codePowInt:
			for i := range hi {
				hi[i], lo[i] = powPair(a[i], aLow[i], in.ns)
			}
		default:
			b, bLow := pair(in.b)
			switch in.code {
			case codeAdd:
				for i := range hi {
					hi[i], lo[i] = addPair(a[i], aLow[i], b[i], bLow[i])
				}
			case codeSub:
				for i := range hi {
					hi[i], lo[i] = addPair(a[i], aLow[i], -b[i], -bLow[i])
				}
			case codeMul:
				for i := range hi {
					hi[i], lo[i] = mulPair(a[i], aLow[i], b[i], bLow[i])
				}
			case codeDiv:
				for i := range hi {
					hi[i], lo[i] = divPair(a[i], aLow[i], b[i], bLow[i])
				}
			}
		}
		// Near the ends of the range the error terms underflow or overflow, and what
		// is missing or infinite has none: float64 decides there.
		x := e.num[r][:n]
		for i, h := range hi {
			if s := math.Abs(h); !(s > pairLeast && s < pairMost) && h != 0 || x[i]-x[i] != 0 || lo[i] != lo[i] {
				hi[i], lo[i] = x[i], 0
			}
		}
	}
	for j, r := range e.prog.dense {
		if d := w.diff[j]; d != nil {
			x, hi, lo := e.num[r][:n], w.hi[r][:n], w.lo[r][:n]
			for i := range x {
				d[i] = (hi[i] - x[i]) + lo[i]
			}
		}
	}
}

// The range of numbers whose pairs have all their digits.
const (
	pairLeast = 1e-250
	pairMost  = 1e290
)

// used sets out to the low parts of the used rows: all n of them, or those in e.used.
func (w *wideEval) used(e *Evaluator, n int, all bool, low [][]float64) {
	for j := range low {
		switch {
		case w.diff[j] == nil:
			low[j] = nil
		case all:
			low[j] = w.diff[j][:n]
		default:
			if len(w.out[j]) < e.rows {
				w.out[j] = nil
			}
			w.out[j] = e.gather(w.out[j], w.diff[j])
			low[j] = w.out[j][:n]
		}
	}
}

// addPair returns a + b; the error is some 2^-105 of the result, however much
// cancels.
func addPair(a, aLow, b, bLow float64) (hi, lo float64) {
	s, e := twoSum(a, b)
	t, f := twoSum(aLow, bLow)
	s, e = twoSum(s, e+t)
	return twoSum(s, e+f)
}

// divPair returns a / b.
func divPair(a, aLow, b, bLow float64) (hi, lo float64) {
	q := a / b
	rest := math.FMA(-q, b, a) + aLow
	rest = math.FMA(-q, bLow, rest)
	return twoSum(q, rest/b)
}

// powPair returns a pair to the power n, n not 0.
func powPair(x, xLow float64, n int64) (hi, lo float64) {
	k := n
	if k < 0 {
		k = -k
	}
	h, l := 1.0, 0.0
	p, q := x, xLow
	for {
		if k&1 != 0 {
			h, l = mulPair(h, l, p, q)
		}
		if k >>= 1; k == 0 {
			break
		}
		p, q = mulPair(p, q, p, q)
	}
	if n < 0 {
		h, l = divPair(1, 0, h, l)
	}
	return h, l
}

// twoSum returns a + b and, exactly, what was rounded off.
func twoSum(a, b float64) (s, rest float64) {
	s = a + b
	t := s - a
	return s, (a - (s - t)) + (b - t)
}
