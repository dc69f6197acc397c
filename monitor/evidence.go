package monitor

import (
	"math"
	"strconv"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/life"
)

// evidence says what a look saw, with the data as they stand, under the
// stanza in force when it fell due.
func (e *Engine) evidence(s *series, d direction, boundary int64, window int) life.Evidence {
	ix := s.indicator
	ep := ix.epochAt(boundary)
	from := ix.spanFrom(s, boundary, ix.places[window].Slots)
	at := ix.due(boundary)
	if i, ok := s.tails[d].litAt(boundary, window); ok {
		at = s.tails[d].lit[i].at
	}
	t := ix.tally(s, from, boundary)
	u, ok := ix.judgedBy(s, ep, window, boundary)
	if !ok {
		panic("monitor: evidence of a look without a baseline")
	}
	o := ix.opportunity(s, &u, &t, from, boundary, at)
	ev := e.tell(s, d, ep, boundary, &seen{window, ix.cal.Start(from), ix.cal.Start(boundary), ix.due(boundary), t, u, o})
	ev.SignedOff, ev.AfterSignOff = ix.isSigned(s, from, boundary), t.revised
	if length := int64(ix.places[window].Slots); boundary-from < length {
		ev.Shortened = length - (boundary - from)
	}
	ev.Carriers, ev.MoreCarriers = ix.carriers(s, from, boundary)
	return ev
}

// seen is what a look of a window saw between two moments, and how it weighed
// that.
type seen struct {
	window        int
	from, to, due Instant
	tally         tally
	u             usual
	o             opportunity
}

// tell says what a look saw, under what was in force at a boundary.
func (e *Engine) tell(s *series, d direction, ep *epoch, boundary int64, x *seen) life.Evidence {
	cfg, u, o := ep.cfg, &x.u, &x.o
	ev := life.Evidence{
		Window: s.indicator.places[x.window].Name,
		From:   x.from.in(cfg.Zone), To: x.to.in(cfg.Zone), Due: x.due.in(cfg.Zone),
		Events: x.tally.events, Exposure: x.tally.exposure.decimal(cfg.GrainDigits), Unit: cfg.Unit,
		EventNoun: cfg.EventNoun, LateEvents: x.tally.late, Provisional: x.tally.provisional,
		Per: cfg.Per, Alpha: cfg.Alpha, Chosen: true,
		Test: testName(u, o), Limit: u.limit[d],
		SetupVersion: ep.version, SetupDigest: ep.digest,
	}
	if o.weighted != o.exposure {
		weighted := o.weighted
		ev.Weighted = &weighted
	}
	fillTest(&ev, u, d, o)
	fillRate(&ev, u, o)
	ev.RatioKind, ev.Ratio, ev.RatioLower, ev.RatioUpper = ratioTo(&ev, u, u.ref, o)
	ev.Baseline = s.indicator.baselineOf(s, u, &ev, o)
	ev.Allowance = e.allowanceOf(s, cfg, boundary)
	ev.Recompute = recompute(&ev, u, d)
	return ev
}

func (i Instant) in(zone *time.Location) time.Time { return i.Time().In(zone) }

func fillTest(ev *life.Evidence, u *usual, d direction, o *opportunity) {
	p := newLaw(u, d, o)
	ev.Expected = expected(u, o)
	if d == upper {
		ev.P, ev.Log10P = p.Upper(ev.Events), p.LogUpper(ev.Events)/math.Ln10
		ev.Critical, ev.AttainedSize, _ = p.CriticalUpper(u.limit[upper])
		return
	}
	ev.P, ev.Log10P = p.Lower(ev.Events), p.LogLower(ev.Events)/math.Ln10
	ev.Critical, ev.AttainedSize, _ = p.CriticalLower(u.limit[lower])
}

// expected is the number of events that the baseline itself would bring.
func expected(u *usual, o *opportunity) float64 {
	rate := u.base.Rate
	if u.ref != nil {
		rate = float64(u.ref.events) / u.ref.weighted
	}
	if o.trials == nil {
		return rate * o.weighted
	}
	return mean(o.trials, min(rate, 1))
}

