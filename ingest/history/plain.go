package history

import (
	"tailbell/config"
	"tailbell/ingest/wire"
)

// plainCounts are the events and the exposure of a plain row.
type plainCounts struct {
	events      int64
	exposure    config.Decimal
	hasEvents   bool
	hasExposure bool
}

// read reads plain numbers; false for anything else, and where neither is
// there.
func (c *plainCounts) read(p *plainRows) bool {
	ok := true
	if p.events >= 0 && len(p.t.cells[p.events]) > 0 {
		c.events, ok = wire.PlainWhole(p.t.cells[p.events])
		c.hasEvents = true
	}
	if ok && p.exposure >= 0 && len(p.t.cells[p.exposure]) > 0 {
		c.exposure, ok = wire.PlainDecimal(p.t.cells[p.exposure])
		c.hasExposure = true
	}
	return ok && (c.hasEvents || c.hasExposure)
}
