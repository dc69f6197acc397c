package bus_test

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
	"tailbell/ingest/control"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

const document = "README.md"

// daemonsDay does everything that a daemon does with its account, and leaves
// with the first error.
func daemonsDay(t *testing.T, g *bustest.Guarded) (err error) {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), 8*time.Second)
	defer cancel()
	b, err := bus.Open(ctx, g.Setup(t, "daemon"))
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	for _, kind := range []bus.Kind{bus.Setting, bus.Tick, bus.Act, bus.Observation, bus.Summary} {
		if _, err := b.Publish(ctx, bus.Outgoing{Kind: kind, Data: []byte(kind.String())}); err != nil {
			return err
		}
	}
	if _, err := b.PublishAlert(ctx, 0, "upper", "fall", "key", []byte("{}"), nil); err != nil {
		return err
	}
	if err := ownersDay(ctx, b); err != nil {
		return err
	}
	serve, err := control.Serve(ctx, b, map[string]control.Handler{"status": func(context.Context, []byte) (any, error) { return "fine", nil }})
	if err == nil {
		err = errors.Join(control.Call(ctx, b, "status", nil, nil), serve.Close())
	}
	if err != nil {
		return err
	}
	s, err := b.Source(ctx, 0, 0)
	if err != nil {
		return err
	}
	for got := 0; got < 5; {
		msgs, err := s.Next(ctx, nil, 10, 1<<20)
		if err != nil {
			return errors.Join(err, s.Close())
		}
		got += len(msgs)
	}
	if err := errors.Join(summariesDay(ctx, b), s.Close()); err != nil {
		return err
	}
	if _, _, err := b.LastSetting(ctx, 0); err != nil {
		return err
	}
	return b.Trim(ctx, 1)
}

// summariesDay looks ahead for what other partitions told, beside a source.
func summariesDay(ctx context.Context, b *bus.Bus) error {
	ahead, err := b.Summaries(ctx, 0, 0)
	if err != nil {
		return err
	}
	msgs, err := ahead.Next(ctx, nil, 10, 1<<20)
	if err == nil && (len(msgs) != 1 || string(msgs[0].Data) != "sum") {
		err = fmt.Errorf("%d summaries", len(msgs))
	}
	if _, lastErr := b.LastSummary(ctx, 0); err == nil {
		err = lastErr
	}
	return errors.Join(err, ahead.Close())
}

// ownersDay claims, and publishes as an owner.
func ownersDay(ctx context.Context, b *bus.Bus) error {
	bucket, err := b.Claims(ctx)
	if err != nil {
		return err
	}
	if err := bucket.PutAll(ctx, []bus.Put{{Key: "p.0", Value: []byte("{}"), Keep: time.Minute}})[0].Err; err != nil {
		return err
	}
	if entries, err := bucket.All(ctx); err != nil || len(entries) != 1 {
		return fmt.Errorf("%d claims: %w", len(entries), err)
	}
	last, err := b.LastPublished(ctx, 0)
	if err != nil {
		return err
	}
	if _, _, err = b.PublishOwned(ctx, &bus.OwnerMessage{Published: bus.Published{Position: last.Position, Epoch: 1}}); err != nil {
		return err
	}
	return errors.Join(membersDay(ctx, b), copiersDay(ctx, b))
}

// membersDay answers another process, and asks one.
func membersDay(ctx context.Context, b *bus.Bus) error {
	serve, err := control.ServeMember(ctx, b, "a-1", map[string]control.Handler{"status": func(context.Context, []byte) (any, error) { return "fine", nil }})
	if err != nil {
		return err
	}
	return errors.Join(control.CallMember(ctx, b, "a-1", "status", nil, nil), serve.Close())
}

// copiersDay puts a copy up twice, gets and removes it.
func copiersDay(ctx context.Context, b *bus.Bus) error {
	shelf, err := b.Copies(ctx)
	if err != nil {
		return err
	}
	for range 2 {
		if err := shelf.Put(ctx, "partition-0.0.store", map[string]string{"position": "1"}, strings.NewReader(strings.Repeat("x", 700_000))); err != nil {
			return err
		}
	}
	if _, err := shelf.Facts(ctx, "partition-0.0.store"); err != nil {
		return err
	}
	if err := shelf.Get(ctx, "partition-0.0.store", io.Discard); err != nil {
		return err
	}
	return shelf.Delete(ctx, "partition-0.0.store")
}

