package bus_test

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"

	"github.com/google/go-cmp/cmp"
	"github.com/nats-io/nats.go/jetstream"
)

// open opens the bus with its listener.
func open(t *testing.T, setup *config.Setup, opts ...bus.Option) *bus.Bus {
	t.Helper()
	b, err := bus.Open(t.Context(), setup, opts...)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { shut(t, b) })
	return b
}

func dial(t *testing.T, setup *config.Setup, opts ...bus.Option) *bus.Bus {
	t.Helper()
	b, err := bus.Dial(t.Context(), setup, opts...)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { shut(t, b) })
	return b
}

// deadline is the test's context with a deadline, so that a test of something
// that never comes fails instead of hanging.
func deadline(t *testing.T) context.Context {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	t.Cleanup(cancel)
	return ctx
}

func shut(t *testing.T, b *bus.Bus) {
	t.Helper()
	if err := b.Close(); err != nil {
		t.Errorf("closing: %v", err)
	}
}

func TestOneFolderIsOpenedOnce(t *testing.T) {
	setup := bustest.Setup(t)
	first := open(t, setup)
	publish(t, first, 0, 1, 3)
	_, err := bus.Open(t.Context(), setup)
	var locked *bus.LockedError
	if !errors.As(err, &locked) || !errors.Is(err, bus.ErrLocked) {
		t.Fatalf("second open: %v", err)
	}
	if locked.PID != os.Getpid() || !strings.Contains(err.Error(), setup.Folder) {
		t.Errorf("%v, want process %d", err, os.Getpid())
	}
	publish(t, first, 0, 4, 3) // the failed open left everything alone
	shut(t, first)
	second := open(t, setup)
	expect(t, read(t, source(t, second, 0, 0), 6, 10), 1)
}

func TestDialReachesTheDaemon(t *testing.T) {
	setup := bustest.Setup(t)
	if _, err := bus.Dial(t.Context(), setup); !errors.Is(err, bus.ErrNoDaemon) {
		t.Fatalf("without a daemon: %v", err)
	}
	daemon := open(t, setup)
	path := filepath.Join(setup.Folder, "control.json")
	info, err := os.Stat(path)
	if err != nil || info.Mode().Perm() != 0o600 {
		t.Fatalf("%v, %v", info, err)
	}
	client := dial(t, setup)
	publish(t, client, 0, 1, 2500)
	expect(t, read(t, source(t, daemon, 0, 0), 2500, 100), 1)
	expect(t, read(t, source(t, client, 0, 0), 2500, 100), 1)

	other := *setup
	other.Name = "ferrybill"
	if _, err := bus.Dial(t.Context(), &other); err == nil || !strings.Contains(err.Error(), "quillmere") {
		t.Errorf("another deployment on the same folder: %v", err)
	}
	shut(t, client)
	shut(t, daemon)
	if _, err := os.Stat(path); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("control.json after the end: %v", err)
	}
	if _, err := bus.Dial(t.Context(), setup); !errors.Is(err, bus.ErrNoDaemon) {
		t.Fatalf("after the daemon's end: %v", err)
	}
}

