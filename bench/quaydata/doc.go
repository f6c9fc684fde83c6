// Package quaydata makes up unloading times at a chain of river freight quays,
// as many rows as asked, for the demo and for benchmarks.
//
// The data is invented. No quay, crane or barge in it exists; what it has is
// the shape of data that mislead classical standard errors, and coefficients
// that are known because they were put in.
//
// # One row
//
// A row is one barge unloaded by one crane. With p pallets its outcome is
//
//	minutes = 60 + 1.9 pallets + 0.35 tonnes - 3 crew + 7 wet + 4 night
//	          + barge class (canal 0, deck 5, hatch 8, lighter -4, motor 3)
//	          + quay + quay x day + crane + (1.5 + 0.15 p) e
//
// where quay, quay x day and crane are shocks shared by all rows of a quay, of
// a quay on a day, of a crane (standard deviations 4, 4 and 3) and e is the
// row's own error with standard deviation 1. All shocks have mean zero, are
// bounded by three standard deviations and are drawn without regard to the
// regressors, so least squares is unbiased for the coefficients above. Minutes
// are rounded to hundredths.
//
// # What varies between whom
//
// Crew hardly varies within a quay, wet only between days of a quay, tonnes
// mostly between cranes; pallets, night and the class of the barge vary from row
// to row. So classical errors are far too small for crew, wet and tonnes and
// nearly right for the others, where only the unequal spread matters.
//
// # Reproducible
//
// Every row is a function of (Config, row number) alone, in integer arithmetic
// and rounded float64 operations that no compiler may fuse: the same bits on
// every machine, for any cut into batches, by any number of goroutines.
package quaydata
