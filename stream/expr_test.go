package stream

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"
	_ "time/tzdata"
)

// quays is the schema of the tests: unloading times at river quays.
func quays() *Schema {
	return &Schema{Columns: []Column{
		{Name: "minutes", Kind: Float64},
		{Name: "pallets", Kind: Float64},
		{Name: "tonnes", Kind: Float64},
		{Name: "crew", Kind: Int64},
		{Name: "id", Kind: Uint64},
		{Name: "wet", Kind: Bool},
		{Name: "night", Kind: Bool},
		{Name: "barge", Kind: Text},
		{Name: "crane", Kind: Text},
		{Name: "t", Kind: Time, Zoned: true},
		{Name: "left", Kind: Time},
		{Name: "day", Kind: Time, DateOnly: true},
		{Name: "type", Kind: Float64},
		{Name: "range", Kind: Text},
		{Name: "log", Kind: Float64},
		{Name: "odd name", Kind: Float64},
		{Name: "true", Kind: Float64},
		{Name: "jet\u00e9e", Kind: Float64}, // composed
	}}
}

func TestTermText(t *testing.T) {
	for _, c := range []struct{ in, want string }{
		{"pallets*wet", "pallets * wet"},
		{" ( pallets )", "pallets"},
		{"pallets+tonnes*crew", "pallets + tonnes * crew"},
		{"(pallets+tonnes)*crew", "(pallets + tonnes) * crew"},
		{"pallets-(tonnes-crew)", "pallets - (tonnes - crew)"},
		{"pallets-tonnes-crew", "pallets - tonnes - crew"},
		{"pallets/(tonnes*crew)", "pallets / (tonnes * crew)"},
		{"-pallets*tonnes", "-pallets * tonnes"},
		{"-(pallets*tonnes)", "-(pallets * tonnes)"},
		{"- -pallets", "-(-pallets)"},
		{"pallets - -tonnes", "pallets - -tonnes"},
		{"+pallets", "pallets"},
		{"!wet", "!wet"},
		{"!!wet", "!!wet"},
		{"!(wet||night)", "!(wet || night)"},
		{"wet&&night||pallets>3", "wet && night || pallets > 3"},
		{"wet&&(night||pallets>3)", "wet && (night || pallets > 3)"},
		{"(pallets>1)==(tonnes>1)", "(pallets > 1) == (tonnes > 1)"},
		{"pallets+1.50", "pallets + 1.5"},
		{"pallets+1e3", "pallets + 1000"},
		{"pallets+.5", "pallets + 0.5"},
		{"pallets+1e-7", "pallets + 1e-7"},
		{"pallets+1_000", "pallets + 1000"},
		{"log( pallets )", "log(pallets)"},
		{"log(log)", "log(log)"},
		{"min(pallets,tonnes,3,)", "min(pallets, tonnes, 3)"},
		{"hinge(pallets,12)", "hinge(pallets, 12)"},
		{"type*2", "type * 2"},
		{"missing(range)*type", "missing(range) * type"},
		{`col("pallets")`, "pallets"},
		{`col("odd name")/2`, `col("odd name") / 2`},
		{`col("true")`, `col("true")`},
		{"true && wet", "true && wet"},
		{"jete\u0301e", "jet\u00e9e"}, // decomposed in the model
		{"barge==\"a\"", `barge == "a"`},
		{"barge==`a`", `barge == "a"`},
		{"pallets\n+\n\ttonnes", "pallets + tonnes"},
		{`each( barge )`, "each(barge)"},
		{`each(barge,base="b")`, `each(barge, base="b")`},
		{`each(range, base="none")*type`, `each(range, base="none") * type`},
		{"pallets*each(barge)*each(crew)", "pallets * each(barge) * each(crew)"},
		{"each(date(t))", "each(date(t))"},
		{"each(pallets>10)", "each(pallets > 10)"},
		{`t>="2024-01-05"`, `t >= "2024-01-05"`},
		{strings.Repeat("(", 150) + "pallets" + strings.Repeat(")", 150), "pallets"},
		{strings.Repeat("pallets + ", 1500) + "tonnes", strings.Repeat("pallets + ", 1500) + "tonnes"},
	} {
		d, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{c.in}}, quays())
		if err != nil {
			t.Errorf("%q: %v", c.in, err)
			continue
		}
		if got := d.Terms[0].Text; got != c.want {
			t.Errorf("%q prints as %q, want %q", c.in, got, c.want)
		}
	}
}

