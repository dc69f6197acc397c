package monitor

import (
	"fmt"
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
	cfg, b := ep.cfg, s.baseline(ep.cfg)
	from := boundary - int64(cfg.Windows[window].Slots)
	t := ix.tally(s, from, boundary)
	exposure := t.exposure.Float(cfg.GrainDigits)
	ev := life.Evidence{
		Window: cfg.Windows[window].Name,
		From:   ix.cal.Start(from).in(cfg.Zone), To: ix.cal.Start(boundary).in(cfg.Zone), Due: ix.due(boundary).in(cfg.Zone),
		Events: t.events, Exposure: t.exposure.decimal(cfg.GrainDigits), Unit: cfg.Unit,
		EventNoun: cfg.EventNoun, LateEvents: t.late,
		Per: cfg.Per, Alpha: cfg.Alpha, Chosen: true,
		Test: testName(cfg, b), Limit: cfg.PLimit,
		Baseline:     baselineOf(cfg, b),
		SetupVersion: ep.version, SetupDigest: ep.digest,
	}
	e.fillTest(&ev, cfg, b, d, exposure)
	fillRate(&ev, cfg, b, exposure)
	fillRatio(&ev, cfg, b, exposure)
	ev.Recompute = recompute(&ev, cfg, b, d)
	return ev
}

func (i Instant) in(zone *time.Location) time.Time { return i.Time().In(zone) }

func (e *Engine) fillTest(ev *life.Evidence, cfg *config.Indicator, b *config.Baseline, d direction, exposure float64) {
	p := newLaw(cfg, b, d, exposure)
	ev.Expected = expected(cfg, b, exposure)
	if d == upper {
		ev.P, ev.Log10P = p.Upper(ev.Events), p.LogUpper(ev.Events)/math.Ln10
		ev.Critical, ev.AttainedSize, _ = p.CriticalUpper(cfg.PLimit)
		return
	}
	ev.P, ev.Log10P = p.Lower(ev.Events), p.LogLower(ev.Events)/math.Ln10
	ev.Critical, ev.AttainedSize, _ = p.CriticalLower(cfg.PLimit)
}

// expected is the number of events that the baseline itself would bring.
func expected(cfg *config.Indicator, b *config.Baseline, exposure float64) float64 {
	if b.Kind == config.Reference {
		return float64(b.Events) / referenceExposure(cfg, b) * exposure
	}
	return b.Rate * exposure
}

func referenceExposure(cfg *config.Indicator, b *config.Baseline) float64 {
	return floatOf(b.Exposure)
}

func fillRate(ev *life.Evidence, cfg *config.Indicator, b *config.Baseline, exposure float64) {
	ev.Rate = float64(ev.Events) / exposure * cfg.Per
	if cfg.Measure == config.Proportion {
		ev.Measure = "proportion"
		ev.RateLower, ev.RateUpper = exact.ClopperPearson(ev.Events, int64(exposure), cfg.Alpha)
		ev.RateLower, ev.RateUpper = ev.RateLower*cfg.Per, ev.RateUpper*cfg.Per
		return
	}
	ev.Measure = "rate"
	lo, hi := exact.Garwood(ev.Events, cfg.Alpha)
	ev.RateLower, ev.RateUpper = lo/exposure*cfg.Per, hi/exposure*cfg.Per
}

// fillRatio gives the ratio to the baseline: of rates, of proportions, or the
// odds ratio where two proportions are compared.
func fillRatio(ev *life.Evidence, cfg *config.Indicator, b *config.Baseline, exposure float64) {
	if b.Kind == config.Known {
		ev.RatioKind = "ratio to a known " + ev.Measure
		usual := b.Rate * cfg.Per
		setRatio(ev, ev.Rate/usual, ev.RateLower/usual, ev.RateUpper/usual)
		return
	}
	if cfg.Measure == config.Proportion {
		ev.RatioKind = "odds ratio"
		p := exact.TwoProportion{RefEvents: b.Events, RefTrials: int64(floatOf(b.Exposure)), Trials: int64(exposure), Margin: 1}
		lo, hi := p.OddsRatioBounds(ev.Events, cfg.Alpha)
		misses, refMisses := float64(p.Trials-ev.Events), float64(p.RefTrials-p.RefEvents)
		setRatio(ev, float64(ev.Events)*refMisses/(misses*float64(b.Events)), lo, hi)
		return
	}
	ev.RatioKind = "rate ratio"
	p := exact.TwoRate{RefEvents: b.Events, Exposure: exposure, RefExposure: referenceExposure(cfg, b), Margin: 1}
	lo, hi := p.RatioBounds(ev.Events, cfg.Alpha)
	setRatio(ev, float64(ev.Events)/exposure/(float64(b.Events)/p.RefExposure), lo, hi)
}

