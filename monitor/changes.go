package monitor

import "tailbell/monitor/life"

// Changes are the results of the messages applied since the last Drain, as
// after-images: applying them again, or a later one over an earlier one, is
// harmless. A store makes them durable together with Position.
type Changes struct {
	// Position of the last message applied; 0 if none was.
	Position uint64
	// Header is the engine's own state apart from series and ids; nil if it
	// did not change.
	Header []byte
	// Series are patches of the touched series, in order of Number.
	Series []SeriesChange
	// States are whole states of the next slice of series, in order of
	// Number: the rolling checkpoint. Cycle counts its rounds over all series,
	// from 0; when a commit of round n arrives, every series has been written
	// whole in round n-1, so that patches of rounds up to n-2 are not needed
	// any more.
	States []SeriesChange
	Cycle  uint64
	// IDs are the touched observation ids, in the order of their touching.
	IDs []IDChange
	// RewrittenGenerations are generations of which IDs holds every id that
	// still counts: what was written of them before is forgotten first.
	RewrittenGenerations []int64
	// DroppedGenerations are generations of ids that are forgotten whole.
	DroppedGenerations []int64
	// Archived are slots that no look will need again, on their way out of
	// the engine's memory. The same slot may come again after a restart, with
	// the same content.
	Archived []ArchivedSlot
	// ArchiveFrom is when the archive begins: slots that began before are let go. It
	// is the beginning of a day (UTC) and never goes back; nil if all are kept.
	ArchiveFrom *Instant
	// Refused are the refusals, in stream order.
	Refused []Refusal
	// Alerts are the touched alert records as they now stand, oldest first.
	Alerts []life.Record
	// Steps are the new alert steps, in order: what outlets must deliver.
	Steps []life.Notice
	// Settings are the set-up texts that came into force, in order. Every one
	// is kept, by its version.
	Settings []SettingChange
	// Summaries are what other partitions are to be told, in order: each is to be
	// delivered to its partition once at least.
	Summaries []OutSummary
	// Waiting are the summaries that began to wait for those of other partitions,
	// and Gathered the numbers of those that do no longer.
	Waiting  []WaitingSummary
	Gathered []uint64
}

// OutSummary is a message for another partition.
type OutSummary struct {
	Partition int    `json:"partition"`
	Data      []byte `json:"data"`
}

// WaitingSummary is one that waits for those of other partitions, by its number.
type WaitingSummary struct {
	Number uint64
	Data   []byte
}

// SeriesChange is a patch or a whole state of one series, in the engine's own
// encoding, opaque to the store.
type SeriesChange struct {
	// Number is the series' number, from 0 in order of appearance; that of one that
	// has ended is given to another.
	Number uint32
	Data   []byte
}

// ArchivedSlot is the final content of one slot of one series.
type ArchivedSlot struct {
	Number uint32  // the series
	Start  Instant // of the slot
	Data   []byte  // JSON of a SlotSum
}

// IDChange is the after-image of one observation id.
type IDChange struct {
	Generation int64
	Value      []byte
}

// Refusal is one refused item, act or setting.
type Refusal struct {
	Position uint64  `json:"position"` // of the message in the stream
	Index    int     `json:"index"`    // of the element in the message, from 0
	At       Instant `json:"at"`       // the partition's clock, microseconds since 1970
	Reason   Reason  `json:"reason"`
	Detail   string  `json:"detail"`
	Series   string  `json:"series,omitempty"`
	Raw      []byte  `json:"raw"` // original bytes
}

// SettingChange is a set-up that came into force.
type SettingChange struct {
	Version int
	Digest  string
	Text    []byte
}

// Snapshot is everything a store gives back when it is opened: what Restore
// needs to go on as if nothing had happened.
type Snapshot struct {
	Position uint64
	// Renumbered says that another stream was accepted since the last Drain: what
	// the header says of positions beyond Position is of the old one.
	Renumbered bool
	Header     []byte
	// Series holds, by number, the last whole state (nil if only patches
	// exist) and the patches that were handed over by later Drains, oldest first,
	// to lay over it.
	Series []SeriesImage
	// IDs are those of the generations that were not dropped, in the order in
	// which they were written: a later one replaces an earlier one.
	IDs []IDChange
	// Settings are all set-ups that were in force, by version.
	Settings []SettingChange
	// Alerts are the records that are not done (life.Record.Done), oldest
	// first.
	Alerts []life.Record
	// Waiting are the summaries that wait for others, by number.
	Waiting []WaitingSummary
}

// SeriesImage is the stored form of one series.
type SeriesImage struct {
	State   []byte
	Patches [][]byte
}
