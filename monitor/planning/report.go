package planning

import (
	"context"
	"time"

	"tailbell/config"
	"tailbell/monitor/allowance"
)

// Question is one series to plan for.
type Question struct {
	// Series names it; empty for one that is only described.
	Series string
	Plan   allowance.Plan
	// Names are those of the plan's windows.
	Names []string
	Every config.Every
	// Settle is how long after its end a slot waits for a look.
	Settle time.Duration
	// PLimit is the limit on p of each look; 0 takes limits from the plan's
	// allowance.
	PLimit float64
}

// Options say how delays are simulated.
type Options struct {
	Seed  uint64
	Draws int
	// Ratios above 1; the lower tail is watched under one over them.
	Ratios []float64
	// Progress, if not nil, is told how many draws of all are done.
	Progress func(done, total int)
}

// Report is what is to be known about the limits of a series.
type Report struct {
	Series string `json:"series,omitempty"`
	// UsualRate is per unit of exposure (or the proportion), Exposure that of a
	// slot and Vary by how much slots may differ from it.
	UsualRate float64 `json:"usual_rate"`
	Exposure  float64 `json:"slot_exposure"`
	Vary      float64 `json:"vary,omitempty"`
	Parts     []Part  `json:"looks"`
	// PerYear are the false alerts a year of all windows and tails together, at
	// most the sum of theirs; Low and High at the bounds of an estimated baseline.
	PerYear float64 `json:"false_alerts_a_year"`
	Low     float64 `json:"false_alerts_a_year_low"`
	High    float64 `json:"false_alerts_a_year_high"`
	// Delays are until any window signals.
	Delays []Delay `json:"delays"`
}

// Part is one window looked at in one tail and way.
type Part struct {
	Window   string  `json:"window"`
	Tail     string  `json:"tail"`
	Looks    string  `json:"looks"`
	Expected float64 `json:"expected"`
	Limit    float64 `json:"limit"`
	// Critical is the count that signals; nil if none does.
	Critical *int64  `json:"critical"`
	Size     float64 `json:"attained_size"`
	PerYear  float64 `json:"false_alerts_a_year"`
	Low      float64 `json:"false_alerts_a_year_low"`
	High     float64 `json:"false_alerts_a_year_high"`
	Basis    string  `json:"false_alerts_basis"`
	// Found are the ratios at which a look whose whole window lies under them
	// signals with a chance.
	Found  []Found `json:"found"`
	Delays []Delay `json:"delays"`
	// Fewer and More are what the next critical counts would bring.
	Fewer *Step `json:"one_fewer,omitempty"`
	More  *Step `json:"one_more,omitempty"`
	// Advice says what to do about a window that is of little use.
	Advice string `json:"advice,omitempty"`
}

// Found is the ratio to the usual rate that is found with a chance; nil if none
// is.
type Found struct {
	Chance float64  `json:"chance"`
	Ratio  *float64 `json:"ratio"`
}

// Step is a neighbouring critical count.
type Step struct {
	Critical int64   `json:"critical"`
	Size     float64 `json:"attained_size"`
	PerYear  float64 `json:"false_alerts_a_year"`
	// Ratio is found with the chance 0.8.
	Ratio *float64 `json:"ratio_found_80"`
}

// Answer plans for one series.
func Answer(ctx context.Context, q *Question, o Options) (*Report, error) {
	limits, err := q.Limits()
	if err != nil {
		return nil, err
	}
	r := &Report{Series: q.Series, Exposure: q.Plan.Exposure, Vary: q.Plan.Vary, PerYear: limits.PerYear, Low: limits.Low, High: limits.High}
	outlooks := make([]*allowance.Outlook, len(limits.Parts))
	for i := range limits.Parts {
		outlooks[i] = q.Plan.Outlook(&limits, i)
		r.UsualRate = outlooks[i].Rate()
		r.Parts = append(r.Parts, q.part(&limits.Parts[i], outlooks[i]))
	}
	return r, q.addDelays(ctx, r, &limits, outlooks, o)
}

// Limits are those that the question is about.
func (q *Question) Limits() (allowance.Limits, error) {
	if q.PLimit > 0 {
		return allowance.Predict(&q.Plan, q.PLimit)
	}
	return allowance.Solve(&q.Plan)
}

func (q *Question) part(l *allowance.Part, o *allowance.Outlook) Part {
	p := Part{
		Window: q.Names[l.Window], Tail: "upper", Looks: "slot", Expected: o.Expected(), Limit: l.Alpha,
		Size: l.Size, PerYear: l.PerYear, Low: l.Low, High: l.High, Basis: l.Basis.String(),
	}
	if l.Tail == allowance.Lower {
		p.Tail = "lower"
	}
	if l.Arrival {
		p.Looks = "arrival"
	}
	for _, chance := range []float64{0.5, 0.8, 0.95} {
		p.Found = append(p.Found, Found{chance, ratioOf(o, chance)})
	}
	if l.HasCritical {
		k := l.Critical
		p.Critical = &k
		p.Fewer, p.More = step(o, k-1), step(o, k+1)
	}
	p.Advice = q.advice(l, &p)
	return p
}

func ratioOf(o *allowance.Outlook, chance float64) *float64 {
	if r, ok := o.Ratio(chance); ok {
		return &r
	}
	return nil
}

// step is what a neighbouring critical count would bring, nil if it can't be one.
func step(o *allowance.Outlook, k int64) *Step {
	if k < 0 {
		return nil
	}
	alpha := o.Size(k)
	if !(alpha > 0 && alpha < 0.5) {
		return nil
	}
	part := o.Under(alpha)
	if !part.HasCritical || part.Critical != k {
		return nil
	}
	return &Step{Critical: k, Size: part.Size, PerYear: part.PerYear, Ratio: ratioOf(o.Of(part), 0.8)}
}

// advice says what to do where a look says little.
func (q *Question) advice(l *allowance.Part, p *Part) string {
	upper := l.Tail == allowance.Upper
	switch {
	case !l.HasCritical && upper && q.Plan.Law.Proportion:
		return "It can never signal: not even events in all of its trials are rare enough. Take a longer window, or accept more false alerts."
	case !l.HasCritical && upper:
		return "It can never signal within the allowance. Take a longer step, or accept more false alerts."
	case !l.HasCritical:
		return "It can never signal: even a window without any event is not rare enough. Take a longer window, or leave the lower tail out."
	case upper && l.Critical == 1:
		return "It signals on a single event: each one rings. If that is not meant, accept fewer false alerts; if it is, no window is needed to see it."
	case upper && l.Critical == 2 && p.Expected < 0.1:
		return "It signals on two events, and fewer than one in ten windows is expected to hold any: a longer window would see slower changes as well."
	}
	return ""
}