func TestExpressionErrors(t *testing.T) {
	term := func(s string) Spec { return Spec{Outcome: "minutes", Terms: []string{s}} }
	terms := func(s ...string) Spec { return Spec{Outcome: "minutes", Terms: s} }
	where := func(s string) Spec { return Spec{Outcome: "minutes", Where: s} }
	key := func(s string) Spec { return Spec{Outcome: "minutes", Keys: []string{s}} }
	for _, c := range []struct {
		spec Spec
		want string
	}{
		{term("pallets ^ 2"), `term "pallets ^ 2", character 9: found ^; a power is written pow(x, 2)`},
		{term("pallets ** 2"), `term "pallets ** 2", character 9: found **; a power is written pow(x, 2)`},
		{term("pallets % 2"), `term "pallets % 2", character 9: found %; there is no remainder; the operators are + - * / and comparisons`},
		{term("pallets << 2"), `term "pallets << 2", character 9: found <<; a smaller-than comparison is written <, a power of two pow(2, x)`},
		{term("wet & night"), `term "wet & night", character 5: found &; the logical and is written &&`},
		{term("wet | night"), `term "wet | night", character 5: found |; the logical or is written ||`},
		{term("wet &^ night"), `term "wet &^ night", character 5: found &^; write && !x`},
		{term("wet and night"), `term "wet and night", character 5: found and; it is written && here`},
		{where("not wet"), `where "not wet", character 5: found wet where an operator or a comma must stand`},
		{where("1 < pallets < 5"), `where "1 < pallets < 5", character 13: found a chain of comparisons; write 1 < pallets && pallets < 5`},
		{where("pallets = 5"), `where "pallets = 5", character 9: found =; a comparison is written ==, an option only in each(c, base="label")`},
		{where("pallets := 5"), `where "pallets := 5", character 9: found :=; a comparison is written ==`},
		{where("pallets =< 5"), `where "pallets =< 5", character 10: want a number, a column or a function, found '<'`},
		{where("pallets<-1"), `where "pallets<-1", character 8: found <-; leave a space: x < -1`},
		{where("pallets ≤ 5"), `where "pallets ≤ 5", character 9: found '≤'; write <=`},
		{where("barge == 'a'"), `where "barge == 'a'", character 10: found 'a'; text is written in double quotes, "x"`},
		{where("barge == 'abc'"), `where "barge == 'abc'", character 10: found 'abc'; text is written in double quotes, "x"`},
		{where(`barge == "a`), "where `barge == \"a`, character 10: the text in quotes is not closed"},
		{term("pallets // all"), `term "pallets // all", character 9: found // all; comments are not allowed`},
		{term("pallets /* all */ + 1"), `term "pallets /* all */ + 1", character 9: found /* all */ + ...; comments are not allowed`},
		{term("pallets + 007"), `term "pallets + 007", character 11: found 007; numbers are decimal and do not start with 0`},
		{term("pallets + 089"), `term "pallets + 089", character 11: found 089, want a number such as 12, 0.5 or 1e6`},
		{term("pallets + 0x1F"), `term "pallets + 0x1F", character 11: found 0x1F; numbers are decimal`},
		{term("pallets + 2i"), `term "pallets + 2i", character 11: found 2i; want a real number`},
		{term("pallets + 1e999"), `term "pallets + 1e999", character 11: found 1e999, want a number within 1.8e308`},
		{term("2pallets"), `term "2pallets", character 1: found 2pallets, want a number such as 12, 0.5 or 1e6`},
		{term("2 wet"), `term "2 wet", character 3: found wet where an operator or a comma must stand`},
		{term("pallets[0]"), `term "pallets[0]", character 8: found [; a column with an odd name is written col("a[1]")`},
		{term("quay.name"), `term "quay.name", character 5: found .; a column with a dot in its name is written col("a.b")`},
		{term("pallets:wet"), `term "pallets:wet", character 8: found :; an interaction is written with *`},
		{term("pallets; wet"), `term "pallets; wet", character 8: found ;; expressions are separated by commas`},
		{term("pallets--tonnes"), `term "pallets--tonnes", character 8: found --; leave a space: x - -y`},
		{term("~pallets"), `term "~pallets", character 1: found ~pallets; not is written !`},
		{term("pallets # x"), `term "pallets # x", character 9: found '#', which has no meaning here; a column with an odd name is written col("...")`},
		{term("func(x) { }"), `term "func(x) { }", character 9: found {; only parentheses group`},
		{term("func(pallets)"), `term "func(pallets)", character 1: there is no function func; the functions are abs, col, date, each, exp, hinge, hour, log, max, min, missing, month, pow, sqrt or weekday`},
		{term("(pallets"), `term "(pallets", character 9: the text ends where ) must stand`},
		{term("pallets)"), `term "pallets)", character 8: found ) without its (`},
		{term("(pallets)(tonnes)"), `term "(pallets)(tonnes)", character 10: found ( where an operator must stand; a product is written with *`},
		{term("pallets *"), `term "pallets *", character 10: want a number, a column or a function, found the end`},
		{term("*pallets"), `term "*pallets", character 1: found * without a left operand`},
		{term("log()"), `term "log()", character 1: log has 0 arguments, want log(x)`},
		{term("pow(pallets)"), `term "pow(pallets)", character 1: pow has 1 arguments, want pow(x, 2)`},
		{term("sqt(pallets)"), `term "sqt(pallets)", character 1: there is no function sqt; nearest: sqrt`},
		{term("  "), `the term is empty, want an expression`},
		{term("palets"), `term "palets", character 1: there is no column palets; nearest: pallets`},
		{term("Pallets"), `term "Pallets", character 1: there is no column Pallets; nearest: pallets`},
		{term("exp"), `term "exp", character 1: there is no column exp; the function is written exp(x)`},
		{term("xyzzy"), `term "xyzzy", character 1: there is no column xyzzy, nor one with a name near it; the columns are minutes, pallets, tonnes, crew, id, wet, night, barge, crane, t, left, day and 6 more`},
		{term("barge"), `term "barge", character 1: column barge is text, want a number; each(barge) makes one indicator per level`},
		{term("log(barge)"), `term "log(barge)", character 5: column barge is text, want a number; each(barge) makes one indicator per level`},
		{term(`pallets * "x"`), "term `pallets * \"x\"`, character 11: found the text \"x\", want a number"},
		{term("hour(pallets)"), `term "hour(pallets)", character 6: pallets is a number, want a time column for hour`},
		{where("pallets"), `where "pallets", character 1: pallets is a number, want true or false; write pallets != 0`},
		{where("barge"), `where "barge", character 1: barge is text, want true or false; write barge == "..."`},
		{where("wet && pallets + 1"), `where "wet && pallets + 1", character 16: pallets + 1 is a number, want true or false for &&; write pallets + 1 != 0`},
		{where("!pallets"), `where "!pallets", character 2: pallets is a number, want true or false for !; write pallets != 0`},
		{where(`pallets == "3"`), "where `pallets == \"3\"`, character 12: found the text \"3\" compared with pallets, which is a number"},
		{where("barge == 3"), `where "barge == 3", character 10: column barge is text and is compared with 3; text is written in double quotes`},
		{where(`t == "yesterday"`), "where `t == \"yesterday\"`, character 6: found \"yesterday\", want a time such as \"2024-01-31\" or \"2024-01-31T06:00\""},
		{where(`left < "2024-01-31T06:00:00Z"`), "where `left < \"2024-01-31T06:00:00Z\"`, character 8: found \"2024-01-31T06:00:00Z\", want a time without zone, as the column has none"},
		{where(`t < "1066-10-14"`), "where `t < \"1066-10-14\"`, character 5: found \"1066-10-14\", want a year from 1678 to 2261"},
		{where("t < left"), `where "t < left", character 3: t is an instant and left is a time without zone; they cannot be compared, but date(t) and date(left) can`},
		{where("each(barge)"), `where "each(barge)", character 1: found each(barge), which can only stand in the terms`},
		{key("each(barge)"), `cluster "each(barge)", character 1: found each(barge); a cluster is named by barge alone`},
		{key("3"), `cluster "3", character 1: the cluster reads no column, want one that does`},
		{term("1"), `term "1", character 1: the term reads no column; the constant is there by itself, and --no-constant leaves it out`},
		{term("each(barge) + pallets"), `term "each(barge) + pallets", character 1: each(barge) can only be a factor of a product at the top of a term; write a sum as separate terms`},
		{term("each(barge) / tonnes"), `term "each(barge) / tonnes", character 1: each(barge) can only be a factor of a product at the top of a term; write each(barge) * (1 / tonnes)`},
		{term("log(each(barge))"), `term "log(each(barge))", character 5: each(barge) can only be a factor of a product at the top of a term; such as each(barge) * x`},
		{term("each(each(barge))"), `term "each(each(barge))", character 6: each(barge) can only be a factor of a product at the top of a term, such as each(barge) * x`},
		{term("2 * each(barge)"), `term "2 * each(barge)", character 1: the factor 2 reads no column, want it left out`},
		{term("each(barge) * each(barge)"), `term "each(barge) * each(barge)", character 15: each(barge) is there twice in one product, want it once`},
		{term("each(barge, crane)"), `term "each(barge, crane)", character 13: found crane, want base="label"; an interaction is written each(a) * each(b)`},
		{term("each(crew, base=3)"), `term "each(crew, base=3)", character 17: found 3, want a label in quotes, such as base="a" or base="3"`},
		{term(`each(crew, base="x")`), "term `each(crew, base=\"x\")`, character 1: the base of each(crew, base=\"x\"): found \"x\", want a whole number"},
		{term(`each(crew, level="x")`), "term `each(crew, level=\"x\")`, character 12: found the option level, want base=\"label\""},
		{terms("each(barge)", `each(barge, base="b") * pallets`), "term `each(barge, base=\"b\") * pallets`, character 1: each(barge, base=\"b\") stands beside each(barge), want one base for one category"},
		{terms("pallets", " (pallets)"), `term " (pallets)", character 1: the term pallets is there twice, want it once`},
		{terms("pallets*wet", "wet * pallets"), `term "wet * pallets", character 1: the term wet * pallets is there twice, first as pallets * wet, want it once`},
		{terms("minutes"), `term "minutes", character 1: the outcome is also a term, want it only once`},
		{Spec{Outcome: "5"}, `outcome "5", character 1: the outcome reads no column, want one that does`},
		{Spec{Outcome: ""}, `the outcome is empty, want an expression`},
		{Spec{Outcome: "minutes", NoConstant: true}, `the model has neither terms nor a constant, want at least one term`},
		{Spec{Outcome: "minutes", Weight: "crew"}, `the weight "crew" has no kind, want frequency, precision or sampling`},
		{Spec{Outcome: "minutes", WeightKind: Sampling}, `a weight kind is given without a weight, want both or none`},
		{Spec{Outcome: "minutes", Weight: "barge", WeightKind: Sampling}, `weight "barge", character 1: column barge is text, want a number; each(barge) makes one indicator per level`},
		{term(strings.Repeat("(", 201) + "pallets" + strings.Repeat(")", 201)), `term "...` + strings.Repeat("(", 60) + strings.Repeat("(", 1) + "pallets" + strings.Repeat(")", 52) + `...", character 201: nested more than 200 deep`},
		{term(strings.Repeat("!", 250) + "wet"), `term "...` + strings.Repeat("!", 109) + `wet", character 202: nested more than 200 deep`},
		{term("é ^ 2"), `term "é ^ 2", character 3: found ^; a power is written pow(x, 2)`},
		{term("pallets\xff"), `term "pallets\xff", character 8: found bytes that are not UTF-8 text`},
	} {
		_, err := NewDesign(c.spec, quays())
		if err == nil {
			t.Errorf("accepted, want %s", c.want)
			continue
		}
		if !errors.Is(err, ErrUse) {
			t.Errorf("%v is no UseError", err)
		}
		if err.Error() != c.want {
			t.Errorf("got  %s\nwant %s", err, c.want)
		}
	}
}

