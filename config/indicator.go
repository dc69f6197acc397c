package config

import (
	"fmt"
	"math/big"
	"slices"
	"time"
)

// readIndicator reads one [[indicator]].
func (s section) readIndicator() Indicator {
	s.strict(indicatorPlace)
	in := Indicator{Line: s.node.line}
	in.Name, _ = s.plainName("name", 64)
	in.Title, _ = s.text("title", in.Name)
	in.EventNoun, _ = s.text("noun", in.Name)
	in.Series = s.readPatterns()
	in.Sums = s.readSums()
	in.Unit = s.readUnit()
	in.Every, _ = s.readEvery()
	in.ZoneName, in.Zone = s.readZone()
	s.readMeasure(&in)
	s.readExpected(&in)
	s.readTimes(&in)
	ids, _ := s.word("ids", 0, "kept", "none")
	in.KeepIDs = ids == 0
	in.Windows = s.readWindows(in.Every)
	s.readLook(&in)
	in.Baselines = s.readBaselines(&in)
	in.Allowance = s.readAllowance(&in)
	return in
}

func (s section) readPatterns() []Pattern {
	items, given := s.list("series", maxPatterns)
	if !given {
		s.fault("series", "is missing: which series are meant?", `write e.g. series = ["*/*/line-infection"]`)
	}
	var patterns []Pattern
	for i, n := range items {
		key := s.item("series", i)
		p, ok := s.patternOf(n, key)
		switch {
		case !ok:
		case slices.Contains(patterns, p):
			s.add(n, key, fmt.Sprintf("%q stands twice", n.text), "keep one")
		default:
			patterns = append(patterns, p)
		}
	}
	return patterns
}

// patternOf reads a pattern from one value.
func (c *collector) patternOf(n *node, key string) (Pattern, bool) {
	if n.kind != textKind {
		c.wrongKind(n, key, textKind)
		return Pattern{}, false
	}
	if problem := checkPattern(n.text); problem != "" {
		c.add(n, key, fmt.Sprintf("%q is no pattern: %s", n.text, problem),
			`a pattern is name parts joined by /, with * for any characters in a part and ** for any parts, e.g. "*/ward-*/fall"`)
		return Pattern{}, false
	}
	return NewPattern(n.text), true
}

func (s section) readUnit() string {
	unit, _ := s.text("unit", "")
	if expected, _ := s.truth("expected"); expected && !s.has("unit") {
		return "expected events"
	}
	if !s.has("unit") {
		s.fault("unit", "is missing: what are the events counted against?", `write e.g. unit = "device-days", or "procedures" for a proportion`)
	}
	return unit
}

func (s section) readEvery() (Every, bool) {
	n, given, ok := s.get("every", textKind)
	if !given {
		s.fault("every", "is missing: how long is a slot?", `write e.g. every = "1d"`)
	}
	if !given || !ok {
		return Every{}, false
	}
	e, err := ParseSpan(n.text)
	if err != nil {
		s.fault("every", fmt.Sprintf("%q is %s", n.text, err), "")
		return Every{}, false
	}
	if problem := checkSlot(e); problem != "" {
		s.fault("every", fmt.Sprintf("%q can't be the length of a slot", n.text), problem)
		return Every{}, false
	}
	return e, true
}

func (s section) readZone() (string, *time.Location) {
	n, given, ok := s.get("zone", textKind)
	if !given || !ok {
		return "UTC", time.UTC
	}
	zone, err := LoadZone(n.text)
	if err == nil {
		return n.text, zone
	}
	mend := `write an IANA name such as "Europe/Berlin" or "UTC"`
	if best, found := nearest(n.text, zoneNames()); found {
		mend = fmt.Sprintf("did you mean %q?", best)
	}
	s.fault("zone", fmt.Sprintf("%q is %s", n.text, err), mend)
	return "UTC", time.UTC
}

// readMeasure reads what is counted against what, and in which form.
func (s section) readMeasure(in *Indicator) {
	measure, ok := s.word("measure", 0, "rate", "proportion")
	in.Measure = Measure(measure)
	proportion := ok && in.Measure == Proportion
	in.Per = 1
	if per, given, sound := s.number("per"); given && sound {
		if per.Cmp(big.NewRat(1, 1_000_000)) < 0 || per.Cmp(big.NewRat(1_000_000_000_000, 1)) > 0 {
			s.fault("per", "is not between 0.000001 and 1000000000000", `for "per 1,000" write per = 1000`)
		} else {
			in.Per, _ = per.Float64()
		}
	}
	events, _ := s.word("events", 1, "each", "counted")
	in.Events = Events(events)
	in.Exposure = s.readExposure(proportion)
	in.Clock = s.readClock(in.Exposure)
	in.CensusExpiry = s.readExpiry(in.Exposure)
	in.GrainDigits = s.readGrain(proportion)
}

