package allowance

import (
	"errors"
	"fmt"
	"math"
)

// Tail is the direction in which a look signals.
type Tail int

// The two tails.
const (
	Upper Tail = iota // too many events
	Lower             // too few
)

// Law is how the events of an exposure are distributed while nothing has
// changed.
type Law struct {
	// Proportion is set for events in trials (binomial), else they are a rate's
	// (Poisson).
	Proportion bool
	// Rate is the known rate a unit of exposure, or the known proportion.
	Rate float64
	// Estimated is set where the rate was estimated from Events in Exposure (a
	// number of trials for a proportion); Rate then means nothing.
	Estimated bool
	Events    int64
	Exposure  float64
	// Margin is the ratio that is still accepted (on the odds of an estimated
	// proportion), Spread the variance over that of the model. 0 means 1.
	Margin, Spread float64
}

// Window is one rolling window.
type Window struct {
	// Slots is its length and Step the distance of its looks, in slots.
	Slots, Step int
	// Slot looks are made every Step, Arrival looks at each event. A window with
	// neither has no part in the limits.
	Slot, Arrival bool
	// Trials, if not 0, makes it the last so many trials of a proportion in place
	// of slots: arrival looks only.
	Trials int64
}

// Plan is what the limits of one series follow from.
type Plan struct {
	Law Law
	// Exposure of a slot; the number of trials for a proportion. It is what tests
	// count with: weighted by everything but Cycle and Known.
	Exposure float64
	// Least says how much smaller a steady exposure may be: it lies in
	// [Least Exposure, Exposure]. 0 means 1: it is Exposure.
	Least float64
	// Vary says how much each slot's exposure may differ from the others', in any
	// order: by a factor between 1-Vary (0 if that is less) and 1+Vary.
	Vary float64
	// Cycle, if any, are factors of the rate (for a proportion, of the odds) of
	// one slot after the other, again and again.
	Cycle []float64
	// Known, if any, is the share of a slot's events that is known at a look: at
	// [0] of the newest slot in the window, and so on; 1 beyond its end. It never
	// falls. For a rate without spread and slot looks only.
	Known []float64
	// Messages are the shares of messages (they sum to 1) with 1, 2, ... events,
	// for arrival looks; none means one event each.
	Messages []float64
	// Volume is how many trials a slot brings at most, on average over a year, for
	// windows of trials. 0 means Exposure. Batch is the least and the largest number
	// of them that come at one moment; zeros mean 1.
	Volume  float64
	Batch   [2]int64
	Windows []Window
	// Upper and Lower are the tails that are watched.
	Upper, Lower bool
	// SlotsPerYear is how many slots a year of 365.2425 days has.
	SlotsPerYear float64
	// PerYear is how many false alerts a year are accepted on the series.
	PerYear float64
	// Starts is how many first looks of each window a year are paid for: a series
	// that begins once in the span of an allowance "1 in 5y" has 0.2.
	Starts float64
	// Assurance, if not 0, takes the rate of an estimated baseline from its
	// one-sided bound at this confidence instead of averaging.
	Assurance float64
	// Level is one minus the confidence of the baseline's bounds at which Low and
	// High are told. 0 means 0.05.
	Level float64
}

// ErrPlan is wrapped by the errors of plans that make no sense.
var ErrPlan = errors.New("allowance: the plan makes no sense")

func fault(format string, args ...any) error {
	return fmt.Errorf("%w: %s", ErrPlan, fmt.Sprintf(format, args...))
}

// positive reports a finite number above 0.
func positive(x float64) bool { return x > 0 && !math.IsInf(x, 0) }

// mostVary is the greatest Vary.
const mostVary = 1 << 20

// mostEvents is how many may be expected a slot: as many as one observation tells.
const mostEvents = 1 << 42

// Check says what is wrong with a plan.
func (p *Plan) Check() error {
	switch {
	case !positive(p.Exposure):
		return fault("the exposure of a slot is %v, not above 0", p.Exposure)
	case !p.Law.Proportion && p.Law.Rate*p.Exposure > mostEvents:
		return fault("%v events expected a slot are more than can be counted", p.Law.Rate*p.Exposure)
	case p.Law.Proportion && (p.Exposure != math.Trunc(p.Exposure) || p.Exposure > 1<<40):
		return fault("%v trials a slot are not a whole number", p.Exposure)
	case !(p.Least >= 0 && p.Least <= 1):
		return fault("Least is %v, not from 0 to 1", p.Least)
	case !(p.Vary >= 0 && p.Vary <= mostVary):
		return fault("Vary is %v, not from 0 to %v", p.Vary, float64(mostVary))
	case !positive(p.SlotsPerYear):
		return fault("a year has %v slots", p.SlotsPerYear)
	case !positive(p.PerYear):
		return fault("%v false alerts a year can't be kept", p.PerYear)
	case !(p.Starts >= 0) || math.IsInf(p.Starts, 0):
		return fault("%v first looks a year", p.Starts)
	case p.Assurance != 0 && !(p.Assurance >= 0.5 && p.Assurance < 1):
		return fault("an assurance of %v is not from 0.5 to under 1", p.Assurance)
	case !(p.Level >= 0 && p.Level < 1):
		return fault("a level of %v is not from 0 to under 1", p.Level)
	case !p.Upper && !p.Lower:
		return fault("no tail is watched")
	}
	if err := p.Law.check(); err != nil {
		return err
	}
	if err := p.checkProfile(); err != nil {
		return err
	}
	return p.checkWindows()
}

