// Package claim decides which process owns which partition, and fences what an
// owner does.
//
// # Model
//
// Processes of one deployment that work on one bus are its members. A small
// bucket on the bus holds an entry for each partition: who owns it, with the
// owner's epoch. Every write is a compare-and-swap on the entry's revision, so
// that of two members that want the same only one gets it.
//
// An owner renews its claims three times a span. A member that has seen no new
// revision of an entry for a whole span, by its own monotonic clock from the
// moment at which it had read the entry, may take it, with the next epoch. An
// owner holds a claim for a span from the moment at which it sent the last
// renewal that was acknowledged. The owner's moment lies before the other's, so
// the claim has run out for the owner before anybody else may take it, as long
// as clocks run equally fast; no two clocks are ever compared.
//
// Members take even shares: nobody more than the number of partitions over the
// number of live members, rounded up. What is too much is handed over cleanly.
// A member of another set-up than the one in force takes nothing until no owner
// of that one is left.
//
// # What a claim does not give
//
// A process may be stopped for any time between looking at its claim and doing
// something. So whatever must not be doubled is fenced where it happens: a Fence
// lets an owner publish alerts only behind the last message of the partition
// that it knows of. The next owner puts a mark there first; from then on every
// message of the one before is refused, whatever that one believes.
package claim
