package monitor

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

// KnownChances are p-values that were computed before. Engines under one set-up
// may share them, one at a time.
type KnownChances struct{ under map[edgeKey][]keptChance }

// KeepChances makes the engine compute the p-value of every look, in each tail
// that is watched, and sum them up: call it before the first message.
func (e *Engine) KeepChances(known *KnownChances) {
	if known.under == nil {
		known.under = map[edgeKey][]keptChance{}
	}
	e.rouseAll()
	e.known = known
}

// Chances returns the sums, by indicator, the upper tail first.
func (e *Engine) Chances() []Chances {
	var list []Chances
	for _, ix := range e.indicators {
		if e.known == nil {
			break
		}
		c := ix.chances
		for _, k := range ix.kin()[1:] {
			for d := range c {
				c[d].include(&k.chances[d])
			}
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

// include adds the sums of others.
func (c *Chances) include(o *Chances) {
	c.Looks += o.Looks
	c.Sum += o.Sum
	for i, n := range o.AtMost {
		c.AtMost[i] += n
	}
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
	c := &ix.chances
	o := opportunity{}
	u, ok := ix.judgedBy(s, ep, l.window, l.boundary)
	if ok && !l.exposure.IsZero() {
		o = ix.opportunity(s, &u, &l.tally, ix.spanFrom(s, l.boundary, ix.places[l.window].Slots), l.boundary, l.at)
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
	c := &ix.chances
	t := &s.running(w).tally
	for d, watched := range [...]bool{ix.cfg.Upper, ix.cfg.Lower} {
		switch {
		case !watched:
		case direction(d) == upper && t.events == 0:
			c[d].add(1)
		default:
			x := s.windows[w].edges[d]
			if x.chances == nil {
				x.chances = e.known.of(x.key)
			}
			c[d].add(x.chance(t.events, t.exposure.Lo, ix.cfg.GrainDigits))
		}
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
// takes 4 MiB.
const mostTables = 16

// chance returns the p-value of a count in so many grains of exposure, which is
// kept. Edges are known of counts below mostEdges, and quick looks have less than
// 2^52 grains: both fit into one key.
func (x *edges) chance(events int64, grains uint64, digits int) float64 {
	key := grains | uint64(events)<<52
	at := &x.chances[key*0x9E3779B97F4A7C15>>(64-chanceBits)]
	if at.key != key {
		weighted := float64(grains) / pow10[digits]
		o := opportunity{exposure: weighted, weighted: weighted}
		*at = keptChance{key, tailOf(newLaw(&x.u, x.key.d, &o), x.key.d, events)}
	}
	return at.p
}

// keptChance is a p-value with what it is of; the zero value is of no events in
// no exposure, which is never asked for.
type keptChance struct {
	key uint64
	p   float64
}
