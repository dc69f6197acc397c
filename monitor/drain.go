package monitor

import (
	"cmp"
	"encoding/json"
	"slices"

	"tailbell/monitor/life"
)

// checkpoint is how far the rolling checkpoint has come.
type checkpoint struct {
	cycle uint64
	next  int // number of the series to write next
}

const (
	// minSlice is the least number of bytes of whole states in one Drain.
	minSlice = 4 << 10
	// With fewSeries a third as many bytes of whole states are handed over as of
	// patches, with manySeries as many: the patches that are kept are six times, or
	// twice, what all states take. Whole states cost the store more than patches do;
	// patches make starting longer, which matters where there are many series.
	fewSeries, manySeries = 20_000, 60_000
)

// sliceFor is how many bytes of whole states go with so many of patches.
func (e *Engine) sliceFor(patches int) int {
	share := float64(min(max(len(e.series), fewSeries), manySeries)) / manySeries
	return max(int(share*float64(patches)), minSlice)
}

// Drain hands over what changed since the last one. The caller must make it
// durable before anything that follows from it leaves the process.
func (e *Engine) Drain() Changes {
	c := Changes{
		Position: e.position, Archived: e.archived, Refused: e.refused,
		Steps: e.steps, Settings: e.settings, DroppedGenerations: e.ids.dropped,
		ArchiveFrom: e.archiveBegins(),
	}
	if e.position == e.drained {
		c.Position = 0
	}
	e.drained = e.position
	if len(e.stubs.touched) > 0 {
		e.touched = slices.DeleteFunc(e.touched, func(s *series) bool { return s.retired && !s.mirror })
	}
	slices.SortFunc(e.touched, func(a, b *series) int { return cmp.Compare(a.number, b.number) })
	size := 0
	c.Series = make([]SeriesChange, 0, len(e.touched)+len(e.stubs.touched))
	for _, s := range e.touched {
		s.catchUp()
		patch := e.room.keep(s.encode(e.room.next(), false))
		size += len(patch)
		c.Series = append(c.Series, SeriesChange{s.number, patch})
		s.touched, s.fresh, s.dirty = false, false, s.dirty[:0]
		s.drainArrivals()
	}
	size += e.drainStubs(&c)
	c.IDs, c.RewrittenGenerations = e.ids.drain(&e.room)
	for _, a := range e.changed {
		a.dirty = false
		c.Alerts = append(c.Alerts, a.record)
	}
	c.Summaries = e.drainTold()
	c.Waiting, c.Gathered = e.drainWaiting()
	c.Cycle = e.checkpoint.cycle
	c.States = e.slice(e.sliceFor(size))
	c.Header = e.encodeHeader()
	clear(e.touched)
	e.touched = e.touched[:0]
	e.archived, e.refused, e.changed, e.steps, e.settings = nil, nil, nil, nil, nil
	e.ids.dropped = nil
	return c
}

// drainStubs hands over the stubs that changed, among the series in order of their
// numbers, and returns how many bytes they take.
func (e *Engine) drainStubs(c *Changes) (size int) {
	if len(e.stubs.touched) == 0 {
		return 0
	}
	for _, x := range e.stubs.touched {
		if x.touched = false; e.stubs.byNumber[x.number] == x { // else its number is another's
			patch := e.room.keep(x.encode(e.room.next()))
			size += len(patch)
			c.Series = append(c.Series, SeriesChange{x.number, patch})
		}
	}
	e.stubs.touched = nil
	slices.SortFunc(c.Series, func(a, b SeriesChange) int { return cmp.Compare(a.Number, b.Number) })
	return size
}

// slice returns whole states of the next series, of about so many bytes.
func (e *Engine) slice(size int) []SeriesChange {
	var states []SeriesChange
	for ; e.checkpoint.next < len(e.series) && size > 0; e.checkpoint.next++ {
		number := uint32(e.checkpoint.next)
		var state []byte
		if s := e.series[number]; s.retired && !s.mirror {
			state = e.room.keep(e.stubs.byNumber[number].encode(e.room.next()))
		} else {
			s.catchUp()
			state = e.room.keep(s.encode(e.room.next(), true))
		}
		size -= len(state)
		states = append(states, SeriesChange{number, state})
	}
	if len(e.series) > 0 && e.checkpoint.next == len(e.series) {
		e.checkpoint = checkpoint{cycle: e.checkpoint.cycle + 1}
	}
	return states
}

