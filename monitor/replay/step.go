package replay

import (
	"cmp"
	"slices"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// phase is what a step came of, in the order in which an engine comes to them
// at one moment of its clock.
type phase int

const (
	byLook     phase = iota // a look that fell due
	byItself                // the end of a shelf time, a reminder
	byRow                   // a row: an act, or data that changed a look
	byMovingOn              // the clock moved on past a correction
)

// step is a step with what tells its place among those of other engines.
type step struct {
	notice life.Notice
	at     int64
	phase  phase
	// position of the row, by which steps of rows are ordered; those of looks
	// and corrections are by indicator and series.
	position  uint64
	indicator int
	series    int32
}

// stepOf tells what a step came of. It was found when the message at the
// position, and the moment, was applied.
func stepOf(n *life.Notice, position uint64, moment monitor.Instant) step {
	s := step{notice: *n, at: n.Step.At.UnixMicro()}
	switch n.Step.Kind {
	case life.StepReturned:
	case life.StepOpened:
		if n.Record.Late {
			s.phase = byRow
		}
	case life.StepWorsened:
		if e := n.Step.Evidence; s.at == int64(moment) && e != nil && !e.Due.Equal(n.Step.At) {
			s.phase = byRow
		}
	case life.StepClosed:
		if n.Step.Why != life.ReturnedAndAcknowledged {
			s.phase = byRow
		}
	case life.StepCorrected:
		s.phase = byMovingOn
	case life.StepReminder:
		s.phase = byItself
	case life.StepUnshelved:
		s.phase = byRow
		if n.Step.Why == monitor.TimeIsOver {
			s.phase = byItself
		}
	case life.StepWithdrawn, life.StepAcknowledged, life.StepNote, life.StepMarked, life.StepShelved, life.StepTest:
		s.phase = byRow
	}
	if s.phase == byRow {
		s.position = position
	}
	return s
}

func compareSteps(a, b *step) int {
	return cmp.Or(cmp.Compare(a.at, b.at), cmp.Compare(a.phase, b.phase), cmp.Compare(a.position, b.position),
		cmp.Compare(a.indicator, b.indicator), cmp.Compare(a.series, b.series))
}

// steps puts the steps of all parts in the order in which one engine takes
// them. Those of one series keep the order that they have.
func (p *plan) steps(parts []*part) []life.Notice {
	indicators := map[string]int{}
	for i := range p.setup.Indicators {
		indicators[p.setup.Indicators[i].Name] = i
	}
	var list []*step
	latest := map[int32]*step{}
	for _, x := range parts {
		for i := range x.steps {
			s := &x.steps[i]
			s.indicator, s.series = indicators[s.notice.Record.Indicator], p.tape.number[s.notice.Record.Series]
			if last := latest[s.series]; last != nil && compareSteps(s, last) < 0 {
				s.at, s.phase, s.position = last.at, last.phase, last.position
			}
			latest[s.series] = s
			list = append(list, s)
		}
	}
	slices.SortStableFunc(list, compareSteps)
	steps := make([]life.Notice, len(list))
	for i, s := range list {
		steps[i] = s.notice
	}
	return steps
}
