package change

import (
	"fmt"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// TellFull says of every window that would come in when it would first be full,
// were the set-up to come into force as things stand: kept says by indicator how far
// back the slots are known in the store that knows the least.
func (p *Plan) TellFull(next *config.Setup, kept map[string]monitor.Kept) {
	if !p.Fits {
		return
	}
	for i := range p.Changes {
		c := &p.Changes[i]
		if c.window == nil {
			continue
		}
		for j := range next.Indicators {
			in := &next.Indicators[j]
			k, known := kept[in.Name]
			if !known || c.Key != "indicator["+in.Name+"].windows" {
				continue
			}
			if full, ok := k.FirstFull(in, c.window); ok {
				c.Effect += ": " + fullWords(in, k, full)
			}
		}
	}
}

func fullWords(in *config.Indicator, k monitor.Kept, full monitor.Instant) string {
	layout := time.DateOnly
	if in.Every.Unit < config.Day {
		layout = "2006-01-02 15:04"
	}
	at := func(i monitor.Instant) string { return i.Time().In(in.Zone).Format(layout) }
	if full.Add(in.Settle) <= k.At {
		return fmt.Sprintf("what is kept (since %s, %s) fills it already, for series as old as that", at(k.From), in.ZoneName)
	}
	return fmt.Sprintf("as things stand the first full one ends %s (%s; what is kept begins %s), later for series that began since",
		at(full), in.ZoneName, at(k.From))
}
