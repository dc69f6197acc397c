package monitor

import (
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/allowance"
)

// twin is a slow second engine, written from README.md: it keeps all that was
// said, and after every change it sums every slot and makes every look inside
// the horizon anew. Nothing is stored between two of its thoughts but what
// the rules themselves remember.
type twin struct {
	setup      *config.Setup
	version    int
	history    bool
	started    bool
	clock      Instant
	position   uint64
	indicators []*twinIndicator
	series     map[string]*twinSeries
	order      []*twinSeries
	ids        map[[2]string]*twinID
	generation time.Duration
	steps      []twinStep
	refusals   []twinRefusal
	account    Account
	laws       map[twinLaw]twinP
	allowances allowance.Cache
}

type twinIndicator struct {
	epochs []twinEpoch
	slots  *twinSlots
	looked int64   // the latest boundary that fell due
	edge   Instant // where the horizon lay then; it never moves back
	series []*twinSeries
	drawn  []twinDraw
}

type twinEpoch struct {
	from int64
	cfg  *config.Indicator
}

type twinSeries struct {
	name   string
	ix     *twinIndicator
	birth  int64
	said   []*twinSaid // what stands
	sums   map[int64]*twinSum
	looks  map[lookKey]twinLook // as they stand, or stood when they left the horizon
	tails  [2]twinTail
	limits []twinLimits
}

// twinSaid is one observation that stands.
type twinSaid struct {
	series      *twinSeries
	o           Observation
	first, last int64
	shares      []int64
	late        bool
}

type twinID struct {
	revision  int64
	retracted bool
	said      *twinSaid
	forget    int64 // the generation with which it is forgotten
}

type twinSum struct {
	events, late, exposure   int64
	saysEvents, saysExposure int
	ids                      []string
}

type twinLook struct {
	status                 status
	events, late, exposure int64
	lit                    [2]bool
	p                      [2]twinP
}

type twinLaw struct {
	cfg              *config.Indicator
	base             *config.Baseline
	d                direction
	events, exposure int64
}

type twinP struct{ p, log10 float64 }

type twinRefusal struct {
	position uint64
	index    int
	reason   Reason
}

func newTwin() *twin {
	return &twin{
		history: true, series: map[string]*twinSeries{}, ids: map[[2]string]*twinID{},
		laws: map[twinLaw]twinP{}, account: Account{RefusedBy: map[Reason]int64{}},
	}
}

func (ix *twinIndicator) cfg() *config.Indicator { return ix.epochs[len(ix.epochs)-1].cfg }

func (ix *twinIndicator) at(boundary int64) *config.Indicator {
	cfg := ix.epochs[0].cfg
	for _, ep := range ix.epochs {
		if ep.from <= boundary {
			cfg = ep.cfg
		}
	}
	return cfg
}

func (ix *twinIndicator) due(boundary int64) Instant {
	return ix.slots.start(boundary).Add(ix.at(boundary).Settle)
}

// pass notes that the boundary fell due.
func (ix *twinIndicator) pass(boundary int64) {
	ix.looked = boundary
	ix.edge = max(ix.edge, ix.due(boundary).Add(-ix.cfg().Horizon))
}

// frozen reports whether the boundary lies beyond the horizon of the latest
// looks: no observation that is still taken can reach a slot before it.
func (ix *twinIndicator) frozen(boundary int64) bool {
	return ix.slots.start(boundary) < ix.edge
}

func (w *twin) apply(m *Message) {
	w.position = m.Position
	if m.Kind == Live {
		w.history = false
	}
	switch {
	case !w.history:
		w.advance(m.Stored)
	case m.HasTime && m.Kind != Observations:
		w.advance(m.Time)
	}
	switch m.Kind {
	case Observations:
		for i := range m.Items {
			w.element(m, i)
		}
	case ActMessage:
		w.act(m)
	case SettingMessage:
		w.set(m.Setting.Setup)
	case Rejected:
		w.account.Rejected++
		w.refuse(0, m.Items[0].Reason)
	case Tick, Live, SummaryMessage: // there is one partition
	}
}

func (w *twin) refuse(index int, reason Reason) {
	w.account.RefusedBy[reason]++
	w.refusals = append(w.refusals, twinRefusal{w.position, index, reason})
}

func (w *twin) set(next *config.Setup) {
	if w.setup != nil && w.setup.Digest == next.Digest {
		return
	}
	w.account.Settings++
	w.version++
	var longest time.Duration
	for i := range next.Indicators {
		cfg := &next.Indicators[i]
		longest = max(longest, cfg.Horizon)
		if w.setup == nil {
			ix := &twinIndicator{slots: newTwinSlots(cfg), epochs: []twinEpoch{{math.MinInt64, cfg}}}
			w.indicators = append(w.indicators, ix)
			if w.started {
				w.begin(ix, w.clock)
			}
			continue
		}
		ix := w.indicators[i]
		from := int64(math.MinInt64)
		if w.started {
			from = ix.looked + 1
		}
		ix.epochs = append(ix.epochs, twinEpoch{from, cfg})
		if w.started {
			ix.pass(ix.looked)
		}
	}
	if w.setup == nil {
		w.generation = max(24*time.Hour, (longest / 16).Truncate(time.Hour))
	}
	w.setup = next
}

