package main

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/monitor/rehearse/ordeal"
	"tailbell/monitor/store"
)

// busTrial is an ordeal with a bus of its own behind a proxy.
type busTrial struct {
	*trial
	server *process
	proxy  *proxy
	files  string // of the bus
}

func newBusTrial(t *testing.T, gate int, o ordeal.Options) *busTrial {
	t.Helper()
	files := filepath.Join(t.TempDir(), "bus")
	server, address := newBusProcess(t, files)
	proxy := newProxy(t, address)
	x := &busTrial{trial: newTrial(t, gate, o, proxy.address(), proxy.address()), server: server, proxy: proxy, files: files}
	server.start()
	t.Cleanup(server.kill)
	x.awaitBus()
	return x
}

// awaitBus waits until the bus answers.
func (x *busTrial) awaitBus() {
	x.t.Helper()
	answers := func() bool {
		nc, err := visit("", x.proxy.address())
		if err != nil {
			return false
		}
		nc.Close()
		return true
	}
	if !x.server.until(x.minute(), answers) {
		x.t.Fatal("the bus does not come up")
	}
}

// breakSomething kills, restarts or cuts off at random.
func (x *busTrial) breakSomething() {
	x.t.Helper()
	switch x.random.IntN(8) {
	case 0, 1, 2:
		x.killDaemon()
	case 3, 4: // the bus dies and is away for a while
		x.endings["bus killed"]++
		x.server.kill()
		x.short(150)
		x.server.start()
		x.awaitBus()
	case 5:
		x.endings["cut"]++
		x.proxy.cut()
	case 6: // cut off, and nobody is let through
		x.endings["cut off"]++
		x.proxy.away.Store(true)
		x.proxy.cut()
		x.short(300)
		x.proxy.away.Store(false)
	case 7:
		x.endings["slow"]++
		x.proxy.stalled.Store(int64(1 + x.random.IntN(60)))
		x.short(200)
		x.proxy.stalled.Store(0)
	}
}

// revive starts the daemon if it has ended, which it may only do by being
// killed or because the bus was away when it began.
func (x *busTrial) revive() {
	x.t.Helper()
	if x.daemon.alive() {
		return
	}
	if x.daemon.cmd != nil && x.daemon.cmd.ProcessState.ExitCode() > 0 {
		x.endings["ended by itself"]++
		if text := x.daemon.complaint(); strings.Contains(text, "filled from") || strings.Contains(text, "panic") {
			x.t.Fatalf("the daemon ended:\n%s", text)
		}
	}
	x.daemon.start()
}

// TestOrdealRemote kills the daemon and a bus of its own apart from each other,
// and cuts and slows the line between them.
func TestOrdealRemote(t *testing.T) {
	x := newBusTrial(t, 200, ordeal.Options{Settings: 2})
	x.begin()
	for broken := 0; broken < x.kills; broken++ {
		x.revive()
		if !x.settle() {
			continue
		}
		x.pub.grant(x.share())
		if x.random.IntN(2) == 0 {
			ctx, cancel := context.WithTimeout(t.Context(), time.Duration(20+x.random.IntN(400))*time.Millisecond)
			x.daemon.until(ctx, x.pub.waiting)
			cancel()
		}
		x.short(15)
		x.breakSomething()
	}
	x.finish()
	x.check(true)
}

// snapshot is what a disk held at some moment.
type snapshot struct {
	bus    string
	stores string
}

// TestOrdealPowerLoss robs bus and store, apart from each other, of what they
// wrote since some earlier moment: the bus of somebody else's syncs when it
// likes, and a store may be put back from a copy. A stream that lost more than
// the store is a condition; it is accepted, and the publisher sends again what
// the stream lost and the store had not counted.
func TestOrdealPowerLoss(t *testing.T) {
	x := newBusTrial(t, 30, ordeal.Options{IDsOnly: true})
	x.pub.careful = true
	x.begin()
	var kept []snapshot
	for broken := 0; broken < x.kills; broken += 2 { // each is several kills
		x.revive()
		if !x.settle() {
			continue
		}
		x.pub.grant(x.share())
		if !x.daemon.until(x.minute(), x.pub.waiting) {
			t.Fatalf("nothing goes on:\n%s", x.daemon.complaint())
		}
		x.short(30)
		kept = append(kept, x.snapshot(len(kept)))
		if x.random.IntN(3) > 0 {
			x.pub.grant(x.share())
			if !x.daemon.until(x.minute(), x.pub.waiting) {
				t.Fatalf("nothing goes on:\n%s", x.daemon.complaint())
			}
		}
		x.short(30)
		x.loseInPower(kept[max(0, len(kept)-3):])
		kept = nil // a disk can't go on from what it no longer holds
	}
	x.finish()
	x.check(false)
}

