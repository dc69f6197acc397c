package allowance

import (
	"math"

	"tailbell/exact"
)

// tested is the law by which a count is judged.
type tested interface {
	Upper(k int64) float64
	Lower(k int64) float64
	CriticalUpper(limit float64) (k int64, size float64, ok bool)
	CriticalLower(limit float64) (k int64, size float64, ok bool)
}

// load is an exposure: of a rate as one number, weighted; of a proportion with a
// cycle as trials for each factor of the odds.
type load struct {
	size  float64
	mixed []trials
}

// trials are so many with the same factor of the odds.
type trials struct {
	n      int64
	factor float64
}

// times scales the exposure of a rate, or whole trials.
func (l load) times(f float64) load { return load{size: float64(l.size * f)} }

// node is one value that the true rate may have, and how likely it is. Rates are
// those at the edge of the margin: no accepted rate brings more false alerts.
type node struct{ rate, weight float64 }

// model is the law of a plan in one tail.
type model struct {
	law    Law
	tail   Tail
	nodes  []node
	approx bool // sums of slots have no closed law, and are replaced by one like it
	// fair is set where p-values are the tails, averaged over the true rates: no
	// look signals more often than its limit on p.
	fair bool
	// sums are the laws of mixed trials at the one rate that is known, by their
	// first entry.
	sums map[*trials]*sum
}

// edge moves a true rate to the edge of the margin.
func (l *Law) edge(tail Tail, rate float64) float64 {
	m := l.margin()
	switch {
	case m == 1:
		return rate
	case l.Proportion && l.Estimated && tail == Upper:
		return timesOdds(rate, m)
	case l.Proportion && l.Estimated:
		return timesOdds(rate, 1/m)
	case tail == Upper:
		return rate * m
	}
	return rate / m
}

func timesOdds(theta, factor float64) float64 {
	odds := float64(theta * factor)
	return odds / (1 - theta + odds)
}

// newModel is the model of a plan for a window: averaging, or at its assured
// bound.
func newModel(p *Plan, tail Tail, window load) *model {
	m := &model{law: p.Law, tail: tail}
	l := &m.law
	m.approx = l.Proportion && l.spread() > 1 || l.Estimated && (l.spread() > 1 || l.Proportion && len(p.Cycle) > 0)
	m.fair = !m.approx && (!l.Estimated || p.Assurance == 0)
	switch {
	case !l.Estimated:
		m.nodes = []node{{l.edge(tail, l.Rate), 1}}
	case l.oneSided(tail):
		m.nodes = []node{{float64(min(1, l.Events)), 1}}
	case p.Assurance > 0:
		m.nodes = []node{{l.edge(tail, l.assured(tail, 1-p.Assurance)), 1}}
	default:
		m.nodes = l.uncertain(tail, m.far(window))
		for i := range m.nodes {
			m.nodes[i].rate = l.edge(tail, m.nodes[i].rate)
		}
	}
	return m
}

// oneSided reports a reference beyond which nothing can lie in a tail: without
// events, or with nothing but events.
func (l *Law) oneSided(tail Tail) bool {
	return tail == Lower && l.Events == 0 || tail == Upper && l.Proportion && float64(l.Events) == l.Exposure
}

// at is the model with one true rate, not yet at the margin's edge.
func (m *model) at(rate float64) *model {
	c := *m
	c.sums, c.fair = nil, false
	c.nodes = []node{{m.law.edge(m.tail, rate), 1}}
	return &c
}

// assured is the one-sided bound of an estimated rate beyond which the most
// false alerts lie, missed with the chance a.
func (l *Law) assured(tail Tail, a float64) float64 {
	switch {
	case l.Proportion && tail == Upper:
		return exact.ChanceUpper(l.Events, int64(l.Exposure), a)
	case l.Proportion:
		return exact.ChanceLower(l.Events, int64(l.Exposure), a)
	case tail == Upper:
		return exact.MeanUpper(l.Events, a) / l.Exposure
	}
	return exact.MeanLower(l.Events, a) / l.Exposure
}

