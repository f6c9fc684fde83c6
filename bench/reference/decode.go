package reference

import (
	"context"
	"errors"
	"io"
	"sync/atomic"

	"golang.org/x/sync/errgroup"

	"github.com/tallrow/tallrow/stream"
)

// Decode reads the columns in uses to their end with that many goroutines,
// does nothing with them but call each, if not nil, with every batch, and
// returns the number of rows. worker counts from 0; batches of one worker come
// one after another.
func Decode(ctx context.Context, src stream.Source, uses []stream.Use, workers int, each func(worker int, b *stream.Batch)) (rows int64, err error) {
	scan, err := src.Scan(ctx, uses)
	if err != nil {
		return 0, err
	}
	defer func() { err = errors.Join(err, scan.Close()) }()
	var total atomic.Int64
	g, ctx := errgroup.WithContext(ctx)
	for w := range workers {
		g.Go(func() error {
			var b stream.Batch
			for {
				seg, err := scan.Next(ctx)
				if errors.Is(err, io.EOF) {
					return nil
				}
				if err != nil {
					return err
				}
				n, err := drain(seg, &b, w, each)
				total.Add(n)
				if err := errors.Join(err, seg.Close()); err != nil {
					return err
				}
			}
		})
	}
	err = g.Wait()
	return total.Load(), err
}

func drain(seg stream.Segment, b *stream.Batch, worker int, each func(int, *stream.Batch)) (rows int64, err error) {
	for {
		err := seg.Read(b)
		if errors.Is(err, io.EOF) {
			return rows, nil
		}
		if err != nil {
			return rows, err
		}
		rows += int64(b.Rows)
		if each != nil {
			each(worker, b)
		}
	}
}
