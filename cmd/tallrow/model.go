package main

import (
	"errors"
	"fmt"
	"os"
	"strconv"
	"strings"

	"github.com/pelletier/go-toml/v2"
	"github.com/pelletier/go-toml/v2/unstable"

	"github.com/tallrow/tallrow/stream"
)

// maxModelBytes bounds a model file: a data file with the wrong ending must
// not be read whole.
const maxModelBytes = 1 << 20

// readModel applies the model file at path to s.
func readModel(s *settings, path string, on int) error {
	f, err := os.Open(path)
	if err != nil {
		return stream.Usef("model file %s: %s", path, plainPathError(err))
	}
	defer f.Close()
	if st, err := f.Stat(); err == nil && st.IsDir() {
		return stream.Usef("model file %s: is a folder", path)
	}
	data := make([]byte, maxModelBytes+1)
	n := 0
	for n < len(data) {
		m, err := f.Read(data[n:])
		n += m
		if m == 0 && err != nil {
			break
		}
	}
	if n > maxModelBytes {
		return stream.Usef("model file %s: larger than 1 MiB, want a short TOML file", path)
	}
	return parseModel(s, path, data[:n], on)
}

// plainPathError drops the operation and path that the message already has.
func plainPathError(err error) string {
	var pe *os.PathError
	if errors.As(err, &pe) {
		return pe.Err.Error()
	}
	return err.Error()
}

// parseModel applies the text of a model file to s. Every error names file and
// line and is a wrong use.
func parseModel(s *settings, file string, data []byte, on int) error {
	// The library's own decoder judges syntax and keys given twice; the walk
	// over its syntax tree below knows the lines.
	var whole map[string]any
	if err := toml.Unmarshal(data, &whole); err != nil {
		var de *toml.DecodeError
		if errors.As(err, &de) {
			row, col := de.Position()
			return stream.Usef("%s line %d column %d: %s", file, row, col, strings.TrimPrefix(de.Error(), "toml: "))
		}
		return stream.Usef("%s: %s", file, strings.TrimPrefix(err.Error(), "toml: "))
	}
	m := modelWalk{s: s, file: file, on: on, data: data}
	m.p.Reset(data)
	for m.p.NextExpression() {
		if err := m.expression(m.p.Expression()); err != nil {
			return err
		}
	}
	if err := m.p.Error(); err != nil {
		return stream.Usef("%s: %s", file, err)
	}
	return m.finishKinds()
}

// modelWalk goes over the expressions of a model file.
type modelWalk struct {
	s    *settings
	file string
	on   int
	data []byte
	p    unstable.Parser

	inKinds   bool // inside [kinds]
	kinds     []string
	kindsLine int
}

// keyOf returns the parts of a dotted key and its line.
func (m *modelWalk) keyOf(n *unstable.Node) (parts []string, line int) {
	it := n.Key()
	for it.Next() {
		k := it.Node()
		if line == 0 {
			line = m.p.Shape(k.Raw).Start.Line
		}
		parts = append(parts, string(k.Data))
	}
	return parts, line
}

func (m *modelWalk) expression(e *unstable.Node) error {
	switch e.Kind {
	case unstable.Table:
		key, line := m.keyOf(e)
		m.inKinds = len(key) == 1 && key[0] == "kinds"
		if m.inKinds {
			m.kindsLine = line
			return nil
		}
		return m.unknown(key, line)
	case unstable.ArrayTable:
		key, line := m.keyOf(e)
		if len(key) == 1 && key[0] == "kinds" {
			return stream.Usef("%s line %d: kinds: found an array of tables, want one table [kinds]", m.file, line)
		}
		return m.unknown(key, line)
	case unstable.KeyValue:
		key, line := m.keyOf(e)
		if m.inKinds {
			key = append([]string{"kinds"}, key...)
		}
		return m.keyValue(key, line, e.Value())
	}
	return nil
}

func (m *modelWalk) keyValue(key []string, line int, v *unstable.Node) error {
	if key[0] == "kinds" && len(key) == 2 {
		if v.Kind != unstable.String {
			return stream.Usef("%s line %d: kinds: column %s: found %s, want a kind as a string such as \"text\"", m.file, line, key[1], found(v))
		}
		if m.kindsLine == 0 {
			m.kindsLine = line
		}
		m.kinds = append(m.kinds, key[1]+"="+string(v.Data))
		return nil
	}
	o := optionNamed(key[0])
	if len(key) != 1 || o == nil || !o.file {
		if len(key) > 2 && key[0] == "kinds" {
			return stream.Usef("%s line %d: kinds: found the dotted name %s, want the column name in quotes", m.file, line, strings.Join(key[1:], "."))
		}
		return m.unknown(key, line)
	}
	from := fmt.Sprintf("%s line %d: %s", m.file, line, o.name)
	if o.on&m.on == 0 {
		// One file may serve fit and columns: a key that only the other knows
		// has no bearing here.
		return nil
	}
	val, err := m.value(o, v)
	if err != nil {
		return stream.Usef("%s: %s", from, err)
	}
	if o.form == formKinds && val.parts == nil {
		m.kindsLine = line
		return nil
	}
	return m.s.give(o, val, from)
}

