package estimate

import (
	"math"

	"tailbell/exact/resample"
)

// stratum is a set of cells with a common rate, whose total is given.
type stratum struct {
	events   []int64
	exposure []float64 // trials for a proportion
	group    []int
	total    int64
	size     float64 // sum of exposure
}

// table is what a conditional test judges: the events of each group of cells
// against what is expected when each stratum keeps one rate. Its statistic is
// Pearson's, sum over groups of (events - expected)^2 / variance.
type table struct {
	proportion         bool
	strata             []stratum
	groups             int
	expected, variance []float64 // by group; the variance without the total given
	observed           []int64
}

// newTable merges the cells of each stratum that are of the same group and
// drops strata that can't differ from what is expected: those without events,
// with one cell, or full.
func newTable(proportion bool, groups int, strata []stratum) *table {
	t := &table{
		proportion: proportion, groups: groups, expected: make([]float64, groups),
		variance: make([]float64, groups), observed: make([]int64, groups),
	}
	for _, s := range strata {
		t.add(s)
	}
	return t
}

func (t *table) add(cells stratum) {
	var s stratum
	place := map[int]int{}
	for i, g := range cells.group {
		if cells.exposure[i] == 0 {
			continue
		}
		j, ok := place[g]
		if !ok {
			j = len(s.group)
			place[g] = j
			s.group = append(s.group, g)
			s.events = append(s.events, 0)
			s.exposure = append(s.exposure, 0)
		}
		s.events[j] += cells.events[i]
		s.exposure[j] += cells.exposure[i]
		s.total += cells.events[i]
		s.size += cells.exposure[i]
	}
	full := t.proportion && float64(s.total) == s.size
	if s.total == 0 || len(s.group) < 2 || full {
		return
	}
	t.strata = append(t.strata, s)
	p := float64(s.total) / s.size
	for j, g := range s.group {
		t.observed[g] += s.events[j]
		t.expected[g] += s.exposure[j] * p
		if t.proportion {
			t.variance[g] += s.exposure[j] * p * (1 - p)
		} else {
			t.variance[g] += s.exposure[j] * p
		}
	}
}

func (t *table) events() int64 {
	n := int64(0)
	for i := range t.strata {
		n += t.strata[i].total
	}
	return n
}

// statistic is Pearson's for the events of each group.
func (t *table) statistic(groups []int64) float64 {
	sum := 0.0
	for g, n := range groups {
		if t.variance[g] > 0 {
			d := float64(n) - t.expected[g]
			sum += d * d / t.variance[g]
		}
	}
	return sum
}

// mean is what the statistic is on average, given the totals: for a rate, the
// number of cells less one if there is one stratum and every cell is a group.
func (t *table) mean() float64 {
	sum := 0.0
	for i := range t.strata {
		s := &t.strata[i]
		for j, g := range s.group {
			q := s.exposure[j] / s.size
			v := float64(s.total) * q * (1 - q)
			if t.proportion {
				v *= (s.size - float64(s.total)) / (s.size - 1)
			}
			sum += v / t.variance[g]
		}
	}
	return sum
}

// splitter draws the events of a stratum's cells.
type splitter interface {
	split(draw source, s *stratum, counts []int64)
}

type bySize struct{ *resample.Splitter }

func (b bySize) split(draw source, s *stratum, counts []int64) { b.Split(draw, s.total, counts) }

type byTrials struct{ *resample.Urn }

func (b byTrials) split(draw source, s *stratum, counts []int64) { b.Split(draw, s.total, counts) }

func (t *table) splitter(s *stratum) splitter {
	if !t.proportion {
		return bySize{resample.NewSplitter(s.exposure)}
	}
	return byTrials{resample.NewUrn(trials(s.exposure))}
}

func trials(exposure []float64) []int64 {
	n := make([]int64, len(exposure))
	for i, e := range exposure {
		n[i] = int64(math.Round(e))
	}
	return n
}

// steps is about how many elementary draws one redraw of the table takes.
func (t *table) steps() int64 {
	n := int64(0)
	for i := range t.strata {
		s := &t.strata[i]
		cells := int64(len(s.group))
		few := s.total
		if t.proportion {
			few = min(few, int64(s.size)-few)
		} else {
			few = min(few, 10*cells)
		}
		n += few + cells
	}
	return n
}
