package monitor

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"tailbell/config"
)

// Why an act on series can't hold, or is most likely a mistake.

// senseless says why the act can't hold; "" if it can.
func (e *Engine) senseless(f *fact) (Reason, string) {
	same := func(x fact) bool {
		x.Taken, x.By, x.Why = f.Taken, f.By, f.Why
		return x == *f
	}
	if slices.ContainsFunc(e.facts, same) {
		return NotAllowed, fmt.Sprintf("this %s of %s was said already", f.Kind, f.Series)
	}
	if e.clock != Beginning && f.From > e.clock.Add(LongestShelf) {
		return NotAllowed, fmt.Sprintf("it would hold from %s, more than %s after the stream's clock %s: say it when it is nearer",
			at(f.From), config.FormatDuration(LongestShelf), at(e.clock))
	}
	matched := e.matched(f)
	if len(matched) == 0 && !e.mayMatch(f) {
		return NoSuchSeries, fmt.Sprintf("no series here is called %q or matches it, and no indicator would monitor one", f.Series)
	}
	for _, s := range matched {
		if reason, detail := e.unfitFor(f, s); reason != "" {
			return reason, detail
		}
	}
	if f.Into != "" {
		return e.unfitHeir(f, matched)
	}
	return e.pointless(f, matched)
}

// pointless says why an act that would hold for nothing, or that can't be true
// yet, is most likely a mistake; "" if it is none.
func (e *Engine) pointless(f *fact, matched []*series) (Reason, string) {
	switch {
	case f.Kind == Reset && len(matched) == 0 && len(e.laterFor(f)) == 0:
		return NoSuchSeries, fmt.Sprintf("no series that was heard of is called %q or matches it: there is nothing to reset", f.Series)
	case f.What == Closing && len(matched) == 0 && !config.IsSum(f.Series):
		return NoSuchSeries, fmt.Sprintf("no series that was heard of is called %q: there is nothing to close", f.Series)
	case f.Kind == SignOff && e.clock != Beginning && f.Until > e.clock:
		return NotAllowed, fmt.Sprintf("nothing can be final yet of a time that ends at %s: the stream's clock is %s", dateIn(zoneAmong(matched), f.Until), dateIn(zoneAmong(matched), e.clock))
	}
	return "", ""
}

// unfitFor says why the act can't hold for a series.
func (e *Engine) unfitFor(f *fact, s *series) (Reason, string) {
	ix := s.indicator
	slot := ix.firstFrom(f.From)
	if f.Kind != Reset && f.Kind != SignOff && ix.started && !f.Straddle && slot <= ix.frozenAt {
		return BeyondHorizon, fmt.Sprintf("%s lies before the horizon of series %q, %s: looks from before can't change any more",
			dateIn(ix.cfg.Zone, f.From), s.name, dateIn(ix.cfg.Zone, ix.cal.Start(ix.frozenAt)))
	}
	switch {
	case s.sum != nil: // it follows its members
	case f.What == Opening && s.birth < slot && s.dates.isOpen(slot-1):
		return NotAllowed, fmt.Sprintf("series %q is open already, since %s: close it first, or reset it", s.name, dateIn(ix.cfg.Zone, ix.cal.Start(s.birth)))
	case f.What == Opening && s.dates != nil && slices.ContainsFunc(s.dates.turns, func(t turn) bool { return t.slot >= slot }):
		return NotAllowed, fmt.Sprintf("series %q is opened or closed at a later date already", s.name)
	case f.turns() && f.What != Opening && !s.dates.isOpen(slot):
		return NotAllowed, fmt.Sprintf("series %q is closed already", s.name)
	}
	return "", ""
}

// notOutBy says that nothing is out of service by the words of the act, and by
// which others it is.
func (e *Engine) notOutBy(f *fact) string {
	zone := zoneAmong(e.matched(f))
	var words []string
	for i := range e.facts {
		if x := &e.facts[i]; x.Kind == OutOfService && x.From <= f.From && f.From < x.Until {
			words = append(words, strconv.Quote(x.Series))
		}
	}
	text := fmt.Sprintf("nothing is out of service at %s by the words %q", dateIn(zone, f.From), f.Series)
	if len(words) == 0 {
		return text + ", nor by any others"
	}
	const most = 5
	if n := len(words) - most; n > 0 {
		words = append(words[:most], fmt.Sprintf("%d others", n))
	}
	return text + ": name it as it was named, " + strings.Join(words, " or ")
}

// zoneAmong is the zone of the first of the series; UTC if there is none.
func zoneAmong(list []*series) *time.Location {
	if len(list) == 0 {
		return time.UTC
	}
	return list[0].indicator.cfg.Zone
}

// dateIn writes a moment as the date that begins with it in the zone, or else as
// a time with its offset.
func dateIn(zone *time.Location, i Instant) string {
	t := i.Time().In(zone)
	if t.Equal(time.Date(t.Year(), t.Month(), t.Day(), 0, 0, 0, 0, zone)) {
		return t.Format(time.DateOnly)
	}
	return t.Format(time.RFC3339)
}
