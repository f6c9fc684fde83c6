package main

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"slices"

	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
)

// digestsAmong lists the files that data name if they are digests. Digests and data
// together are an error. model says that the options name an outcome: then files that
// are not there are told of later.
func digestsAmong(ctx context.Context, data []string, model bool) ([]string, error) {
	if slices.Contains(data, "-") {
		return nil, nil
	}
	list, err := stream.ListFiles(ctx, data)
	if err != nil {
		if !model {
			return nil, err
		}
		return nil, nil // told when the data are opened, after the options
	}
	var out []string
	other := ""
	for _, f := range list {
		if f.Size >= 0 && digest.Is(f.Path) {
			out = append(out, f.Path)
		} else if other == "" {
			other = f.Path
		}
	}
	if len(out) > 0 && other != "" {
		return nil, stream.Usef("%s is a digest and %s is not; want either digests or data", out[0], other)
	}
	return out, nil
}

// refuseDigests is for commands that read data; instead says what takes digests.
func refuseDigests(ctx context.Context, data []string, instead string) error {
	names, err := digestsAmong(ctx, data, true)
	if err == nil && len(names) > 0 {
		err = stream.Usef("%s: is a digest, want data; what %s", names[0], instead)
	}
	return err
}

// poolMost is how many digests are open at a time: each holds a page of every column.
const poolMost = 128

// openDigests opens digests; shut closes them. Beyond poolMost, groups of them are
// joined in scratch first, which shows in no sum. ones are the names of those of first
// rounds.
func (a *app) openDigests(ctx context.Context, s *settings, names []string) (rs []*digest.Reader, ones []string, shut func(), err error) {
	var open []*digest.Reader
	shut = func() {
		for _, r := range open {
			r.Close()
		}
	}
	failed := func(err error) ([]*digest.Reader, []string, func(), error) {
		shut()
		return nil, nil, nil, err
	}
	grouped := len(names) > poolMost
	if grouped {
		if names, ones, err = a.joinGroups(ctx, s, names); err != nil {
			return failed(err)
		}
	}
	for _, n := range names {
		r, err := digest.Open(n)
		if err != nil {
			return failed(digestError(n, err))
		}
		open = append(open, r)
		if !grouped && r.Meta.Second == nil {
			ones = append(ones, n)
		}
	}
	return open, ones, shut, nil
}

// joinGroups joins groups of digests of one round each, and names what came of them and
// those of first rounds.
func (a *app) joinGroups(ctx context.Context, s *settings, names []string) (out, ones []string, err error) {
	// What does not go together is told by its own name.
	var all [2][]*digest.Reader
	for _, n := range names {
		if ctx.Err() != nil {
			return nil, nil, ctx.Err()
		}
		r, err := digest.Open(n)
		if err != nil {
			return nil, nil, digestError(n, err)
		}
		r.Close()
		round := 1
		if r.Meta.Second == nil {
			round = 0
			ones = append(ones, n)
		}
		all[round] = append(all[round], &digest.Reader{Path: r.Path, Meta: digest.Meta{Version: r.Meta.Version, Model: r.Meta.Model, Runs: r.Meta.Runs, Second: r.Meta.Second}})
	}
	dir, err := a.scratchFolder(s)
	if err != nil {
		return nil, nil, err
	}
	for _, list := range all {
		if len(list) == 0 {
			continue
		}
		if _, err := digest.Together(list); err != nil {
			return nil, nil, err
		}
		for len(list) > 0 {
			n := min(len(list), poolMost)
			var group []string
			for _, r := range list[:n] {
				group = append(group, r.Path)
			}
			list = list[n:]
			name := filepath.Join(dir, fmt.Sprintf("group-%d.digest", len(out)))
			if err := a.joinOne(ctx, s, group, name); err != nil {
				return nil, nil, err
			}
			out = append(out, name)
		}
	}
	if len(out) > poolMost {
		out, _, err = a.joinGroups(ctx, s, out)
		return out, ones, err
	}
	return out, ones, nil
}

func (a *app) joinOne(ctx context.Context, s *settings, names []string, to string) error {
	rs, _, shut, err := a.openDigests(ctx, s, names)
	if err != nil {
		return err
	}
	defer shut()
	p, err := digest.NewPool(rs)
	if err != nil {
		return err
	}
	_, err = a.writePool(ctx, p, to)
	return err
}

// digestError puts the name of a file before an error that has none.
func digestError(name string, err error) error {
	var damage *digest.DamageError
	var newer *digest.VersionError
	if errors.As(err, &damage) || errors.As(err, &newer) {
		return err
	}
	return fmt.Errorf("%s: %s", name, plainPathError(err))
}
