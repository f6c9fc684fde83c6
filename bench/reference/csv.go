package reference

import (
	"bufio"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strconv"
)

// Parsed is what ParseCSV found.
type Parsed struct {
	Rows     int64     // of data
	Complete int64     // in which no cell of the columns is empty
	Sums     []float64 // of the complete rows, by column
}

// ParseCSV reads the columns of a file with a header by encoding/csv and turns
// their cells into numbers by strconv.ParseFloat, true and false by
// strconv.ParseBool. An empty cell is missing.
func ParseCSV(file string, columns []string) (Parsed, error) {
	out := Parsed{Sums: make([]float64, len(columns))}
	f, err := os.Open(file)
	if err != nil {
		return out, err
	}
	defer f.Close()
	r := csv.NewReader(bufio.NewReaderSize(f, 1<<20))
	r.ReuseRecord = true
	header, err := r.Read()
	if err != nil {
		return out, err
	}
	var at []int
	for _, name := range columns {
		c := slices.Index(header, name)
		if c < 0 {
			return out, fmt.Errorf("%s has no column %s", file, name)
		}
		at = append(at, c)
	}
	row := make([]float64, len(at))
rows:
	for {
		rec, err := r.Read()
		if errors.Is(err, io.EOF) {
			return out, nil
		}
		if err != nil {
			return out, err
		}
		out.Rows++
		full := true
		for j, c := range at {
			switch s := rec[c]; s {
			case "":
				full = false
			case "true", "false":
				v, err := strconv.ParseBool(s)
				if err != nil {
					return out, err
				}
				row[j] = 0
				if v {
					row[j] = 1
				}
			default:
				if row[j], err = strconv.ParseFloat(s, 64); err != nil {
					return out, err
				}
			}
		}
		if !full {
			continue rows
		}
		out.Complete++
		for j, x := range row {
			out.Sums[j] += x
		}
	}
}
