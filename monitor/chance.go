package monitor

import "math"

// Chances sums up the p-values of all looks of one indicator and tail: where
// its baselines are right, looks that overlap aside, no share of them should lie
// far above its level.
type Chances struct {
	Indicator string
	Upper     bool
	// Looks were made when due, and Sum is that of their p-values.
	Looks int64
	Sum   float64
	// AtMost counts those at or under each of ChanceLevels.
	AtMost [len(ChanceLevels)]int64
}

// ChanceLevels are the p-values at or under which looks are counted.
var ChanceLevels = [...]float64{0.1, 0.05, 0.01, 0.001, 0.0001}

// chanceKey is all that the p-value of a usual look depends on.
type chanceKey struct {
	events int64
	bits   uint64 // of the exposure
}

// KnownChances are p-values that were computed before. Engines under one set-up
// may share them, one at a time.
type KnownChances struct{ under map[edgeKey][]keptChance }

// KeepChances makes the engine compute the p-value of every look, in each tail
// that is watched, and sum them up: call it before the first message.
func (e *Engine) KeepChances(known *KnownChances) {
	if known.under == nil {
		known.under = map[edgeKey][]keptChance{}
	}
	e.chances, e.known = map[*indicator]*[2]Chances{}, known
}

// Chances returns the sums, by indicator, the upper tail first.
func (e *Engine) Chances() []Chances {
	var list []Chances
	for _, ix := range e.indicators {
		c := e.chances[ix]
		if c == nil {
			continue
		}
		for d, watched := range [...]bool{ix.cfg.Upper, ix.cfg.Lower} {
			if watched {
				c[d].Indicator, c[d].Upper = ix.cfg.Name, direction(d) == upper
				list = append(list, c[d])
			}
		}
	}
	return list
}

func (e *Engine) chancesOf(ix *indicator) *[2]Chances {
	c := e.chances[ix]
	if c == nil {
		c = &[2]Chances{}
		e.chances[ix] = c
	}
	return c
}

func (c *Chances) add(p float64) {
	c.Looks++
	c.Sum += p
	if p > ChanceLevels[0] {
		return
	}
	for i, level := range ChanceLevels {
		if p <= level {
			c.AtMost[i]++
		}
	}
}

// chance adds the p-values of a look that was made.
func (e *Engine) chance(s *series, ep *epoch, l *look) {
	ix := s.indicator
	c := e.chancesOf(ix)
	o := opportunity{}
	u, ok := ix.judgedBy(s, ep, l.window, l.boundary)
	if ok && !l.exposure.IsZero() {
		o = ix.opportunity(s, &u, &l.tally, l.boundary-int64(ep.cfg.Windows[l.window].Slots), l.boundary, l.at)
	}
	for _, d := range bothTails {
		switch {
		case d == upper && !ep.cfg.Upper || d == lower && !ep.cfg.Lower:
		case o.weighted == 0:
			c[d].add(1)
		default:
			c[d].add(tailOf(newLaw(&u, d, &o), d, l.events))
		}
	}
}

func tailOf(p law, d direction, events int64) float64 {
	if d == upper {
		return p.Upper(events)
	}
	return p.Lower(events)
}

// quickChance adds the p-values of a look that quick made.
func (e *Engine) quickChance(s *series, w int) {
	ix := s.indicator
	c := e.chancesOf(ix)
	t := &s.windows[w].running.tally
	weighted := float64(t.exposure.Lo) / pow10[ix.cfg.GrainDigits]
	key := chanceKey{t.events, math.Float64bits(weighted)}
	for _, d := range bothTails {
		if d == upper && !ix.cfg.Upper || d == lower && !ix.cfg.Lower {
			continue
		}
		if d == upper && t.events == 0 {
			c[d].add(1)
			continue
		}
		x := s.windows[w].edges[d]
		if x.chances == nil {
			x.chances = e.known.of(x.key)
		}
		c[d].add(x.chance(key, weighted))
	}
}

// chanceBits is the binary logarithm of how many p-values are kept under one
// baseline and limit.
const chanceBits = 18

// of returns the places for p-values under one baseline and limit.
func (k *KnownChances) of(key edgeKey) []keptChance {
	if k.under[key] == nil {
		if len(k.under) >= mostTables {
			clear(k.under)
		}
		k.under[key] = make([]keptChance, 1<<chanceBits)
	}
	return k.under[key]
}

// mostTables is under how many baselines and limits p-values are kept: each
// takes 6 MiB.
const mostTables = 16

// chance returns the p-value of a count, which is kept.
func (x *edges) chance(key chanceKey, weighted float64) float64 {
	at := &x.chances[(key.bits*0x9E3779B97F4A7C15^uint64(key.events)*0xD6E8FEB86659FD93)>>(64-chanceBits)]
	if at.key != key {
		o := opportunity{exposure: weighted, weighted: weighted}
		*at = keptChance{key, tailOf(newLaw(&x.u, x.key.d, &o), x.key.d, key.events)}
	}
	return at.p
}

// keptChance is a p-value with what it is of; the zero value is of no events in
// no exposure, which is never asked for.
type keptChance struct {
	key chanceKey
	p   float64
}
