package bench

import (
	"context"
	"errors"
	"io"
	"os"
	"path/filepath"
	"sync"
	"testing"

	"github.com/tallrow/tallrow/bench/quaydata"
	"github.com/tallrow/tallrow/bench/reference"
	"github.com/tallrow/tallrow/stream"
)

// measuredRows is the length of the files that benchmarks read.
const measuredRows = 500_000

// dataset is the same rows as files and, once asked for, in memory.
type dataset struct {
	rows  int64
	files map[string]string // by format
	sizes map[string]int64
	gen   *quaydata.Data
	table func() *reference.Table
}

// newDataset writes rows of unloading times into dir.
func newDataset(ctx context.Context, dir string, rows int64) (*dataset, error) {
	gen, err := quaydata.New(quaydata.Config{Rows: rows})
	if err != nil {
		return nil, err
	}
	d := &dataset{rows: rows, files: map[string]string{}, sizes: map[string]int64{}, gen: gen}
	d.table = sync.OnceValue(func() *reference.Table { return loadTable(gen) })
	for format, write := range map[string]func(context.Context, io.Writer, func(int64)) error{
		"csv": gen.WriteCSV, "parquet": gen.WriteParquet,
	} {
		name := filepath.Join(dir, "unloading."+format)
		f, err := os.Create(name)
		if err != nil {
			return nil, err
		}
		if err := errors.Join(write(ctx, f, nil), f.Close()); err != nil {
			return nil, err
		}
		st, err := os.Stat(name)
		if err != nil {
			return nil, err
		}
		d.files[format], d.sizes[format] = name, st.Size()
	}
	return d, nil
}

// shared is the folder of the files that all benchmarks of a process read.
var shared string

var measured = sync.OnceValues(func() (*dataset, error) {
	var err error
	if shared, err = os.MkdirTemp("", "tallrow-bench-"); err != nil {
		return nil, err
	}
	return newDataset(context.Background(), shared, measuredRows)
})

func TestMain(m *testing.M) {
	m.Run()
	if shared != "" {
		os.RemoveAll(shared)
	}
}

// dense are the columns of the model in the order of quaydata, the outcome last.
var dense = []int{quaydata.ColPallets, quaydata.ColTonnes, quaydata.ColCrew, quaydata.ColWet, quaydata.ColNight, quaydata.ColMinutes}

// withProducts has the products of more as further terms.
func withProducts(t *reference.Table) *reference.Table {
	last := len(t.Cols) - 1
	cols := append([][]float64(nil), t.Cols[:last]...)
	for _, f := range [][2]int{{1, 4}, {2, 5}, {1, 3}} { // as in more, the constant is 0
		product := make([]float64, t.Rows)
		for i := range product {
			product[i] = t.Cols[f[0]][i] * t.Cols[f[1]][i]
		}
		cols = append(cols, product)
	}
	return &reference.Table{Rows: t.Rows, Cols: append(cols, t.Cols[last])}
}

func loadTable(gen *quaydata.Data) *reference.Table {
	t := &reference.Table{Cols: make([][]float64, 1+len(dense))}
	var b stream.Batch
	row := make([]float64, len(dense))
	for at := int64(0); at < gen.Rows(); at += int64(b.Rows) {
		gen.Fill(&b, at, 16*stream.BatchRows)
	rows:
		for i := range b.Rows {
			for j, c := range dense {
				v := &b.Cols[c]
				switch {
				case v.Null != nil && v.Null[i]:
					continue rows
				case v.Kind != stream.Float64:
					row[j] = float64(v.I64[i])
				case v.F64[i] != v.F64[i]:
					continue rows
				default:
					row[j] = v.F64[i]
				}
			}
			t.Rows++
			t.Cols[0] = append(t.Cols[0], 1)
			for j, x := range row {
				t.Cols[1+j] = append(t.Cols[1+j], x)
			}
		}
	}
	return t
}
