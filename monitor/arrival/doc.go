// Package arrival remembers at which instants the events of one series came,
// and says what each look that is made at an arrival saw.
//
// # The model
//
// A Log holds instants in rising order, each with what came at it: events,
// trials (of a proportion), and how many of the events were late. Whatever
// came at the same instant is one entry. An instant at which nothing is left,
// since all of it was taken back, is no longer there.
//
// A look is made at every instant that holds events, over each window. Two
// kinds of window look back from an instant t:
//
//   - a span of time w: the events at instants in (t-w, t], half open. What
//     came at t itself counts, all of it, whatever the order in which it was
//     told; what came exactly w earlier does not.
//   - the last n trials: the shortest run of latest instants, up to and with t,
//     that holds n trials or more. A message of several trials is never split,
//     so that the run may hold more than n, by less than its oldest instant
//     has: the test takes the trials that it holds. While there are fewer than
//     n in all, the window is still filling and there is no look.
//
// Events may come late, be revised and be taken back at any instant that is not
// forgotten. A change at an instant a alters the looks at a and at later
// instants whose window reaches back to a: those at t in [a, a+w), and those
// with fewer than n trials in (a, t]. Again and AgainTrials list them in order.
// The look at an instant that holds no events any more is gone: whoever took
// back the last one strikes it out.
//
// # Waiting times
//
// The same instants tell how long it took until the last k events: Kth gives
// the latest instant s such that k events or more came in [s, t]. A span (t-w, t]
// holds k events exactly if t-s < w: to ring at k events within w and to ring at
// a wait for k events that is shorter than w are one and the same rule. Between
// the first and the last of k events lie k-1 gaps (exact.Wait).
//
// # Units and cost
//
// Instants and widths are whole numbers in one unit, whichever the caller
// counts in. The entries hold running totals, so that a look costs a binary
// search however many events it sees, a new latest event costs constant time,
// and a late one time in proportion to the instants after it. An instant takes
// 32 bytes.
package arrival
