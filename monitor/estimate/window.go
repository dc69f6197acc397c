package estimate

import (
	"math"
	"slices"

	"tailbell/config"
	"tailbell/exact"
)

// Share is how often windows held from Least to Most events.
type Share struct {
	Least int64 `json:"least"`
	// Most is the greatest count, or -1 for no end.
	Most int64 `json:"most"`
	// Seen is the number of windows, Chance what the plain model expects at
	// each series' own rate, Spread what it expects with the estimated spread.
	Seen   float64 `json:"seen"`
	Chance float64 `json:"chance"`
	Spread float64 `json:"spread,omitempty"`
}

// Windows is the distribution of the counts in rolling windows, beside what
// the models say.
type Windows struct {
	Window string `json:"window"`
	// Count is how many windows were counted: every so-many-th of a great many.
	// Of is how many there were.
	Count int `json:"count"`
	Of    int `json:"of"`
	// Phi is the spread used for Share.Spread: that of counts of this length;
	// 1 where there is no more than chance gives, and where a window has more
	// than 2^22 trials, too many for the law with spread.
	Phi    float64 `json:"phi"`
	Shares []Share `json:"shares"`
	// AtLimit holds the windows against the indicator's limit on p; nil where
	// the limits follow from an allowance: they then differ by series and tail.
	AtLimit *AtLimit `json:"at_limit,omitempty"`
}

// AtLimit is how many windows lay at a limit on p or past it.
type AtLimit struct {
	PLimit float64 `json:"p_limit"`
	// Past is how many had a p at or under the limit, in the tails that are
	// watched, if the rates were known; Chance what the plain model expects.
	Past   int     `json:"past"`
	Chance float64 `json:"chance"`
}

// rolling is the content of one window.
type rolling struct {
	events   int64
	exposure float64
	rate     float64
}

const maxWindows = 4000

// rollingWindows returns the windows of all series whose slots are all known,
// every so-many-th of a great many, and how many there were.
func (h *History) rollingWindows(w config.Window) (all []rolling, of int) {
	for i := range h.Series {
		s := &h.Series[i]
		exposure := s.exposure()
		if exposure == 0 {
			continue
		}
		rate := float64(s.events()) / exposure
		for from := 0; from+w.Slots <= len(s.Slots); from++ {
			to := from + w.Slots - 1
			if s.Slots[to].Number-s.Slots[from].Number != int64(w.Slots-1) {
				continue
			}
			r := rolling{rate: rate}
			for _, slot := range s.Slots[from : to+1] {
				r.events += slot.Events
				r.exposure += slot.Exposure
			}
			all = append(all, r)
		}
	}
	of = len(all)
	if every := (of + maxWindows - 1) / maxWindows; every > 1 {
		kept := all[:0]
		for i := 0; i < len(all); i += every {
			kept = append(kept, all[i])
		}
		all = kept
	}
	return all, of
}

type tailLaw interface {
	Upper(k int64) float64
	Lower(k int64) float64
	CriticalUpper(limit float64) (k int64, size float64, ok bool)
	CriticalLower(limit float64) (k int64, size float64, ok bool)
}

type countLaw interface {
	tailLaw
	PMF(k int64) float64
}

func (h *History) lawAt(rate, exposure float64) countLaw {
	if h.proportion() {
		return exact.NewBinomial(int64(math.Round(exposure)), rate)
	}
	return exact.Poisson{Rate: rate, Exposure: exposure}
}

// Package exact has laws with spread of up to so many trials, and of sizes up to
// plainFrom: beyond, a spread of any count that can be summed is that of chance.
const (
	mostSpreadTrials = 1 << 22
	plainFrom        = 1e15
)

// spreadLaw is the law with variance phi times the plain one.
func (h *History) spreadLaw(rate, exposure, phi float64) tailLaw {
	n := math.Round(exposure)
	size := rate * exposure / (phi - 1)
	if h.proportion() {
		size = (n - phi) / (phi - 1)
	}
	switch {
	case exposure == 0 || size > plainFrom:
		return h.lawAt(rate, exposure)
	case phi <= 1 || rate <= 0 || rate >= 1 && h.proportion() || n <= phi && h.proportion():
		return h.lawAt(rate, exposure)
	case h.proportion():
		return exact.BetaBinomial{N: int64(n), A: size * rate, B: size * (1 - rate)}
	}
	return exact.NewNegativeBinomial(rate, exposure, phi)
}

// windows compares the counts of one window with the models; nil if there are
// none.
func (h *History) windows(w config.Window, phi float64) *Windows {
	all, of := h.rollingWindows(w)
	if len(all) == 0 {
		return nil
	}
	x := &Windows{Window: w.Name, Count: len(all), Of: of, Phi: max(phi, 1)}
	if h.proportion() && slices.ContainsFunc(all, func(r rolling) bool { return r.exposure > mostSpreadTrials }) {
		x.Phi = 1
	}
	x.Shares = bins(all)
	if limit := h.Indicator.PLimit; limit > 0 {
		x.AtLimit = &AtLimit{PLimit: limit}
	}
	for _, r := range all {
		h.addWindow(x, r)
	}
	return x
}

func (h *History) addWindow(x *Windows, r rolling) {
	plain, spread := h.lawAt(r.rate, r.exposure), h.spreadLaw(r.rate, r.exposure, x.Phi)
	for i := range x.Shares {
		b := &x.Shares[i]
		if r.events >= b.Least && (b.Most < 0 || r.events <= b.Most) {
			b.Seen++
		}
		b.Chance += between(plain, b.Least, b.Most)
		b.Spread += between(spread, b.Least, b.Most)
	}
	if x.AtLimit != nil {
		x.AtLimit.add(h.Indicator, plain, r.events)
	}
}

func (a *AtLimit) add(in *config.Indicator, law tailLaw, events int64) {
	if k, size, ok := law.CriticalUpper(a.PLimit); in.Upper && ok {
		a.Chance += size
		if events >= k {
			a.Past++
		}
	}
	if k, size, ok := law.CriticalLower(a.PLimit); in.Lower && ok {
		a.Chance += size
		if events <= k {
			a.Past++
		}
	}
}

func between(law tailLaw, least, most int64) float64 {
	switch {
	case most < 0:
		return law.Upper(least)
	case least == 0:
		return law.Lower(most)
	}
	return max(0, law.Lower(most)-law.Lower(least-1))
}

// bins divides the counts into at most some two dozen equal steps.
func bins(all []rolling) []Share {
	counts := make([]int64, len(all))
	for i, r := range all {
		counts[i] = r.events
	}
	slices.Sort(counts)
	low, high := counts[0], counts[len(counts)-1]+1
	if low < 24 {
		low = 0
	}
	width := (high-low)/24 + 1
	var shares []Share
	for k := low; k < high; k += width {
		shares = append(shares, Share{Least: k, Most: k + width - 1})
	}
	if low > 0 {
		shares[0].Least = 0
	}
	shares = append(shares, Share{Least: shares[len(shares)-1].Most + 1, Most: -1})
	return shares
}
