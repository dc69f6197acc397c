package monitor

import (
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// Restore returns the engine that a snapshot describes: one that goes on as
// the engine that wrote it would have. record returns the stored record of an
// alert by its id.
func Restore(p Partition, snap *Snapshot, record func(id string) (life.Record, error)) (*Engine, error) {
	e := New(p)
	e.position, e.drained = snap.Position, snap.Position
	if snap.Header == nil {
		return e, nil
	}
	var h header
	if err := json.Unmarshal(snap.Header, &h); err != nil {
		return nil, fmt.Errorf("monitor: reading the stored header: %w", err)
	}
	if err := e.restoreHeader(&h, snap.Settings); err != nil {
		return nil, err
	}
	if err := e.restoreAll(snap.Series, record); err != nil {
		return nil, err
	}
	e.relink()
	if err := e.restoreInbounds(&h, snap.Waiting); err != nil {
		return nil, err
	}
	if snap.Renumbered {
		h.Part, h.Ahead = 0, 0
	}
	if err := e.restoreCounts(&h); err != nil {
		return nil, err
	}
	if err := e.restoreIDs(snap.IDs); err != nil {
		return nil, err
	}
	e.restoreComings()
	e.reschedule()
	e.rewakeAll()
	e.await()
	return e, nil
}

func (e *Engine) restoreHeader(h *header, settings []SettingChange) error {
	e.history, e.clock, e.version, e.account = h.History, h.Clock, h.Version, h.Account
	e.checkpoint = checkpoint{h.Cycle, h.Next}
	if h.Archive != nil {
		e.archiveFrom = *h.Archive
	}
	if e.account.RefusedBy == nil {
		e.account.RefusedBy = map[Reason]int64{}
	}
	if err := e.restoreFacts(h.Facts); err != nil {
		return err
	}
	setups := map[int]*config.Setup{}
	for _, s := range settings {
		setup, err := config.Parse(s.Text, fmt.Sprintf("stored set-up %d", s.Version))
		if err != nil {
			return fmt.Errorf("monitor: restoring set-up %d: %w", s.Version, err)
		}
		setups[s.Version] = setup
	}
	if h.Version == 0 {
		return nil
	}
	e.setup = setups[h.Version]
	if e.setup == nil {
		return fmt.Errorf("monitor: set-up %d is in force, but not stored: %w", h.Version, errEncoding)
	}
	var horizon time.Duration
	for i, ih := range h.Indicators {
		ix, err := restoreIndicator(i, ih, setups)
		if err != nil {
			return err
		}
		ix.resume(&ih)
		if err := e.restoreGathering(ix, ih.Gathered, setups); err != nil {
			return err
		}
		e.indicators = append(e.indicators, ix)
		horizon = max(horizon, ix.cfg.Horizon)
	}
	e.ids.length = time.Duration(h.Generation) * time.Second
	e.ids.configure(horizon, e.setup.Limits.MaxIDs)
	return nil
}

func restoreIndicator(index int, ih indicatorHeader, setups map[int]*config.Setup) (*indicator, error) {
	var ix *indicator
	for _, ep := range ih.Epochs {
		setup := setups[ep.Version]
		if setup == nil {
			return nil, fmt.Errorf("monitor: set-up %d is needed, but not stored: %w", ep.Version, errEncoding)
		}
		i := slices.IndexFunc(setup.Indicators, func(in config.Indicator) bool { return in.Name == ih.Name })
		if i < 0 {
			return nil, fmt.Errorf("monitor: set-up %d has no indicator %q: %w", ep.Version, ih.Name, errEncoding)
		}
		cfg := &setup.Indicators[i]
		if ix == nil {
			ix = newIndicator(index, cfg)
		}
		ix.cfg = cfg
		windows, err := ep.restoreWindows(ix, cfg)
		if err != nil {
			return nil, err
		}
		ix.epochs = append(ix.epochs, epoch{from: ep.From, cfg: cfg, version: ep.Version, digest: setup.Digest, windows: windows})
	}
	if ix == nil {
		return nil, fmt.Errorf("monitor: indicator %q was in force under no set-up: %w", ih.Name, errEncoding)
	}
	return ix, ih.restorePlaces(ix)
}

// resume lets the indicator stand where it stood.
func (ix *indicator) resume(ih *indicatorHeader) {
	if !ih.Started {
		return
	}
	ix.started, ix.frozenAt = true, ih.Frozen
	if ih.Kept != nil && ih.Floor != nil {
		ix.kept, ix.floor = *ih.Kept, *ih.Floor
	}
	ix.pass(ih.Looked)
}

// restoreStub puts a stub in the place of a series that has ended.
func (e *Engine) restoreStub(number uint32, data []byte) error {
	r := &reader{b: data}
	if version := r.byte(); version > encodingVersion {
		return fmt.Errorf("%w: encoding %d is not known to this program", errEncoding, version)
	}
	r.byte() // flags
	x := r.stub(number, e.clock)
	e.stubs.keep(x)
	if x.touched {
		e.stubs.touched = append(e.stubs.touched, x)
	}
	e.series = append(e.series, x.ghost())
	return r.err
}

// derive fills in what is not stored of windows whose looks were all made.
func (s *series) derive() {
	ix := s.indicator
	for _, p := range ix.now().windows {
		ws := &s.windows[p.place]
		if p.Trials > 0 || ws.withheld != made || s.dates != nil || config.IsSum(s.name) || !ix.cfg.SlotLooks {
			continue
		}
		latest := ix.latest(p.Window)
		ws.made, ws.hasMade = latest, ix.started && latest >= p.since && latest-int64(p.Slots) >= max(s.birth, p.whole)
	}
}

func (t *tail) all() []*alert {
	if t.current == nil {
		return t.past
	}
	return append([]*alert{t.current}, t.past...)
}

// overlay lays one encoding over the series.
func (e *Engine) overlay(s *series, data []byte) error {
	r := &reader{b: data}
	version := r.byte()
	if version > withCounts || version < withoutLimits {
		return fmt.Errorf("%w: encoding %d is not known to this program", errEncoding, version)
	}
	flags := r.byte()
	switch {
	case flags&flagMirror != 0:
		return e.overlayMirror(s, r, version, flags)
	case flags&flagRetired != 0:
		return fmt.Errorf("%w: more follows after the series had ended", errEncoding)
	case flags&flagNamed != 0:
		*s = series{number: s.number, name: r.string(), cells: s.cells[:0]}
		s.indicator = e.indicatorNamed(r.bytes()) // nil: it must be a stub by now
		e.overlayGathered(s, flags)
	}
	if flags&flagNews != 0 {
		r.news(s)
	}
	if s.isGathered() && !s.unsummed {
		s.dates = r.allDates()
	}
	if s.silence = nil; flags&flagSilence != 0 {
		*s.tail(silence) = r.tail(s, silence)
	}
	s.birth, s.trimmed, s.unpaired, s.seen = r.int(), r.int(), r.int(), Instant(r.int())
	if n := r.length(); n <= cap(s.windows) {
		s.windows = s.windows[:n]
		clear(s.windows)
	} else {
		s.windows = make([]windowState, n)
	}
	for w := range s.windows {
		ws := &s.windows[w]
		ws.withheld, ws.hasMade = status(r.byte()), r.flag()
		ws.made, ws.withheldSince = r.int(), r.int()
	}
	for d := range s.tails {
		s.tails[d] = r.tail(s, direction(d))
	}
	r.references(s)
	s.limits = nil
	if version != withoutLimits {
		s.limits = r.limits(e)
	}
	if s.own = nil; version == withCounts {
		s.own = r.own()
	}
	if flags&flagArrivals != 0 {
		r.arrivals(s, e)
	} else {
		s.arrivals = nil
	}
	s.totals = nil
	if flags&flagTotals != 0 {
		s.totals = r.totals()
	}
	for range r.length() {
		c, here := r.cell(s, version)
		if ids := r.ids(); here {
			*s.at(c.slot) = c
			if len(ids)+len(s.eventIDs) > 0 {
				s.eventIDs.set(c.slot, ids)
			}
		}
	}
	if len(r.b) > 0 {
		r.fail("bytes are left over")
	}
	return r.err
}

func (r *reader) references(s *series) {
	s.references, s.comparator, s.marked = nil, nil, nil
	compared := r.flag()
	for range r.length() {
		x := reference{
			from: r.int(), period: r.int(), of: r.int(), events: r.int(),
			begin: r.int(), end: r.int(), leftOut: r.int(), peers: r.int(),
			exposure: r.quantity(), weighted: r.float(), between: r.float(),
		}
		if compared && s.comparator == nil {
			s.comparator = &x
			continue
		}
		s.references = append(s.references, x)
	}
	for range r.length() {
		s.marked = append(s.marked, markedSpan{alert: r.string(), from: r.int(), to: r.int()})
	}
}

// cell reads a cell, and whether a gathered sum has it: where no member is in
// force it has none, and loses the one that it had.
func (r *reader) cell(s *series, version byte) (c cell, here bool) {
	c = cell{
		slot: r.int(), events: r.int(), exposure: r.quantity(),
		saysEvents: uint32(r.uint()), saysExposure: uint32(r.uint()), items: uint32(r.uint()), late: r.int(),
	}
	if version > withoutSignOff {
		bits := r.byte()
		c.revised, c.provisional = bits&cellRevised != 0, bits&cellProvisional != 0
		if s.isGathered() && bits&cellHere == 0 {
			if i, ok := s.cells.find(c.slot); ok {
				s.cells = slices.Delete(s.cells, i, i+1)
			}
			return c, false
		}
	}
	return c, true
}

func (r *reader) ids() (list []string) {
	for range r.length() {
		list = append(list, r.string())
	}
	return list
}

func (r *reader) tail(s *series, d direction) tail {
	t := tail{disarmed: r.flag()}
	ringing := r.flag()
	t.quiet, t.opened = int32(r.uint()), int32(r.uint())
	alerts := make([]*alert, r.length())
	for i := range alerts {
		a := &alert{series: s, tail: d}
		a.record.ID = r.string()
		a.first, a.last, a.windows, a.frozen, a.pending = r.int(), r.int(), r.uint(), r.flag(), r.flag()
		a.opening = lookKey{r.int(), int(r.uint())}
		a.worst = lookKey{r.int(), int(r.uint())}
		a.worstLog10P = r.float()
		alerts[i] = a
	}
	t.past = alerts
	if ringing && len(alerts) > 0 {
		t.current, t.past = alerts[0], alerts[1:]
	}
	for range r.length() {
		l := litLook{boundary: r.int(), window: int(r.uint()), events: r.int(), exposure: r.quantity(), log10p: r.float(), at: Instant(r.int())}
		if n := r.uint(); n > uint64(len(alerts)) {
			r.fail("a look names an alert that isn't there")
		} else if n > 0 {
			l.alert = alerts[n-1]
		}
		t.lit = append(t.lit, l)
	}
	return t
}
