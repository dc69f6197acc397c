package config

import (
	"fmt"
	"time"
)

// truth reads true or false; false if it is not given.
func (s section) truth(name string) (value, ok bool) {
	n, given, ok := s.get(name, truthKind)
	return given && ok && n.text == "true", ok
}

// readExpected reads whether the exposure is a number of expected events, which
// makes the rate a standardised ratio.
func (s section) readExpected(in *Indicator) {
	in.Expected, _ = s.truth("expected")
	switch {
	case !in.Expected:
	case in.Measure == Proportion:
		s.fault("expected", "goes with a rate: the events are counted against those that were expected, not against trials", "leave measure out")
	case in.Exposure != Reported:
		s.fault("expected", "needs its exposure reported: how many events were expected is computed for each slot", "leave exposure out, or leave expected out")
	case in.Per != 1:
		s.fault("per", "is not 1, but a ratio of observed to expected events is told as such", "leave per out")
	}
}

// readFollowUp reads how long after its trial an event may come to light.
func (s section) readFollowUp(in *Indicator) {
	if !s.has("follow_up") {
		return
	}
	var ok bool
	in.FollowUp, ok = s.duration("follow_up", 0, time.Second, maxTime)
	switch {
	case !ok:
	case in.Measure != Proportion:
		s.fault("follow_up", "goes with a proportion: an event counts in the slot of its trial", `write measure = "proportion", or leave it out`)
	case in.Horizon < in.FollowUp:
		s.fault("horizon", fmt.Sprintf("%s is shorter than follow_up, %s: events that come to light at its end would be refused",
			FormatDuration(in.Horizon), FormatDuration(in.FollowUp)), "make it longer than follow_up and the time that reports take together")
	}
}

// adjusted finds what makes a standardised ratio or a follow-up mean something
// else than it seems to.
func (d *doubts) adjusted(in *Indicator, i int) {
	for j := range in.Baselines {
		b := &in.Baselines[j]
		if in.Expected && b.Kind == Known && b.Rate != 1 {
			d.at(in, i, fmt.Sprintf("baseline[%d].rate", j+1), fmt.Sprintf("is %g, but of expected events 1 is usual: the model said how many there would be", b.Rate),
				"write rate = 1, and what is accepted beyond that as margin")
		}
		if in.FollowUp > in.Settle && b.Delay == nil {
			d.at(in, i, fmt.Sprintf("baseline[%d]", j+1), fmt.Sprintf("looks wait %s for events that may come to light up to %s after their trial: recent slots will look better than they are",
				FormatDuration(in.Settle), FormatDuration(in.FollowUp)), "make settle as long as follow_up, or say in delay what share is known at which age")
		}
	}
}

// adjusted says what the numbers mean.
func (p *prose) adjusted(in *Indicator) {
	if in.Expected {
		p.line("  The exposure is how many events were expected, so the rate is observed over expected: a standardised ratio, usually 1.")
	}
	if in.FollowUp > 0 {
		p.line("  An event counts in the slot of its trial, and may come to light up to %s afterwards.", elapsed(in.FollowUp))
	}
}
