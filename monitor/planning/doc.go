// Package planning says what limits buy before anything has happened: expected
// and critical counts, attained sizes, false alerts a year, which ratio to the
// usual rate is found with which chance and after how long, and what one step of
// a critical count changes.
//
// Exact for the law named, given its parameters: expected and critical counts,
// attained sizes, the ratios found. False alerts are package allowance's, each
// with its basis. Delays are simulated from a seed: the same seed gives the same
// figures on any number of processors, and each carries the exact bounds of what
// more draws could have said (Clopper and Pearson for shares, order statistics
// for quantiles).
package planning