func (l *Law) check() error {
	switch {
	case l.Margin != 0 && !(l.Margin >= 1 && positive(l.Margin)):
		return fault("a margin of %v is under 1", l.Margin)
	case l.Spread != 0 && !(l.Spread >= 1 && positive(l.Spread)):
		return fault("a spread of %v is under 1", l.Spread)
	case !l.Estimated && !positive(l.Rate):
		return fault("a rate of %v is not above 0", l.Rate)
	case !l.Estimated && l.Proportion && l.Rate*l.margin() >= 1:
		return fault("a proportion of %v with its margin is not under 1", l.Rate)
	case !l.Estimated:
		return nil
	case l.Events < 0 || l.Events > 1<<40 || !positive(l.Exposure):
		return fault("a reference of %d events in %v", l.Events, l.Exposure)
	case l.Proportion && (l.Exposure != math.Trunc(l.Exposure) || l.Exposure > 1<<40 || float64(l.Events) > l.Exposure):
		return fault("a reference of %d events in %v trials", l.Events, l.Exposure)
	}
	return nil
}

// most bounds the length of what is walked through slot by slot.
const most = 1 << 20

func (p *Plan) checkProfile() error {
	if len(p.Cycle) > most || len(p.Known) > most {
		return fault("a cycle of %d slots, shares known at %d ages", len(p.Cycle), len(p.Known))
	}
	for _, f := range p.Cycle {
		if !positive(f) {
			return fault("a factor of the cycle is %v", f)
		}
	}
	before := 0.0
	for _, f := range p.Known {
		if !(f >= before && f <= 1) {
			return fault("the share %v of what is known does not follow %v", f, before)
		}
		before = f
	}
	if len(p.Known) > 0 && (p.Law.Proportion || p.Law.spread() > 1) {
		return fault("slow reports are counted with for a rate without spread only")
	}
	sum := 0.0
	for _, f := range p.Messages {
		if !(f >= 0 && f <= 1) {
			return fault("a share of messages is %v", f)
		}
		sum += f
	}
	if len(p.Messages) > 0 && !(sum > 0.999999 && sum < 1.000001) {
		return fault("the shares of messages sum to %v", sum)
	}
	return nil
}

func (p *Plan) checkWindows() error {
	looked := false
	for _, w := range p.Windows {
		looked = looked || w.Slot || w.Arrival
		if w.Trials != 0 {
			if err := p.checkTrials(w); err != nil {
				return err
			}
			continue
		}
		switch {
		case w.Slots < 1 || w.Step < 1 || w.Slots > most || w.Step > most:
			return fault("a window of %d slots with a step of %d", w.Slots, w.Step)
		case w.Arrival && (p.Law.Proportion || len(p.Known) > 0):
			return fault("arrival looks are for rates whose events are known at once")
		case w.Arrival && !p.Upper:
			return fault("arrival looks are for the upper tail")
		}
	}
	if !looked {
		return fault("no window that is ever looked at")
	}
	return nil
}

// checkTrials says what is wrong with a window of trials.
func (p *Plan) checkTrials(w Window) error {
	switch least, most := p.batch(); {
	case w.Trials < 1 || w.Trials > mostTrials:
		return fault("a window of %d trials", w.Trials)
	case w.Slot || !p.Law.Proportion:
		return fault("a window of %d trials is for a proportion whose events are looked at as they come", w.Trials)
	case w.Arrival && !p.Upper:
		return fault("arrival looks are for the upper tail")
	case p.Law.spread() > 1 || len(p.Cycle) > 0:
		return fault("windows of trials are for trials that are alike, without spread or strata")
	case p.Volume != 0 && !positive(p.Volume):
		return fault("%v trials a slot on average", p.Volume)
	case least > most || most > mostTrials:
		return fault("batches of %d to %d trials", p.Batch[0], p.Batch[1])
	}
	return nil
}

// mostTrials bounds trials in a window or a batch.
const mostTrials = 1 << 40

func (l *Law) margin() float64 { return max(l.Margin, 1) }
func (l *Law) spread() float64 { return max(l.Spread, 1) }

// least is Least, resolved.
func (p *Plan) least() float64 {
	if p.Least == 0 {
		return 1
	}
	return p.Least
}

// Limits is the answer to a plan.
type Limits struct {
	// Parts are in the order of the windows; of a window the slot looks of the
	// upper tail come first, then those of the lower, then arrival looks.
	Parts []Part
	// PerYear is what Parts are predicted to bring together, at most: it does not
	// exceed the plan's. Low and High are the sums of theirs.
	PerYear, Low, High float64
}

// Basis says what a prediction is.
type Basis int

// What a prediction can be.
const (
	Exact       Basis = iota // the expected number of crossings
	Bound                    // at most so many, whatever the exposures are within the profile
	Average                  // averaged over what an estimated baseline leaves open
	Assured                  // at the baseline's bound at the asked confidence
	Approximate              // by a law that only resembles the sum of the slots'
)

// String says it in words.
func (b Basis) String() string {
	switch b {
	case Exact:
		return "exact"
	case Bound:
		return "upper bound"
	case Average:
		return "average over the estimate"
	case Assured:
		return "at the assured bound"
	case Approximate:
		return "approximate"
	}
	return "unknown basis"
}

// Part is one window looked at in one tail in one way.
type Part struct {
	Window  int // index in Plan.Windows
	Tail    Tail
	Arrival bool
	// Alpha is the limit on p: a look signals if exact.AtMost(p, Alpha). 0: it
	// never signals, because not even its rarest count fits into the share.
	Alpha float64
	// Critical is the count that signals at Exposure (at the beginning of Cycle)
	// and Size the chance of a look to signal there, if HasCritical.
	Critical    int64
	HasCritical bool
	Size        float64
	// PerYear is what it is predicted to bring, in the sense of Basis, first
	// looks included. Low and High are the same at the bounds of an estimated
	// baseline; for a known one they equal PerYear.
	PerYear, Low, High float64
	Basis              Basis
}