// snapshot copies the files as they are at one moment, the bus's and the
// stores' each at its own.
func (x *busTrial) snapshot(n int) snapshot {
	x.t.Helper()
	to := filepath.Join(x.t.TempDir(), "snapshot")
	s := snapshot{bus: filepath.Join(to, "bus"), stores: filepath.Join(to, "stores")}
	if err := os.MkdirAll(s.stores, 0o700); err != nil {
		x.t.Fatal(err)
	}
	copyBus := func() {
		x.server.frozen(func() {
			if err := os.CopyFS(s.bus, os.DirFS(x.files)); err != nil {
				x.t.Fatal(err)
			}
		})
	}
	copyStores := func() {
		x.daemon.frozen(func() {
			for number := range 2 {
				path := storePath(x.parsed(), number)
				text, err := os.ReadFile(path)
				if err == nil {
					err = os.WriteFile(filepath.Join(s.stores, filepath.Base(path)), text, 0o600)
				}
				if err != nil && !errors.Is(err, os.ErrNotExist) {
					x.t.Fatal(err)
				}
			}
		})
	}
	if x.random.IntN(2) == 0 {
		copyBus()
		x.short(40)
		copyStores()
	} else {
		copyStores()
		x.short(40)
		copyBus()
	}
	return s
}

// loseInPower ends everything at once, and puts back what the disks held.
func (x *busTrial) loseInPower(kept []snapshot) {
	x.t.Helper()
	both := x.random.IntN(2) == 0 // else the daemon lives on another machine
	if both {
		x.killDaemon()
	}
	x.server.kill()
	loss := kept[x.random.IntN(len(kept))]
	storeLost := both && x.random.IntN(3) == 0
	busLost := !storeLost || x.random.IntN(2) == 0
	if busLost {
		x.endings["bus lost its tail"]++
		if err := errors.Join(os.RemoveAll(x.files), os.CopyFS(x.files, os.DirFS(loss.bus))); err != nil {
			x.t.Fatal(err)
		}
	}
	if storeLost {
		x.endings["store lost its tail"]++
		x.restoreStores(kept[x.random.IntN(len(kept))].stores)
	}
	x.server.start()
	x.awaitBus()
	x.recover(busLost)
}

func (x *busTrial) restoreStores(from string) {
	x.t.Helper()
	for number := range 2 {
		path := storePath(x.parsed(), number)
		text, err := os.ReadFile(filepath.Join(from, filepath.Base(path)))
		if err == nil {
			err = os.WriteFile(path, text, 0o600)
		}
		if err != nil {
			x.t.Fatal(err)
		}
	}
}

// recover waits for what the daemon says of the loss, accepts it if there is a
// difference, and lets the publisher make good for it.
func (x *busTrial) recover(busLost bool) {
	x.t.Helper()
	end := x.end()
	if !x.daemon.alive() {
		x.daemon.start()
	}
	// It ends by itself if a store stands beyond the stream's end, or serves.
	if x.daemon.until(x.minute(), x.serves) {
		x.daemon.kill()
	}
	positions := x.positions()
	beyond := false
	for _, p := range positions {
		beyond = beyond || p > end
	}
	if beyond && x.daemon.cmd.ProcessState.ExitCode() != 1 { // killed before it could say so
		x.daemon.start()
		x.daemon.until(x.minute(), func() bool { return false })
	}
	said := x.daemon.complaint()
	if beyond && !strings.Contains(said, "are lost from the stream") {
		x.t.Fatalf("the stream ends at %d, the stores stand at %v, but the daemon said:\n%s", end, positions, said)
	}
	if beyond {
		x.endings["condition"]++
		x.accept()
	} else if code, out, _ := run(x.t, "store", "accept", "--config", x.path); code != 0 {
		x.t.Fatalf("the stream ends at %d, the stores stand at %v:\n%s", end, positions, out)
	}
	x.daemon.cmd = nil // what it said has been heard
	if !busLost {
		return
	}
	x.endings["messages lost"] += x.pub.lost(func(n int, position uint64) bool {
		return position > end && position > positions[x.plan.Messages[n].Partition]
	})
	x.pub.forget(end)
}

// accept says first what differs, then takes the stream.
func (x *busTrial) accept() {
	x.t.Helper()
	code, out, complaint := run(x.t, "store", "accept", "--config", x.path)
	if code != 1 || !strings.Contains(out, "are lost from the stream") || !strings.Contains(out, "With --yes") {
		x.t.Fatalf("store accept: %d\n%s%s", code, out, complaint)
	}
	if code, out, complaint = run(x.t, "store", "accept", "--yes", "--config", x.path); code != 0 || !strings.Contains(out, "Accepted") {
		x.t.Fatalf("store accept --yes: %d\n%s%s", code, out, complaint)
	}
}

// serves reports whether the daemon answers.
func (x *trial) serves() bool {
	code, _, _ := run(x.t, "status", "--config", x.path)
	return code == 0
}

// end is the end of the stream.
func (x *busTrial) end() uint64 {
	x.t.Helper()
	nc, err := visit("", x.proxy.address())
	if err != nil {
		x.t.Fatal(err)
	}
	defer nc.Close()
	return streamEnd(x.t, nc)
}

// positions are those at which the stores stand.
func (x *trial) positions() [2]uint64 {
	x.t.Helper()
	var at [2]uint64
	for number := range 2 {
		st, err := store.OpenReadOnly(storePath(x.parsed(), number), store.Options{})
		if err != nil {
			x.t.Fatal(err)
		}
		at[number], err = st.Position()
		if err := errors.Join(err, st.Close()); err != nil {
			x.t.Fatal(err)
		}
	}
	return at
}
