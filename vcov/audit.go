package vcov

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strconv"

	"gonum.org/v1/gonum/mathext"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Audit holds errors that rest on no formula for the spread of rows beside those that
// do. The data are dealt to R disjoint buckets by a fixed hash: whole clusters, so
// that rows which move together stay together, or row by row. With A, a the second
// moments X'WX, X'Wy, b = A^-1 a, and A_r, a_r those of bucket r,
//
//	random groups   b_r   = A_r^-1 a_r,              V = sum (b_r - b-)^2 / (R)
//	delete a group  b_(r) = (A - A_r)^-1 (a - a_r),  V = (R-1)/R sum (b_(r) - b)^2
//
// with b- the mean of the b_r (Wolter 2007, chapters 2 and 4; Kott 2001; Shao & Tu
// 1995). Both hold whatever the spread of rows and however those of one bucket move
// together. V of delete-a-group is (R-1)/R times that of cr3 with buckets for
// clusters, and an analytic error is judged by it: if that is right,
//
//	(SE_replicate / SE_analytic)^2 ~ chi2_f / f
//
// f is R - 1, or Satterthwaite's degrees of freedom of the buckets (as for cr2 over
// clusters) where they are fewer: few buckets then decide the term, and the
// replicates know its error less well.
//
// The audit cannot see what buckets cut: rows that move together but lie in different
// buckets look independent to it, as they do to the error it judges. Rows dealt one by
// one show nothing of clusters, whole clusters nothing of dependence between them.
//
// Slices run over Result.Terms; what does not exist is NaN (JSON null). Memory
// O(C P^2) for the C cells of stream.Buckets, time O(C P^2 + R P^3).
type Audit struct {
	Clusters []string `json:"clusters"` // what stays together; empty: rows were dealt
	Asked    *int     `json:"asked"`    // number of buckets asked for
	Buckets  int      `json:"buckets"`  // R
	Cells    int      `json:"cells"`    // of the hash that hold rows; R is at most a quarter
	Rows     *Spread  `json:"rows"`     // sizes of the buckets
	DF       Number   `json:"df"`       // R - 1
	Level    Number   `json:"level"`    // of the intervals of Against, and of all its findings together
	Status   string   `json:"status"`   // "ok" or "unavailable"
	Reason   *string  `json:"reason"`
	// RandomGroups and DeleteGroup are the replicate errors.
	RandomGroups ReplicateErrors `json:"random_groups"`
	DeleteGroup  ReplicateErrors `json:"delete_group"`
	// TermDF is f.
	TermDF  []Number       `json:"term_df"`
	Against []AuditedError `json:"against"` // each kind of errors, in order
}

// ReplicateErrors are standard errors from replicates.
type ReplicateErrors struct {
	SE []Number `json:"se"`
	// Deficient counts buckets that do not determine every term by themselves: they
	// have no b_r, and random groups then no error.
	Deficient int     `json:"deficient"`
	Reason    *string `json:"reason"` // why there is none
}

// AuditedError sets the errors of one kind against those of delete-a-group.
type AuditedError struct {
	Errors string `json:"errors"` // name of the kind
	// Ratio is SE_replicate / SE_analytic; Low and High hold the ratio of the true
	// error to the analytic one with probability Level, each term by itself:
	// Ratio / sqrt(q/f), q the chi-square quantiles. P is two-sided, of the ratio 1.
	Ratio []Number `json:"ratio"`
	Low   []Number `json:"low"`
	High  []Number `json:"high"`
	P     []Number `json:"p"`
	// TooSmall and TooLarge are the terms whose error is outside what replication
	// supports: P times the number of terms is at most 1 - Level (Bonferroni), so that
	// a right kind of errors is named with at most that probability.
	TooSmall []string `json:"too_small"`
	TooLarge []string `json:"too_large"`
	// Cut says that the buckets part what this kind holds together: replicates may
	// then come out too small, and no term is in TooLarge.
	Cut bool `json:"cut"`
	// Instead is the kind to use where errors are too small or too large; nil if no
	// kind over these buckets would do better.
	Instead *string `json:"instead"`
	Reason  *string `json:"reason"` // why nothing is compared
}

// Numbers of buckets.
const (
	LeastBuckets = 8
	UsualBuckets = 50
	MostBuckets  = 512
	// perBucket is how many cells make a bucket at least.
	perBucket = 4
	// clusterCells is how many cells clusters are dealt to: so many that few clusters
	// seldom share one, and so few that their sums stay small.
	clusterCells = 2048
)