// begin counts the looks that would have fallen due by now as made.
func (w *twin) begin(ix *twinIndicator, now Instant) {
	boundary := ix.slots.at(now.Add(-ix.cfg().Settle))
	for ix.due(boundary+1) <= now {
		boundary++
	}
	ix.edge = Beginning
	ix.pass(boundary)
}

func (w *twin) advance(to Instant) {
	if w.started && to <= w.clock {
		return
	}
	w.settleAll()
	if !w.started {
		for _, ix := range w.indicators {
			w.begin(ix, to)
		}
	}
	for {
		var next *twinIndicator
		for _, ix := range w.indicators {
			if due := ix.due(ix.looked + 1); due <= to && (next == nil || due < next.due(next.looked+1)) {
				next = ix
			}
		}
		if next == nil {
			break
		}
		w.look(next)
	}
	w.started, w.clock = true, to
	w.forget()
}

// forget drops the ids whose generations lie beyond the longest horizon.
func (w *twin) forget() {
	if w.setup == nil {
		return
	}
	oldest := w.generationOf(w.clock.Add(-w.longest()))
	for key, id := range w.ids {
		if id.forget < oldest {
			delete(w.ids, key)
		}
	}
}

func (w *twin) longest() time.Duration {
	var longest time.Duration
	for _, ix := range w.indicators {
		longest = max(longest, ix.cfg().Horizon)
	}
	return longest
}

func (w *twin) generationOf(t Instant) int64 {
	return int64(math.Floor(float64(t) / float64(w.generation.Microseconds())))
}

// sum sums all slots of a series anew.
func (w *twin) sum(s *twinSeries) {
	s.sums = map[int64]*twinSum{}
	for _, c := range s.said {
		for slot := c.first; slot <= c.last; slot++ {
			x := s.sums[slot]
			if x == nil {
				x = &twinSum{}
				s.sums[slot] = x
			}
			if c.o.HasEvents {
				x.saysEvents++
				x.events += c.o.Events
				if c.late {
					x.late += c.o.Events
				}
				if c.o.Events > 0 && c.o.ID != "" && s.ix.cfg().KeepIDs {
					x.ids = append(x.ids, c.o.ID)
				}
			}
			if c.o.HasExposure {
				x.saysExposure++
				x.exposure += c.shares[slot-c.first]
			}
		}
	}
	for _, x := range s.sums {
		slices.Sort(x.ids)
	}
}

// known reports whether both sides of a slot are known.
func (s *twinSeries) known(slot int64) bool {
	x, cfg := s.sums[slot], s.ix.cfg()
	if x == nil {
		x = &twinSum{}
	}
	return (cfg.Events == config.Each || x.saysEvents > 0) && (cfg.Exposure == config.Clock || x.saysExposure > 0)
}

// test makes one look with the data as they stand.
func (w *twin) test(s *twinSeries, boundary int64, window int) twinLook {
	ix := s.ix
	cfg := ix.at(boundary)
	from := boundary - int64(cfg.Windows[window].Slots)
	if from < s.birth {
		return twinLook{status: filling}
	}
	var l twinLook
	for slot := from; slot < boundary; slot++ {
		if x := s.sums[slot]; x != nil {
			l.events, l.late, l.exposure = l.events+x.events, l.late+x.late, l.exposure+x.exposure
		}
		if !s.known(slot) && ix.slots.start(slot) < ix.slots.start(slot+1) {
			l.status = missing
		}
	}
	if cfg.Exposure == config.Clock {
		l.exposure = twinByClock(cfg, ix.slots.start(from), ix.slots.start(boundary))
	}
	switch {
	case l.status == missing:
	case cfg.Measure == config.Proportion && l.events > l.exposure:
		l.status = overfull
	case l.events > 0 && l.exposure == 0:
		l.status = unexposed
	case l.exposure > 0:
		for _, d := range bothTails {
			if d == upper && cfg.Upper || d == lower && cfg.Lower {
				l.p[d] = w.p(twinLaw{cfg, cfg.BaselineFor(s.name), d, l.events, l.exposure})
				limit := s.limitAt(cfg, boundary, window, d)
				l.lit[d] = limit > 0 && l.p[d].p <= limit*(1+0x1p-48)
			}
		}
	}
	return l
}

