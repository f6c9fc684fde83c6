package vcov

import (
	"cmp"
	"math"
	"slices"

	"github.com/tallrow/tallrow/accum"
)

// clusters walks over the clusters of every key that errors are asked for.
func (f *fitter) clusters() error {
	x, s := f.sol, f.state
	f.groups = map[int]*clusterSums{}
	if x.df() <= 0 {
		return nil
	}
	full := map[int]bool{}
	var keys []int
	for _, k := range f.o.Errors {
		if k.Cluster < 0 {
			continue
		}
		w, _ := waysOf(f.d, k.Cluster)
		keys = append(keys, w.keys...)
		full[k.Cluster] = full[k.Cluster] || f.o.wantsMoments(f.d, k)
	}
	for _, key := range keys {
		if f.groups[key] != nil {
			continue
		}
		var sc *accum.Scores
		summed := slices.Contains(f.plan.needs.Clusters, key)
		both := summed && f.src == nil // of two rounds, the first has more unless the second has moments
		if i := slices.Index(f.keys, key); f.sums != nil && i >= 0 && (!both || f.sums.Scores[i].Moments()) {
			sc = f.sums.Scores[i]
		} else if summed {
			var err error
			if sc, err = s.Scores(key, x.theta, full[key]); err != nil {
				continue // errorsFor says so
			}
		}
		if sc == nil {
			continue
		}
		c := &clusterSums{nested: f.nested(key)}
		if full[key] && sc.Moments() && x.apart == nil && x.k() <= momentsMost {
			c.adjusted = newAdjusted(x)
			if f.wants(key, bootstraps) {
				c.wild = newWild(x, f.o.Memory)
			}
			if f.o.Shape {
				c.shape = newShape(c.adjusted, func(k accum.Key) string { return f.d.KeyLabel(key, k.KeyValue) })
			}
		}
		if f.wants(key, overTime) && x.apart == nil {
			c.lagged = &lagged{col: f.d.Keys[key], k: x.k(), most: f.o.Memory / keptShare}
		}
		if err := x.walk(f.ctx, sc, c); err != nil {
			return err
		}
		f.groups[key] = c
	}
	return nil
}

// wants reports whether a kind of a family is asked for over the clusters of a key.
func (f *fitter) wants(key int, family func(string) bool) bool {
	return slices.ContainsFunc(f.o.Errors, func(k Kind) bool { return k.Cluster == key && family(k.Name) })
}