// AuditCells is the number of cells for an audit of that many buckets, 0 for the
// usual number: of whole clusters, or of rows.
func AuditCells(buckets int, rows bool) int {
	if rows {
		return perBucket * cmp.Or(buckets, UsualBuckets)
	}
	return clusterCells
}

// AuditText gives "auto(quay)", "40(quay)" or, where by is empty, "auto(rows)": buckets
// asked for, and the clustering that they keep whole.
func AuditText(buckets int, by string) string {
	n := "auto"
	if buckets > 0 {
		n = strconv.Itoa(buckets)
	}
	return n + "(" + cmp.Or(by, "rows") + ")"
}

// dealt says how rows or clusters are dealt to cells; nil if there is no audit.
func (o *Options) dealt(d *stream.Design) *stream.Buckets {
	if o.Deal != nil {
		return o.Deal
	}
	return d.Spec.Buckets
}

func (o *Options) checkAudit(d *stream.Design) error {
	deal := o.dealt(d)
	switch {
	case o.Buckets == 0 && deal == nil:
		return nil
	case deal == nil:
		return stream.Usef("audit: found %d buckets, but the design deals no rows to cells", o.Buckets)
	case o.Buckets != 0 && (o.Buckets < LeastBuckets || o.Buckets > MostBuckets):
		return stream.Usef("audit: found %d buckets, want %d to %d", o.Buckets, LeastBuckets, MostBuckets)
	case deal.Key < 0 && d.Spec.WeightKind == stream.Frequency && d.Spec.Weight != "":
		return stream.Usef("audit: a row with a frequency weight stands for several, which buckets of rows cannot part; deal whole clusters, such as auto(quay)")
	}
	return nil
}

// bucket is the sums of one bucket over internal columns.
type bucket struct {
	rows int64
	a    []float64 // A_r, (P+1) x (P+1) as State.S, last row and column zero
	s    []float64 // a_r - A_r b
}

// audit fills r.Audit if the design has buckets.
func (f *fitter) audit(r *Result) error {
	deal := f.o.dealt(f.d)
	if deal == nil {
		return nil
	}
	x := f.sol
	none := make([]Number, len(r.Terms))
	for j := range none {
		none[j] = Number(nan)
	}
	a := &Audit{Clusters: []string{}, DF: Number(nan), Level: Number(f.o.Level), Status: "ok", TermDF: none, Against: []AuditedError{},
		RandomGroups: ReplicateErrors{SE: none}, DeleteGroup: ReplicateErrors{SE: none}}
	r.Audit = a
	if k := deal.Key; k >= 0 {
		a.Clusters = append(a.Clusters, f.d.Keys[k].Text)
	}
	if f.o.Buckets > 0 {
		a.Asked = ptr(f.o.Buckets)
	}
	why, err := f.replicate(a, deal)
	if err != nil {
		return err
	}
	if why != "" {
		a.Status, a.Reason = "unavailable", ptr(why)
		a.RandomGroups.Reason, a.DeleteGroup.Reason = a.Reason, a.Reason
		return nil
	}
	if order := x.order(); order != nil {
		for _, l := range []*[]Number{&a.RandomGroups.SE, &a.DeleteGroup.SE, &a.TermDF} {
			was := *l
			*l = make([]Number, len(order))
			for i, j := range order {
				(*l)[i] = was[j]
			}
		}
	}
	for i := range r.Errors {
		a.Against = append(a.Against, f.judge(a, r, &r.Errors[i], f.o.Errors[i]))
	}
	return nil
}

