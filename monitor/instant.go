package monitor

import (
	"math"
	"time"
)

// Instant is a moment in microseconds since 1970-01-01T00:00:00Z. Finer
// fractions are cut off. It reaches far beyond the years 0 to 9999.
type Instant int64

// Never is later than every moment that can be written.
const Never Instant = math.MaxInt64

// Beginning is earlier than every moment that can be written. A partition's
// clock starts there.
const Beginning Instant = math.MinInt64

// InstantOf returns the moment of t, cut to the microsecond.
func InstantOf(t time.Time) Instant {
	return Instant(t.Unix()*1e6 + int64(t.Nanosecond())/1e3)
}

// Time returns the moment in UTC.
func (i Instant) Time() time.Time {
	return time.UnixMicro(int64(i)).UTC()
}

// Add returns the moment d later.
func (i Instant) Add(d time.Duration) Instant {
	if i == Never || i == Beginning {
		return i
	}
	return i + Instant(d/time.Microsecond)
}
