package main

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats.go/jetstream"
	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// troubled is a daemon whose troubles are looked at. It runs once begun.
type troubled struct {
	*daemon
	t *testing.T
}

func newTroubled(t *testing.T, mode, more string, o daemonOptions) *troubled {
	t.Helper()
	setup, err := config.Parse(fmt.Appendf(nil, `name = "quillmere"
folder = %q
[time]
mode = %q
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
windows = ["7d"]
[indicator.baseline]
kind = "known"
rate = 0.01
%s`, filepath.Join(t.TempDir(), "data"), mode, more), "t.toml")
	if err != nil {
		t.Fatal(err)
	}
	o.log = zerolog.Nop()
	d, err := openDaemon(t.Context(), setup, o)
	if err != nil {
		t.Fatal(err)
	}
	return &troubled{daemon: d, t: t}
}

// begin runs the daemon until the test ends.
func (d *troubled) begin() {
	ctx, cancel := context.WithCancel(d.t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.run(ctx) }()
	d.t.Cleanup(func() {
		cancel()
		if err := errors.Join(<-ended, d.close()); err != nil {
			d.t.Error(err)
		}
	})
}

func (d *troubled) publish(n int) {
	d.t.Helper()
	for i := range n {
		at := time.Date(2026, 3, 2, 0, i, 0, 0, time.UTC).Format(time.RFC3339)
		_, err := d.bus.Publish(d.t.Context(), bus.Outgoing{Data: fmt.Appendf(nil, `{"series":"east/fall","at":%q,"events":1}`, at)})
		if err != nil {
			d.t.Fatal(err)
		}
	}
}

// await asks for the status until it is as wanted.
func (d *troubled) await(what string, wanted func(*statusReply) bool) *statusReply {
	d.t.Helper()
	ctx, cancel := context.WithTimeout(d.t.Context(), 30*time.Second)
	defer cancel()
	for {
		s, err := d.status(ctx)
		if err == nil && wanted(s) {
			return s
		}
		if ctx.Err() != nil {
			d.t.Fatalf("never %s: %+v, %v", what, s, err)
		}
		idle(5 * time.Millisecond)
	}
}

func has(s *statusReply, kind troubleKind) string {
	for _, t := range s.Troubles {
		if t.Kind == kind {
			return t.Text
		}
	}
	return ""
}

// ready is what /readyz answers.
func (d *troubled) ready() (code int, text string) {
	d.t.Helper()
	h := &health{log: zerolog.Nop()}
	h.daemon.Store(d.daemon)
	w := httptest.NewRecorder()
	h.ready(w, httptest.NewRequestWithContext(d.t.Context(), http.MethodGet, "/readyz", http.NoBody))
	return w.Code, w.Body.String()
}

func TestPurgedStreamIsATrouble(t *testing.T) {
	d := newTroubled(t, "history", "", daemonOptions{})
	d.publish(40)
	js, err := jetstream.New(d.bus.Conn())
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.Stream(t.Context(), "quillmere-in")
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Purge(t.Context(), jetstream.WithPurgeSequence(31)); err != nil {
		t.Fatal(err)
	}
	d.begin()
	st := d.await("read, and told", func(s *statusReply) bool { return s.Partitions[0].Position == 41 && has(s, troubleMissing) != "" })
	if text := has(st, troubleMissing); !strings.Contains(text, "30 messages were removed") || !strings.Contains(text, "from position 1 to 30") {
		t.Errorf("troubles: %+v", st.Troubles)
	}
}

func TestBusThatIsAwayIsATrouble(t *testing.T) {
	server, address := newBusProcess(t, filepath.Join(t.TempDir(), "bus"))
	server.start()
	t.Cleanup(server.kill)
	line := newProxy(t, address)
	if !server.until(t.Context(), func() bool {
		nc, err := visit("", address)
		if err == nil {
			nc.Close()
		}
		return err == nil
	}) {
		t.Fatal("no bus")
	}
	password := filepath.Join(t.TempDir(), "password")
	if err := os.WriteFile(password, []byte(busPassword), 0o600); err != nil {
		t.Fatal(err)
	}
	d := newTroubled(t, "history", fmt.Sprintf("[bus]\nurl = \"nats://%s\"\nuser = \"tailbell\"\npassword_file = %q\n", line.address(), password), daemonOptions{})
	d.begin()
	d.publish(3)
	d.await("read", func(s *statusReply) bool { return s.Partitions[0].Position == 4 })
	if code, text := d.ready(); code != http.StatusOK {
		t.Errorf("%d %s", code, text)
	}
	line.away.Store(true)
	line.cut()
	st := d.await("away", func(s *statusReply) bool { return strings.Contains(has(s, troubleBus), "to come back") })
	if st.Connected || st.Partitions[0].Position != 4 {
		t.Errorf("%+v", st)
	}
	if code, text := d.ready(); code != http.StatusServiceUnavailable || !strings.Contains(text, "connection to the bus is lost") {
		t.Errorf("%d %s", code, text)
	}
	line.away.Store(false)
	d.await("back", func(s *statusReply) bool { return s.Connected && len(s.Troubles) == 0 })
	d.publish(2)
	d.await("read on", func(s *statusReply) bool { return s.Partitions[0].Position == 6 })
}

