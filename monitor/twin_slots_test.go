package monitor

import (
	"fmt"
	"math/big"
	"slices"
	"time"

	"tailbell/config"
)

// twinSlots numbers slots by trying: a civil slot begins at the first quarter
// of an hour whose local date is its first one or a later one.
type twinSlots struct {
	every config.Every
	zone  *time.Location
	known map[int64]Instant
}

func newTwinSlots(in *config.Indicator) *twinSlots {
	return &twinSlots{every: in.Every, zone: in.Zone, known: map[int64]Instant{}}
}

// uniform returns the length of slots of equal length, 0 for civil ones.
func (x *twinSlots) uniform() time.Duration {
	switch x.every.Unit {
	case config.Minute:
		return time.Duration(x.every.N) * time.Minute
	case config.Hour:
		return time.Duration(x.every.N) * time.Hour
	case config.Day, config.Week, config.Month, config.Year:
	}
	return 0
}

// origin is a moment at which a slot of uniform length begins, number 0: the
// last such before 1970 or at its beginning.
func (x *twinSlots) origin() time.Time {
	local := time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC)
	_, offset := local.In(x.zone).Zone()
	begins := local.Add(-time.Duration(offset) * time.Second) // local midnight by that offset
	t, length := time.Unix(0, 0), x.uniform()
	for begins.Sub(t)%length != 0 {
		t = t.Add(-time.Minute)
	}
	return t
}

func (x *twinSlots) start(n int64) Instant {
	if at, ok := x.known[n]; ok {
		return at
	}
	var at Instant
	if length := x.uniform(); length > 0 {
		at = InstantOf(x.origin().Add(time.Duration(n) * length))
	} else {
		at = x.firstOf(x.date(n))
	}
	x.known[n] = at
	return at
}

// date is the first civil date of slot n, as midnight UTC.
func (x *twinSlots) date(n int64) time.Time {
	k := int(n)
	switch x.every.Unit {
	case config.Day:
		return time.Date(1970, 1, 1+k, 0, 0, 0, 0, time.UTC)
	case config.Week:
		return time.Date(1970, 1, 5+7*k, 0, 0, 0, 0, time.UTC)
	case config.Month:
		return time.Date(0, time.Month(1+k*x.every.N), 1, 0, 0, 0, 0, time.UTC)
	case config.Year, config.Minute, config.Hour:
	}
	return time.Date(k, 1, 1, 0, 0, 0, 0, time.UTC)
}

func (x *twinSlots) firstOf(date time.Time) Instant {
	for t := date.Add(-27 * time.Hour); ; t = t.Add(15 * time.Minute) {
		y, m, d := t.In(x.zone).Date()
		if !time.Date(y, m, d, 0, 0, 0, 0, time.UTC).Before(date) {
			return InstantOf(t)
		}
	}
}

// at returns the slot that holds the moment.
func (x *twinSlots) at(t Instant) int64 {
	var n int64
	local := t.Time().In(x.zone)
	y, m, d := local.Date()
	days := int64(time.Date(y, m, d, 0, 0, 0, 0, time.UTC).Sub(time.Unix(0, 0)) / (24 * time.Hour))
	switch x.every.Unit {
	case config.Day:
		n = days
	case config.Week:
		n = days / 7
	case config.Month:
		n = (int64(y)*12 + int64(m)) / int64(x.every.N)
	case config.Year:
		n = int64(y)
	case config.Minute, config.Hour:
		n = int64(t.Time().Sub(x.origin()) / x.uniform())
	}
	for x.start(n) > t {
		n--
	}
	for x.start(n+1) <= t {
		n++
	}
	return n
}

// looksAt reports whether a window with that step looks at the boundary.
func (x *twinSlots) looksAt(boundary int64, step int) bool {
	if x.every.Unit == config.Day {
		boundary -= 4 // from Monday 1970-01-05
	}
	return boundary%int64(step) == 0
}

// twinGrains is the decimal in whole grains, and false if it has none.
func twinGrains(d config.Decimal, digits int) (*big.Int, bool) {
	r, ok := new(big.Rat).SetString(d.String())
	if !ok {
		panic("not a decimal: " + d.String())
	}
	r.Mul(r, new(big.Rat).SetInt(new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(digits)), nil)))
	return r.Num(), r.IsInt()
}

// twinSpread divides grains by elapsed time, by largest remainders.
func twinSpread(grains int64, lengths []int64) []int64 {
	var total int64
	for _, l := range lengths {
		total += l
	}
	type part struct {
		at   int
		rest *big.Int
	}
	shares := make([]int64, len(lengths))
	var parts []part
	left := grains
	for i, l := range lengths {
		product := new(big.Int).Mul(big.NewInt(grains), big.NewInt(l))
		quotient, rest := new(big.Int).QuoRem(product, big.NewInt(total), new(big.Int))
		shares[i] = quotient.Int64()
		left -= shares[i]
		parts = append(parts, part{at: i, rest: rest})
	}
	slices.SortStableFunc(parts, func(a, b part) int { return b.rest.Cmp(a.rest) })
	for i := range left {
		shares[parts[i].at]++
	}
	return shares
}

// twinByClock is the exposure of a span by the clock, which the tests' rates
// make a whole number of grains.
func twinByClock(in *config.Indicator, from, to Instant) int64 {
	grains, _ := twinGrains(in.Clock.Size, in.GrainDigits)
	r := new(big.Rat).SetFrac(new(big.Int).Mul(grains, big.NewInt(int64(to-from))), big.NewInt(in.Clock.Per.Microseconds()))
	if !r.IsInt() {
		panic(fmt.Sprintf("exposure from %d to %d is not whole", from, to))
	}
	return r.Num().Int64()
}
