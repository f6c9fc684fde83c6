package main

import (
	"fmt"
	"strings"
)

// form says what values an option takes, on the command line and in a model
// file.
type form uint8

const (
	formText   form = iota // one text
	formList               // a list of texts
	formMany               // a text or several, each as it is; the option may be repeated
	formSwitch             // true or false; no value on the command line
	formWhole              // a whole number
	formNumber             // a number
	formSize               // bytes, such as 1GiB
	formPasses             // auto, 1 or 2
	formAuto               // auto or a whole number
	formKinds              // column = kind
)

// Commands that take an option.
const (
	onFit = 1 << iota
	onPlan
	onColumns
	onDigest
	onPool
	onLaunch
	onModel = onFit | onPlan
	onAll   = onFit | onPlan | onColumns
	onScan  = onAll | onDigest | onLaunch   // that read data
	onSums  = onModel | onDigest | onLaunch // that have a model
	onAsk   = onModel | onLaunch            // that ask for errors
)

// option is one word of the program. The table below is the only place that
// knows them: flags, model files, help and the reference are made from it.
type option struct {
	name  string
	short string
	value string // what stands for the value in help
	form  form
	group string
	on    int
	file  bool // may stand in a model file
	def   string
	help  string
	set   func(*settings, value) error
}

// value is what was given for an option: one text from the command line, or
// the elements of an array or table in a model file.
type value struct {
	parts []string
	exact bool // the parts are elements: commas do not split them
}

func (v value) text() string { return strings.Join(v.parts, ", ") }

// Groups of options, in the order of the help.
var groups = []string{"Model", "Errors", "Rows", "Reading", "Resources", "Digests", "Launch", "Output"}

