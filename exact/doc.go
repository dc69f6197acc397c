// Package exact computes tails, bounds and critical counts of discrete laws to nearly full
// float64 accuracy in relative terms, in the deepest tail as in the body.
//
// The model. Every tail is the probability of one count, from its deviance in double-double
// (Loader 2000), times the ratio tail/probability, a sum or integral of positive terms; or, past
// the middle, one minus such a tail. Nothing is ever computed as one minus the bulk, and the
// logarithm of a tail stays right where the tail itself underflows.
//
// Parameters are taken as they are had: alpha rather than confidence, rate and exposure rather
// than their product, a probability with its complement. Alpha is two-sided: each side of a
// pair of bounds has alpha/2, also where one side is trivial.
//
// Caveats. Counts and totals go to 2^53. Values outside a domain give NaN and ok = false, never
// a panic. A size within 4e-15 of a limit counts as at the limit, so that one that hits it exactly
// (five of five at 1/2 against 1/32) is not lost to rounding.
package exact
