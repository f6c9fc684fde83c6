package accum

import (
	"encoding/binary"
	"maps"
	"slices"
	"strconv"
	"strings"

	"github.com/tallrow/tallrow/stream"
)

// Records calls f with every record of a state that was made with Needs.Retain, in
// order. hide, if not nil, gives what is put in place of a cluster's key: the state
// is of no more use then. The record is valid until f returns.
func (s *State) Records(f func(*Record) error, hide Hide) error {
	var r Record
	for _, n := range slices.Sorted(maps.Keys(s.checks)) {
		q := s.quotes[n]
		c, run, n := s.checks[n], n>>runShift, n&(RunBase(1)-1)
		r = Record{What: SegmentCheck, Table: run, Key: binary.BigEndian.AppendUint64(nil, uint64(n)), Label: strconv.Itoa(n), Rows: c.rows, Sums: []Whole{fixed{0, c.sum}.whole()}}
		if q != 0 {
			r.Sums = append(r.Sums, fixed{0, uint64(q)}.whole())
		}
		if err := f(&r); err != nil {
			return err
		}
	}
	es := s.retained()
	number := func(what What, section, table int, x *superSum) error {
		if x.special != 0 {
			return errRange
		}
		r = Record{What: what, Section: section, Table: table, Sums: r.Sums[:0]}
		r.Unit, r.Sums = x.limbs(r.Sums)
		return f(&r)
	}
	for i, e := range es {
		if err := number(WeightSum, i, 0, &e.weight); err != nil {
			return err
		}
	}
	for i, e := range es {
		for j := range e.gramX {
			if err := number(SecondMoment, i, j, &e.gramX[j]); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for j := range e.fourX {
			if err := number(FourthMoment, i, j, &e.fourX[j]); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for ti, t := range e.tables {
			if err := tableRecords(LevelSums, i, ti, t, s.combination, f); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for pi, t := range e.pairs {
			if err := pairTableRecords(PairSums, i, pi, t, &s.lay.pairs[pi], s.combination, f); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		for k, g := range e.clusters {
			if g == nil {
				continue
			}
			if err := s.clusterRecords(ClusterSums, i, k, g, f, hide); err != nil {
				return err
			}
		}
	}
	for i, e := range es {
		if e.units == nil {
			continue
		}
		if err := s.clusterRecords(UnitSums, i, s.lay.design.Sweep, e.units, f, hide); err != nil {
			return err
		}
	}
	return nil
}

// combination encodes a combination of a table, as numbered in pass one;
// combinationAt as numbered in the state.
func (s *State) combination(table int, id int32) (key []byte, label string) {
	return s.combinationAt(table, s.place[table][id])
}

func (s *State) combinationAt(table int, id int32) (key []byte, label string) {
	levels := s.combos[table].keys[id]
	for i, c := range s.lay.tables[table].cats {
		k := s.Levels[c][levels[i]]
		key = appendPart(key, k)
		if i > 0 {
			label += " and "
		}
		label += stream.FormatKey(s.Design.Categories[c].KeyColumn, s.Design.Spec.Zone, k.KeyValue)
	}
	return key, label
}

func sortRecords(rs []*Record, f func(*Record) error) error {
	slices.SortFunc(rs, func(a, b *Record) int { return compareBytes(a.Key, b.Key) })
	for _, r := range rs {
		if err := f(r); err != nil {
			return err
		}
	}
	return nil
}

func wholes(dst []Whole, fs []fixed) []Whole {
	for _, x := range fs {
		dst = append(dst, x.whole())
	}
	return dst
}

// tableRecords hands out the sums of a table; place encodes the key of a number.
func tableRecords(what What, section, table int, t *keyTable, place func(int, int32) ([]byte, string), f func(*Record) error) error {
	var rs []*Record
	for id, n := range t.rows {
		if n == 0 {
			continue
		}
		r := &Record{What: what, Section: section, Table: table, Rows: n, Unit: t.unit, Sums: wholes(nil, t.fix(int32(id)))}
		r.Key, r.Label = place(table, int32(id))
		rs = append(rs, r)
	}
	return sortRecords(rs, f)
}

func pairTableRecords(what What, section, table int, t *pairTable, spec *pairSpec, place func(int, int32) ([]byte, string), f func(*Record) error) error {
	var rs []*Record
	for sh := range t.shards {
		st := &t.shards[sh].pairStore
		st.each(t.width, func(a, b, i int) {
			r := &Record{What: what, Section: section, Table: table, Unit: t.unit}
			ka, la := place(spec.g, int32(a*pairShards+sh))
			kb, lb := place(spec.h, int32(b))
			r.Key, r.Label = append(ka, kb...), la+" with "+lb
			if t.width == 0 {
				r.Rows = st.n[i]
			} else {
				r.Sums = wholes(nil, st.sums[i*t.width:(i+1)*t.width])
			}
			rs = append(rs, r)
		})
	}
	return sortRecords(rs, f)
}

// Hide puts a text in place of a cluster's key; ok is false for keys that stay.
type Hide func(key int, k Key) (text string, ok bool)

// storeRecords hands out the sums of a store in order of key; label may be nil.
func storeRecords(what What, section, table int, g *groupStore, label func(Key) string, f func(*Record) error) error {
	r := Record{What: what, Section: section, Table: table, Unit: g.unit}
	return mergeGroups([]*groupStore{g}, func(parts []groupPart) error {
		k := partKey(g.kind, parts)
		r.Key, r.Label = appendKey(r.Key[:0], k), ""
		if label != nil {
			r.Label = strings.Clone(label(k)) // the text of k is overwritten
		}
		r.Rows, r.Sums = parts[0].rows, wholes(r.Sums[:0], parts[0].sums)
		return f(&r)
	})
}

func partKey(kind stream.Kind, parts []groupPart) Key {
	k := Key{Kind: kind}
	if kind == stream.Text {
		k.Text = parts[0].text
	} else {
		k.Bits = keyOf(kind, parts[0].ord)
	}
	return k
}

// clusterRecords is storeRecords of the clusters of a key.
func (s *State) clusterRecords(what What, section, key int, g *groupStore, f func(*Record) error, hide Hide) error {
	label := func(k Key) string { return s.Design.KeyLabel(key, k.KeyValue) }
	if hide == nil {
		return storeRecords(what, section, key, g, label, f)
	}
	if _, ok := hide(key, Key{Kind: g.kind}); !ok {
		return storeRecords(what, section, key, g, label, f)
	}
	// Hidden keys sort in another order.
	to := g.pool.store(stream.Text, g.width, g.unit)
	in := newGroupLoader(to)
	err := mergeGroups([]*groupStore{g}, func(parts []groupPart) error {
		text, _ := hide(key, partKey(g.kind, parts))
		return in.add(Key{stream.Text, stream.KeyValue{Text: text}}, parts[0].rows, parts[0].sums)
	})
	if err == nil {
		err = in.end()
	}
	if err != nil {
		return err
	}
	return storeRecords(what, section, key, to, nil, f)
}
