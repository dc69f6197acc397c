package plant

import (
	"errors"
	"testing"

	"tailbell/config"
)

// TestTrialsRefused: windows of the last trials are not rehearsed.
func TestTrialsRefused(t *testing.T) {
	const text = `name = "quillmere"
[[indicator]]
name = "wound-infection"
series = ["quillmere/*"]
measure = "proportion"
unit = "operations"
every = "1d"
events = "each"
windows = ["200 trials"]
looks = "arrival"
[indicator.baseline]
kind = "known"
rate = 0.01
`
	setup, err := config.Parse([]byte(text), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	p := Plan{Setups: []*config.Setup{setup}, Indicator: "wound-infection", Ratios: []float64{2}, Length: 30, Histories: 1, Draws: 1, Level: 0.95}
	if err := p.check(); !errors.Is(err, ErrTrials) {
		t.Errorf("%v", err)
	}
}
