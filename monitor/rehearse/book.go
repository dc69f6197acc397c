package rehearse

import (
	"cmp"
	"fmt"
	"math/big"
	"slices"
	"strings"
	"time"
)

// Slots is the length of an indicator's slots.
type Slots int

// The lengths that scenarios use. Days, and weeks from Monday, follow the
// calendar of the zone.
const (
	Hourly Slots = iota
	Daily
	Weekly
)

// Rule is what the publishers know of an indicator.
type Rule struct {
	// LastPart is the last part of the names of its series.
	LastPart string
	Slots    Slots
	Zone     *time.Location
	// Each: a message per event, silence is zero.
	Each bool
	// NoIDs: ids are not kept.
	NoIDs bool
	// Grain is the least amount that is held.
	Grain          Amount
	Horizon, Ahead time.Duration
}

// slot returns the bounds of the slot that holds t.
func (r *Rule) slot(t time.Time) (start, end time.Time) {
	t = t.In(r.Zone)
	y, m, d := t.Date()
	switch r.Slots {
	case Hourly:
		start = t.Truncate(time.Hour)
		return start, start.Add(time.Hour)
	case Weekly:
		d -= (int(t.Weekday()) + 6) % 7
		return time.Date(y, m, d, 0, 0, 0, 0, r.Zone), time.Date(y, m, d+7, 0, 0, 0, 0, r.Zone)
	case Daily:
	}
	return time.Date(y, m, d, 0, 0, 0, 0, r.Zone), time.Date(y, m, d+1, 0, 0, 0, 0, r.Zone)
}

// slotKey names a slot of a series.
type slotKey struct {
	series string
	start  int64 // seconds since 1970
}

// side is one side of a slot: how many elements speak of it, and their sum.
type side struct {
	elements int
	sum      int64
}

type total struct {
	rule             *Rule
	start, end       time.Time
	events, exposure side
}

// named is what an id stands for.
type named struct {
	entry   int
	element Element
}

// book is the publishers' account: elements in, classes and totals out.
type book struct {
	rules   []Rule
	clock   time.Time
	entries []Entry
	ids     map[string]named // by site and id
	slots   map[slotKey]*total
	homes   []slotKey // the starting slot of each entry
}

func newBook(rules []Rule) *book {
	return &book{rules: rules, ids: make(map[string]named), slots: make(map[slotKey]*total)}
}

func (b *book) rule(series string) *Rule {
	last := series[strings.LastIndexByte(series, '/')+1:]
	for i := range b.rules {
		if b.rules[i].LastPart == last {
			return &b.rules[i]
		}
	}
	return nil
}

// enter judges an element as it arrives. It fails if the judgement is not what
// was meant: then the scenario is wrong.
func (b *book) enter(e *Element, message, index int) error {
	entry := b.note(e, message, index)
	if entry.Class != e.Meant {
		return fmt.Errorf("message %d, element %d, meant to be %s, is %s %s: %s", message, index, e.Meant, entry.Class, entry.Reason, e.JSON())
	}
	return nil
}

// note judges an element as it arrives, whatever was meant.
func (b *book) note(e *Element, message, index int) Entry {
	entry := Entry{Message: message, Index: index, Series: e.Series}
	var home slotKey
	entry.Class, entry.Reason, home = b.judge(e)
	b.entries = append(b.entries, entry)
	b.homes = append(b.homes, home)
	return entry
}

// Reckon keeps the ledger of messages as they arrived, in that order, whatever
// was meant of their elements: messages that came twice stand there twice.
func Reckon(rules []Rule, messages [][]Element) Ledger {
	b := newBook(rules)
	for m, elements := range messages {
		for i := range elements {
			b.note(&elements[i], m, i)
		}
	}
	return b.close()
}

func (b *book) judge(e *Element) (Class, string, slotKey) {
	if e.Fault != "" {
		return Refused, e.Fault, slotKey{}
	}
	if e.Reported.After(b.clock) {
		b.clock = e.Reported
	}
	rule := b.rule(e.Series)
	if rule == nil {
		return Unmonitored, "", slotKey{}
	}
	if reason := b.reach(e, rule); reason != "" {
		return Refused, reason, slotKey{}
	}
	if e.ID == "" || rule.NoIDs {
		return Counted, "", b.add(e, rule, 1)
	}
	key := sender(e) + "/" + e.ID
	old, known := b.ids[key]
	switch {
	case !known && e.Retracted:
		return Refused, "no_such_id", slotKey{}
	case known && e.Revision < old.element.Revision:
		return Outdated, "", slotKey{}
	case known && e.Revision == old.element.Revision && sameContent(e, &old.element):
		return Repeat, "", slotKey{}
	case known && e.Revision == old.element.Revision:
		return Refused, "conflict", slotKey{}
	case known:
		if !old.element.Retracted { // a retraction did its work, whatever comes after
			b.entries[old.entry].Class = Replaced
		}
		b.add(&old.element, b.rule(old.element.Series), -1)
	}
	b.ids[key] = named{len(b.entries), *e}
	return Counted, "", b.add(e, rule, 1)
}

