package accum

import (
	"bufio"
	"bytes"
	"crypto/rand"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"hash"
	"io"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
	"time"
)

// CheckpointEvery is the time between saves, if nothing else is said.
const CheckpointEvery = 30 * time.Second

// savingShare: saves stop the workers for at most about one part in so many of the time.
const savingShare = 20

// Checkpoint keeps the sums of finished segments in a file, so that a run that was
// stopped in whatever way can go on from there. Sums are exact, so it ends with the
// same bits as a run that was never stopped.
//
// The passes over an input follow from input and model alone; every one of them that
// is done stays in the file, with the sums so far of the one under way:
//
//	text     "tallrow-checkpoint/1\n"
//	bytes    sums of each pass (see archive)
//	JSON     facts, passes (see checkpointIndex)
//	uint64   length of the JSON, little-endian
//	32 bytes SHA-256 of all before
//
// Each save writes a new file beside it, syncs it and renames it. Only the owner can
// read it: keys of clusters stand in it as they are.
type Checkpoint struct {
	// Every is the least time between saves. Segments, if not 0, saves after so many
	// segments instead.
	Every    time.Duration
	Segments int
	// Warn learns of a save that failed; the run goes on, and the file before stays.
	Warn func(error)

	name   string
	index  checkpointIndex
	file   *os.File // the present one; nil if there is none
	passes int      // begun in this run
	cost   CheckpointCost
	next   atomic.Int64 // nanoseconds since begun at which the next save is due
	begun  time.Time
}

// CheckpointCost is what saving has cost.
type CheckpointCost struct {
	Saves int
	Bytes int64         // of the last one
	Pause time.Duration // the longest time for which workers had to wait for one
}

// Fact is something that must be the same when a run goes on.
type Fact struct {
	Name  string `json:"name"`
	Value string `json:"value"`
}

type checkpointIndex struct {
	Facts  []Fact      `json:"facts"`
	Passes []passIndex `json:"passes"`
}

type passIndex struct {
	Done     bool   `json:"done"`
	Sums     string `json:"sums"` // identifies what is summed, and in which frame
	Segments int64  `json:"segments"`
	Rows     int64  `json:"rows"`
	At       int64  `json:"at"`
	Bytes    int64  `json:"bytes"`
}

const checkpointMagic = "tallrow-checkpoint/1\n"

// CheckpointError says why a run cannot go on from a file, or cannot have one.
type CheckpointError struct {
	Path string
	What string
}

func (e *CheckpointError) Error() string { return "checkpoint " + e.Path + ": " + e.What }

const startAgain = "; delete it to start again"

// OpenCheckpoint prepares to save to a file of that name, and to go on from it if it
// is there. The facts must then be those that it was written with.
//
// Errors: *CheckpointError if a file is damaged, not a checkpoint, or that of another
// run, or no file can be made there.
func OpenCheckpoint(name string, facts []Fact) (*Checkpoint, error) {
	c := &Checkpoint{Every: CheckpointEvery, name: name, index: checkpointIndex{Facts: facts}, begun: time.Now()}
	f, err := os.Open(name)
	switch {
	case err == nil:
		if err := c.load(f); err != nil {
			f.Close()
			return nil, err
		}
		c.file = f
	case !errors.Is(err, os.ErrNotExist):
		return nil, c.fail("%s", plain(err))
	}
	// What a killed run has left beside it.
	left, _ := filepath.Glob(filepath.Join(escapeGlob(filepath.Dir(name)), escapeGlob("."+filepath.Base(name)+".")+"*.tmp"))
	for _, l := range left {
		os.Remove(l)
	}
	tmp, err := c.create()
	if err != nil {
		c.Close()
		return nil, c.fail("no file can be made there: %s", plain(err))
	}
	tmp.Close()
	os.Remove(tmp.Name())
	return c, nil
}

func (c *Checkpoint) fail(format string, args ...any) error {
	return &CheckpointError{c.name, fmt.Sprintf(format, args...)}
}

