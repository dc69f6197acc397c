// Package plant plants excesses in many histories, runs the engine over each,
// and counts what it finds, how late, and what it rings for in vain.
//
// # Model
//
// A history is a run of observations of one series (of several, where a
// baseline is taken from peers, or an allowance is over all series). It is
// either invented, drawn from the indicator's baseline slot by slot, or a real
// one. One excess is planted in it: over a span of whole slots the true rate is
// the usual one times a ratio that follows a Shape. More events are added as Poisson (for a proportion: each
// trial without an event gets one with the chance that is lacking), fewer are
// made by keeping each event with the chance of the ratio, once for all
// revisions of an observation. The same engine as the daemon's judges the
// history (monitor.Engine), with the excess and without it.
//
// All ratios, and both set-ups where two are compared, judge the same
// histories. Every history has sources of random numbers of its own, derived
// from the seed and its number: the result depends on neither the number of
// workers nor their timing.
//
// # What is counted
//
// An excess is found in time if an alert in its direction opens by a look whose
// window ends after the excess began and not after it ended; found late if the
// window ends after that, but began before its end. It is masked if an alert was
// signalling already when it began and none opened: a team that looks at that
// alert may see it or not. The delay is from the beginning of the excess to the
// moment when the look was due, so it holds the time that slots wait to settle.
//
// Shares have Clopper and Pearson's bounds (1934), numbers of false alerts
// Garwood's (1936), medians of delays those of the bootstrap.
//
// # Caveats
//
// Invented counts know no drift, no season and no clumps but those that the
// baseline states: what is found in them is the best that can be hoped for.
// Planted runs are without people: acts of a history are left out of them, so
// that spans marked real are not left out of baselines taken from the past.
package plant

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// Year is a year of 365.2425 days.
const Year = time.Duration(365.2425 * 24 * float64(time.Hour))

// Plan says what is rehearsed.
type Plan struct {
	// Setups hold the indicator of that name: one, or two to be compared. What
	// is planted follows the first.
	Setups    []*config.Setup
	Indicator string
	Ratios    []float64 // each greater than 0, and not 1
	Length    int       // of the excess in slots of the first set-up
	Shape     Shape
	Histories int
	Seed      uint64
	// Workers is how many histories are worked on at once, 0 for one for each
	// processor. It changes no result.
	Workers int
	// Level of all bounds, e.g. 0.95.
	Level float64
	// Draws of the bootstrap.
	Draws int
	// Frequencies of excesses a year and series, for predictive values.
	Frequencies []float64
	// Progress, if not nil, is told how many histories are done, from one
	// goroutine at a time.
	Progress func(done int)
}

// Errors of a rehearsal.
var (
	ErrNoIndicator = errors.New("there is no such indicator")
	ErrTail        = errors.New("the indicator does not watch that tail")
	ErrRoom        = errors.New("there is no room for the excess")
	ErrRefused     = errors.New("the engine refused planted data")
	ErrTrials      = errors.New("windows of the last trials are rehearsed on invented histories only, in which it is known which trial an event belongs to")
)

// indicator returns the indicator of the set-up.
func (p *Plan) indicator(setup int) (*config.Indicator, error) {
	for i := range p.Setups[setup].Indicators {
		if in := &p.Setups[setup].Indicators[i]; in.Name == p.Indicator {
			return in, nil
		}
	}
	return nil, fmt.Errorf("%w: the set-up %s has none of the name %s", ErrNoIndicator, p.Setups[setup].Name, p.Indicator)
}

// check says what can't be rehearsed.
func (p *Plan) check() error {
	if len(p.Setups) < 1 || len(p.Setups) > 2 {
		return errors.New("a rehearsal has one set-up, or two to be compared")
	}
	if p.Length < 1 || p.Histories < 1 || p.Draws < 1 || len(p.Ratios) == 0 || len(p.Ratios) > 100 {
		return errors.New("a rehearsal has an excess of one slot or more, one history or more, draws, and from 1 to 100 ratios")
	}
	if !(p.Level > 0 && p.Level < 1) {
		return errors.New("the level of bounds lies between 0 and 1")
	}
	for setup := range p.Setups {
		in, err := p.indicator(setup)
		if err != nil {
			return err
		}
		for _, r := range p.Ratios {
			switch {
			case !(r > 0) || r == 1 || math.IsInf(r, 0):
				return fmt.Errorf("%g is no ratio to rehearse: it is greater than 0, and not 1", r)
			case r > 1 && !in.Upper, r < 1 && !in.Lower:
				return fmt.Errorf("%w: a ratio of %g asks for the %s tail of %s in the set-up %s", ErrTail, r, directionOf(r), in.Name, p.Setups[setup].Name)
			}
		}
	}
	return nil
}

func directionOf(ratio float64) life.Direction {
	if ratio < 1 {
		return life.Lower
	}
	return life.Upper
}

// alone is the set-up with nothing but the indicator.
func (p *Plan) alone(setup int) (*config.Setup, error) {
	in, err := p.indicator(setup)
	if err != nil {
		return nil, err
	}
	s := *p.Setups[setup]
	s.Indicators = []config.Indicator{*in}
	return &s, nil
}

// arrival is an observation and the moment at which it becomes known.
type arrival struct {
	at      monitor.Instant
	o       monitor.Observation
	planted bool
}

// ground is a history in which an excess is to be planted.
type ground struct {
	series string
	base   []arrival // in the order in which they become known
	slots  []slot    // over which the excess lasts
	// from and to bound the excess; all looks due by until are made.
	from, to, until monitor.Instant
	// judged is when false alerts begin to be counted (up to until).
	judged monitor.Instant
}

// slot is one of those over which an excess lasts.
type slot struct {
	start, end monitor.Instant
	// mean is the usual number of events; for a proportion the usual chance in
	// each of the trials, of which so many already have an event.
	mean           float64
	trials, events int64
	known          monitor.Instant // when added events become known
	// moments says that each trial has one of its own, and free are those of the
	// trials without an event, in the order of nothing.
	moments bool
	free    []monitor.Instant
}

// lastTrials reports whether the indicator has windows of the last trials.
func lastTrials(in *config.Indicator) bool {
	return slices.ContainsFunc(in.Windows, func(w config.Window) bool { return w.Trials > 0 })
}

// grounds makes histories. It is called from several goroutines.
type grounds interface {
	// ground returns the history of that number.
	ground(number int) (*ground, error)
}
