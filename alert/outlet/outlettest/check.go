// Package outlettest holds an outlet against what every outlet must do.
package outlettest

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"
	"sync"
	"time"

	"tailbell/alert/outlet"
	"tailbell/monitor/life"
)

// Arrival is one notice as it reached the receiver.
type Arrival struct {
	// ID is that by which a repeat is known.
	ID string
	// Body is all that was said.
	Body string
}

// Receiver is what an outlet delivers to.
type Receiver interface {
	// Down lets the receiver take nothing, or take again.
	Down(down bool)
	// Arrived returns what has arrived so far, in order.
	Arrived() []Arrival
}

// Check delivers steps and returns what the outlet does otherwise than it must.
// The secrets, if any, must be in no error.
func Check(ctx context.Context, o outlet.Outlet, r Receiver, secrets ...string) error {
	c := checker{ctx: ctx, outlet: o, receiver: r, secrets: secrets}
	steps := []func(){c.name, c.single, c.outage, c.atOnce, c.trial}
	if together, ok := o.(outlet.Gatherer); ok {
		steps = append(steps, func() { c.together(together) })
	}
	for _, step := range steps {
		step()
	}
	return errors.Join(c.faults...)
}

type checker struct {
	ctx      context.Context //nolint:containedctx // of one call of Check
	outlet   outlet.Outlet
	receiver Receiver
	secrets  []string
	faults   []error
}

func (c *checker) fault(format string, args ...any) {
	c.faults = append(c.faults, fmt.Errorf(format, args...))
}

// new returns what arrived while f ran.
func (c *checker) new(f func()) []Arrival {
	before := len(c.receiver.Arrived())
	f()
	return c.receiver.Arrived()[before:]
}

func (c *checker) name() {
	if c.outlet.Name() == "" {
		c.fault("an outlet has a name")
	}
}

// deliver delivers a step that must arrive once, unchanged, and returns its id.
func (c *checker) deliver(n *life.Notice) string {
	before := text(n)
	got := c.new(func() {
		if err := c.outlet.Deliver(c.ctx, n); err != nil {
			c.fault("step %s: %w", n.Key, err)
		}
	})
	if text(n) != before {
		c.fault("step %s was changed by its delivery", n.Key)
	}
	if len(got) != 1 {
		c.fault("step %s arrived %d times", n.Key, len(got))
		return ""
	}
	if got[0].ID == "" {
		c.fault("step %s arrived without a key", n.Key)
	}
	return got[0].ID
}

func (c *checker) single() {
	one, other := Step("ward-1", life.StepOpened), Step("ward-2", life.StepReturned)
	first := c.deliver(one)
	if again := c.deliver(one); again != first {
		c.fault("the same step has the key %q, and then %q", first, again)
	}
	if second := c.deliver(other); second == first {
		c.fault("two steps have the same key %q", first)
	}
}

func (c *checker) outage() {
	n := Step("ward-3", life.StepWorsened)
	got := c.new(func() {
		c.receiver.Down(true)
		err := c.outlet.Deliver(c.ctx, n)
		c.receiver.Down(false)
		if err == nil {
			c.fault("a receiver that is down took a step")
			return
		}
		for _, secret := range c.secrets {
			if strings.Contains(err.Error(), secret) {
				c.fault("an error shows a secret: %w", err)
			}
		}
		if strings.ContainsAny(err.Error(), "\n\r\x1b") {
			c.fault("an error goes over several lines: %q", err)
		}
	})
	if len(got) > 0 {
		c.fault("a receiver that is down was told %q", got[0].ID)
	}
	c.deliver(n)
}

// atOnce delivers several steps concurrently.
func (c *checker) atOnce() {
	const many = 4
	got := c.new(func() {
		var all sync.WaitGroup
		errs := make([]error, many)
		for i := range many {
			n := Step(fmt.Sprintf("unit-%d", i), life.StepOpened)
			all.Go(func() { errs[i] = c.outlet.Deliver(c.ctx, n) })
		}
		all.Wait()
		if err := errors.Join(errs...); err != nil {
			c.fault("several at once: %w", err)
		}
	})
	if len(got) != many {
		c.fault("%d steps at once arrived as %d", many, len(got))
	}
}