func (f *fitter) cluster(e *Errors, k Kind) {
	x, s := f.sol, f.state
	w, _ := waysOf(f.d, k.Cluster)
	sums := make([]*clusterSums, len(w.keys))
	missing, fewest := false, math.MaxInt
	for i, key := range w.keys {
		sums[i] = f.groups[key]
		missing = missing || sums[i] == nil
		if sums[i] != nil && slices.Contains(w.dims, key) {
			fewest = min(fewest, sums[i].groups)
		}
	}
	if !missing {
		for _, key := range w.dims {
			e.Groups = append(e.Groups, int64(f.groups[key].groups))
		}
		if len(w.dims) == 1 {
			e.GroupRows = sums[0].rows
		}
	}
	more := adjusts(k.Name) || bootstraps(k.Name)
	switch {
	case more && s.Swept != nil && !missing && !sums[0].nested:
		x.unavailable(e, "%s needs clusters that hold all rows of each %s, whose effects are swept out; here some of them have rows in several clusters", k.Name, x.unit())
		return
	case x.perfect:
		df := 1.0
		if !missing {
			df = float64(fewest - 1)
		}
		x.infer(e, x.nothing(df), f.o.Level, f.o.Covariance)
		return
	case missing && s.Swept != nil && slices.Contains(f.plan.needs.Clusters, k.Cluster) && !s.Nested(k.Cluster):
		x.unavailable(e, "rows of some %s lie in several clusters of %s, which takes a second pass with the means of each; use --passes 2", x.unit(), f.d.Keys[k.Cluster].Text)
		return
	case missing:
		x.unavailable(e, "the sums of the clusters were not kept")
		return
	case fewest < 2:
		x.unavailable(e, "all rows are in one cluster; at least two are needed")
		return
	case s.Coarse && f.sums == nil:
		x.unavailable(e, "the clusters' sums lost digits; use --passes 2")
		return
	case more && sums[0].adjusted == nil && x.apart != nil:
		x.unavailable(e, "a category with too many levels stands apart, and %s takes the second moments of every cluster over all columns; cr1 does not", k.Name)
		return
	case more && sums[0].adjusted == nil:
		x.unavailable(e, "%s takes the second moments of every cluster, kept up to %d columns; the model has %d", k.Name, momentsMost, len(s.Columns))
		return
	case bootstraps(k.Name) && sums[0].wild == nil:
		x.unavailable(e, "%s keeps the second moments of all clusters in memory: raise --memory, or take cr1, which does as well for so many", k.Name)
		return
	case more && sums[0].adjusted.failed:
		x.unavailable(e, "the eigenvalues of a cluster's leverages were not found")
		return
	case overTime(k.Name) && x.apart != nil:
		x.unavailable(e, "a category with too many levels stands apart, and the scores of periods are kept over all columns")
		return
	case overTime(k.Name) && !f.o.AutoLags && f.o.Lags >= sums[0].lagged.span():
		// Scores add up to zero over all periods: such a reach would leave almost nothing.
		n := sums[0].lagged.span()
		x.unavailable(e, "%d lags reach beyond the data: %s spans %d periods, so that at most %d are possible", f.o.Lags, f.d.Keys[k.Cluster].Text, n, n-1)
		return
	case len(w.dims) > 1 && x.apart != nil:
		x.unavailable(e, "a category with too many levels stands apart; clusters of one dimension are possible")
		return
	}
	var r *estimate
	switch {
	case adjusts(k.Name):
		r = sums[0].adjusted.estimate(k.Name)
	case len(w.dims) > 1:
		var clipped int
		var reach float64
		if r, clipped, reach = x.multiway(k.Name, w, sums); r == nil {
			x.unavailable(e, "the eigenvalues of the covariance were not found")
			return
		}
		if clipped > 0 {
			f.note("repaired", "the covariance by %s had %d negative eigenvalue(s), up to %.2g of the largest; they were set to zero, and errors that rest on them are not given", e.Name(), clipped, reach)
		}
	case bootstraps(k.Name):
		r = x.clusterRobust("cr1", sums[0])
	case overTime(k.Name):
		reach := sums[0].lagged.reach(&f.o, x.standardised())
		e.Lags = &reach
		r = x.driscollKraay(sums[0].lagged, &reach)
		r.noP = x.loneClusters(sums[0].scores)
	default:
		r = x.clusterRobust(k.Name, sums[0])
	}
	worst := 0.0
	for _, c := range sums {
		worst = max(worst, x.scoreLoss(c.scores, r))
	}
	if worst > lossRefuse {
		x.unavailable(e, "the clusters' sums cancel (relative error up to %.1e); use --passes 2", worst)
		return
	} else if worst > lossLimit {
		f.note("digits", "%s has about %d digits left: the clusters' sums cancel; --passes 2 keeps them", e.Name(), digits(worst))
	}
	x.infer(e, r, f.o.Level, f.o.Covariance)
	if len(w.dims) > 1 {
		e.Factor = Number(nan) // each set of dimensions has its own
	}
	f.tellLost(e, r)
	if bootstraps(k.Name) {
		f.fail = cmp.Or(f.fail, f.bootstrap(e, k.Name, sums[0]))
	}
	if x.apart != nil && x.rank() < fewest {
		f.note("no-joint-test", "%s has no joint test of all terms: clusters join the levels of %s, which was eliminated", e.Name(), x.apart.text())
	}
}

// nested reports whether every unit whose effects are swept out lies in one cluster.
func (f *fitter) nested(key int) bool {
	if i := slices.Index(f.keys, key); f.sums != nil && i >= 0 && f.sums.Nested != nil {
		return f.sums.Nested[i]
	}
	return f.state.Nested(key)
}

// kept reports whether pass one holds the second moments of a key for good.
func (f *fitter) kept(key int) bool {
	return f.plan.needs.Keep && slices.Contains(f.plan.needs.Clusters, key) && !f.state.Coarse
}
