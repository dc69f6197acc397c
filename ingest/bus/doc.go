// Package bus is the message bus: the embedded server or a remote one, the
// streams of a deployment, the ordered source that a partition reads, and the
// ways to publish.
//
// # Model
//
// A deployment NAME has two streams. NAME-in takes everything that moves the
// engine, on the subjects NAME.in.<partition>.obs, .act, .set and .tick; the
// sequence of a message in it is its position. NAME-alerts takes what the
// engine found, on NAME.alert.<partition>.<direction>.<indicator>. Commands
// reach a running daemon on NAME.control.<verb>.
//
// A Bus from Open belongs to the daemon: it holds the lock of the set-up's
// folder and, when the bus is embedded, runs the server. A Bus from Dial is a
// client of either kind. Both publish and read in the same way.
//
// A Source reads one partition in order, from a stored position on. Nothing is
// acknowledged: the position lives with the reader. Every message carries a
// sequence that counts without gaps what was delivered to this reader; a gap
// there means that something was dropped on the way, and the source starts
// again after the last message that it handed out. It never skips or repeats.
//
// # Caveats
//
// Publishing is at least once. When no acknowledgement arrives, a message is
// sent again, and both copies may have been stored. That is harmless:
// observations with ids are counted once, ticks and settings say the same
// thing twice, and acts and settings also carry a message id by which the bus
// drops a repeat within two minutes. Observations without ids, of indicators
// that keep none, may be counted twice in this case.
//
// The embedded server writes every message through to the disk before it
// acknowledges. How much a remote bus may lose when its power fails is decided
// by its own settings.
package bus
