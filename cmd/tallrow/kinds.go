package main

import (
	"slices"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// knownKinds are the kinds of errors of this version, in order of refinement.
var knownKinds = []string{"classical", "hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5", "cr0", "cr1", "cr2", "cr3", "wcr", "wcu", "driscoll-kraay", "hac"}

// several less the place of a set stands for a kind of several clusterings until
// all clusterings are known.
const several = -2

// request is the errors asked for, in order, and the clusterings they need.
type request struct {
	kinds []vcov.Kind
	keys  []string // expressions of the clusterings
	// crossed are the sets of keys whose joint clusters are wanted; a kind of several
	// clusterings has the cluster len(keys) plus the place of its set.
	crossed [][]int
	order   *vcov.RowOrder  // of hac
	buckets *stream.Buckets // of the audit
	// clusters is how many of keys errors are asked for by; the units whose effects are
	// swept out may follow.
	clusters int
}

// names gives the kinds as words: "cr1(quay)".
func (r request) names() []string {
	var list []string
	for _, k := range r.kinds {
		list = append(list, r.name(k))
	}
	return list
}

func (r request) name(k vcov.Kind) string {
	if k.Cluster < 0 {
		return k.Name
	}
	if k.Cluster < len(r.keys) {
		return k.Name + "(" + r.keys[k.Cluster] + ")"
	}
	var list []string
	for _, c := range r.crossed[k.Cluster-len(r.keys)] {
		list = append(list, r.keys[c])
	}
	return k.Name + "(" + strings.Join(list, ", ") + ")"
}

// cross adds every set of two or more of the clusterings and returns the place of
// the set of all.
func (r *request) cross(dims []int) int {
	at := 0
	for set := 1; set < 1<<len(dims); set++ {
		var parts []int
		for i, d := range dims {
			if set>>i&1 == 1 {
				parts = append(parts, d)
			}
		}
		if len(parts) < 2 {
			continue
		}
		if at = slices.IndexFunc(r.crossed, func(p []int) bool { return slices.Equal(p, parts) }); at < 0 {
			at = len(r.crossed)
			r.crossed = append(r.crossed, parts)
		}
	}
	return at
}

// key returns the place of an expression among the keys, -1 for none.
func (r *request) key(text string) int {
	if text == "" {
		return -1
	}
	c := slices.Index(r.keys, text)
	if c < 0 {
		c = len(r.keys)
		r.keys = append(r.keys, text)
	}
	return c
}

// mostWays bounds the clusterings of one kind: their sets are twice as many for each.
const mostWays = 4

// withClassical puts the classical errors in front if they were not asked for:
// every other kind is compared with them. Under sampling weights they mean
// nothing.
func (r request) withClassical(sampling bool) []vcov.Kind {
	c := vcov.Kind{Name: "classical", Cluster: -1}
	if sampling || slices.Contains(r.kinds, c) {
		return r.kinds
	}
	return append([]vcov.Kind{c}, r.kinds...)
}

// parseErrors reads the list of error kinds. A bare cr kind uses --cluster.
func (s *settings) parseErrors() (request, error) {
	var r request
	from := s.origin("errors")
	fail := func(format string, args ...any) (request, error) {
		return request{}, stream.Usef(from+": "+format, args...)
	}
	list := s.errors
	if !s.given("errors") {
		list = []string{"classical", "hc1"}
		if s.weightKind == "sampling" {
			list = []string{"hc1"}
		}
		switch {
		case len(s.cluster) > 0:
			list = append(list, "cr1")
		case s.sweep != "":
			list = append(list, "cr1("+s.sweep+")")
		}
		if s.sweep != "" {
			list = slices.DeleteFunc(list, func(k string) bool { return k == "hc1" }) // see vcov's warning of few rows
		}
	} else if len(list) == 0 {
		return fail("found nothing, want kinds of errors such as \"classical, hc1\"")
	}
	clustered, periodUsed, ordered := false, false, false
	for _, item := range list {
		name, args, inPlace, err := splitKind(item)
		if err != nil {
			return fail("%s", err)
		}
		switch {
		case !slices.Contains(knownKinds, name):
			return fail("no kind of errors is called %q; there are %s%s", name, both(knownKinds), meant(name, knownKinds))
		}
		k := vcov.Kind{Name: name, Cluster: -1}
		overTime := name == "driscoll-kraay"
		ordered = ordered || name == "hac"
		isCR := strings.HasPrefix(name, "cr") || strings.HasPrefix(name, "wc") || overTime
		switch {
		case name == "hac" && inPlace:
			return fail("%s: hac takes its order from --period and --unit", item)
		case !isCR && inPlace:
			return fail("%s: %s has no clusters; %s(%s) has", item, name, "cr1", strings.Join(args, ", "))
		case isCR && inPlace && len(args) == 0:
			return fail("%s: found no clusters, want for example cr1(quay)", item)
		case overTime && !inPlace && s.period == "":
			return fail("%s needs periods: %s(date(t)), or --period \"date(t)\"", name, name)
		case overTime && !inPlace:
			args = []string{s.period}
		case isCR && !inPlace && len(s.cluster) == 0:
			return fail("%s needs clusters: %s(quay), or --cluster quay", name, name)
		case isCR && !inPlace:
			args = s.cluster
		}
		periodUsed = periodUsed || overTime && slices.Equal(args, []string{s.period})
		if isCR {
			clustered = clustered || !overTime
			var dims []int
			for _, a := range args {
				c := r.key(a)
				if slices.Contains(dims, c) {
					return fail("%s: %s is there twice, want it once", item, a)
				}
				dims = append(dims, c)
			}
			slices.Sort(dims)
			switch k.Cluster = dims[0]; {
			case len(dims) > 1 && name != "cr0" && name != "cr1":
				return fail("%s: %s is for one clustering; cr0 and cr1 take several: %s", item, name, eachKind(name, args))
			case len(dims) > mostWays:
				return fail("%s: found %d clusterings, want at most %d", item, len(dims), mostWays)
			case len(dims) > 1:
				k.Cluster = several - r.cross(dims)
			}
		}
		if slices.Contains(r.kinds, k) {
			if isCR {
				name += "(" + strings.Join(args, ", ") + ")"
			}
			return fail("%s is asked for twice", name)
		}
		r.kinds = append(r.kinds, k)
	}
	if ordered {
		r.order = &vcov.RowOrder{Period: r.key(s.period), Unit: r.key(s.unit)}
	}
	r.deal(s.audit, s.cluster)
	r.clusters = len(r.keys)
	if s.sweep != "" && !slices.Contains(r.keys, s.sweep) {
		r.keys = append(r.keys, s.sweep)
	}
	for i := range r.kinds {
		if k := &r.kinds[i]; k.Cluster <= several {
			k.Cluster = len(r.keys) + several - k.Cluster
		}
	}
	if s.period != "" && !periodUsed && !ordered {
		return request{}, stream.Usef("%s %s: no kind of errors uses it; add driscoll-kraay or hac", s.origin("period"), s.period)
	}
	if s.unit != "" && !ordered {
		return request{}, stream.Usef("%s %s: no kind of errors uses it; add hac", s.origin("unit"), s.unit)
	}
	if len(s.cluster) > 0 {
		for _, c := range s.cluster {
			if !slices.Contains(r.keys, c) {
				why := "no cr kind is asked for"
				if clustered {
					why = "no kind of errors uses it"
				}
				return request{}, stream.Usef("%s %s: %s in --errors %q; add cr1(%s)", s.origin("cluster"), c, why, strings.Join(list, ", "), c)
			}
		}
	}
	return r, nil
}

// eachKind gives "cr1(a), cr1(b)".
func eachKind(name string, clusters []string) string {
	var list []string
	for _, c := range clusters {
		list = append(list, name+"("+c+")")
	}
	return strings.Join(list, ", ")
}

// splitKind parts "cr1(quay, crane)" into name and arguments.
func splitKind(item string) (name string, args []string, inPlace bool, err error) {
	item = strings.TrimSpace(item)
	i := strings.IndexByte(item, '(')
	if i < 0 {
		return strings.ToLower(item), nil, false, nil
	}
	if !strings.HasSuffix(item, ")") {
		return "", nil, false, stream.Usef("found %q, want a closing parenthesis at its end", item)
	}
	name = strings.ToLower(strings.TrimSpace(item[:i]))
	inner := strings.TrimSpace(item[i+1 : len(item)-1])
	if inner == "" {
		return name, nil, true, nil
	}
	args, err = stream.SplitList(inner)
	return name, args, true, err
}