var options = []option{
	{name: "outcome", value: "EXPR", group: "Model", on: onSums, file: true,
		help: "what is explained: a column or an expression such as log(minutes)",
		set:  func(s *settings, v value) error { s.outcome = strings.TrimSpace(v.text()); return nil }},
	{name: "terms", value: "LIST", form: formList, group: "Model", on: onSums, file: true,
		help: "terms, separated by commas; each(barge) makes one indicator for each level",
		set:  func(s *settings, v value) (err error) { s.terms, err = splitExprs(v); return err }},
	{name: "no-constant", form: formSwitch, group: "Model", on: onSums, file: true, def: "false",
		help: "leave the constant out",
		set:  func(s *settings, v value) error { return setSwitch(&s.noConstant, v) }},
	{name: "sweep", value: "EXPR", group: "Model", on: onSums, file: true,
		help: "units, such as crane: an effect of each is swept out of outcome and terms, however many there are, and the constant with them",
		set:  func(s *settings, v value) error { s.sweep = strings.TrimSpace(v.text()); return nil }},
	{name: "weight", value: "EXPR", group: "Model", on: onSums, file: true,
		help: "weight of a row; needs --weight-kind",
		set:  func(s *settings, v value) error { s.weight = strings.TrimSpace(v.text()); return nil }},
	{name: "weight-kind", value: "KIND", group: "Model", on: onSums, file: true,
		help: "frequency (a row stands for that many), precision (inverse variance) or sampling (inverse chance of being drawn)",
		set:  choose(func(s *settings) *string { return &s.weightKind }, "frequency", "precision", "sampling")},

	{name: "errors", value: "LIST", form: formList, group: "Errors", on: onSums, file: true, def: "classical, hc1, and cr1 with --cluster; with --sweep classical and cr1, by its units unless --cluster is given",
		help: "kinds of errors: classical, hc0 to hc5, hc4m, cr0 to cr3, wcr, wcu (wild cluster bootstrap, hypothesis imposed or not), driscoll-kraay (periods near in time), hac (rows near in time); cr1(quay) names its clusters in place, cr1(quay, crane) two ways at once; the last one leads",
		set:  func(s *settings, v value) (err error) { s.errors, err = splitExprs(v); return err }},
	{name: "cluster", value: "EXPR", form: formList, group: "Errors", on: onSums, file: true,
		help: "rows that move together: a column or an expression such as date(t)",
		set:  func(s *settings, v value) (err error) { s.cluster, err = splitExprs(v); return err }},
	{name: "hypothesis", value: "EQUATIONS", form: formMany, group: "Errors", on: onAsk, file: true,
		help: "test equations between coefficients under each kind of errors: \"pallets = 0.5\"; several in one, separated by commas, are tested together; may be repeated",
		set:  func(s *settings, v value) error { s.hypotheses = v.parts; return nil }},
	{name: "period", value: "EXPR", group: "Errors", on: onSums, file: true,
		help: "days or whole numbers in time for driscoll-kraay and hac, such as date(t); hac without one takes the order of the input",
		set:  func(s *settings, v value) error { s.period = strings.TrimSpace(v.text()); return nil }},
	{name: "unit", value: "EXPR", group: "Errors", on: onModel, file: true,
		help: "hac: rows move together within these only; the input is sorted by unit, then period",
		set:  func(s *settings, v value) error { s.unit = strings.TrimSpace(v.text()); return nil }},
	{name: "lags", value: "auto|N", form: formAuto, group: "Errors", on: onAsk, file: true, def: "auto",
		help: "how many periods (hac without a period: rows) apart errors still move together",
		set:  setLags},
	{name: "kernel", value: "bartlett|parzen|quadratic", group: "Errors", on: onAsk, file: true, def: "bartlett",
		help: "how their weight falls with the distance in time; quadratic is quadratic spectral",
		set:  choose(func(s *settings) *string { return &s.kernel }, "bartlett", "parzen", "quadratic")},
	{name: "draws", value: "N", form: formWhole, group: "Errors", on: onAsk, file: true, def: "9999",
		help: "draws of wcr and wcu; with few clusters all patterns of signs instead",
		set:  setDraws},
	{name: "draw-weights", value: "auto|signs|six-point", group: "Errors", on: onAsk, file: true, def: "auto",
		help: "what draws multiply clusters by; auto is six-point below 12 clusters",
		set:  choose(func(s *settings) *string { return &s.drawWeights }, "auto", "signs", "six-point")},
	{name: "seed", value: "N", form: formWhole, group: "Errors", on: onAsk, file: true, def: "0",
		help: "other draws for every N",
		set:  setSeed},
	{name: "cluster-detail", form: formSwitch, group: "Errors", on: onAsk, file: true, def: "false",
		help: "describe the clusters: how many count, what hangs on single ones",
		set:  func(s *settings, v value) error { return setSwitch(&s.clusterDetail, v) }},
	{name: "audit", value: "auto|N", form: formAuto, group: "Errors", on: onAsk, file: true,
		help: "hold every kind of errors against replicates: N disjoint buckets (8 to 512) of whole clusters, without clusters of rows; auto takes up to 50; auto(quay), 40(quay) or auto(rows) say what they keep together",
		set:  setAudit},
	{name: "adjust", value: "none|holm|bh", group: "Errors", on: onAsk, file: true, def: "none",
		help: "adjust the p of the terms for their number: holm against any false finding, bh against their share among the findings",
		set:  choose(func(s *settings) *string { return &s.adjust }, "none", "holm", "bh")},
	{name: "level", value: "P", form: formNumber, group: "Errors", on: onAsk, file: true, def: "0.95",
		help: "probability of the intervals, above 0 and below 1",
		set:  setLevel},

	{name: "where", value: "EXPR", group: "Rows", on: onSums, file: true,
		help: "use only rows for which this holds, such as \"tonnes > 0 && !night\"",
		set:  func(s *settings, v value) error { s.where = strings.TrimSpace(v.text()); return nil }},
	{name: "missing", value: "skip|stop", group: "Rows", on: onSums, file: true, def: "skip",
		help: "what to do with a row with a missing cell",
		set:  choose(func(s *settings) *string { return &s.missing }, "skip", "stop")},
	{name: "bad-rows", value: "stop|skip", group: "Rows", on: onScan, file: true, def: "stop",
		help: "what to do with a row that cannot be read; skipped ones are counted",
		set:  choose(func(s *settings) *string { return &s.badRows }, "stop", "skip")},
	{name: "first", value: "N", form: formWhole, group: "Rows", on: onAll | onDigest, file: true,
		help: "read only the first N rows",
		set:  setFirst},

	{name: "format", value: "auto|csv|parquet", group: "Reading", on: onScan, file: true, def: "auto",
		help: "format of the data",
		set:  choose(func(s *settings) *string { return &s.format }, "auto", "csv", "parquet")},
	{name: "no-header", form: formSwitch, group: "Reading", on: onScan, file: true, def: "false",
		help: "the first line is data; columns are named c1, c2, ...",
		set:  func(s *settings, v value) error { return setSwitch(&s.noHeader, v) }},
	{name: "decimal", value: "point|comma", group: "Reading", on: onScan, file: true, def: "point",
		help: "decimal mark of numbers in text files",
		set:  choose(func(s *settings) *string { return &s.decimal }, "point", "comma")},
	{name: "null", value: "LIST", form: formList, group: "Reading", on: onScan, file: true, def: "NA, null, NaN",
		help: "cells that are missing, besides the empty one",
		set:  setNull},
	{name: "kinds", value: "LIST", form: formKinds, group: "Reading", on: onScan, file: true,
		help: "kinds of columns where the first rows mislead: \"crane=text, code=int64\"",
		set:  setKinds},
	{name: "zone", value: "ZONE", group: "Reading", on: onSums, file: true, def: "UTC",
		help: "time zone for hour, weekday, month and date of instants, such as Europe/Rome",
		set:  setZone},

	{name: "passes", value: "auto|1|2", form: formPasses, group: "Resources", on: onModel, file: true, def: "auto",
		help: "how often the data are read",
		set:  setPasses},
	{name: "arithmetic", value: "auto|double|extended", group: "Resources", on: onSums, file: true, def: "auto",
		help: "extended has twice the digits; auto takes it where terms are so collinear that estimates lose digits",
		set:  choose(func(s *settings) *string { return &s.arithmetic }, "auto", "double", "extended")},
	{name: "workers", value: "N", form: formWhole, group: "Resources", on: onAll | onDigest, file: true, def: "one for each processor",
		help: "goroutines that read and sum; the result never depends on it",
		set:  setWorkers},
	{name: "memory", value: "SIZE", form: formSize, group: "Resources", on: onScan, file: true, def: "half of what the machine gives",
		help: "bound for the whole process, such as 1GiB or 512MB",
		set:  setMemory},
	{name: "scratch", value: "DIR", group: "Resources", on: onScan, file: true, def: "the system's folder",
		help: "folder for temporary files: sums of clusters that do not fit --memory, the copy of a pipe that is read twice",
		set:  func(s *settings, v value) error { s.scratch = v.text(); return nil }},
	{name: "checkpoint", value: "FILE", group: "Resources", on: onFit | onDigest,
		help: "keep the sums of what is read in FILE, every 30 seconds: after a stop of any kind the same command goes on from there and ends with the same bits; FILE is removed when the run is done",
		set:  func(s *settings, v value) error { s.checkpoint = v.text(); return nil }},
	{name: "plan", value: "FILE", group: "Resources", on: onFit,
		help: "use the plan that `tallrow plan -o FILE` wrote; refused if model or data differ",
		set:  func(s *settings, v value) error { s.plan = v.text(); return nil }},

	{name: "keep", value: "LIST", form: formList, group: "Digests", on: onDigest | onLaunch, file: true,
		help: "further terms or outcomes to keep sums of, for questions not asked now; rows are used where all of them are there",
		set:  func(s *settings, v value) (err error) { s.keep, err = splitExprs(v); return err }},
	{name: "part", value: "I/N", group: "Digests", on: onDigest,
		help: "read part I of N, 0 <= I < N: other machines read the others, and pool joins them",
		set:  setPart},
	{name: "quotes", value: "guess|count", group: "Digests", on: onDigest | onLaunch, def: "guess",
		help: "how a --part of CSV finds out which of its text is inside quotes: from that text, which pool proves or refuses, or by reading all before it",
		set:  choose(func(s *settings) *string { return &s.quotes }, "guess", "count")},
	{name: "frame-from", value: "DIGEST", group: "Digests", on: onDigest | onLaunch,
		help: "sum in the frame of another digest, so that pooled days stay as small as one",
		set:  func(s *settings, v value) error { s.frameFrom = v.text(); return nil }},
	{name: "hide-ids", value: "KEYFILE", group: "Digests", on: onDigest | onLaunch,
		help: "put keyed hashes (HMAC-SHA-256) in place of cluster ids; the key stays in KEYFILE, 32 bytes or more",
		set:  func(s *settings, v value) error { s.hideIDs = v.text(); return nil }},
	{name: "at", value: "RESULT.json", group: "Digests", on: onDigest,
		help: "a second round over the data of a fit of digests, for errors that depend on single rows: hc2 to hc5, any with categories; fit takes both rounds",
		set:  func(s *settings, v value) error { s.at = v.text(); return nil }},
	{name: "partial", form: formSwitch, group: "Digests", on: onPool, def: "false",
		help: "join parts although others are missing, to be pooled further",
		set:  func(s *settings, v value) error { return setSwitch(&s.partial, v) }},
	{name: "each-digest", form: formSwitch, group: "Digests", on: onFit, def: "false",
		help: "fit every digest by itself, not their sum: coefficients day by day",
		set:  func(s *settings, v value) error { return setSwitch(&s.eachDigest, v) }},

	{name: "parts", value: "N", form: formWhole, group: "Launch", on: onLaunch,
		help: "how many parts the data are read in, each by a task of its own",
		set:  setWhole(func(s *settings) *int { return &s.launch.parts }, maxParts)},
	{name: "folder", value: "DIR", group: "Launch", on: onLaunch, def: "the result's name and .launch",
		help: "folder for the state of the run, its digests and logs; all machines must see it",
		set:  func(s *settings, v value) error { s.launch.folder = v.text(); return nil }},
	{name: "cpus", value: "N", form: formWhole, group: "Launch", on: onLaunch, def: "1",
		help: "processors for each task",
		set:  setWhole(func(s *settings) *int { return &s.launch.cpus }, 4096)},
	{name: "time", value: "TIME", group: "Launch", on: onLaunch, def: "1h",
		help: "limit for each part, such as 90m or 1d12h: a task that nobody ends ends then",
		set:  setTime},
	{name: "tries", value: "N", form: formWhole, group: "Launch", on: onLaunch, def: "3",
		help: "how often missing parts are submitted before launch gives up",
		set:  setWhole(func(s *settings) *int { return &s.launch.tries }, 1000)},
	{name: "submit-with", value: "WORDS", form: formMany, group: "Launch", on: onLaunch,
		help: "further words for sbatch, such as \"--partition=night --account=quays\"; may be repeated",
		set:  setSubmitWith},
	{name: "resume", value: "DIR", group: "Launch", on: onLaunch,
		help: "go on with the run in that folder, as the same command in the same place does",
		set:  func(s *settings, v value) error { s.launch.resume = v.text(); return nil }},
	{name: "dry-run", form: formSwitch, group: "Launch", on: onLaunch, def: "false",
		help: "print the scripts and commands, submit nothing, write nothing",
		set:  func(s *settings, v value) error { return setSwitch(&s.launch.dryRun, v) }},

	{name: "json", form: formSwitch, group: "Output", on: onScan | onPool, def: "false",
		help: "print JSON and nothing else",
		set:  func(s *settings, v value) error { return setSwitch(&s.json, v) }},
	{name: "output", short: "o", value: "FILE", group: "Output", on: onScan | onPool,
		help: "write there instead of standard output; the file appears only when it is complete",
		set:  func(s *settings, v value) error { s.output = v.text(); return nil }},
	{name: "quiet", form: formSwitch, group: "Output", on: onScan | onPool, def: "false",
		help: "no progress on standard error",
		set:  func(s *settings, v value) error { return setSwitch(&s.quiet, v) }},
	{name: "timings", form: formSwitch, group: "Output", on: onFit, def: "false",
		help: "show where the time went: reading, terms, sums, errors",
		set:  func(s *settings, v value) error { return setSwitch(&s.timings, v) }},
	{name: "json-schema", form: formSwitch, group: "Output", on: onFit, def: "false",
		help: "print the JSON Schema of the result and stop",
		set:  func(s *settings, v value) error { return setSwitch(&s.jsonSchema, v) }},
}

func optionNamed(name string) *option {
	for i := range options {
		if options[i].name == name {
			return &options[i]
		}
	}
	return nil
}

// optionNames lists the options of a command, or the keys of a model file.
func optionNames(on int, file bool) []string {
	var names []string
	for _, o := range options {
		if o.on&on != 0 && (!file || o.file) {
			names = append(names, o.name)
		}
	}
	return names
}

// reference is the table of options for readers, in Markdown.
func reference() string {
	var b strings.Builder
	b.WriteString("| option and key | value | default | meaning |\n|---|---|---|---|\n")
	for _, g := range groups {
		for _, o := range options {
			if o.group != g {
				continue
			}
			name := "`--" + o.name + "`"
			if o.short != "" {
				name = "`-" + o.short + "`, " + name
			}
			if !o.file {
				name += " (command line only)"
			}
			val := "`" + strings.ReplaceAll(o.value, "|", "\\|") + "`"
			if o.form == formSwitch {
				val = "switch"
			}
			fmt.Fprintf(&b, "| %s | %s | %s | %s |\n", name, val, o.def, strings.ReplaceAll(o.help, "|", "\\|"))
		}
	}
	return b.String()
}
