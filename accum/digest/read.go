package digest

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strings"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/format"

	"github.com/tallrow/tallrow/accum"
)

// Reader reads the records of a digest in order.
type Reader struct {
	Meta Meta
	Path string
	Size int64

	file *os.File
	r    *parquet.GenericReader[row]
	rows []row
	n    int
	at   int
	rec  accum.Record
	prev accum.Record // place of the record before
	seen bool
}

const readRows = 64

// Is reports whether a file calls itself a digest, be it damaged. It reads the ends of
// the file only and trusts nothing else of it.
func Is(name string) bool {
	f, err := os.Open(name)
	if err != nil {
		return false
	}
	defer f.Close()
	st, err := f.Stat()
	if err != nil || !st.Mode().IsRegular() {
		return false
	}
	tail, ok := footer(f, st.Size())
	head := make([]byte, len(magic))
	f.ReadAt(head, 0) // a file without a head has other bytes there
	if string(head) == magic && strings.HasSuffix(name, ".digest") {
		return true // whatever became of its end
	}
	return ok && (string(head) == magic || bytes.HasSuffix(tail, []byte(magic)))
}

// magic is at both ends of a Parquet file.
const magic = "PAR1"

// footer returns the last bytes of a Parquet file that has a checksum of ours.
func footer(f *os.File, size int64) ([]byte, bool) {
	n := min(size, tailBytes)
	tail := make([]byte, n)
	if _, err := f.ReadAt(tail, size-n); err != nil && !errors.Is(err, io.EOF) {
		return nil, false
	}
	return tail, bytes.Contains(tail, []byte(hashKey)) || bytes.Contains(tail, []byte(metaKey))
}

// Open opens a digest. The whole file is checked against its checksum before
// anything of it is believed; time in proportion to its size.
//
// Errors: *DamageError, *VersionError, those of the file.
func Open(name string) (_ *Reader, err error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, err
	}
	defer func() {
		if err != nil {
			f.Close()
		}
	}()
	st, err := f.Stat()
	if err != nil {
		return nil, err
	}
	if err := verify(f, st.Size(), name); err != nil {
		return nil, err
	}
	r := &Reader{Path: name, Size: st.Size(), file: f, rows: make([]row, readRows)}
	if err := r.open(); err != nil {
		return nil, err
	}
	return r, nil
}

func verify(f *os.File, size int64, name string) error {
	tail, _ := footer(f, size)
	at, ok := findHash(tail)
	if !ok {
		return &DamageError{name, "its checksum is not where it should be, want a digest"}
	}
	found := string(tail[at : at+2*sha256.Size])
	copy(tail[at:], strings.Repeat("0", 2*sha256.Size))
	h := sha256.New()
	if _, err := io.Copy(h, io.NewSectionReader(f, 0, size-int64(len(tail)))); err != nil {
		return fmt.Errorf("%s: %w", name, err)
	}
	h.Write(tail)
	if want := hex.EncodeToString(h.Sum(nil)); want != found {
		return &DamageError{name, "the checksum does not fit the bytes"}
	}
	return nil
}

func (r *Reader) open() (err error) {
	defer caught(&err)
	pf, err := parquet.OpenFile(r.file, r.Size, parquet.SkipPageIndex(true), parquet.SkipBloomFilters(true))
	if err != nil {
		return &DamageError{r.Path, err.Error()}
	}
	text, ok := pf.Lookup(metaKey)
	if !ok {
		return &DamageError{r.Path, "it has no description, want a digest"}
	}
	var head struct {
		Format string `json:"format"`
	}
	if err := json.Unmarshal([]byte(text), &head); err != nil {
		return &DamageError{r.Path, err.Error()}
	}
	if head.Format != Format {
		return &VersionError{r.Path, head.Format}
	}
	if err := json.Unmarshal([]byte(text), &r.Meta); err != nil {
		return &DamageError{r.Path, err.Error()}
	}
	if (r.Meta.Header == nil) == (r.Meta.Second == nil) || r.Meta.Second != nil && r.Meta.Second.Header == nil {
		return &DamageError{r.Path, "its description has no header"}
	}
	if err := r.Meta.check(); err != nil {
		return &DamageError{r.Path, err.Error()}
	}
	if err := r.shape(pf); err != nil {
		return &DamageError{r.Path, err.Error()}
	}
	r.r = parquet.NewGenericReader[row](pf)
	return nil
}

