package monitor

import (
	"cmp"
	"slices"

	"tailbell/config"
)

// Condition is something about a series that a person should know of: looks
// that could not be made, or a feed that has gone silent. It is no signal.
type Condition struct {
	Series    string        `json:"series"`
	Indicator string        `json:"indicator"`
	Kind      ConditionKind `json:"kind"`
	// Window is the window concerned; "" for silence.
	Window string `json:"window,omitempty"`
	// Since is the end of the first window that could not be looked at, or
	// when the series was last heard of.
	Since Instant `json:"since"`
	// Text says it in words.
	Text string `json:"text"`
}

// ConditionKind is the kind of a condition.
type ConditionKind string

// The kinds of condition.
const (
	WithheldLooks  ConditionKind = "withheld"       // a needed count or exposure is missing
	MoreThanTrials ConditionKind = "more than n"    // more events than trials
	NoExposure     ConditionKind = "no exposure"    // events, but no exposure
	NoBaseline     ConditionKind = "no baseline"    // none is valid, or it rests on too little
	NotInService   ConditionKind = "out of service" // people said so
	Silent         ConditionKind = "silent"         // nothing heard for longer than expected
	// WaitsForPartition is of a sum of which a look waits for what another
	// partition has to tell, or of all series of an indicator, by its first pattern,
	// if that is what they count there.
	WaitsForPartition ConditionKind = "waits for a partition"
	unknownKind       ConditionKind = "program's fault" // a status without a kind
)

// Conditions returns what stands now, by series, kind and window.
func (e *Engine) Conditions() []Condition {
	var list []Condition
	for _, s := range e.series {
		list = append(list, e.conditionsOf(s)...)
	}
	list = append(list, e.waitingConditions()...)
	list = append(list, e.lackingConditions()...)
	slices.SortFunc(list, func(a, b Condition) int {
		return cmp.Or(cmp.Compare(a.Series, b.Series), cmp.Compare(a.Kind, b.Kind), cmp.Compare(a.Window, b.Window))
	})
	return list
}

func (e *Engine) conditionsOf(s *series) []Condition {
	if s.retired {
		return nil
	}
	var list []Condition
	ix := s.indicator
	if s.birth < ix.looked && s.standing(ix.looked-1) == closed {
		return nil
	}
	for _, p := range ix.now().windows {
		ws := &s.windows[p.place]
		if ws.withheld == made {
			continue
		}
		text := textOf(ws.withheld)
		if ws.withheld == missing {
			if what := ix.lacking(s, &p); what != "" {
				text += ", " + what
			}
		}
		if ws.withheld == unbased && ix.awaitsCount(s) {
			text += ": its peers are not yet counted in all partitions"
		}
		list = append(list, Condition{
			Series: s.name, Indicator: ix.cfg.Name, Kind: kindOf(ws.withheld), Window: p.Name,
			Since: ix.cal.Start(ws.withheldSince), Text: text,
		})
	}
	if expect := ix.cfg.SilentFor(s.name); s.silentAt() < e.clock {
		text := "nothing was heard for longer than "
		if s.neverHeard() {
			text = "it was never heard of, for longer than "
		}
		list = append(list, Condition{
			Series: s.name, Indicator: ix.cfg.Name, Kind: Silent, Since: s.heardAt(),
			Text: text + config.FormatDuration(expect),
		})
	}
	return list
}

func textOf(s status) string {
	if s == idle {
		return "people said that it is not to be looked at now"
	}
	return s.String()
}

func kindOf(s status) ConditionKind {
	switch s {
	case missing:
		return WithheldLooks
	case overfull:
		return MoreThanTrials
	case unexposed:
		return NoExposure
	case unbased:
		return NoBaseline
	case idle:
		return NotInService
	case made, filling, closed:
	}
	return unknownKind
}
