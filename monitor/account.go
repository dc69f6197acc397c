package monitor

import (
	"encoding/json"
	"maps"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"
)

// Account says what became of every element that reached a partition, and of
// every look. Each element stands in exactly one of the classes Counted,
// Withheld, Repeat, Replaced, Outdated, Began, Refused and Unmonitored.
type Account struct {
	Elements int64 `json:"elements"`
	// Counted elements stand in the sums, or retracted one that did; Withheld
	// ones do too, but in a slot that lacks its other side, so that no look
	// could use them yet.
	Counted  int64 `json:"counted"`
	Withheld int64 `json:"withheld"`
	// Repeat: same id, revision and content again. Replaced: counted once,
	// until a higher revision came. Outdated: a lower revision came late.
	Repeat   int64 `json:"repeat"`
	Replaced int64 `json:"replaced"`
	Outdated int64 `json:"outdated"`
	// Began are the readings of counters that add nothing, since counting begins
	// with them: the first ones, and those after a gap. Gaps are the readings,
	// of any class, for which the one before was too far away.
	Began       int64 `json:"began,omitempty"`
	Gaps        int64 `json:"gaps,omitempty"`
	Refused     int64 `json:"refused"`
	Unmonitored int64 `json:"unmonitored"`
	// RefusedBy counts the refused elements, acts and settings by reason.
	RefusedBy map[Reason]int64 `json:"refused_by"`
	// Late elements were counted into a slot that had settled.
	Late int64 `json:"late"`
	// Acts and Settings that were taken, and those that were refused.
	Acts            int64 `json:"acts"`
	ActsRefused     int64 `json:"acts_refused"`
	Settings        int64 `json:"settings"`
	SettingsRefused int64 `json:"settings_refused"`
	// Rejected messages could not be told apart into elements.
	Rejected int64 `json:"rejected"`
	// Looks made when due, looks withheld then, windows not yet full, and
	// looks made again because data changed.
	Looks         int64 `json:"looks"`
	WithheldLooks int64 `json:"withheld_looks"`
	Filling       int64 `json:"filling"`
	Reruns        int64 `json:"reruns"`
	// OutOfService are the withheld looks of series that were out of service,
	// and AfterSignOff the changes of slots that had been signed off.
	OutOfService int64 `json:"out_of_service,omitempty"`
	AfterSignOff int64 `json:"after_sign_off,omitempty"`
	// Retired series have ended since nothing was heard of them for long, and
	// Returned ones were monitored before, whyever that had ended.
	Retired  int64 `json:"retired,omitempty"`
	Returned int64 `json:"returned,omitempty"`
	// Summaries are those of other partitions that were taken, and SummaryRepeats
	// those that had come before.
	Summaries      int64 `json:"summaries,omitempty"`
	SummaryRepeats int64 `json:"summary_repeats,omitempty"`
}

// Account returns the account as it stands.
func (e *Engine) Account() Account {
	a := e.account
	a.RefusedBy = maps.Clone(e.account.RefusedBy)
	for _, x := range e.stubs.byNumber {
		a.Withheld += x.unpaired
	}
	for _, s := range e.series {
		a.Withheld += s.unpaired
		if len(s.cells) == 0 || s.needs() == (sides{}) {
			continue // every slot is known
		}
		for i := range s.cells {
			if c := &s.cells[i]; !s.needs().paired(c) {
				a.Withheld += int64(c.items)
			}
		}
	}
	a.Counted -= a.Withheld
	return a
}