// trial delivers a test, which must say so.
func (c *checker) trial() {
	got := c.new(func() {
		if err := c.outlet.Deliver(c.ctx, outlet.Trial(c.outlet.Name(), "UTC", At)); err != nil {
			c.fault("a test: %w", err)
		}
	})
	if len(got) != 1 || !strings.Contains(strings.ToLower(got[0].Body), "test") {
		c.fault("a test arrived %d times, or does not say so", len(got))
	}
}

// together delivers several steps as one notice.
func (c *checker) together(o outlet.Gatherer) {
	var notices []*life.Notice
	for i := range 12 {
		notices = append(notices, Step(fmt.Sprintf("wing-%02d", i), life.StepOpened))
	}
	before := text(notices)
	got := c.new(func() {
		for range 2 {
			if err := o.DeliverTogether(c.ctx, notices); err != nil {
				c.fault("steps together: %w", err)
			}
		}
	})
	if text(notices) != before {
		c.fault("steps were changed by their delivery together")
	}
	if len(got) != 2 || got[0].ID != got[1].ID {
		c.fault("steps together, twice, arrived as %d notices with other keys", len(got))
		return
	}
	for _, n := range notices {
		if !strings.Contains(got[0].Body, n.Record.ID) {
			c.fault("steps together: alert %s is not told of", n.Record.ID)
		}
	}
	half := c.new(func() {
		if err := o.DeliverTogether(c.ctx, slices.Clone(notices[:6])); err != nil {
			c.fault("fewer steps together: %w", err)
		}
	})
	if len(half) != 1 || half[0].ID == got[0].ID {
		c.fault("fewer steps together have the same key as all")
	}
}

func text(v any) string {
	data, err := json.Marshal(v)
	if err != nil {
		return err.Error()
	}
	return string(data)
}

// At is when the steps were taken.
var At = time.Date(2026, 3, 3, 23, 0, 0, 0, time.UTC)

// Step returns a step of an alert of its own on a unit of the invented
// Quillmere hospitals.
func Step(unit string, kind life.StepKind) *life.Notice {
	evidence := life.Evidence{
		Window: "28d", From: At.AddDate(0, 0, -28), To: At, Due: At,
		Events: 4, Exposure: "616", Unit: "device-days", EventNoun: "line infections", Expected: 1.1088,
		Measure: "rate", Per: 1000, Rate: 6.4935, RateLower: 1.7693, RateUpper: 16.626, Alpha: 0.05, Chosen: true,
		P: 0.02642, Log10P: -1.5781, Critical: 4, AttainedSize: 0.02642, Limit: 0.05, SetupVersion: 1,
		Baseline:  life.Baseline{Kind: "known", Rate: 1.8, Margin: 1},
		Recompute: "tailbell exact --events 4 --exposure 616 --baseline 1.8 --per 1000 --alpha 0.05 --limit 0.05",
	}
	record := life.Record{
		ID: "a" + strings.ReplaceAll(unit, "-", ""), Indicator: "line-infection", Title: "Line infections", Number: 1,
		Series: "quillmere-east/" + unit + "/line-infection", Direction: life.Upper, Zone: "Europe/Berlin",
		Opened: At, Opening: evidence, Worst: evidence,
		Caution: "A signal is a statistical finding: it diagnoses nothing and names no cause. Silence is no proof of safety. " +
			"Local policy, local codes and licensed practice decide.",
	}
	kinds := map[life.StepKind][]life.StepKind{
		life.StepOpened: {life.StepOpened}, life.StepWorsened: {life.StepOpened, life.StepWorsened},
		life.StepReturned: {life.StepOpened, life.StepReturned},
	}[kind]
	var notices []life.Notice
	for _, k := range kinds {
		took, err := record.Take(life.Step{Kind: k, At: At, Evidence: &evidence})
		if err != nil {
			panic(err) // the kinds above are a course that an alert can take
		}
		notices = append(notices, took...)
	}
	return &notices[len(notices)-1]
}
