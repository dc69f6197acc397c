package estimate

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/big"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// Options say how a report is made.
type Options struct {
	Seed uint64
	// Draws for each simulated p-value and for the bootstrap; costly ones get
	// fewer, and say so. 0 means 10,000.
	Draws   int
	Workers int
	// Block is the number of periods that the bootstrap keeps together; 0
	// means the cube root of their number, rounded up.
	Block int
	// Reports, if any, are what the reporting delay is estimated from, as far
	// as known by Now.
	Reports []Reported
	Now     monitor.Instant
	// Pattern, if not "", is the pattern of series that the stanza serves.
	Pattern string
	// Progress, if not nil, is told how many of how many parts are done.
	Progress func(done, total int)
}

// Rate is a usual rate with its exact bounds.
type Rate struct {
	Events int64 `json:"events"`
	// Exposure as an exact decimal.
	Exposure string `json:"exposure"`
	// Rate, Lower and Upper are per the indicator's Per; bounds are at its
	// level, Garwood's for a rate, Clopper and Pearson's for a proportion.
	Rate  float64 `json:"rate"`
	Lower float64 `json:"lower"`
	Upper float64 `json:"upper"`
	// Unbounded is set where there is no exposure: nothing is then known of the
	// rate, and the three are 0.
	Unbounded bool `json:"unbounded,omitempty"`
}

// SeriesReport is what is known of one series.
type SeriesReport struct {
	Name string `json:"series"`
	Rate
	Slots    int    `json:"slots"`
	Missing  int    `json:"missing,omitempty"`
	Overfull int    `json:"overfull,omitempty"`
	Spread   Spread `json:"spread"`
	// Apart is the two-sided exact p of the series' events given those of all
	// series, Adjusted the same after Holm over the series; 1 for one series.
	Apart    float64 `json:"apart"`
	Adjusted float64 `json:"apart_adjusted"`
}

// Report is what a history says of its usual rate.
type Report struct {
	Indicator string    `json:"indicator"`
	From      time.Time `json:"from"`
	To        time.Time `json:"to"`
	Digest    string    `json:"digest"`
	Seed      uint64    `json:"seed"`
	Unit      string    `json:"unit"`
	Per       float64   `json:"per"`
	Level     float64   `json:"level"`

	Pooled Rate `json:"pooled"`
	// Total is the spread of all slots of all series around one rate; Within
	// that around each series' own rate, at several lengths; Summed that of
	// the sum of all series, which shocks common to them raise.
	Total  Spread   `json:"total"`
	Within []Spread `json:"within"`
	Summed []Spread `json:"summed,omitempty"`
	// Between is the p of series that differ so much or more; nil for one.
	Between   *PValue    `json:"between,omitempty"`
	Effects   []Effect   `json:"effects,omitempty"`
	Stability *Stability `json:"stability"`
	// Excesses are periods of single series that stand out.
	Excesses []Excess       `json:"excesses,omitempty"`
	Windows  []*Windows     `json:"windows"`
	Delay    *DelayReport   `json:"delay,omitempty"`
	Series   []SeriesReport `json:"series"`
	// Advice is the recommendation, a sentence or two each.
	Advice []string `json:"advice"`
	// Stanza is the baseline to write into the set-up.
	Stanza Stanza `json:"stanza"`
}

// DelayReport is the reporting delay at several ages.
type DelayReport struct {
	*Delay
	Step   string      `json:"step"`
	Shares []DelayStep `json:"shares"`
}

// DelayStep is the share of events known at an age.
type DelayStep struct {
	Age      string  `json:"age"`
	Reported float64 `json:"reported"`
	// Naive is what is found without allowing for truncation.
	Naive float64 `json:"naive"`
}

// analysis is a report in the making.
type analysis struct {
	*History
	o           Options
	r           *Report
	done, total int
	number      uint64
	err         error
}

