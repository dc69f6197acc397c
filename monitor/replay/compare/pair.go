package compare

import (
	"math"
	"slices"

	"tailbell/exact"
	"tailbell/monitor/replay"
)

// Pair holds one set-up against the first.
type Pair struct {
	First string `json:"first"`
	Other string `json:"other"`
	// Both found so many spans, and each alone; NeitherEpisodes are known ones
	// that none of the two found, nil without known ones.
	Both            int  `json:"spans_both"`
	OnlyFirst       int  `json:"spans_only_first"`
	OnlyOther       int  `json:"spans_only_other"`
	NeitherEpisodes *int `json:"episodes_neither,omitempty"`
	// AloneP is the exact two-sided p of OnlyFirst against OnlyOther, if both
	// were as likely.
	AloneP float64 `json:"alone_p"`
	// Ratio of the other's alerts a year to the first's, with exact
	// conditional bounds; nil where there is none.
	Ratio      *float64 `json:"ratio"`
	RatioLower *float64 `json:"ratio_lower"`
	RatioUpper *float64 `json:"ratio_upper"`
	// Delay is how many days later the other was, span by span that both
	// found: the median, the least and the most; nil without any.
	DelayMedian *float64 `json:"delay_days_median"`
	DelayLeast  *float64 `json:"delay_days_least"`
	DelayMost   *float64 `json:"delay_days_most"`
	// Earlier, Same and Later count those spans, and DelayP is the exact
	// two-sided p of the sign test.
	Earlier int     `json:"other_earlier"`
	Same    int     `json:"same_time"`
	Later   int     `json:"other_later"`
	DelayP  float64 `json:"delay_p"`
}

// pair compares two set-ups.
func (c *Comparison) pair(a, b int) Pair {
	p := Pair{First: c.Sides[a].Name, Other: c.Sides[b].Name}
	var days []float64
	for i := range c.Spans {
		x, y := c.Spans[i].Found[a], c.Spans[i].Found[b]
		switch {
		case x != nil && y != nil:
			p.Both++
			d := y.Opened.Sub(x.Opened)
			days = append(days, d.Hours()/24)
			switch {
			case d < 0:
				p.Earlier++
			case d > 0:
				p.Later++
			default:
				p.Same++
			}
		case x != nil:
			p.OnlyFirst++
		case y != nil:
			p.OnlyOther++
		}
	}
	p.AloneP, p.DelayP = evenly(p.OnlyFirst, p.OnlyOther), evenly(p.Earlier, p.Later)
	if len(days) > 0 {
		slices.Sort(days)
		median := (days[(len(days)-1)/2] + days[len(days)/2]) / 2
		p.DelayMedian, p.DelayLeast, p.DelayMost = &median, &days[0], &days[len(days)-1]
	}
	if c.Episodes != nil {
		neither := 0
		for i := range c.Episodes {
			if c.Episodes[i].Found[a] == nil && c.Episodes[i].Found[b] == nil {
				neither++
			}
		}
		p.NeitherEpisodes = &neither
	}
	p.ratio(&c.Sides[a].Total, &c.Sides[b].Total, 1-c.Level)
	return p
}

// ratio fills in the ratio of the other's alerts a year to the first's.
func (p *Pair) ratio(first, other *replay.Watch, alpha float64) {
	if first.Years <= 0 || other.Years <= 0 || first.Alerts+other.Alerts == 0 {
		return
	}
	x := exact.TwoRate{RefEvents: int64(first.Alerts), RefExposure: first.Years, Exposure: other.Years, Margin: 1}
	lower, upper := x.RatioBounds(int64(other.Alerts), alpha)
	p.RatioLower = &lower
	if !math.IsInf(upper, 1) {
		p.RatioUpper = &upper
	}
	if first.Alerts > 0 {
		ratio := float64(other.Alerts) / other.Years / (float64(first.Alerts) / first.Years)
		p.Ratio = &ratio
	}
}

// evenly is the exact two-sided p of a against b, if each of a+b were as likely
// to fall on either side.
func evenly(a, b int) float64 {
	if a+b == 0 {
		return 1
	}
	return min(1, 2*exact.NewBinomial(int64(a+b), 0.5).Upper(int64(max(a, b))))
}
