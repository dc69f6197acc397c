// Package estimate turns history into a baseline that can be defended: the
// usual rate, how sure it is, whether chance alone explains how the counts
// spread, and what to write into the set-up.
//
// # Model
//
// A History holds the slots of the series of one indicator whose two sides are
// known. Under the plain model the events of a series, given their total, fall
// into its slots in proportion to exposure: multinomial for a rate, multivariate
// hypergeometric for a proportion. Every p-value here is conditional in that
// way, so it needs no usual rate: enumerated where it can be, else simulated
// from a seed, with exact bounds for what infinitely many draws would give.
//
// Spread is variance over mean: Pearson's sum of (events - expected)^2 /
// variance, divided by what it is on average under the plain model (the number
// of slots less one for each series, for a rate). So chance alone gives 1.
//
// The reporting delay is estimated by the reverse-time product limit (Lagakos,
// Barraj and De Gruttola 1988, Biometrika 75; Kalbfleisch and Lawless 1989,
// JASA 84), since late reports of late events are not in the data yet.
//
// # Caveats
//
// All of it is pure: the same history and seed give the same report. A p-value
// for weekdays or months takes counts for Poisson otherwise; spread makes it too
// small. An upper bound of spread takes negative binomial counts of constant
// spread for granted. The bootstrap's intervals are approximate.
package estimate
