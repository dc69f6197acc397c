// Package change says beforehand what a changed set-up would mean on a running
// store: what would be in force when, what the store can't take, and what
// would become of the alerts that are not done.
//
// It decides nothing: the engine does (monitor.Obstacles), when the set-up
// reaches it.
package change

import (
	"fmt"
	"slices"
	"strings"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// Plan is what a changed set-up would mean.
type Plan struct {
	// Changes are all differences, each with the place where it ends up.
	Changes []Change `json:"changes"`
	// Fits is false if the store can't take the set-up: then none of it comes
	// into force.
	Fits bool `json:"fits"`
	// Alerts are those not done that the changes touch, and what would become
	// of them; none if the set-up does not fit.
	Alerts []Fate `json:"alerts"`
}

// Change is one difference.
type Change struct {
	Key    string `json:"key"`
	Class  string `json:"class"` // as config has it
	Old    string `json:"old"`
	New    string `json:"new"`
	Effect string `json:"effect,omitempty"`
	// Refused says why a running store can't take it; "" if it can.
	Refused string `json:"refused,omitempty"`
	// window is the one that comes in, nil of other changes.
	window *config.Window
}

// Alert is as much of an alert as a change needs to know.
type Alert struct {
	ID        string         `json:"id"`
	Series    string         `json:"series"`
	Indicator string         `json:"indicator"`
	Direction life.Direction `json:"direction"`
	Condition life.Condition `json:"condition"`
}

// AlertOf returns as much of an alert as a change needs to know.
func AlertOf(r *life.Record) Alert {
	return Alert{r.ID, r.Series, r.Indicator, r.Direction, r.Condition}
}

// Fate is what would become of an alert.
type Fate struct {
	Alert
	Text string `json:"text"`
}

// contradicts is why a running store can't take a change.
const contradicts = "it contradicts what the store holds"

// Of compares the set-up in force with the next one. Both must be as parsed,
// or both with their paths resolved. alerts are those not done.
func Of(old, next *config.Setup, alerts []Alert) *Plan {
	p := &Plan{Changes: []Change{}, Alerts: []Fate{}, Fits: true}
	changes := config.Compare(old, next)
	for _, c := range changes {
		p.Changes = append(p.Changes, Change{Key: c.Key, Class: c.Class.String(), Old: c.Old, New: c.New, Effect: c.Effect, window: c.Window})
	}
	for _, o := range monitor.Obstacles(old, next) {
		p.Fits = false
		p.refuse(o)
	}
	if !p.Fits {
		return p
	}
	for _, a := range alerts {
		if text := fateOf(a, next, changes); text != "" {
			p.Alerts = append(p.Alerts, Fate{a, text})
		}
	}
	return p
}

// refuse notes an obstacle on its changes.
func (p *Plan) refuse(o monitor.Obstacle) {
	for i := range p.Changes {
		if c := &p.Changes[i]; c.Key == o.Key {
			c.Refused = contradicts
			c.Effect = "" // it has none
		}
	}
}

// fateOf says what would become of an alert; "" if nothing changes for it.
func fateOf(r Alert, next *config.Setup, changes []config.Change) string {
	at := slices.IndexFunc(next.Indicators, func(in config.Indicator) bool { return in.Name == r.Indicator })
	if at < 0 {
		return "it closes, as " + life.NoLongerMonitored + "; what it holds of evidence stays as it is"
	}
	in := &next.Indicators[at]
	var keys []string
	prefix := "indicator[" + r.Indicator + "]."
	for _, c := range changes {
		if key, ours := strings.CutPrefix(c.Key, prefix); ours {
			key, _, _ = strings.Cut(key, "[")
			keys = append(keys, key)
		}
	}
	quiet := fmt.Sprintf("%d looks in a row without a signal", in.Quiet)
	if in.Quiet == 1 {
		quiet = "a look without a signal"
	}
	signals := r.Condition == life.Unacknowledged || r.Condition == life.Acknowledged || r.Condition == life.Shelved
	changed := func(some ...string) bool {
		return slices.ContainsFunc(keys, func(k string) bool { return slices.Contains(some, k) })
	}
	var texts []string
	switch watched := map[life.Direction]bool{life.Upper: in.Upper, life.Lower: in.Lower}[r.Direction]; {
	case !signals:
	case !watched && changed("tails"):
		texts = append(texts, "its tail is watched no longer: it worsens no more, and returns after "+quiet)
	case changed("p_limit", "allowance", "allowance_for", "assurance", "reserve", "baseline", "tails"):
		texts = append(texts, "from the next look on it is judged by the new limits and baselines: it may worsen, and returns after "+quiet)
		if changed("windows") {
			texts = append(texts, "only the windows of the new set-up have a say")
		}
	case changed("windows"):
		texts = append(texts, "only the windows of the new set-up have a say: it may worsen, and returns after "+quiet)
	case changed("quiet"):
		texts = append(texts, "it returns after "+quiet)
	}
	if changed("series") && !in.Matches(r.Series) {
		texts = append(texts, "no pattern matches its series any more, which stays monitored since it is known")
	}
	if changed("horizon") {
		texts = append(texts, "corrections reach it as far back as the new horizon")
	}
	if len(texts) == 0 {
		return ""
	}
	return strings.Join(append(texts, "what it holds of evidence stays as it is"), "; ")
}
