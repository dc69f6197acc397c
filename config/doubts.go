package config

import (
	"fmt"
	"math"
	"net"
	"net/url"
	"slices"
	"strconv"
	"strings"
)

// maxComparisons bounds the pairs of patterns that Doubts compares.
const maxComparisons = 1_000_000

// Doubts returns what is allowed but probably not meant, each with its line
// and how to mend it; file is the name that they give.
func (s *Setup) Doubts(file string) []Fault {
	d := doubts{collector{file: file}}
	d.bus(&s.Bus)
	for i := range s.Indicators {
		d.indicator(&s.Indicators[i], i)
		d.archive(&s.Indicators[i], i, s.Limits.Archive)
	}
	for i := range s.Outlets {
		d.outlet(s, &s.Outlets[i], i)
	}
	d.shared(s)
	return d.faults
}

type doubts struct{ collector }

func (d *doubts) at(in *Indicator, i int, key, problem, mend string) {
	d.add(&node{line: in.Line, column: 1}, "indicator["+strconv.Itoa(i+1)+"]."+key, problem, mend)
}

func (d *doubts) bus(b *Bus) {
	for one := range strings.SplitSeq(b.URL, ",") {
		u, err := url.Parse(strings.TrimSpace(one))
		if err != nil || u.Host == "" || u.Scheme == "tls" || u.Scheme == "wss" || b.CA != "" || b.Cert != "" {
			continue
		}
		if ip := net.ParseIP(u.Hostname()); u.Hostname() != "localhost" && (ip == nil || !ip.IsLoopback()) {
			d.add(nil, "bus.url", "is not on this machine and TLS is not asked for: counts may be read on their way", "write tls://, or name ca")
			return
		}
	}
}

func (d *doubts) indicator(in *Indicator, i int) {
	if in.Horizon < in.Every.shortest() {
		d.at(in, i, "horizon", fmt.Sprintf("%s is shorter than a slot of %s: counts that come after their slot has ended may be refused",
			FormatDuration(in.Horizon), in.Every), "make it longer than slot and settle together")
	}
	d.adjusted(in, i)
	if silence := in.shortestSilence(); silence > 0 && silence < in.Every.shortest() {
		d.at(in, i, "expect", fmt.Sprintf("%s is shorter than a slot of %s: a series reported once a slot would be called silent",
			FormatDuration(silence), in.Every), "make it longer than a slot")
	}
	if chance := in.chanceSignals(); chance > 12 && in.SlotLooks {
		d.at(in, i, "p_limit", fmt.Sprintf("up to %s looks a year of every series would signal by chance", about(chance)),
			"make p_limit smaller, or the steps of the windows longer")
	}
	if a := in.Allowance; a != nil && !a.PerIndicator && a.PerYear() > 12 {
		d.at(in, i, "allowance", fmt.Sprintf("%q is %s false alerts a year of every series", a, about(a.PerYear())), "allow fewer, or a longer time")
	}
	if in.Exposure == Census && in.CensusExpiry < in.Every.shortest() {
		d.at(in, i, "expires", fmt.Sprintf("%s is shorter than a slot of %s: a level would not last to the end of the next slot",
			FormatDuration(in.CensusExpiry), in.Every), "make it longer than a slot")
	}
	d.retiresFirst(in, i)
	d.lonelySums(in, i)
	d.silentLower(in, i)
	d.validity(in, i)
	for j := range in.Baselines {
		d.baseline(in, i, j)
	}
}

// silentLower finds windows that are too short for the lower tail: not even no
// event at all would be a signal. It can be told beforehand only if the
// exposure comes from the clock.
func (d *doubts) silentLower(in *Indicator, i int) {
	if !in.Lower || in.Exposure != Clock || in.Allowance != nil {
		return
	}
	size, err := strconv.ParseFloat(in.Clock.Size.String(), 64)
	if err != nil {
		return
	}
	for _, w := range in.Windows {
		exposure := size * in.slotLength(w.Slots).longestHours() / in.Clock.Per.Hours()
		for j := range in.Baselines {
			p := in.Baselines[j].chanceOfNone(exposure)
			if p > in.PLimit {
				d.at(in, i, "windows", fmt.Sprintf("%s is too short for the lower tail: even no event in it has a chance of %.3g", w.Name, p),
					"make the window longer, or watch the upper tail only")
				break
			}
		}
	}
}

// chanceOfNone is the p-value of no event in an exposure under a baseline of
// a rate, or less: exp(-mu), with a spread phi^(-mu/(phi-1)), or for a
// reference the conditional test's (1-q)^M. Strata count with their greatest
// factor, and what can't be told beforehand as 0.
func (b *Baseline) chanceOfNone(exposure float64) float64 {
	if b.Strata != nil {
		exposure *= slices.Max(b.Strata.Factors)
	}
	switch b.Kind {
	case Known:
		mu := b.Rate * exposure / b.Margin
		if b.Spread > 1 {
			return math.Exp(-mu * math.Log(b.Spread) / (b.Spread - 1))
		}
		return math.Exp(-mu)
	case Reference:
		reference, err := strconv.ParseFloat(b.Exposure.String(), 64)
		if err != nil {
			return 0
		}
		return math.Exp(-float64(b.Events) * math.Log1p(exposure/b.Margin/reference))
	case Trailing, Peers:
	}
	return 0
}

// shared finds series that would belong to two indicators.
func (d *doubts) shared(s *Setup) {
	left := maxComparisons
	for j := range s.Indicators {
		for i := range s.Indicators[:j] {
			left -= len(s.Indicators[i].Series) * len(s.Indicators[j].Series)
			if left < 0 {
				d.add(nil, "indicator", "there are too many patterns to compare each with each other", "see that no series belongs to two indicators")
				return
			}
			d.sharedBy(&s.Indicators[i], &s.Indicators[j], j)
		}
	}
}

func (d *doubts) sharedBy(a, b *Indicator, j int) {
	for _, p := range a.Series {
		for _, q := range b.Series {
			example, both := overlap(p, q)
			if !both {
				continue
			}
			d.at(b, j, "series", fmt.Sprintf("%q and %q of %s both match a series such as %s, whose observations would be refused as ambiguous",
				q, p, a.Name, example), "make the patterns differ")
			return
		}
	}
}
