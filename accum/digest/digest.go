// Package digest keeps the sums of a scan in a file: the table of keyed moment sums
// of package accum, in Parquet, with all that is needed to read it and to answer
// questions from it.
//
// # Format tallrow-digest/1
//
// One row for each sum or vector of sums, in order of what, section, table and key:
//
//	what     text    segment, weight, second, fourth, level, pair, cluster; of a second
//	                 round segment, meat, spread, meat-level, meat-pair, score (accum.What)
//	section  int32   frame in which z is: index into header.sections of the metadata; of a
//	                 meat its number
//	table    int32   second: j(j+1)/2 + i of the product z_i z_j; fourth: place of the
//	                 product; level, pair: table of categories; cluster: clustering;
//	                 segment: run
//	key      bytes   of what the sums are; numbers as 8 bytes that sort by value, high
//	                 byte first, texts as they are; of several, each with its length
//	label    text    key in words; null where there is none or it is hidden
//	rows     int64   rows summed
//	unit     int32
//	sums     list of decimal(38, 0)
//
// A segment has the hash of its column sums, and if it is a byte range of text a second
// number of bits: 1 always, 2 if it was read as beginning inside quotes, 4 if it holds
// an odd number of quotes, 8 if it is the first of its file. With these pooling proves
// that all parts have read the text as it is, see stream.Quotes.
//
// A level, pair or cluster has one sum for each element, sums[i] 2^unit, clusters the
// upper triangle of sum w z z' column by column. A weight, second or fourth moment is
// one number, the sum over i of sums[i] 2^(unit + 96 i): exact, however many rows.
//
// z = (1, u, v) is a row in the section's frame, see accum.Frame. The metadata, under
// the key "tallrow.digest" of the footer, are a JSON object: see Meta. Under
// "tallrow.sha256" stand 64 hexadecimal digits, the SHA-256 of the file with zeros in
// their place: checksums of pages alone miss damage.
package digest

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/stream"
)

// Format is the version of the format that this package writes.
const Format = "tallrow-digest/1"

const (
	metaKey = "tallrow.digest"
	hashKey = "tallrow.sha256"
)

// Meta is what a digest says of itself.
type Meta struct {
	Format  string `json:"format"`
	Version string `json:"version"` // of the program
	Model   Model  `json:"model"`
	// Header is that of sums of a first reading, Second of a second round; one of them
	// is null.
	Header *accum.Header `json:"header"`
	Second *Second       `json:"second"`
	// Runs are the scans whose sums it holds, in order of ID.
	Runs []*Run `json:"runs"`
}

// Second describes sums over rows at the coefficients of a first round.
type Second struct {
	Of     string           `json:"of"` // identity of the sums of the first round
	Kinds  []Kind           `json:"kinds"`
	Header *accum.RowHeader `json:"header"`
	// Places are those of Meta.Runs among the runs of the first round.
	Places []int `json:"places"`
}

// Kind is a kind of errors over a key of the model, -1 for none.
type Kind struct {
	Name    string `json:"name"`
	Cluster int    `json:"cluster"`
}

// Model is the design of the sums.
type Model struct {
	Outcome    string   `json:"outcome"`
	Terms      []string `json:"terms"` // without those kept
	Kept       []string `json:"kept"`  // columns kept beside, in the order in which they follow the terms
	NoConstant bool     `json:"no_constant"`
	Sweep      string   `json:"sweep,omitempty"` // units whose effects are swept out
	Weight     string   `json:"weight"`
	WeightKind string   `json:"weight_kind"`
	Where      string   `json:"where"`
	Missing    string   `json:"missing"`
	Zone       string   `json:"zone"`
	Keys       []string `json:"keys"`
	Crossed    [][]int  `json:"crossed"`
	// Hidden says for each key and crossed key whether keyed hashes stand for its
	// values; HiddenBy identifies the secret.
	Hidden   []bool   `json:"hidden"`
	HiddenBy string   `json:"hidden_by,omitempty"`
	Columns  []Column `json:"columns"` // that the expressions read
}

// Column is a column of the data.
type Column struct {
	Name  string `json:"name"`
	Kind  string `json:"kind"`
	Zoned bool   `json:"zoned,omitempty"`
	Dates bool   `json:"dates,omitempty"`
}

// Run is one scan of an input, in Parts parts of which those in Have are here.
type Run struct {
	// ID identifies input, model and parts.
	ID    string `json:"id"`
	Parts int    `json:"parts"`
	Have  []int  `json:"have"`
	Files []File `json:"files"`
	// Content identifies the used cells of a run that was not made in parts, so that a
	// pipe is known again; empty if there are none.
	Content string `json:"content,omitempty"`
}

// File is an input file as it was found. Checksum is the SHA-256 of its first and
// last 64 KiB; empty, like Size and Time, for a pipe.
type File struct {
	Path     string `json:"path"`
	Size     int64  `json:"size"`
	Time     string `json:"time,omitempty"`
	Checksum string `json:"checksum,omitempty"`
	// Empty says that it holds no rows: others with the same bytes are no overlap.
	Empty bool `json:"empty,omitempty"`
}

// Missing lists the parts that are not there.
func (r *Run) Missing() []int {
	var out []int
	for i := range r.Parts {
		if _, ok := slices.BinarySearch(r.Have, i); !ok {
			out = append(out, i)
		}
	}
	return out
}

var weightKinds = map[stream.WeightKind]string{stream.NoWeight: "", stream.Frequency: "frequency", stream.Precision: "precision", stream.Sampling: "sampling"}

