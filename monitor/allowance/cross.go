package allowance

import "tailbell/exact"

// critical is a critical count, if there is one.
type critical struct {
	k  int64
	ok bool
}

// critical is the count that signals in a window under a limit on p.
func (m *model) critical(l load, alpha float64) critical {
	if !(alpha > 0) {
		return critical{}
	}
	search := m.test(l).CriticalLower
	if m.tail == Upper {
		search = m.test(l).CriticalUpper
	}
	k, _, ok := search(alpha)
	return critical{k, ok}
}

// size is the p-value of a count in a window.
func (m *model) size(l load, k int64) float64 {
	if m.tail == Upper {
		return m.test(l).Upper(k)
	}
	return m.test(l).Lower(k)
}

// crosses is the chance of a look to signal where the one before it did not,
// averaged over the true rates.
func (m *model) crosses(t *turn, before, now critical) float64 {
	if !now.ok {
		return 0
	}
	sum := 0.0
	for _, n := range m.nodes {
		sum += float64(n.weight * m.crossesAt(n.rate, t, before, now))
	}
	return sum
}

func (m *model) crossesAt(rate float64, t *turn, before, now critical) float64 {
	if !before.ok {
		return m.tailAt(rate, t.now, now.k)
	}
	leaving, shared, entering := m.counts(rate, t.leaving), m.counts(rate, t.shared), m.counts(rate, t.entering)
	if m.tail == Upper {
		return crossUpper(leaving, shared, entering, before.k, now.k)
	}
	return crossLower(leaving, shared, entering, before.k, now.k)
}

// negligible is what a rest of terms may be of the sum of those before it.
const negligible = 1e-17

// crossUpper is exact.CrossingUpper, summed from the top for as long as it
// matters. What is left out is bounded by the shared counts' tail times the
// entering ones', both of which fall.
func crossUpper(leaving, shared, entering exact.Counting, before, now int64) float64 {
	sum := 0.0
	for c := before - 1; c >= 0; c-- {
		enters := entering.Upper(now - c)
		if mass := shared.PMF(c); mass > 0 {
			sum += float64(float64(mass*leaving.Lower(before-1-c)) * enters)
		}
		if enters <= negligible*sum || c%16 == 0 && float64(shared.Lower(c)*enters) <= negligible*sum {
			break
		}
	}
	return sum
}

// crossLower is exact.CrossingLower in the same way.
func crossLower(leaving, shared, entering exact.Counting, before, now int64) float64 {
	sum := 0.0
	for c := now; c >= 0; c-- {
		leaves := leaving.Upper(before + 1 - c)
		if mass := shared.PMF(c); mass > 0 {
			sum += float64(float64(mass*leaves) * entering.Lower(now-c))
		}
		if leaves <= negligible*sum || c%16 == 0 && float64(shared.Lower(c)*leaves) <= negligible*sum {
			break
		}
	}
	return sum
}

// tailAt is the chance of a window to signal at a true rate.
func (m *model) tailAt(rate float64, l load, k int64) float64 {
	if m.tail == Upper {
		return m.counts(rate, l).Upper(k)
	}
	return m.counts(rate, l).Lower(k)
}

// signals is that chance averaged over the true rates: the cost of a first look.
func (m *model) signals(l load, k int64) float64 {
	sum := 0.0
	for _, n := range m.nodes {
		sum += float64(n.weight * m.tailAt(n.rate, l, k))
	}
	return sum
}

// opens bounds the chance of a look to open an alert from above, whatever the
// look before it was: that it signals, and in the upper tail that an event has
// entered with the slots that are new.
func (m *model) opens(now, slots, older load, k int64) float64 {
	if m.tail == Lower {
		return m.signals(now, k)
	}
	sum := 0.0
	for _, n := range m.nodes {
		all := m.counts(n.rate, now).Upper(k)
		without := float64(m.counts(n.rate, slots).PMF(0) * m.counts(n.rate, older).Upper(k))
		sum += float64(n.weight * max(0, all-without))
	}
	return sum
}
