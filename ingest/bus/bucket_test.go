package bus_test

import (
	"errors"
	"fmt"
	"net"
	"slices"
	"testing"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"

	"github.com/nats-io/nats-server/v2/server"
)

// startThree starts three servers that make up a cluster, and returns an address
// of each.
func startThree(t *testing.T) string {
	t.Helper()
	var routes, urls string
	var ports []int
	for i := range 3 {
		l, err := net.Listen("tcp", "127.0.0.1:0")
		if err != nil {
			t.Fatal(err)
		}
		tcp, ok := l.Addr().(*net.TCPAddr)
		if !ok {
			t.Fatal("no TCP address")
		}
		ports = append(ports, tcp.Port)
		defer l.Close() //nolint:errcheck // closed below; this is for failures
		if i > 0 {
			routes += ","
		}
		routes += fmt.Sprintf("nats://127.0.0.1:%d", tcp.Port)
		if err := l.Close(); err != nil {
			t.Fatal(err)
		}
	}
	var servers []*server.Server
	for i, port := range ports {
		s, err := server.NewServer(&server.Options{
			ServerName: fmt.Sprintf("node-%d", i), Host: "127.0.0.1", Port: server.RANDOM_PORT, NoSigs: true, NoLog: true,
			JetStream: true, StoreDir: t.TempDir(), Username: "tailbell", Password: password,
			Cluster: server.ClusterOpts{Name: "three", Host: "127.0.0.1", Port: port}, Routes: server.RoutesFromStr(routes),
		})
		if err != nil {
			t.Fatal(err)
		}
		s.Start()
		t.Cleanup(func() {
			s.Shutdown()
			s.WaitForShutdown()
		})
		servers = append(servers, s)
	}
	for i, s := range servers {
		if !s.ReadyForConnections(20 * time.Second) {
			t.Fatal("a server is not ready")
		}
		if i > 0 {
			urls += ","
		}
		urls += "nats://" + s.Addr().String()
	}
	for deadline := time.Now().Add(30 * time.Second); !slices.ContainsFunc(servers, (*server.Server).JetStreamIsLeader); {
		if time.Now().After(deadline) {
			t.Fatal("the cluster has no leader")
		}
		pause := time.NewTimer(20 * time.Millisecond)
		<-pause.C
	}
	return urls
}

// onEvery runs a test on the embedded bus, and on a cluster with three replicas.
func onEvery(t *testing.T, test func(t *testing.T, b *bus.Bus)) {
	t.Helper()
	t.Run("one", func(t *testing.T) { test(t, bustest.Open(t, bustest.Setup(t))) })
	t.Run("three", func(t *testing.T) {
		setup := bustest.Setup(t)
		setup.Bus.URL, setup.Bus.User, setup.Bus.PasswordFile = startThree(t), "tailbell", write(t, "password", password+"\n")
		setup.Bus.Replicas = 3
		test(t, open(t, setup))
	})
}

