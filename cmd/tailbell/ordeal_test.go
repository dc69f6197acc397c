package main

import (
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"syscall"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/ordeal"
)

var (
	ordealKills = flag.Int("ordeal.kills", 0, "how often the ordeals kill; 0 for a short run")
	ordealSeed  = flag.Uint64("ordeal.seed", 0, "the seed of the ordeals; 0 for a new one")
)

// The ordeals publish a plan while daemon and bus are killed at random moments,
// cut off, and robbed of what their disks had not synced. In the end the stores
// must hold what the publisher's ledger says, the alert records must be those of
// a run that nobody disturbed, and every step must have reached every outlet.
//
// A long run: go test ./cmd/tailbell -run TestOrdeal -ordeal.kills 2000 -timeout 3h

// trial is one ordeal.
type trial struct {
	t      *testing.T
	seed   uint64
	random *rand.Rand
	plan   *ordeal.Plan
	texts  [][]byte // of the set-ups, complete
	folder string
	path   string // of the set-up
	remote string // address of the bus as the daemon sees it, "" for the embedded one
	kills  int
	daemon *process
	pub    *publisher
	recv   *receiver
	stop   func()

	endings map[string]int // what was done, how often
	setup   int            // number of the set-up in the file
}

// howMany is how many kills a run has; at the gate it is so many.
func howMany(gate int) int {
	switch {
	case *ordealKills > 0:
		return *ordealKills
	case os.Getenv("TAILBELL_CI") != "":
		return gate
	}
	return 8
}

// newTrial makes everything but a bus; remote is where the daemon finds it, and
// way where the publisher does.
func newTrial(t *testing.T, gate int, o ordeal.Options, remote, way string) *trial {
	t.Helper()
	seed := *ordealSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	kills := howMany(gate)
	t.Logf("seed %d, %d kills", seed, kills)
	o.Days = 60 + kills
	plan, err := ordeal.Generate(seed, o)
	if err != nil {
		t.Fatal(err)
	}
	x := &trial{
		t: t, seed: seed, random: rand.New(rand.NewPCG(seed, 1)), plan: plan, kills: kills,
		folder: filepath.Join(t.TempDir(), "data"), remote: remote, endings: map[string]int{},
	}
	x.path = filepath.Join(filepath.Dir(x.folder), "tailbell.toml")
	x.recv = newReceiver(t, seed)
	secret, password := filepath.Join(filepath.Dir(x.folder), "secret"), filepath.Join(filepath.Dir(x.folder), "password")
	if err := errors.Join(os.WriteFile(secret, []byte(ordealSecret), 0o600), os.WriteFile(password, []byte(busPassword), 0o600)); err != nil {
		t.Fatal(err)
	}
	for _, text := range plan.Setups {
		text = fmt.Appendf(nil, "folder = %q\n%s\n[[outlet]]\nname = \"ward\"\nurl = %q\nsecret_file = %q\n", x.folder, text, x.recv.server.URL+"/alerts", secret)
		if remote != "" {
			text = fmt.Appendf(text, "\n[bus]\nurl = \"nats://%s\"\nuser = \"tailbell\"\npassword_file = %q\n", remote, password)
		}
		x.texts = append(x.texts, text)
	}
	x.daemon = &process{
		t: t, stdout: filepath.Join(filepath.Dir(x.folder), "terminal"), stderr: filepath.Join(filepath.Dir(x.folder), "log"),
		command: func() *exec.Cmd { return program(t, "run", "--config", x.path, "--json", "--health", "off") },
	}
	x.pub = newPublisher(t, plan, seed, func() (*nats.Conn, error) { return visit(x.folder, way) })
	x.write(0)
	return x
}

// write writes a set-up into its file.
func (x *trial) write(number int) {
	x.t.Helper()
	if err := os.WriteFile(x.path, x.texts[number], 0o600); err != nil {
		x.t.Fatal(err)
	}
	x.setup = number
}

