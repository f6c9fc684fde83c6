package digest

import (
	"bytes"
	"crypto/rand"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"hash"
	"os"
	"path/filepath"
	"strings"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/compress/zstd"

	"github.com/tallrow/tallrow/accum"
)

const (
	writeRows = 256
	// pageBytes is small, since pooling holds a page of each column of every digest.
	pageBytes = 64 << 10
	// groupNumbers ends a row group, so that a writer holds at most so many sums.
	groupNumbers = 1 << 20
)

// Writer writes a digest. The file takes its name only when Close has written and
// synced all of it: a partial file never looks complete.
type Writer struct {
	name string
	file *os.File
	tee  *teeWriter
	w    *parquet.GenericWriter[row]
	rows []row
	n    int
	held int          // numbers in the row group
	prev accum.Record // place of the record before
	seen bool
}

type teeWriter struct {
	f    *os.File
	hash hash.Hash
	n    int64
	tail []byte // what was written last
}

const tailBytes = 256 << 10

func (t *teeWriter) Write(p []byte) (int, error) {
	n, err := t.f.Write(p)
	t.hash.Write(p[:n])
	t.n += int64(n)
	if t.tail = append(t.tail, p[:n]...); len(t.tail) > 4*tailBytes {
		t.tail = append(t.tail[:0], t.tail[len(t.tail)-tailBytes:]...)
	}
	return n, err
}

// Create starts a digest with that name, readable by its owner only. It writes to a
// temporary file beside it, whose name is unique.
func Create(name string) (*Writer, error) {
	var id [8]byte
	if _, err := rand.Read(id[:]); err != nil {
		return nil, err
	}
	tmp := filepath.Join(filepath.Dir(name), fmt.Sprintf(".%s.%s.tmp", filepath.Base(name), hex.EncodeToString(id[:])))
	f, err := os.OpenFile(tmp, os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o600)
	if err != nil {
		return nil, err
	}
	w := &Writer{name: name, file: f, tee: &teeWriter{f: f, hash: sha256.New()}, rows: make([]row, writeRows)}
	w.w = parquet.NewGenericWriter[row](w.tee, parquet.Compression(&zstd.Codec{Level: zstd.SpeedFastest}), parquet.PageBufferSize(pageBytes), parquet.CreatedBy("tallrow", "", ""))
	return w, nil
}

// Write adds a record. Records must come in order; others are an error, so that no
// digest is made that cannot be read.
func (w *Writer) Write(r *accum.Record) (err error) {
	defer caught(&err)
	if w.seen && w.prev.Compare(r) >= 0 {
		return fmt.Errorf("internal error: the %s sums of table %d are out of order", r.What, r.Table)
	}
	w.seen = true
	w.prev.What, w.prev.Section, w.prev.Table, w.prev.Key = r.What, r.Section, r.Table, append(w.prev.Key[:0], r.Key...)
	if w.n == len(w.rows) {
		if err := w.flush(); err != nil {
			return err
		}
	}
	to := &w.rows[w.n]
	w.n++
	to.What, to.Section, to.Table, to.Rows, to.Unit = r.What.String(), int32(r.Section), int32(r.Table), r.Rows, int32(r.Unit)
	to.Key = append(to.Key[:0], r.Key...)
	to.Label = nil
	if r.Label != "" {
		label := r.Label
		to.Label = &label
	}
	to.Sums = to.Sums[:0]
	for _, x := range r.Sums {
		to.Sums = append(to.Sums, x)
	}
	w.held += len(r.Sums)
	return nil
}

func (w *Writer) flush() error {
	if _, err := w.w.Write(w.rows[:w.n]); err != nil {
		return err
	}
	w.n = 0
	if w.held < groupNumbers {
		return nil
	}
	w.held = 0
	return w.w.Flush()
}

// Close writes the metadata, syncs the file and gives it its name.
func (w *Writer) Close(m *Meta) (err error) {
	defer caught(&err)
	defer func() {
		if err != nil {
			w.Abort()
		}
	}()
	text, err := json.Marshal(m)
	if err != nil {
		return err
	}
	return w.finish(string(text))
}

func (w *Writer) finish(text string) error {
	if w.n > 0 {
		if err := w.flush(); err != nil {
			return err
		}
	}
	w.w.SetKeyValueMetadata(metaKey, text)
	w.w.SetKeyValueMetadata(hashKey, strings.Repeat("0", 2*sha256.Size))
	if err := w.w.Close(); err != nil {
		return err
	}
	at, ok := findHash(w.tee.tail)
	if !ok {
		return errors.New("digest: the footer has no place for the checksum")
	}
	digits := hex.EncodeToString(w.tee.hash.Sum(nil))
	if _, err := w.file.WriteAt([]byte(digits), w.tee.n-int64(len(w.tee.tail))+int64(at)); err != nil {
		return err
	}
	if err := w.file.Sync(); err != nil {
		return err
	}
	if err := w.file.Close(); err != nil {
		return err
	}
	if err := os.Rename(w.file.Name(), w.name); err != nil {
		return err
	}
	w.file = nil
	return syncDir(filepath.Dir(w.name))
}

// Abort removes what was written. It does nothing after Close.
func (w *Writer) Abort() {
	if w.file != nil {
		w.file.Close()
		os.Remove(w.file.Name())
		w.file = nil
	}
}

func syncDir(name string) error {
	d, err := os.Open(name)
	if err != nil {
		return nil // the file is there; a folder that cannot be opened cannot be synced
	}
	defer d.Close()
	d.Sync() // not every file system can
	return nil
}

// findHash finds the digits of the checksum in the end of a file: those that follow
// the last mention of their key.
func findHash(tail []byte) (int, bool) {
	at := bytes.LastIndex(tail, []byte(hashKey))
	if at < 0 {
		return 0, false
	}
	at += len(hashKey)
	for skip := range 8 { // the field's head and length
		if p := at + skip; p+2*sha256.Size <= len(tail) && hexDigits(tail[p:p+2*sha256.Size]) {
			return p, true
		}
	}
	return 0, false
}

func hexDigits(b []byte) bool {
	for _, c := range b {
		if (c < '0' || c > '9') && (c < 'a' || c > 'f') {
			return false
		}
	}
	return true
}

// caught turns a panic of the Parquet library into an error.
func caught(err *error) {
	if x := recover(); x != nil && *err == nil {
		*err = fmt.Errorf("internal error of the Parquet library: %v", x)
	}
}
