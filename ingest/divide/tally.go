package divide

import (
	"fmt"
	"hash/fnv"
	"maps"
	"math/big"
	"slices"

	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// Tally is the account of what a stream holds, before the engine has judged it.
type Tally struct {
	// Series are the understood elements by their series.
	Series map[string]*SeriesTally
	// Refused counts the elements and messages that can't be understood.
	Refused map[monitor.Reason]int64
	// Elements, Events and Readings sum what Series holds.
	Elements, Events, Readings int64
}

// SeriesTally is the account of one series.
type SeriesTally struct {
	Elements int64
	Events   int64
	// Readings counts the elements that are readings of counters. Their totals are
	// no events: the sum of them says only whether the same stand there.
	Readings int64
	totals   big.Int
	exposure big.Int // in units of 10^-18
	// content sums a digest of every element, so that it says whether the same
	// elements stand there, in whatever order.
	content uint64
}

// Exposure is the sum of all exposure, as a decimal number.
func (s *SeriesTally) Exposure() string {
	whole, rest := new(big.Int).QuoRem(&s.exposure, finest, new(big.Int))
	if rest.Sign() == 0 {
		return whole.String()
	}
	digits := fmt.Sprintf("%018d", rest)
	for digits[len(digits)-1] == '0' {
		digits = digits[:len(digits)-1]
	}
	return whole.String() + "." + digits
}

// Totals is the sum of the totals of all readings.
func (s *SeriesTally) Totals() string { return s.totals.String() }

// String says in words what the account holds.
func (s *SeriesTally) String() string {
	if s.Readings == 0 {
		return fmt.Sprintf("%d elements with %d events in %s", s.Elements, s.Events, s.Exposure())
	}
	return fmt.Sprintf("%d elements, %d of them readings of counters whose totals add up to %s, with %d events; exposure and its totals add up to %s",
		s.Elements, s.Readings, s.Totals(), s.Events, s.Exposure())
}

var finest = new(big.Int).Exp(big.NewInt(10), big.NewInt(18), nil)

// NewTally returns an empty account.
func NewTally() *Tally {
	return &Tally{Series: map[string]*SeriesTally{}, Refused: map[monitor.Reason]int64{}}
}

// add counts the elements of a message, but for those of series that are left
// out.
func (t *Tally) add(m *monitor.Message, leftOut func(series string) bool) {
	if m.Kind != monitor.Observations && m.Kind != monitor.Rejected {
		return
	}
	for i := range m.Items {
		if it := &m.Items[i]; it.Reason != "" || !leftOut(it.Observation.Series) {
			t.item(it)
		}
	}
}

func (t *Tally) item(it *monitor.Item) {
	if it.Reason != "" {
		t.Refused[it.Reason]++
		return
	}
	s := t.Series[it.Observation.Series]
	if s == nil {
		s = &SeriesTally{}
		t.Series[it.Observation.Series] = s
	}
	t.Elements++
	if it.Observation.Reading {
		t.Readings++
	} else {
		t.Events += it.Observation.Events
	}
	s.add(&it.Observation)
}

func (s *SeriesTally) add(o *monitor.Observation) {
	s.Elements++
	if o.Reading {
		s.Readings++
		s.totals.Add(&s.totals, big.NewInt(o.Events))
	} else {
		s.Events += o.Events
	}
	if o.HasExposure {
		s.exposure.Add(&s.exposure, scaled(o.Exposure))
	}
	h := fnv.New64a()
	if _, err := h.Write(wire.EncodeObservation(nil, o)); err != nil {
		return // which a hash never gives
	}
	s.content += h.Sum64()
}

func scaled(d config.Decimal) *big.Int {
	n := new(big.Int).SetUint64(d.Coef)
	return n.Mul(n, new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(18-d.Digits)), nil))
}

// Differences says in words in what another account differs, nothing if they
// balance.
func (t *Tally) Differences(after *Tally) []string {
	var all []string
	names := map[string]bool{}
	for name := range t.Series {
		names[name] = true
	}
	for name := range after.Series {
		names[name] = true
	}
	for _, name := range slices.Sorted(maps.Keys(names)) {
		a, b := t.Series[name], after.Series[name]
		if a == nil {
			a = &SeriesTally{}
		}
		if b == nil {
			b = &SeriesTally{}
		}
		switch {
		case a.Elements != b.Elements || a.Events != b.Events || a.Readings != b.Readings || a.totals.Cmp(&b.totals) != 0 || a.exposure.Cmp(&b.exposure) != 0:
			all = append(all, fmt.Sprintf("%s: %s before, %s after", name, a, b))
		case a.content != b.content:
			all = append(all, name+": as many elements, but not the same")
		}
	}
	reasons := maps.Clone(t.Refused)
	maps.Copy(reasons, after.Refused)
	for _, reason := range slices.Sorted(maps.Keys(reasons)) {
		if a, b := t.Refused[reason], after.Refused[reason]; a != b {
			all = append(all, fmt.Sprintf("refused as %s: %d before, %d after", reason, a, b))
		}
	}
	return all
}