// TestDaemonWorksWithItsAccount also takes each permission away in turn: what
// is documented is needed.
func TestDaemonWorksWithItsAccount(t *testing.T) {
	conf := bustest.Documented(t, document)
	if err := daemonsDay(t, bustest.StartGuarded(t, conf)); err != nil {
		t.Errorf("the documented permissions don't suffice: %v", err)
	}
	_, daemon, _ := strings.Cut(conf, "user: daemon")
	daemon, _, _ = strings.Cut(daemon, "user: command")
	publish, _, _ := strings.Cut(daemon, "]")
	lines := regexp.MustCompile(`(?m)^ *"[^"]+".*$`).FindAllString(publish, -1)
	if len(lines) < 10 {
		t.Fatalf("only %d permissions are documented:\n%s", len(lines), daemon)
	}
	if os.Getenv("TAILBELL_CI") == "" {
		lines = lines[:2] // each takes as long as an answer is waited for
	}
	for _, line := range lines {
		what := strings.Trim(strings.Split(line, "#")[0], ` "`)
		t.Run(what, func(t *testing.T) {
			t.Parallel()
			err := daemonsDay(t, bustest.StartGuarded(t, strings.Replace(conf, line, "", 1)))
			switch begin, _, _ := strings.Cut(strings.TrimSuffix(what, ">"), "*"); {
			case strings.Contains(line, "# else"): // it goes on without
				if err != nil {
					t.Errorf("is needed: %v", err)
				}
			case strings.Contains(what, "MSG.NEXT"): // only the log tells
				if err == nil {
					t.Error("is not needed")
				}
			case !errors.Is(err, bus.ErrNotAllowed) || !strings.Contains(err.Error(), begin):
				t.Errorf("is not needed, or the error does not name it: %v", err)
			}
		})
	}
}

func TestCommandsWorkWithTheirAccount(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, document))
	daemon := open(t, g.Setup(t, "daemon"))
	s, err := control.Serve(t.Context(), daemon, map[string]control.Handler{
		"status": func(context.Context, []byte) (any, error) { return "fine", nil },
	})
	if err != nil {
		t.Fatal(err)
	}
	command := dial(t, g.Setup(t, "command"))
	var says string
	if err := control.Call(deadline(t), command, "status", nil, &says); err != nil || says != "fine" {
		t.Errorf("%q, %v", says, err)
	}
	publish(t, command, 0, 1, 1500) // as feed does, in atomic batches
	expect(t, read(t, source(t, daemon, 0, 0), 1500, 1000), 1)
	if _, err := command.End(deadline(t)); err != nil {
		t.Error(err)
	}
	if _, err := command.At(deadline(t), 1); err != nil {
		t.Error(err)
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

func TestPublishersAndReadersWorkWithTheirAccounts(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, document))
	daemon := open(t, g.Setup(t, "daemon"))
	publisher, _ := g.Connect(t, "publisher")
	ack, err := stream(t, publisher).Publish(deadline(t), "quillmere.in.0.obs", []byte("{}"))
	if err != nil || ack.Sequence != 1 {
		t.Errorf("%+v, %v", ack, err)
	}

	keeper, _ := g.Connect(t, "keeper")
	_, err = stream(t, keeper).CreateConsumer(deadline(t), "quillmere-alerts", jetstream.ConsumerConfig{Durable: "reader", AckPolicy: jetstream.AckExplicitPolicy})
	if err != nil {
		t.Fatal(err)
	}
	reader, _ := g.Connect(t, "reader")
	live, err := reader.SubscribeSync("quillmere.alert.>")
	if err := errors.Join(err, reader.FlushTimeout(10*time.Second)); err != nil {
		t.Fatal(err)
	}
	if _, err := daemon.PublishAlert(deadline(t), 0, "upper", "fall", "key", []byte("rings"), nil); err != nil {
		t.Fatal(err)
	}
	if msg, err := live.NextMsg(10 * time.Second); err != nil || string(msg.Data) != "rings" {
		t.Errorf("live: %v", err)
	}
	consumer, err := stream(t, reader).Consumer(deadline(t), "quillmere-alerts", "reader")
	if err != nil {
		t.Fatal(err)
	}
	msg, err := consumer.Next(jetstream.FetchMaxWait(10 * time.Second))
	if err != nil || string(msg.Data()) != "rings" {
		t.Fatalf("kept: %v", err)
	}
	if err := msg.DoubleAck(deadline(t)); err != nil {
		t.Error(err)
	}
}

