package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
)

// runBus makes this test binary a bus of somebody else's: its value is the
// folder, the port and whether every write is synced, as JSON.
const runBus = "TAILBELL_TEST_RUN_BUS"

// busPassword is that of the user "tailbell" of such a bus.
const busPassword = "correct-horse"

type busOrder struct {
	Folder string
	Port   int
	// Node is its name among those of a cluster, "" where it stands alone; Mesh is
	// the port for the others, which listen at Routes.
	Node   string   `json:",omitempty"`
	Mesh   int      `json:",omitempty"`
	Routes []string `json:",omitempty"`
}

// busMain is the process of a bus.
func busMain(order string) int {
	var o busOrder
	if err := json.Unmarshal([]byte(order), &o); err != nil {
		return 2
	}
	opts := &server.Options{
		Host: "127.0.0.1", Port: o.Port, NoSigs: true, NoLog: true, JetStream: true, StoreDir: o.Folder,
		Username: "tailbell", Password: busPassword,
	}
	if o.Node != "" {
		opts.ServerName = o.Node
		// Clients know only the addresses that they were given: others would lead
		// them past the proxies.
		opts.Cluster = server.ClusterOpts{Name: "nodes", Host: "127.0.0.1", Port: o.Mesh, NoAdvertise: true}
		for _, route := range o.Routes {
			u, err := url.Parse("nats://" + route)
			if err != nil {
				return 2
			}
			opts.Routes = append(opts.Routes, u)
		}
	}
	s, err := server.NewServer(opts)
	if err != nil {
		return 2
	}
	s.Start()
	s.WaitForShutdown()
	return 0
}

// process is a program that is killed and started again.
type process struct {
	t       *testing.T
	command func() *exec.Cmd
	cmd     *exec.Cmd
	exited  chan struct{} // closed when the present one has ended
	stdout  string        // file
	stderr  string        // file
}

func (p *process) start() {
	p.t.Helper()
	p.cmd = p.command()
	var files []*os.File
	for path, to := range map[string]*io.Writer{p.stdout: &p.cmd.Stdout, p.stderr: &p.cmd.Stderr} {
		if path == "" {
			continue
		}
		f, err := os.OpenFile(path, os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o600)
		if err != nil {
			p.t.Fatal(err)
		}
		*to = f
		files = append(files, f)
	}
	if err := p.cmd.Start(); err != nil {
		p.t.Fatal(err)
	}
	for _, f := range files {
		if err := f.Close(); err != nil {
			p.t.Fatal(err)
		}
	}
	p.exited = make(chan struct{})
	go func(cmd *exec.Cmd, exited chan struct{}) {
		defer close(exited)
		var exit *exec.ExitError
		if err := cmd.Wait(); err != nil && !errors.As(err, &exit) {
			p.t.Error(err)
		}
	}(p.cmd, p.exited)
}

// alive reports whether it was started and has not ended.
func (p *process) alive() bool {
	if p.cmd == nil {
		return false
	}
	select {
	case <-p.exited:
		return false
	default:
		return true
	}
}

// end sends a signal and waits until the process has ended.
func (p *process) end(s os.Signal) {
	p.t.Helper()
	if p.cmd == nil {
		return
	}
	if err := p.cmd.Process.Signal(s); err != nil && !errors.Is(err, os.ErrProcessDone) {
		p.t.Fatal(err)
	}
	<-p.exited
}

func (p *process) kill() { p.t.Helper(); p.end(syscall.SIGKILL) }

// frozen runs f while the process stands still, so that files are copied as
// they are at one moment.
func (p *process) frozen(f func()) {
	p.t.Helper()
	if !p.alive() {
		f()
		return
	}
	if err := p.cmd.Process.Signal(syscall.SIGSTOP); err != nil {
		p.t.Fatal(err)
	}
	p.awaitStop()
	f()
	if err := p.cmd.Process.Signal(syscall.SIGCONT); err != nil {
		p.t.Fatal(err)
	}
}

// awaitStop waits until the kernel says that all threads stand.
func (p *process) awaitStop() {
	p.t.Helper()
	for range 2000 {
		stopped := true
		tasks, err := filepath.Glob(fmt.Sprintf("/proc/%d/task/*/stat", p.cmd.Process.Pid))
		if err != nil {
			p.t.Fatal(err)
		}
		for _, path := range tasks {
			text, err := os.ReadFile(path)
			if err != nil {
				continue // a thread that has ended
			}
			if _, rest, found := bytes.Cut(text, []byte(") ")); found && rest[0] != 'T' {
				stopped = false
			}
		}
		if stopped {
			return
		}
		idle(time.Millisecond)
	}
	p.t.Fatal("the process does not stop")
}

// idle waits for real time: the processes of an ordeal know no other.
func idle(d time.Duration) { <-time.NewTimer(d).C }

