package main

import (
	"fmt"
	"os"
	"sync"
	"time"

	"github.com/mattn/go-isatty"
	"github.com/schollz/progressbar/v3"

	"github.com/tallrow/tallrow/accum"
)

// pollEvery is how often progress is looked at.
const pollEvery = 200 * time.Millisecond

// progress knows how far the run is.
type progress struct{ meter *accum.Meter }

// watch follows the meter and, if standard error is a terminal, draws it. The
// returned function stops that and clears the line.
func (a *app) watch(s *settings, m *accum.Meter) (stop func()) {
	a.mu.Lock()
	a.progress = &progress{m}
	a.mu.Unlock()
	f, ok := a.stderr.(*os.File)
	if s.quiet || !ok || !isatty.IsTerminal(f.Fd()) {
		return func() {}
	}
	quit := make(chan struct{})
	var wg sync.WaitGroup
	wg.Go(func() {
		b := newBar(f)
		tick := time.NewTicker(pollEvery)
		defer tick.Stop()
		for {
			select {
			case <-quit:
				b.clear()
				return
			case <-tick.C:
				b.show(m, time.Now())
			}
		}
	})
	return a.onExit(func() { close(quit); wg.Wait() })
}

// bar draws one line: pass, rows, rows per second, share of the bytes, time
// left.
type bar struct {
	out   *os.File
	lib   *progressbar.ProgressBar
	pass  int32
	total int64
	start time.Time
}

func newBar(out *os.File) *bar { return &bar{out: out} }

func (b *bar) show(m *accum.Meter, now time.Time) {
	pass, total, rows, bytes := m.Pass.Load(), m.Total.Load(), m.Rows.Load(), m.Bytes.Load()
	if pass == 0 {
		return
	}
	if b.lib == nil || pass != b.pass || total != b.total {
		b.clear()
		b.pass, b.total, b.start = pass, total, now
		if total <= 0 {
			total = -1
		}
		b.lib = progressbar.NewOptions64(total,
			progressbar.OptionSetWriter(b.out),
			progressbar.OptionSetWidth(20),
			progressbar.OptionSetElapsedTime(total > 0),
			progressbar.OptionSetPredictTime(total > 0),
			progressbar.OptionThrottle(0),
			progressbar.OptionClearOnFinish(),
			progressbar.OptionSetTheme(progressbar.Theme{Saucer: "=", SaucerHead: ">", SaucerPadding: " ", BarStart: "[", BarEnd: "]"}))
	}
	b.lib.Describe(describe(pass, rows, now.Sub(b.start)))
	// The library finishes at its maximum; the pass is not over before the sums
	// are.
	if total > 0 {
		bytes = min(bytes, total-1)
	}
	if bytes >= 0 {
		_ = b.lib.Set64(bytes)
	}
}

func (b *bar) clear() {
	if b.lib != nil {
		_ = b.lib.Clear()
	}
}

func describe(pass int32, rows int64, took time.Duration) string {
	s := fmt.Sprintf("pass %d  %s rows", pass, count(rows))
	if sec := took.Seconds(); sec > 0.5 {
		s += fmt.Sprintf("  %s rows/s", rate(float64(rows)/sec))
	}
	return s
}

// howFar says where an interrupted run was.
func (a *app) howFar() string {
	a.mu.Lock()
	p, kept, jobs := a.progress, a.checkpoint, a.jobs
	a.mu.Unlock()
	if jobs != "" {
		return jobs
	}
	if p == nil {
		return " before reading began; nothing was written"
	}
	m := p.meter
	pass, rows, bytes, total := m.Pass.Load(), m.Rows.Load(), m.Bytes.Load(), m.Total.Load()
	if pass == 0 {
		return " before the first pass; nothing was written"
	}
	s := fmt.Sprintf(" in pass %d after %s", pass, plural(rows, "row", "rows"))
	if total > 0 {
		s += fmt.Sprintf(" (%s of the bytes)", percent(float64(min(bytes, total))/float64(total)))
	}
	if st, err := os.Stat(kept); kept != "" && err == nil && st.Size() > 0 {
		return s + "; no result was written; the same command goes on from " + kept
	}
	return s + "; nothing was written"
}