// plain takes the name of the file off an error of the system.
func plain(err error) string {
	var p *os.PathError
	if errors.As(err, &p) {
		return p.Err.Error()
	}
	return err.Error()
}

func escapeGlob(s string) string {
	var b strings.Builder
	for _, r := range s {
		if strings.ContainsRune(`*?[\`, r) {
			b.WriteByte('\\')
		}
		b.WriteRune(r)
	}
	return b.String()
}

// load checks a file and takes over its index.
func (c *Checkpoint) load(f *os.File) error {
	st, err := f.Stat()
	if err != nil {
		return c.fail("%s", plain(err))
	}
	if !st.Mode().IsRegular() {
		return c.fail("is not a plain file")
	}
	head := make([]byte, len(checkpointMagic))
	n, err := f.ReadAt(head, 0)
	if err != nil && !errors.Is(err, io.EOF) {
		return c.fail("%s", plain(err))
	}
	kind := checkpointMagic[:strings.Index(checkpointMagic, "/")+1]
	switch head = head[:n]; {
	case string(head) == checkpointMagic:
	case strings.HasPrefix(checkpointMagic, string(head)):
		return c.fail("damaged: it is cut short" + startAgain)
	case bytes.HasPrefix(head, []byte(kind)):
		return c.fail("was written by another version of the program" + startAgain)
	default:
		return c.fail("the file is no checkpoint; want another name, or a checkpoint of this run")
	}
	const trailer = 8 + sha256.Size
	body := st.Size() - trailer
	if body < int64(len(checkpointMagic)) {
		return c.fail("damaged: it is cut short" + startAgain)
	}
	end := make([]byte, trailer)
	if _, err := f.ReadAt(end, body); err != nil {
		return c.fail("%s", plain(err))
	}
	h := sha256.New()
	if _, err := io.Copy(h, io.NewSectionReader(f, 0, body+8)); err != nil {
		return c.fail("%s", plain(err))
	}
	size := binary.LittleEndian.Uint64(end)
	if !bytes.Equal(h.Sum(nil), end[8:]) || size > uint64(body) {
		return c.fail("damaged or cut short: its checksum does not fit" + startAgain)
	}
	text := make([]byte, size)
	var x checkpointIndex
	if _, err := f.ReadAt(text, body-int64(size)); err != nil {
		return c.fail("%s", plain(err))
	}
	if err := json.Unmarshal(text, &x); err != nil {
		return c.fail("damaged: %s"+startAgain, err)
	}
	if what := factsDiffer(x.Facts, c.index.Facts); what != "" {
		return c.fail("is of another run: %s; give the same as then, or delete it to start again", what)
	}
	for _, p := range x.Passes {
		if p.At < 0 || p.Bytes < 0 || p.At+p.Bytes > body {
			return c.fail("damaged: its passes are out of range" + startAgain)
		}
	}
	c.index = x
	return nil
}

// factsDiffer names the first fact that is not what it was.
func factsDiffer(then, now []Fact) string {
	is := map[string]string{}
	for _, f := range now {
		is[f.Name] = f.Value
	}
	was := map[string]bool{}
	for _, f := range then {
		was[f.Name] = true
		if v, ok := is[f.Name]; !ok {
			return fmt.Sprintf("%s (%s) is there no more", f.Name, f.Value)
		} else if v != f.Value {
			return fmt.Sprintf("%s was %s and is now %s", f.Name, f.Value, v)
		}
	}
	for _, f := range now {
		if !was[f.Name] {
			return fmt.Sprintf("%s (%s) is new", f.Name, f.Value)
		}
	}
	return ""
}

// Found says what was there when the checkpoint was opened: the number of the pass
// that goes on, from 1, with its segments and rows that are done. Pass 0 says that
// there was none.
func (c *Checkpoint) Found() (pass int, segments, rows int64) {
	if n := len(c.index.Passes); n > 0 {
		p := c.index.Passes[n-1]
		return n, p.Segments, p.Rows
	}
	return 0, 0, 0
}

// Cost is what saving has cost so far.
func (c *Checkpoint) Cost() CheckpointCost { return c.cost }

// Close frees what the checkpoint holds; the file stays. Not during a pass.
func (c *Checkpoint) Close() {
	if c.file != nil {
		c.file.Close()
		c.file = nil
	}
}

// Remove closes the checkpoint and removes its file: the run is done.
func (c *Checkpoint) Remove() error {
	c.Close()
	if err := os.Remove(c.name); err != nil && !errors.Is(err, os.ErrNotExist) {
		return c.fail("cannot be removed: %s", plain(err))
	}
	return nil
}

func (c *Checkpoint) create() (*os.File, error) {
	var id [8]byte
	if _, err := rand.Read(id[:]); err != nil {
		return nil, err
	}
	tmp := filepath.Join(filepath.Dir(c.name), "."+filepath.Base(c.name)+"."+hex.EncodeToString(id[:])+".tmp")
	return os.OpenFile(tmp, os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o600)
}

// hashed is a file with the hash of what was written.
type hashed struct {
	f *os.File
	h hash.Hash
	n int64
}

func (w *hashed) Write(b []byte) (int, error) {
	n, err := w.f.Write(b)
	w.h.Write(b[:n])
	w.n += int64(n)
	return n, err
}

func (k *saver) write(p *pass, last bool) (fatal, err error) {
	c := k.c
	f, err := c.create()
	if err != nil {
		return nil, err
	}
	kept := false
	defer func() {
		if !kept {
			f.Close()
			os.Remove(f.Name())
		}
	}()
	out := &hashed{f: f, h: sha256.New()}
	w := bufio.NewWriterSize(out, 1<<20)
	w.WriteString(checkpointMagic)
	x := checkpointIndex{Facts: c.index.Facts}
	here := func() int64 { return out.n + int64(w.Buffered()) }
	for _, q := range c.index.Passes[:min(k.number, len(c.index.Passes))] {
		at := here()
		if _, err := io.Copy(w, io.NewSectionReader(c.file, q.At, q.Bytes)); err != nil {
			return nil, err
		}
		q.At = at
		x.Passes = append(x.Passes, q)
	}
	if len(x.Passes) < k.number {
		return nil, fmt.Errorf("pass %d was not saved", len(x.Passes)+1)
	}
	start := time.Now()
	k.world.Lock()
	if k.spoiled.Load() {
		k.world.Unlock()
		return nil, nil // the run is about to end
	}
	q := passIndex{Done: last, Sums: k.sums, Segments: p.segments, Rows: p.read, At: here()}
	if fatal = k.join(); fatal == nil {
		a := &archive{w: w}
		a.pass(p)
		k.visit(a)
		err = a.err
	}
	k.world.Unlock()
	c.cost.Pause = max(c.cost.Pause, time.Since(start))
	if fatal != nil || err != nil {
		return fatal, err
	}
	q.Bytes = here() - q.At
	x.Passes = append(x.Passes, q)
	text, err := json.Marshal(x)
	if err != nil {
		return nil, err
	}
	w.Write(text)
	w.Write(binary.LittleEndian.AppendUint64(nil, uint64(len(text))))
	if err := w.Flush(); err != nil {
		return nil, err
	}
	if _, err := f.Write(out.h.Sum(nil)); err != nil {
		return nil, err
	}
	if err := f.Sync(); err != nil {
		return nil, err
	}
	if err := f.Close(); err != nil {
		return nil, err
	}
	c.Close() // not every system replaces an open file
	err = os.Rename(f.Name(), c.name)
	c.file, _ = os.Open(c.name) // of the save before if this one failed; passes are copied from there
	if err != nil {
		return nil, err
	}
	kept = true
	if d, err := os.Open(filepath.Dir(c.name)); err == nil {
		d.Sync() // not every file system can
		d.Close()
	}
	c.index = x
	c.cost.Saves++
	c.cost.Bytes = out.n + sha256.Size
	return nil, nil
}
