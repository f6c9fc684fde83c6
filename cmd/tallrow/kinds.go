package main

import (
	"slices"
	"strings"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// knownKinds are the kinds of errors of this version, in order of refinement.
var knownKinds = []string{"classical", "hc0", "hc1", "hc2", "hc3", "hc4", "hc4m", "hc5", "cr0", "cr1"}

// request is the errors asked for, in order, and the clusterings they need.
type request struct {
	kinds []vcov.Kind
	keys  []string // expressions of the clusterings
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
	return k.Name + "(" + r.keys[k.Cluster] + ")"
}

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
		if len(s.cluster) > 0 {
			list = append(list, "cr1")
		}
	} else if len(list) == 0 {
		return fail("found nothing, want kinds of errors such as \"classical, hc1\"")
	}
	clustered := false
	for _, item := range list {
		name, args, inPlace, err := splitKind(item)
		if err != nil {
			return fail("%s", err)
		}
		switch {
		case slices.Contains(laterKinds, name):
			return fail("%s is not in this version, which has %s", name, both(knownKinds))
		case !slices.Contains(knownKinds, name):
			return fail("no kind of errors is called %q; there are %s%s", name, both(knownKinds), meant(name, knownKinds))
		}
		k := vcov.Kind{Name: name, Cluster: -1}
		isCR := strings.HasPrefix(name, "cr")
		switch {
		case !isCR && inPlace:
			return fail("%s: %s has no clusters; %s(%s) has", item, name, "cr1", strings.Join(args, ", "))
		case isCR && inPlace && len(args) == 0:
			return fail("%s: found no clusters, want for example cr1(quay)", item)
		case isCR && len(args) > 1:
			return fail("%s: two-way clusters are not in this version; ask for one at a time: %s", item, eachKind(name, args))
		case isCR && !inPlace && len(s.cluster) == 0:
			return fail("%s needs clusters: %s(quay), or --cluster quay", name, name)
		case isCR && !inPlace && len(s.cluster) > 1:
			return request{}, stream.Usef("%s names %d clusterings for %s: two-way clusters are not in this version; ask for each in place: --errors \"%s\"",
				s.origin("cluster"), len(s.cluster), name, eachKind(name, s.cluster))
		case isCR && !inPlace:
			args = s.cluster
		}
		if isCR {
			clustered = true
			k.Cluster = slices.Index(r.keys, args[0])
			if k.Cluster < 0 {
				k.Cluster = len(r.keys)
				r.keys = append(r.keys, args[0])
			}
		}
		if slices.Contains(r.kinds, k) {
			return fail("%s is asked for twice", r.name(k))
		}
		r.kinds = append(r.kinds, k)
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
