package words

import (
	"fmt"
	"math"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// toEvent is the span of a look that was made when an event came: "7 days to
// 14:05:10 CET on 3 March 2026", whatever the time of day.
func toEvent(e *life.Evidence, to time.Time) string {
	return length(e.Window) + " to " + clock(to) + " on " + day(to)
}

// wait tells how long the events of such a look took: since the one before, and
// from the first to the last of as many as signal. It says nothing of others.
func wait(e *life.Evidence, zone *time.Location) []string {
	w := e.Wait
	if w == nil {
		return nil
	}
	var sentences []string
	if w.Previous != nil {
		sentences = append(sentences, "The one before came "+gap(e.To.Sub(*w.Previous))+" earlier")
	}
	if w.Events < 2 || w.First == nil {
		return sentences
	}
	together := *e
	together.Exposure = w.Exposure
	took := "at the same moment"
	if w.First.Before(e.To) {
		took = "within " + gap(e.To.Sub(*w.First)) + " (" + exposure(&together) + ")"
	}
	text := fmt.Sprintf("The last %s came %s; from the first to the last of so many it usually takes about %s on average",
		whole(w.Events), took, usualWait(e)+" "+clean(e.Unit))
	if w.P != nil && *w.P > 0 {
		log := math.Log10(*w.P)
		text += fmt.Sprintf(", and so little comes by chance in %s cases (p = %s, gamma distribution, exact)", odds(log), pvalue(log))
	}
	within := length(e.Window)
	if ofTrials(e) {
		within = "the last " + within
	}
	return append(sentences, text, fmt.Sprintf("It is the same finding: %s or more within %s ring", whole(w.Events), within))
}

// usualWait is how much exposure so many events usually take, without decimals that
// say nothing: trials are whole.
func usualWait(e *life.Evidence) string {
	if isProportion(e) && e.Wait.Usual >= 10 {
		return fixed(e.Wait.Usual, 0)
	}
	return strings.TrimSuffix(number(e.Wait.Usual), ".0")
}

// gap is the time between two events.
func gap(d time.Duration) string {
	if d < time.Second {
		return "less than a second"
	}
	return Elapsed(d)
}
