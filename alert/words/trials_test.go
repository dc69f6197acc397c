package words

import (
	"math"
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// TestTrials tells a look at the last so many trials. 7 of 203 at 1 in 100: p and
// bounds are R 4.2's, pbinom(6, 203, 0.01, lower.tail = FALSE) and binom.test(7, 203).
func TestTrials(t *testing.T) {
	r := ward(t)
	e := &r.Opening
	first, previous := at(t, r.Zone, "2026-02-21 08:30"), at(t, r.Zone, "2026-03-01 12:30")
	e.Window, e.Unit, e.EventNoun, e.Measure, e.Per = "200 trials", "operations", "wound infections", "proportion", 100
	e.From, e.To, e.Due = at(t, r.Zone, "2026-01-30 10:15"), at(t, r.Zone, "2026-03-03 14:05"), at(t, r.Zone, "2026-03-03 14:05")
	e.Events, e.Exposure, e.Expected, e.Log10P, e.P = 7, "203", 2.03, math.Log10(0.004654593), 0.004654593
	e.RateLower, e.RateUpper, e.LateEvents = 1.397421, 6.975429, 2
	e.Wait = &life.Wait{Previous: &previous, Events: 7, First: &first, Exposure: "61", Usual: 600}
	var b strings.Builder
	b.WriteString(wrap(Sentence(&r, e)+" "+basis(&r, e), 100, "", "") + "\n\n")
	e.Wait = nil
	b.WriteString(wrap(brief(e, zoneOf(&r)), 100, "", "") + "\n")
	golden(t, "trials.txt", b.String())
}
