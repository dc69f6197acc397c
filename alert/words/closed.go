package words

import "tailbell/monitor/life"

// closedEarly says what it means that a person closed an alert that signalled;
// "" of every other step.
func closedEarly(n *life.Notice) string {
	r, s := &n.Record, &n.Step
	if s.Kind != life.StepClosed || s.By == "" {
		return ""
	}
	for i := range r.Steps {
		if r.Steps[i].Number < s.Number && r.Steps[i].Kind == life.StepReturned {
			return ""
		}
	}
	if r.Silence != nil {
		return " It was still silent: no other alert says so before it is heard of again."
	}
	return " It still signalled: no other alert of the series opens in this direction before enough looks in a row are quiet " +
		"(quiet of its indicator)."
}
