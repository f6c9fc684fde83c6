package main

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

// columnsFormat is the name and version of the JSON form.
const columnsFormat = "tallrow-columns/1"

func newColumns(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "columns DATA...",
		Short: "read the data once and describe every column",
		Long: `For each column: kind, missing cells, how many different values (counted up to 10,000), smallest and
largest value, mean and standard deviation of numbers, the most frequent values or else the first.`,
		Example: `  tallrow columns unloading.csv
  tallrow columns --first 100000 --json days/*.parquet`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onColumns)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onColumns)
		if err != nil {
			return err
		}
		if err := s.needData(cmd); err != nil {
			return err
		}
		out, err := a.openSink(s)
		if err != nil {
			return err
		}
		ctx := cmd.Context()
		src, err := a.open(ctx, s, s.reading())
		if err != nil {
			return err
		}
		defer src.Close()
		m := new(accum.Meter)
		stop := a.watch(s, m)
		workers, _ := s.share(src.Info())
		p, err := profileSource(ctx, src, workers, m)
		stop()
		if err != nil {
			return err
		}
		doc := newColumnsDoc(src.Info(), p)
		if !s.json {
			return out.write([]byte(renderColumns(doc, p, out.width())))
		}
		text, err := jsonLine(doc)
		if err != nil {
			return err
		}
		return out.write(text)
	}
	return cmd
}

// columnsDoc is the profile as JSON.
type columnsDoc struct {
	Format  string      `json:"format"`
	Version string      `json:"version"`
	Input   columnsIn   `json:"input"`
	Rows    columnsRows `json:"rows"`
	Columns []columnDoc `json:"columns"`
}

type columnsIn struct {
	Format string `json:"format"`
	Files  int    `json:"files"`
	Bytes  int64  `json:"bytes"` // -1 if unknown
}

type columnsRows struct {
	Read      int64 `json:"read"`
	Malformed int64 `json:"malformed"`
}

// columnDoc tells of one column. Min and Max are numbers for number kinds, else
// text; null if the column has no value.
type columnDoc struct {
	Name          string        `json:"name"`
	Kind          string        `json:"kind"`
	Missing       int64         `json:"missing"`
	Infinite      int64         `json:"infinite"`
	Distinct      int           `json:"distinct"`
	DistinctExact bool          `json:"distinct_exact"` // false: there are more
	Min           any           `json:"min"`
	Max           any           `json:"max"`
	Mean          vcov.Number   `json:"mean"`
	SD            vcov.Number   `json:"sd"`
	Frequent      []frequentDoc `json:"frequent"` // empty if not counted
	First         []string      `json:"first"`
	Note          *string       `json:"note"`
}

type frequentDoc struct {
	Value string `json:"value"`
	Count int64  `json:"count"`
}

func newColumnsDoc(info stream.Info, p *profile) *columnsDoc {
	d := &columnsDoc{Format: columnsFormat, Version: version,
		Input: columnsIn{info.Format, info.Files, info.Bytes},
		Rows:  columnsRows{p.rows, p.malformed}, Columns: []columnDoc{}}
	for _, c := range p.cols {
		k := stream.KeyColumn{Kind: c.kind(), Zoned: c.col.Zoned, DateOnly: c.col.DateOnly}
		label := func(v stream.KeyValue) string { return stream.FormatKey(k, nil, v) }
		cd := columnDoc{Name: c.col.Name, Kind: c.col.Kind.String(), Missing: c.missing, Infinite: c.infinite,
			Distinct: maxDistinct, Mean: vcov.Number(math.NaN()), SD: vcov.Number(math.NaN()),
			Frequent: []frequentDoc{}, First: []string{}}
		if c.values != nil {
			cd.Distinct, cd.DistinctExact = len(c.values), true
		}
		if c.seen {
			cd.Min, cd.Max = endDoc(c, c.min, label), endDoc(c, c.max, label)
		}
		if c.n > 0 {
			cd.Mean, cd.SD = vcov.Number(c.mean), vcov.Number(c.sd())
		}
		for _, v := range c.frequent() {
			cd.Frequent = append(cd.Frequent, frequentDoc{label(v.key), v.n})
		}
		for _, v := range c.first {
			cd.First = append(cd.First, label(v))
		}
		if n := c.remark(); n != "" {
			cd.Note = &n
		}
		d.Columns = append(d.Columns, cd)
	}
	return d
}

// endDoc gives the smallest or largest value.
func endDoc(c *columnProfile, v stream.KeyValue, label func(stream.KeyValue) string) any {
	switch c.kind() {
	case stream.Float64:
		return vcov.Number(math.Float64frombits(v.Bits))
	case stream.Int64:
		return int64(v.Bits)
	case stream.Uint64:
		return v.Bits
	}
	return label(v)
}

