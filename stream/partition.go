package stream

import (
	"errors"
	"fmt"
	"math"
	"net/url"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"
)

// folderKey is one key=value folder in the path of a file.
type folderKey struct {
	folder string // as it stands, for messages
	key    string
	value  string
}

// folderKeys returns the key=value folders of a path, outermost first. Both
// sides are percent-decoded; what cannot be decoded stays as it is.
func folderKeys(path string) []folderKey {
	var keys []folderKey
	for name := range strings.SplitSeq(filepath.Dir(filepath.Clean(path)), string(filepath.Separator)) {
		key, value, ok := strings.Cut(name, "=")
		if ok && key != "" {
			keys = append(keys, folderKey{name, unescape(key), unescape(value)})
		}
	}
	return keys
}

func unescape(s string) string {
	if u, err := url.PathUnescape(s); err == nil {
		return u
	}
	return s
}

// constant is the cell that a file has in a folder column.
type constant struct {
	present bool // the path has the key
	missing bool // the value is empty or one of Options.Null
	folder  string
	i64     int64
	f64     float64
	text    string
}

// vector returns n equal cells; asNumber as in Use.
func (c *constant) vector(kind Kind, asNumber bool, n int) Vector {
	if asNumber || kind == Float64 {
		x := c.f64
		switch {
		case c.missing:
			x = math.NaN()
		case kind == Uint64:
			x = float64(uint64(c.i64))
		case kind != Float64:
			x = float64(c.i64)
		}
		return Vector{Kind: Float64, F64: slices.Repeat([]float64{x}, n)}
	}
	if kind == Text {
		v := Vector{Kind: Text, Code: make([]int32, n), Dict: &Dict{}}
		if c.missing {
			for i := range v.Code {
				v.Code[i] = -1
			}
		} else {
			v.Dict.Values = []string{c.text}
		}
		return v
	}
	v := Vector{Kind: kind, I64: slices.Repeat([]int64{c.i64}, n)}
	if c.missing {
		v.Null = slices.Repeat([]bool{true}, n)
	}
	return v
}

// bounds is the range of the cell, as vector brings it.
func (c *constant) bounds(kind Kind, asNumber bool) Range {
	if c.missing {
		return Range{AllMissing: true}
	}
	r := Range{NoneMissing: true, Bounded: true}
	switch v := c.vector(kind, asNumber, 1); v.Kind {
	case Float64:
		r.F64 = [2]float64{v.F64[0], v.F64[0]}
	case Text:
		r.Text = [2]string{c.text, c.text}
	default:
		r.I64 = [2]int64{v.I64[0], v.I64[0]}
	}
	return r
}

// folderColumns makes columns of the key=value folders of all files: cells[i][k]
// belongs to file i and column k. The kind is guessed over all values: int64 if
// all are canonical integers, calendar days if all are like 2024-03-31, else
// text; o.Kinds overrides it.
func folderColumns(paths []string, o Options) (columns []Column, cells [][]constant, err error) {
	index := make(map[string]int)
	raw := make([][]folderKey, len(paths))
	for i, path := range paths {
		raw[i] = folderKeys(path)
		for j, k := range raw[i] {
			if slices.ContainsFunc(raw[i][:j], func(e folderKey) bool { return e.key == k.key }) {
				return nil, nil, fmt.Errorf("%s: two folders give the column %s", path, k.key)
			}
			if _, ok := index[k.key]; !ok {
				index[k.key] = len(columns)
				columns = append(columns, Column{Name: k.key})
			}
		}
	}
	cells = make([][]constant, len(paths))
	for i := range raw {
		cells[i] = make([]constant, len(columns))
		for _, k := range raw[i] {
			cells[i][index[k.key]] = constant{
				present: true,
				missing: k.value == "" || slices.Contains(o.Null, k.value),
				folder:  k.folder,
				text:    k.value,
			}
		}
	}
	for k := range columns {
		c := &columns[k]
		if kind, ok := o.Kinds[c.Name]; ok {
			c.Kind = kind
		} else {
			c.Kind = guessFolders(cells, k)
		}
		if err := parseFolders(paths, c, cells, k); err != nil {
			return nil, nil, err
		}
	}
	return columns, cells, nil
}