// replicate fills in the replicate errors, in order of coefficients, or says why there
// are none.
func (f *fitter) replicate(a *Audit, deal *stream.Buckets) (why string, err error) {
	x, s := f.sol, f.state
	switch {
	case x.df() <= 0:
		return fmt.Sprintf("%d rows for %d terms leave no degrees of freedom", x.n, x.rank()), nil
	case x.perfect:
		return "the terms give the outcome exactly: all errors are 0", nil
	case x.apart != nil:
		return "a category with too many levels stands apart, and the audit takes the second moments of every bucket over all columns", nil
	case len(s.Columns) > momentsMost:
		return fmt.Sprintf("the audit takes the second moments of every bucket, kept up to %d columns; the model has %d", momentsMost, len(s.Columns)), nil
	}
	key, cellOf := f.d.Buckets, func(k accum.Key) int64 { return int64(k.Bits) }
	if f.o.Deal != nil {
		key, cellOf = deal.Key, func(k accum.Key) int64 { return deal.Cell(k.Kind, k.KeyValue) }
	}
	var sc *accum.Scores
	if i := slices.Index(f.keys, key); f.sums != nil && i >= 0 && f.sums.Scores[i].Moments() {
		sc = f.sums.Scores[i]
	} else if s.Coarse {
		return "the buckets' sums differ too much in size to keep their digits", nil
	} else if sc, err = s.Scores(key, x.theta, true); err != nil {
		return "", err
	}
	held := make([]bool, deal.Cells)
	if err := sc.Each(func(c *accum.Cluster) error { held[cellOf(c.Key)] = true; return f.ctx.Err() }); err != nil {
		return "", err
	}
	place := make([]int, deal.Cells) // of cells in order, with gaps left out
	for i, h := range held {
		if place[i] = a.Cells; h {
			a.Cells++
		}
	}
	a.Buckets = min(cmp.Or(f.o.Buckets, UsualBuckets), a.Cells/perBucket)
	if a.Buckets < LeastBuckets {
		what := "the rows"
		if len(a.Clusters) > 0 {
			what = "the clusters of " + a.Clusters[0]
		}
		n := a.Buckets
		a.Buckets = 0
		return fmt.Sprintf("%s fill %d cells of the hash, which is enough for %d buckets of at least %d; fewer than %d say too little of an error", what, a.Cells, n, perBucket, LeastBuckets), nil
	}
	if f.o.Buckets > a.Buckets {
		f.note("fewer-buckets", "the audit has %d buckets instead of %d: there are %d cells of rows or clusters, and a bucket holds %d at least", a.Buckets, f.o.Buckets, a.Cells, perBucket)
	}
	a.DF = Number(a.Buckets - 1)
	list := make([]bucket, a.Buckets)
	p := sc.P
	err = sc.Each(func(c *accum.Cluster) error {
		// In turn, in order of hash: each bucket gets as many cells.
		b := &list[place[cellOf(c.Key)]%a.Buckets]
		if b.s == nil {
			b.a, b.s = make([]float64, (p+1)*(p+1)), make([]float64, p)
		}
		b.rows += c.Rows
		for i := range p {
			axpy(1, c.A[i*p:(i+1)*p], b.a[i*(p+1):])
		}
		axpy(1, c.S, b.s)
		return f.ctx.Err()
	})
	if err != nil {
		return "", err
	}
	var n sizes
	for i := range list {
		n.add(list[i].rows)
	}
	a.Rows = n.spread()
	a.RandomGroups = x.randomGroups(list)
	return x.deleteGroup(a, sc, list), nil
}

// randomGroups is the error of random groups, see Audit.
func (x *solution) randomGroups(list []bucket) ReplicateErrors {
	k := x.k()
	out := ReplicateErrors{SE: make([]Number, k)}
	for j := range k {
		out.SE[j] = Number(nan)
	}
	change := make([][]float64, 0, len(list)) // b_r - b
	s := make([]float64, k)
	for i := range list {
		e := eliminate(x.project(list[i].a), k, aliasPivot)
		if !containsAll(e.kept, x.e.kept) {
			out.Deficient++
			continue
		}
		x.projectVec(list[i].s, s)
		d := e.solve(s)
		b := make([]float64, k)
		for j := range k {
			b[j] = dot(x.wAlias[j*k:(j+1)*k], d) / x.state.Frame.YInv
		}
		change = append(change, b)
	}
	if out.Deficient > 0 {
		out.Reason = ptr(fmt.Sprintf("%d of %d buckets do not determine every term by themselves", out.Deficient, len(list)))
		return out
	}
	n := float64(len(list))
	for j := range k {
		if math.IsNaN(x.est[j]) {
			continue
		}
		var mean, v float64
		for _, b := range change {
			mean += b[j] / n
		}
		for _, b := range change {
			v += (b[j] - mean) * (b[j] - mean)
		}
		out.SE[j] = Number(math.Sqrt(v / (n * (n - 1))))
	}
	return out
}

// containsAll reports whether the ascending list has all of want, ascending.
func containsAll(list, want []int) bool {
	for _, w := range want {
		if _, ok := slices.BinarySearch(list, w); !ok {
			return false
		}
	}
	return true
}

