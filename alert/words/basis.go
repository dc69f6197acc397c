package words

import (
	"fmt"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// basis says where the usual rate comes from, and what else went into what was
// expected.
func basis(r *life.Record, e *life.Evidence) string {
	b, zone := &e.Baseline, zoneOf(r)
	usual := "The usual " + measure(e)
	sentences := []string{""}
	switch b.Kind {
	case "reference":
		sentences[0] = usual + " was estimated from " + counts(e, zone) + unsure
	case "trailing":
		sentences[0] = usual + " was estimated from the series' own past: " + counts(e, zone) + unsure
		sentences = append(sentences, creep(e, zone))
	case "peers":
		sentences[0] = usual + " was estimated from " + peers(b.Peers) + " of the indicator: " + counts(e, zone) + unsure
		if b.Between != nil {
			sentences = append(sentences, "They differ "+number(*b.Between)+" times as much as chance alone makes them (variance over mean)")
		}
		sentences = append(sentences, "A change that is common to all of them goes unseen")
	default:
		sentences[0] = usual + " is taken as known"
	}
	sentences[0] += origin(b)
	return strings.Join(nonEmpty(append(append(append(wait(e, zone), sentences...), opportunity(e)...), years(e))...), ". ") + "."
}

const unsure = "; p allows for how unsure that leaves it"

// counts is what an estimate was made from.
func counts(e *life.Evidence, zone *time.Location) string {
	b := &e.Baseline
	ref := *e
	ref.Events, ref.Exposure = b.Events, b.Exposure
	text := counted(&ref) + " in " + exposure(&ref)
	if b.From != nil && b.To != nil {
		text += ", " + moment(b.From.In(zone)) + " to " + last(b.To.In(zone))
	}
	if b.LeftOut > 0 {
		text += ", without " + Amount(b.LeftOut, "slots") + " that people have marked as real"
	}
	return text
}

func peers(n int64) string {
	if n == 1 {
		return "one other series"
	}
	return whole(n) + " other series"
}

// creep holds the window against the first reference that was used, which a
// slow change can't have moved.
func creep(e *life.Evidence, zone *time.Location) string {
	f := e.Baseline.First
	if f == nil || f.Ratio == nil {
		return "A change that creeps becomes what is usual"
	}
	kind := "ratio"
	if strings.Contains(e.RatioKind, "odds") {
		kind = "odds ratio"
	}
	ref := *e
	ref.Events, ref.Exposure = f.Events, f.Exposure
	text := fmt.Sprintf("Against the first such reference (%s in %s, %s to %s) the %s is %s",
		counted(&ref), exposure(&ref), moment(f.From.In(zone)), last(f.To.In(zone)), kind, number(*f.Ratio))
	if f.RatioUpper == nil {
		return text + fmt.Sprintf(" (at least %s, %s, exact)", number(f.RatioLower), level(e.Alpha))
	}
	lo, hi := pair(f.RatioLower, *f.RatioUpper)
	return text + fmt.Sprintf(" (%s to %s, %s, exact)", lo, hi, level(e.Alpha))
}

// origin is the version and the source of the usual rate.
func origin(b *life.Baseline) string {
	var from []string
	if b.Version != "" {
		from = append(from, "version "+clean(b.Version))
	}
	if b.Source != "" {
		from = append(from, "source: "+clean(b.Source))
	}
	if len(from) == 0 {
		return ""
	}
	return " (" + strings.Join(from, "; ") + ")"
}

// opportunity says what else shaped what was expected of this window.
func opportunity(e *life.Evidence) []string {
	b := &e.Baseline
	var sentences []string
	if b.Strata != "" {
		factor := "It has a factor"
		if isProportion(e) {
			factor = "Its odds have a factor"
		}
		sentences = append(sentences, factor+" for each "+clean(b.Strata))
	}
	if b.Spread > 1 {
		sentences = append(sentences, "Counts are taken to vary "+significant(b.Spread)+" times as much as chance alone makes them (variance)")
	}
	if b.Delay {
		sentences = append(sentences, "Of recent slots only what can have been reported yet is expected")
	}
	if e.Provisional > 0 {
		sentences = append(sentences, "The exposure of "+Amount(e.Provisional, "slots")+" of the window is carried forward, so provisional")
	}
	return sentences
}
