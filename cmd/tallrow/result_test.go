package main

import (
	"math"

	"github.com/tallrow/tallrow/vcov"
)

// sampleResult is a result made up for the tests of what is printed; its
// numbers come from no fit.
func sampleResult() *vcov.Result {
	terms := []string{"constant", "pallets", "tonnes", "crew", "wet", "night", "barge = b", "barge = c", "barge = d"}
	est := []float64{14.2031, 1.50312, 0.0203, -0.81234, 3.1, 0.0551, 2.25, -0.4, 10.5}
	classical := []float64{0.0119, 0.000913, 0.0098, 0.0121, 0.051, 0.02, 0.031, 0.033, 0.04}
	r := &vcov.Result{
		Format: vcov.Format, Version: version, Outcome: "minutes",
		Model: vcov.Model{Outcome: "minutes", Terms: []string{"pallets", "tonnes", "crew", "wet", "night", "each(barge)"},
			Constant: true, Cluster: []string{"quay"}, Errors: []string{"classical", "hc1", "cr1(quay)"}, Hypotheses: []string{}, Adjust: "none",
			Missing: "skip", BadRows: "skip", Level: 0.95, Zone: "UTC"},
		Input: vcov.Input{Fingerprint: "f00d", Files: 3, Bytes: 31 << 20},
		Rows: vcov.Rows{Read: 2_000_000, Used: 1_884_501, Missing: 110_346, Excluded: 3_000, Malformed: 2_153, ZeroWeight: 0,
			MissingBy: map[string]int64{"crew": 100_000, "wet": 12_400, "night": 0},
			Problems:  []string{`a.csv line 17 column pallets: found "x", want a number`}},
		N: 1_884_501, Weight: vcov.WeightSum{Sum: 1_884_501}, Rank: 9, Terms: terms,
		Aliased: []vcov.Alias{}, BaseLevels: map[string]string{"barge": "a"},
		Residual: vcov.Residual{DF: 1_884_492, SD: 12.3141, SS: 2.8576e8},
		R2:       0.81234, R2Adjusted: 0.81233, R2Kind: "centred", Hypotheses: []vcov.Hypothesis{},
		SpreadTest: vcov.SpreadTest{Statistic: 1234.5, DF: 8, P: 1e-200},
		Run: vcov.Run{Passes: 1, Route: "fourth moments", Arithmetic: "double", Workers: 2, Segments: 16,
			Bytes: 31 << 20, Seconds: 1.234, PeakBytes: 88 << 20, Condition: 12.5},
		Warnings: []vcov.Warning{},
	}
	for _, x := range est {
		r.Estimates = append(r.Estimates, vcov.Number(x))
	}
	add := func(kind string, clusters []string, df float64, crit float64, times []float64) {
		e := vcov.Errors{Kind: kind, Clusters: clusters, Groups: []int64{}, Status: "ok", Factor: 1}
		for j, c := range classical {
			se := c * times[j]
			t := est[j] / se
			e.SE = append(e.SE, vcov.Number(se))
			e.DF = append(e.DF, vcov.Number(df))
			e.T = append(e.T, vcov.Number(t))
			p := math.Erfc(math.Abs(t) / math.Sqrt2)
			log10p := math.Log10(p)
			if p == 0 {
				log10p = -t * t / 2 / math.Ln10
			}
			e.P = append(e.P, vcov.Number(p))
			e.Log10P = append(e.Log10P, vcov.Number(log10p))
			e.Low = append(e.Low, vcov.Number(est[j]-crit*se))
			e.High = append(e.High, vcov.Number(est[j]+crit*se))
		}
		e.Overall = &vcov.Overall{DF1: 8, DF2: vcov.Number(df), F: 812.345, P: 1e-40}
		r.Errors = append(r.Errors, e)
	}
	ones := []float64{1, 1, 1, 1, 1, 1, 1, 1, 1}
	add("classical", []string{}, 1_884_492, 1.96, ones)
	add("hc1", []string{}, 1_884_492, 1.96, []float64{1.01, 1.67, 1.2, 0.98, 1, 1.01, 1.1, 1.2, 1.3})
	add("cr1", []string{"quay"}, 59, 2.001, []float64{17.7, 2.4, 2.4, 1.5, 2, 2.4, 1.5, 1.1, 1.9})
	cr := &r.Errors[2]
	cr.Groups = []int64{60}
	cr.GroupRows = &vcov.Spread{Min: 28_020, Median: 31_400.5, Max: 35_400}
	return r
}

func missingNumbers(n int) []vcov.Number {
	s := make([]vcov.Number, n)
	for i := range s {
		s[i] = vcov.Number(math.NaN())
	}
	return s
}

// unavailable is an entry for a kind that cannot be given.
func unavailable(kind string, clusters []string, terms int, reason string) vcov.Errors {
	none := missingNumbers(terms)
	return vcov.Errors{Kind: kind, Clusters: clusters, Groups: []int64{}, Status: "unavailable", Reason: &reason,
		Factor: vcov.Number(math.NaN()), SE: none, DF: none, T: none, P: none, Log10P: none, Low: none, High: none}
}
