// Package allowance turns the false alerts that a team accepts in a year into
// limits on the p-values of looks that are repeated for years.
//
// Looks of a rolling window overlap, windows come in several lengths and tails,
// and each of them may ring. An alert opens at most once in a run of signalling
// looks, and a run begins with a crossing: a look that signals where the look
// before it did not. So the expected number of false alerts is at most the
// expected number of crossings, which this package computes from the law of the
// counts, and Solve finds for each window and tail the largest limit alpha whose
// crossings fit into its share of the allowance. A look signals if its p-value is
// at most alpha (exact.AtMost): for every kind of baseline that is the comparison
// of the count with a critical count.
//
// # What is promised
//
// For a known baseline (or any true ratio within its margin), independent slots
// of the stated law and final data, the expected number of alerts opened in a
// year is at most Limits.PerYear, which is at most Plan.PerYear:
//
//   - Steady exposure (Vary 0, no Cycle): whatever the exposure of a slot in
//     [Least Exposure, Exposure] is, as long as it stays.
//   - A cycle: where the exposures repeat Cycle, at its worst phase.
//   - Vary: whatever the exposures of the slots are, in any order, each within
//     1-Vary and 1+Vary of what Exposure and Cycle say. In the upper tail an
//     alert opens only at a look into which an event has entered; what is bounded
//     is the number of looks that signal with an event having entered. In the
//     lower tail, and where no better bound is known, it is that of looks that
//     signal at all.
//
// Looks that are left out never add to it: the sum over several steps is at
// least what the one look over all of them costs. Each window's first look (there
// is no look before it) costs its whole size, Starts times a year.
//
// For an estimated baseline there is no such promise: the crossings are averaged
// over what the estimate leaves open (Gamma(M+1, F) in the upper tail and
// Gamma(M, F) in the lower one for M events in F; the Beta laws for a proportion,
// under which the average tail is the conditional test's p-value), or taken at
// the bound that Assurance asks for. Part.Low and Part.High say what that hides.
// Where the law has no closed sum the result is marked approximate. Late data
// and retractions are outside of it; what is expected of slow reports is not: see
// Plan.Known.
//
// Everything is a pure function of the plan, to the bit.
package allowance
