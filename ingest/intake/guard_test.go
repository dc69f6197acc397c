package intake

import (
	"context"
	"errors"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor"
)

// given is a source of messages that are there already.
type given struct{ raw []bus.Raw }

func (g *given) Next(ctx context.Context, dst []bus.Raw, limit, _ int) ([]bus.Raw, error) {
	if len(g.raw) == 0 {
		<-ctx.Done()
		return dst, ctx.Err()
	}
	n := min(limit, len(g.raw))
	dst = append(dst, g.raw[:n]...)
	g.raw = g.raw[n:]
	return dst, nil
}

func (*given) Missing() bus.Missing { return bus.Missing{} }
func (*given) Close() error         { return nil }

// stored makes ticks that were stored so long after now.
func stored(after ...time.Duration) *given {
	g := &given{}
	for i, d := range after {
		g.raw = append(g.raw, bus.Raw{Position: uint64(i + 1), Stored: time.Now().Add(d).UTC(), Subject: "q.in.0.tick"})
	}
	return g
}

// positions reads until ctx ends.
func positions(ctx context.Context, t *testing.T, in *Intake, out chan<- uint64) {
	t.Helper()
	for {
		b, err := in.Next(ctx, 100)
		if errors.Is(err, context.Canceled) {
			close(out)
			return
		}
		if err != nil {
			t.Error(err)
		}
		for i := range b.Messages {
			out <- b.Messages[i].Position
		}
	}
}

func watch(t *testing.T, g *given, setup *config.Setup) (in *Intake, got <-chan uint64, tells *[]*Hold, stop func()) {
	t.Helper()
	tells = &[]*Hold{}
	in = newIntake(g, setup, Options{
		Stored: monitor.Beginning, Now: time.Now, Held: func(h *Hold) { *tells = append(*tells, h) },
	})
	ctx, cancel := context.WithCancel(t.Context())
	out := make(chan uint64, 100)
	go positions(ctx, t, in, out)
	synctest.Wait()
	return in, out, tells, func() { cancel(); synctest.Wait() }
}

func TestClockThatLeapsIsHeld(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		// A silent night lies between the first two; the fourth leaps by a day.
		in, got, tells, stop := watch(t, stored(-20*time.Hour, -2*time.Hour, 50*time.Minute, 25*time.Hour, 25*time.Hour+time.Second), &config.Setup{})
		defer stop()
		if len(got) != 3 {
			t.Fatalf("%d messages passed", len(got))
		}
		h := in.Held()
		if h == nil || h.Position != 4 || len(*tells) != 1 || (*tells)[0] != h || h.Stored-h.Before != monitor.Instant((24*time.Hour+10*time.Minute)/time.Microsecond) {
			t.Fatalf("held at %v", h)
		}
		if in.Accept(3) || !in.Accept(4) || in.Accept(4) {
			t.Error("accepted at another position, or twice")
		}
		synctest.Wait()
		if len(got) != 5 || in.Held() != nil || len(*tells) != 2 || (*tells)[1] != nil {
			t.Errorf("after accepting: %d messages, held at %v", len(got), in.Held())
		}
	})
}

func TestHeldIntakeGoesOnWhenTheClockGetsThere(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		in, got, _, stop := watch(t, stored(0, 3*time.Hour), &config.Setup{})
		defer stop()
		time.Sleep(2*time.Hour - time.Minute)
		if len(got) != 1 || in.Held() == nil {
			t.Errorf("after two hours less a minute: %d messages", len(got))
		}
		time.Sleep(2 * time.Minute)
		if len(got) != 2 || in.Held() != nil {
			t.Errorf("after two hours: %d messages", len(got))
		}
	})
}

// TestFirstMessageAhead: without one before it, the local clock decides.
func TestFirstMessageAhead(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		in, got, _, stop := watch(t, stored(90*time.Minute, 91*time.Minute, 92*time.Minute), &config.Setup{})
		if len(got) != 0 || in.Held() == nil || in.Held().Before != monitor.Beginning {
			t.Errorf("%d messages passed", len(got))
		}
		if !in.Accept(1) {
			t.Error("not accepted")
		}
		synctest.Wait()
		if len(got) != 3 {
			t.Errorf("%d messages passed; the bus's clock is steady, if ahead", len(got))
		}
		stop()
	})
}

func TestHistoryHoldsNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		_, got, _, stop := watch(t, stored(0, 1000*time.Hour), &config.Setup{History: true})
		defer stop()
		if len(got) != 2 {
			t.Errorf("%d messages passed", len(got))
		}
	})
}
