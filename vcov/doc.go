// Package vcov turns moment sums into coefficients and standard errors that
// hold when the spread of the errors is unequal or rows move together.
package vcov
