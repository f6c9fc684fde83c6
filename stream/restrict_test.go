package stream

import (
	"strings"
	"testing"
)

func hypothesisDesign(t *testing.T, terms ...string) *Design {
	t.Helper()
	d, err := NewDesign(Spec{Outcome: "minutes", Terms: terms}, quays())
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// sum writes a restriction as "2 tonnes + -1 constant = 1/2".
func sum(r Restriction) string {
	var parts []string
	for _, p := range r.Parts {
		parts = append(parts, p.Coef.RatString()+" "+p.Text)
	}
	return strings.Join(parts, " + ") + " = " + r.Value.RatString()
}

func TestHypothesesAreRead(t *testing.T) {
	d := hypothesisDesign(t, "pallets", "tonnes", "pallets * tonnes", "log(crew)", "tonnes > 40", `each(barge, base="b")`, `each(barge, base="b") * wet`, "2 * crew")
	for _, c := range []struct{ in, want string }{
		{"pallets = 0.5", "1 pallets = 1/2"},
		{"pallets=tonnes", "1 pallets + -1 tonnes = 0"},
		{"0.5 = pallets", "-1 pallets = -1/2"},
		{"pallets + 2 * tonnes = 1", "1 pallets + 2 tonnes = 1"},
		{"2 * (pallets - tonnes) / 3 = 1e-1", "2/3 pallets + -2/3 tonnes = 1/10"},
		{"-pallets - -tonnes + 1 = 2 - 3", "-1 pallets + 1 tonnes = -2"},
		{"tonnes*pallets*3 = 0", "3 tonnes * pallets = 0"},
		{"3 * tonnes * 2 * pallets / 6 = 0", "1 tonnes * pallets = 0"},
		{"log( crew ) * (1 + 1/2) = constant", "3/2 log(crew) + -1 constant = 0"},
		{"40 < tonnes = 0", "1 40 < tonnes = 0"},
		{"tonnes > 40 = 0", "1 tonnes > 40 = 0"},
		{"crew * 2 = 1", "1 crew * 2 = 1"},
		{"each(barge) = 0", "1 each(barge) = 0"},
		{`each(barge, base="b") = 0`, `1 each(barge, base="b") = 0`},
		{`each(barge, level="a") = 2 * each(barge, level="c")`, `1 each(barge, level="a") + -2 each(barge, level="c") = 0`},
		{"wet * each(barge) = tonnes", "1 wet * each(barge) + -1 tonnes = 0"},
		{"pallets + tonnes - pallets = 1", "1 tonnes = 1"},
	} {
		rs, err := d.ParseHypothesis(c.in)
		if err != nil {
			t.Errorf("%s: %v", c.in, err)
			continue
		}
		if got := sum(rs[0]); got != c.want {
			t.Errorf("%s: got %s, want %s", c.in, got, c.want)
		}
	}
	rs, err := d.ParseHypothesis(`pallets = 1, each(barge, level="a") = min(1, 2) * 0, tonnes = 0`)
	if err == nil {
		t.Errorf("a function of numbers was taken: %v", rs)
	}
	rs, err = d.ParseHypothesis(`pallets = 1, each(barge, level="a, = b") = 0`)
	if err != nil || len(rs) != 2 || rs[1].Parts[0].Levels[0].Text != "a, = b" || rs[1].Parts[0].Every() {
		t.Errorf("%v, %v", rs, err)
	}
	if rs[1].Text != `each(barge, level="a, = b") = 0` {
		t.Errorf("text %s", rs[1].Text)
	}
}

func TestHypothesesAreRefused(t *testing.T) {
	d := hypothesisDesign(t, "pallets", "tonnes", "each(barge)", "each(crew)")
	for _, c := range []struct{ in, want string }{
		{"", "the hypothesis is empty"},
		{"pallets", `hypothesis "pallets", character 8: there is no =, want an equation such as pallets = 0.5`},
		{"pallets == 1", `character 9: found ==; an equation between coefficients is written with one =`},
		{"pallets > 1", "found >; a hypothesis is an equation"},
		{"pallets = 1 = tonnes", "character 13: found a second =; equations are separated by commas"},
		{"pallets = ", "character 9: found nothing on one side of ="},
		{"palets = 1", `hypothesis "palets", character 1: there is no term palets; nearest: pallets`},
		{"zzz = 1", "there is no term zzz; the terms are constant, pallets, tonnes, each(barge), each(crew)"},
		{"pallets * tonnes = 1", "pallets * tonnes is not linear in the coefficients and no term of the model"},
		{"pallets / tonnes = 1", "pallets / tonnes is not linear"},
		{"log(pallets) = 1", "there is no term log(pallets); the terms are"},
		{"pallets / 0 = 1", "found a division by zero"},
		{"1 = 2", "there is no term in it"},
		{"pallets = pallets", "it holds whatever the coefficients are: there is nothing to test"},
		{"0 * pallets = 0", "it holds whatever the coefficients are"},
		{"pallets = pallets + 1", "it cannot hold, whatever the coefficients are"},
		{"2 * pallets - pallets * 2 = 1e-300", "it cannot hold"},
		{"pallets = log(2)", "found log(2), want a number in digits"},
		{`"barge = b" = 0`, `found the text "barge = b", want a term; a level is written each(c, level="label")`},
		{"each(barge) = each(crew)", "every level of two terms stands in one equation"},
		{`each(barge, base="b") = 0`, "the model has each(barge); a hypothesis needs no base"},
		{`each(barge, lvl="b") = 0`, `found the option lvl, want level="label"`},
		{`each(crew, level="x") = 0`, `the level of each(crew, level="x"): found "x", want a`},
		{"pallets = 1,, tonnes = 2", "found nothing between two commas"},
		{"pallets % 2 = 1", "found %; there is no remainder"},
	} {
		_, err := d.ParseHypothesis(c.in)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v, want %s", c.in, err, c.want)
		}
	}
	none, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{"pallets"}, NoConstant: true}, quays())
	if err != nil {
		t.Fatal(err)
	}
	if _, err := none.ParseHypothesis("constant = 0"); err == nil || !strings.Contains(err.Error(), "there is no term constant; the model has none") {
		t.Error(err)
	}
	// A level is an option of hypotheses only.
	if _, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{`each(barge, level="a")`}}, quays()); err == nil || !strings.Contains(err.Error(), `found the option level, want base="label"`) {
		t.Error(err)
	}
}

