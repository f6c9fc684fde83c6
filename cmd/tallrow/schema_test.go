package main

import (
	"bytes"
	"encoding/json"
	"math"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"github.com/tallrow/tallrow/vcov"
)

func compiledSchema(t *testing.T) *jsonschema.Schema {
	t.Helper()
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(resultSchema))
	if err != nil {
		t.Fatal(err)
	}
	c := jsonschema.NewCompiler()
	c.DefaultDraft(jsonschema.Draft2020)
	if err := c.AddResource("result.json", doc); err != nil {
		t.Fatal(err)
	}
	s, err := c.Compile("result.json")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// validate checks a document as --json would print it.
func validate(t *testing.T, s *jsonschema.Schema, text []byte) error {
	t.Helper()
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
	if err != nil {
		t.Fatal(err)
	}
	return s.Validate(doc)
}

func TestSchemaTakesResults(t *testing.T) {
	s := compiledSchema(t)
	covariance := sampleResult()
	nan := vcov.Number(math.NaN())
	covariance.Errors[1].Covariance = [][]vcov.Number{{1, nan}, {nan, 2}}
	for name, r := range map[string]*vcov.Result{"usual": sampleResult(), "troubled": troubled(), "levels": manyLevels(), "covariance": covariance} {
		text, err := jsonLine(newView(r, nil).document())
		if err != nil {
			t.Fatal(err)
		}
		if bytes.Contains(text, []byte("NaN")) || bytes.Contains(text, []byte("Inf")) || text[len(text)-1] != '\n' || bytes.Count(text, []byte("\n")) != 1 {
			t.Errorf("%s: not one line of JSON numbers", name)
		}
		if err := validate(t, s, text); err != nil {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// Every wrong document differs from a right one in one place.
func TestSchemaRefuses(t *testing.T) {
	s := compiledSchema(t)
	right, err := jsonLine(newView(troubled(), nil).document())
	if err != nil {
		t.Fatal(err)
	}
	for name, spoil := range map[string]func(d map[string]any){
		"other format":           func(d map[string]any) { d["format"] = "tallrow-fit/2" },
		"no version":             func(d map[string]any) { delete(d, "version") },
		"no rows":                func(d map[string]any) { delete(d, "rows") },
		"extra member":           func(d map[string]any) { d["extra"] = 1 },
		"estimate as text":       func(d map[string]any) { d["estimates"] = []any{"1"} },
		"negative count":         func(d map[string]any) { d["rows"].(map[string]any)["read"] = -1 },
		"fractional count":       func(d map[string]any) { d["n"] = 1.5 },
		"level of one":           func(d map[string]any) { d["model"].(map[string]any)["level"] = 1 },
		"unknown weight":         func(d map[string]any) { d["weight"].(map[string]any)["kind"] = "other" },
		"p above one":            func(d map[string]any) { entry(d, 0)["p"] = []any{1.5} },
		"negative error":         func(d map[string]any) { entry(d, 0)["se"] = []any{-1} },
		"positive log10":         func(d map[string]any) { entry(d, 0)["log10_p"] = []any{1} },
		"unknown kind":           func(d map[string]any) { entry(d, 0)["kind"] = "hc9" },
		"ok with a reason":       func(d map[string]any) { entry(d, 0)["reason"] = "why" },
		"unavailable, no reason": func(d map[string]any) { entry(d, 3)["reason"] = nil },
		"clusters of hc":         func(d map[string]any) { entry(d, 1)["clusters"] = []any{"quay"} },
		"cr without clusters":    func(d map[string]any) { entry(d, 2)["clusters"] = []any{} },
		"code in capitals": func(d map[string]any) {
			d["warnings"].([]any)[0].(map[string]any)["code"] = "Lone Cluster"
		},
	} {
		var d map[string]any
		if err := json.Unmarshal(right, &d); err != nil {
			t.Fatal(err)
		}
		spoil(d)
		text, err := json.Marshal(d)
		if err != nil {
			t.Fatal(err)
		}
		if validate(t, s, text) == nil {
			t.Errorf("%s: taken", name)
		}
	}
}

func entry(d map[string]any, i int) map[string]any { return d["errors"].([]any)[i].(map[string]any) }

// Only what was asked for is in the document, in that order; classical errors
// computed for the ratio are not, nor is a warning about them.
func TestDocument(t *testing.T) {
	r := sampleResult()
	kind := "classical"
	r.Warnings = []vcov.Warning{{Code: "lone", Kind: &kind, Text: "about classical"}, {Code: "other", Text: "about all"}}
	d := newView(r, []string{"cr1( quay )", "hc1"}).document()
	if len(d.Errors) != 2 || d.Errors[0].Name() != "cr1(quay)" || d.Errors[1].Name() != "hc1" {
		t.Errorf("errors %v", d.Errors)
	}
	if len(d.Warnings) != 1 || d.Warnings[0].Code != "other" {
		t.Errorf("warnings %v", d.Warnings)
	}
	if len(r.Errors) != 3 || len(r.Warnings) != 2 {
		t.Error("the result itself was changed")
	}
	// Operators in expressions stay readable.
	where := "a < b && c > d"
	r.Model.Where = &where
	text, err := jsonLine(newView(r, nil).document())
	if err != nil || !strings.Contains(string(text), where) {
		t.Errorf("%s, %v", text, err)
	}
}
