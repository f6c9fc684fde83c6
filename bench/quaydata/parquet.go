package quaydata

import (
	"context"
	"io"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
)

// groupRows is a common length of row groups, 240 batches.
const groupRows = 122_880

// WriteParquet writes all rows to w as Parquet with snappy compression, row
// groups of 122,880 rows and pages of at most 1 MiB. It calls progress, if not
// nil, with the number of rows written so far, and stops when ctx is done.
//
// Rows are made by another goroutine while earlier ones are written.
func (d *Data) WriteParquet(ctx context.Context, w io.Writer, progress func(rows int64)) error {
	var cols []columnar.WriteColumn
	for j, c := range d.Schema().Columns {
		cols = append(cols, columnar.WriteColumn{Name: c.Name, Kind: c.Kind, Optional: j == ColTonnes || j == ColCrew})
	}
	out, err := columnar.NewWriter(w, cols, columnar.WriterOptions{RowsPerGroup: groupRows})
	if err != nil {
		return err
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	free, full := make(chan *stream.Batch, 2), make(chan *stream.Batch)
	for range cap(free) {
		free <- new(stream.Batch)
	}
	go func() {
		defer close(full)
		for at := int64(0); at < d.Rows(); {
			select {
			case <-ctx.Done():
				return
			case b := <-free:
				at += int64(d.Fill(b, at, 16*stream.BatchRows))
				select {
				case <-ctx.Done():
					return
				case full <- b:
				}
			}
		}
	}()
	done := int64(0)
	for b := range full {
		if err := out.WriteColumns(b.Rows, b.Cols); err != nil {
			return err
		}
		done += int64(b.Rows)
		if progress != nil {
			progress(done)
		}
		free <- b
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	return out.Close()
}
