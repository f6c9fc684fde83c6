package main

import (
	"fmt"
	"math"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"time"
	_ "time/tzdata" // --zone works on machines without zone files

	"github.com/tallrow/tallrow/stream"
)

// settings are the options of one run, from a model file and the command line.
type settings struct {
	outcome    string
	terms      []string
	noConstant bool
	sweep      string
	weight     string
	weightKind string
	where      string
	missing    string
	badRows    string
	errors     []string
	cluster    []string
	level      float64
	hypotheses []string
	adjust     string
	first      int64

	format   string
	noHeader bool
	decimal  string
	null     []string // nil: the reader's own list
	kinds    map[string]stream.Kind
	zone     *time.Location

	passes     int // 0: auto
	arithmetic string
	workers    int
	memory     int64 // 0: half of what there is
	scratch    string
	plan       string

	json          bool
	output        string
	quiet         bool
	timings       bool
	clusterDetail bool
	audit         audit
	draws         int64
	seed          int64
	drawWeights   string
	period        string
	unit          string
	fixedLags     bool // lags is given
	lags          int64
	kernel        string
	jsonSchema    bool

	keep       []string
	part       int
	parts      int // 0: not in parts
	quotes     string
	frameFrom  string
	hideIDs    string
	at         string
	partial    bool
	eachDigest bool
	checkpoint string

	launch launchSettings

	// raw has the texts of the given options.
	raw map[string]string
	// from says where each given option came from, for messages: "--terms" or
	// "quay.toml line 3: terms".
	from map[string]string
	data []string
}

func newSettings() *settings {
	return &settings{
		missing: "skip", badRows: "stop", level: 0.95, adjust: "none", arithmetic: "auto",
		format: "auto", decimal: "point", zone: time.UTC,
		workers: runtime.GOMAXPROCS(0),
		raw:     map[string]string{},
		launch:  launchSettings{cpus: 1, tries: 3, limit: time.Hour},
		from:    map[string]string{},
	}
}

// give sets one option and remembers where it came from.
func (s *settings) give(o *option, v value, from string) error {
	if err := o.set(s, v); err != nil {
		return stream.Usef("%s: %s", from, err)
	}
	s.raw[o.name], s.from[o.name] = v.text(), from
	return nil
}

func (s *settings) given(name string) bool { _, ok := s.from[name]; return ok }

// origin names an option as the user gave it.
func (s *settings) origin(name string) string {
	if f, ok := s.from[name]; ok {
		return f
	}
	return "--" + name
}

func splitExprs(v value) ([]string, error) {
	list := []string{}
	for _, p := range v.parts {
		if strings.TrimSpace(p) == "" {
			if v.exact {
				return nil, fmt.Errorf("found an empty element, want an expression")
			}
			continue
		}
		items, err := stream.SplitList(p)
		if err != nil {
			return nil, err
		}
		list = append(list, items...)
	}
	return list, nil
}

func setSwitch(dst *bool, v value) error {
	b, err := strconv.ParseBool(v.text())
	if err != nil {
		return fmt.Errorf("found %q, want true or false", v.text())
	}
	*dst = b
	return nil
}

// choose makes a setter that takes one of the words.
func choose(dst func(*settings) *string, words ...string) func(*settings, value) error {
	return func(s *settings, v value) error {
		for _, w := range words {
			if v.text() == w {
				*dst(s) = w
				return nil
			}
		}
		return fmt.Errorf("found %q, want %s", v.text(), alternatives(words))
	}
}

// alternatives gives "a, b or c".
func alternatives(words []string) string {
	if len(words) < 2 {
		return strings.Join(words, "")
	}
	return strings.Join(words[:len(words)-1], ", ") + " or " + words[len(words)-1]
}

// both gives "a, b and c".
func both(words []string) string {
	if len(words) < 2 {
		return strings.Join(words, "")
	}
	return strings.Join(words[:len(words)-1], ", ") + " and " + words[len(words)-1]
}

func setLevel(s *settings, v value) error {
	x, err := strconv.ParseFloat(v.text(), 64)
	if err != nil || math.IsNaN(x) || x <= 0 || x >= 1 {
		hint := ""
		if err == nil && x >= 1 && x < 100 {
			hint = fmt.Sprintf(" (%s for %s %%)", strconv.FormatFloat(x/100, 'g', 6, 64), v.text())
		}
		return fmt.Errorf("found %q, want a number above 0 and below 1%s", v.text(), hint)
	}
	s.level = x
	return nil
}

func positive(v value) (int64, error) {
	n, err := strconv.ParseInt(strings.ReplaceAll(v.text(), "_", ""), 10, 64)
	if err != nil || n <= 0 {
		return 0, fmt.Errorf("found %q, want a whole number above 0", v.text())
	}
	return n, nil
}

func setFirst(s *settings, v value) (err error) { s.first, err = positive(v); return err }

func setDraws(s *settings, v value) error {
	n, err := positive(v)
	if err == nil && (n < 99 || n > 1_000_000) {
		err = fmt.Errorf("found %d, want 99 to 1,000,000", n)
	}
	s.draws = n
	return err
}

func setLags(s *settings, v value) error {
	if v.text() == "auto" {
		s.fixedLags, s.lags = false, 0
		return nil
	}
	n, err := strconv.ParseInt(v.text(), 10, 64)
	if err != nil || n < 0 {
		return fmt.Errorf("found %q, want auto or a whole number of zero or more", v.text())
	}
	s.fixedLags, s.lags = true, n
	return nil
}