func TestOutletThatIsDownIsATrouble(t *testing.T) {
	secret := filepath.Join(t.TempDir(), "secret")
	if err := os.WriteFile(secret, []byte(ordealSecret), 0o600); err != nil {
		t.Fatal(err)
	}
	down := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) { w.WriteHeader(http.StatusBadGateway) }))
	defer down.Close()
	d := newTroubled(t, "history", fmt.Sprintf("[[outlet]]\nname = \"ward\"\nurl = %q\nsecret_file = %q\n", down.URL, secret), daemonOptions{})
	if err := d.parts.get(0).store.Outlets(0, "gone"); err != nil {
		t.Fatal(err)
	}
	d.begin()
	// Ten events in a week at one per hundred bed-days ring.
	for day := range 10 {
		at := time.Date(2026, 3, 2+day, 0, 0, 0, 0, time.UTC)
		_, err := d.bus.Publish(t.Context(), bus.Outgoing{Data: fmt.Appendf(nil, `{"series":"east/fall","start":%q,"end":%q,"events":3,"exposure":10}`,
			at.Format(time.RFC3339), at.AddDate(0, 0, 1).Format(time.RFC3339))})
		if err != nil {
			t.Fatal(err)
		}
	}
	if _, err := d.bus.Publish(t.Context(), bus.Outgoing{Kind: bus.Tick, Header: map[string][]string{"Tailbell-Time": {"2026-04-20T00:00:00Z"}}}); err != nil {
		t.Fatal(err)
	}
	st := d.await("undelivered", func(s *statusReply) bool {
		return strings.Contains(has(s, troubleUndelivered), "outlet") && strings.Contains(fmt.Sprint(s.Troubles), "502 Bad Gateway")
	})
	if !strings.Contains(fmt.Sprint(st.Troubles), "outlet gone, which the set-up no longer names") {
		t.Errorf("troubles: %+v", st.Troubles)
	}
	if code, text := d.ready(); code != http.StatusOK {
		t.Errorf("an outlet that is down keeps nothing else: %d %s", code, text)
	}
	if _, err := d.dropOutlet(t.Context(), "ward"); err == nil || !strings.Contains(err.Error(), "in use") {
		t.Errorf("dropping an outlet in use: %v", err)
	}
	if _, err := d.dropOutlet(t.Context(), "never"); err == nil || !strings.Contains(err.Error(), "no outlet") {
		t.Errorf("dropping an unknown outlet: %v", err)
	}
	if waited, err := d.dropOutlet(t.Context(), "gone"); err != nil || fmt.Sprint(waited) == "0" {
		t.Errorf("dropping: %v, %v", waited, err)
	}
}

func TestClockThatLeapsIsATrouble(t *testing.T) {
	slow := func() time.Time { return time.Now().Add(-3 * time.Hour) }
	d := newTroubled(t, "live", "", daemonOptions{now: slow})
	d.begin()
	d.await("held", func(s *statusReply) bool { return strings.Contains(has(s, troubleClock), "position 1") })
	if code, text := d.ready(); code != http.StatusServiceUnavailable || !strings.Contains(text, "clock accept") {
		t.Errorf("%d %s", code, text)
	}
	rows, err := d.acceptClock(t.Context(), nil)
	if list, ok := rows.([]heldRow); err != nil || !ok || len(list) != 1 {
		t.Errorf("accepting: %v, %v", rows, err)
	}
	d.await("live", func(s *statusReply) bool { return len(s.Troubles) == 0 && !s.Partitions[0].History })
}
