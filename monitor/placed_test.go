package monitor

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"

	"tailbell/monitor/life"
)

// rearrange lets windows come, go and change their order, indicators leave the
// set-up and come back, and series be expected to report.
func (g *twinStream) rearrange(c *twinStanza) {
	if g.chance(0.6) {
		c.windows = g.windows(c.every)
	}
	if g.chance(0.5) {
		c.expect = fmt.Sprintf("expect = [{ series = \"p/%s/new\", within = %q }, { series = \"**\", within = %q }]\n",
			c.name, minutes(g.span(c.slot, 1, 4)), minutes(g.span(c.slot, 1, 6)))
	}
	in := 0
	for i := range g.stanzas {
		if !g.stanzas[i].out {
			in++
		}
	}
	if c.out || in > 1 && g.chance(0.5) {
		c.out = !c.out
	}
}

// TestRearrangedRestarted compares, over random streams in which windows and
// indicators come and go, an undisturbed engine with one that is drained and
// restarted at random.
func TestRearrangedRestarted(t *testing.T) {
	closed, worsened, silences := 0, 0, 0
	for seed := range uint64(60) {
		g := newTwinStream(t, seed)
		g.rearranges = true
		messages := g.write(60)
		if err := safely(func() error { return restarted(messages, seed) }); err != nil {
			t.Fatalf("seed %d: %v\n%s", seed, err, tell(messages))
		}
		for _, n := range g.engine.steps {
			switch {
			case n.Step.Why == life.NoLongerMonitored:
				closed++
			case n.Step.Kind == life.StepWorsened:
				worsened++
			case n.Record.Silence != nil && n.Step.Kind == life.StepReturned:
				silences++
			}
		}
	}
	t.Logf("%d alerts closed as no longer monitored, %d worsenings, %d silences that returned", closed, worsened, silences)
	if closed < 8 || worsened < 40 || silences < 40 {
		t.Error("the streams test too little")
	}
}

// restarted says where the two disagree.
func restarted(messages []Message, seed uint64) error {
	part := Partition{Of: 1, KeyParts: 1}
	rng := rand.New(rand.NewPCG(seed, 7))
	e, disturbed, store := New(part), New(part), NewMemory()
	for i := range messages {
		e.Apply(&messages[i])
		disturbed.Apply(&messages[i])
		switch x := rng.Float64(); {
		case x < 0.2 || messages[i].Kind == SettingMessage && x < 0.6:
			store.Commit(disturbed.Drain())
			var err error
			if disturbed, err = store.Reopen(part); err != nil {
				return fmt.Errorf("reopening after message %d: %w", i+1, err)
			}
		case x < 0.5 || messages[i].Kind == SettingMessage:
			store.Commit(disturbed.Drain())
		}
	}
	if !e.Account().Balanced() {
		return fmt.Errorf("the account does not balance: %+v", e.Account())
	}
	if a, b := e.Conditions(), disturbed.Conditions(); !slices.Equal(a, b) {
		return fmt.Errorf("conditions: %v, restarted %v", a, b)
	}
	store.Commit(disturbed.Drain())
	return sameOutcome(e, disturbed, store)
}
