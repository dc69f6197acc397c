package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor"
)

// The yardstick is run by hand, on a machine with nothing else to do:
//
//	go test ./cmd/tailbell -run TestYardstick -yardstick -timeout 0 -v
//
// It measures, one after the other and over again on one machine, what it costs
// to read a backlog (a) with an empty handler, (b) decoded, (c) through a bare
// chain that commits and publishes, and (d) through all of Tailbell.
var (
	yardstick       = flag.Bool("yardstick", false, "TestYardstick measures what Tailbell costs")
	yardstickRounds = flag.Int("yardstick-rounds", 3, "how often each way is measured")
	yardstickOnly   = flag.String("yardstick-only", "", "measure only the lines that contain this")
)

// yard is one line of the table.
type yard struct {
	t      *testing.T
	setup  *config.Setup
	load   yardLoad
	end    uint64
	daemon *daemon
	best   map[string][]pace
}

// pace is what one pass over the backlog took.
type pace struct{ wall, cpu time.Duration }

var yardLines = []struct {
	tcp  bool
	load yardLoad
}{
	{false, yardLoad{series: 1000, perSlot: 10, slots: 60, perMessage: 1}},
	{false, yardLoad{series: 10_000, perSlot: 5, slots: 20, perMessage: 1}},
	{false, yardLoad{series: 100_000, perSlot: 1, slots: 10, perMessage: 1}},
	{false, yardLoad{series: 1000, perSlot: 10, slots: 200, perMessage: 100}},
	{false, yardLoad{series: 10_000, perSlot: 10, slots: 20, perMessage: 100}},
	{false, yardLoad{series: 100_000, perSlot: 2, slots: 20, perMessage: 100}},
	{true, yardLoad{series: 10_000, perSlot: 5, slots: 20, perMessage: 1}},
	{false, yardLoad{series: 10_000, perSlot: 10, slots: 20, perMessage: 100, allowance: true}},
	{true, yardLoad{series: 10_000, perSlot: 10, slots: 20, perMessage: 100}},
}

// yardTiny is played where the yardstick isn't asked for, so that it doesn't rot.
var yardTiny = yardLoad{series: 100, perSlot: 2, slots: 25, perMessage: 10, allowance: true}

func TestYardstick(t *testing.T) {
	if !*yardstick {
		y := newYard(t, yardTiny, false)
		y.round()
		t.Log(y.row())
		y.begin(2)
		y.tellDurable("embedded", time.Second/5)
		ringing(t, 5)
		return
	}
	var table strings.Builder
	table.WriteString("| bus | series | a message | (a) pull | (b) decode | (c) bare chain | (d) Tailbell | (d)/(b) | (d)/(c) | CPU beyond (b) |\n|---|---|---|---|---|---|---|---|---|---|\n")
	for _, line := range yardLines {
		place := "embedded"
		if line.tcp {
			place = "TCP"
		}
		if !strings.Contains(place+" "+line.load.String(), *yardstickOnly) {
			continue
		}
		t.Run(place+" "+line.load.String(), func(t *testing.T) {
			y := newYard(t, line.load, line.tcp)
			for range *yardstickRounds {
				y.round()
			}
			fmt.Fprintf(&table, "| %s %s\n", place, y.row())
			t.Logf("figure | %s %s", place, y.row())
			if line.load.series == 100_000 {
				y.begin(5)
			}
			if line.load.series == 10_000 && line.load.perMessage == 1 {
				y.tellDurable(place, 6*time.Second)
			}
		})
	}
	if strings.Contains("idle", *yardstickOnly) {
		t.Run("idle", func(t *testing.T) { ringing(t, 400) })
	}
	t.Logf("median of %d rounds, observations a second:\n%s", *yardstickRounds, table.String())
}

// newYard publishes the load.
func newYard(t *testing.T, load yardLoad, tcp bool) *yard {
	t.Helper()
	folder, url := t.TempDir(), ""
	if tcp {
		p, address := newBusProcess(t, filepath.Join(folder, "bus"))
		p.start()
		t.Cleanup(p.kill)
		password := filepath.Join(folder, "password")
		if err := os.WriteFile(password, []byte(busPassword), 0o600); err != nil {
			t.Fatal(err)
		}
		url = fmt.Sprintf("url = %q\nuser = \"tailbell\"\npassword_file = %q", "nats://"+address, password)
	}
	setup, err := config.Parse(fmt.Appendf(nil, yardSetup, filepath.Join(folder, "data"), url, load.rule()), "t.toml")
	if err != nil {
		t.Fatal(err)
	}
	y := &yard{t: t, setup: setup, load: load, best: map[string][]pace{}}
	y.open()
	began := time.Now()
	y.end = load.publish(t, y.daemon.bus)
	t.Logf("%d observations published in %s", load.observations(), time.Since(began).Round(time.Millisecond))
	y.shut(nil)
	return y
}

