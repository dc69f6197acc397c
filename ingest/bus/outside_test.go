package bus_test

import (
	"encoding/json"
	"os"
	"path/filepath"
	"testing"

	"tailbell/ingest/bus/bustest"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// What the README tells a publisher from outside, who has no code of ours.
func TestOutsidePublisher(t *testing.T) {
	setup := bustest.Setup(t)
	daemon := open(t, setup)
	text, err := os.ReadFile(filepath.Join(setup.Folder, "control.json"))
	if err != nil {
		t.Fatal(err)
	}
	var way struct{ URL, User, Password string }
	if err := json.Unmarshal(text, &way); err != nil {
		t.Fatal(err)
	}
	if nc, err := nats.Connect(way.URL); err == nil {
		nc.Close()
		t.Error("connected without a password")
	}
	nc, err := nats.Connect(way.URL, nats.UserInfo(way.User, way.Password))
	if err != nil {
		t.Fatal(err)
	}
	defer nc.Close()
	js, err := jetstream.New(nc)
	if err != nil {
		t.Fatal(err)
	}
	ack, err := js.Publish(t.Context(), "quillmere.in.0.obs", []byte("1"))
	if err != nil || ack.Sequence != 1 || ack.Stream != "quillmere-in" {
		t.Fatalf("%+v, %v", ack, err)
	}
	if _, err := js.Publish(t.Context(), "quillmere.in.1.obs", []byte("1")); err == nil {
		t.Error("a partition that isn't there took a message")
	}
	expect(t, read(t, source(t, daemon, 0, 0), 1, 1), 1)

	// Posing as the daemon: the subscription is refused, the real one answers.
	sub, err := nc.SubscribeSync("quillmere.control.status")
	if err != nil {
		t.Fatal(err)
	}
	if err := nc.FlushWithContext(deadline(t)); err != nil {
		t.Fatal(err)
	}
	if err := daemon.Conn().Publish("quillmere.control.status", []byte("secret")); err != nil {
		t.Fatal(err)
	}
	if err := daemon.Conn().FlushWithContext(deadline(t)); err != nil {
		t.Fatal(err)
	}
	if err := nc.FlushWithContext(deadline(t)); err != nil {
		t.Fatal(err)
	}
	if n, _, err := sub.Pending(); err == nil && n > 0 {
		t.Error("a client heard a request to the daemon")
	}
}