func TestSplitList(t *testing.T) {
	for _, c := range []struct {
		in   string
		want []string
	}{
		{"", nil},
		{" \n", nil},
		{"pallets", []string{"pallets"}},
		{" pallets ,wet*night ", []string{"pallets", "wet*night"}},
		{"min(a, b), each(c, base=\"x,y)\")", []string{"min(a, b)", `each(c, base="x,y)")`}},
		{`col("a\",b"), c`, []string{`col("a\",b")`, "c"}},
		{"col(`a,\\`), c", []string{"col(`a,\\`)", "c"}},
	} {
		got, err := SplitList(c.in)
		if err != nil || !slices.Equal(got, c.want) {
			t.Errorf("%q: %q, %v; want %q", c.in, got, err, c.want)
		}
	}
	for in, want := range map[string]string{
		"a,,b":   `list "a,,b", character 3: found nothing between two commas or at an end, want an expression`,
		"a,":     `list "a,", character 3: found nothing between two commas or at an end, want an expression`,
		"f(a, b": `list "f(a, b", character 7: the text ends where ) must stand`,
		"a), b":  `list "a), b", character 2: found ) without its (`,
		`"a, b`:  "list `\"a, b`, character 1: the text in quotes is not closed",
	} {
		if _, err := SplitList(in); err == nil || err.Error() != want || !errors.Is(err, ErrUse) {
			t.Errorf("%q: %v\nwant %s", in, err, want)
		}
	}
}

