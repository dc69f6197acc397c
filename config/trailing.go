package config

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// refreshes are the lengths after which a history may be counted anew.
var refreshes = []Every{{1, Day}, {1, Week}, {1, Month}, {3, Month}, {1, Year}}

// readHistory reads over which history a trailing or peers baseline is
// counted.
func (s section) readHistory(in *Indicator, b *Baseline) {
	if n := s.node.fields["span"]; n != nil {
		b.SpanSlots, _ = s.slots(n, s.key("span"), in.Every)
	} else {
		s.fault("span", "is missing: over how long a history is the usual rate counted?", "write e.g. span = "+spanExample(in.Every))
	}
	if b.Kind == Trailing {
		b.GapSlots = in.longestWindow()
		if n := s.node.fields["gap"]; n != nil {
			b.GapSlots, _ = s.slots(n, s.key("gap"), in.Every)
		} else if b.GapSlots == 0 && len(in.Windows) > 0 {
			s.fault("gap", "is missing: how long the last trials take is not known beforehand, and the history must end before them", `write about as long as the longest window takes, e.g. gap = "60d"`)
		}
	}
	b.Refresh = s.readRefresh(in.Every)
	b.MinEvents, _ = s.whole("min_events", 1, 0, 1_000_000_000)
}

func spanExample(slot Every) string {
	if slot.Unit >= Month {
		return `"3y"`
	}
	return `"364d"`
}

// readRefresh returns how often the history is counted anew: every month, or
// every slot where that is longer.
func (s section) readRefresh(slot Every) Every {
	usual := Every{1, Month}
	if slot.Unit >= Month {
		usual = slot
	}
	n, given, ok := s.get("refresh", textKind)
	if !given || !ok {
		return usual
	}
	words := make([]string, len(refreshes))
	for i, e := range refreshes {
		words[i] = e.String()
	}
	i := slices.Index(words, n.text)
	if i < 0 {
		s.fault("refresh", fmt.Sprintf("%q is not known here", n.text), "write "+quoteOr(words))
		return usual
	}
	e := refreshes[i]
	if slot.N > 0 && e.longestHours() < slot.longestHours() {
		s.fault("refresh", fmt.Sprintf("%s is shorter than a slot of %s: nothing new would be counted", e, slot), "make it as long as a slot or longer")
	}
	return e
}

// longestWindow is the length of the longest window in slots.
func (in *Indicator) longestWindow() int {
	longest := 0
	for _, w := range in.Windows {
		longest = max(longest, w.Slots)
	}
	return longest
}

// historySlots is how far back, in slots before the end of a window, what the
// baseline is counted from may lie: up to one refresh, the gap and the span.
func (in *Indicator) historySlots(b *Baseline) int {
	if b.Kind != Trailing && b.Kind != Peers {
		return 0
	}
	refresh := int(math.Ceil(b.Refresh.longestHours() / in.Every.shortest().Hours()))
	return refresh + b.GapSlots + b.SpanSlots
}

// keptSlots is how many slots before the end of a window are needed to judge
// it: its own, those of a history, or for windows of trials four weeks, which tell
// how many trials come.
func (in *Indicator) keptSlots() int {
	kept := in.longestWindow()
	if slices.ContainsFunc(in.Windows, func(w Window) bool { return w.Trials > 0 }) {
		kept = max(kept, in.fourWeeks())
	}
	for i := range in.Baselines {
		kept = max(kept, in.historySlots(&in.Baselines[i]))
	}
	return kept
}

// checkPeers refuses peers that can't be. s is the indicator's own table.
func (s section) checkPeers(in *Indicator) {
	if !in.hasPeers() {
		return
	}
	if len(in.Series) == 1 && !strings.Contains(in.Series[0].text, "*") {
		s.fault("series", fmt.Sprintf("%q is a single series, which has no peers", in.Series[0]), `write a pattern that matches several, or kind = "trailing"`)
	}
}

// onePartition reports whether all that the patterns match is sure to lie in
// one partition.
func onePartition(patterns []Pattern, keyParts int) bool {
	lead := func(p Pattern) string {
		parts := strings.Split(p.text, "/")
		return strings.Join(parts[:min(keyParts, len(parts))], "/")
	}
	for _, p := range patterns {
		if strings.Contains(lead(p), "*") || lead(p) != lead(patterns[0]) {
			return false
		}
	}
	return true
}