// What is read prints to a text that reads the same.
func FuzzHypothesis(f *testing.F) {
	for _, s := range []string{"pallets = 0.5", "2 * (pallets - tonnes) / 3 = 1e-1, each(barge) = 0", `each(barge, level="a, = b") * wet = -constant`,
		"tonnes > 40 = 1", "pallets == 1", "((", "a = = b", "1/0*pallets = 1", "\"", "pallets = 1e308 * 1e308"} {
		f.Add(s)
	}
	d, err := NewDesign(Spec{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "tonnes > 40", "each(barge)", "each(barge) * wet", "pallets * tonnes"}}, quays())
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, s string) {
		rs, err := d.ParseHypothesis(s)
		if err != nil {
			return
		}
		for _, r := range rs {
			again, err := d.ParseHypothesis(r.Text)
			if err != nil || len(again) != 1 || again[0].Value.Cmp(r.Value) != 0 || len(again[0].Parts) != len(r.Parts) {
				t.Fatalf("%q: %s reads as %v, %v", s, r.Text, again, err)
			}
			for i, p := range r.Parts {
				if q := again[0].Parts[i]; q.Term != p.Term || q.Coef.Cmp(p.Coef) != 0 {
					t.Fatalf("%q: %s reads as %v", s, r.Text, again)
				}
			}
		}
	})
}
