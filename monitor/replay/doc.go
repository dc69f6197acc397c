// Package replay runs the engine over a recorded history: not a model of it,
// the engine itself, at the times at which its rows became known.
//
// # Model
//
// A Tape holds rows (observations, acts, ticks) in a compact form, in the
// order in which they became known. Run plays it under a set-up and returns
// every step of every alert, the account, and how long each window was watched.
//
// Series that have nothing to do with each other are played apart: each group
// of series by an engine of its own that is told the clock of the whole, so
// that a group comes out as it would among all the others. That is what lets a
// replay use all cores, and keeps what one engine works on in the processor's
// cache. Series stay together that share an id (a correction may move it from
// one to the other), that serve each other as baseline (peers), or that share
// an allowance. Where the parts could not be told from the whole with
// certainty (acts that name an alert by its id, a limit on series or ids that
// is reached) one engine plays all.
//
// The result does not depend on how many cores there are, nor on how the
// series were divided: steps are in order of their time, then of indicator and
// series. Tests hold the parts against the whole to the byte.
//
// # Caveats
//
// A Tape holds about 60 bytes a row in memory. Nothing here is stored, and
// nobody is told: a replay says what would have been found.
package replay
