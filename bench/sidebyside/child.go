package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"time"
)

// measured is what a process cost.
type measured struct {
	wall, cpu float64 // seconds
	peak      int64   // bytes, 0 if unknown
	out       []byte
}

// runChild runs a command, confined to that many processors if there are more
// (0 for no bound), with env added to the environment.
//
// Linux starts the peak of a process at the peak of the one that started it, so
// this program keeps nothing large in memory: it makes data in children, too.
func runChild(ctx context.Context, processors int, env []string, argv ...string) (m measured, err error) {
	cmd := exec.CommandContext(ctx, argv[0], argv[1:]...)
	var out, errw bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &errw
	cmd.Env = append(os.Environ(), env...)
	cmd.WaitDelay = 10 * time.Second
	start := time.Now()
	if err := startConfined(cmd, processors); err != nil {
		return m, err
	}
	err = cmd.Wait()
	m.wall = time.Since(start).Seconds()
	if st := cmd.ProcessState; st != nil {
		m.cpu = (st.UserTime() + st.SystemTime()).Seconds()
		m.peak = peakOf(st)
	}
	m.out = out.Bytes()
	if err != nil {
		if ctx.Err() != nil {
			return m, context.Cause(ctx)
		}
		return m, &failure{filepath.Base(argv[0]), err, tail(errw.String())}
	}
	return m, nil
}

// failure is a process that ended badly.
type failure struct {
	program string
	err     error
	said    string
}

func (f *failure) Error() string {
	if f.said == "" {
		return fmt.Sprintf("%s: %v", f.program, f.err)
	}
	return fmt.Sprintf("%s: %v: %s", f.program, f.err, f.said)
}

func (f *failure) Unwrap() error { return f.err }

func tail(s string) string {
	const most = 600
	s = strings.Join(strings.Fields(s), " ")
	if len(s) > most {
		s = "... " + s[len(s)-most:]
	}
	return s
}

// readAnswer takes the JSON that the parts of this program and the scripts
// print.
func readAnswer(m measured) (answer, error) {
	var a answer
	if err := json.Unmarshal(m.out, &a); err != nil {
		return a, fmt.Errorf("the answer: %w", err)
	}
	return a, nil
}

// readFit takes the JSON of tallrow fit. Its own time is the whole process but
// for the start: opening the file is in it, and also leaving the process. It is not
// less than what the fit itself took.
func readFit(startup float64) func(measured) (answer, error) {
	return func(m measured) (answer, error) {
		var r struct {
			Rows struct {
				Read int64 `json:"read"`
			} `json:"rows"`
			Estimates []float64 `json:"estimates"`
			Errors    []struct {
				Kind   string    `json:"kind"`
				Status string    `json:"status"`
				Reason *string   `json:"reason"`
				Groups []int64   `json:"groups"`
				SE     []float64 `json:"se"`
			} `json:"errors"`
			Run map[string]any `json:"run"`
		}
		var a answer
		if err := json.Unmarshal(m.out, &r); err != nil {
			return a, fmt.Errorf("the answer: %w", err)
		}
		if len(r.Errors) != 1 {
			return a, fmt.Errorf("%d kinds of errors, want 1", len(r.Errors))
		}
		e := r.Errors[0]
		if e.Status != "ok" {
			reason := "no reason given"
			if e.Reason != nil {
				reason = *e.Reason
			}
			return a, errors.New(e.Kind + " is " + e.Status + ": " + reason)
		}
		a = answer{Seconds: m.wall - startup, Rows: r.Rows.Read, Beta: r.Estimates, SE: e.SE, Notes: map[string]any{}}
		if fitted, ok := r.Run["seconds"].(float64); ok && a.Seconds < fitted {
			a.Seconds = fitted // a start that was faster than usual
		}
		for key, v := range r.Run {
			switch key {
			case "workers", "peak_bytes", "condition", "bytes": // known, or measured outside
			case "seconds":
				a.Notes["fit_seconds"] = v
			default:
				a.Notes[key] = v
			}
		}
		if len(e.Groups) > 0 {
			a.Notes["groups"] = e.Groups[0]
		}
		return a, nil
	}
}
