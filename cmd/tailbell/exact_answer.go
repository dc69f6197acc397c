package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"

	"tailbell/exact"
)

// question is one count to test. size is the exposure, or the trials of a proportion.
type question struct {
	events                                int64
	size, baseline, reference, margin     float64
	refEvents                             int64
	proportion, refProportion             bool
	hasEvents, hasSize                    bool
	hasBaseline, hasReference, hasRefSize bool
}

// exactAnswer is what is known of one question; NaN for what can't be said.
type exactAnswer struct {
	question
	expected                       float64 // by the baseline, or the reference's rate, with the margin
	rate, rateLower, rateUpper     float64
	ratio, ratioLower, ratioUpper  float64
	p, log10P                      float64
	critical                       int64
	attained                       float64
	criticalLower                  bool // the critical count is one of too few
	hasTest, hasCritical, noSignal bool
	test, ratioKind                string
}

// exactTest is a law that a count can be tested against.
type exactTest interface {
	Upper(k int64) float64
	LogUpper(k int64) float64
	Lower(k int64) float64
	LogLower(k int64) float64
	MidUpper(k int64) float64
	LogMidUpper(k int64) float64
	MidLower(k int64) float64
	LogMidLower(k int64) float64
	TwoSided(k int64, how exact.Sides) float64
	LogTwoSided(k int64, how exact.Sides) float64
	CriticalUpper(limit float64) (int64, float64, bool)
	CriticalLower(limit float64) (int64, float64, bool)
}

func (q question) check() error {
	const most = 1 << 42
	switch {
	case !q.hasEvents:
		return errors.New("events are missing: say how many there were")
	case q.events < 0 || q.events > most:
		return fmt.Errorf("events are %d: give a whole number from 0 to %d", q.events, int64(most))
	case !q.hasSize && q.hasRefSize && q.refProportion:
		return errors.New("trials are missing: a reference with trials needs them")
	case !q.hasSize:
		return errors.New("exposure (or trials) is missing: say in how much the events happened")
	case !(q.size > 0) || math.IsInf(q.size, 0):
		return fmt.Errorf("%s is %v: give a number above 0", q.sizeName(), q.size)
	case !reachable(q.size):
		return fmt.Errorf("%s is %v: give a number from 1e-100 to 1e100", q.sizeName(), q.size)
	case q.proportion && (q.size != math.Floor(q.size) || q.size > most):
		return fmt.Errorf("trials are %v: give a whole number up to %d", q.size, int64(most))
	case q.proportion && float64(q.events) > q.size:
		return fmt.Errorf("events are %d in %v trials: there can't be more events than trials", q.events, q.size)
	case !(q.margin >= 1) || math.IsInf(q.margin, 0):
		return fmt.Errorf("margin is %v: give a ratio of 1 (none) or more; downwards it is one over it", q.margin)
	case !reachable(q.margin):
		return fmt.Errorf("margin is %v: give a ratio up to 1e100", q.margin)
	case q.hasBaseline && q.hasReference:
		return errors.New("there is a known baseline and a reference: give one of the two")
	case q.hasReference != q.hasRefSize:
		return errors.New("a reference needs both its events and its exposure (or trials)")
	}
	if q.hasReference {
		return q.checkReference()
	}
	if q.hasBaseline && (!(q.baseline > 0) || math.IsInf(q.baseline, 0)) {
		return fmt.Errorf("baseline is %v: give a rate above 0", q.baseline)
	}
	if q.hasBaseline && !reachable(q.baseline) {
		return fmt.Errorf("baseline is %v: give a rate from 1e-100 to 1e100 per unit", q.baseline)
	}
	return nil
}

// reachable reports whether products of three such numbers are neither 0 nor infinite: an expected
// count of 0 or of more than can be would be told as an answer.
func reachable(v float64) bool { return v >= 1e-100 && v <= 1e100 }

func (q question) checkReference() error {
	const most = 1 << 42
	switch {
	case q.proportion != q.refProportion:
		return errors.New("one side has trials and the other exposure: give both the same")
	case q.refEvents < 0 || q.refEvents > most:
		return fmt.Errorf("reference events are %d: give a whole number from 0 to %d", q.refEvents, int64(most))
	case !(q.reference > 0) || math.IsInf(q.reference, 0):
		return fmt.Errorf("the reference's %s is %v: give a number above 0", q.sizeName(), q.reference)
	case !reachable(q.reference):
		return fmt.Errorf("the reference's %s is %v: give a number from 1e-100 to 1e100", q.sizeName(), q.reference)
	case q.proportion && (q.reference != math.Floor(q.reference) || q.reference > most):
		return fmt.Errorf("reference trials are %v: give a whole number up to %d", q.reference, int64(most))
	case q.proportion && float64(q.refEvents) > q.reference:
		return fmt.Errorf("reference events are %d in %v trials: there can't be more events than trials", q.refEvents, q.reference)
	}
	return nil
}