// readGrain returns the number of decimal places of the exposure.
func (s section) readGrain(proportion bool) int {
	grain, given, ok := s.decimal("grain")
	switch {
	case proportion && given && ok && grain != (Decimal{Coef: 1}):
		s.fault("grain", "trials are whole numbers", "leave it out")
		return 0
	case proportion:
		return 0
	case !given || !ok:
		return 6
	case grain.Coef != 1 || grain.Digits > 9:
		s.fault("grain", grain.String()+" is not one of 1, 0.1, 0.01 and so on to 0.000000001", "")
		return 6
	}
	return int(grain.Digits)
}

// usualTimes are the defaults of settle, horizon and ahead for a slot.
func usualTimes(e Every) (settle, horizon, ahead time.Duration) {
	const day = 24 * time.Hour
	switch e.Unit {
	case Minute, Hour:
		return 5 * time.Minute, 2 * day, 5 * time.Minute
	case Day:
		return 2 * day, 120 * day, day
	case Week:
		return 7 * day, 182 * day, day
	case Month:
		return 14 * day, 400 * day, day
	case Year:
		return 60 * day, 1100 * day, day
	}
	return 0, 0, 0
}

// readTimes reads how long data may take, and when silence is too long.
func (s section) readTimes(in *Indicator) {
	settle, horizon, ahead := usualTimes(in.Every)
	var settleOK, horizonOK bool
	in.Settle, settleOK = s.duration("settle", settle, 0, maxTime)
	in.Horizon, horizonOK = s.duration("horizon", max(horizon, in.Settle), time.Second, maxTime)
	in.Ahead, _ = s.duration("ahead", ahead, 0, maxTime)
	if settleOK && horizonOK && in.Horizon < in.Settle {
		s.fault("horizon", fmt.Sprintf("%s is shorter than settle, %s: data would be refused while they are still waited for",
			FormatDuration(in.Horizon), FormatDuration(in.Settle)), "make horizon at least as long")
	}
	if horizonOK && in.Every.N > 0 && in.horizonSlots() > maxSlots {
		s.fault("horizon", fmt.Sprintf("%s is more than %s slots of %s", FormatDuration(in.Horizon), grouped(maxSlots), in.Every),
			"make it shorter, or the slots longer")
	}
	s.readExpect(in)
	s.readFollowUp(in)
	s.readRemind(in)
	if s.has("retire") {
		in.Retire, _ = s.duration("retire", 0, time.Minute, maxTime)
	}
	in.Since = s.readSince(in.Every, in.Zone)
}

// readRemind reads after how long people are told again of an alert that nobody
// has acknowledged, and by which outlet.
func (s section) readRemind(in *Indicator) {
	if s.has("remind") {
		in.Remind, _ = s.duration("remind", 0, time.Minute, maxTime)
	}
	if !s.has("remind_to") {
		return
	}
	in.RemindTo, _ = s.plainName("remind_to", 64)
	if !s.has("remind") {
		s.fault("remind_to", "says where, but not when", `write e.g. remind = "4h" too`)
	}
}

// horizonSlots is the greatest number of slots that the horizon can touch.
func (in *Indicator) horizonSlots() int {
	return int(in.Horizon/in.Every.shortest()) + 2
}

func (s section) readSince(every Every, zone *time.Location) time.Time {
	t, ok := s.instant("since", zone)
	if !ok || t.IsZero() {
		return t
	}
	if problem := notAtSlot(t.In(zone), every); problem != "" {
		s.fault("since", fmt.Sprintf("%s does not begin a slot of %s", s.node.fields["since"].text, every), problem)
	}
	return t
}

// instant returns a moment, given as a date in the zone or as a time with its
// offset; zero if it isn't given.
func (s section) instant(name string, zone *time.Location) (time.Time, bool) {
	n, given, ok := s.get(name, dateKind, timeKind, textKind)
	if !given || !ok {
		return time.Time{}, ok
	}
	t, err := time.ParseInLocation(time.DateOnly, n.text, zone)
	if err != nil {
		t, err = time.Parse(time.RFC3339Nano, n.text)
	}
	switch {
	case err != nil:
		s.fault(name, fmt.Sprintf("%q is neither a date nor a time with its offset", n.text),
			`write e.g. "2026-01-01" (in the indicator's zone) or "2026-01-01T00:00:00+01:00"`)
		return time.Time{}, false
	case t.Year() < 1 || t.Year() > 9998:
		s.fault(name, n.text+" is not a time of the years 1 to 9998", "")
		return time.Time{}, false
	}
	return t.UTC(), true
}

// notAtSlot says where slots of a day and more begin if t isn't there.
func notAtSlot(t time.Time, every Every) string {
	y, m, d := t.Date()
	if every.Unit >= Day && every.N > 0 && !t.Equal(time.Date(y, m, d, 0, 0, 0, 0, t.Location())) {
		return "slots begin at midnight of the indicator's zone"
	}
	switch every.Unit {
	case Week:
		if t.Weekday() != time.Monday {
			return "weeks begin on Monday"
		}
	case Month:
		if d != 1 || (int(m)-1)%every.N != 0 {
			if every.N == 3 {
				return "quarters begin on 1 January, 1 April, 1 July and 1 October"
			}
			return "months begin on their first day"
		}
	case Year:
		if d != 1 || m != time.January {
			return "years begin on 1 January"
		}
	case Minute, Hour, Day:
	}
	return ""
}
