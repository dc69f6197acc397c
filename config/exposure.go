package config

import (
	"fmt"
	"time"
)

// usualExpiry is how long a census is carried forward unless said otherwise.
const usualExpiry = 90 * 24 * time.Hour

func (s section) readExposure(proportion bool) Exposure {
	word, _ := s.word("exposure", 0, "reported", "clock", "census")
	e := Exposure(word)
	switch {
	case proportion && e == Clock:
		s.fault("exposure", "a proportion counts trials, and trials don't come from a clock", `write exposure = "reported" or measure = "rate"`)
	case proportion && e == Census:
		s.fault("exposure", "a proportion counts trials, and trials that were made can't be carried forward to slots that come after",
			`write exposure = "reported" or measure = "rate"`)
	}
	return e
}

// Bounds of exposure by the clock, within which it is reckoned exactly at any
// grain from year 0 to 9999.
const (
	maxClockDigits = 4
	maxClockSize   = 1_000_000_000
	maxClockPer    = 3660 * 24 * time.Hour
)

func pow10(n uint8) uint64 {
	p := uint64(1)
	for range n {
		p *= 10
	}
	return p
}

// readClock returns how much exposure the clock brings.
func (s section) readClock(exposure Exposure) ClockExposure {
	clock := s.sub("clock")
	given := s.has("clock")
	switch {
	case given && exposure != Clock:
		s.fault("clock", `is used only with exposure = "clock"`, "leave it out, or say so")
		return ClockExposure{}
	case !given && exposure == Clock:
		s.fault("clock", "is missing: how much exposure is there in how much time?", `write e.g. clock = { size = 12, per = "1d" } for 12 devices in use all day`)
		return ClockExposure{}
	case !given:
		return ClockExposure{}
	}
	clock.strict("clock")
	size, sizeGiven, ok := clock.decimal("size")
	if ok && (!sizeGiven || size.Coef == 0) {
		clock.fault("size", "must be given, and greater than 0", "write how much exposure there is in the time that per names")
	}
	if ok && (size.Digits > maxClockDigits || size.Coef > maxClockSize*pow10(size.Digits)) {
		clock.fault("size", fmt.Sprintf("has more than %d decimals, or is more than %d", maxClockDigits, maxClockSize),
			"round it, or count in a larger unit")
	}
	per, _ := clock.duration("per", 24*time.Hour, time.Second, maxClockPer)
	return ClockExposure{Size: size, Per: per}
}

// readExpiry returns how long a census is carried forward.
func (s section) readExpiry(exposure Exposure) time.Duration {
	if exposure != Census {
		if s.has("expires") {
			s.fault("expires", `is used only with exposure = "census"`, "leave it out, or say so")
		}
		return 0
	}
	d, _ := s.duration("expires", usualExpiry, time.Second, maxTime)
	return d
}
