package main

import "strings"

// column is one column of a text table. Cells are padded to one width; heads
// stand above them.
type column struct {
	head  []string
	cells []string
	left  bool // flush left; numbers stand flush right
	gap   int  // spaces before it; 0 means 2
}

func (c *column) width() int {
	w := 0
	for _, h := range c.head {
		w = max(w, runes(h))
	}
	for _, s := range c.cells {
		w = max(w, runes(s))
	}
	return w
}

func (c *column) space() int {
	if c.gap > 0 {
		return c.gap
	}
	return 2
}

// tableWidth is the width of the table made of the columns.
func tableWidth(cols []column) int {
	w := 0
	for i := range cols {
		if i > 0 {
			w += cols[i].space()
		}
		w += cols[i].width()
	}
	return w
}

// writeTable writes the columns side by side. A row of between i is written as
// a line of its own before row i.
func writeTable(b *strings.Builder, cols []column, between map[int]string) {
	heads, rows := 0, 0
	for i := range cols {
		heads, rows = max(heads, len(cols[i].head)), max(rows, len(cols[i].cells))
	}
	line := func(cell func(*column) string) {
		var l strings.Builder
		for i := range cols {
			c := &cols[i]
			if i > 0 {
				l.WriteString(strings.Repeat(" ", c.space()))
			}
			s := cell(c)
			fill := strings.Repeat(" ", c.width()-runes(s))
			if c.left {
				l.WriteString(s + fill)
			} else {
				l.WriteString(fill + s)
			}
		}
		b.WriteString(strings.TrimRight(l.String(), " ") + "\n")
	}
	for h := range heads {
		line(func(c *column) string {
			// Heads stand on the last lines.
			if i := h - (heads - len(c.head)); i >= 0 {
				return c.head[i]
			}
			return ""
		})
	}
	for r := range rows {
		if t, ok := between[r]; ok {
			b.WriteString(t + "\n")
		}
		line(func(c *column) string {
			if r < len(c.cells) {
				return c.cells[r]
			}
			return ""
		})
	}
}

// notes writes lines of a key and a text wrapped beside it.
type notes struct {
	b     *strings.Builder
	width int
}

const keyWidth = 10

func (n notes) add(key, text string) {
	for i, l := range wrap(text, n.width-keyWidth) {
		if i > 0 {
			key = ""
		}
		n.b.WriteString(key + strings.Repeat(" ", max(1, keyWidth-runes(key))) + l + "\n")
	}
}

// point writes one item of a list.
func (n notes) point(text string) {
	for i, l := range wrap(text, n.width-4) {
		mark := "  - "
		if i > 0 {
			mark = "    "
		}
		n.b.WriteString(mark + l + "\n")
	}
}
