// Package counter turns the readings of a counter, a total that only grows until
// counting begins again, into what came between two of them.
//
// # The model
//
// A Side is the latest reading of one total. Next compares it with another one:
//
//   - one of the same instant repeats it, or contradicts it;
//   - one of an earlier instant is outdated: totals sum up all that came before,
//     so it knows nothing that the latest does not;
//   - a later one says how much came since: the difference. If its total is
//     smaller, or it says that counting began after the latest reading, then
//     counting began again, and all that it holds came since;
//   - the first of all says how much came only if it says since when.
//
// That counting began before the latest reading is no news, however the moment is
// told: it may jitter where it is derived from an age.
//
// What came after the latest reading and before counting began again is lost with
// the counter: no total tells of it.
//
// Everything here is a pure function; instants are microseconds.
package counter
