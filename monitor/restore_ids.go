package monitor

import "fmt"

// restoreIDs remembers all ids that a store kept, in the order of their writing.
func (e *Engine) restoreIDs(changes []IDChange) error {
	if len(e.ids.first) == 0 {
		e.ids.first = make(map[uint64]uint32, len(changes))
	}
	var entry identified
	for i := range changes {
		if err := e.restoreID(&changes[i], &entry); err != nil {
			return fmt.Errorf("monitor: restoring id %d: %w", i, err)
		}
	}
	e.ids.touched = nil
	return nil
}

// restoreID remembers one; x is where the one before was read.
func (e *Engine) restoreID(change *IDChange, x *identified) error {
	r := reader{b: change.Value}
	if v := r.byte(); v != idVersion {
		return fmt.Errorf("%w: encoding %d is not known to this program", errEncoding, v)
	}
	site := x.key.site
	*x = identified{generation: change.Generation, retracted: r.flag()}
	if next := r.bytes(); string(next) != site { // many of a site follow each other
		site = string(next)
	}
	x.key = idKey{site, r.string()}
	x.revision = r.int()
	if r.flag() {
		number := r.uint()
		if number >= uint64(len(e.series)) {
			return fmt.Errorf("%w: an id names series %d of %d", errEncoding, number, len(e.series))
		}
		x.stub = uint32(number)
		x.said = contribution{
			series: e.series[number], start: Instant(r.int()), end: Instant(r.int()), events: r.int(),
			exposure: r.quantity(), hasEvents: r.flag(), hasExposure: r.flag(), late: r.flag(),
		}
	}
	if r.err != nil {
		return r.err
	}
	e.ids.generation(x.generation).written++
	hash := e.ids.hashOf(x.key)
	place := e.ids.find(x.key, hash)
	switch old := e.ids.told(place, x.key, e.series); {
	case old == nil, old.gone(), !x.gone() && x.revision > old.revision:
		e.ids.putAt(place, hash, x)
	}
	e.ids.touched = e.ids.touched[:0]
	return nil
}
