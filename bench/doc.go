// Package bench holds benchmarks of whole fits, and beside them, in the same
// run, what bounds them and what else does the same work:
//
//   - BenchmarkFit opens a file of invented unloading times (package quaydata),
//     binds the model and fits it, as the command does.
//   - BenchmarkDecode opens the same file and reads the columns that the model
//     needs to their end: no fit that reads the file once can be faster.
//   - BenchmarkReference does parts of the work with general libraries: reading
//     the same fields of the CSV file with encoding/csv and strconv, and HC1
//     errors from data in memory with gonum (package reference).
//
// The program in sidebyside compares the command itself, process against process,
// also with numpy and an SQL engine, and on data of any size. The program in coverage
// counts how often intervals hold the truth in invented data.
//
// Only ratios of one run say something; a machine's clock drifts between runs:
//
//	go test -run '^$' -bench . -benchtime 3x -count 5 ./bench | tee new.txt
//	go tool benchstat -col /workers new.txt
//
// MB/s counts the bytes of the file once, whatever part of it the columns take
// and however often it is read; rows/s counts the rows of the file once.
//
// Every name is a list of key=value; a test runs each case on few rows.
package bench
