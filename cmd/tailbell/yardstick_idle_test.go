package main

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// begin measures how long it takes to go on from what the store holds after the
// whole load.
func (y *yard) begin(times int) {
	y.t.Helper()
	y.open()
	ctx, stop := context.WithCancel(y.t.Context())
	ended := make(chan error, 1)
	go func() { ended <- y.daemon.run(ctx) }()
	err := y.daemon.parts.get(0).reach(ctx, y.end)
	stop()
	if err := errors.Join(err, <-ended, y.daemon.close()); err != nil {
		y.t.Fatal(err)
	}
	var took, used []time.Duration
	for range times {
		began, cpu := time.Now(), processorTime()
		st, err := store.Open(storePath(y.setup, 0), identityOf(y.setup, 0), store.Options{})
		if err != nil {
			y.t.Fatal(err)
		}
		e, err := partition.Recover(st)
		took, used = append(took, time.Since(began)), append(used, processorTime()-cpu)
		if err == nil && e.SeriesCount() != y.load.series {
			y.t.Errorf("%d series were recovered", e.SeriesCount())
		}
		if err := errors.Join(err, st.Close()); err != nil {
			y.t.Fatal(err)
		}
	}
	slices.Sort(took)
	slices.Sort(used)
	y.t.Logf("figure | start with %d series: %s (median of %d), %s at most; %s of the processors |",
		y.load.series, took[len(took)/2], times, took[len(took)-1], used[len(used)/2])
	if err := os.Remove(storePath(y.setup, 0)); err != nil {
		y.t.Fatal(err)
	}
}

const ringSetup = `name = "idle"
folder = %q
[[indicator]]
name = "failure"
series = ["ferrybill/*/failure"]
unit = "hours"
every = "1m"
settle = "1m"
horizon = "1h"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1h" }
ids = "none"
windows = ["1m"]
p_limit = 1e-6
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.001
`

// ringing measures, on a bus where nothing else happens, how long it takes from
// publishing an observation to the alert that the bus gives out: (c) through
// the bare chain, (d) through all of Tailbell. What is published of each series
// is a late excess, so that it rings at once.
func ringing(t *testing.T, times int) {
	t.Helper()
	setup, err := config.Parse(fmt.Appendf(nil, ringSetup, filepath.Join(t.TempDir(), "data")), "t.toml")
	if err != nil {
		t.Fatal(err)
	}
	d, err := openDaemon(t.Context(), setup, daemonOptions{log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	r := &ring{t: t, bus: d.bus}
	ctx, stop := context.WithCancel(t.Context())
	end, err := d.bus.End(ctx)
	if err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() {
		ended <- bareChain(ctx, d.bus, setup, filepath.Join(t.TempDir(), "bare.db"), end, math.MaxUint64)
	}()
	bare := r.measure(ctx, "none", times)
	stop()
	if err := <-ended; !errors.Is(err, context.Canceled) {
		t.Fatal(err)
	}
	ctx, stop = context.WithCancel(t.Context())
	defer stop()
	go func() { ended <- d.run(ctx) }()
	if end, err = d.bus.End(ctx); err == nil {
		err = d.parts.get(0).reach(ctx, end)
	}
	if err != nil {
		t.Fatal(err)
	}
	whole := r.measure(ctx, "failure", times)
	stop()
	if err := errors.Join(<-ended, d.close()); err != nil {
		t.Fatal(err)
	}
	at := func(of []time.Duration, percent int) time.Duration {
		return of[min(len(of)*percent/100, len(of)-1)].Round(10 * time.Microsecond)
	}
	t.Logf("figure | publish to alert, idle, %d times: (c) median %s, 99%% %s; (d) median %s, 99%% %s; (d)/(c) %.2f and %.2f |", times,
		at(bare, 50), at(bare, 99), at(whole, 50), at(whole, 99),
		float64(at(whole, 50))/float64(at(bare, 50)), float64(at(whole, 99))/float64(at(bare, 99)))
}

type ring struct {
	t   *testing.T
	bus *bus.Bus
}

// measure publishes and awaits the alert, one after the other; it returns the
// times sorted.
func (r *ring) measure(ctx context.Context, what string, times int) []time.Duration {
	r.t.Helper()
	after, err := r.bus.AlertsEnd(ctx)
	if err != nil {
		r.t.Fatal(err)
	}
	alerts, err := r.bus.SubscribeAlerts(ctx, after)
	if err != nil {
		r.t.Fatal(err)
	}
	var took []time.Duration
	for n := range times {
		late := time.Now().Add(-5 * time.Minute).UTC().Format(time.RFC3339)
		text := fmt.Sprintf(`{"series":"ferrybill/eu-%d/%s","at":%q,"events":3}`, n, what, late)
		began := time.Now()
		if _, err := r.bus.Publish(ctx, bus.Outgoing{Data: []byte(text)}); err != nil {
			r.t.Fatal(err)
		}
		if _, err := alerts.Next(ctx, nil, 1, 1<<20); err != nil {
			r.t.Fatal(err)
		}
		took = append(took, time.Since(began))
	}
	if err := alerts.Close(); err != nil {
		r.t.Fatal(err)
	}
	slices.Sort(took)
	return took
}