// p is the exact test, straight from package exact.
func (w *twin) p(k twinLaw) twinP {
	if p, ok := w.laws[k]; ok {
		return p
	}
	b, margin := k.base, k.base.Margin
	if k.d == lower {
		margin = 1 / margin
	}
	units := float64(k.exposure) / math.Pow(10, float64(k.cfg.GrainDigits))
	reference, err := strconv.ParseFloat(b.Exposure.String(), 64)
	if err != nil {
		panic(err)
	}
	var x law
	switch {
	case k.cfg.Measure == config.Rate && b.Kind == config.Known:
		x = exact.Poisson{Rate: b.Rate * margin, Exposure: units}
	case k.cfg.Measure == config.Rate:
		x = exact.TwoRate{RefEvents: b.Events, Exposure: units, RefExposure: reference, Margin: margin}
	case b.Kind == config.Known:
		x = exact.NewBinomial(k.exposure, b.Rate*margin)
	default:
		x = exact.TwoProportion{RefEvents: b.Events, RefTrials: int64(reference), Trials: k.exposure, Margin: margin}
	}
	var p twinP
	if k.d == upper {
		p = twinP{x.Upper(k.events), x.LogUpper(k.events) / math.Ln10}
	} else {
		p = twinP{x.Lower(k.events), x.LogLower(k.events) / math.Ln10}
	}
	w.laws[k] = p
	return p
}

// rebuild makes every look inside the horizon anew and returns those that
// come out differently, by direction.
func (w *twin) rebuild(s *twinSeries) (changed [2][]lookKey) {
	ix := s.ix
	for boundary := ix.looked; !ix.frozen(boundary); boundary-- {
		cfg := ix.at(boundary)
		for i := range cfg.Windows {
			if !ix.slots.looksAt(boundary, cfg.Windows[i].Step) {
				continue
			}
			key := lookKey{boundary, i}
			was, now := s.looks[key], w.test(s, boundary, i)
			s.looks[key] = now
			for _, d := range bothTails {
				if was.lit[d] != now.lit[d] || now.lit[d] && (was.events != now.events || was.exposure != now.exposure) {
					changed[d] = append(changed[d], key)
				}
			}
		}
	}
	for _, d := range bothTails {
		slices.SortFunc(changed[d], compareKeys)
	}
	return changed
}

func compareKeys(a, b lookKey) int {
	if a.boundary != b.boundary {
		return int(a.boundary - b.boundary)
	}
	return a.window - b.window
}

// entered reports whether an event lies in the window's slots after the
// previous look of it that can be made.
func (w *twin) entered(s *twinSeries, key lookKey) bool {
	window := s.ix.at(key.boundary).Windows[key.window]
	from := key.boundary - int64(window.Slots)
	for b := key.boundary - int64(window.Step); b > from; b -= int64(window.Step) {
		if w.test(s, b, key.window).status == made {
			from = b
		}
	}
	for slot := from; slot < key.boundary; slot++ {
		if x := s.sums[slot]; x != nil && x.events > 0 {
			return true
		}
	}
	return false
}

// latest are the latest looks of each window that could be made.
func (s *twinSeries) latest() map[int]lookKey {
	latest := map[int]lookKey{}
	for key, l := range s.looks {
		if was, ok := latest[key.window]; l.status == made && (!ok || key.boundary > was.boundary) {
			latest[key.window] = key
		}
	}
	return latest
}

// signals reports whether the latest made look of any window does.
func (s *twinSeries) signals(d direction) bool {
	for _, key := range s.latest() {
		if s.looks[key].lit[d] && !s.tails[d].spent[key] {
			return true
		}
	}
	return false
}

// spend takes their say from the looks beyond the horizon which are not the
// latest of their window: it does not come back to them if a later one is
// withheld after all.
func (s *twinSeries) spend(d direction) {
	latest := s.latest()
	for key := range s.looks {
		if s.ix.frozen(key.boundary) && key != latest[key.window] {
			s.tails[d].spent[key] = true
		}
	}
}

// fallBack takes their say from windows whose latest look is withheld after
// all, if the look before it reaches beyond the slots that are kept.
func (s *twinSeries) fallBack(before map[int]lookKey) {
	kept, reach := s.ix.looked, 0 // the latest boundary beyond the horizon
	for !s.ix.frozen(kept) {
		kept--
	}
	windows := s.ix.cfg().Windows
	for _, w := range windows {
		reach = max(reach, w.Slots+w.Step)
	}
	for i, now := range s.latest() {
		if now.boundary < before[i].boundary && now.boundary-int64(windows[i].Slots) < kept+1-int64(reach) {
			for _, d := range bothTails {
				s.tails[d].spent[now] = true
			}
		}
	}
}

func twinSite(series string) string { return strings.SplitN(series, "/", 2)[0] }
