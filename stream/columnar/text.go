package columnar

import "github.com/tallrow/tallrow/stream"

// maxInterned is how many texts a Dict may hold before a new one is begun.
const maxInterned = 65536

// textState gives the cells of a text column codes, across pages and chunks.
type textState struct {
	dict *stream.Dict
	// of is the chunk dictionary whose entries are the first of dict, so that
	// its indexes are codes; nil if there is none.
	of   *dictionary
	find map[string]int32
	last int32 // code of the last interned text
}

// restart begins a new Dict: from a chunk's dictionary, or an empty one.
func (t *textState) restart(d *dictionary, c *column) {
	*t = textState{dict: new(stream.Dict), of: d, last: -1}
	if d != nil {
		v := d.asTexts(c)
		t.dict.Values = v[:len(v):len(v)]
	}
}

func (t *textState) intern(b []byte) int32 {
	if t.last >= 0 && t.dict.Values[t.last] == string(b) {
		return t.last
	}
	if t.find == nil {
		t.find = make(map[string]int32, len(t.dict.Values))
		for i, s := range t.dict.Values {
			if _, ok := t.find[s]; !ok {
				t.find[s] = int32(i)
			}
		}
	}
	code, ok := t.find[string(b)]
	if !ok {
		code = int32(len(t.dict.Values))
		s := string(b)
		t.dict.Values = append(t.dict.Values, s)
		t.find[s] = code
	}
	t.last = code
	return code
}

// codes writes the codes of len(dst) values of the page from value from. first
// tells that the batch has no cell of the column yet, so that a new Dict may be
// begun.
func (t *textState) codes(dst []int32, ch *chunk, from int, first bool, tmp []byte) []byte {
	p := &ch.page
	if p.idx != nil {
		if t.dict == nil || first && t.of != ch.dict {
			t.restart(ch.dict, ch.col)
		}
		idx := p.idx[from : from+len(dst)]
		if t.of == ch.dict {
			copy(dst, idx)
			return tmp
		}
		ch.dict.asTexts(ch.col)
		for i, k := range idx {
			dst[i] = ch.dict.code(k, t)
		}
		return tmp
	}
	if t.dict == nil || first && len(t.dict.Values) > maxInterned {
		t.restart(nil, ch.col)
	}
	if ch.col.conv == convText {
		for i := range dst {
			dst[i] = t.intern(p.bytes(from + i))
		}
		return tmp
	}
	for i := range dst {
		tmp = ch.col.appendText(tmp[:0], &p.values, from+i)
		dst[i] = t.intern(tmp)
	}
	return tmp
}
