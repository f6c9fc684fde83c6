package main

import (
	"context"
	"errors"
	"os"

	"github.com/spf13/cobra"

	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
)

func newPool(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "pool DIGEST... -o DIGEST",
		Short: "join digests: the parts of a run, the days of a month",
		Long: `The order does not matter, and digests that were joined can be joined again: the sums are exact. A part that is
there twice, digests of other models and inputs that overlap are refused; missing parts end with status 3.`,
		Example: `  tallrow pool part-*.digest -o whole.digest
  tallrow pool 2026-05/*.digest -o may.digest`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onPool)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onPool)
		if err != nil {
			return err
		}
		if err := s.needData(cmd); err != nil {
			return err
		}
		if err := s.needOutput("joined digest"); err != nil {
			return err
		}
		m, err := a.pool(cmd.Context(), s)
		if m != nil && (err == nil || s.json) {
			if err := a.tellDigest(s, m); err != nil {
				return err
			}
		}
		return err
	}
	return cmd
}

// pool joins digests. With an incomplete run it returns what is there and a
// *digest.MissingError.
func (a *app) pool(ctx context.Context, s *settings) (*made, error) {
	names, err := digestsAmong(ctx, s.data, false)
	if err != nil {
		return nil, err
	}
	if len(names) == 0 {
		if _, err := stream.ListFiles(ctx, s.data); err != nil {
			return nil, err
		}
		return nil, stream.Usef("%s: is no digest; pool joins what tallrow digest has made", s.data[0])
	}
	if out, err := os.Stat(s.output); err == nil {
		for _, n := range names {
			if in, err := os.Stat(n); err == nil && os.SameFile(in, out) {
				return nil, stream.Usef("%s %s: would write over one of the digests", s.origin("output"), s.output)
			}
		}
	}
	rs, _, shut, err := a.openDigests(ctx, s, names)
	if err != nil {
		return nil, err
	}
	defer shut()
	p, err := digest.NewPool(rs)
	if err != nil {
		return nil, err
	}
	if err := p.Complete(); err != nil && !s.partial {
		m := describeDigest(p.Meta, "", 0)
		m.Digests = len(names)
		return m, err
	}
	size, err := a.writePool(ctx, p, s.output)
	if err != nil {
		return nil, err
	}
	m := describeDigest(p.Meta, s.output, size)
	m.Digests = len(names)
	return m, nil
}

// incomplete reports whether parts are missing.
func incomplete(err error) bool {
	var m *digest.MissingError
	var l *lostParts
	return errors.As(err, &m) || errors.As(err, &l)
}

// writePool writes a pool to a new digest and returns its size.
func (a *app) writePool(ctx context.Context, p *digest.Pool, name string) (int64, error) {
	w, err := digest.Create(name)
	if err != nil {
		return 0, writing(name, err)
	}
	defer a.onExit(w.Abort)()
	for n := 0; ; n++ {
		if n%4096 == 0 && ctx.Err() != nil {
			return 0, ctx.Err()
		}
		r, err := p.Next()
		if err != nil {
			return 0, err
		}
		if r == nil {
			break
		}
		if err := w.Write(r); err != nil {
			return 0, writing(name, err)
		}
	}
	if err := w.Close(p.Meta); err != nil {
		return 0, writing(name, err)
	}
	st, err := os.Stat(name)
	if err != nil {
		return 0, err
	}
	return st.Size(), nil
}
