package config

import (
	"crypto/sha256"
	"fmt"
	"strings"
	"time"
)

func (c *comparison) baselines(a, b *Indicator) {
	for i := range max(len(a.Baselines), len(b.Baselines)) {
		var before, after *Baseline
		effect := ""
		if i < len(a.Baselines) {
			before = &a.Baselines[i]
		}
		if i < len(b.Baselines) {
			after = &b.Baselines[i]
		}
		if before != nil && after != nil && before.Version == after.Version {
			effect = "give it a new version, so that alerts tell the two apart"
		}
		class := NextLook
		if after != nil && b.historySlots(after) > a.keptSlots() {
			class = Filling
			effect = strings.TrimPrefix(effect+"; its history reaches further back than what was kept, and it judges once that has come in", "; ")
		}
		c.value(fmt.Sprintf("baseline[%d]", i+1), class, baselineText(before), baselineText(after), effect)
	}
}

func baselineText(b *Baseline) string {
	if b == nil {
		return ""
	}
	who := b.Series.String()
	if who == "**" {
		who = "all series"
	}
	if b.Sums.text != "" {
		who = "sums " + b.Sums.String()
	}
	text := fmt.Sprintf("%s: %s", who, b.Kind)
	switch b.Kind {
	case Known:
		text += fmt.Sprintf(", %v for one unit of exposure", b.Rate)
	case Reference:
		text += fmt.Sprintf(", %d in %s", b.Events, b.Exposure)
	case Trailing:
		text += fmt.Sprintf(", %d slots, gap %d, refresh %s, min_events %d", b.SpanSlots, b.GapSlots, b.Refresh, b.MinEvents)
	case Peers:
		text += fmt.Sprintf(", %d slots, refresh %s, min_events %d", b.SpanSlots, b.Refresh, b.MinEvents)
	}
	if !b.From.IsZero() {
		text += ", from " + b.From.UTC().Format(time.RFC3339Nano)
	}
	if !b.To.IsZero() {
		text += ", to " + b.To.UTC().Format(time.RFC3339Nano)
	}
	if b.Spread != 1 {
		text += fmt.Sprintf(", spread %v", b.Spread)
	}
	if b.Strata != nil {
		text += fmt.Sprintf(", strata by %s: %s", b.Strata.By, shortList(b.Strata.Factors))
	}
	if b.Delay != nil {
		text += fmt.Sprintf(", delay: %s at %s", shortList(b.Delay.Reported), shortList(b.Delay.Ages))
	}
	if b.Margin != 1 {
		text += fmt.Sprintf(", margin %v", b.Margin)
	}
	if b.Version != "" {
		text += fmt.Sprintf(", version %q", b.Version)
	}
	if b.Source != "" {
		text += fmt.Sprintf(", source %q", b.Source)
	}
	return text
}

// shortList writes a list of up to 12 items, and of a longer one the first,
// the last and a hash that tells it from others.
func shortList[E any](list []E) string {
	text := strings.Trim(fmt.Sprint(list), "[]")
	if len(list) <= 12 {
		return text
	}
	digest := sha256.Sum256([]byte(text))
	return fmt.Sprintf("%v ... %v (%d, SHA-256 %x...)", list[0], list[len(list)-1], len(list), digest[:4])
}
