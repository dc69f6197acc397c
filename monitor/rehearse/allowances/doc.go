// Package allowances counts what a monitor rings for under an allowance when
// nothing has happened: raw events at the rate that the baseline says go through
// the engine, every alert that it opens is a false one, and the allowance says
// how many there may be.
//
// # Model
//
// A Cell is one way in which events come and are judged: rate or proportion, the
// windows and tails, exposures that are constant, seasonal or drawn, reports that
// are delayed, late or taken back, series that live for long or shortly, a
// baseline that is known or estimated, people who close every alert. Its series
// are independent and go through engines fifty at a time, a message for each
// slot, as a feed's would.
//
// An Outcome counts by series the alerts, and the crossings: looks made when due
// that signal where the look before them did not. Alerts are never more. It
// compares
//
//   - the alerts with the allowance, where the cell has a promise,
//   - the crossings with what the alerts themselves say of it (which is at most
//     the allowance), where exposures are regular, else the alerts,
//   - the crossings with the exact prediction for the limits that the engine
//     judged by, where the cell is so regular that there is one.
//
// Errors are the standard error over the series of all seeds, since crossings of
// one series come in clumps; a cell may miss by four of them. Garwood's bounds
// stand beside them, as if each crossing came alone.
//
// # Caveats
//
// Real rates drift and have unknown seasons, so real false alerts are more.
package allowances
