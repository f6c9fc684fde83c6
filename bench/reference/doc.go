// Package reference does parts of a fit with general libraries or by their
// plainest definition, for comparison in tests and measurements: HC1 errors from
// columns in memory with gonum, the fields of a CSV file with encoding/csv and
// strconv, and the reading of columns with nothing done to them.
package reference