// deleteGroup fills in the error of delete-a-group and its degrees of freedom, see
// Audit.
func (x *solution) deleteGroup(a *Audit, sc *accum.Scores, list []bucket) (why string) {
	adj := newAdjusted(x)
	p := sc.P
	square := make([]float64, p*p)
	for i := range list {
		for j := range p {
			copy(square[j*p:(j+1)*p], list[i].a[j*(p+1):])
		}
		adj.add(square, list[i].s)
	}
	if adj.failed {
		return "the eigenvalues of a bucket's leverages were not found"
	}
	r := adj.estimate("cr3")
	if loss := x.scoreLoss(sc, r); loss > lossRefuse {
		return fmt.Sprintf("the buckets' sums cancel (relative error up to %.1e)", loss)
	}
	n := float64(len(list))
	se, df := make([]Number, x.k()), make([]Number, x.k())
	v := x.variances(r)
	x.zeroErrors(r, v)
	for j := range se {
		se[j], df[j] = Number(nan), Number(nan)
		if math.IsNaN(x.est[j]) || r.noSE[j] || r.zero[j] {
			continue
		}
		se[j] = Number(math.Sqrt((n - 1) / n * v[j]))
		df[j] = Number(min(n-1, adj.df(j)))
	}
	a.DeleteGroup, a.TermDF = ReplicateErrors{SE: se}, df
	return ""
}

// judge sets the errors of one kind against the replicates.
func (f *fitter) judge(a *Audit, r *Result, e *Errors, k Kind) AuditedError {
	out := AuditedError{Errors: e.Name(), TooSmall: []string{}, TooLarge: []string{}}
	whole := k.Cluster < 0 && !inOrder(k.Name)
	own := false // the kind holds together what the buckets hold together
	if k.Cluster >= 0 {
		w, _ := waysOf(f.d, k.Cluster)
		own = len(w.dims) == 1 && w.dims[0] == f.o.dealt(f.d).Key && !overTime(k.Name)
	}
	out.Cut = !whole && !own
	tests := 0
	for j := range r.Terms {
		ratio, low, high, p := nan, nan, nan, nan
		df := float64(a.TermDF[j])
		if se := float64(e.SE[j]); se > 0 && df > 0 {
			ratio = float64(a.DeleteGroup.SE[j]) / se
			tail := (1 - f.o.Level) / 2
			low = ratio / math.Sqrt(2*mathext.GammaIncRegCompInv(df/2, tail)/df)
			high = ratio / math.Sqrt(2*mathext.GammaIncRegInv(df/2, tail)/df)
			half := df * ratio * ratio / 2
			p = min(1, 2*min(mathext.GammaIncReg(df/2, half), mathext.GammaIncRegComp(df/2, half)))
			tests++
		}
		out.Ratio, out.Low, out.High, out.P = append(out.Ratio, Number(ratio)), append(out.Low, Number(low)), append(out.High, Number(high)), append(out.P, Number(p))
	}
	if e.Status != "ok" {
		out.Reason = ptr(e.Name() + " is not available")
	} else if tests == 0 {
		out.Reason = ptr("no term has both errors")
	}
	for j, t := range r.Terms {
		switch p := float64(out.P[j]); {
		case !(p*float64(tests) <= 1-f.o.Level):
		case out.Ratio[j] > 1:
			out.TooSmall = append(out.TooSmall, t)
		case !out.Cut:
			out.TooLarge = append(out.TooLarge, t)
		}
	}
	if to := f.instead(k, own, len(out.TooSmall) > 0); to != "" && len(out.TooSmall)+len(out.TooLarge) > 0 {
		out.Instead = &to
	}
	return out
}

// instead names the kind to use where the audit finds fault with kind k, "" for none.
func (f *fitter) instead(k Kind, own, small bool) string {
	b := f.o.dealt(f.d).Key
	if b >= 0 && !own {
		return "cr1(" + f.d.Keys[b].Text + ")"
	}
	to := map[string]string{"classical": "hc1", "hc3": "hc1", "hc4": "hc1", "hc4m": "hc1", "hc5": "hc1", "cr3": "cr2", "cr2": "cr1"}
	if small {
		to = map[string]string{"classical": "hc1", "hc0": "hc3", "hc1": "hc3", "hc2": "hc3", "cr0": "cr3", "cr1": "cr3", "cr2": "cr3", "wcr": "cr3", "wcu": "cr3"}
	}
	name := to[k.Name]
	switch {
	case name == "" || k.Cluster >= 0 && !own || name == "cr3" && f.sol.kind == stream.Sampling:
		return ""
	case own:
		return name + "(" + f.d.Keys[b].Text + ")"
	}
	return name
}
