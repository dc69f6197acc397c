package main

import (
	"flag"
	"fmt"
	"math/rand/v2"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/ordeal"
	"tailbell/monitor/store"
)

var (
	chaosFaults = flag.Int("chaos.faults", 0, "how many faults the chaos test has; 0 for a short run with one of each")
	chaosSeries = flag.Int("chaos.series", 0, "how many series it has; 0 for a few")
	chaosDays   = flag.Int("chaos.days", 0, "how many days they report; 0 for a few")
	chaosRate   = flag.Int("chaos.rate", 0, "how many messages are published a second; 0 for few")
)

// The chaos test has three nodes of a bus that hold everything threefold, and
// processes that share the partitions. A publisher with a ledger sends a plan at a
// steady rate, while processes are killed, stopped and cut off, and nodes of the
// bus die. In the end the stores must hold what the ledger says, the alert
// records must be those of one process that nobody disturbed, and every step must
// be on the bus once. Slips are judged by their peers in all partitions, and falls
// by an allowance for all of them.
//
// A long run: go test ./cmd/tailbell -run TestChaos -chaos.faults 40 -chaos.series 20000 -chaos.days 30 -chaos.rate 1500 -timeout 2h -v

const (
	chaosPartitions = 16
	chaosClaim      = 3 * time.Second
)

// node is one of the bus's.
type node struct {
	*process
	address string // for clients
}

// newNodes starts a cluster of a bus.
func newNodes(t *testing.T, n int) []*node {
	t.Helper()
	meshes, nodes := make([]int, n), make([]*node, n)
	var routes []string
	for i := range meshes {
		meshes[i] = freePort(t)
		routes = append(routes, fmt.Sprintf("127.0.0.1:%d", meshes[i]))
	}
	for i := range nodes {
		port := freePort(t)
		nodes[i] = &node{address: fmt.Sprintf("127.0.0.1:%d", port), process: busProcess(t, busOrder{
			Folder: filepath.Join(t.TempDir(), "node"), Port: port, Node: fmt.Sprintf("node-%d", i), Mesh: meshes[i], Routes: routes,
		})}
		nodes[i].start()
		t.Cleanup(nodes[i].kill)
	}
	return nodes
}

// worker is a process of ours.
type worker struct {
	*process
	path   string // of the set-up
	banned atomic.Bool
}

// has reports whether a connection comes from the process. All processes have
// the same set-up, and so the same way to the bus: only the kernel knows.
func (w *worker) has(from net.Addr) bool {
	tcp, ok := from.(*net.TCPAddr)
	if !ok || !w.alive() {
		return false
	}
	text, err := os.ReadFile("/proc/net/tcp")
	if err != nil {
		w.t.Error(err)
		return false
	}
	local := fmt.Sprintf("0100007F:%04X", tcp.Port)
	for line := range strings.Lines(string(text)) {
		fields := strings.Fields(line)
		if len(fields) < 10 || fields[1] != local {
			continue
		}
		sockets, err := filepath.Glob(fmt.Sprintf("/proc/%d/fd/*", w.cmd.Process.Pid))
		if err != nil {
			w.t.Error(err)
		}
		for _, path := range sockets {
			if to, err := os.Readlink(path); err == nil && to == "socket:["+fields[9]+"]" {
				return true
			}
		}
	}
	return false
}

// cutOff keeps a process from every node.
func (x *chaos) cutOff(w *worker) {
	w.banned.Store(true)
	for _, p := range x.proxies {
		p.cutThose(w.has)
	}
}

// chaos is one run.
type chaos struct {
	t       *testing.T
	seed    uint64
	random  *rand.Rand
	plan    *ordeal.Plan
	nodes   []*node
	proxies []*proxy // one for each node, between it and the processes
	workers []*worker
	pub     *publisher
	stop    func()

	did       map[string]int
	takeovers []takeover
	board     *bus.Bucket // of the claims
}

func newChaos(t *testing.T, workers int, o ordeal.Options) *chaos {
	t.Helper()
	seed := *ordealSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	t.Logf("seed %d", seed)
	plan, err := ordeal.Generate(seed, o)
	if err != nil {
		t.Fatal(err)
	}
	x := &chaos{t: t, seed: seed, random: rand.New(rand.NewPCG(seed, 4)), plan: plan, nodes: newNodes(t, 3), did: map[string]int{}}
	for _, n := range x.nodes {
		p := newProxy(t, n.address)
		p.banned = func(from net.Addr) bool {
			return slices.ContainsFunc(x.workers, func(w *worker) bool { return w.banned.Load() && w.has(from) })
		}
		x.proxies = append(x.proxies, p)
	}
	for range workers {
		x.workers = append(x.workers, x.newWorker(workers > 1))
	}
	x.pub = newPublisher(t, plan, seed, x.visit)
	x.pub.most = 200
	x.awaitBus()
	return x
}

