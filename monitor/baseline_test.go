package monitor_test

import (
	"math"
	"os"
	"slices"
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// judged is what one step of a scenario must say: the evidence with the step.
type judged struct {
	to       string // end of the window
	kind     life.StepKind
	version  string
	events   int64
	expected float64
	// p is what base R 4.2.2 says; call is how it was asked.
	p    float64
	call string
}

// judgements are the looks of testdata/monitor that signal. The counts and the
// exposures in the calls were reckoned by hand from the scenario's own text.
var judgements = map[string][]judged{
	// 6 events in 76 days, [1 January, 18 March): the 90 days before 1 April and
	// its guard gap of 14, as far as the series reaches. Then the 90 days to 17
	// April without the 29 that were marked; with them again; and the 90 to 17
	// June, with the event that came late in June.
	"trailing": {
		{"2026-04-01", life.StepOpened, "own past", 9, 6. / 760 * 140, 0.000108433462978125, `binom.test(9, 9 + 6, 140 / 900, "greater")`},
		{"2026-04-03", life.StepWorsened, "own past", 11, 6. / 760 * 140, 6.36414810182638e-06, `binom.test(11, 11 + 6, 140 / 900, "greater")`},
		{"2026-05-20", life.StepOpened, "own past", 8, 5. / 610 * 140, 0.000769749505733522, `binom.test(8, 8 + 5, 140 / 750, "greater")`},
		{"2026-05-21", life.StepWorsened, "own past", 11, 5. / 610 * 140, 1.64371598546243e-05, `binom.test(11, 11 + 5, 140 / 750, "greater")`},
		{"2026-06-27", life.StepOpened, "own past", 16, 14. / 900 * 140, 2.55574348992013e-07, `binom.test(16, 16 + 14, 140 / 1040, "greater")`},
		{"2026-07-03", life.StepWorsened, "own past", 36, 23. / 900 * 140, 2.54709958464967e-17, `binom.test(36, 36 + 23, 140 / 1040, "greater")`},
	},
	// The other three wards in January and February: 5 + 6 + 9 events, 1,770 bed-days.
	"peers": {
		{"2026-03-08", life.StepOpened, "", 8, 20. / 1770 * 140, 0.000681409097185919, `binom.test(8, 8 + 20, 140 / 1910, "greater")`},
	},
	// Friday to Sunday: 10 (1 + 0.5 + 0.5) = 20, Thursday to Saturday 25.
	"strata-weekday": {
		{"2026-03-15", life.StepOpened, "", 4, 0.25, 0.000133369650514062, "ppois(3, 0.25, lower = F)"},
		{"2026-03-16", life.StepWorsened, "", 5, 0.2, 2.25819055295782e-06, "ppois(4, 0.2, lower = F)"},
	},
	"strata-reference": {
		{"2026-03-15", life.StepOpened, "", 4, 36. / 3650 * 25, 0.000160937258534251, `binom.test(4, 4 + 36, 25 / 3675, "greater")`},
	},
	// 30 March to 12 April: 2 days of factor 1, 12 of 0.5. The history: 31 days
	// of 2, 28 of 1.5, 17 of 1.
	"strata-month": {
		{"2026-04-13", life.StepOpened, "", 7, 6. / 1210 * 80, 4.33495682811485e-06, `binom.test(7, 7 + 6, 80 / 1290, "greater")`},
	},
	"strata-hour": {
		{"2026-03-29", life.StepOpened, "", 15, 4.4, 5.76381670169245e-05, "ppois(14, 4.4, lower = F)"},
	},
	"spread": {
		{"2026-03-13", life.StepOpened, "", 11, 1.4, 0.00311845024602132, "pnbinom(10, size = 1.4 / 1.5, prob = 1 / 2.5, lower = F)"},
	},
	"spread-reference": {
		{"2026-03-12", life.StepOpened, "", 8, 1.4, 0.00406531800583857, "pnbinom(7, size = 1.54 / (phi - 1), prob = 1 / phi, lower = F) with phi = 1.5 (1 + 1.1 * 70 / 3650)"},
	},
	// 10 (0.8 + 0.6 + 0.3) when due; 30 when the late event came; 10 (1 + 0.8 +
	// 0.8) for the days 5.5, 4.5 and 3.5 days old then.
	"delay": {
		{"2026-03-12", life.StepOpened, "", 5, 0.34, 2.8554253930832e-05, "ppois(4, 0.34, lower = F)"},
		{"2026-03-11", life.StepOpened, "", 5, 0.6, 0.000394486018340256, "ppois(4, 0.6, lower = F)"},
		{"2026-03-13", life.StepCorrected, "", 7, 0.52, 1.29634737644277e-06, "ppois(6, 0.52, lower = F)"},
	},
	// Of each of the two peers' 59 days the last is thinned to 0.2 and the two
	// before it to 0.5, as the first look sees them on 2 March; of the window's
	// days one to 0.2 and two to 0.5.
	"delay-peers": {
		{"2026-03-06", life.StepOpened, "", 8, 58. / 1144 * 52, 0.00774371395027148, `binom.test(8, 8 + 58, 52 / 1196, "greater")`},
	},
	"delay-whole": {
		{"2026-03-11", life.StepOpened, "", 4, 0.2, 5.68402407581566e-05, "ppois(3, 0.2, lower = F)"},
	},
	"census": {
		{"2026-02-10", life.StepOpened, "", 4, 0.7, 0.00575345759229958, "ppois(3, 0.7, lower = F)"},
		{"2026-02-10", life.StepCorrected, "", 4, 0.715, 0.00618984714150964, "ppois(3, 0.715, lower = F)"},
	},
	"validity": {
		{"2026-03-01", life.StepOpened, "winter", 4, 0.2, 5.68402407581566e-05, "ppois(3, 0.2, lower = F)"},
		{"2026-03-13", life.StepOpened, "spring", 4, 0.4, 0.000776251376207016, "ppois(3, 0.4, lower = F)"},
		{"2026-03-31", life.StepOpened, "spring", 4, 0.4, 0.000776251376207016, "ppois(3, 0.4, lower = F)"},
	},
	"margin": {
		{"2026-01-31", life.StepOpened, "", 0, 50. / 3650 * 280, 0.0825923412610918, `binom.test(0, 50, (280 / 1.5) / (280 / 1.5 + 3650), "less")`},
		{"2026-03-12", life.StepOpened, "", 12, 50. / 3650 * 280, 0.0233531247513062, `binom.test(12, 12 + 50, 420 / 4070, "greater")`},
		{"2026-04-09", life.StepOpened, "", 0, 50. / 3650 * 280, 0.0825923412610918, `binom.test(0, 50, (280 / 1.5) / (280 / 1.5 + 3650), "less")`},
	},
	"change": {
		{"2026-03-20", life.StepOpened, "sixty days", 5, 4. / 520 * 70, 0.00195730714974992, `binom.test(5, 5 + 4, 70 / 590, "greater")`},
		{"2026-03-20", life.StepCorrected, "sixty days", 6, 4. / 520 * 70, 0.000382028644996568, `binom.test(6, 6 + 4, 70 / 590, "greater")`},
		{"2026-03-23", life.StepWorsened, "thirty days", 11, 2. / 300 * 70, 5.92453044270401e-07, `binom.test(11, 11 + 2, 70 / 370, "greater")`},
		{"2026-04-11", life.StepOpened, "board", 8, 1.4, 0.000106548016096342, "ppois(7, 1.4, lower = F)"},
	},
}

// scenario plays the scenario of that name without a restart.
func scenario(t *testing.T, name string) outcome {
	t.Helper()
	return changed(t, name, nil)
}

// changed plays the scenario with its input changed.
func changed(t *testing.T, name string, change func(input string) string) outcome {
	t.Helper()
	text, err := os.ReadFile("../testdata/monitor/" + name + ".txt")
	if err != nil {
		t.Fatal(err)
	}
	input, _, _ := strings.Cut(string(text), "----\n")
	if change != nil {
		input = change(input)
	}
	return play(t, readScenario(t, input), 0)
}

// closeTo reports whether two numbers agree to nine digits.
func closeTo(a, b float64) bool { return math.Abs(a-b) <= 1e-9*max(math.Abs(a), math.Abs(b)) }

func TestBaselinesAgainstR(t *testing.T) {
	for name, list := range judgements {
		t.Run(name, func(t *testing.T) {
			next := 0
			for _, n := range scenario(t, name).store.Steps {
				e := n.Step.Evidence
				if e == nil || next == len(list) {
					continue
				}
				want := list[next]
				next++
				got := judged{
					e.To.Format("2006-01-02"), n.Step.Kind, e.Baseline.Version, e.Events, e.Expected, e.P, want.call,
				}
				if !closeTo(got.expected, want.expected) || !closeTo(got.p, want.p) || !closeTo(math.Pow(10, e.Log10P), want.p) {
					t.Errorf("step %d: got %+v, want %+v", next, got, want)
				}
				got.expected, got.p = want.expected, want.p
				if got != want {
					t.Errorf("step %d: got %+v, want %+v", next, got, want)
				}
			}
			if next < len(list) {
				t.Errorf("only %d steps with evidence, want %d", next, len(list))
			}
		})
	}
}

// evidenceOf lists the evidence of the steps.
func evidenceOf(o outcome) []*life.Evidence {
	var list []*life.Evidence
	for i := range o.store.Steps {
		if e := o.store.Steps[i].Step.Evidence; e != nil {
			list = append(list, e)
		}
	}
	return list
}

func TestTrailingLeavesOutWhatWasMarked(t *testing.T) {
	o := scenario(t, "trailing")
	var leftOut []int64
	for _, e := range evidenceOf(o) {
		leftOut = append(leftOut, e.Baseline.LeftOut)
		f := e.Baseline.First
		if f == nil || f.Events != 3 || f.Exposure != "450" || !closeTo(*f.Ratio, float64(e.Events)/140/(3./450)) {
			t.Errorf("%s: the first reference is %+v; want 3 in 450", e.To, f)
		}
	}
	// Marked are 14 days before the first look that signalled (of 1 April) up to
	// the one, 15 days later, at which the alert returned.
	if want := []int64{0, 0, 29, 29, 0, 0}; !slices.Equal(leftOut, want) {
		t.Errorf("slots left out: %v, want %v", leftOut, want)
	}
	// The reference of 1 March is the first that holds three events. Withheld are
	// the looks to 15 January (the first that is full) up to 28 February.
	if got := o.account.WithheldLooks; got != 17+28 {
		t.Errorf("%d looks withheld, want 45", got)
	}
}

// What an alert is marked leaves out the same slots, whether that was said
// while it signalled or after it had returned.
func TestMarkedWhileItSignals(t *testing.T) {
	const mark = `"mark":"real","why":"two beds shared","at":"2026-04-`
	o := changed(t, "trailing", func(input string) string {
		var lines []string
		var act string
		for line := range strings.Lines(input) {
			if strings.Contains(line, mark) {
				act = strings.Replace(line, mark+"20", mark+"05", 1)
				continue
			}
			lines = append(lines, line)
		}
		at := slices.IndexFunc(lines, func(line string) bool { return strings.Contains(line, `"at":"2026-04-20T`) })
		return strings.Join(slices.Insert(lines, at, act), "")
	})
	marked := slices.IndexFunc(o.store.Steps, func(n life.Notice) bool { return n.Step.Kind == life.StepMarked })
	if got := o.store.Steps[marked].Step.Condition; got != life.Unacknowledged {
		t.Fatalf("the alert was %s when it was marked", got)
	}
	if got := evidenceOf(o)[2].Baseline.LeftOut; got != 29 {
		t.Errorf("%d slots left out, want 29", got)
	}
}

func TestPeersLeaveOutThemselvesAndAreBlindTogether(t *testing.T) {
	o := scenario(t, "peers")
	first := evidenceOf(o)[0].Baseline
	// 5, 6 and 9 events in the same exposure: sum of (x - 20/3)^2 / (20/3), by 2.
	mean := 20. / 3
	between := ((5-mean)*(5-mean) + (6-mean)*(6-mean) + (9-mean)*(9-mean)) / mean / 2
	if first.Events != 20 || first.Exposure != "1770" || first.Peers != 3 || !closeTo(*first.Between, between) {
		t.Errorf("peers of ward a: %+v; want 20 in 1770 of 3 others, between %g", first, between)
	}
	// All wards go on with an event every second day until the end of June, 5.5
	// times what was usual. From May on that is what their peers have.
	last := o.store.Steps[len(o.store.Steps)-1]
	if at := last.Step.At.Format("2006-01-02"); last.Step.Kind != life.StepReturned || at != "2026-05-04" {
		t.Errorf("the last step is %s on %s", last.Step.Kind, at)
	}
}

func TestCensusCarriesOn(t *testing.T) {
	o := scenario(t, "census")
	var provisional []int64
	for _, e := range evidenceOf(o) {
		provisional = append(provisional, e.Provisional)
	}
	// The window of 3 to 9 February; then the 7th has a level of its own.
	if want := []int64{7, 6}; !slices.Equal(provisional, want) {
		t.Errorf("provisional slots: %v, want %v", provisional, want)
	}
	// The level of 7 February serves the 60 days to 8 April: the look to the 9th
	// is the last. Those to the 10th to 14th (it settles for a day) are withheld.
	if got := o.account.WithheldLooks; got != 5 {
		t.Errorf("%d looks withheld, want 5", got)
	}
}

func TestOldAlertsKeepTheirBaseline(t *testing.T) {
	o := scenario(t, "change")
	r := o.store.Records[o.store.Steps[0].Record.ID]
	if b := r.Opening; r.Condition != life.Closed || b.Baseline.Version != "sixty days" || b.SetupVersion != 1 || b.Baseline.Source != "own past" {
		t.Errorf("%s: opening judged by %+v of set-up %d", r.Condition, b.Baseline, b.SetupVersion)
	}
	if b := r.Worst; b.Baseline.Version != "thirty days" || b.SetupVersion != 2 {
		t.Errorf("worst judged by %+v of set-up %d", b.Baseline, b.SetupVersion)
	}
}

func TestValidityEndsAtTheEdge(t *testing.T) {
	// 12 looks end on 2 to 13 April, when no baseline is valid.
	if got := scenario(t, "validity").account.WithheldLooks; got != 12 {
		t.Errorf("%d looks withheld, want 12", got)
	}
}

func TestPredictiveTestsAreCalledSo(t *testing.T) {
	for name, want := range map[string]string{
		"spread-reference":    "predictive test with an estimated baseline (no exact test exists)",
		"proportion-trailing": "predictive test with an estimated baseline (no exact test exists)",
		"strata-reference":    "conditional test of two rates (binomial; Przyborowski and Wilenski 1940)",
		"proportion-spread":   "exact test with spread (sum of beta-binomials)",
		"proportion-strata":   "exact test with strata (sum of binomials)",
		"spread":              "exact negative binomial test",
	} {
		for _, e := range evidenceOf(scenario(t, name)) {
			if e.Test != want {
				t.Errorf("%s: %q, want %q", name, e.Test, want)
			}
		}
	}
}

// month is one slot of a proportion in the scenarios.
type month struct {
	trials int
	odds   float64 // the factor
}

// massesOf gives the chances of 0, 1, ... events in a month whose usual
// proportion is theta: binomial, or with a spread over it beta-binomial of the
// same mean and spread times the variance. Written to be independent of
// package exact: by log gamma, from the definitions.
func (m month) massesOf(theta, spread float64) []float64 {
	gamma := func(x float64) float64 { v, _ := math.Lgamma(x); return v }
	n := float64(m.trials)
	p := m.odds * theta / (1 - theta) / (1 + m.odds*theta/(1-theta))
	list := make([]float64, m.trials+1)
	for k := range list {
		x := float64(k)
		choose := gamma(n+1) - gamma(x+1) - gamma(n-x+1)
		if spread == 1 {
			list[k] = math.Exp(choose + x*math.Log(p) + (n-x)*math.Log1p(-p))
			continue
		}
		// variance = n p (1-p) (1 + (n-1) rho) with rho = 1/(a+b+1)
		rho := (spread - 1) / (n - 1)
		a, b := p*(1/rho-1), (1-p)*(1/rho-1)
		list[k] = math.Exp(choose + gamma(x+a) + gamma(n-x+b) - gamma(n+a+b) - gamma(a) - gamma(b) + gamma(a+b))
	}
	return list
}

// sumOver enumerates all ways to have the events month by month, and returns
// the chances of k or more and of k or fewer in all.
func sumOver(k int, months [][]float64) (upper, lower float64) {
	var walk func(i, sum int, chance float64)
	walk = func(i, sum int, chance float64) {
		if i == len(months) {
			if sum >= k {
				upper += chance
			}
			if sum <= k {
				lower += chance
			}
			return
		}
		for j, p := range months[i] {
			walk(i+1, sum+j, chance*p)
		}
	}
	walk(0, 0, 1)
	return upper, lower
}

func TestProportionsByEnumeration(t *testing.T) {
	// The usual proportion at which the eleven months bring 136 events, by hand.
	year := []month{{40, 1}, {40, 3}, {40, 0.5}, {40, 1}, {40, 1}, {40, 1}, {40, 1}, {40, 1}, {40, 1}, {40, 1}, {40, 1}}
	usual := 0.0
	for step := 0.5; step > 1e-17; step /= 2 {
		sum := 0.0
		for _, m := range year {
			odds := m.odds * (usual + step) / (1 - usual - step)
			sum += float64(m.trials) * odds / (1 + odds)
		}
		if sum < 136 {
			usual += step
		}
	}
	for _, c := range []struct {
		name          string
		step          int
		lower         bool
		events        int
		theta, spread float64
		months        []month
	}{
		{"proportion-strata", 0, false, 12, 0.04, 1, []month{{40, 1}, {30, 2}, {35, 0.5}}},
		{"proportion-spread", 0, false, 26, 0.08, 2, []month{{40, 1}, {30, 2}, {35, 0.5}}},
		{"proportion-spread", 1, true, 3, 0.08, 2, []month{{60, 1}, {90, 1}, {80, 1}}},
		{"proportion-spread", 2, true, 0, 0.08, 2, []month{{90, 1}, {80, 1}, {70, 1}}},
		{"proportion-trailing", 0, false, 53, usual, 1 + 80/(136/usual), []month{{40, 3}, {40, 0.5}}},
	} {
		var months [][]float64
		for _, m := range c.months {
			months = append(months, m.massesOf(c.theta, c.spread))
		}
		want, lower := sumOver(c.events, months)
		if c.lower {
			want = lower
		}
		e := evidenceOf(scenario(t, c.name))[c.step]
		if e.Events != int64(c.events) || math.Abs(e.P-want) > 1e-11*want {
			t.Errorf("%s, step %d: %d events, p = %.15g; enumerated %d, %.15g", c.name, c.step, e.Events, e.P, c.events, want)
		}
	}
}