func (q question) sizeName() string {
	if q.proportion {
		return "trials"
	}
	return "exposure"
}

// answer is the whole evidence on one question.
func (o exactOptions) answer(q question) (exactAnswer, error) {
	if err := q.check(); err != nil {
		return exactAnswer{}, err
	}
	nan := math.NaN()
	a := exactAnswer{question: q, expected: nan, ratio: nan, ratioLower: nan, ratioUpper: nan, p: nan, log10P: nan, attained: nan}
	a.rate = float64(q.events) / q.size
	a.rateLower, a.rateUpper = o.sizeBounds(q)
	var x exactTest
	switch {
	case q.hasBaseline:
		known, err := o.known(&a)
		if err != nil {
			return exactAnswer{}, err
		}
		x = known
	case q.hasReference && q.proportion:
		y := exact.TwoProportion{RefEvents: q.refEvents, RefTrials: int64(q.reference), Trials: int64(q.size), Margin: o.edge(q)}
		x, a.test, a.ratioKind = y, "Fisher's test of two proportions", "odds ratio"
		misses, refMisses := q.size-float64(q.events), q.reference-float64(q.refEvents)
		a.ratio = float64(q.events) * refMisses / (misses * float64(q.refEvents))
		a.ratioLower, a.ratioUpper = o.pick(y.OddsRatioBounds, y.OddsRatioBoundsMid, y.OddsRatioBoundsBy, q.events)
		odds := float64(q.refEvents) * o.edge(q)
		a.expected = q.size * odds / (odds + refMisses)
	case q.hasReference:
		y := exact.TwoRate{RefEvents: q.refEvents, Exposure: q.size, RefExposure: q.reference, Margin: o.edge(q)}
		x, a.test, a.ratioKind = y, "conditional test of two rates", "rate ratio"
		a.ratio = a.rate / (float64(q.refEvents) / q.reference)
		a.ratioLower, a.ratioUpper = o.pick(y.RatioBounds, y.RatioBoundsMid, y.RatioBoundsBy, q.events)
		a.expected = float64(q.refEvents) / q.reference * q.size * o.edge(q)
	default:
		return a, nil
	}
	o.weigh(&a, x)
	return a, nil
}

// edge is the ratio at which a tail is tested: the margin upwards, one over it
// downwards.
func (o exactOptions) edge(q question) float64 {
	if o.lower && !o.twoSided {
		return 1 / q.margin
	}
	return q.margin
}

// known is the law of a known baseline.
func (o exactOptions) known(a *exactAnswer) (exactTest, error) {
	base := a.baseline / o.per
	a.ratioKind = "ratio to the baseline"
	a.ratio, a.ratioLower, a.ratioUpper = a.rate/base, a.rateLower/base, a.rateUpper/base
	if a.proportion {
		if !(base <= 1) {
			return nil, fmt.Errorf("baseline is %v per %v trials: a proportion is at most 1", a.baseline, o.per)
		}
		x := exact.NewBinomial(int64(a.size), min(1, base*o.edge(a.question)))
		a.test, a.expected = "binomial", a.size*x.P
		return x, nil
	}
	x := exact.Poisson{Rate: base * o.edge(a.question), Exposure: a.size}
	a.test, a.expected = "Poisson", x.Mean()
	return x, nil
}

// sizeBounds are bounds of the rate or the proportion.
func (o exactOptions) sizeBounds(q question) (lower, upper float64) {
	if q.proportion {
		n := int64(q.size)
		at := func(f func(x, n int64, alpha float64) (float64, float64)) func(int64, float64) (float64, float64) {
			return func(k int64, alpha float64) (float64, float64) { return f(k, n, alpha) }
		}
		by := func(k int64, alpha float64, how exact.Sides) (float64, float64) {
			return exact.ChanceBounds(k, n, alpha, how)
		}
		return o.pick(at(exact.ClopperPearson), at(exact.ClopperPearsonMid), by, q.events)
	}
	lower, upper = o.pick(exact.Garwood, exact.GarwoodMid, exact.MeanBounds, q.events)
	return lower / q.size, upper / q.size
}

// pick takes the bounds that go with the form of the test.
func (o exactOptions) pick(central, mid func(int64, float64) (float64, float64), by func(int64, float64, exact.Sides) (float64, float64), k int64) (lower, upper float64) {
	switch {
	case o.mid:
		return mid(k, o.alpha)
	case o.twoSided:
		return by(k, o.alpha, o.sides)
	}
	return central(k, o.alpha)
}