// newWorker makes a process that reaches every node through its proxy.
func (x *chaos) newWorker(shares bool) *worker {
	x.t.Helper()
	folder := x.t.TempDir()
	w := &worker{path: filepath.Join(folder, "tailbell.toml")}
	var urls []string
	for _, p := range x.proxies {
		urls = append(urls, "nats://"+p.address())
	}
	text := fmt.Appendf(nil, "folder = \"data\"\n%s\n[bus]\nurl = %q\nuser = \"tailbell\"\npassword_file = \"password\"\nreplicas = 3\n",
		x.plan.Setups[0], strings.Join(urls, ","))
	if shares {
		text = fmt.Appendf(text, "share = true\nclaim = %q\ncopy_every = \"5s\"\n", config.FormatDuration(chaosClaim))
	}
	for name, data := range map[string][]byte{w.path: text, filepath.Join(folder, "password"): []byte(busPassword)} {
		if err := os.WriteFile(name, data, 0o600); err != nil {
			x.t.Fatal(err)
		}
	}
	w.process = &process{
		t: x.t, stdout: filepath.Join(folder, "terminal"), stderr: filepath.Join(folder, "log"),
		command: func() *exec.Cmd { return program(x.t, "run", "--config", w.path, "--json", "--health", "off") },
	}
	x.t.Cleanup(w.kill)
	return w
}

// visit connects to any node, without haste: while none leads, one after the
// other refuses.
func (x *chaos) visit() (*nats.Conn, error) {
	idle(20 * time.Millisecond)
	var urls []string
	for _, n := range x.nodes {
		urls = append(urls, "nats://"+n.address)
	}
	return nats.Connect(strings.Join(urls, ","), nats.UserInfo("tailbell", busPassword), nats.NoReconnect(),
		nats.Timeout(2*time.Second), nats.MaxPingsOutstanding(2), nats.PingInterval(time.Second))
}

// await waits until something holds, which takes a minute at most.
func (x *chaos) await(what string, holds func() bool) {
	x.t.Helper()
	for deadline := time.Now().Add(time.Minute); !holds(); idle(20 * time.Millisecond) {
		if time.Now().After(deadline) {
			for i, w := range x.workers {
				x.t.Logf("process %d: %s", i, w.complaint())
			}
			x.t.Fatalf("in vain: %s", what)
		}
	}
}

// awaitBus waits until the nodes have found each other.
func (x *chaos) awaitBus() {
	x.t.Helper()
	x.await("the bus", func() bool {
		nc, err := x.visit()
		if err != nil {
			return false
		}
		defer nc.Close()
		js, err := jetstream.New(nc)
		if err != nil {
			return false
		}
		_, err = js.AccountInfo(x.t.Context())
		return err == nil
	})
}

// dial connects as a command does.
func (x *chaos) dial() *bus.Bus {
	x.t.Helper()
	b, err := bus.Dial(x.t.Context(), x.parsed(x.workers[0]))
	if err != nil {
		x.t.Fatal(err)
	}
	return b
}

// look connects to the claims.
func (x *chaos) look() *bus.Bucket {
	x.t.Helper()
	b, err := bus.Dial(x.t.Context(), x.parsed(x.workers[0]))
	if err != nil {
		x.t.Fatal(err)
	}
	x.t.Cleanup(func() {
		if err := b.Close(); err != nil {
			x.t.Error(err)
		}
	})
	bucket, err := b.Claims(x.t.Context())
	if err != nil {
		x.t.Fatal(err)
	}
	return bucket
}

func (x *chaos) parsed(w *worker) *config.Setup {
	x.t.Helper()
	setup, err := config.Load(w.path)
	if err != nil {
		x.t.Fatal(err)
	}
	return setup
}

