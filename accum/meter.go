package accum

import "sync/atomic"

// Meter shows how far a scan is. All fields may be read at any time.
type Meter struct {
	Rows  atomic.Int64 // rows read in the present pass
	Bytes atomic.Int64 // bytes read in the present pass, as stored
	Pass  atomic.Int32 // 1 or 2; 0 before the first
	Total atomic.Int64 // bytes of one pass, -1 if unknown
}