// archive hands over a slot that leaves memory.
func (e *Engine) archive(s *series, c *cell) {
	if e.passing {
		return
	}
	start := s.indicator.cal.Start(c.slot)
	data := e.room.keep(s.appendSlotSum(e.room.next(), c, start))
	e.archived = append(e.archived, ArchivedSlot{Number: s.number, Start: start, Data: data})
}

// header is the engine's own state apart from series and ids.
type header struct {
	History    bool              `json:"history"`
	Clock      Instant           `json:"clock"`
	Version    int               `json:"version"`
	Indicators []indicatorHeader `json:"indicators"`
	Account    Account           `json:"account"`
	Cycle      uint64            `json:"cycle"`
	Next       int               `json:"next"`
	Generation int64             `json:"generation_seconds"`
	Facts      json.RawMessage   `json:"facts,omitempty"`
	Inbound    []inboundHeader   `json:"inbound,omitempty"`
	Waiting    uint64            `json:"waiting,omitempty"`
	Deferrals  []deferral        `json:"deferred,omitempty"`
	// Part, Ahead and Counts are absent where partitions don't count for each other.
	Part   int             `json:"part,omitempty"`
	Ahead  uint64          `json:"ahead,omitempty"`
	Counts json.RawMessage `json:"counts,omitempty"`
	Lives  map[string]int  `json:"lives,omitempty"`
	// Archive is when the archive begins; absent while all is kept.
	Archive *Instant `json:"archive_from,omitempty"`
}

type indicatorHeader struct {
	Name    string        `json:"name"`
	Started bool          `json:"started"`
	Looked  int64         `json:"looked"`
	Frozen  int64         `json:"frozen"`
	Epochs  []epochHeader `json:"epochs"`
	// Kept and Floor are absent where nothing was forgotten; Places and the
	// Windows of the epochs are where they are those of the set-up, as they
	// always were.
	Kept   *int64        `json:"kept,omitempty"`
	Floor  *int64        `json:"floor,omitempty"`
	Places []placeHeader `json:"places,omitempty"`
	// Gathered is absent where no sums are gathered.
	Gathered *gatheredHeader `json:"gathered,omitempty"`
}

type epochHeader struct {
	From    int64          `json:"from"`
	Version int            `json:"version"`
	Windows []windowHeader `json:"windows,omitempty"`
}

type placeHeader struct {
	Name  string `json:"name"`
	Slots int    `json:"slots"`
	Step  int    `json:"step"`
	// Trials is absent of spans of time.
	Trials int64 `json:"trials,omitempty"`
}

type windowHeader struct {
	Place int   `json:"place"`
	Since int64 `json:"since"`
	Whole int64 `json:"whole"`
}

func (e *Engine) encodeHeader() []byte {
	h := header{
		History: e.history, Clock: e.clock, Version: e.version, Account: e.account,
		Cycle: e.checkpoint.cycle, Next: e.checkpoint.next, Generation: int64(e.ids.length.Seconds()),
		Facts: e.encodeFacts(), Part: e.part, Ahead: e.ahead, Counts: e.encodeCounts(), Lives: e.lives,
	}
	for _, ix := range e.indicators {
		ih := indicatorHeader{Name: ix.cfg.Name, Started: ix.started, Looked: ix.looked, Frozen: ix.frozenAt}
		ih.encodePlaces(ix)
		ih.Gathered = ix.gathering.header(ix.cfg.Name)
		h.Indicators = append(h.Indicators, ih)
	}
	h.Inbound, h.Waiting, h.Deferrals = e.inboundHeaders(), e.waiting, e.deferrals
	h.Archive = e.archiveBegins()
	data, err := json.Marshal(h)
	if err != nil {
		panic(err) // a struct of plain fields
	}
	return data
}

// Alerts returns the records that the engine still works on, in order of
// their opening.
func (e *Engine) Alerts() []life.Record {
	var records []life.Record
	for _, a := range e.alerts {
		if !a.gone() {
			records = append(records, a.record)
		}
	}
	slices.SortFunc(records, func(a, b life.Record) int {
		return cmp.Or(a.Opened.Compare(b.Opened), cmp.Compare(a.ID, b.ID))
	})
	return records
}
