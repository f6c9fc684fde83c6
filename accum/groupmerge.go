package accum

import "unsafe"

// groupPart is the sums of a key in one source; tag is the number of its store.
type groupPart struct {
	groupSums
	tag int
}

// cursor walks over sums in order of key.
type cursor struct {
	tag    int
	owners int
	cur    *groupSums // nil at the end
	next   func() (*groupSums, error)
}

// mergeGroups calls f for each key of the stores in order of key, with its sums in
// each store that has it, in order of store. They are valid until f returns; f may
// change them. Blocks on scratch are read and unpacked ahead by other goroutines.
func mergeGroups(stores []*groupStore, f func([]groupPart) error) error {
	var cs []*cursor
	stop := make(chan struct{})
	defer close(stop)
	for tag, s := range stores {
		for _, r := range s.runs {
			cs = append(cs, &cursor{tag: tag, owners: s.owners, next: r.reader(stop)})
		}
		if s.keys.Load() > 0 {
			cs = append(cs, &cursor{tag: tag, owners: s.owners, next: s.reader()})
		}
	}
	return mergeCursors(cs, f)
}

// mergeRuns is mergeGroups for the runs of one store.
func mergeRuns(runs []*run, f func([]groupPart) error) error {
	var cs []*cursor
	stop := make(chan struct{})
	defer close(stop)
	for _, r := range runs {
		cs = append(cs, &cursor{owners: r.store.owners, next: r.reader(stop)})
	}
	return mergeCursors(cs, f)
}

func mergeCursors(cs []*cursor, f func([]groupPart) error) (err error) {
	h := make([]*cursor, 0, len(cs))
	for _, c := range cs {
		if c.cur, err = c.next(); err != nil {
			return err
		}
		if c.cur != nil {
			h = append(h, c)
		}
	}
	for i := len(h)/2 - 1; i >= 0; i-- {
		sink(h, i)
	}
	var parts []groupPart
	var text []byte
	for len(h) > 0 {
		var key groupSums
		n := 0
		for ; len(h) > 0; sink(h, 0) {
			c := h[0]
			if n == 0 {
				key.ord = c.cur.ord
				text = append(text[:0], c.cur.text...) // the cursor's goes when it moves on
				key.text = unsafe.String(unsafe.SliceData(text), len(text))
			} else if c.cur.ord != key.ord || c.cur.text != key.text {
				break
			}
			if n > 0 && parts[n-1].tag == c.tag {
				parts[n-1].rows += c.cur.rows
				mergeSums(parts[n-1].sums, c.cur.sums, c.owners)
			} else {
				if n == len(parts) {
					parts = append(parts, groupPart{})
				}
				p := &parts[n]
				n++
				p.tag, p.ord, p.text, p.rows = c.tag, key.ord, key.text, c.cur.rows
				p.sums = append(p.sums[:0], c.cur.sums...)
			}
			if c.cur, err = c.next(); err != nil {
				return err
			}
			if c.cur == nil {
				h[0] = h[len(h)-1]
				h = h[:len(h)-1]
			}
		}
		if err := f(parts[:n]); err != nil {
			return err
		}
	}
	return nil
}

func before(a, b *cursor) bool {
	if a.cur.ord != b.cur.ord {
		return a.cur.ord < b.cur.ord
	}
	if a.cur.text != b.cur.text {
		return a.cur.text < b.cur.text
	}
	return a.tag < b.tag
}

func sink(h []*cursor, i int) {
	for {
		j := 2*i + 1
		if j >= len(h) {
			return
		}
		if j+1 < len(h) && before(h[j+1], h[j]) {
			j++
		}
		if !before(h[j], h[i]) {
			return
		}
		h[i], h[j] = h[j], h[i]
		i = j
	}
}

// reader walks over the keys in memory.
func (s *groupStore) reader() func() (*groupSums, error) {
	refs := s.sorted()
	var g groupSums
	i := 0
	return func() (*groupSums, error) {
		if i == len(refs) {
			return nil, nil
		}
		if i%warmRecs == 0 {
			s.warm(refs[i:min(i+warmRecs, len(refs))])
		}
		s.read(refs[i], &g)
		i++
		return &g, nil
	}
}

// reader walks over a run, one block ahead, until stop is closed.
func (r *run) reader(stop <-chan struct{}) func() (*groupSums, error) {
	full, free := make(chan *block, 1), make(chan *block, 3)
	for range cap(free) {
		free <- new(block)
	}
	go func() {
		defer close(full)
		for i := range len(r.blocks) - 1 {
			var b *block
			select {
			case b = <-free:
			case <-stop:
				return
			}
			b.err = b.load(r, i)
			select {
			case full <- b:
			case <-stop:
				return
			}
			if b.err != nil {
				return
			}
		}
	}()
	var b *block
	at := 0
	return func() (*groupSums, error) {
		for b == nil || at == len(b.recs) {
			if b != nil {
				free <- b
			}
			if b = <-full; b == nil {
				return nil, nil
			}
			if b.err != nil {
				return nil, b.err
			}
			at = 0
		}
		at++
		return &b.recs[at-1], nil
	}
}
