// Package store keeps one partition's state in one bbolt file.
//
// # The model
//
// A Store holds what an engine left behind: its header, the states of its
// series, the observation ids, the refusals, the alert records, the steps that
// outlets must still deliver, and the set-ups that were in force. Commit writes
// the results of a batch of messages together with the position of the last
// one in a single fsynced transaction; Snapshot gives back all that the engine
// needs to go on after that position. There is nothing in between: what was
// committed is there as a whole, what was not is not there at all.
//
// The touched series of a batch are written as one run of new keys in order (a
// journal); in the same transaction the next slice of series is written whole
// (a rolling checkpoint). The journal is cut where the checkpoint has passed
// it twice. Recovery is checkpoint and journal.
//
// Every value is framed, carries a version, and ends in a CRC-32C over its
// bucket, its key and itself; bbolt has no checksums of its own but on its two
// meta pages. Numbers run without a gap between two ends that the head record
// names, so that a value that vanished is noticed too.
//
// # Caveats
//
// A store has one writer: a second process gets ErrInUse. Position only moves
// forward. After an error that wraps ErrFull nothing was stored and the same
// commit may be tried again; after one that wraps ErrFailed the store must be
// closed and opened again, since only the file knows whether the commit holds.
// Reads are cut into short transactions, because an open one stops the file's
// map from growing and its free pages from being used again; Check and Copy
// are the long ones, and say so.
//
// Refused bytes expire by the bus's stored time (Mark.Stored), not by a clock
// of the machine. Nothing here reads a clock.
package store
