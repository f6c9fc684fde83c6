package vcov

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Errors when what belongs to periods near each other in time may move together,
// whatever the units (Driscoll & Kraay 1998): with h_t = sum_{i in t} w_i e_i x_i the
// score of a period,
//
//	V = (X'WX)^-1 [ G_0 + sum_j k_j (G_j + G_j') ] (X'WX)^-1,  G_j = sum_t h_t h_{t-j}'
//
// over lags j by distance in time, not by position: a period without rows is a period
// whose score is zero. t on T - 1, T periods with rows; factor 1. Kernels:
//
//	bartlett   k_j = 1 - a, a = j/(L+1)                              Newey & West 1987
//	parzen     1 - 6a^2 + 6a^3 up to a = 1/2, then 2 (1-a)^3         Gallant 1987
//	quadratic  25/(12 pi^2 a^2) (sin z/z - cos z), a = j/S, z = 6 pi a/5   Andrews 1991
//
// The last reaches over all lags. L (or S) is given or chosen from the data by the rule
// of Newey & West (1994), on the sum of the scores of all terms but the constant, each
// less its mean (if there is a constant) and over its spread: units do not matter.
//
// Time O(T L K), memory O(T K).
type lagged struct {
	col  stream.KeyColumn
	at   []int64   // time of each period
	s    []float64 // T x K, scores in solved coordinates
	k    int
	most int64 // numbers kept
}

// Lags says how far errors over time reach.
type Lags struct {
	Kernel string `json:"kernel"` // "bartlett", "parzen" or "quadratic"
	// Lags is L for bartlett and parzen; Bandwidth is L + 1, or S for quadratic.
	Lags      int64  `json:"lags"`
	Bandwidth Number `json:"bandwidth"`
	Chosen    bool   `json:"chosen"` // by the data
	// Periods are those with rows; of hac the rows, with units of the one with most.
	Periods int64 `json:"periods"`
	// Reach is the largest lag that hac summed under quadratic, whose weights never end;
	// beyond it they are below 3e-4 of the first, and all together change an error by
	// about 1e-4 of it. Nil where all were summed.
	Reach *int64 `json:"reach,omitempty"`
	// Period and Unit are the expressions that place the rows of hac; nil for the order
	// of the input, and for one unit. Units is their number.
	Period *string `json:"period,omitempty"`
	Unit   *string `json:"unit,omitempty"`
	Units  int64   `json:"units,omitempty"`
}

// overTime reports whether a kind is of this family.
func overTime(kind string) bool { return kind == "driscoll-kraay" }

// timeOf gives a key a place in time: days of dates, whole numbers as they are.
func timeOf(c stream.KeyColumn, k accum.Key) (int64, bool) {
	switch c.Kind {
	case stream.Time:
		const day = 86_400_000_000_000
		ns := int64(k.Bits)
		d := ns / day
		if ns%day < 0 {
			d--
		}
		return d, c.DateOnly
	case stream.Int64:
		return int64(k.Bits), true
	case stream.Uint64:
		return int64(k.Bits), k.Bits <= math.MaxInt64
	case stream.Float64:
		f := math.Float64frombits(k.Bits)
		return int64(f), f == math.Trunc(f) && math.Abs(f) < 1<<53
	}
	return 0, false
}

// checkPeriod refuses keys that are no time before anything is read.
func checkPeriod(kind string, c stream.KeyColumn) error {
	switch {
	case c.Hidden:
		return stream.Usef("%s: the values of %s are hidden, want days or whole numbers; make the digest with these errors, which leaves its periods readable", kind, c.Text)
	case c.Kind == stream.Time && !c.DateOnly:
		return stream.Usef("%s: %s is a time to the nanosecond, want days or whole numbers, such as date(%s)", kind, c.Text, c.Text)
	case c.Kind == stream.Text, c.Kind == stream.Bool:
		return stream.Usef("%s: %s is %s, want days or whole numbers that count periods", kind, c.Text, c.Kind)
	}
	return nil
}

// add takes in the score of a period; periods come in order.
func (l *lagged) add(k accum.Key, s []float64) error {
	t, ok := timeOf(l.col, k)
	if !ok {
		return fmt.Errorf("driscoll-kraay: %s holds %s, want days or whole numbers that count periods", l.col.Text, stream.FormatKey(l.col, nil, k.KeyValue))
	}
	if need := int64(len(l.s) + len(s)); need > l.most {
		return &accum.MemoryError{What: fmt.Sprintf("driscoll-kraay keeps the scores of %d periods of %s or more", len(l.at)+1, l.col.Text), Need: need * keptShare, Have: l.most * keptShare}
	}
	l.at = append(l.at, t)
	l.s = append(l.s, s...)
	return nil
}