// weigh fills in p and the critical count.
func (o exactOptions) weigh(a *exactAnswer, x exactTest) {
	k := a.events
	var logP float64
	lower := o.lower
	switch {
	case o.twoSided && o.mid:
		lower = x.LogMidLower(k) < x.LogMidUpper(k)
		a.p = min(1, 2*min(x.MidUpper(k), x.MidLower(k)))
		logP = min(0, math.Ln2+min(x.LogMidUpper(k), x.LogMidLower(k)))
	case o.twoSided:
		lower = x.LogLower(k) < x.LogUpper(k)
		a.p, logP = x.TwoSided(k, o.sides), x.LogTwoSided(k, o.sides)
	case o.lower && o.mid:
		a.p, logP = x.MidLower(k), x.LogMidLower(k)
	case o.lower:
		a.p, logP = x.Lower(k), x.LogLower(k)
	case o.mid:
		a.p, logP = x.MidUpper(k), x.LogMidUpper(k)
	default:
		a.p, logP = x.Upper(k), x.LogUpper(k)
	}
	a.hasTest, a.log10P = true, logP/math.Ln10
	limit := o.limit
	switch {
	case o.mid || o.twoSided && o.sides != exact.Central:
		return
	case o.twoSided:
		limit /= 2
	}
	var ok bool
	if a.criticalLower = lower; lower {
		a.critical, a.attained, ok = x.CriticalLower(limit)
	} else {
		a.critical, a.attained, ok = x.CriticalUpper(limit)
	}
	if a.hasCritical, a.noSignal = ok, !ok; !ok {
		a.attained = math.NaN()
	}
}

// exactRecord is an answer as JSON; a table adds what follows from all its rows. Null stands for what has no finite value or was not asked.
type exactRecord struct {
	Unit          string   `json:"unit,omitempty"`
	Line          int      `json:"line,omitempty"`
	Events        *int64   `json:"events"`
	Exposure      *float64 `json:"exposure,omitempty"`
	Trials        *float64 `json:"trials,omitempty"`
	Per           float64  `json:"per"`
	Rate          *float64 `json:"rate"`
	RateLower     *float64 `json:"rate_lower"`
	RateUpper     *float64 `json:"rate_upper"`
	Alpha         float64  `json:"alpha"`
	Expected      *float64 `json:"expected"`
	RatioKind     string   `json:"ratio_kind,omitempty"`
	Ratio         *float64 `json:"ratio"`
	RatioLower    *float64 `json:"ratio_lower"`
	RatioUpper    *float64 `json:"ratio_upper"`
	Test          string   `json:"test,omitempty"`
	Tail          string   `json:"tail"`
	MidP          bool     `json:"mid_p"`
	P             *float64 `json:"p"`
	Log10P        *float64 `json:"log10_p"`
	Limit         float64  `json:"limit"`
	CriticalCount *int64   `json:"critical_count"`
	AttainedSize  *float64 `json:"attained_size"`
	Problem       string   `json:"problem,omitempty"`
}

func (a exactAnswer) record(o exactOptions) exactRecord {
	r := exactRecord{
		Events: &a.events, Per: o.per, Alpha: o.alpha, Limit: o.limit, Tail: o.tailName(), MidP: o.mid, Test: a.test, RatioKind: a.ratioKind,
		Rate: orNull(a.rate * o.per), RateLower: orNull(a.rateLower * o.per), RateUpper: orNull(a.rateUpper * o.per),
		Expected: orNull(a.expected), Ratio: orNull(a.ratio), RatioLower: orNull(a.ratioLower), RatioUpper: orNull(a.ratioUpper),
		P: orNull(a.p), Log10P: orNull(a.log10P), AttainedSize: orNull(a.attained),
	}
	if a.proportion {
		r.Trials = orNull(a.size)
	} else {
		r.Exposure = orNull(a.size)
	}
	if a.hasCritical {
		r.CriticalCount = &a.critical
	}
	return r
}

func orNull(v float64) *float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}

func (o exactOptions) tailName() string {
	switch {
	case o.twoSided:
		return "two-sided " + o.sides.String()
	case o.lower:
		return "lower"
	}
	return "upper"
}

func writeJSONLine(w io.Writer, v any) error {
	b, err := json.Marshal(v)
	if err != nil {
		return fmt.Errorf("print the answer: %w", err)
	}
	if _, err = w.Write(append(b, '\n')); err != nil {
		return fmt.Errorf("print the answer: %w", err)
	}
	return nil
}