// bounds are the two-sided bounds of an estimated rate.
func (l *Law) bounds(alpha float64) (low, high float64) {
	if alpha == 0 {
		alpha = 0.05
	}
	if l.Proportion {
		return exact.ClopperPearson(l.Events, int64(l.Exposure), alpha)
	}
	low, high = exact.Garwood(l.Events, alpha)
	return low / l.Exposure, high / l.Exposure
}

// middle is the rate about which the limits are looked for, at the margin's edge.
func (m *model) middle() float64 {
	sum := 0.0
	for _, n := range m.nodes {
		sum += float64(n.weight * n.rate)
	}
	return sum
}

// counts is the law of the events in a load at a true rate.
func (m *model) counts(rate float64, l load) exact.Counting {
	spread := m.law.spread()
	switch {
	case !m.law.Proportion && spread > 1 && l.size > 0 && rate > 0:
		return exact.NewNegativeBinomial(rate, l.size, spread)
	case !m.law.Proportion:
		return exact.Poisson{Rate: rate, Exposure: l.size}
	case l.mixed == nil:
		return alike(int64(l.size), rate, spread)
	}
	if m.approx {
		mean, n := 0.0, l.trials()
		for _, t := range l.mixed {
			mean += float64(float64(t.n) * timesOdds(rate, t.factor))
		}
		return alike(n, mean/float64(max(n, 1)), spread)
	}
	return m.sum(rate, l.mixed)
}

// sum is the law of trials with several probabilities.
func (m *model) sum(rate float64, list []trials) *sum {
	if len(list) == 0 {
		return newSum(nil)
	}
	if s := m.sums[&list[0]]; s != nil {
		return s
	}
	parts := make([]exact.Counting, len(list))
	for i, t := range list {
		parts[i] = alike(t.n, timesOdds(rate, t.factor), 1)
	}
	s := newSum(parts)
	if m.sums == nil {
		m.sums = map[*trials]*sum{}
	}
	m.sums[&list[0]] = s
	return s
}

// alike is the law of the events in trials of one probability, spread so much
// more than the binomial's variance: a beta-binomial.
func alike(n int64, theta, spread float64) exact.Counting {
	if spread <= 1 || n < 2 {
		return exact.NewBinomial(n, min(1, theta))
	}
	spread = min(spread, float64(0.9*float64(n))+0.1)
	size := float64(n-1)/(spread-1) - 1
	return exact.BetaBinomial{N: n, A: float64(theta * size), B: float64((1 - theta) * size)}
}

// test is the law by which the count in a window is judged. It is the engine's.
func (m *model) test(l load) tested {
	law := &m.law
	spread := law.spread()
	switch {
	case !law.Estimated:
		return m.counts(m.nodes0(), l).(tested) //nolint:errcheck // all of them have critical counts
	case !law.Proportion && spread > 1:
		rate := max(float64(law.Events), 0.5) / law.Exposure
		if law.margin() > 1 {
			rate = law.edge(m.tail, rate)
		}
		return exact.NewNegativeBinomial(rate, l.size, m.predictive(float64(m.ratio()*l.size)))
	case !law.Proportion:
		return exact.TwoRate{RefEvents: law.Events, Exposure: l.size, RefExposure: law.Exposure, Margin: m.ratio()}
	case l.mixed == nil && spread <= 1:
		return exact.TwoProportion{RefEvents: law.Events, RefTrials: int64(law.Exposure), Trials: int64(l.size), Margin: m.ratio()}
	}
	n := l.trials()
	rate := law.edge(m.tail, min(max(float64(law.Events), 0.5), law.Exposure-0.5)/law.Exposure)
	wide := *m
	wide.law.Spread = m.predictive(float64(n))
	return wide.counts(rate, l).(tested) //nolint:errcheck // all of them have critical counts
}

// nodes0 is the known rate at the margin's edge, whatever true rates are asked
// about.
func (m *model) nodes0() float64 { return m.law.edge(m.tail, m.law.Rate) }