func TestBucketComparesAndSwaps(t *testing.T) {
	onEvery(t, func(t *testing.T, b *bus.Bus) {
		t.Helper()
		c, err := b.Claims(deadline(t))
		if err != nil {
			t.Fatal(err)
		}
		if entries, err := c.All(deadline(t)); err != nil || len(entries) != 0 {
			t.Fatalf("%v, %v", entries, err)
		}
		first := c.PutAll(deadline(t), []bus.Put{
			{Key: "p.0", Value: []byte("a")}, {Key: "p.1", Value: []byte("b")}, {Key: "m.x", Value: []byte("c"), Keep: time.Second},
		})
		for _, o := range first {
			if o.Err != nil || o.Revision == 0 {
				t.Fatalf("%+v", first)
			}
		}
		second := c.PutAll(deadline(t), []bus.Put{
			{Key: "p.0", Value: []byte("late")},                                    // there is one
			{Key: "p.1", Value: []byte("b2"), Revision: first[1].Revision},         // follows
			{Key: "p.1", Value: []byte("b3"), Revision: first[1].Revision},         // too late
			{Key: "p.2", Value: []byte("none"), Revision: first[0].Revision + 100}, // of nothing
		})
		for i, conflict := range []bool{true, false, true, true} {
			if errors.Is(second[i].Err, bus.ErrConflict) != conflict || (second[i].Err != nil) != conflict {
				t.Errorf("%d: %+v", i, second[i])
			}
		}
		gone := false
		for end := time.Now().Add(20 * time.Second); !gone && time.Now().Before(end); {
			entries, err := c.All(deadline(t))
			if err != nil {
				t.Fatal(err)
			}
			have := map[string]string{}
			for _, e := range entries {
				have[e.Key] = string(e.Value)
			}
			_, kept := have["m.x"]
			gone = have["p.0"] == "a" && have["p.1"] == "b2" && !kept && len(have) == 2
		}
		if !gone {
			t.Error("a value stays that was to be kept for a second, or others are not as they were put")
		}
	})
}

func TestOwnersFollowEachOther(t *testing.T) {
	onEvery(t, func(t *testing.T, b *bus.Bus) {
		t.Helper()
		ctx := deadline(t)
		last, err := b.LastPublished(ctx, 0)
		if err != nil || last.Position != 0 {
			t.Fatalf("%+v, %v", last, err)
		}
		publish := func(after, epoch, row uint64, key string) (uint64, bool, error) {
			m := &bus.OwnerMessage{Published: bus.Published{Position: after, Epoch: epoch, Row: row, Origin: "then", Key: key}, ID: key, Direction: "upper", Indicator: "fall"}
			if key != "" {
				m.Event = []byte("{}")
			}
			return b.PublishOwned(ctx, m)
		}
		must := func(after, epoch, row uint64, key string) uint64 {
			t.Helper()
			at, repeated, err := publish(after, epoch, row, key)
			if err != nil || repeated {
				t.Fatalf("%v, %v", repeated, err)
			}
			return at
		}
		at := must(0, 1, 0, "")
		other := &bus.OwnerMessage{Partition: 12, Published: bus.Published{Epoch: 9}}
		if _, _, err := b.PublishOwned(ctx, other); err != nil { // another partition, which is no matter here
			t.Fatal(err)
		}
		at = must(at, 1, 1, "a/1")
		stale := must(at, 1, 2, "a/2")
		at = must(stale, 2, 2, "") // the next owner
		for _, after := range []uint64{0, stale, at + 1} {
			if _, _, err := publish(after, 1, 3, "a/3"); !errors.Is(err, bus.ErrConflict) {
				t.Errorf("after %d: %v", after, err)
			}
		}
		if last, err = b.LastPublished(ctx, 0); err != nil || last.Position != at || last.Epoch != 2 || last.Row != 2 || last.Key != "" || last.Origin != "then" {
			t.Errorf("%+v, %v", last, err)
		}
		at = must(at, 2, 3, "a/3")
		if _, repeated, err := publish(at, 2, 4, "a/3"); err != nil || !repeated {
			t.Errorf("the same key again: %v, %v", repeated, err)
		}
		if last, err = b.LastPublished(ctx, 0); err != nil || last.Position != at || last.Key != "a/3" || last.Row != 3 {
			t.Errorf("%+v, %v", last, err)
		}
		s, err := b.SubscribeAlerts(ctx, 0)
		if err != nil {
			t.Fatal(err)
		}
		if steps := read(t, s, 3, 10); len(steps) != 3 || steps[2].Header["Tailbell-Row"][0] != "3" { // no marks
			t.Errorf("%+v", steps)
		}
		if end, err := b.AlertsEnd(ctx); err != nil || end != at {
			t.Errorf("%d, %v", end, err)
		}
		if err := s.Close(); err != nil {
			t.Error(err)
		}
	})
}
