package quaydata

import (
	"bufio"
	"context"
	"io"
	"math"
	"strconv"
	"time"

	"github.com/tallrow/tallrow/stream"
)

// WriteCSV writes all rows to w as comma-separated text with a header line;
// missing cells are empty, times have no zone. It calls progress, if not nil,
// with the number of rows written so far, and stops when ctx is done.
func (d *Data) WriteCSV(ctx context.Context, w io.Writer, progress func(rows int64)) error {
	out := bufio.NewWriterSize(w, 1<<18)
	cols := d.Schema().Columns
	var line []byte
	for j, c := range cols {
		if j > 0 {
			line = append(line, ',')
		}
		line = append(line, c.Name...)
	}
	if _, err := out.Write(append(line, '\n')); err != nil {
		return err
	}
	var b stream.Batch
	for at := int64(0); at < d.Rows(); {
		if err := ctx.Err(); err != nil {
			return err
		}
		n := d.Fill(&b, at, 16*stream.BatchRows)
		for i := range n {
			line = line[:0]
			for j := range b.Cols {
				if j > 0 {
					line = append(line, ',')
				}
				line = appendCell(line, &b.Cols[j], i)
			}
			if _, err := out.Write(append(line, '\n')); err != nil {
				return err
			}
		}
		at += int64(n)
		if progress != nil {
			progress(at)
		}
	}
	return out.Flush()
}

func appendCell(dst []byte, v *stream.Vector, i int) []byte {
	if v.Null != nil && v.Null[i] {
		return dst
	}
	switch v.Kind {
	case stream.Float64:
		if math.IsNaN(v.F64[i]) {
			return dst
		}
		return strconv.AppendFloat(dst, v.F64[i], 'f', -1, 64)
	case stream.Bool:
		return strconv.AppendBool(dst, v.I64[i] != 0)
	case stream.Time:
		return time.Unix(0, v.I64[i]).UTC().AppendFormat(dst, "2006-01-02T15:04:05")
	case stream.Text:
		return append(dst, v.Dict.Values[v.Code[i]]...)
	}
	return strconv.AppendInt(dst, v.I64[i], 10)
}
