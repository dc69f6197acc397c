package config

import (
	"fmt"
	"math"
	"strings"
	"time"
)

// validity finds times at which the series of the last baseline have none.
func (d *doubts) validity(in *Indicator, i int) {
	for _, gap := range in.uncovered() {
		var when []string
		if !gap[0].IsZero() {
			when = append(when, "after "+gap[0].In(in.Zone).Format(time.RFC3339))
		}
		if !gap[1].IsZero() {
			when = append(when, "not after "+gap[1].In(in.Zone).Format(time.RFC3339))
		}
		d.at(in, i, "baseline", fmt.Sprintf("no baseline for all series judges windows that end %s: their looks are withheld", strings.Join(when, " and ")),
			"add one for that time, or leave out a from or a to")
	}
}

// baseline finds what in one baseline is allowed but probably not meant.
func (d *doubts) baseline(in *Indicator, i, j int) {
	b := &in.Baselines[j]
	key := func(name string) string { return fmt.Sprintf("baseline[%d].%s", j+1, name) }
	longest := in.longestWindow()
	if b.Kind == Trailing && b.GapSlots < longest {
		d.at(in, i, key("gap"), fmt.Sprintf("%s is shorter than the longest window, %s: what a window counts may be part of its own baseline, and its test is then not exact",
			in.slotLength(b.GapSlots), in.slotLength(longest)), "leave it out, or make it as long as the longest window")
	}
	if (b.Kind == Trailing || b.Kind == Peers) && b.SpanSlots < longest {
		d.at(in, i, key("span"), fmt.Sprintf("%s is shorter than the longest window, %s: what is usual would be less sure than what is tested",
			in.slotLength(b.SpanSlots), in.slotLength(longest)), "make it several times as long as the longest window")
	}
	stated := b.Kind == Known || b.Kind == Reference // a history makes up for any scale
	if b.Strata != nil && stated && math.Abs(b.Strata.mean()-1) > 0.01 {
		d.at(in, i, key("strata"), fmt.Sprintf("the factors are %s on average, so over a whole cycle that many times what is stated would be usual",
			about(b.Strata.mean())), "divide them by their mean, unless what is stated belongs to a stratum with the factor 1")
	}
	if b.Delay != nil && in.Settle >= b.Delay.last() {
		d.at(in, i, key("delay"), fmt.Sprintf("has no effect: by then all is known, since settle is %s", FormatDuration(in.Settle)),
			"make settle shorter, or leave the delay out")
	}
}