func (l *lagged) score(i int) []float64 { return l.s[i*l.k : (i+1)*l.k] }

// weight is k_j at distance j for the bandwidth b.
func kernelWeight(kernel string, j, b float64) float64 {
	a := j / b
	switch kernel {
	case "bartlett":
		return max(0, 1-a)
	case "parzen":
		switch {
		case a <= 0.5:
			return 1 - 6*a*a + 6*a*a*a
		case a < 1:
			return 2 * (1 - a) * (1 - a) * (1 - a)
		}
		return 0
	}
	if a == 0 {
		return 1
	}
	z := 6 * math.Pi * a / 5
	if z < 1e-2 { // the difference cancels
		return 1 - z*z/10 + z*z*z*z/280
	}
	return 3 / (z * z) * (math.Sin(z)/z - math.Cos(z))
}

// meat is G_0 + sum_j k_j (G_j + G_j'), K x K.
func (l *lagged) meat(o *Lags) []float64 {
	k := l.k
	out := make([]float64, k*k)
	sum := make([]float64, k)
	b := float64(o.Bandwidth)
	from := 0
	for i := range l.at {
		s := l.score(i)
		clear(sum)
		if o.Kernel != "quadratic" {
			for from < i && l.at[i]-l.at[from] > o.Lags {
				from++
			}
		}
		for p := from; p < i; p++ {
			axpy(kernelWeight(o.Kernel, float64(l.at[i]-l.at[p]), b), l.score(p), sum)
		}
		for a := range k {
			row := out[a*k : a*k+a+1]
			for c := range row {
				// s s' + s m' + m s', one triangle
				row[c] = math.FMA(s[a], s[c], row[c])
				row[c] = math.FMA(s[a], sum[c], row[c])
				row[c] = math.FMA(sum[a], s[c], row[c])
			}
		}
	}
	for a := range k {
		for c := range a {
			out[c*k+a] = out[a*k+c]
		}
	}
	return out
}

// choose is the rule of Newey & West (1994), Review of Economic Studies 61, 631-653:
// with sigma_j the autocovariance of the summed scores,
//
//	s^(q) = 2 sum_{j<=n} j^q sigma_j,  s^(0) = sigma_0 + 2 sum_{j<=n} sigma_j
//	bandwidth = c ((s^(q)/s^(0))^2)^(1/(2q+1)) T^(1/(2q+1))
//
// n = 4 (T/100)^(2/9), (4/25), (2/25) and c = 1.1447, 2.6614, 1.3221 for bartlett
// (q = 1), parzen and quadratic (q = 2).
func (l *lagged) choose(kernel string, direction []float64) Lags {
	n := len(l.at)
	span := math.Max(1, float64(l.span()))
	series := make([]float64, n)
	for i := range series {
		series[i] = dot(direction, l.score(i))
	}
	reach := seenLags(kernel, span)
	sigma := make([]float64, reach+1)
	from := 0
	for i := range series {
		for from < i && l.at[i]-l.at[from] > reach {
			from++
		}
		for p := from; p <= i; p++ {
			sigma[l.at[i]-l.at[p]] += series[i] * series[p]
		}
	}
	return chosenLags(kernel, sigma, span)
}

// lagRule gives q, c and the rate of n.
func lagRule(kernel string) (q, c, rate float64) {
	switch kernel {
	case "parzen":
		return 2, 2.6614, 4.0 / 25
	case "quadratic":
		return 2, 1.3221, 2.0 / 25
	}
	return 1, 1.1447, 2.0 / 9
}

// seenLags is n, the largest lag that the rule looks at over t periods.
func seenLags(kernel string, t float64) int64 {
	_, _, rate := lagRule(kernel)
	return int64(math.Floor(4 * math.Pow(t/100, rate)))
}

// chosenLags is the rule from sigma_0 to sigma_n.
func chosenLags(kernel string, sigma []float64, t float64) Lags {
	q, c, _ := lagRule(kernel)
	s0, sq := sigma[0], 0.0
	for j := 1; j < len(sigma); j++ {
		s0 += 2 * sigma[j]
		sq += 2 * math.Pow(float64(j), q) * sigma[j]
	}
	b := c * math.Pow(sq/s0*(sq/s0), 1/(2*q+1)) * math.Pow(t, 1/(2*q+1))
	if math.IsNaN(b) || b < 0 {
		b = 0
	}
	b = min(b, t-1)
	if kernel == "quadratic" {
		return Lags{Kernel: kernel, Bandwidth: Number(max(b, 1e-3)), Chosen: true}
	}
	lags := int64(math.Floor(b))
	return Lags{Kernel: kernel, Lags: lags, Bandwidth: Number(lags + 1), Chosen: true}
}

