package main

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/nats-io/nats.go"

	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor/rehearse/ordeal"
	"tailbell/monitor/store"
)

// underTrace makes a process write down what it does to its files.
func underTrace(t *testing.T, command *exec.Cmd, to string) *exec.Cmd {
	t.Helper()
	tracer, err := exec.LookPath("strace")
	if err != nil {
		if os.Getenv("TAILBELL_CI") != "" {
			t.Fatal("strace is missing: install it")
		}
		t.Skip("strace is not installed: it tells what was synced")
	}
	c := exec.CommandContext(t.Context(), tracer, append([]string{
		"-f", "-ttt", "-xx", "-s", "16777216", "-o", to, "-e", "trace=" + traced, "--", command.Path,
	}, command.Args[1:]...)...)
	c.Env = command.Env
	return c
}

// endTraced kills what runs under the tracer, which then ends by itself.
func (p *process) endTraced() {
	p.t.Helper()
	pid := p.cmd.Process.Pid
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/task/%d/children", pid, pid))
	if err != nil {
		p.t.Fatal(err)
	}
	for _, one := range strings.Fields(string(text)) {
		child, err := strconv.Atoi(one)
		if err != nil {
			p.t.Fatal(err)
		}
		if err := syscall.Kill(child, syscall.SIGKILL); err != nil && !errors.Is(err, syscall.ESRCH) {
			p.t.Fatal(err)
		}
	}
	<-p.exited
}

// acks are the moments at which messages were acknowledged.
type acks struct{ list []ack }

type ack struct {
	at       float64
	position uint64
}

// TestPowerLossEmbedded traces what the daemon writes and syncs, and lets the
// power go at moments drawn at random: what was not synced is gone, or there in
// part. Everything acknowledged before must be in the stream, and the store
// sound, not ahead of the stream, and what the stream up to its position says.
func TestPowerLossEmbedded(t *testing.T) {
	x := newTrial(t, 30, ordeal.Options{}, "", "")
	trace := filepath.Join(t.TempDir(), "trace")
	plain := x.daemon.command
	x.daemon.command = func() *exec.Cmd { return underTrace(t, plain(), trace) }
	x.daemon.start()
	t.Cleanup(func() {
		if x.daemon.alive() {
			x.daemon.endTraced()
		}
	})
	if !x.daemon.until(x.minute(), func() bool { return x.announced(0) }) {
		t.Fatalf("it does not begin:\n%s", x.daemon.complaint())
	}
	x.pub.announced()
	taken := x.publishTimed(150 + x.kills)
	x.short(100)
	x.daemon.endTraced()

	calls := readTrace(t, trace)
	d := newDisk(x.folder)
	points := map[int]bool{}
	for range 4 + x.kills {
		points[len(calls)/20+x.random.IntN(len(calls)-len(calls)/20)] = true
	}
	points[len(calls)-1] = true
	var held, lost int
	for i := range calls {
		d.take(&calls[i])
		if !points[i] {
			continue
		}
		for _, torn := range []*rand.Rand{nil, x.random} {
			had, gone := x.afterPowerLoss(d, calls[i].at, taken.list, torn)
			held, lost = held+had, lost+gone
		}
		if t.Failed() {
			t.Fatalf("at call %d of %d", i, len(calls))
		}
	}
	t.Logf("%d calls traced, %d losses of power, %d acknowledged messages found again, %d missing", len(calls), 2*len(points), held, lost)
}

// publishTimed sends messages in windows and notes when each was acknowledged.
func (x *trial) publishTimed(n int) *acks {
	x.t.Helper()
	nc, err := x.pub.visit()
	if err != nil {
		x.t.Fatal(err)
	}
	defer nc.Close()
	a := &acks{}
	x.pub.grant(n)
	for {
		window := x.pub.next(1 + x.random.IntN(6))
		if len(window) == 0 {
			return a
		}
		x.one(nc, window, a)
	}
}

func (x *trial) one(nc *nats.Conn, window []int, a *acks) {
	x.t.Helper()
	positions, err := x.pub.send(x.t.Context(), nc, window)
	if err != nil {
		x.t.Fatal(err)
	}
	x.pub.took(window, positions)
	now := float64(time.Now().UnixMicro()) / 1e6
	for _, p := range positions {
		a.list = append(a.list, ack{now, p})
	}
}

// afterPowerLoss looks at what is left. It returns how many of the messages
// that were acknowledged by then are there, and how many are not.
func (x *trial) afterPowerLoss(d *disk, at float64, taken []ack, torn *rand.Rand) (held, lost int) {
	t := x.t
	t.Helper()
	folder := filepath.Join(t.TempDir(), "image")
	if err := os.MkdirAll(folder, 0o700); err != nil {
		t.Fatal(err)
	}
	d.image(t, folder, torn)
	setup := *x.parsed()
	setup.Folder = folder
	b, err := bus.Open(t.Context(), &setup, bus.WithoutListener())
	if err != nil {
		t.Errorf("the bus can't be opened any more: %v", err)
		return 0, 0
	}
	defer func() {
		if err := b.Close(); err != nil {
			t.Error(err)
		}
	}()
	for _, a := range taken {
		if a.at >= at {
			break
		}
		if _, err := b.At(t.Context(), a.position); err != nil {
			lost++
			t.Errorf("the message at position %d was acknowledged %.3f s before: %v", a.position, at-a.at, err)
			continue
		}
		held++
	}
	for number := range 2 {
		path := storePath(&setup, number)
		if _, err := os.Stat(path); errors.Is(err, os.ErrNotExist) {
			continue // the power went before it was made
		}
		x.checkLeft(b, path, number)
	}
	return held, lost
}

// checkLeft compares a store that is left with the stream that is left.
func (x *trial) checkLeft(b *bus.Bus, path string, number int) {
	t := x.t
	t.Helper()
	st, err := store.OpenReadOnly(path, store.Options{})
	if err != nil {
		t.Error(err)
		return
	}
	diff, err := intake.Compare(t.Context(), b, st)
	_, known, streamErr := st.Stream()
	position, positionErr := st.Position()
	if err := errors.Join(err, streamErr, positionErr, st.Close()); err != nil {
		t.Error(err)
		return
	}
	if diff != nil && known {
		t.Errorf("partition %d: %v", number, diff)
		return
	}
	raws := everything(t, b, number)
	for i := range raws {
		if raws[i].Position > position {
			raws = raws[:i]
			break
		}
	}
	if len(raws) == 0 {
		return
	}
	compareOutcomes(t, fmt.Sprintf("partition %d up to position %d", number, position), undisturbed(t, number, raws), outcomeOf(t, path))
}
