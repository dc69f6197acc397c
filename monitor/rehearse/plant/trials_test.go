package plant

import (
	"context"
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"tailbell/config"
)

const lastHundred = `name = "quillmere"
[time]
mode = "history"
[[indicator]]
name = "wound-infection"
series = ["quillmere/*"]
measure = "proportion"
unit = "operations"
every = "1d"
settle = "0s"
horizon = "1d"
events = "each"
windows = ["100 trials"]
looks = "arrival"
p_limit = 0.001
quiet = 1
[indicator.baseline]
kind = "known"
rate = 0.02
`

func trialPlan(t *testing.T) *Plan {
	t.Helper()
	setup, err := config.Parse([]byte(lastHundred), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	return &Plan{
		Setups: []*config.Setup{setup}, Indicator: "wound-infection", Ratios: []float64{3}, Length: 30, Histories: 600, Seed: 1, Level: 0.95, Draws: 100,
	}
}

// TestTrialsInvented rehearses the last 100 trials, and compares with plain runs of
// trials: an event has the chance 0.02, and 0.06 in 300 trials; the last hundred ring
// at 8 events, the least k with P(Bin(100, 0.02) >= k) <= 0.001 (0.00093).
func TestTrialsInvented(t *testing.T) {
	p := trialPlan(t)
	r, err := p.Invent(Invention{Exposure: config.Decimal{Coef: 10}, Years: 1})
	if err != nil {
		t.Fatal(err)
	}
	report, err := r.Run(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	const n = 20_000
	random := rand.New(rand.NewPCG(20261201, 9))
	found, steps := 0, 0.0
	for range n {
		var last [100]int
		sum := 0
		for i := range 500 {
			chance := 0.02
			if i >= 200 {
				chance = 0.06
			}
			at := i % 100
			sum -= last[at]
			if last[at] = 0; random.Float64() < chance {
				last[at] = 1
				sum++
			}
			if i >= 200 && last[at] == 1 && sum >= 8 {
				found++
				steps += float64(i-199) / 10
				break
			}
		}
	}
	want := float64(found) / n
	for _, f := range report.Found {
		t.Logf("%q: %+v, delay %+v; plain %.3f after %.1f days on average", f.Window, f.InTime, f.Delay, want, steps/float64(found))
		if error := 4 * math.Sqrt(want*(1-want)/float64(f.InTime.Of)); math.Abs(f.InTime.Share-want) > error {
			t.Errorf("%q found %.3f, plain runs %.3f", f.Window, f.InTime.Share, want)
		}
	}
	if report.RefusedPlanted != 0 {
		t.Errorf("%d planted were refused", report.RefusedPlanted)
	}
}

// TestTrialsObserved: of a real history it is not known which trial a further event
// would belong to.
func TestTrialsObserved(t *testing.T) {
	if _, err := trialPlan(t).Observe(nil, nil); !errors.Is(err, ErrTrials) {
		t.Errorf("%v", err)
	}
}
