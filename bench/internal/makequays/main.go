// Command makequays writes unloading times as Parquet, as many rows and cranes as
// asked for, to measure with:
//
//	go run ./bench/internal/makequays -rows 100000000 -cranes 10000000 unloading.parquet
package main

import (
	"bufio"
	"context"
	"errors"
	"flag"
	"fmt"
	"os"

	"github.com/tallrow/tallrow/bench/quaydata"
)

func main() {
	if err := run(); err != nil {
		fmt.Fprintln(os.Stderr, "makequays:", err)
		os.Exit(1)
	}
}

func run() (err error) {
	var c quaydata.Config
	flag.Int64Var(&c.Rows, "rows", 0, "rows; 0 means as many as in the demo")
	flag.IntVar(&c.Cranes, "cranes", 0, "cranes, in random order; 0 means as many as in the demo")
	flag.Uint64Var(&c.Seed, "seed", 0, "seed of the random numbers")
	flag.Parse()
	if flag.NArg() != 1 {
		return errors.New("want one file to write")
	}
	d, err := quaydata.New(c)
	if err != nil {
		return err
	}
	f, err := os.Create(flag.Arg(0))
	if err != nil {
		return err
	}
	w := bufio.NewWriterSize(f, 1<<20)
	return errors.Join(d.WriteParquet(context.Background(), w, nil), w.Flush(), f.Close())
}
