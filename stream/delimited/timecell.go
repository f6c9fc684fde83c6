package delimited

import (
	"encoding/binary"

	"github.com/tallrow/tallrow/stream/internal/scan"
)

// dayMemo remembers the last date, which most often is that of the next row.
type dayMemo struct {
	high uint64 // as written, all but the day of the month
	low  uint16
	ns   int64
	set  bool
}

// times reads times in the column's most common forms, to the second:
//
//	2006-01-02  2006-01-02T15:04:05  2006-01-02 15:04:05Z
//
// It returns the row of the first cell written otherwise, or len(out).
func (o *column) times(c *scan.Column, k int, out []int64) int {
	text := c.Text[:len(c.Text)+scan.Pad]
	length := 19
	switch {
	case o.schema.DateOnly:
		length = 10
	case o.schema.Zoned:
		length = 20
	}
	for ; k < len(out); k++ {
		start, end := c.Cell(k)
		if end-start != length {
			return k
		}
		b := text[start : start+24]
		high, low := binary.LittleEndian.Uint64(b), binary.LittleEndian.Uint16(b[8:])
		if high != o.day.high || low != o.day.low || !o.day.set {
			ns, _, _, ok := parseTime(b[:10])
			if !ok {
				return k
			}
			o.day = dayMemo{high, low, ns, true}
		}
		ns := o.day.ns
		if length > 10 {
			sec, ok := clock(b[10:])
			if !ok || length == 20 && b[19]|0x20 != 'z' {
				return k
			}
			ns += sec * 1e9
		}
		out[k] = ns
	}
	return k
}

// clock reads the nine bytes of T15:04:05 as seconds.
func clock(b []byte) (sec int64, ok bool) {
	_ = b[8]
	hour, ok1 := two(b[1:])
	minute, ok2 := two(b[4:])
	s, ok3 := two(b[7:])
	return hour*3600 + minute*60 + s, ok1 && ok2 && ok3 && hour <= 23 && minute <= 59 && s <= 59 && b[3] == ':' && b[6] == ':' && (b[0]|0x20 == 't' || b[0] == ' ')
}

// parseTime reads a date, or a date and a time of day with T or a blank between
// them, with or without seconds, a fraction of up to nine digits, and a zone (Z,
// UTC, +hh, +hhmm, +hh:mm; a blank may stand before it). The forms are those of
// RFC 3339 and common practice beside it. It returns the nanoseconds since
// 1970-01-01: of the instant if there is a zone, else as the wall shows it.
func parseTime(b []byte) (ns int64, zoned, dateOnly, ok bool) {
	if len(b) < 10 || b[4] != '-' || b[7] != '-' {
		return 0, false, false, false
	}
	year, ok1 := two(b)
	low, ok2 := two(b[2:])
	month, ok3 := two(b[5:])
	day, ok4 := two(b[8:])
	year = year*100 + low
	if !ok1 || !ok2 || !ok3 || !ok4 || year < 1678 || year > 2261 || month < 1 || month > 12 || day < 1 || day > daysIn(year, month) {
		return 0, false, false, false
	}
	sec := days(year, month, day) * 86400
	b = b[10:]
	if len(b) == 0 {
		return sec * 1e9, false, true, true
	}
	if len(b) < 6 || (b[0]|0x20 != 't' && b[0] != ' ') || b[3] != ':' {
		return 0, false, false, false
	}
	hour, ok1 := two(b[1:])
	minute, ok2 := two(b[4:])
	if !ok1 || !ok2 || hour > 23 || minute > 59 {
		return 0, false, false, false
	}
	sec += hour*3600 + minute*60
	b = b[6:]
	var frac int64
	if len(b) >= 3 && b[0] == ':' {
		s, ok := two(b[1:])
		if !ok || s > 59 {
			return 0, false, false, false
		}
		sec += s
		b = b[3:]
		if len(b) > 0 && (b[0] == '.' || b[0] == ',') {
			n := 0
			for b = b[1:]; n < len(b) && b[n]-'0' <= 9; n++ {
				if n >= 9 {
					return 0, false, false, false
				}
				frac = frac*10 + int64(b[n]-'0')
			}
			if n == 0 {
				return 0, false, false, false
			}
			for k := n; k < 9; k++ {
				frac *= 10
			}
			b = b[n:]
		}
	}
	if len(b) == 0 {
		return sec*1e9 + frac, false, false, true
	}
	offset, ok := zone(b)
	if !ok {
		return 0, false, false, false
	}
	return (sec-offset)*1e9 + frac, true, false, true
}

// zone returns the seconds east of UTC.
func zone(b []byte) (seconds int64, ok bool) {
	if len(b) > 1 && b[0] == ' ' {
		b = b[1:]
	}
	if len(b) == 1 && b[0]|0x20 == 'z' || string(b) == "UTC" {
		return 0, true
	}
	if len(b) < 3 || (b[0] != '+' && b[0] != '-') {
		return 0, false
	}
	h, ok := two(b[1:])
	if !ok || h > 23 {
		return 0, false
	}
	rest := b[3:]
	var m int64
	if len(rest) > 0 {
		if rest[0] == ':' {
			rest = rest[1:]
		}
		if len(rest) != 2 {
			return 0, false
		}
		if m, ok = two(rest); !ok || m > 59 {
			return 0, false
		}
	}
	seconds = h*3600 + m*60
	if b[0] == '-' {
		seconds = -seconds
	}
	return seconds, true
}

func two(b []byte) (int64, bool) {
	h, l := b[0]-'0', b[1]-'0'
	return int64(h)*10 + int64(l), h <= 9 && l <= 9
}

func daysIn(year, month int64) int64 {
	switch month {
	case 2:
		if year%4 == 0 && (year%100 != 0 || year%400 == 0) {
			return 29
		}
		return 28
	case 4, 6, 9, 11:
		return 30
	}
	return 31
}

// days counts from 1970-01-01 in the proleptic Gregorian calendar. The year is
// taken from March, so that the leap day is the last of its year.
func days(year, month, day int64) int64 {
	if month <= 2 {
		year--
		month += 12
	}
	inYear := (153*(month-3)+2)/5 + day - 1
	return year*365 + year/4 - year/100 + year/400 + inYear - 719468
}