// unknown refuses a key, offering the nearest one.
func (m *modelWalk) unknown(key []string, line int) error {
	name := strings.Join(key, ".")
	if o := optionNamed(name); o != nil {
		if o.file {
			return stream.Usef("%s line %d: found a table %s, want %s", m.file, line, name, wanted(o))
		}
		return stream.Usef("%s line %d: %s belongs on the command line: --%s", m.file, line, name, name)
	}
	if name == "data" {
		return stream.Usef("%s line %d: data are named on the command line, after the model file", m.file, line)
	}
	return stream.Usef("%s line %d: unknown key %q%s", m.file, line, name, meant(name, optionNames(onAll, true)))
}

// finishKinds applies the columns gathered from [kinds] or an inline table.
func (m *modelWalk) finishKinds() error {
	if m.kindsLine == 0 {
		return nil
	}
	from := fmt.Sprintf("%s line %d: kinds", m.file, m.kindsLine)
	return m.s.give(optionNamed("kinds"), value{parts: m.kinds, exact: true}, from)
}

// found names a TOML value in a message.
func found(v *unstable.Node) string {
	switch v.Kind {
	case unstable.String:
		return fmt.Sprintf("the string %q", v.Data)
	case unstable.Bool, unstable.Float, unstable.Integer:
		return string(v.Data)
	case unstable.Array:
		return "an array"
	case unstable.InlineTable:
		return "a table"
	}
	return "a date or time"
}

// wanted names the TOML values that an option takes.
func wanted(o *option) string {
	switch o.form {
	case formList:
		return `a string with commas or an array of strings`
	case formMany:
		return `a string or an array of strings, one for each test`
	case formSwitch:
		return "true or false"
	case formWhole:
		return "a whole number"
	case formNumber:
		return "a number"
	case formSize:
		return `a size such as "1GiB", or a whole number of bytes`
	case formPasses:
		return `"auto", 1 or 2`
	case formAuto:
		return `"auto" or a whole number`
	case formKinds:
		return `a table such as { crane = "text" }`
	}
	return "a string"
}

// value turns a TOML value into what the option takes.
func (m *modelWalk) value(o *option, v *unstable.Node) (value, error) {
	wrong := fmt.Errorf("found %s, want %s", found(v), wanted(o))
	one := func() (value, error) { return value{parts: []string{string(v.Data)}}, nil }
	switch o.form {
	case formText:
		if v.Kind == unstable.String {
			return one()
		}
	case formSwitch:
		if v.Kind == unstable.Bool {
			return one()
		}
	case formWhole:
		if v.Kind == unstable.Integer {
			return integer(v, wrong)
		}
	case formNumber:
		if v.Kind == unstable.Float || v.Kind == unstable.Integer {
			return value{parts: []string{strings.ReplaceAll(string(v.Data), "_", "")}}, nil
		}
	case formSize, formPasses, formAuto:
		if v.Kind == unstable.String {
			return one()
		}
		if v.Kind == unstable.Integer {
			return integer(v, wrong)
		}
	case formList, formMany:
		if v.Kind == unstable.String {
			return one()
		}
		if v.Kind == unstable.Array {
			parts := []string{}
			it := v.Children()
			for it.Next() {
				e := it.Node()
				if e.Kind == unstable.Comment {
					continue
				}
				if e.Kind != unstable.String {
					return value{}, fmt.Errorf("found %s in the array, want strings", found(e))
				}
				parts = append(parts, string(e.Data))
			}
			return value{parts: parts, exact: true}, nil
		}
	case formKinds:
		if v.Kind == unstable.String {
			return one()
		}
		if v.Kind == unstable.InlineTable {
			it := v.Children()
			for it.Next() {
				e := it.Node()
				if e.Kind != unstable.KeyValue {
					continue
				}
				key, _ := m.keyOf(e)
				if len(key) != 1 || e.Value().Kind != unstable.String {
					return value{}, fmt.Errorf("column %s: found %s, want a kind as a string such as \"text\"", strings.Join(key, "."), found(e.Value()))
				}
				m.kinds = append(m.kinds, key[0]+"="+string(e.Value().Data))
			}
			return value{}, nil
		}
	}
	return value{}, wrong
}

// integer reads a TOML integer, which may be written in base 2, 8 or 16.
func integer(v *unstable.Node, wrong error) (value, error) {
	n, err := strconv.ParseInt(string(v.Data), 0, 64)
	if err != nil {
		return value{}, wrong
	}
	return value{parts: []string{strconv.FormatInt(n, 10)}}, nil
}