// shape holds the columns and their compression to what Writer makes: the library
// reads more, and takes memory for it that the file does not bound.
func (r *Reader) shape(pf *parquet.File) error {
	if want := parquet.SchemaOf(row{}).String(); pf.Schema().String() != want {
		return errors.New("its columns are not those of a digest")
	}
	for _, g := range pf.Metadata().RowGroups {
		for _, c := range g.Columns {
			m := &c.MetaData
			if m.Codec != format.Zstd {
				return fmt.Errorf("found columns with the compression %s, want ZSTD", m.Codec)
			}
			if m.TotalCompressedSize < 0 || m.TotalCompressedSize > r.Size || m.DataPageOffset < 0 || m.DataPageOffset > r.Size {
				return errors.New("a column reaches beyond its end")
			}
		}
	}
	return nil
}

// mostParts is the largest number of parts of a run.
const mostParts = 1_000_000

// check holds what the rest of the program relies on without looking again.
func (m *Meta) check() error {
	if err := m.Model.check(); err != nil {
		return err
	}
	var sections []*accum.Section
	var clusters []int
	if m.Header != nil {
		sections, clusters = m.Header.Sections, m.Header.Clusters
	} else {
		if len(m.Second.Places) != len(m.Runs) {
			return errors.New("its runs have no places")
		}
		if slices.ContainsFunc(m.Second.Places, func(i int) bool { return i < 0 || i > mostParts }) {
			return errors.New("its runs are out of place")
		}
		for _, k := range m.Second.Kinds {
			if k.Cluster < -1 || k.Cluster >= len(m.Model.Hidden) {
				return errors.New("it has errors by a key that is not there")
			}
		}
	}
	for i, k := range clusters {
		if k < 0 || k >= len(m.Model.Hidden) || i > 0 && k <= clusters[i-1] {
			return errors.New("it has clusters of a key that is not there")
		}
	}
	last := ""
	for _, c := range sections {
		if c == nil || c.Frame == nil {
			return errors.New("a section has no frame")
		}
		id := c.ID()
		if id <= last {
			return errors.New("its sections are out of order")
		}
		last = id
	}
	last = ""
	for _, r := range m.Runs {
		if r == nil || r.ID <= last {
			return errors.New("its runs are out of order")
		}
		last = r.ID
		if r.Parts < 1 || r.Parts > mostParts {
			return fmt.Errorf("found a run in %d parts", r.Parts)
		}
		for i, n := range r.Have {
			if n < 0 || n >= r.Parts || i > 0 && n <= r.Have[i-1] {
				return errors.New("its parts are out of order")
			}
		}
	}
	return nil
}

// check holds the lengths and places of keys.
func (m *Model) check() error {
	if len(m.Hidden) != len(m.Keys)+len(m.Crossed) {
		return errors.New("hidden keys do not fit the keys")
	}
	for _, c := range m.Crossed {
		for i, k := range c {
			if k < 0 || k >= len(m.Keys) || i > 0 && k <= c[i-1] {
				return errors.New("it crosses a key that is not there")
			}
		}
		if len(c) < 2 {
			return errors.New("it crosses fewer than two keys")
		}
	}
	return nil
}

// Next returns the next record, nil after the last. It is valid until the next call.
func (r *Reader) Next() (rec *accum.Record, err error) {
	defer caught(&err)
	if r.at == r.n {
		if r.n, err = r.r.Read(r.rows); err != nil && !errors.Is(err, io.EOF) {
			return nil, &DamageError{r.Path, err.Error()}
		}
		r.at = 0
		if r.n == 0 {
			return nil, nil
		}
	}
	from := &r.rows[r.at]
	r.at++
	what, ok := accum.ParseWhat(from.What)
	if !ok {
		return nil, &DamageError{r.Path, fmt.Sprintf("found sums of %q", from.What)}
	}
	rec = &r.rec
	rec.What, rec.Section, rec.Table, rec.Rows, rec.Unit = what, int(from.Section), int(from.Table), from.Rows, int(from.Unit)
	rec.Key = append(rec.Key[:0], from.Key...)
	rec.Label = ""
	if from.Label != nil {
		rec.Label = *from.Label
	}
	rec.Sums = rec.Sums[:0]
	for _, x := range from.Sums {
		rec.Sums = append(rec.Sums, x)
	}
	if r.seen && r.prev.Compare(rec) >= 0 {
		return nil, &DamageError{r.Path, "its rows are out of order"}
	}
	r.seen = true
	r.prev.What, r.prev.Section, r.prev.Table, r.prev.Key = rec.What, rec.Section, rec.Table, append(r.prev.Key[:0], rec.Key...)
	return rec, nil
}

// Close closes the file.
func (r *Reader) Close() error {
	if r.r != nil {
		r.r.Close()
	}
	return r.file.Close()
}