func (x *trial) parsed() *config.Setup {
	x.t.Helper()
	setup, err := config.Load(x.path)
	if err != nil {
		x.t.Fatal(err)
	}
	return setup
}

// begin lets the publisher run.
func (x *trial) begin() {
	ctx, cancel := context.WithCancel(x.t.Context())
	done := make(chan struct{})
	go func() {
		defer close(done)
		x.pub.run(ctx)
	}()
	x.stop = func() { cancel(); <-done }
	x.t.Cleanup(func() { x.daemon.kill(); x.stop() })
}

// short is a moment drawn at random.
func (x *trial) short(ms int) { idle(time.Duration(x.random.IntN(ms*1000)) * time.Microsecond) }

// minute bounds every wait, so that a run that hangs fails.
func (x *trial) minute() context.Context {
	x.t.Helper()
	ctx, cancel := context.WithTimeout(x.t.Context(), time.Minute)
	x.t.Cleanup(cancel)
	return ctx
}

// settle sees that the set-up which comes next in the plan is announced. It
// reports false if the daemon ended meanwhile.
func (x *trial) settle() bool {
	x.t.Helper()
	number, next := x.pub.setting()
	if !next {
		return true
	}
	if x.setup != number || !x.daemon.alive() {
		x.daemon.kill()
		x.write(number)
		x.daemon.start()
	}
	if x.random.IntN(4) == 0 && x.endings["killed"] < x.kills {
		x.short(80)
		x.killDaemon()
		return false
	}
	if !x.daemon.until(x.minute(), func() bool { return x.announced(number) }) {
		return false
	}
	x.pub.announced()
	return true
}

// announced reports whether a set-up is the last one in both partitions.
func (x *trial) announced(number int) bool {
	nc, err := x.pub.visit()
	if err != nil {
		return false
	}
	defer nc.Close()
	js, err := jetstream.New(nc)
	if err != nil {
		return false
	}
	ctx, cancel := context.WithTimeout(x.t.Context(), 2*time.Second)
	defer cancel()
	s, err := js.Stream(ctx, "ordeal-in")
	if err != nil {
		return false
	}
	for partition := range 2 {
		m, err := s.GetLastMsgForSubject(ctx, fmt.Sprintf("ordeal.in.%d.set", partition))
		if err != nil || string(m.Data) != string(x.texts[number]) {
			return false
		}
	}
	return true
}

func (x *trial) killDaemon() {
	x.t.Helper()
	if x.daemon.alive() {
		x.endings["killed"]++
	}
	x.daemon.kill()
}

// share is how many messages may be sent until the next kill.
func (x *trial) share() int { return 1 + x.random.IntN(2*len(x.plan.Messages)/x.kills) }

// finish sends the rest, waits until it is committed and delivered, and ends
// the daemon.
func (x *trial) finish() {
	x.t.Helper()
	x.recv.calm()
	x.pub.grant(len(x.plan.Messages))
	for x.pub.left() > 0 {
		if !x.daemon.alive() {
			x.daemon.start()
		}
		if !x.settle() {
			continue
		}
		if !x.daemon.until(x.minute(), func() bool { return x.pub.waiting() }) && x.daemon.alive() {
			x.t.Fatalf("%d messages can't be sent", x.pub.left())
		}
	}
	x.stop()
	for starts := 0; ; starts++ {
		if !x.daemon.alive() {
			x.daemon.start()
		}
		if x.daemon.until(x.minute(), x.quiet) {
			break
		}
		if x.daemon.alive() || starts == 3 {
			x.t.Fatalf("it does not come to rest:\n%s", x.daemon.complaint())
		}
	}
	x.daemon.end(syscall.SIGTERM)
	if code := x.daemon.cmd.ProcessState.ExitCode(); code != 0 {
		x.t.Errorf("the daemon ended with %d:\n%s", code, x.daemon.complaint())
	}
}