func stream(t *testing.T, nc *nats.Conn) jetstream.JetStream {
	t.Helper()
	js, err := jetstream.New(nc)
	if err != nil {
		t.Fatal(err)
	}
	return js
}

// TestAccountsAreRefusedMore tries with each account what is not its own.
func TestAccountsAreRefusedMore(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, document))
	daemon := open(t, g.Setup(t, "daemon"))
	publish(t, daemon, 0, 1, 3)
	keeper, _ := g.Connect(t, "keeper")
	if _, err := stream(t, keeper).CreateStream(deadline(t), jetstream.StreamConfig{Name: "ferrybill-in", Subjects: []string{"ferrybill.in.*.*"}}); err != nil {
		t.Fatal(err)
	}
	api := func(verb, of string) []string {
		return []string{"$JS.API." + verb + ".quillmere-" + of, "$JS.API." + verb + ".ferrybill-in"}
	}
	others := slices.Concat([]string{"ferrybill.in.0.obs", "$JS.API.INFO", "$JS.API.STREAM.LIST", "$JS.API.STREAM.NAMES", "_INBOX.quillmere.forged", "$SYS.REQ.SERVER.PING"},
		api("STREAM.DELETE", "in"), api("STREAM.UPDATE", "in"), api("STREAM.MSG.DELETE", "in"), api("STREAM.SNAPSHOT", "in"), api("STREAM.RESTORE", "in"),
		api("STREAM.DELETE", "alerts"), api("STREAM.UPDATE", "alerts"), api("STREAM.PURGE", "alerts"), api("CONSUMER.CREATE", "alerts"),
		[]string{"$JS.API.CONSUMER.CREATE.quillmere-alerts.x", "$JS.API.CONSUMER.CREATE.ferrybill-in.x", "$JS.API.CONSUMER.DURABLE.CREATE.quillmere-in.x", "$JS.API.CONSUMER.DELETE.quillmere-alerts.reader"})
	notDaemon := slices.Concat([]string{"quillmere.alert.0.upper.fall", "quillmere.alert.0.owner", "quillmere.in.0.sum", "$KV.quillmere-claims.p.0", "$JS.API.STREAM.MSG.GET.quillmere-alerts", "$JS.API.DIRECT.GET.KV_quillmere-claims", "$O.quillmere-copies.M.x", "$JS.API.STREAM.PURGE.OBJ_quillmere-copies"}, api("STREAM.PURGE", "in"), api("STREAM.CREATE", "in"), api("STREAM.CREATE", "alerts"),
		[]string{"$JS.API.CONSUMER.CREATE.quillmere-in.x", "$JS.API.CONSUMER.CREATE.quillmere-in.x.quillmere.in.0.*", "$JS.API.CONSUMER.MSG.NEXT.quillmere-in.x", "$JS.API.CONSUMER.DELETE.quillmere-in.x"})
	notCommand := slices.Concat([]string{"quillmere.in.0.set", "quillmere.in.0.tick", "quillmere.in.0.act", "quillmere.control.status"},
		api("STREAM.INFO", "in"), api("STREAM.INFO", "alerts"), api("STREAM.MSG.GET", "in"))
	listens := []string{">", "quillmere.>", "quillmere.in.>", "quillmere.in.0.obs", "_INBOX.>", "_INBOX.*.*", "$JS.>", "$JS.API.>", "$SYS.>", "ferrybill.>"}
	for user, c := range map[string]struct{ publish, subscribe []string }{
		"daemon":    {others, append(listens, "_INBOX.publisher.>", "quillmere.alert.>")},
		"command":   {slices.Concat(others, notDaemon), append(listens, "_INBOX.publisher.>", "quillmere.alert.>", "quillmere.control.>", "quillmere.control.status")},
		"publisher": {slices.Concat(others, notDaemon, notCommand), append(listens, "_INBOX.quillmere.>", "quillmere.alert.>", "quillmere.control.*")},
		"reader": {
			slices.Concat(others, notDaemon, notCommand, []string{"quillmere.in.0.obs", "$JS.API.CONSUMER.MSG.NEXT.quillmere-alerts.other"}),
			append(listens, "_INBOX.quillmere.>", "_INBOX.publisher.>", "quillmere.control.*"),
		},
	} {
		t.Run(user, func(t *testing.T) {
			nc, reported := g.Connect(t, user)
			refused := func(what string, err error) {
				t.Helper()
				if err := errors.Join(err, nc.FlushTimeout(10*time.Second)); err != nil {
					t.Fatal(err)
				}
				select {
				case err := <-reported:
					if !errors.Is(err, nats.ErrPermissionViolation) || !strings.Contains(err.Error(), fmt.Sprintf("%q", strings.TrimPrefix(what, "s "))) {
						t.Errorf("%s: %v", what, err)
					}
				case <-time.After(10 * time.Second):
					t.Errorf("%s is allowed", what)
				}
			}
			for _, subject := range c.publish {
				refused(subject, nc.PublishRequest(subject, "_INBOX."+user+".x", []byte("{}")))
			}
			for _, subject := range c.subscribe {
				_, err := nc.SubscribeSync(subject)
				refused("s "+subject, err)
			}
		})
	}
	if end, err := daemon.End(deadline(t)); err != nil || end != 3 {
		t.Errorf("the stream ends at %d, %v", end, err)
	}
}