// reach says why an element lies outside the time in which data may change.
func (b *book) reach(e *Element, rule *Rule) string {
	if e.Retracted {
		return ""
	}
	_, slotEnd := rule.slot(e.Start)
	switch {
	case slotEnd.Before(b.clock.Add(-rule.Horizon)):
		return "beyond_horizon"
	case e.End.After(b.clock.Add(rule.Ahead)):
		return "too_far_ahead"
	case e.HasExposure && e.Exposure%rule.Grain != 0:
		return "finer_than_grain"
	case e.HasEvents && e.End.After(slotEnd):
		return "spans_slots"
	}
	return ""
}

func sameContent(a, b *Element) bool {
	return a.Series == b.Series && a.Retracted == b.Retracted && a.Start.Equal(b.Start) && a.End.Equal(b.End) &&
		a.HasEvents == b.HasEvents && a.Events == b.Events && a.HasExposure == b.HasExposure && a.Exposure == b.Exposure
}

// add puts an element into its slots, or with sign -1 takes it out again. It
// returns the slot in which the element starts.
func (b *book) add(e *Element, rule *Rule, sign int64) slotKey {
	if e.Retracted {
		return slotKey{}
	}
	home := b.total(e.Series, rule, e.Start)
	if e.HasEvents {
		home.events.elements += int(sign)
		home.events.sum += sign * e.Events
	}
	if e.HasExposure {
		b.spread(e, rule, sign)
	}
	return slotKey{e.Series, home.start.Unix()}
}

// spread divides an exposure over its slots by elapsed time. What division
// leaves over goes, a grain each, to the slots with the largest remainders,
// the earlier first.
func (b *book) spread(e *Element, rule *Rule, sign int64) {
	type share struct {
		slot       *total
		grains     int64
		remainder  *big.Int
		chronology int
	}
	var shares []share
	whole := big.NewInt(int64(e.End.Sub(e.Start)))
	left := int64(e.Exposure / rule.Grain)
	for t := e.Start; t.Before(e.End); {
		s := b.total(e.Series, rule, t)
		until := s.end
		if e.End.Before(until) {
			until = e.End
		}
		part := new(big.Int).Mul(big.NewInt(int64(e.Exposure/rule.Grain)), big.NewInt(int64(until.Sub(t))))
		quotient, remainder := part.QuoRem(part, whole, new(big.Int))
		shares = append(shares, share{s, quotient.Int64(), remainder, len(shares)})
		left -= quotient.Int64()
		t = until
	}
	slices.SortFunc(shares, func(a, b share) int {
		return cmp.Or(b.remainder.Cmp(a.remainder), cmp.Compare(a.chronology, b.chronology))
	})
	for i := range shares {
		s := &shares[i]
		if int64(i) < left {
			s.grains++
		}
		s.slot.exposure.elements += int(sign)
		s.slot.exposure.sum += sign * s.grains * int64(rule.Grain)
	}
}

func (b *book) total(series string, rule *Rule, t time.Time) *total {
	start, end := rule.slot(t)
	key := slotKey{series, start.Unix()}
	if b.slots[key] == nil {
		b.slots[key] = &total{rule: rule, start: start, end: end}
	}
	return b.slots[key]
}

// close settles what is withheld and orders the totals.
func (b *book) close() Ledger {
	for i := range b.entries {
		e := &b.entries[i]
		if e.Class == Counted && b.homes[i] != (slotKey{}) && b.slots[b.homes[i]].oneSided() {
			e.Class = Withheld
		}
	}
	totals := make([]SlotTotal, 0, len(b.slots))
	for key, t := range b.slots {
		if t.events.elements == 0 && t.exposure.elements == 0 {
			continue
		}
		totals = append(totals, SlotTotal{
			Series: key.series, Start: t.start, End: t.end,
			Events: t.events.sum, Exposure: Amount(t.exposure.sum),
			HasEvents: t.rule.Each || t.events.elements > 0, HasExposure: t.exposure.elements > 0,
		})
	}
	slices.SortFunc(totals, func(a, b SlotTotal) int {
		return cmp.Or(cmp.Compare(a.Series, b.Series), a.Start.Compare(b.Start))
	})
	return Ledger{Entries: b.entries, Slots: totals}
}

// oneSided reports whether a slot about which something is said lacks events
// or exposure.
func (t *total) oneSided() bool {
	return t.exposure.elements == 0 || (t.events.elements == 0 && !t.rule.Each)
}