// quiet reports whether everything is committed and delivered.
func (x *trial) quiet() bool {
	code, out, _ := run(x.t, "status", "--json", "--config", x.path)
	var s statusReply
	if code != 0 || json.Unmarshal([]byte(out), &s) != nil {
		return false
	}
	for _, p := range s.Partitions {
		for _, o := range p.Outlets {
			if o.Waiting > 0 {
				return false
			}
		}
		if p.Position < p.End {
			return false
		}
	}
	return len(s.Partitions) == 2
}

// check holds what is left against everything that is known. whole says that
// the stream lost nothing, so that it holds everything that was acknowledged.
func (x *trial) check(whole bool) {
	t := x.t
	t.Helper()
	setup := x.parsed()
	var alerts []life.Record
	var slots, extra, elements int
	b, err := bus.Open(t.Context(), setup, bus.WithoutListener())
	if err != nil {
		t.Fatal(err)
	}
	times := map[int]int{}
	for number := range 2 {
		got := stored(t, setup, number)
		plan, meant := planned(x.plan, x.texts, number)
		want := undisturbed(t, number, plan)
		if whole {
			raws := everything(t, b, number)
			meant = arrived(t, x.plan, raws, times)
			compareOutcomes(t, fmt.Sprintf("partition %d against its own stream", number), undisturbed(t, number, raws), got)
			want = &outcome{Records: want.Records}
			compareOutcomes(t, fmt.Sprintf("partition %d against the plan", number), want, &outcome{Records: got.Records})
		} else {
			compareOutcomes(t, fmt.Sprintf("partition %d against the plan", number), withoutPlaces(want), withoutPlaces(got))
		}
		slots += checkLedger(t, x.plan, meant, got)
		elements += int(got.Account.Elements)
		alerts = append(alerts, got.alerts...)
	}
	for n := range x.plan.Messages {
		if whole && x.plan.Messages[n].Kind != ordeal.Setting && times[n] == 0 {
			t.Errorf("message %d was acknowledged at position %d, and is lost", n, x.pub.mu.positions[n])
		}
		extra += max(0, times[n]-1)
		if times[n] > 1 && !x.plan.Messages[n].Repeatable {
			t.Errorf("message %d must not be stored twice, and is %d times", n, times[n])
		}
	}
	events := alertEvents(t, b, "bus")
	if err := b.Close(); err != nil {
		t.Error(err)
	}
	onBus := checkDeliveries(t, "bus", events, alerts, whole)
	onTerminal := checkDeliveries(t, "terminal", printed(readFile(t, x.daemon.stdout)), alerts, true)
	onWebhook := checkDeliveries(t, "webhook", x.recv.took, alerts, true)
	steps := 0
	for i := range alerts {
		steps += len(alerts[i].Steps)
	}
	if steps < 10 {
		t.Errorf("only %d steps", steps)
	}
	t.Logf("%v; %d messages (%d sent again, %d stored twice), %d elements, %d slots compared; %d alerts, %d steps, delivered again: bus %d, terminal %d, webhook %d (%d of its answers were faults)",
		x.endings, len(x.plan.Messages), x.pub.mu.again, extra, elements, slots, len(alerts), steps, onBus, onTerminal, onWebhook, x.recv.faults)
}

// TestOrdeal kills the daemon, and the embedded bus with it.
func TestOrdeal(t *testing.T) {
	x := newTrial(t, 200, ordeal.Options{Settings: 3}, "", "")
	x.begin()
	for x.endings["killed"] < x.kills {
		if !x.daemon.alive() {
			x.daemon.start()
		}
		if !x.settle() {
			continue
		}
		x.pub.grant(x.share())
		if x.random.IntN(5) > 0 {
			ctx, cancel := context.WithTimeout(t.Context(), time.Duration(50+x.random.IntN(600))*time.Millisecond)
			x.daemon.until(ctx, x.pub.waiting)
			cancel()
			x.short(30)
		} else {
			x.short(120)
		}
		x.killDaemon()
	}
	x.finish()
	x.check(true)
}