// Analyse makes the report of a history. It is pure: the same history, options
// and seed give the same report, whatever the number of workers.
func Analyse(ctx context.Context, h *History, o Options) (*Report, error) {
	if o.Draws == 0 {
		o.Draws = 10_000
	}
	if !slices.ContainsFunc(h.Series, func(s Series) bool { return s.exposure() > 0 }) {
		return nil, fmt.Errorf("%s: %w", h.Indicator.Name, ErrNoExposure)
	}
	in := h.Indicator
	a := &analysis{History: h, o: o, r: &Report{
		Indicator: in.Name, From: h.From.Time().In(in.Zone), To: h.To.Time().In(in.Zone), Digest: h.Digest,
		Seed: o.Seed, Unit: in.Unit, Per: in.Per, Level: 1 - in.Alpha,
	}}
	lengths := a.lengths()
	a.total = len(h.Series) + 2*len(lengths) + len(parts(in.Every)) + len(spans(in)) + 4
	sum := h.summed()
	a.r.Pooled = h.rate(&sum)
	a.pooled(ctx, lengths, sum)
	a.series(ctx)
	for _, by := range parts(in.Every) {
		a.step(func(plan resample.Plan) (err error) {
			e, err := h.effect(ctx, by, plan)
			a.r.Effects = append(a.r.Effects, e)
			return err
		})
	}
	a.step(func(plan resample.Plan) (err error) {
		a.r.Stability, err = h.stability(ctx, plan, o.Block)
		return err
	})
	if len(h.Series) > 1 {
		a.r.Excesses = h.excesses()
	}
	for _, w := range spans(in) {
		a.step(func(resample.Plan) error {
			if x := h.windows(w, a.phiAt(w.Slots)); x != nil {
				a.r.Windows = append(a.r.Windows, x)
			}
			return ctx.Err()
		})
	}
	a.delay()
	if a.err != nil {
		return nil, a.err
	}
	a.advise()
	return a.r, nil
}

// step runs one part under its own seed, unless one before it failed.
func (a *analysis) step(part func(plan resample.Plan) error) {
	a.number++
	if a.err == nil {
		// Parts must not share draws; the odd constant spreads their seeds.
		seed := a.o.Seed + a.number*0x9e3779b97f4a7c15
		a.err = part(resample.Plan{Draws: a.o.Draws, Seed: seed, Workers: a.o.Workers})
	}
	a.done++
	if a.o.Progress != nil {
		a.o.Progress(a.done, a.total)
	}
}

// lengths returns the lengths at which the longest series has four counts.
func (a *analysis) lengths() []int {
	longest := 0
	for i := range a.Series {
		s := a.Series[i].Slots
		longest = max(longest, int(s[len(s)-1].Number-s[0].Number)+1)
	}
	slots := ladder(a.Indicator)
	slices.Sort(slots)
	slots = slices.Compact(slots)
	return slices.DeleteFunc(slots, func(n int) bool { return n > 1 && 4*n > longest })
}

func (a *analysis) pooled(ctx context.Context, lengths []int, sum Series) {
	a.step(func(plan resample.Plan) (err error) {
		var s stratum
		for i := range a.Series {
			for _, slot := range a.Series[i].Slots {
				s.group = append(s.group, len(s.group))
				s.events = append(s.events, slot.Events)
				s.exposure = append(s.exposure, slot.Exposure)
			}
		}
		a.r.Total, err = newTable(a.proportion(), len(s.group), []stratum{s}).spread(ctx, plan, false)
		a.r.Total.Slots, a.r.Total.Length = 1, lengthOf(a.Indicator, 1)
		return err
	})
	for _, n := range lengths {
		a.spread(ctx, &a.r.Within, a.Series, n, true)
		if len(a.Series) > 1 {
			a.spread(ctx, &a.r.Summed, []Series{sum}, n, false)
		} else {
			a.done++
		}
	}
	a.step(func(plan resample.Plan) error {
		if len(a.Series) < 2 {
			return nil
		}
		var s stratum
		for i := range a.Series {
			s.group = append(s.group, i)
			s.events = append(s.events, a.Series[i].events())
			s.exposure = append(s.exposure, a.Series[i].exposure())
		}
		p, err := newTable(a.proportion(), len(a.Series), []stratum{s}).test(ctx, plan)
		a.r.Between = &p
		return err
	})
}