// reach is what was asked for or chosen.
func (l *lagged) reach(o *Options, direction []float64) Lags {
	out := o.givenLags()
	if o.AutoLags {
		out = l.choose(o.kernel(), direction)
	}
	out.Periods = int64(len(l.at))
	return out
}

// standardised is the sum of all terms but the constant, each less its mean if there is
// a constant and over its spread, in solved coordinates; a constant alone is itself.
func (x *solution) standardised() []float64 {
	k := x.k()
	g := x.project(x.sums)
	// X W = Z Q: the columns of W^-1 are the terms.
	terms := inverse(x.w, k)
	column := func(j int) []float64 {
		c := make([]float64, k)
		for i := range c {
			c[i] = terms[i*k+j]
		}
		return c
	}
	product := func(a, b []float64) (s float64) {
		for i, v := range a {
			s += v * dot(g[i*k:(i+1)*k], b)
		}
		return s
	}
	constant := slices.IndexFunc(x.cols, func(u userColumn) bool { return u.term < 0 })
	if k == 1 && constant == 0 {
		return []float64{1}
	}
	out := make([]float64, k)
	for j := range k {
		if j == constant || math.IsNaN(x.est[j]) {
			continue
		}
		c := column(j)
		if constant >= 0 {
			one := column(constant)
			axpy(-product(one, c)/product(one, one), one, c)
		}
		if size := product(c, c); size > 0 {
			axpy(1/math.Sqrt(size), c, out)
		}
	}
	return out
}

// inverse is that of a k x k matrix, by Gauss-Jordan elimination with pivots by row. It
// is plain Go, for the bits of what hangs on it: other libraries have other sums with
// and without assembly.
func inverse(m []float64, k int) []float64 {
	a := slices.Clone(m)
	out := make([]float64, k*k)
	for i := range k {
		out[i*k+i] = 1
	}
	for j := range k {
		p := j
		for i := j + 1; i < k; i++ {
			if math.Abs(a[i*k+j]) > math.Abs(a[p*k+j]) {
				p = i
			}
		}
		for _, b := range [][]float64{a, out} {
			for c := range k {
				b[j*k+c], b[p*k+c] = b[p*k+c], b[j*k+c]
			}
		}
		by := 1 / a[j*k+j]
		for c := range k {
			a[j*k+c] *= by
			out[j*k+c] *= by
		}
		for i := range k {
			if t := -a[i*k+j]; i != j && t != 0 {
				axpy(t, a[j*k:(j+1)*k], a[i*k:(i+1)*k])
				axpy(t, out[j*k:(j+1)*k], out[i*k:(i+1)*k])
			}
		}
	}
	return out
}

// kernel is Kernel or its default.
func (o *Options) kernel() string { return cmp.Or(o.Kernel, "bartlett") }

// givenLags is the reach without AutoLags.
func (o *Options) givenLags() Lags {
	out := Lags{Kernel: o.kernel(), Lags: o.Lags, Bandwidth: Number(o.Lags + 1)}
	if out.Kernel == "quadratic" {
		out.Bandwidth = Number(max(float64(o.Lags), 1e-3))
	}
	return out
}

// span is the number of periods from the first to the last.
func (l *lagged) span() int64 {
	if len(l.at) == 0 {
		return 0
	}
	return l.at[len(l.at)-1] - l.at[0] + 1
}

// driscollKraay is the estimate from the scores of periods.
func (x *solution) driscollKraay(l *lagged, o *Lags) *estimate {
	m := l.meat(o)
	t := len(l.at)
	return &estimate{v: sandwich(x.inverse, m, x.k()), meat: m, factor: 1, df: float64(t - 1), joint: clusterJoint(t)}
}

// checkLags refuses what cannot be a reach.
func (o *Options) checkLags() error {
	switch o.Kernel {
	case "", "bartlett", "parzen", "quadratic":
	default:
		return stream.Usef("kernel: found %q, want bartlett, parzen or quadratic", o.Kernel)
	}
	if o.Lags < 0 {
		return stream.Usef("lags: found %d, want auto or zero or more", o.Lags)
	}
	return nil
}
