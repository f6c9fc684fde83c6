package accum

import (
	"encoding/binary"
	"errors"
	"hash/crc32"
	"math"
	"math/bits"
	"slices"
	"sync"
	"unsafe"
)

// A run is the sums of keys in order of key in a scratch file, in blocks:
//
//	uint32  bytes of the payload
//	uint32  CRC-32C of the payload
//	uint32  number of keys
//	payload
//
// The payload has, for each key, the key (what it adds to the key before, uvarint,
// from 0 in each block; a text as length, uvarint, and bytes), the number of rows
// (uvarint) and the sums (see appendFixed). All numbers are little-endian.
type run struct {
	store  *groupStore
	file   *runFile
	blocks []int64 // where they start; the end last
	keys   int64
}

// runFile holds the runs of a store since they were last merged.
type runFile struct {
	scratchFile
	runs int // still open
	end  int64
}

const (
	blockHead    = 12
	blockTarget  = 128 << 10 // of decoded sums
	blockMost    = 2048      // keys
	maxRuns      = 64        // of a store, before they are merged
	runKeyBytes  = 8         // of a key, roughly, for what is said of a full disk
	runSumsBytes = 9
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

func (s *groupStore) blockKeys() int { return min(max(1, blockTarget/(16*s.rec())), blockMost) }

// spill writes all keys in memory to a new run and forgets them.
func (s *groupStore) spill() error {
	if len(s.runs) == maxRuns {
		if err := s.compact(); err != nil {
			return err
		}
	}
	refs := s.sorted()
	w, err := s.newRun(int64(len(refs)))
	if err != nil {
		return err
	}
	per := s.blockKeys()
	blocks := (len(refs) + per - 1) / per
	// Blocks are packed by several goroutines and written in order.
	workers := min(s.pool.workers, blocks)
	type packed struct{ out chan []byte }
	lanes := make([]packed, workers)
	stop := make(chan struct{})
	var wg sync.WaitGroup
	for l := range lanes {
		lanes[l].out = make(chan []byte, 2)
		wg.Go(func() {
			var free [4][]byte
			for i, b := 0, l; b < blocks; i, b = i+1, b+workers {
				// The receiver is done with a buffer once it takes the one after the next.
				buf := s.pack(free[i%4][:0], refs[b*per:min((b+1)*per, len(refs))])
				free[i%4] = buf
				select {
				case lanes[l].out <- buf:
				case <-stop:
					return
				}
			}
		})
	}
	for b := 0; b < blocks && err == nil; b++ {
		err = w.write(<-lanes[b%workers].out)
	}
	close(stop)
	wg.Wait()
	if err != nil {
		w.close()
		return err
	}
	s.runs = append(s.runs, w)
	var freed int64
	for p := range s.tables {
		freed += s.tables[p].empty(s)
	}
	s.keys.Store(0)
	s.texts.Store(0)
	s.pool.held.Add(-freed)
	return nil
}

// compact merges all runs into one, so that few are open at a time.
func (s *groupStore) compact() error {
	s.file = nil
	w, err := s.newRun(0)
	if err != nil {
		return err
	}
	var e blockEncoder
	err = mergeRuns(s.runs, func(parts []groupPart) error {
		g := parts[0].groupSums
		for _, p := range parts[1:] {
			g.rows += p.rows
			mergeSums(g.sums, p.sums, s.owners)
		}
		e.add(&g, s.text)
		w.keys++
		if e.keys == s.blockKeys() {
			return w.write(e.end())
		}
		return nil
	})
	if err == nil && e.keys > 0 {
		err = w.write(e.end())
	}
	if err != nil {
		w.close()
		return err
	}
	s.closeRuns()
	s.runs, s.file = append(s.runs, w), w.file
	return nil
}

func (s *groupStore) newRun(keys int64) (*run, error) {
	sc := s.pool.scratch
	r := &run{store: s, keys: keys}
	if s.file == nil {
		f, err := sc.create(sc.dir)
		if err != nil {
			return nil, r.failed(err)
		}
		s.file = &runFile{scratchFile: f}
	}
	r.file = s.file
	r.file.runs++
	r.blocks = append(r.blocks, r.file.end)
	sc.meter.Runs.Add(1)
	return r, nil
}

func (r *run) failed(err error) error {
	sc := r.store.pool.scratch
	return &ScratchError{Dir: sc.dir, Err: err,
		Need: max(sc.live.Load()+r.keys*int64(runKeyBytes+runSumsBytes*r.store.width), 1<<10)}
}

func (r *run) write(block []byte) error {
	if _, err := r.file.Write(block); err != nil {
		return r.failed(err)
	}
	n := int64(len(block))
	r.file.end += n
	r.blocks = append(r.blocks, r.file.end)
	sc := r.store.pool.scratch
	sc.meter.Spilled.Add(n)
	sc.live.Add(n)
	return nil
}

func (r *run) size() int64 { return r.blocks[len(r.blocks)-1] - r.blocks[0] }

func (r *run) close() {
	if r.file.runs--; r.file.runs == 0 {
		r.file.Close()
	}
	r.store.pool.scratch.live.Add(-r.size())
}

func (s *groupStore) closeRuns() {
	for _, r := range s.runs {
		r.close()
	}
	s.runs, s.file = nil, nil
}

// pack encodes the sums of refs as a block.
func (s *groupStore) pack(dst []byte, refs []ref) []byte {
	e := blockEncoder{buf: dst}
	var g groupSums
	for i, r := range refs {
		if i%warmRecs == 0 {
			s.warm(refs[i:min(i+warmRecs, len(refs))])
		}
		s.read(r, &g)
		e.add(&g, s.text)
	}
	return e.end()
}

// read fills g with a record; the sums are those of the record.
func (s *groupStore) read(r ref, g *groupSums) {
	t, rec := s.record(r)
	g.ord = r.ord
	if s.text {
		g.text = t.str(rec)
		g.ord = prefix(g.text)
	}
	g.rows, g.sums = rec[0].hi, rec[s.head:]
}

// blockEncoder makes blocks; the zero value is ready.
type blockEncoder struct {
	buf  []byte
	keys int
	last uint64
}

func (e *blockEncoder) add(g *groupSums, text bool) {
	if e.keys == 0 {
		e.buf = append(e.buf[:0], make([]byte, blockHead)...)
		e.last = 0
	}
	e.keys++
	if text {
		e.buf = binary.AppendUvarint(e.buf, uint64(len(g.text)))
		e.buf = append(e.buf, g.text...)
	} else {
		e.buf = binary.AppendUvarint(e.buf, g.ord-e.last)
		e.last = g.ord
	}
	e.buf = binary.AppendUvarint(e.buf, uint64(g.rows))
	e.buf = appendFixed(e.buf, g.sums)
}

// end returns the block; it is valid until the next add.
func (e *blockEncoder) end() []byte {
	p := e.buf[blockHead:]
	binary.LittleEndian.PutUint32(e.buf, uint32(len(p)))
	binary.LittleEndian.PutUint32(e.buf[4:], crc32.Checksum(p, castagnoli))
	binary.LittleEndian.PutUint32(e.buf[8:], uint32(e.keys))
	e.keys = 0
	return e.buf
}

const wholeFixed = 0xff

// appendFixed appends numbers, each without its zero bytes at the end and its sign
// bytes in front: a byte with the number of the former in the high half and of the
// bytes that follow in the low half; wholeFixed before all 16 bytes.
func appendFixed(dst []byte, fs []fixed) []byte {
	at := len(dst)
	dst = slices.Grow(dst, 17*len(fs))
	dst = dst[:at+17*len(fs)]
	for _, f := range fs {
		zeros := 0
		switch {
		case f.lo != 0:
			zeros = bits.TrailingZeros64(f.lo) / 8
		case f.hi != 0:
			zeros = 8 + bits.TrailingZeros64(uint64(f.hi))/8
		}
		x, top := f.shiftRight(uint(8 * zeros))
		p := dst[at : at+17]
		if top != int64(x)>>63 {
			p[0] = wholeFixed
			binary.LittleEndian.PutUint64(p[1:], f.lo)
			binary.LittleEndian.PutUint64(p[9:], uint64(f.hi))
			at += 17
			continue
		}
		n := (bits.Len64(x^uint64(int64(x)>>63)) + 8) / 8 // one bit more for the sign
		if x == 0 {
			n = 0
		}
		p[0] = byte(zeros<<4 | n)
		binary.LittleEndian.PutUint64(p[1:], x)
		at += 1 + n
	}
	return dst[:at]
}

// shiftRight returns the low and high half of f shifted by s < 128.
func (f fixed) shiftRight(s uint) (lo uint64, hi int64) {
	if s >= 64 {
		return uint64(f.hi >> (s - 64)), f.hi >> 63
	}
	return f.lo>>s | uint64(f.hi)<<1<<(63-s), f.hi >> s
}

// readFixed reads a number from p, which has 16 bytes or more beyond it, and
// returns how many bytes it took.
func readFixed(p []byte) (fixed, int) {
	if p[0] == wholeFixed {
		return fixed{int64(binary.LittleEndian.Uint64(p[9:])), binary.LittleEndian.Uint64(p[1:])}, 17
	}
	zeros, n := uint(p[0]>>4)*8, uint(p[0]&15)
	if n == 0 || n > 8 {
		return fixed{}, 1 + int(n)
	}
	x := int64(binary.LittleEndian.Uint64(p[1:])<<(64-8*n)) >> (64 - 8*n)
	var f fixed
	if zeros >= 64 {
		f.hi = x << (zeros - 64)
	} else {
		f.lo = uint64(x) << zeros
		f.hi = x >> 1 >> (63 - zeros)
	}
	return f, 1 + int(n)
}

var errShort = errors.New("accum: a block of sums ends early")

// block is decoded sums.
type block struct {
	raw  []byte
	sums []fixed
	recs []groupSums
	err  error
}

const readSlack = 32

// load reads block i of a run.
func (b *block) load(r *run, i int) error {
	at := r.blocks[i]
	n := int(r.blocks[i+1] - at)
	b.raw = grown(b.raw, 0, n+readSlack, 0)
	clear(b.raw[n:])
	if _, err := r.file.ReadAt(b.raw[:n], at); err != nil {
		return r.failed(err)
	}
	p := b.raw[blockHead:n]
	if int(binary.LittleEndian.Uint32(b.raw)) != len(p) || binary.LittleEndian.Uint32(b.raw[4:]) != crc32.Checksum(p, castagnoli) {
		return &DamageError{r.store.pool.scratch.dir, at}
	}
	keys, w := int(binary.LittleEndian.Uint32(b.raw[8:])), r.store.width
	if keys > len(p) || b.decode(r.store, b.raw[blockHead:], len(p), keys, w) != nil {
		return &DamageError{r.store.pool.scratch.dir, at}
	}
	return nil
}

// decode reads keys from p[:n]; what follows is slack.
func (b *block) decode(s *groupStore, p []byte, n, keys, w int) error {
	b.sums = grown(b.sums, 0, keys*w, 0)
	b.recs = grown(b.recs, 0, keys, 0)
	var ord uint64
	at := 0
	for k := range b.recs {
		g := &b.recs[k]
		x, m := binary.Uvarint(p[at:n])
		if m <= 0 {
			return errShort
		}
		at += m
		if s.text {
			if x > uint64(n-at) {
				return errShort
			}
			g.text = unsafe.String(unsafe.SliceData(p[at:]), int(x))
			g.ord = prefix(g.text)
			at += int(x)
		} else {
			ord += x
			g.ord = ord
		}
		x, m = binary.Uvarint(p[at:n])
		if m <= 0 || x > math.MaxInt64 {
			return errShort
		}
		at += m
		g.rows = int64(x)
		g.sums = b.sums[k*w : (k+1)*w]
		for i := range g.sums {
			if at >= n {
				return errShort
			}
			var m int
			g.sums[i], m = readFixed(p[at:])
			at += m
		}
	}
	if at != n {
		return errShort
	}
	return nil
}