// Add returns the sum of two accounts, of two partitions.
func (a Account) Add(b Account) Account {
	sum := a
	sum.Elements += b.Elements
	sum.Counted += b.Counted
	sum.Withheld += b.Withheld
	sum.Repeat += b.Repeat
	sum.Replaced += b.Replaced
	sum.Outdated += b.Outdated
	sum.Began += b.Began
	sum.Gaps += b.Gaps
	sum.Refused += b.Refused
	sum.Unmonitored += b.Unmonitored
	sum.Late += b.Late
	sum.Acts += b.Acts
	sum.ActsRefused += b.ActsRefused
	sum.Settings += b.Settings
	sum.SettingsRefused += b.SettingsRefused
	sum.Rejected += b.Rejected
	sum.Looks += b.Looks
	sum.WithheldLooks += b.WithheldLooks
	sum.Filling += b.Filling
	sum.Reruns += b.Reruns
	sum.OutOfService += b.OutOfService
	sum.AfterSignOff += b.AfterSignOff
	sum.Retired += b.Retired
	sum.Returned += b.Returned
	sum.Summaries += b.Summaries
	sum.SummaryRepeats += b.SummaryRepeats
	sum.RefusedBy = maps.Clone(a.RefusedBy)
	if sum.RefusedBy == nil {
		sum.RefusedBy = map[Reason]int64{}
	}
	for r, n := range b.RefusedBy {
		sum.RefusedBy[r] += n
	}
	return sum
}

// Balanced reports whether every element stands in exactly one class.
func (a Account) Balanced() bool {
	return a.Elements == a.Counted+a.Withheld+a.Repeat+a.Replaced+a.Outdated+a.Began+a.Refused+a.Unmonitored
}

// SlotSum is what is counted in one slot of one series.
type SlotSum struct {
	Series   string  `json:"series"`
	Start    Instant `json:"start"`
	Events   int64   `json:"events"`
	Exposure string  `json:"exposure"`
	// HasEvents and HasExposure say which sides were reported.
	HasEvents   bool `json:"has_events"`
	HasExposure bool `json:"has_exposure"`
}

// Slots returns what is held of every slot, by series name and slot. Slots
// beyond the horizon and the longest window are forgotten. Sums hold none of their
// own.
func (e *Engine) Slots() []SlotSum {
	sorted := slices.SortedFunc(slices.Values(e.series), func(a, b *series) int {
		if a.name < b.name {
			return -1
		}
		return 1
	})
	var sums []SlotSum
	for _, s := range sorted {
		if s.sum != nil || s.mirror {
			continue
		}
		own := s.ownCells()
		for i := range own {
			sums = append(sums, s.slotSum(&own[i]))
		}
	}
	return sums
}

// appendSlotSum appends the JSON of what slotSum returns.
func (s *series) appendSlotSum(b []byte, c *cell, start Instant) []byte {
	b = append(b, `{"series":`...)
	b = appendText(b, s.name)
	b = append(b, `,"start":`...)
	b = strconv.AppendInt(b, int64(start), 10)
	b = append(b, `,"events":`...)
	b = strconv.AppendInt(b, c.events, 10)
	b = append(b, `,"exposure":"`...)
	b = c.exposure.appendDecimal(b, s.indicator.cfg.GrainDigits)
	b = append(b, `","has_events":`...)
	b = strconv.AppendBool(b, c.saysEvents > 0)
	b = append(b, `,"has_exposure":`...)
	return append(strconv.AppendBool(b, c.saysExposure > 0), '}')
}

// appendText appends a JSON string.
func appendText(b []byte, s string) []byte {
	for i := range len(s) {
		if c := s[i]; c < ' ' || c >= utf8.RuneSelf || strings.IndexByte("\"\\<>&", c) >= 0 {
			text, err := json.Marshal(s)
			if err != nil {
				panic(err) // a string
			}
			return append(b, text...)
		}
	}
	return append(append(append(b, '"'), s...), '"')
}

func (s *series) slotSum(c *cell) SlotSum {
	return SlotSum{
		Series: s.name, Start: s.indicator.cal.Start(c.slot), Events: c.events,
		Exposure:  c.exposure.decimal(s.indicator.cfg.GrainDigits),
		HasEvents: c.saysEvents > 0, HasExposure: c.saysExposure > 0,
	}
}
