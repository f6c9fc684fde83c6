package quaydata

import (
	"fmt"
	"math"
	"math/bits"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// Config says how much data to make. The zero value is the demo's.
type Config struct {
	Rows   int64  // 0 means 2,000,000
	Quays  int    // 0 means 60
	Cranes int    // of all quays together; 0 means 2,000
	Days   int    // 0 means 365, the year from 2025-01-01
	Seed   uint64 // 0 is a seed like any other
}

// The columns, in order.
const (
	ColQuay = iota
	ColCrane
	ColT
	ColBarge
	ColPallets
	ColTonnes
	ColCrew
	ColWet
	ColNight
	ColMinutes
	numCols
)

// Outcome is what the demo's model explains.
const Outcome = "minutes"

// Terms returns the terms of the demo's model, as they are written in one.
func Terms() []string {
	return []string{"pallets", "tonnes", "crew", "wet", "night", "each(barge)"}
}

// Truth returns the true coefficients of the model of Outcome by Terms with a
// constant, named as in the result of a fit: constant, pallets, barge = deck, ...
func Truth() map[string]float64 {
	m := map[string]float64{"constant": trueConstant, "pallets": truePallets, "tonnes": trueTonnes, "crew": trueCrew, "wet": trueWet, "night": trueNight}
	for i, b := range Barges()[1:] {
		m["barge = "+b] = trueBarge[i+1]
	}
	return m
}

// Barges are the classes of barges in the order of their labels; the first is
// the base level.
func Barges() []string { return []string{"canal", "deck", "hatch", "lighter", "motor"} }

const (
	trueConstant = 60.0
	truePallets  = 1.9
	trueTonnes   = 0.35
	trueCrew     = -3.0
	trueWet      = 7.0
	trueNight    = 4.0

	sdQuay, sdDay, sdCrane = 4.0, 4.0, 3.0
	sdRow, sdRowPallet     = 1.5, 0.15
)

var (
	trueBarge = [5]float64{0, 5, 8, -4, 3}
	// Most pallets above four that a class carries.
	bargeRoom = [5]float64{24, 40, 56, 32, 72}
	// Share of each class of 100 rows, added up.
	bargeShare = [5]uint64{20, 45, 70, 85, 100}
)

// Tags keep the streams of random numbers apart.
const (
	tagRow = iota + 1
	tagQuay
	tagDay
	tagCrane
	tagOrder
)

// Data makes rows. It is immutable and may be shared by goroutines.
type Data struct {
	cfg    Config
	dict   *stream.Dict
	quay   []quay
	crane  []crane
	day    []dayShock // quay by quay
	choose alias
	start  int64 // nanoseconds since 1970-01-01
}

type quay struct {
	effect float64
	crew   int64
}

type crane struct {
	id     int64
	quay   int32
	effect float64
	tonnes float64
}

type dayShock struct {
	effect float64
	wet    bool
}

// New prepares the data of c: the quays, their days and cranes. It costs time
// and memory of Quays*Days + Cranes; rows are made by Fill.
func New(c Config) (*Data, error) {
	if c.Rows == 0 {
		c.Rows = 2_000_000
	}
	if c.Quays == 0 {
		c.Quays = 60
	}
	if c.Cranes == 0 {
		c.Cranes = 2_000
	}
	if c.Days == 0 {
		c.Days = 365
	}
	switch {
	case c.Rows < 0:
		return nil, fmt.Errorf("quaydata: %d rows, want 1 or more", c.Rows)
	case c.Quays < 1 || c.Quays > 100_000:
		return nil, fmt.Errorf("quaydata: %d quays, want 1 to 100,000", c.Quays)
	case c.Cranes < c.Quays || c.Cranes > 10_000_000:
		return nil, fmt.Errorf("quaydata: %d cranes, want at least one for each of %d quays and at most 10,000,000", c.Cranes, c.Quays)
	case c.Days < 1 || c.Days > 36_500:
		return nil, fmt.Errorf("quaydata: %d days, want 1 to 36,500", c.Days)
	}
	d := &Data{cfg: c, dict: &stream.Dict{Values: Barges()}, start: time.Date(2025, 1, 1, 0, 0, 0, 0, time.UTC).UnixNano()}
	d.quays()
	d.cranes()
	return d, nil
}

// quays draws, for each quay, its effect, usual crew, and the shock and weather
// of its days.
func (d *Data) quays() {
	c := d.cfg
	d.quay = make([]quay, c.Quays)
	d.day = make([]dayShock, c.Quays*c.Days)
	for q := range d.quay {
		s := at(c.Seed, tagQuay, uint64(q))
		d.quay[q] = quay{effect: sdQuay * s.shock(), crew: 2 + int64(s.below(5))}
		rain := 0.1 + float64(0.4*s.unit())
		for t := range c.Days {
			s := at(c.Seed, tagDay, uint64(q*c.Days+t))
			d.day[q*c.Days+t] = dayShock{effect: sdDay * s.shock(), wet: s.unit() < rain}
		}
	}
}

// cranes shares the cranes among the quays and draws their effects and usual
// cargo. The largest quay has about seven times the traffic of the smallest.
func (d *Data) cranes() {
	c := d.cfg
	size := make([]float64, c.Quays)
	total := 0.0
	for q := range size {
		size[q] = 1
		if c.Quays > 1 {
			size[q] = 1 + 6*float64(q)/float64(c.Quays-1)
		}
		total += size[q]
	}
	s := at(c.Seed, tagOrder, 0)
	for q := len(size) - 1; q > 0; q-- {
		r := s.below(uint64(q) + 1)
		size[q], size[r] = size[r], size[q]
	}
	d.crane = make([]crane, 0, c.Cranes)
	weight := make([]float64, 0, c.Cranes)
	spare := c.Cranes - c.Quays // beyond the one that each quay has
	sum, given := 0.0, 0
	for q := range size {
		sum += size[q]
		upTo := min(int(sum/total*float64(spare)), spare)
		if q == len(size)-1 {
			upTo = spare
		}
		n := 1 + upTo - given
		given = upTo
		for j := range n {
			s := at(c.Seed, tagCrane, uint64(len(d.crane)))
			d.crane = append(d.crane, crane{
				id:     int64(q+1)*1_000_000 + int64(j+1),
				quay:   int32(q),
				effect: sdCrane * s.shock(),
				tonnes: 20 + float64(30*s.unit()),
			})
			weight = append(weight, size[q]/float64(n)*(0.5+s.unit()))
		}
	}
	d.choose = newAlias(weight)
}

// Config returns the configuration with its defaults filled in.
func (d *Data) Config() Config { return d.cfg }

// Rows is the number of rows.
func (d *Data) Rows() int64 { return d.cfg.Rows }

// Schema describes the columns. The caller may keep and change it.
func (d *Data) Schema() *stream.Schema {
	return &stream.Schema{Columns: []stream.Column{
		ColQuay:    {Name: "quay", Kind: stream.Int64},
		ColCrane:   {Name: "crane", Kind: stream.Int64},
		ColT:       {Name: "t", Kind: stream.Time},
		ColBarge:   {Name: "barge", Kind: stream.Text},
		ColPallets: {Name: "pallets", Kind: stream.Int64},
		ColTonnes:  {Name: "tonnes", Kind: stream.Float64},
		ColCrew:    {Name: "crew", Kind: stream.Int64},
		ColWet:     {Name: "wet", Kind: stream.Bool},
		ColNight:   {Name: "night", Kind: stream.Bool},
		ColMinutes: {Name: "minutes", Kind: stream.Float64},
	}}
}

// Fill puts rows from, from+1, ..., from+n-1 into b, fewer at the end of the
// data, and returns how many; 0 at or beyond the end. It uses the slices of b
// again where they are long enough; marks are row numbers. It panics if from
// or n is negative. Time O(n).
func (d *Data) Fill(b *stream.Batch, from int64, n int) int {
	if from < 0 || n < 0 {
		panic("quaydata: negative row number or count")
	}
	n = int(max(0, min(int64(n), d.cfg.Rows-from)))
	d.shape(b, n)
	for i := range n {
		d.row(b, i, from+int64(i))
	}
	return n
}

// shape gives b room for n rows.
func (d *Data) shape(b *stream.Batch, n int) {
	b.Rows = n
	b.Marks = room(b.Marks, n)
	if len(b.Cols) != numCols {
		b.Cols = make([]stream.Vector, numCols)
	}
	for j, col := range d.Schema().Columns {
		v := &b.Cols[j]
		v.Kind, v.Null = col.Kind, v.Null[:0]
		switch col.Kind {
		case stream.Float64:
			v.F64 = room(v.F64, n)
		case stream.Text:
			v.Code, v.Dict = room(v.Code, n), d.dict
		default:
			v.I64 = room(v.I64, n)
		}
	}
	crew := &b.Cols[ColCrew]
	crew.Null = room(crew.Null, n)
	for j := range b.Cols {
		if len(b.Cols[j].Null) == 0 {
			b.Cols[j].Null = nil
		}
	}
}

func room[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}

// row makes row r as number i of b. Products are converted explicitly so that
// no compiler fuses them with the sums they enter.
func (d *Data) row(b *stream.Batch, i int, r int64) {
	s := at(d.cfg.Seed, tagRow, uint64(r))
	day, second := d.when(r)
	k := d.choose.draw(&s)
	cr := &d.crane[k]
	q := &d.quay[cr.quay]
	sh := &d.day[int(cr.quay)*d.cfg.Days+day]
	night := second < 6*3600 || second >= 22*3600

	u := s.below(100)
	class := 0
	for u >= bargeShare[class] {
		class++
	}
	pallets := 4 + math.Floor(float64(bargeRoom[class]*0.5)*(s.unit()+s.unit()))
	tonnes := math.Round(float64(10*(cr.tonnes+float64(3*s.shock())))) / 10
	crew := q.crew
	switch v := s.below(1000); {
	case v < 60:
		crew--
	case v < 120:
		crew++
	}
	gone := s.below(1000)

	m := trueConstant + float64(truePallets*pallets)
	m += float64(trueTonnes * tonnes)
	m += float64(trueCrew * float64(crew))
	if sh.wet {
		m += trueWet
	}
	if night {
		m += trueNight
	}
	m += trueBarge[class]
	m += q.effect
	m += sh.effect
	m += cr.effect
	m += float64((sdRow + float64(sdRowPallet*pallets)) * s.shock())

	b.Marks[i] = r
	b.Cols[ColQuay].I64[i] = int64(cr.quay) + 1
	b.Cols[ColCrane].I64[i] = cr.id
	b.Cols[ColT].I64[i] = d.start + (int64(day)*86400+second)*1e9
	b.Cols[ColBarge].Code[i] = int32(class)
	b.Cols[ColPallets].I64[i] = int64(pallets)
	b.Cols[ColTonnes].F64[i] = tonnes
	if gone == 999 {
		b.Cols[ColTonnes].F64[i] = math.NaN()
	}
	b.Cols[ColCrew].I64[i] = crew
	b.Cols[ColCrew].Null[i] = gone < 3
	if gone < 3 {
		b.Cols[ColCrew].I64[i] = 0
	}
	b.Cols[ColWet].I64[i] = bit(sh.wet)
	b.Cols[ColNight].I64[i] = bit(night)
	b.Cols[ColMinutes].F64[i] = math.Round(float64(100*m)) / 100
}

// when gives the day and the second of the day of row r: rows are in order of
// time, evenly over the days; a fifth of each day's rows falls between 22:00 and
// 6:00.
func (d *Data) when(r int64) (day int, second int64) {
	hi, lo := bits.Mul64(uint64(r), uint64(d.cfg.Days))
	quo, rem := bits.Div64(hi, lo, uint64(d.cfg.Rows))
	f := float64(rem) / float64(d.cfg.Rows)
	switch {
	case f < 0.15:
		second = int64(f / 0.15 * 6 * 3600)
	case f < 0.95:
		second = 6*3600 + int64((f-0.15)/0.8*16*3600)
	default:
		second = 22*3600 + int64((f-0.95)/0.05*2*3600)
	}
	return int(quo), min(second, 86399)
}

func bit(b bool) int64 {
	if b {
		return 1
	}
	return 0
}