// newBusProcess is a bus of its own on a free port.
func newBusProcess(t *testing.T, folder string) (p *process, address string) {
	t.Helper()
	port := freePort(t)
	return busProcess(t, busOrder{Folder: folder, Port: port}), fmt.Sprintf("127.0.0.1:%d", port)
}

// freePort is a port that nobody listens on.
func freePort(t *testing.T) int {
	t.Helper()
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	tcp, ok := listener.Addr().(*net.TCPAddr)
	if !ok {
		t.Fatal("no TCP address")
	}
	if err := listener.Close(); err != nil {
		t.Fatal(err)
	}
	return tcp.Port
}

func busProcess(t *testing.T, o busOrder) *process {
	t.Helper()
	order, err := json.Marshal(o)
	if err != nil {
		t.Fatal(err)
	}
	return &process{t: t, command: func() *exec.Cmd {
		c := program(t)
		c.Env = append(os.Environ(), runBus+"="+string(order))
		return c
	}}
}

// proxy stands between the daemon or a publisher and the bus.
type proxy struct {
	t        *testing.T
	listener net.Listener
	target   string
	away     atomic.Bool // nobody is let through
	stalled  atomic.Int64
	// banned, if not nil, says that one who comes from an address is not.
	banned func(net.Addr) bool

	mu    sync.Mutex
	conns map[net.Conn]bool
}

func newProxy(t *testing.T, target string) *proxy {
	t.Helper()
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	p := &proxy{t: t, listener: listener, target: target, conns: map[net.Conn]bool{}}
	go p.serve()
	t.Cleanup(func() {
		if err := listener.Close(); err != nil {
			t.Error(err)
		}
		p.cut()
	})
	return p
}

func (p *proxy) address() string { return p.listener.Addr().String() }

func (p *proxy) serve() {
	for {
		from, err := p.listener.Accept()
		if err != nil {
			return
		}
		to, err := net.Dial("tcp", p.target)
		if p.away.Load() || err != nil || p.banned != nil && p.banned(from.RemoteAddr()) {
			closeAll(from, to)
			continue
		}
		p.mu.Lock()
		p.conns[from], p.conns[to] = true, true
		p.mu.Unlock()
		go p.pass(from, to)
		go p.pass(to, from)
	}
}

// pass copies one way, slowly while the proxy is stalled, until either end is
// closed.
func (p *proxy) pass(from, to net.Conn) {
	buffer := make([]byte, 32<<10)
	for {
		n, err := from.Read(buffer)
		if ms := p.stalled.Load(); ms > 0 {
			idle(time.Duration(ms) * time.Millisecond)
		}
		if n > 0 {
			if _, writeErr := to.Write(buffer[:n]); writeErr != nil {
				err = writeErr
			}
		}
		if err != nil {
			break
		}
	}
	closeAll(from, to)
	p.mu.Lock()
	delete(p.conns, from)
	delete(p.conns, to)
	p.mu.Unlock()
}

// cut breaks every connection, in the middle of whatever they carry.
func (p *proxy) cut() { p.cutThose(func(net.Addr) bool { return true }) }

// cutThose breaks the connections that come from some addresses.
func (p *proxy) cutThose(from func(net.Addr) bool) {
	p.mu.Lock()
	defer p.mu.Unlock()
	for c := range p.conns {
		if from(c.RemoteAddr()) {
			closeAll(c)
		}
	}
}

func closeAll(conns ...net.Conn) {
	for _, c := range conns {
		if c == nil {
			continue
		}
		if err := c.Close(); err != nil && !errors.Is(err, net.ErrClosed) {
			continue // it is gone either way
		}
	}
}

// visit connects as a publisher does: to the embedded bus by the folder's
// control.json, to another by its address.
func visit(folder, address string) (*nats.Conn, error) {
	quick := []nats.Option{nats.NoReconnect(), nats.Timeout(2 * time.Second), nats.MaxPingsOutstanding(2), nats.PingInterval(time.Second)}
	if address != "" {
		return nats.Connect("nats://"+address, append(quick, nats.UserInfo("tailbell", busPassword))...)
	}
	text, err := os.ReadFile(filepath.Join(folder, "control.json"))
	if err != nil {
		return nil, err
	}
	var way struct{ URL, User, Password string }
	if err := json.Unmarshal(text, &way); err != nil {
		return nil, err
	}
	return nats.Connect(way.URL, append(quick, nats.UserInfo(way.User, way.Password))...)
}

// until waits until done says so, or ctx ends, or the process has ended.
func (p *process) until(ctx context.Context, done func() bool) bool {
	for !done() {
		select {
		case <-p.exited:
			return done()
		case <-ctx.Done():
			return false
		case <-time.NewTimer(2 * time.Millisecond).C:
		}
	}
	return true
}

// complaint is what a process wrote last to standard error.
func (p *process) complaint() string {
	text, err := os.ReadFile(p.stderr)
	if err != nil {
		return err.Error()
	}
	lines := strings.Split(strings.TrimSpace(string(text)), "\n")
	return strings.Join(lines[max(0, len(lines)-3):], "\n")
}
