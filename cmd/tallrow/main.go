package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"runtime/debug"
	"sync"
	"syscall"
	"time"

	"github.com/tallrow/tallrow/vcov"
)

// version is written into results and shown by --version.
const version = vcov.Version

// Exit statuses.
const (
	exitDone       = 0
	exitFailed     = 1
	exitUse        = 2
	exitIncomplete = 3 // parts are missing
)

// grace is how long a cancelled run may take to stop by itself: a read of a
// silent pipe cannot be woken.
const grace = 300 * time.Millisecond

func main() {
	ctx, stop := withSignals(context.Background())
	code := run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// interrupt is the cause of a cancelled context.
type interrupt struct{ sig syscall.Signal }

func (e interrupt) Error() string {
	switch e.sig {
	case syscall.SIGINT:
		return "interrupted"
	case syscall.SIGTERM:
		return "terminated"
	}
	return "stopped by signal " + e.sig.String()
}

func (e interrupt) code() int { return 128 + int(e.sig) }

// withSignals cancels the context at the first signal that asks to stop.
func withSignals(parent context.Context) (context.Context, func()) {
	ctx, cancel := context.WithCancelCause(parent)
	ch := make(chan os.Signal, 1)
	signal.Notify(ch, syscall.SIGINT, syscall.SIGTERM, syscall.SIGHUP)
	go func() {
		if s, ok := <-ch; ok {
			if sig, ok := s.(syscall.Signal); ok {
				cancel(interrupt{sig})
			}
		}
	}()
	return ctx, func() { signal.Stop(ch); cancel(nil) }
}

// run executes one command line and returns the exit status. It returns within
// the grace time after ctx is cancelled, also if a read hangs.
func run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	in, ok := stdin.(io.ReadCloser)
	if !ok {
		in = io.NopCloser(stdin)
	}
	a := &app{stdin: in, stdout: stdout, stderr: stderr}
	done := make(chan error, 1)
	go func() {
		defer func() {
			if v := recover(); v != nil {
				done <- a.internal(v, debug.Stack())
			}
		}()
		done <- a.execute(ctx, args)
	}()
	var err error
	select {
	case err = <-done:
	case <-ctx.Done():
		select {
		case err = <-done:
		case <-time.After(grace):
			err = context.Cause(ctx)
		}
	}
	a.cleanup()
	if err == nil {
		return exitDone
	}
	// A run that was cut short may report any follow-up error; what the user
	// did comes first.
	if cause := context.Cause(ctx); cause != nil {
		var in interrupt
		if errors.As(cause, &in) {
			a.complain(in.Error() + a.howFar())
			return in.code()
		}
	}
	a.complain(oneLine(err.Error()))
	return exitCode(err)
}

// app is one run of the program.
type app struct {
	stdin          io.ReadCloser
	stdout, stderr io.Writer

	mu       sync.Mutex
	quit     bool     // cleaned up: nothing may be registered any more
	cleaners []func() // last registered first
	progress *progress
	jobs     string // what goes on elsewhere when this run is cut short

	checkpoint string // its file; "" without one
}

// onExit registers f to run once when the run ends, however it ends. The
// returned function runs it earlier.
func (a *app) onExit(f func()) func() {
	once := sync.OnceFunc(f)
	a.mu.Lock()
	quit := a.quit
	if !quit {
		a.cleaners = append(a.cleaners, once)
	}
	a.mu.Unlock()
	if quit {
		once()
	}
	return once
}

func (a *app) cleanup() {
	a.mu.Lock()
	list := a.cleaners
	a.cleaners, a.quit = nil, true
	a.mu.Unlock()
	for i := len(list) - 1; i >= 0; i-- {
		list[i]()
	}
}

func (a *app) complain(text string) { fmt.Fprintf(a.stderr, "tallrow: %s\n", text) }

// internalError is a defect of the program, never a fault of the data.
type internalError struct{ what string }

func (e *internalError) Error() string {
	return "internal error: " + e.what + "; this is a defect of tallrow, not of your data (TALLROW_TRACE=1 shows where)"
}

func (a *app) internal(v any, stack []byte) error {
	if os.Getenv("TALLROW_TRACE") != "" {
		fmt.Fprintf(a.stderr, "%s\n", stack)
	}
	return &internalError{oneLine(fmt.Sprint(v))}
}
