package delimited

import (
	"fmt"
	"io"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/tallrow/tallrow/stream"
)

// rowByRow reads the text of a file without blocks.
func rowByRow(t testing.TB, src *source, uses []stream.Use) (rows []string, malformed int64, err error) {
	t.Helper()
	sc, err := src.Scan(t.Context(), uses)
	if err != nil {
		t.Fatal(err)
	}
	opened, err := sc.Next(t.Context())
	if err == io.EOF {
		return nil, 0, nil
	}
	if err != nil {
		t.Fatal(err)
	}
	s := opened.(*segment)
	if err := s.load(s); err != nil {
		t.Fatal(err)
	}
	p := &s.parser
	for _, u := range uses {
		p.out = append(p.out, newColumn(&src.head.schema, u))
	}
	for i := 0; i < len(p.text); {
		if j := p.blank(i); j != i {
			i = j
			continue
		}
		for _, o := range p.out {
			o.begin()
		}
		next := p.one(i, 0)
		if next < 0 {
			if !s.malformed(i, next) {
				return rows, malformed, s.err
			}
			malformed++
			i = s.pos
			continue
		}
		var c []string
		for _, o := range p.out {
			c = append(c, show(o.vector(1), 0))
		}
		rows = append(rows, strings.Join(c, "|"))
		i = next
	}
	return rows, malformed, nil
}

// Blocks give what rows one by one give, whatever stands between good rows.
func TestBlocksAgainstRows(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 12))
	cells := [][]string{
		{"1", "-2", "3.25", "123456.789", "0.12345678901234567", "1e-3", "", " 4 ", "NA", `"5.5"`, "inf", "nan", "-999", "+7", "12345678901234567890123", "x", "--1"},
		{"0", "17", "-1234567890", "12345678901234567", "", " 8", "NA", `"9"`, "-999", "1.5", "007", "99999999999999999999"},
		{"north", "a quay with a long name", "", "NA", `""`, `"NA"`, `"a,b"`, "\"c\nd\"", `"e""f"`, "sevench", "eightchr", "\xc3\xa9", `b"c`, `"d"e`},
		{"2024-02-29T10:00:00", "2024-02-28 23:59:59", "1999-12-31T00:00", "2024-02-29T10:00:00.5", "", "NA", `"2024-01-01T00:00:00"`, "2023-02-29T00:00:00", "2024-02-29T24:00:00", "2024-02-29T10-00-00"},
		{"true", "false", "TRUE", "False", "1", "0", "yes", "", "NA", `"true"`, "trues", "truE ", "fals"},
	}
	texts := cells[2]
	good := []int{6, 3, 7, 2, 4} // the first of each that are common
	kinds := map[string]stream.Kind{"a": stream.Float64, "b": stream.Int64, "c": stream.Text, "d": stream.Time, "e": stream.Bool}
	rounds := 60
	if testing.Short() {
		rounds = 15
	}
	for round := range rounds {
		var b strings.Builder
		b.WriteString("a,b,c,d,e\n1,2,x,2024-01-01T00:00:00,true\n")
		odd := []float64{0.001, 0.02, 0.3}[round%3]
		cells[2] = texts
		if round%4 != 0 {
			cells[2] = texts[:len(texts)-2] // a quote out of place may swallow the rest
		}
		end := []string{"\n", "\r\n"}[round%2]
		for range r.IntN(3000) {
			for j, list := range cells {
				if j > 0 {
					b.WriteByte(',')
				}
				n := good[j]
				if r.Float64() < odd {
					n = len(list)
				}
				b.WriteString(list[r.IntN(n)])
			}
			if r.Float64() < odd/2 {
				b.WriteString([]string{end, ",x", end + "1,2", end + " "}[r.IntN(4)])
			}
			b.WriteString(end)
		}
		o := stream.Options{SkipBad: true, Kinds: kinds}
		if round%5 == 0 {
			o.Null = []string{"NA", "-999"}
		}
		src := openWay(t, "file", b.String(), o)
		uses := allUses(src)
		for k := range uses {
			uses[k].AsNumber = k != 2 && k != 3 && r.IntN(2) == 0
		}
		r.Shuffle(len(uses), func(i, j int) { uses[i], uses[j] = uses[j], uses[i] })
		uses = append(uses[:1+r.IntN(len(uses))], uses[0])
		got, tally, err := readAll(t, src, uses, false)
		want, malformed, werr := rowByRow(t, src, uses)
		if fmt.Sprint(err) != fmt.Sprint(werr) {
			t.Fatalf("round %d: %v, want %v", round, err, werr)
		}
		equalRows(t, fmt.Sprintf("round %d", round), got, want)
		if tally.Malformed != malformed || odd > 0.1 && malformed == 0 {
			t.Errorf("round %d: %d malformed rows, want %d", round, tally.Malformed, malformed)
		}
	}
}

// A token of --null may be a number, a time or a truth value elsewhere.
func TestNullTokensThatRead(t *testing.T) {
	text := "a,b,c,d\n1,2024-01-02,true,4\n-999,1900-01-01,false,-999\n -999 ,\"1900-01-01\",true,5\n"
	for _, way := range ways {
		src := openWay(t, way, text, stream.Options{Null: []string{"-999", "1900-01-01", "false"}})
		got, _, err := readAll(t, src, allUses(src), false)
		if err != nil {
			t.Fatal(err)
		}
		want := []string{"0x1p+00|2024-01-02T00:00:00Z|1|4", "-|-|-|-", "-|1900-01-01T00:00:00Z|1|5"}
		if src.Schema().Columns[0].Kind == stream.Int64 {
			want[0] = strings.Replace(want[0], "0x1p+00", "1", 1)
		}
		if !slices.Equal(got, want) {
			t.Errorf("%s: %q, want %q", way, got, want)
		}
	}
}