func TestDesignLayout(t *testing.T) {
	d, err := NewDesign(Spec{
		Outcome: "log(minutes)",
		Terms: []string{
			"each(barge)*pallets*tonnes", "pallets", "each(crew, base=\"3\")", "each(barge) * each(crew, base=\"3\") * pallets",
			"wet*pallets", "(tonnes*2)*each(date(t))",
		},
		Weight: "tonnes", WeightKind: Sampling,
		Where: "id > 9007199254740993 && hour(left) < 6",
		Keys:  []string{"crane", "date(t)", "id", "crane"},
	}, quays())
	if err != nil {
		t.Fatal(err)
	}
	wantDense := []string{"pallets", "wet * pallets", "pallets * tonnes", "tonnes * 2", "log(minutes)"}
	if !slices.Equal(d.Dense, wantDense) {
		t.Errorf("dense %q, want %q", d.Dense, wantDense)
	}
	got := fmt.Sprint(d.Terms)
	want := "[{each(barge) * pallets * tonnes 2 [0]} {pallets 0 []} {each(crew, base=\"3\") -1 [1]} " +
		"{each(barge) * each(crew, base=\"3\") * pallets 0 [0 1]} {wet * pallets 1 []} {tonnes * 2 * each(date(t)) 3 [2]}]"
	if got != want {
		t.Errorf("terms\n%s, want\n%s", got, want)
	}
	wantCats := []Category{
		{Text: "barge", KeyColumn: KeyColumn{Text: "barge", Kind: Text}},
		{Text: "crew", KeyColumn: KeyColumn{Text: "crew", Kind: Int64}, Base: "3", HasBase: true},
		{Text: "date(t)", KeyColumn: KeyColumn{Text: "date(t)", Kind: Time, DateOnly: true}},
	}
	if !slices.Equal(d.Categories, wantCats) {
		t.Errorf("categories %+v, want %+v", d.Categories, wantCats)
	}
	wantKeys := []KeyColumn{{Text: "crane", Kind: Text}, wantCats[2].KeyColumn, {Text: "id", Kind: Uint64}, {Text: "crane", Kind: Text}}
	if !slices.Equal(d.Keys, wantKeys) {
		t.Errorf("keys %+v, want %+v", d.Keys, wantKeys)
	}
	s := quays()
	var uses []string
	for _, u := range d.Uses() {
		uses = append(uses, fmt.Sprint(s.Columns[u.Column].Name, " ", u.AsNumber))
	}
	slices.Sort(uses)
	wantUses := []string{"barge false", "crane false", "crew false", "id false", "left false", "minutes true", "pallets true", "t false", "tonnes true", "wet true"}
	if !slices.Equal(uses, wantUses) {
		t.Errorf("uses %q, want %q", uses, wantUses)
	}
	if d.OutcomeText() != "log(minutes)" || d.WeightText() != "tonnes" || d.WhereText() != "id > 9007199254740993 && hour(left) < 6" {
		t.Errorf("texts %q %q %q", d.OutcomeText(), d.WeightText(), d.WhereText())
	}
}

