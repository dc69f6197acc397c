package words

import (
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

// TestWait tells looks that were made when an event came. 4 events in 220
// device-days at 1.8 per 1,000: three gaps in mu = 0.396, p = 1 - exp(-mu) (1 + mu +
// mu^2/2) = 0.00772; the mean of three gaps is 3 / 0.0018.
func TestWait(t *testing.T) {
	var b strings.Builder
	previous, first := at(t, "Europe/Berlin", "2026-03-01 12:30"), at(t, "Europe/Berlin", "2026-02-22 14:05")
	together := at(t, "Europe/Berlin", "2026-03-04 00:00").Add(5 * time.Second)
	for _, w := range []life.Wait{
		{Previous: &previous, Events: 4, First: &first, Exposure: "220", Usual: 3 / 0.0018, P: ptr(0.00772)},
		{Previous: &previous, Events: 4, First: &first, Exposure: "220", Usual: 3 / 0.0018},
		{Events: 2, First: &together, Exposure: "0", Usual: 1 / 0.0018},
		{Previous: &previous},
		{},
	} {
		r := ward(t)
		e := &r.Opening
		e.To = at(t, r.Zone, "2026-03-04 00:00").Add(5 * time.Second)
		e.From, e.Due = e.To.Add(-28*24*time.Hour), e.To
		e.Wait = &w
		b.WriteString(wrap(Sentence(&r, e)+" "+basis(&r, e), 100, "", "") + "\n\n")
	}
	golden(t, "wait.txt", b.String())
}