func (y *yard) open() {
	y.t.Helper()
	deadline := time.Now().Add(10 * time.Second)
	for {
		var err error
		if y.daemon, err = openDaemon(y.t.Context(), y.setup, daemonOptions{log: zerolog.Nop()}); err == nil {
			return
		}
		if time.Now().After(deadline) {
			y.t.Fatal(err)
		}
	}
}

// shut ends the daemon and forgets what it stored.
func (y *yard) shut(err error) {
	y.t.Helper()
	if err := errors.Join(err, y.daemon.close()); err != nil {
		y.t.Fatal(err)
	}
	if err := os.Remove(storePath(y.setup, 0)); err != nil {
		y.t.Fatal(err)
	}
}

// round measures each way once.
func (y *yard) round() {
	y.open()
	b := y.daemon.bus
	y.measure("a", func(ctx context.Context) error { return pullAll(ctx, b, y.end) })
	y.measure("b", func(ctx context.Context) error { return decodeAll(ctx, b, y.setup, y.end) })
	y.measure("c", func(ctx context.Context) error {
		return bareChain(ctx, b, y.setup, filepath.Join(y.t.TempDir(), "bare.db"), 0, y.end)
	})
	ctx, stop := context.WithCancel(y.t.Context())
	ended := make(chan error, 1)
	y.measure("d", func(context.Context) error {
		go func() { ended <- y.daemon.run(ctx) }()
		return y.daemon.parts.get(0).reach(ctx, y.end)
	})
	status, err := y.daemon.status(ctx)
	if err != nil {
		y.t.Fatal(err)
	}
	if a := status.Partitions[0].Account; a.Elements != int64(y.load.observations()) || a.Refused+a.Rejected+a.Unmonitored > 0 || a.Looks == 0 {
		y.t.Fatalf("the account: %+v", a)
	} else if len(y.best["d"]) == 1 {
		y.t.Logf("%d looks, %d made again, %d late; %d alerts open", a.Looks, a.Reruns, a.Late, status.Partitions[0].OpenAlerts)
	}
	stop()
	y.shut(<-ended)
}

func (y *yard) measure(way string, work func(context.Context) error) {
	y.t.Helper()
	cpu, began := processorTime(), time.Now()
	if err := work(y.t.Context()); err != nil {
		y.t.Fatal(way, err)
	}
	p := pace{time.Since(began), processorTime() - cpu}
	y.best[way] = append(y.best[way], p)
	y.t.Logf("(%s) %s, %s of the processors", way, p.wall.Round(time.Millisecond), p.cpu.Round(time.Millisecond))
}

// row writes the medians.
func (y *yard) row() string {
	n := float64(y.load.observations())
	speed := func(way string) float64 {
		return n / median(y.best[way], func(p pace) float64 { return p.wall.Seconds() })
	}
	ratio := func(to string) float64 {
		var r []float64
		for i := range y.best["d"] {
			r = append(r, y.best[to][i].wall.Seconds()/y.best["d"][i].wall.Seconds())
		}
		slices.Sort(r)
		return r[len(r)/2]
	}
	cpu := func(way string) float64 {
		return median(y.best[way], func(p pace) float64 { return float64(p.cpu.Nanoseconds()) }) / n
	}
	message := fmt.Sprint(y.load.perMessage)
	if y.load.allowance {
		message += ", allowance"
	}
	return fmt.Sprintf("| %d | %s | %.0f | %.0f | %.0f | %.0f | %.2f | %.2f | %.0f ns |", y.load.series, message,
		speed("a"), speed("b"), speed("c"), speed("d"), ratio("b"), ratio("c"), cpu("d")-cpu("b"))
}

func median(of []pace, f func(pace) float64) float64 {
	var list []float64
	for _, p := range of {
		list = append(list, f(p))
	}
	slices.Sort(list)
	return list[len(list)/2]
}

// processorTime is what this process has used of the processors.
func processorTime() time.Duration {
	var r syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &r); err != nil {
		return 0
	}
	return time.Duration(r.Utime.Nano() + r.Stime.Nano())
}

// pullAll reads without looking at anything.
func pullAll(ctx context.Context, b *bus.Bus, end uint64) error {
	s, err := b.Source(ctx, 0, 0)
	if err != nil {
		return err
	}
	var raw []bus.Raw
	for s.Position() < end {
		if raw, err = s.Next(ctx, raw[:0], 5000, 16<<20); err != nil {
			return err
		}
	}
	return s.Close()
}

// decodeAll reads and decodes.
func decodeAll(ctx context.Context, b *bus.Bus, setup *config.Setup, end uint64) error {
	in, err := intake.Open(ctx, b, setup, 0, intake.Options{Stored: monitor.Beginning, Now: time.Now})
	if err != nil {
		return err
	}
	for position := uint64(0); position < end; {
		batch, err := in.Next(ctx, 5000)
		if err != nil {
			return err
		}
		position = batch.Messages[len(batch.Messages)-1].Position
	}
	return in.Close()
}
