package kernel

// A double-double is an unevaluated sum of two numbers, high and low, |low| at
// most half a unit in the last place of high: about 106 bits (Dekker 1971). Its
// operations below are built from two that are exact, the rounding error of a
// sum (Knuth 1969) and that of a product by math.FMA. Infinities in high parts
// make the low parts NaN; underflow of a product loses digits of it.

// GramWide adds the products of all pairs of columns of a double-double block to
// double-double sums, packed as those of Gram:
//
//	dst[j*(j+1)/2+i] + dstLow[j*(j+1)/2+i] += sum_r x_i[r] x_j[r]    for 0 <= i <= j < cols
//
// where x_j[r] = hi[j*stride+r] + lo[j*stride+r]. Sizes, panics and overlap are
// those of Gram. Each of four lanes sums the high parts of the products and, in
// one number, what these sums and products round off (the compensated dot
// product of Ogita, Rump and Oishi 2005); the lanes are joined as in Gram. The
// error of a sum is at most about rows^2/16, and as a rule two, times 2^-106
// sum |x_i[r] x_j[r]|. About eight times the time of Gram.
func GramWide(dst, dstLow []float64, hi, lo []float64, stride, rows, cols int) {
	if !checkBlock(hi, stride, rows, cols) {
		return
	}
	if len(lo) < (cols-1)*stride+rows {
		panic(shortLow)
	}
	n := cols * (cols + 1) / 2
	if len(dst) < n {
		panic(shortDst)
	}
	if len(dstLow) < n {
		panic(shortLow)
	}
	var out [maxWide]wideLanes
	for j := range cols {
		bHi, bLo := hi[j*stride:], lo[j*stride:]
		for i := 0; i <= j; i += maxWide {
			p := min(j+1-i, maxWide)
			wideDots(&out, p, hi[i*stride:], lo[i*stride:], stride, bHi, bLo, rows)
			for k := range p {
				at := j*(j+1)/2 + i + k
				dst[at], dstLow[at] = out[k].addTo(dst[at], dstLow[at])
			}
		}
	}
}

// AxpyWide adds a multiple of x to y in double-double:
//
//	yHi[i] + yLo[i] += (t + tLow) (xHi[i] + xLo[i])    for 0 <= i < len(xHi)
//
// with an error of about 2^-103 (|y[i]| + |t x[i]|). y may be x itself but must
// not overlap it otherwise. AxpyWide panics when another slice is shorter than
// xHi.
func AxpyWide(t, tLow float64, xHi, xLo, yHi, yLo []float64) {
	n := len(xHi)
	if len(xLo) < n || len(yLo) < n {
		panic(shortLow)
	}
	if len(yHi) < n {
		panic(shortY)
	}
	axpyWide(t, tLow, xHi, xLo, yHi, yLo)
}

// ScaleWide sets dst to a multiple of x in double-double:
//
//	dstHi[i] + dstLo[i] = w (xHi[i] + xLo[i])    for 0 <= i < len(dstHi)
//
// with an error of about 2^-104 |w x[i]|. dst may be x itself but must not
// overlap it otherwise. ScaleWide panics when another slice is shorter than
// dstHi.
func ScaleWide(dstHi, dstLo, xHi, xLo []float64, w float64) {
	checkWide(dstHi, dstLo, xHi, xLo)
	scaleWide(dstHi, dstLo, xHi, xLo, w)
}

// ShiftScaleWide sets dst to x shifted and scaled in double-double:
//
//	dstHi[i] + dstLo[i] = (xHi[i] + xLo[i] - (m + mLow)) inv    for 0 <= i < len(dstHi)
//
// where inv is a power of two. The error is about 2^-104 of the result, however
// much cancels. Overlap and panics are those of ScaleWide.
func ShiftScaleWide(dstHi, dstLo, xHi, xLo []float64, m, mLow, inv float64) {
	checkWide(dstHi, dstLo, xHi, xLo)
	shiftScaleWide(dstHi, dstLo, xHi, xLo, -m, -mLow, inv)
}

func checkWide(dstHi, dstLo, xHi, xLo []float64) {
	n := len(dstHi)
	if len(xHi) < n {
		panic(shortX)
	}
	if len(dstLo) < n || len(xLo) < n {
		panic(shortLow)
	}
}

// maxWide is the number of columns wideDots takes at once.
const maxWide = 4

// wideLanes is a dot product in its four lanes: sums and what they left off.
type wideLanes struct{ sum, left [4]float64 }

// addTo joins the lanes and adds them to a double-double.
func (w *wideLanes) addTo(hi, lo float64) (float64, float64) {
	a, b := joinWide(w.sum[0], w.left[0], w.sum[1], w.left[1])
	c, d := joinWide(w.sum[2], w.left[2], w.sum[3], w.left[3])
	a, b = joinWide(a, b, c, d)
	return twoSum(joinWide(hi, lo, a, b))
}

func joinWide(a, aLow, b, bLow float64) (sum, left float64) {
	s, e := twoSum(a, b)
	return s, (aLow + bLow) + e
}

// twoSum returns a+b and, exactly, what was rounded off.
func twoSum(a, b float64) (s, e float64) {
	s = a + b
	t := s - a
	return s, (a - (s - t)) + (b - t)
}