// setRatio leaves out what has no finite value.
func setRatio(ev *life.Evidence, ratio, lo, hi float64) {
	ev.RatioLower = lo
	if !math.IsInf(ratio, 0) && !math.IsNaN(ratio) {
		ev.Ratio = &ratio
	}
	if !math.IsInf(hi, 0) && !math.IsNaN(hi) {
		ev.RatioUpper = &hi
	}
}

func baselineOf(cfg *config.Indicator, b *config.Baseline) life.Baseline {
	r := life.Baseline{Margin: b.Margin, Version: b.Version, Source: b.Source}
	if b.Kind == config.Reference {
		r.Kind, r.Events, r.Exposure = "reference", b.Events, b.Exposure.String()
		r.Rate = float64(b.Events) / referenceExposure(cfg, b) * cfg.Per
		return r
	}
	r.Kind, r.Rate = "known", b.Rate*cfg.Per
	return r
}

// recompute is the command line that gives the evidence's numbers again.
func recompute(ev *life.Evidence, cfg *config.Indicator, b *config.Baseline, d direction) string {
	var args []string
	add := func(name, value string) { args = append(args, "--"+name+" "+value) }
	add("events", strconv.FormatInt(ev.Events, 10))
	if cfg.Measure == config.Proportion {
		add("trials", ev.Exposure)
	} else {
		add("exposure", ev.Exposure)
	}
	switch {
	case b.Kind == config.Known:
		add("baseline", number(ev.Baseline.Rate))
	case cfg.Measure == config.Proportion:
		add("reference-events", strconv.FormatInt(b.Events, 10))
		add("reference-trials", b.Exposure.String())
	default:
		add("reference-events", strconv.FormatInt(b.Events, 10))
		add("reference-exposure", b.Exposure.String())
	}
	if cfg.Per != 1 {
		add("per", number(cfg.Per))
	}
	if b.Margin != 1 {
		add("margin", number(b.Margin))
	}
	if d == lower {
		add("tail", "lower")
	}
	add("alpha", number(cfg.Alpha))
	add("limit", number(cfg.PLimit))
	return "tailbell exact " + strings.Join(args, " ")
}

func number(f float64) string { return fmt.Sprint(f) }

// since is what the data after the opening look say, free of the choice that
// the ring made: slots known on both sides, from the opening look on (or from
// where slots are still kept) to the latest look.
func (e *Engine) since(a *alert) *life.Since {
	s := a.series
	ix := s.indicator
	from := max(a.opening.boundary, ix.floor)
	to := min(a.last, ix.looked)
	if to <= from {
		return nil
	}
	cfg := ix.epochAt(to).cfg
	var events int64
	var exposure Quantity
	if !ix.needs.exposure && !ix.needs.events {
		t := ix.tally(s, from, to)
		events, exposure = t.events, t.exposure
	} else {
		inside := s.cells.between(from, to)
		for i := range inside {
			if c := &inside[i]; ix.needs.paired(c) {
				events += c.events
				exposure = exposure.add(ix.exposureOf(c))
			}
		}
	}
	if exposure.IsZero() {
		return nil
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

func (ix *indicator) exposureOf(c *cell) Quantity {
	if ix.needs.exposure {
		return c.exposure
	}
	return ix.clock.between(ix.cal.Start(c.slot), ix.cal.Start(c.slot+1))
}
