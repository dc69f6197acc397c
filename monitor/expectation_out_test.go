package monitor_test

import (
	"math/rand/v2"
	"testing"

	"tailbell/config"
	"tailbell/monitor"
)

// TestOneOutOfService takes the first of two wards, whose exposure comes from the
// clock, out of service: the limits of the other one stay what they were.
func TestOneOutOfService(t *testing.T) {
	const text = `
name = "out"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
settle = "2h"
horizon = "9d"
windows = ["3d"]
events = "each"
exposure = "clock"
clock = { size = 9, per = "1d" }
allowance = "12 in 1y"
[indicator.baseline]
kind = "known"
rate = 0.05
`
	play := func(out bool) map[string]string {
		setup, err := config.Parse([]byte(text), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		c := newCross(t, rand.New(rand.NewPCG(1, 1)), 1)
		r := c.readers[0]
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
		for day := 1; day <= 20; day++ {
			for ward := range min(2, 1+day/8) { // the second one begins later
				o := report([]string{"first/fall", "second/fall"}[ward], day, 1, 0)
				o.HasExposure, o.End, o.Instant = false, o.Start, true
				o.Events = int64(1 + day/12*3*ward)
				r.publish(messageOf(o))
			}
			if out && day == 3 {
				act := monitor.Act{Kind: monitor.OutOfService, Series: "first/fall", By: "A. Nurse", Why: "closed for works"}
				act.From, act.Until = monitor.InstantOf(marchDay(1)), monitor.InstantOf(marchDay(40))
				r.publish(monitor.Message{Kind: monitor.ActMessage, Act: act})
			}
		}
		c.finish()
		return texts(t, c.records())
	}
	want, got := play(false), play(true)
	checked := 0
	for id, record := range want {
		if id[0] == 's' {
			checked++
			if got[id] != record {
				t.Errorf("with the first ward out of service the alert of the second is\n%s\nand without it\n%s", got[id], record)
			}
		}
	}
	if checked == 0 {
		t.Errorf("no alert was compared: %v", want)
	}
}