// A whole-number column that is only computed with is asked for as numbers, so
// that a later 12.5 fits; comparing with a small number does not change that.
func TestUsesStayNumbers(t *testing.T) {
	d, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{"crew", "crew == 4", "missing(id)"}}, quays())
	if err != nil {
		t.Fatal(err)
	}
	for _, u := range d.Uses() {
		if !u.AsNumber {
			t.Errorf("column %d is not asked for as a number", u.Column)
		}
	}
}

func TestNearest(t *testing.T) {
	names := []string{"pallets", "pallet_weight", "tonnes", "crew", "quay"}
	for word, want := range map[string][]string{
		"palets": {"pallets"}, "pallet": {"pallets", "pallet_weight"}, "QUAY": {"quay"}, "qauy": {"quay"}, "zebra": nil, "x": nil,
	} {
		if got := nearest(word, names); !slices.Equal(got, want) {
			t.Errorf("nearest(%q) = %q, want %q", word, got, want)
		}
	}
	// Distances counted by hand.
	for _, c := range []struct {
		a, b string
		want int
	}{{"", "", 0}, {"", "abc", 3}, {"kitten", "sitting", 3}, {"ab", "ba", 1}, {"é", "e", 1}} {
		if got := editDistance(c.a, c.b); got != c.want {
			t.Errorf("editDistance(%q, %q) = %d, want %d", c.a, c.b, got, c.want)
		}
	}
}