// TestClientsNeedCertificates connects without one, with one of a foreign
// authority, and to a server that a foreign authority speaks for.
func TestClientsNeedCertificates(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, document))
	for name, c := range map[string]struct {
		change func(*config.Setup)
		want   string
	}{
		"none":          {func(s *config.Setup) { s.Bus.Cert, s.Bus.Key = "", "" }, "tls"},
		"foreign":       {func(s *config.Setup) { s.Bus.Cert, s.Bus.Key = g.File("foreign"), g.File("foreign-key") }, "tls"},
		"another's key": {func(s *config.Setup) { s.Bus.Key = g.File("foreign-key") }, "private key does not match"},
		"wrong server":  {func(s *config.Setup) { s.Bus.CA = g.File("foreign") }, "unknown authority"},
		"no password":   {func(s *config.Setup) { s.Bus.User, s.Bus.PasswordFile = "", "" }, "Authorization"},
		"wrong user":    {func(s *config.Setup) { s.Bus.User = "reader" }, "Authorization"},
		"in the clear":  {func(s *config.Setup) { s.Bus.URL = strings.Replace(s.Bus.URL, "tls://", "ws://", 1) }, "127.0.0.1"},
	} {
		t.Run(name, func(t *testing.T) {
			setup := g.Setup(t, "daemon")
			c.change(setup)
			b, err := bus.Open(deadline(t), setup)
			if err == nil {
				t.Fatal("connected", b.Close())
			}
			if !strings.Contains(err.Error(), c.want) || strings.Contains(err.Error(), "owl-keeps-watch") {
				t.Errorf("%v, want %q", err, c.want)
			}
		})
	}
}

// TestCertificateIsTheAccount lets the server map a certificate to its user.
func TestCertificateIsTheAccount(t *testing.T) {
	conf := bustest.Documented(t, document)
	conf = strings.Replace(conf, "verify: true", "verify_and_map: true", 1)
	conf = strings.Replace(conf, "user: daemon, password: $DAEMON_PASSWORD", `user: "CN=client"`, 1)
	g := bustest.StartGuarded(t, conf)
	setup := g.Setup(t, "daemon")
	setup.Bus.User, setup.Bus.PasswordFile = "", ""
	b := open(t, setup)
	publish(t, b, 0, 1, 10)
	setup = g.Setup(t, "daemon")
	setup.Bus.User, setup.Bus.PasswordFile, setup.Bus.Cert, setup.Bus.Key = "", "", g.File("server"), g.File("server-key")
	if other, err := bus.Dial(t.Context(), setup); err == nil {
		t.Error("a certificate of nobody connects", other.Close())
	}
}