// NewModel describes a design whose last kept terms are columns kept beside those of
// the model.
func NewModel(d *stream.Design, schema *stream.Schema, kept int) Model {
	s := &d.Spec
	m := Model{Outcome: d.Dense[len(d.Dense)-1], Terms: []string{}, Kept: []string{}, NoConstant: s.NoConstant, Sweep: s.Sweep, Weight: s.Weight, WeightKind: weightKinds[s.WeightKind],
		Where: s.Where, Missing: "skip", Zone: "UTC", Keys: []string{}, Crossed: s.Crossed, Hidden: make([]bool, len(d.Keys)), Columns: []Column{}}
	if s.Stop {
		m.Missing = "stop"
	}
	if s.Zone != nil {
		m.Zone = s.Zone.String()
	}
	for i := range d.Terms {
		if i < len(d.Terms)-kept {
			m.Terms = append(m.Terms, s.Terms[i])
		} else {
			m.Kept = append(m.Kept, s.Terms[i])
		}
	}
	m.Keys = append(m.Keys, s.Keys...)
	if m.Crossed == nil {
		m.Crossed = [][]int{}
	}
	seen := map[int]bool{}
	for _, u := range d.Uses() {
		if seen[u.Column] {
			continue
		}
		seen[u.Column] = true
		c := schema.Columns[u.Column]
		m.Columns = append(m.Columns, Column{c.Name, c.Kind.String(), c.Zoned, c.DateOnly})
	}
	return m
}

// Fingerprint identifies model and kept columns.
func (m *Model) Fingerprint() string {
	b, err := json.Marshal(m)
	if err != nil {
		panic(err) // plain data
	}
	h := sha256.Sum256(b)
	return hex.EncodeToString(h[:16])
}

// Schema is that of the columns the model reads.
func (m *Model) Schema() (*stream.Schema, error) {
	s := &stream.Schema{}
	for _, c := range m.Columns {
		k, ok := stream.ParseKind(c.Kind)
		if !ok {
			return nil, fmt.Errorf("column %s has the unknown kind %q", c.Name, c.Kind)
		}
		s.Columns = append(s.Columns, stream.Column{Name: c.Name, Kind: k, Zoned: c.Zoned, DateOnly: c.Dates})
	}
	return s, nil
}

// Design binds the model, all kept columns among its terms. Keys that are hidden are
// texts.
func (m *Model) Design() (*stream.Design, error) {
	schema, err := m.Schema()
	if err != nil {
		return nil, err
	}
	spec := stream.Spec{Outcome: m.Outcome, Terms: slices.Concat(m.Terms, m.Kept), NoConstant: m.NoConstant, Sweep: m.Sweep, Weight: m.Weight, Where: m.Where,
		Stop: m.Missing == "stop", Keys: m.Keys, Crossed: m.Crossed}
	for k, name := range weightKinds {
		if name == m.WeightKind {
			spec.WeightKind = k
		}
	}
	if spec.Zone, err = time.LoadLocation(m.Zone); err != nil {
		return nil, err
	}
	d, err := stream.NewDesign(spec, schema)
	if err != nil {
		return nil, err
	}
	for i, h := range m.Hidden {
		if h {
			d.Keys[i] = stream.KeyColumn{Text: d.Keys[i].Text, Kind: stream.Text, Hidden: true}
		}
	}
	return d, nil
}

// Differs names the first thing in which two models are not the same.
func (m *Model) Differs(o *Model) string {
	a, b := map[string]any{}, map[string]any{}
	for _, p := range []struct {
		m *Model
		v *map[string]any
	}{{m, &a}, {o, &b}} {
		t, err := json.Marshal(p.m)
		if err == nil {
			err = json.Unmarshal(t, p.v)
		}
		if err != nil {
			return "model"
		}
	}
	for _, k := range []string{"outcome", "terms", "kept", "no_constant", "sweep", "weight", "weight_kind", "where", "missing", "zone", "keys", "crossed", "hidden_by", "hidden", "columns"} {
		if x, y := fmt.Sprint(a[k]), fmt.Sprint(b[k]); x != y {
			if k == "hidden_by" && m.HiddenBy != "" && o.HiddenBy != "" {
				return "the ids are hidden by two secrets (--hide-ids)"
			} else if k == "hidden_by" {
				return "the ids of one are hidden (--hide-ids) and those of the other are not"
			}
			return fmt.Sprintf("%s is %s in one and %s in the other", k, x, y)
		}
	}
	return ""
}

// DamageError says that a file is not what was written.
type DamageError struct {
	Path string
	What string
}

func (e *DamageError) Error() string { return fmt.Sprintf("%s: damaged: %s", e.Path, e.What) }

// Unwrap returns stream.ErrDamaged.
func (e *DamageError) Unwrap() error { return stream.ErrDamaged }

// VersionError says that a file was written by a newer program.
type VersionError struct{ Path, Found string }

func (e *VersionError) Error() string {
	return fmt.Sprintf("%s: found the format %q, want %s or an older one; it was written by a newer program", e.Path, e.Found, Format)
}

// row is a record as Parquet has it.
type row struct {
	What    string     `parquet:"what,dict"`
	Section int32      `parquet:"section"`
	Table   int32      `parquet:"table"`
	Key     []byte     `parquet:"key"`
	Label   *string    `parquet:"label,optional"`
	Rows    int64      `parquet:"rows"`
	Unit    int32      `parquet:"unit"`
	Sums    [][16]byte `parquet:"sums,list" parquet-element:",decimal(0:38)"`
}