func setSeed(s *settings, v value) error {
	n, err := strconv.ParseUint(v.text(), 10, 63)
	if err != nil {
		return fmt.Errorf("found %q, want a whole number of zero or more", v.text())
	}
	s.seed = int64(n)
	return nil
}

func setWorkers(s *settings, v value) error {
	n, err := positive(v)
	if err != nil {
		return err
	}
	if n > 4096 {
		return fmt.Errorf("found %d, want at most 4096", n)
	}
	s.workers = int(n)
	return nil
}

func setPasses(s *settings, v value) error {
	switch v.text() {
	case "auto":
		s.passes = 0
	case "1":
		s.passes = 1
	case "2":
		s.passes = 2
	default:
		return fmt.Errorf("found %q, want auto, 1 or 2", v.text())
	}
	return nil
}

func setPart(s *settings, v value) error {
	i, n, ok := strings.Cut(v.text(), "/")
	part, err := strconv.Atoi(i)
	parts, err2 := strconv.Atoi(n)
	if !ok || err != nil || err2 != nil || part < 0 || part >= parts || parts > 1_000_000 {
		return fmt.Errorf("found %q, want I/N with 0 <= I < N, such as 0/8 for the first of eight", v.text())
	}
	s.part, s.parts = part, parts
	return nil
}

func setMemory(s *settings, v value) (err error) { s.memory, err = parseSize(v.text()); return err }

func setNull(s *settings, v value) error {
	s.null = []string{}
	for _, p := range v.parts {
		if v.exact {
			s.null = append(s.null, p)
			continue
		}
		for _, w := range strings.Split(p, ",") {
			if w = strings.TrimSpace(w); w != "" {
				s.null = append(s.null, w)
			}
		}
	}
	return nil
}

func setZone(s *settings, v value) error {
	name := v.text()
	// "Local" would make a result depend on the machine.
	if name == "" || strings.EqualFold(name, "local") {
		return fmt.Errorf("found %q, want a zone name such as UTC or Europe/Rome", name)
	}
	z, err := time.LoadLocation(name)
	if err != nil {
		return fmt.Errorf("found %q, want a zone name such as UTC or Europe/Rome", name)
	}
	s.zone = z
	return nil
}

// kindWords are the words that --kinds takes.
var kindWords = []string{"float64", "int64", "uint64", "bool", "time", "text"}

func setKinds(s *settings, v value) error {
	s.kinds = map[string]stream.Kind{}
	items := v.parts
	if !v.exact {
		items = nil
		for _, p := range v.parts {
			for _, it := range strings.Split(p, ",") {
				if it = strings.TrimSpace(it); it != "" {
					items = append(items, it)
				}
			}
		}
	}
	for _, it := range items {
		// The last = parts them: a kind has none, a column name may.
		i := strings.LastIndexByte(it, '=')
		if i < 0 {
			return fmt.Errorf("found %q, want column=kind", it)
		}
		col, word := strings.TrimSpace(it[:i]), strings.TrimSpace(it[i+1:])
		k, ok := stream.ParseKind(word)
		if !ok {
			return fmt.Errorf("column %s: found kind %q, want %s%s", col, word, alternatives(kindWords), meant(word, kindWords))
		}
		if col == "" {
			return fmt.Errorf("found %q, want column=kind", it)
		}
		if old, twice := s.kinds[col]; twice && old != k {
			return fmt.Errorf("column %s has two kinds: %s and %s", col, old, k)
		}
		s.kinds[col] = k
	}
	return nil
}

// checkModel judges what only all options together can tell, for fit and plan.
func (s *settings) checkModel() error {
	if s.outcome == "" {
		return stream.Usef("no outcome: say what is explained, such as --outcome minutes")
	}
	if !s.given("terms") {
		return stream.Usef(`no terms: say by what it is explained, such as --terms "pallets, tonnes" (--terms "" for the constant alone)`)
	}
	if s.weight != "" && s.weightKind == "" {
		return stream.Usef("%s needs --weight-kind: frequency if a row stands for that many equal rows, precision if the weight is inverse to the variance, sampling if it is inverse to the chance of being drawn", s.origin("weight"))
	}
	if s.weight == "" && s.weightKind != "" {
		return stream.Usef("%s without --weight", s.origin("weight-kind"))
	}
	if s.sweep == "" && s.given("sweep") {
		return stream.Usef("%s: found nothing, want units such as crane", s.origin("sweep"))
	}
	return nil
}

// spec is the model for the stream package; keys are the clusterings.
func (s *settings) spec(req request) stream.Spec {
	sp := stream.Spec{
		Outcome: s.outcome, Terms: slices.Concat(s.terms, s.keep), NoConstant: s.noConstant,
		Weight: s.weight, Where: s.where, Stop: s.missing == "stop",
		Keys: req.keys, Crossed: req.crossed, Sweep: s.sweep, Buckets: req.buckets, Zone: s.zone,
	}
	switch s.weightKind {
	case "frequency":
		sp.WeightKind = stream.Frequency
	case "precision":
		sp.WeightKind = stream.Precision
	case "sampling":
		sp.WeightKind = stream.Sampling
	}
	return sp
}

// reading is how the data are read.
func (s *settings) reading() stream.Options {
	return stream.Options{
		Format: s.format, NoHeader: s.noHeader, DecimalComma: s.decimal == "comma",
		Null: s.null, Kinds: s.kinds, SkipBad: s.badRows == "skip", Scratch: s.scratch, CountQuotes: s.quotes == "count",
	}.WithDefaults()
}
