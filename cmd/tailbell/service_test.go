package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// patience is how long a daemon may take to do what is waited for; it decides
// only how long a failing test lasts.
const patience = time.Minute

// service is a daemon that runs as a process of its own.
type service struct {
	t      *testing.T
	path   string // of the set-up
	cmd    *exec.Cmd
	health string // address
	log    *lockedBuffer
	stdout lockedBuffer // of all starts
	read   chan struct{}
}

// lockedBuffer is written by one goroutine and read by another.
type lockedBuffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (b *lockedBuffer) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.Write(p)
}

func (b *lockedBuffer) String() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.String()
}

func newService(t *testing.T, setup string) *service {
	t.Helper()
	s := &service{t: t, path: setup}
	t.Cleanup(func() {
		if s.cmd != nil {
			s.stop(syscall.SIGKILL)
		}
	})
	return s
}

// start starts the daemon and waits until it is ready.
func (s *service) start() {
	s.t.Helper()
	s.cmd = program(s.t, "run", "--config", s.path, "--health", "127.0.0.1:0", "--json")
	s.cmd.Stdout = &s.stdout
	pipe, err := s.cmd.StderrPipe()
	if err != nil {
		s.t.Fatal(err)
	}
	s.log, s.read = &lockedBuffer{}, make(chan struct{})
	if err := s.cmd.Start(); err != nil {
		s.t.Fatal(err)
	}
	address := make(chan string, 1)
	go s.follow(pipe, address)
	select {
	case s.health = <-address:
	case <-s.read:
		s.t.Fatalf("the daemon did not start:\n%s", s.log)
	}
	s.await("ready", func() bool { code, _ := s.ready(); return code == http.StatusOK })
}

// follow keeps the log, and gives the address of the health listener.
func (s *service) follow(pipe io.Reader, address chan<- string) {
	defer close(s.read)
	lines := bufio.NewScanner(pipe)
	for lines.Scan() {
		if _, err := fmt.Fprintln(s.log, lines.Text()); err != nil {
			s.t.Error(err)
		}
		var line struct{ Message, Address string }
		if json.Unmarshal(lines.Bytes(), &line) == nil && line.Message == "health" {
			address <- line.Address
		}
	}
}

// stop sends a signal and waits until the process has ended.
func (s *service) stop(signal os.Signal) {
	s.t.Helper()
	if err := s.cmd.Process.Signal(signal); err != nil {
		s.t.Log(err)
	}
	<-s.read
	if err := s.cmd.Wait(); err != nil && signal != syscall.SIGKILL {
		s.t.Errorf("the daemon ended with %v:\n%s", err, s.log)
	}
	s.cmd = nil
}

// ready asks /readyz.
func (s *service) ready() (int, string) {
	req, err := http.NewRequestWithContext(s.t.Context(), http.MethodGet, "http://"+s.health+"/readyz", nil)
	if err != nil {
		s.t.Fatal(err)
	}
	answer, err := http.DefaultClient.Do(req)
	if err != nil {
		return 0, err.Error()
	}
	text, err := io.ReadAll(answer.Body)
	if err := answer.Body.Close(); err != nil {
		s.t.Error(err)
	}
	if err != nil {
		return 0, err.Error()
	}
	return answer.StatusCode, string(text)
}

// await waits until something holds.
func (s *service) await(what string, holds func() bool) {
	s.t.Helper()
	tick := time.NewTicker(20 * time.Millisecond)
	defer tick.Stop()
	over := time.NewTimer(patience)
	defer over.Stop()
	for !holds() {
		select {
		case <-tick.C:
		case <-over.C:
			_, text := s.ready()
			s.t.Fatalf("waited in vain: %s\n%s\n%s", what, text, s.log)
		}
	}
}

func (s *service) setup() *config.Setup {
	s.t.Helper()
	setup, err := loadSetup(s.path)
	if err != nil {
		s.t.Fatal(err)
	}
	return setup
}

// dial connects to the daemon's bus until the test ends.
func (s *service) dial() *bus.Bus {
	s.t.Helper()
	b, err := bus.Dial(s.t.Context(), s.setup())
	if err != nil {
		s.t.Fatal(err)
	}
	s.t.Cleanup(func() {
		if err := b.Close(); err != nil {
			s.t.Log(err)
		}
	})
	return b
}

// publish publishes observations in one message and returns its position.
func (s *service) publish(data ...string) uint64 {
	s.t.Helper()
	b, err := bus.Dial(s.t.Context(), s.setup())
	if err != nil {
		s.t.Fatal(err)
	}
	position, err := b.Publish(s.t.Context(), bus.Outgoing{Data: []byte(strings.Join(data, "\n"))})
	if err != nil {
		s.t.Fatal(err)
	}
	if err := b.Close(); err != nil {
		s.t.Log(err)
	}
	return position
}

// status asks the daemon; ok is false if it does not answer.
func (s *service) status() (r statusReply, ok bool) {
	s.t.Helper()
	code, out, _ := run(s.t, "status", "--json", "--config", s.path)
	return r, code == 0 && json.Unmarshal([]byte(out), &r) == nil
}

// reaches waits until a position is counted, and returns the status then.
func (s *service) reaches(position uint64) (r statusReply) {
	s.t.Helper()
	s.await(fmt.Sprintf("position %d", position), func() bool {
		var ok bool
		r, ok = s.status()
		return ok && r.Partitions[0].Position >= position
	})
	return r
}

// says runs a command on the service's set-up, which must end with the code and
// say all parts.
func (s *service) says(want int, parts []string, args ...string) string {
	s.t.Helper()
	code, out, complaint := run(s.t, append(args, "--config", s.path)...)
	for _, part := range parts {
		if !strings.Contains(out+complaint, part) {
			s.t.Errorf("%s does not say %q:\n%s%s", strings.Join(args, " "), part, out, complaint)
		}
	}
	if code != want {
		s.t.Errorf("%s ended with %d:\n%s%s", strings.Join(args, " "), code, out, complaint)
	}
	return out
}

// day is an observation of one ward's day, so many days ago.
func day(ward, ago, events int) string {
	start := time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -ago)
	return fmt.Sprintf(`{"id":"w%d-%d","series":"quillmere-east/ward-%d/fall","start":"%s","end":"%s","events":%d,"exposure":20}`,
		ward, ago, ward, start.Format(time.RFC3339), start.AddDate(0, 0, 1).Format(time.RFC3339), events)
}

// storeOf is the file of the only partition's store.
func storeOf(t *testing.T, setup string) string {
	t.Helper()
	return filepath.Join(filepath.Dir(setup), "data", "partition-0.store")
}

// refusesToRun runs the daemon, which must end at once, and returns what it says.
func refusesToRun(t *testing.T, setup string) (code int, complaint string) {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	defer cancel()
	var out, log bytes.Buffer
	code = execute(ctx, []string{"run", "--config", setup, "--health", "off"}, strings.NewReader(""), &out, &log)
	return code, log.String()
}