func TestDialExplainsADaemonWithoutAWayIn(t *testing.T) {
	setup := bustest.Setup(t)
	daemon := open(t, setup)
	path := filepath.Join(setup.Folder, "control.json")
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(path); err != nil {
		t.Fatal(err)
	}
	_, err = bus.Dial(t.Context(), setup)
	if err == nil || errors.Is(err, bus.ErrNoDaemon) || !strings.Contains(err.Error(), "try again") {
		t.Errorf("daemon without control.json: %v", err)
	}
	shut(t, daemon)
	// What a killed daemon leaves: its control.json, but no lock.
	if err := os.WriteFile(path, text, 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := bus.Dial(t.Context(), setup); !errors.Is(err, bus.ErrNoDaemon) {
		t.Errorf("stale control.json: %v", err)
	}
	open(t, setup)
	dial(t, setup)
}

func TestClientsCantHarmTheStreams(t *testing.T) {
	setup := bustest.Setup(t)
	daemon := open(t, setup)
	client := dial(t, setup)
	js, err := jetstream.New(client.Conn())
	if err != nil {
		t.Fatal(err)
	}
	publish(t, client, 0, 1, 5)
	for _, subject := range []string{
		"$JS.API.STREAM.DELETE.quillmere-in", "$JS.API.STREAM.PURGE.quillmere-in",
		"$JS.API.STREAM.UPDATE.quillmere-in", "$JS.API.STREAM.CREATE.other",
		"$JS.API.STREAM.MSG.DELETE.quillmere-in", "quillmere.alert.0.upper.falls",
	} {
		if err := js.Conn().Publish(subject, []byte(`{"seq":3}`)); err != nil {
			t.Error(err)
		}
	}
	if err := js.Conn().FlushWithContext(deadline(t)); err != nil {
		t.Fatal(err)
	}
	id, err := daemon.Identity(t.Context())
	if err != nil || id.First != 1 || id.Last != 5 {
		t.Errorf("%+v, %v", id, err)
	}
	if _, err := daemon.At(t.Context(), 3); err != nil {
		t.Error(err)
	}
}

func TestRestartKeepsEverything(t *testing.T) {
	setup := bustest.Setup(t)
	first := bustest.Open(t, setup)
	publish(t, first, 0, 1, 1500)
	before, err := first.Identity(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	// A copy of the folder, taken while the server runs, is what a kill leaves.
	killed := *setup
	killed.Folder = filepath.Join(t.TempDir(), "copy")
	if err := os.CopyFS(killed.Folder, os.DirFS(setup.Folder)); err != nil {
		t.Fatal(err)
	}
	shut(t, first)
	for name, s := range map[string]*config.Setup{"closed": setup, "killed": &killed} {
		b := bustest.Open(t, s)
		after, err := b.Identity(t.Context())
		if diff := cmp.Diff(before, after); err != nil || diff != "" {
			t.Errorf("%s: %v\n%s", name, err, diff)
		}
		publish(t, b, 0, 1501, 10)
		expect(t, read(t, source(t, b, 0, 700), 810, 100), 701)
	}
}

func TestStreamsAreCompared(t *testing.T) {
	setup := bustest.Setup(t)
	setup.Partitions = 3
	shut(t, bustest.Open(t, setup))
	for name, change := range map[string]func(*config.Setup){
		"partitions = 3": func(s *config.Setup) { s.Partitions = 4 },
		"key-parts = 1":  func(s *config.Setup) { s.KeyParts = 2 },
	} {
		changed := *setup
		change(&changed)
		_, err := bus.Open(t.Context(), &changed, bus.WithoutListener())
		if !errors.Is(err, bus.ErrPartitionsDiffer) || !strings.Contains(err.Error(), name) {
			t.Errorf("%s: %v", name, err)
		}
	}
	bustest.Open(t, setup) // the failed ones let go of the lock
}

func TestHarmfulStreamsAreRefused(t *testing.T) {
	setup := bustest.Setup(t)
	b := bustest.Open(t, setup)
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.Stream(t.Context(), "quillmere-in")
	if err != nil {
		t.Fatal(err)
	}
	good := s.CachedInfo().Config
	for name, change := range map[string]func(*jetstream.StreamConfig){
		"discard DiscardOld":   func(c *jetstream.StreamConfig) { c.Discard = jetstream.DiscardOld },
		"subjects":             func(c *jetstream.StreamConfig) { c.Subjects = []string{"quillmere.in.0.obs"} },
		"5 messages a subject": func(c *jetstream.StreamConfig) { c.MaxMsgsPerSubject = 5 },
		"not made by Tailbell": func(c *jetstream.StreamConfig) { c.Metadata = nil },
		"format 2":             func(c *jetstream.StreamConfig) { c.Metadata = map[string]string{"tailbell-format": "2"} },
		"acknowledgements":     func(c *jetstream.StreamConfig) { c.NoAck = true },
	} {
		bad := good
		change(&bad)
		if _, err := js.UpdateStream(t.Context(), bad); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		err := b.EnsureStreams(t.Context(), true)
		if !errors.Is(err, bus.ErrStreamDiffers) || !strings.Contains(err.Error(), name) {
			t.Errorf("%s: %v", name, err)
		}
	}
}

func TestLimitsFollowTheSetup(t *testing.T) {
	setup := bustest.Setup(t)
	shut(t, bustest.Open(t, setup))
	setup.Bus.MaxBytes, setup.Bus.MaxAge = 32<<20, time.Minute
	setup.Limits.MaxMessageBytes = 3 << 20
	b := bustest.Open(t, setup)
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.Stream(t.Context(), "quillmere-in")
	if err != nil {
		t.Fatal(err)
	}
	c := s.CachedInfo().Config
	if c.MaxBytes != 32<<20 || c.MaxAge != time.Minute || c.Duplicates != time.Minute || c.MaxMsgSize != 3<<20+16<<10 {
		t.Errorf("%+v", c)
	}
	if len(b.Notes()) != 0 {
		t.Errorf("%v", b.Notes())
	}
}

// A limit far under what the stream had before must not keep the server from
// finding it again.
func TestLoweredLimitKeepsTheStream(t *testing.T) {
	setup := bustest.Setup(t)
	setup.Bus.MaxBytes = 200 << 30
	first := bustest.Open(t, setup)
	publish(t, first, 0, 1, 100)
	shut(t, first)
	setup.Bus.MaxBytes = 1 << 20
	for range 2 {
		b := bustest.Open(t, setup)
		expect(t, read(t, source(t, b, 0, 0), 100, 100), 1)
		shut(t, b)
	}
}

func TestNamesThatCantNameAStream(t *testing.T) {
	for _, name := range []string{"", "a.b", "a b", "a*", ">", "ä", strings.Repeat("a", 65)} {
		setup := bustest.Setup(t)
		setup.Name = name
		if _, err := bus.Open(t.Context(), setup); err == nil {
			t.Errorf("%q was accepted", name)
		}
		if _, err := bus.Dial(t.Context(), setup); err == nil {
			t.Errorf("%q was accepted", name)
		}
	}
}

func TestADamagedFolderIsReported(t *testing.T) {
	setup := bustest.Setup(t)
	if err := os.WriteFile(filepath.Join(setup.Folder, "bus"), []byte("no folder"), 0o600); err != nil {
		t.Fatal(err)
	}
	_, err := bus.Open(t.Context(), setup, bus.WithoutListener())
	if err == nil || !strings.Contains(err.Error(), filepath.Join(setup.Folder, "bus")) {
		t.Errorf("%v", err)
	}
}
