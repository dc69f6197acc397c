// Package divide carries what a deployment's partitions were told over into
// another number of partitions, and shows that nothing changed by it.
//
// # Model
//
// Republish reads the old partitions, merges them in the order in which their
// clocks moved, and carries every element over into the new partition of its
// series, with the time at which it was first stored or, in history time, with
// where its partition's clock stood after it. So every series is told the same
// things at the same times. Messages go over as they are, byte for byte,
// unless their elements now belong to different partitions.
//
// A new partition takes from the old ones that are congruent to it modulo the
// greatest common divisor of the two numbers: its feeders. If the new number is
// a multiple of the old one, that is a single one. Acts on many series and
// set-ups, of which every old partition has its own copy, go over once for each
// new partition. Ticks stay behind, but for one that brings every new partition
// to where its feeders' clocks stand.
//
// Everything is a function of the old messages alone. So a run that broke off
// is gone through again, and what it had carried over is passed over.
//
// # Caveats
//
// With several feeders, copies of one act or set-up were stored at times that
// lie a little apart; the first one counts. Refusals get new positions. What
// was refused because it came to the wrong partition stays refused; into a
// single partition, where nothing is wrong, it is left out and counted.
package divide