func TestTwoSpellingsOfOneName(t *testing.T) {
	s := &Schema{Columns: []Column{{Name: "y", Kind: Float64}, {Name: "e\u0301", Kind: Float64}, {Name: "\u00e9", Kind: Float64}}}
	for in, want := range map[string]int{"e\u0301": 1, "\u00e9": 2, `col("é")`: 2} {
		d, err := NewDesign(Spec{Outcome: "y", Terms: []string{in}}, s)
		if err != nil {
			t.Fatal(err)
		}
		var cols []int
		for _, u := range d.Uses() {
			cols = append(cols, u.Column)
		}
		if !slices.Contains(cols, want) {
			t.Errorf("%q reads columns %v, want %d among them", in, cols, want)
		}
	}
}

// FuzzExpr: no text makes the parser or the binder panic, every error is one
// line, and what is accepted prints to a text that prints to itself.
func FuzzExpr(f *testing.F) {
	for _, s := range []string{
		"pallets * wet", "each(barge, base=\"x\") * log(pallets)", "1 < pallets < 5", "type + range", "col(\"odd name\")",
		"!(wet || night) && t >= \"2024-01-05\"", "- -pallets / 1e-7", "min(pallets, tonnes, 007)", "x ^ 2", "e\u0301 // c", "(((", "'a'",
		"each(pallets > 10) * hinge(tonnes, 3)", "id == 9007199254740993", "a = b", "\"\\x00\"", "true", "`", "9_0e1_0", "pow(pallets, -3)",
	} {
		f.Add(s)
	}
	zone, err := time.LoadLocation("Europe/Amsterdam")
	if err != nil {
		f.Fatal(err)
	}
	schema := quays()
	f.Fuzz(func(t *testing.T, src string) {
		oneLine := func(err error) {
			if !errors.Is(err, ErrUse) || strings.ContainsAny(err.Error(), "\n\r") {
				t.Errorf("%q: error %q, want a UseError of one line", src, err)
			}
		}
		x := exprText{roleTerm, src}
		n, err := x.parse()
		if err != nil {
			oneLine(err)
			return
		}
		text := n.String()
		again, err := exprText{roleTerm, text}.parse()
		if err != nil {
			if len(text) > maxExprBytes {
				return // a text at the limit can grow by its spaces
			}
			t.Fatalf("%q prints as %q, which is refused: %v", src, text, err)
		}
		if got := again.String(); got != text {
			t.Fatalf("%q prints as %q, and that as %q", src, text, got)
		}
		for _, spec := range []Spec{
			{Outcome: "minutes", Terms: []string{src}, Zone: zone},
			{Outcome: "minutes", Where: src},
			{Outcome: src, Keys: []string{src}},
		} {
			d, err := NewDesign(spec, schema)
			if err != nil {
				oneLine(err)
				continue
			}
			if len(spec.Terms) == 0 || len(d.Terms[0].Text) > maxExprBytes {
				continue
			}
			spec.Terms = []string{d.Terms[0].Text}
			e, err := NewDesign(spec, schema)
			if err != nil || e.Terms[0].Text != d.Terms[0].Text {
				t.Fatalf("term %q is not stable: %v", d.Terms[0].Text, err)
			}
		}
		if parts, err := SplitList(src); err == nil && len(parts) > 0 && !strings.Contains(src, ",") && parts[0] != strings.TrimSpace(src) {
			t.Fatalf("SplitList(%q) = %q", src, parts)
		}
	})
}
