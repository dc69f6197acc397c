package allowance

import (
	"encoding/binary"
	"math"
)

// Cache remembers limits, so that many series alike, and the same series day
// after day, cost a look into a table. It is for one goroutine; its zero value
// is empty. What it answers depends on the plan alone, never on what it
// remembers.
//
// To have series alike it solves a coarser plan that holds the asked one: a
// rate's exposure is rounded up to one of sixteen to the octave and Least moved
// down by as much, Vary rounded up to a multiple of 1/32. What is promised for
// the coarser plan is promised for the asked one; the counts in Part are those
// at the rounded exposure.
type Cache struct {
	known map[string]*Limits
	key   []byte
	// Solved counts the plans that had to be solved.
	Solved int
}

// remembered is how many plans a cache holds before it begins anew.
const remembered = 1 << 16

// Limits solves a plan, or knows it. The answer must not be changed.
func (c *Cache) Limits(p *Plan) (*Limits, error) {
	if err := p.Check(); err != nil {
		return nil, err
	}
	q := p.coarser()
	c.key = q.appendKey(c.key[:0])
	if l, ok := c.known[string(c.key)]; ok {
		return l, nil
	}
	return c.solve(q)
}

// solve remembers the answer to the plan of the present key.
func (c *Cache) solve(q Plan) (*Limits, error) {
	l, err := Solve(&q)
	if err != nil {
		return nil, err
	}
	if c.known == nil || len(c.known) >= remembered {
		c.known = map[string]*Limits{}
	}
	c.known[string(c.key)] = &l
	c.Solved++
	return &l, nil
}

// coarser is a plan that holds this one, and many like it.
func (p *Plan) coarser() Plan {
	q := *p
	q.Vary = math.Ceil(p.Vary*32) / 32
	if p.Volume > 0 {
		q.Volume, _ = nearby(p.Volume)
	}
	switch l := &q.Law; {
	case l.Proportion && p.Vary == 0 && p.least() == 1, len(p.Cycle) > 0 && p.Vary == 0:
		return q // it is solved for just these slots
	case l.Proportion:
		up, down := nearby(p.Exposure)
		q.Exposure = math.Ceil(up)
		q.Least = p.least() * math.Floor(down) / q.Exposure
	default:
		// Only the product of rate and exposure matters, or their ratio to the
		// reference's.
		if l.Estimated {
			q.Exposure, l.Exposure = p.Exposure/l.Exposure, 1
		} else {
			q.Exposure, l.Rate = p.Exposure*l.Rate, 1
		}
		up, _ := nearby(q.Exposure)
		q.Exposure, q.Least = up, p.least()/sixteenth*(1-0x1p-40)
	}
	return q
}

// sixteenth is the sixteenth root of 2.
var sixteenth = math.Sqrt(math.Sqrt(math.Sqrt(math.Sqrt2)))

// nearby are the neighbours of a number on a grid of sixteen to the octave: the
// one above it (or it itself) and the one below that.
func nearby(x float64) (up, down float64) {
	fraction, exponent := math.Frexp(x) // in [1/2, 1)
	down, up = 0.5/sixteenth, 0.5
	for up < fraction {
		down, up = up, up*sixteenth
	}
	return math.Ldexp(up, exponent), math.Ldexp(down, exponent)
}

// appendKey appends all that the limits depend on.
func (p *Plan) appendKey(key []byte) []byte {
	add := func(list ...float64) {
		for _, x := range list {
			key = binary.LittleEndian.AppendUint64(key, math.Float64bits(x))
		}
	}
	flags := byte(0)
	for i, set := range []bool{p.Law.Proportion, p.Law.Estimated, p.Upper, p.Lower} {
		if set {
			flags |= 1 << i
		}
	}
	key = append(key, flags)
	key = binary.AppendVarint(key, p.Law.Events)
	add(p.Law.Rate, p.Law.Exposure, p.Law.margin(), p.Law.spread(), p.Exposure, p.least(), p.Vary)
	add(p.SlotsPerYear, p.PerYear, p.Starts, p.Assurance, p.Level)
	add(p.Volume)
	key = binary.AppendVarint(binary.AppendVarint(key, p.Batch[0]), p.Batch[1])
	for _, list := range [][]float64{p.Cycle, p.Known, p.Messages} {
		key = binary.AppendUvarint(key, uint64(len(list)))
		add(list...)
	}
	for _, w := range p.Windows {
		kind := uint64(0)
		if w.Slot {
			kind |= 1
		}
		if w.Arrival {
			kind |= 2
		}
		key = binary.AppendUvarint(key, kind)
		key = binary.AppendUvarint(key, uint64(w.Slots))
		key = binary.AppendUvarint(key, uint64(w.Step))
		key = binary.AppendVarint(key, w.Trials)
	}
	return key
}