func fillRate(ev *life.Evidence, u *usual, o *opportunity) {
	per := u.cfg.Per
	ev.Rate = float64(ev.Events) / o.exposure * per
	if u.cfg.Measure == config.Proportion {
		ev.Measure = "proportion"
		lo, hi := exact.ClopperPearson(ev.Events, int64(o.exposure), u.cfg.Alpha)
		ev.RateLower, ev.RateUpper = lo*per, hi*per
		return
	}
	ev.Measure = "rate"
	lo, hi := exact.Garwood(ev.Events, u.cfg.Alpha)
	ev.RateLower, ev.RateUpper = lo/o.exposure*per, hi/o.exposure*per
}

// ratioTo gives the ratio to the usual rate: of rates, of proportions, or the
// odds ratio where two proportions are compared. Strata and delay count: the
// ratio is to what would be usual in these slots.
func ratioTo(ev *life.Evidence, u *usual, ref *reference, o *opportunity) (kind string, ratio *float64, lower float64, upper *float64) {
	events := float64(ev.Events)
	switch {
	case ref == nil:
		usual := expected(u, o)
		lo, hi := exact.Garwood(ev.Events, u.cfg.Alpha)
		if u.cfg.Measure == config.Proportion {
			lo, hi = exact.ClopperPearson(ev.Events, int64(o.exposure), u.cfg.Alpha)
			lo, hi = lo*o.exposure, hi*o.exposure
		}
		kind = "ratio to a known " + ev.Measure
		if u.cfg.Expected {
			kind = life.StandardisedRatio
		}
		return kind, finite(events / usual), lo / usual, finite(hi / usual)
	case u.cfg.Measure == config.Proportion:
		p := exact.TwoProportion{RefEvents: ref.events, RefTrials: int64(ref.exposureFloat(u)), Trials: int64(o.exposure), Margin: 1}
		lo, hi := p.OddsRatioBounds(ev.Events, u.cfg.Alpha)
		misses, refMisses := float64(p.Trials-ev.Events), float64(p.RefTrials-p.RefEvents)
		return "odds ratio", finite(events * refMisses / (misses * float64(ref.events))), lo, finite(hi)
	}
	p := exact.TwoRate{RefEvents: ref.events, Exposure: o.weighted, RefExposure: ref.weighted, Margin: 1}
	lo, hi := p.RatioBounds(ev.Events, u.cfg.Alpha)
	return "rate ratio", finite(events / o.weighted / (float64(ref.events) / ref.weighted)), lo, finite(hi)
}

// exposureFloat is the reference's exposure as counted.
func (r *reference) exposureFloat(u *usual) float64 {
	if r.exposure.IsZero() {
		return r.weighted // stated in the set-up
	}
	return r.exposure.Float(u.cfg.GrainDigits)
}

// finite leaves out what has no finite value.
func finite(f float64) *float64 {
	if math.IsInf(f, 0) || math.IsNaN(f) {
		return nil
	}
	return &f
}

// baselineOf describes what the look was judged by.
func (ix *indicator) baselineOf(s *series, u *usual, ev *life.Evidence, o *opportunity) life.Baseline {
	b, cfg := u.base, u.cfg
	r := life.Baseline{Kind: kindName(b.Kind), Margin: b.Margin, Version: b.Version, Source: b.Source, Delay: b.Delay != nil}
	if b.Spread > 1 {
		r.Spread = b.Spread
	}
	if b.Strata != nil {
		r.Strata = strataName(b.Strata.By)
	}
	if u.ref == nil {
		r.Rate = b.Rate * cfg.Per
		return r
	}
	ref := u.ref
	r.Rate = float64(ref.events) / ref.weighted * cfg.Per
	r.Events = ref.events
	if b.Kind == config.Reference {
		r.Exposure = b.Exposure.String()
		return r
	}
	from, to := ix.cal.Start(ref.begin).in(cfg.Zone), ix.cal.Start(ref.end).in(cfg.Zone)
	r.Exposure, r.From, r.To, r.LeftOut = ref.exposure.decimal(cfg.GrainDigits), &from, &to, ref.leftOut
	weighted, between := ref.weighted, ref.between // a record must not point into what is kept
	if weighted != ref.exposureFloat(u) {
		r.Weighted = &weighted
	}
	if r.Peers = ref.peers; ref.peers >= 2 {
		r.Between = &between
	}
	if first := s.comparator; first != nil && b.Kind == config.Trailing && first.from < ref.from {
		c := life.Comparator{
			Events: first.events, Exposure: first.exposure.decimal(cfg.GrainDigits),
			From: ix.cal.Start(first.begin).in(cfg.Zone), To: ix.cal.Start(first.end).in(cfg.Zone),
		}
		_, c.Ratio, c.RatioLower, c.RatioUpper = ratioTo(ev, u, first, o)
		r.First = &c
	}
	return r
}

