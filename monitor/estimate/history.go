package estimate

import (
	"cmp"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"math/big"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// Slot is one slot of a series with both its sides known.
type Slot struct {
	// Number is the slot's number in the indicator's calendar.
	Number int64
	Start  monitor.Instant
	Events int64
	// Exposure in the indicator's unit; whole for a proportion.
	Exposure float64
}

// Series is the history of one series, oldest slot first.
type Series struct {
	Name  string
	Slots []Slot
	// Missing slots lack a side, Overfull ones have more events than trials
	// or events without exposure; neither is used.
	Missing, Overfull int
	grains            *big.Int
}

// History is what an estimate is made from.
type History struct {
	Indicator *config.Indicator
	Series    []Series
	// From and To bound the slots that were used.
	From, To monitor.Instant
	// Digest is the lower-case hex SHA-256 of the slots used, one a line:
	// series, start in RFC 3339, events, exposure.
	Digest string
}

// Span limits a history. Zero From and To mean no limit.
type Span struct {
	// From and To bound the slots used: those that begin at From or later and
	// end at To or before. To may lie beyond Clock: then silence up to there
	// is known to be silence.
	From, To time.Time
	// Clock is how far the data reach: without To, slots that had not settled
	// by then are left out; monitor.Never leaves none out.
	Clock monitor.Instant
}

// Errors of Gather.
var (
	ErrNothing = errors.New("no series asked for has a slot with both a count and an exposure in the span asked for")
	ErrSpan    = errors.New("the span ends before it begins")
	// ErrNoExposure is of a history without any exposure.
	ErrNoExposure = errors.New("no slot has any exposure, so there is no rate to estimate: report what the events happened in, or state a rate (kind = \"known\")")
)

// Gather returns the history of the indicator's series from the sums of their
// slots; sums of other series are passed over, and of two sums of the same slot
// the later stands. Silent slots of events = "each" count as zero, and exposure
// by the clock is worked out, from the beginning of a series on.
func Gather(in *config.Indicator, sums []monitor.SlotSum, span Span) (*History, error) {
	if !span.From.IsZero() && !span.To.IsZero() && !span.To.After(span.From) {
		return nil, ErrSpan
	}
	bySeries := map[string]map[int64]monitor.SlotSum{}
	cal := monitor.NewCalendar(in.Every, in.Zone)
	for _, s := range sums {
		if !in.Matches(s.Series) {
			continue
		}
		if bySeries[s.Series] == nil {
			bySeries[s.Series] = map[int64]monitor.SlotSum{}
		}
		bySeries[s.Series][cal.Slot(s.Start)] = s
	}
	g := gatherer{in: in, cal: cal, span: span, digest: sha256.New()}
	h := &History{Indicator: in, From: monitor.Never, To: monitor.Beginning}
	overfull := 0
	names := make([]string, 0, len(bySeries))
	for name := range bySeries {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		s, err := g.series(name, bySeries[name])
		if err != nil {
			return nil, err
		}
		overfull += s.Overfull
		if n := len(s.Slots); n > 0 {
			h.From = min(h.From, s.Slots[0].Start)
			h.To = max(h.To, cal.Start(s.Slots[n-1].Number+1))
			h.Series = append(h.Series, s)
		}
	}
	if len(h.Series) == 0 && overfull > 0 {
		return nil, fmt.Errorf("%w: %d slots have more events than trials, or events without exposure", ErrNothing, overfull)
	}
	if len(h.Series) == 0 {
		return nil, ErrNothing
	}
	h.Digest = hex.EncodeToString(g.digest.Sum(nil))
	return h, nil
}

type gatherer struct {
	in     *config.Indicator
	cal    *monitor.Calendar
	span   Span
	digest hash.Hash
}

func (g *gatherer) series(name string, sums map[int64]monitor.SlotSum) (Series, error) {
	s := Series{Name: name, grains: new(big.Int)}
	first, last := g.bounds(sums)
	if g.in.Events == config.Each || g.in.Exposure == config.Clock {
		for slot := first; slot < last; slot++ {
			if err := g.add(&s, slot, sums[slot]); err != nil {
				return s, err
			}
		}
		return s, nil
	}
	slots := make([]int64, 0, len(sums))
	for slot := range sums {
		if slot >= first && slot < last {
			slots = append(slots, slot)
		}
	}
	slices.Sort(slots)
	for _, slot := range slots {
		if err := g.add(&s, slot, sums[slot]); err != nil {
			return s, err
		}
	}
	s.Missing = max(0, int(last-first)-len(s.Slots)-s.Overfull)
	return s, nil
}

// bounds returns the first slot of a series and the one after its last.
func (g *gatherer) bounds(sums map[int64]monitor.SlotSum) (first, last int64) {
	first, last = int64(1)<<62, -int64(1)<<62
	for slot := range sums {
		first = min(first, slot)
		last = max(last, slot+1)
	}
	if !g.in.Since.IsZero() {
		first = min(first, g.cal.Slot(monitor.InstantOf(g.in.Since)))
	}
	if !g.span.From.IsZero() {
		from := monitor.InstantOf(g.span.From)
		slot := g.cal.Slot(from)
		if g.cal.Start(slot) < from {
			slot++
		}
		first = max(first, slot)
	}
	silent := g.in.Events == config.Each // then silence goes on after the last message
	switch {
	case !g.span.To.IsZero():
		end := g.cal.Slot(monitor.InstantOf(g.span.To))
		if silent || end < last {
			last = end
		}
	case g.span.Clock != monitor.Beginning && g.span.Clock != monitor.Never:
		settled := g.cal.Slot(g.span.Clock.Add(-g.in.Settle))
		if silent || settled < last {
			last = settled
		}
	}
	return first, last
}

func (g *gatherer) add(s *Series, slot int64, sum monitor.SlotSum) error {
	grains, known, err := g.exposure(slot, sum)
	if err != nil {
		return fmt.Errorf("series %s: %w", s.Name, err)
	}
	if !known || (g.in.Events != config.Each && !sum.HasEvents) {
		s.Missing++
		return nil
	}
	exposure := g.float(grains)
	if (exposure == 0 && sum.Events > 0) || (g.in.Measure == config.Proportion && float64(sum.Events) > exposure) {
		s.Overfull++
		return nil
	}
	start := g.cal.Start(slot)
	s.Slots = append(s.Slots, Slot{Number: slot, Start: start, Events: sum.Events, Exposure: exposure})
	s.grains.Add(s.grains, grains)
	_, err = fmt.Fprintf(g.digest, "%s\t%s\t%d\t%s\n", s.Name, start.Time().Format(time.RFC3339), sum.Events, decimal(grains, g.in.GrainDigits))
	return err
}

// exposure returns a slot's exposure in grains.
func (g *gatherer) exposure(slot int64, sum monitor.SlotSum) (grains *big.Int, known bool, err error) {
	if g.in.Exposure == config.Clock {
		from, to := g.clock(g.cal.Start(slot)), g.clock(g.cal.Start(slot+1))
		return to.Sub(to, from), true, nil
	}
	if !sum.HasExposure {
		return nil, false, nil
	}
	r, ok := new(big.Rat).SetString(sum.Exposure)
	if !ok {
		return nil, false, fmt.Errorf("%q is no exposure", sum.Exposure)
	}
	r.Mul(r, new(big.Rat).SetInt(pow10(g.in.GrainDigits)))
	return new(big.Int).Div(r.Num(), r.Denom()), true, nil
}

// clock returns the exposure by the clock since 1970, in grains rounded down,
// so that adjoining slots sum to that of their union.
func (g *gatherer) clock(at monitor.Instant) *big.Int {
	n := new(big.Int).SetUint64(g.in.Clock.Size.Coef)
	n.Mul(n, big.NewInt(int64(at))).Mul(n, pow10(g.in.GrainDigits))
	d := big.NewInt(int64(g.in.Clock.Per / time.Microsecond))
	d.Mul(d, pow10(int(g.in.Clock.Size.Digits)))
	return n.Div(n, d)
}

func (g *gatherer) float(grains *big.Int) float64 {
	f, _ := new(big.Rat).SetFrac(grains, pow10(g.in.GrainDigits)).Float64()
	return f
}

func pow10(n int) *big.Int {
	return new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(n)), nil)
}