// guessFolders returns the kind that fits all values of column k.
func guessFolders(cells [][]constant, k int) Kind {
	ints, days, some := true, true, false
	for i := range cells {
		c := &cells[i][k]
		if !c.present || c.missing {
			continue
		}
		some = true
		if ints {
			n, err := strconv.ParseInt(c.text, 10, 64)
			ints = err == nil && strconv.FormatInt(n, 10) == c.text
		}
		if days {
			t, err := time.Parse(time.DateOnly, c.text)
			days = err == nil && nanosFit(t)
		}
	}
	switch {
	case some && ints:
		return Int64
	case some && days:
		return Time
	}
	return Text
}

// parseFolders fills the values of column k and settles its kind of time.
func parseFolders(paths []string, col *Column, cells [][]constant, k int) error {
	first := -1
	for i := range cells {
		c := &cells[i][k]
		if !c.present || c.missing {
			continue
		}
		zoned, day, err := c.parse(col.Kind)
		if err != nil {
			return fmt.Errorf("%s: folder %s: found %q, want %w", paths[i], c.folder, c.text, err)
		}
		if first < 0 {
			first, col.Zoned, col.DateOnly = i, zoned, day
		}
		if zoned != col.Zoned {
			return fmt.Errorf("column %s: the folder %s in %s and the folder %s in %s: only one of them has a time zone",
				col.Name, cells[first][k].folder, paths[first], c.folder, paths[i])
		}
		col.DateOnly = col.DateOnly && day
	}
	return nil
}

// folderTimes are the layouts of times in folder names.
var folderTimes = []struct {
	layout     string
	zoned, day bool
}{
	{time.DateOnly, false, true},
	{"2006-01-02T15:04:05", false, false},
	{"2006-01-02 15:04:05", false, false},
	{"2006-01-02T15:04:05Z07:00", true, false},
	{"2006-01-02 15:04:05Z07:00", true, false},
}

// parse reads the text as that kind; err says what would be right.
func (c *constant) parse(kind Kind) (zoned, day bool, err error) {
	switch kind {
	case Int64:
		if c.i64, err = strconv.ParseInt(c.text, 10, 64); err != nil {
			return false, false, errors.New("a whole number (int64)")
		}
	case Uint64:
		u, err := strconv.ParseUint(c.text, 10, 64)
		if err != nil {
			return false, false, errors.New("a whole number that is not negative (uint64)")
		}
		c.i64 = int64(u)
	case Float64:
		c.f64, err = strconv.ParseFloat(c.text, 64)
		if err != nil || math.IsInf(c.f64, 0) {
			return false, false, errors.New("a finite number (float64)")
		}
	case Bool:
		switch strings.ToLower(c.text) {
		case "true":
			c.i64 = 1
		case "false":
		default:
			return false, false, errors.New("true or false (bool)")
		}
	case Time:
		for _, l := range folderTimes {
			if t, err := time.Parse(l.layout, c.text); err == nil && nanosFit(t) {
				c.i64 = t.UnixNano()
				return l.zoned, l.day, nil
			}
		}
		return false, false, errors.New("a time like 2024-03-31 or 2024-03-31T08:00:00Z, in the years 1678 to 2261")
	case Text:
	default:
		return false, false, fmt.Errorf("a known kind, not %s", kind)
	}
	return false, false, nil
}

// nanosFit reports whether t is in the years 1678 to 2261, where nanoseconds
// since 1970 fit an int64.
func nanosFit(t time.Time) bool {
	y := t.UTC().Year()
	return y >= 1678 && y <= 2261
}
