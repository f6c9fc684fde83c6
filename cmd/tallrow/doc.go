// Command tallrow fits linear models to data too large for memory and shows
// how far robust standard errors lie from the classical ones.
//
// The package is the only place that reads arguments and model files, prints,
// and decides exit statuses: 0 done, 1 the data or the fit failed, 2 wrong
// use, 130, 143 and 129 stopped by a signal.
package main
