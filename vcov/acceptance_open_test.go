package vcov_test

import (
	"bytes"
	"context"
	"io"
	"os"
	"path/filepath"
	"testing"

	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/stream/columnar"
	"github.com/tallrow/tallrow/stream/delimited"
)

func open(t testing.TB, path string, stdin io.ReadCloser, o stream.Options) stream.Source {
	t.Helper()
	src, err := stream.Open(context.Background(), []string{path}, stdin, []stream.Format{columnar.Format{}, delimited.Format{}}, o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { src.Close() })
	return src
}

func openFile(t testing.TB, path string, o stream.Options) stream.Source {
	t.Helper()
	return open(t, path, nil, o)
}

func write(t testing.TB, name string, b []byte) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// openText opens a CSV file with that text.
func openText(t testing.TB, text []byte, o stream.Options) stream.Source {
	t.Helper()
	return open(t, write(t, "rows.csv", text), nil, o)
}

// openPipe gives the text by a pipe: it cannot be read twice.
func openPipe(t testing.TB, text []byte, o stream.Options) stream.Source {
	t.Helper()
	return open(t, "-", io.NopCloser(bytes.NewReader(text)), o)
}

// openParquet opens a Parquet file of the table.
func openParquet(t testing.TB, tb *table, groupRows int) stream.Source {
	t.Helper()
	var cols []columnar.WriteColumn
	for _, c := range tb.schema.Columns {
		cols = append(cols, columnar.WriteColumn{Name: c.Name, Kind: c.Kind, Optional: true})
	}
	var b bytes.Buffer
	w, err := columnar.NewWriter(&b, cols, columnar.WriterOptions{RowsPerGroup: groupRows})
	if err == nil {
		err = w.WriteColumns(tb.rows(), tb.cols)
	}
	if err == nil {
		err = w.Close()
	}
	if err != nil {
		t.Fatal(err)
	}
	return open(t, write(t, "rows.parquet", b.Bytes()), nil, stream.Options{})
}