func kindName(k config.BaselineKind) string {
	switch k {
	case config.Known:
		return "known"
	case config.Reference:
		return "reference"
	case config.Trailing:
		return "trailing"
	case config.Peers:
		return "peers"
	}
	return "unknown kind"
}

func strataName(by config.StrataBy) string {
	switch by {
	case config.ByHourOfWeek:
		return "hour of week"
	case config.ByWeekday:
		return "weekday"
	case config.ByMonth:
		return "month"
	}
	return "unknown strata"
}

// recompute is the command line that gives the evidence's numbers again; where
// strata or delay weigh the exposure, those of the test alone.
func recompute(ev *life.Evidence, u *usual, d direction) string {
	var args []string
	add := func(name, value string) { args = append(args, "--"+name+" "+value) }
	add("events", strconv.FormatInt(ev.Events, 10))
	exposure := ev.Exposure
	if ev.Weighted != nil {
		exposure = number(*ev.Weighted)
	}
	proportion := u.cfg.Measure == config.Proportion
	if proportion {
		add("trials", exposure)
	} else {
		add("exposure", exposure)
	}
	switch {
	case u.ref == nil:
		add("baseline", number(ev.Baseline.Rate))
	case proportion:
		add("reference-events", strconv.FormatInt(u.ref.events, 10))
		add("reference-trials", ev.Baseline.Exposure)
	default:
		add("reference-events", strconv.FormatInt(u.ref.events, 10))
		if ev.Baseline.Weighted != nil {
			add("reference-exposure", number(*ev.Baseline.Weighted))
		} else {
			add("reference-exposure", ev.Baseline.Exposure)
		}
	}
	if u.cfg.Per != 1 {
		add("per", number(u.cfg.Per))
	}
	if u.base.Margin != 1 {
		add("margin", number(u.base.Margin))
	}
	if d == lower {
		add("tail", "lower")
	}
	add("alpha", number(u.cfg.Alpha))
	add("limit", number(u.limit[d]))
	return "tailbell exact " + strings.Join(args, " ")
}

func number(f float64) string { return strconv.FormatFloat(f, 'g', -1, 64) }

// since is what the data after the opening look say, free of the choice that
// the ring made: slots known on both sides, from the opening look on (or from
// where slots are still kept) to the latest look.
func (e *Engine) since(a *alert) *life.Since {
	s := a.series
	ix := s.indicator
	from := max(a.opening.boundary, ix.floor)
	to := min(a.last, ix.looked)
	if to <= from || (a.last != ongoing && from > a.opening.boundary && a.record.Since != nil) {
		return a.record.Since // what it covers has left memory since
	}
	cfg := ix.epochAt(to).cfg
	var events int64
	var exposure Quantity
	ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
		if n, known := ix.eventsOf(s, slot); known {
			events += n
			exposure = exposure.add(q)
		}
	})
	if exposure.IsZero() {
		return a.record.Since
	}
	units := exposure.Float(cfg.GrainDigits)
	r := &life.Since{
		From: ix.cal.Start(from).in(cfg.Zone), To: ix.cal.Start(to).in(cfg.Zone),
		Events: events, Exposure: exposure.decimal(cfg.GrainDigits),
		Rate: float64(events) / units * cfg.Per,
	}
	lo, hi := exact.Garwood(events, cfg.Alpha)
	lo, hi = lo/units, hi/units
	if trials := int64(units); cfg.Measure == config.Proportion && events <= trials {
		lo, hi = exact.ClopperPearson(events, trials, cfg.Alpha)
	}
	hi *= cfg.Per
	r.RateLower, r.RateUpper = lo*cfg.Per, &hi
	return r
}