// begin starts the processes, and lets the publisher send so many messages a
// second once every partition has its set-up.
func (x *chaos) begin(rate int) {
	x.t.Helper()
	for _, w := range x.workers {
		w.start()
	}
	x.await("the set-up in every partition", func() bool {
		nc, err := x.visit()
		if err != nil {
			return false
		}
		defer nc.Close()
		js, err := jetstream.New(nc)
		if err != nil {
			return false
		}
		s, err := js.Stream(x.t.Context(), "ordeal-in")
		if err != nil {
			return false
		}
		info, err := s.Info(x.t.Context(), jetstream.WithSubjectFilter("ordeal.in.*.set"))
		return err == nil && len(info.State.Subjects) == chaosPartitions
	})
	x.pub.announced()
	ctx, done := x.t.Context(), make(chan struct{})
	stop := make(chan struct{})
	go func() {
		defer close(done)
		tick := time.NewTicker(20 * time.Millisecond)
		defer tick.Stop()
		for {
			select {
			case <-tick.C:
				x.pub.grant(max(1, rate/50))
			case <-stop:
				return
			case <-ctx.Done():
				return
			}
		}
	}()
	published := make(chan struct{})
	go func() {
		defer close(published)
		x.pub.run(ctx)
	}()
	x.stop = func() { close(stop); <-done }
}

// newest returns the path of the store of a partition that its last owner has.
func (x *chaos) newest(number int) string {
	x.t.Helper()
	path, best := "", uint64(0)
	for _, w := range x.workers {
		one := storePath(x.parsed(w), number)
		st, err := store.OpenReadOnly(one, store.Options{})
		if err != nil {
			continue // it has none
		}
		epoch, err := st.Epoch()
		if closeErr := st.Close(); err != nil || closeErr != nil {
			x.t.Fatal(err, closeErr)
		}
		if epoch >= best {
			path, best = one, epoch
		}
	}
	if path == "" {
		x.t.Fatalf("nobody has a store of partition %d", number)
	}
	return path
}

// finish waits until everything is sent and stored, and ends the processes.
func (x *chaos) finish() {
	x.t.Helper()
	for deadline := time.Now().Add(30 * time.Minute); x.pub.left() > 0; idle(20 * time.Millisecond) {
		if time.Now().After(deadline) {
			x.t.Fatalf("%d messages can't be sent", x.pub.left())
		}
	}
	x.stop()
	for _, w := range x.workers {
		if !w.alive() {
			w.start()
		}
	}
	x.await("all is stored", x.quiet)
	for i, w := range x.workers {
		w.end(syscall.SIGTERM)
		if code := w.cmd.ProcessState.ExitCode(); code != 0 {
			x.t.Errorf("process %d ended with %d:\n%s", i, code, w.complaint())
		}
	}
}

// check holds what is left against everything that is known.
func (x *chaos) check() {
	t := x.t
	t.Helper()
	b := x.dial()
	defer func() {
		if err := b.Close(); err != nil {
			t.Error(err)
		}
	}()
	times := map[int]int{}
	var alerts []life.Record
	slots, elements := 0, 0
	plans := ensembleOf(t, x.plan, chaosPartitions)
	for number := range chaosPartitions {
		raws := everything(t, b, number)
		meant := arrived(t, x.plan, raws, times)
		got := outcomeOf(t, x.newest(number))
		compareOutcomes(t, fmt.Sprintf("partition %d against its own stream", number), undisturbedOf(t, chaosPartitions, number, raws), got)
		withoutDigests := func(alerts []life.Record) *outcome { return &outcome{Records: undigested(t, alerts)} }
		compareOutcomes(t, fmt.Sprintf("partition %d against the plan", number), withoutDigests(plans[number]), withoutDigests(got.alerts))
		slots += checkLedger(t, x.plan, meant, got)
		elements += int(got.Account.Elements)
		alerts = append(alerts, got.alerts...)
	}
	for n := range x.plan.Messages {
		m := &x.plan.Messages[n]
		if m.Kind != ordeal.Setting && times[n] == 0 {
			t.Errorf("message %d was acknowledged at position %d, and is lost", n, x.pub.mu.positions[n])
		}
		if times[n] > 1 && !m.Repeatable {
			t.Errorf("message %d must not be stored twice, and is %d times", n, times[n])
		}
	}
	events := alertEvents(t, b, "bus")
	if again := checkDeliveries(t, "bus", events, alerts, true); again > 0 {
		t.Errorf("%d steps are doubled on the bus", again)
	}
	t.Logf("%v; %d messages (%d sent again), %d elements, %d slots compared; %d alerts, %d steps on the bus, none twice; takeovers %v",
		x.did, len(x.plan.Messages), x.pub.mu.again, elements, slots, len(alerts), len(events), x.takeovers)
}