// ratio is the margin as a ratio in the model's tail.
func (m *model) ratio() float64 {
	if m.tail == Lower {
		return 1 / m.law.margin()
	}
	return m.law.margin()
}

// predictive is the spread of a count around a mean that was estimated itself.
func (m *model) predictive(size float64) float64 {
	return m.law.spread() * (1 + size/m.law.Exposure)
}

func (l load) trials() int64 {
	n := int64(l.size)
	for _, t := range l.mixed {
		n += t.n
	}
	return n
}

// mean is the expected count in a load at the model's middle.
func (m *model) mean(l load) float64 {
	rate := m.middle()
	if l.mixed == nil {
		return rate * l.size
	}
	sum := 0.0
	for _, t := range l.mixed {
		sum += float64(float64(t.n) * timesOdds(rate, t.factor))
	}
	return sum
}

// far is about the largest count in a window whose chance is of interest.
func (m *model) far(window load) int64 {
	m.nodes = []node{{m.law.edge(Upper, m.law.assured(Upper, 0.05)), 1}}
	mean := m.mean(window)
	if k, _, ok := m.test(window).CriticalUpper(1e-6); ok && m.tail == Upper {
		return max(k, int64(mean))
	}
	return int64(mean + float64(6*math.Sqrt(mean)) + 6)
}

// uncertain are the values that an estimated rate may have, by the trapezoid
// rule on an even grid of its logarithm (of the log odds of a proportion), which
// converges exponentially for such laws. The weights are probabilities of
// counts: the density of log r under Gamma(a, F) is a P(Pois(r F) = a), that of
// the log odds under Beta(a, b) proportional to P(Bin(a+b, theta) = a). What is
// averaged varies as the rate to the power of a count, far at most: together they
// are about as wide as a Gamma law of both counts, which sets the grid's step.
func (l *Law) uncertain(tail Tail, far int64) []node {
	shape, exposure := l.Events, l.Exposure
	if tail == Upper {
		shape++
	}
	if phi := l.spread(); phi > 1 { // an estimate of so much more variance counts so much less
		fewer := max(1, int64(math.Round(float64(shape)/phi)))
		exposure = math.Max(1, exposure*float64(fewer)/float64(shape))
		if l.Proportion {
			exposure = max(math.Round(exposure), float64(fewer)+1)
		} else {
			exposure = l.Exposure * float64(fewer) / float64(shape)
		}
		shape = fewer
	}
	step := 1 + max(0.01, min(0.4, 0.9/math.Sqrt(float64(shape+far))))
	weigh := func(odds float64) node { // odds of a proportion, or a rate times exposure
		return node{odds / exposure, exact.Poisson{Rate: odds, Exposure: 1}.PMF(shape)}
	}
	middle := float64(shape)
	if l.Proportion {
		middle = float64(shape) / (exposure + 1 - float64(shape))
		weigh = func(odds float64) node {
			theta := odds / (1 + odds)
			law := exact.Binomial{N: int64(exposure) + 1, P: theta, Q: 1 / (1 + odds)}
			return node{theta, law.PMF(shape)}
		}
	}
	if tail == Upper {
		return grid(middle, step, 1e-12, 1e-26, weigh)
	}
	return grid(middle, step, 1e-26, 1e-12, weigh)
}

// grid walks down and up from the middle by a constant ratio, until a weight is
// so small against the middle's: false alerts come from one side.
func grid(middle, step, down, up float64, weigh func(float64) node) []node {
	first := weigh(middle)
	nodes, sum := []node{first}, first.weight
	for at := middle * step; ; at *= step {
		n := weigh(at)
		if !(n.weight > up*first.weight) {
			break
		}
		nodes, sum = append(nodes, n), sum+n.weight
	}
	for at := middle / step; ; at /= step {
		n := weigh(at)
		if !(n.weight > down*first.weight) {
			break
		}
		nodes, sum = append(nodes, n), sum+n.weight
	}
	for i := range nodes {
		nodes[i].weight /= sum
	}
	return nodes
}