func (a *analysis) spread(ctx context.Context, to *[]Spread, series []Series, slots int, bound bool) {
	a.step(func(plan resample.Plan) error {
		s, err := spreadTable(a.proportion(), series, slots).spread(ctx, plan, bound)
		s.Slots, s.Length = slots, lengthOf(a.Indicator, slots)
		*to = append(*to, s)
		return err
	})
}

// phiAt returns the spread within series at the greatest length worked out that
// is no longer than the slots.
func (a *analysis) phiAt(slots int) float64 {
	phi := 1.0
	for _, s := range a.r.Within {
		if s.Slots <= slots {
			phi = s.Phi
		}
	}
	return phi
}

func (a *analysis) series(ctx context.Context) {
	events, exposure := int64(0), 0.0
	for i := range a.Series {
		events += a.Series[i].events()
		exposure += a.Series[i].exposure()
	}
	var apart []float64
	for i := range a.Series {
		s := &a.Series[i]
		a.step(func(plan resample.Plan) error {
			spread, err := spreadTable(a.proportion(), a.Series[i:i+1], 1).spread(ctx, plan, true)
			spread.Slots, spread.Length = 1, lengthOf(a.Indicator, 1)
			p := 1.0
			if n := s.events(); len(a.Series) > 1 && exposure > 0 && s.exposure() > 0 {
				p = a.periodP(&Period{Events: n, Exposure: s.exposure()}, events, exposure)
			}
			apart = append(apart, p)
			a.r.Series = append(a.r.Series, SeriesReport{
				Name: s.Name, Rate: a.rate(s), Slots: len(s.Slots), Missing: s.Missing, Overfull: s.Overfull, Spread: spread, Apart: p,
			})
			return err
		})
	}
	for i, p := range exact.Holm(nil, apart) {
		a.r.Series[i].Adjusted = p
	}
}

// rate returns a series' rate with exact bounds.
func (h *History) rate(s *Series) Rate {
	in := h.Indicator
	r := Rate{Events: s.events(), Exposure: decimal(s.grains, in.GrainDigits)}
	exposure, _ := new(big.Rat).SetFrac(s.grains, pow10(in.GrainDigits)).Float64()
	if exposure == 0 {
		r.Unbounded = true
		return r
	}
	if h.proportion() {
		r.Lower, r.Upper = exact.ClopperPearson(r.Events, int64(math.Round(exposure)), in.Alpha)
	} else {
		r.Lower, r.Upper = exact.Garwood(r.Events, in.Alpha)
		r.Lower /= exposure
		r.Upper /= exposure
	}
	r.Rate = float64(r.Events) / exposure * in.Per
	r.Lower *= in.Per
	r.Upper *= in.Per
	return r
}

// delayAges is at most how many ages a stanza lists.
const delayAges = 12

func (a *analysis) delay() {
	a.step(func(resample.Plan) error {
		d, err := DelayOf(a.o.Reports, a.o.Now)
		if err != nil {
			return nil //nolint:nilerr // a history without report times has no delay to report
		}
		step := delayStepOf(a.Indicator.Every)
		r := &DelayReport{Delay: d, Step: config.FormatDuration(step)}
		for _, age := range d.Ages(a.Indicator.Settle%step, step, delayAges) {
			r.Shares = append(r.Shares, DelayStep{config.FormatDuration(age), d.F(age), d.Naive(age)})
		}
		a.r.Delay = r
		return nil
	})
}

// delayStepOf is the step in which ages are told: a slot, at most a day.
func delayStepOf(every config.Every) time.Duration {
	switch every.Unit {
	case config.Minute:
		return time.Duration(every.N) * time.Minute
	case config.Hour:
		return time.Hour
	case config.Day, config.Week, config.Month, config.Year:
	}
	return 24 * time.Hour
}

// marked returns the periods that stand out, the most influential first.
func (s *Stability) marked() []Period {
	var m []Period
	for _, p := range s.Periods {
		if p.Marked {
			m = append(m, p)
		}
	}
	slices.SortFunc(m, func(a, b Period) int { return cmp.Compare(math.Abs(b.Influence), math.Abs(a.Influence)) })
	return m
}