// remark says what a reader would not expect of the column.
func (c *columnProfile) remark() string {
	var parts []string
	if c.fraction {
		parts = append(parts, "whole numbers in the first rows, fractions later: give it --kinds "+c.col.Name+"=float64 to use it as a key")
	}
	if c.beyond {
		parts = append(parts, "values beyond 2^53 are rounded in this table")
	}
	if c.infinite > 0 {
		parts = append(parts, plural(c.infinite, "infinite cell", "infinite cells"))
	}
	return strings.Join(parts, "; ")
}

// renderColumns writes the profile for a reader.
func renderColumns(d *columnsDoc, p *profile, width int) string {
	width = min(max(width, narrowest), widest)
	var b strings.Builder
	head := fmt.Sprintf("%s in %s (%s)", plural(d.Rows.Read, "row", "rows"), plural(int64(d.Input.Files), "file", "files"), d.Input.Format)
	if d.Rows.Malformed > 0 {
		head += fmt.Sprintf(", %s of them could not be read", count(d.Rows.Malformed))
	}
	b.WriteString(head + "\n\n")
	k := len(d.Columns)
	cell := func(f func(*columnDoc, *columnProfile) string) []string {
		cells := make([]string, k)
		for i := range cells {
			cells[i] = f(&d.Columns[i], p.cols[i])
		}
		return cells
	}
	number := func(x vcov.Number) string {
		if !x.Exists() {
			return ""
		}
		return digits(float64(x), 5)
	}
	end := func(x any) string {
		switch x := x.(type) {
		case nil:
			return ""
		case vcov.Number:
			if f := float64(x); f == math.Trunc(f) && math.Abs(f) < 1<<53 {
				return strconv.FormatInt(int64(f), 10)
			}
			if short := strconv.FormatFloat(float64(x), 'g', -1, 64); len(short) <= 10 {
				return short
			}
			return digits(float64(x), 8)
		}
		return shorten(fmt.Sprint(x), 20)
	}
	cols := []column{
		{head: []string{"column"}, left: true, cells: cell(func(c *columnDoc, _ *columnProfile) string { return shorten(c.Name, termWidth) })},
		{head: []string{"kind"}, left: true, cells: cell(func(c *columnDoc, _ *columnProfile) string { return c.Kind })},
		{head: []string{"missing"}, cells: cell(func(c *columnDoc, _ *columnProfile) string { return count(c.Missing) })},
		{head: []string{"distinct"}, cells: cell(func(c *columnDoc, _ *columnProfile) string {
			if !c.DistinctExact {
				return ">" + count(maxDistinct)
			}
			return count(int64(c.Distinct))
		})},
		{head: []string{"smallest"}, cells: cell(func(c *columnDoc, _ *columnProfile) string { return end(c.Min) })},
		{head: []string{"largest"}, cells: cell(func(c *columnDoc, _ *columnProfile) string { return end(c.Max) })},
		{head: []string{"mean"}, cells: cell(func(c *columnDoc, _ *columnProfile) string { return number(c.Mean) })},
		{head: []string{"sd"}, cells: cell(func(c *columnDoc, _ *columnProfile) string { return number(c.SD) })},
	}
	room := width - tableWidth(cols) - 2
	if room >= 16 {
		cols = append(cols, column{head: []string{"most often, or first"}, left: true, cells: cell(func(c *columnDoc, _ *columnProfile) string {
			return valuesText(c, room)
		})})
	}
	writeTable(&b, cols, nil)
	n := notes{&b, width}
	for _, c := range d.Columns {
		if c.Note != nil {
			n.add("note", oneLine(c.Name+": "+*c.Note))
		}
	}
	for _, e := range p.problems {
		n.add("bad row", oneLine(e.Error()))
	}
	return b.String()
}

// valuesText names values of a column in at most room characters.
func valuesText(c *columnDoc, room int) string {
	var list []string
	for _, f := range c.Frequent {
		if f.Count > 1 {
			list = append(list, fmt.Sprintf("%s (%s)", shorten(f.Value, 14), count(f.Count)))
		}
	}
	if len(list) == 0 {
		for _, v := range c.First {
			list = append(list, shorten(v, 14))
		}
		if len(list) > 0 {
			list = append(list, "...")
		}
	}
	for len(list) > 1 && runes(strings.Join(list, ", ")) > room {
		list = list[:len(list)-1]
	}
	return shorten(strings.Join(list, ", "), room)
}