// decimal writes grains as a plain decimal number.
func decimal(grains *big.Int, digits int) string {
	if grains == nil {
		return "0"
	}
	s := new(big.Rat).SetFrac(grains, pow10(digits)).FloatString(digits)
	if digits == 0 {
		return s
	}
	for s[len(s)-1] == '0' {
		s = s[:len(s)-1]
	}
	if s[len(s)-1] == '.' {
		s = s[:len(s)-1]
	}
	return s
}

// Select returns the part of a history whose series satisfy keep, with its own
// digest unchanged: it names the data that were read.
func (h *History) Select(keep func(series string) bool) (*History, error) {
	part := *h
	part.Series = slices.DeleteFunc(slices.Clone(h.Series), func(s Series) bool { return !keep(s.Name) })
	if len(part.Series) == 0 {
		return nil, ErrNothing
	}
	return &part, nil
}

func (s *Series) events() int64 {
	n := int64(0)
	for i := range s.Slots {
		n += s.Slots[i].Events
	}
	return n
}

func (s *Series) exposure() float64 {
	sum := 0.0
	for i := range s.Slots {
		sum += s.Slots[i].Exposure
	}
	return sum
}

// summed returns all series as one: slot by slot, whatever is known.
func (h *History) summed() Series {
	bySlot := map[int64]Slot{}
	sum := Series{Name: "all series", grains: new(big.Int)}
	for i := range h.Series {
		s := &h.Series[i]
		for _, slot := range s.Slots {
			have := bySlot[slot.Number]
			slot.Events += have.Events
			slot.Exposure += have.Exposure
			bySlot[slot.Number] = slot
		}
		sum.Missing += s.Missing
		sum.Overfull += s.Overfull
		sum.grains.Add(sum.grains, s.grains)
	}
	for _, slot := range bySlot {
		sum.Slots = append(sum.Slots, slot)
	}
	slices.SortFunc(sum.Slots, func(a, b Slot) int { return cmp.Compare(a.Number, b.Number) })
	return sum
}
