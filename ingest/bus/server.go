package bus

import (
	"crypto/rand"
	"fmt"
	"path/filepath"
	"time"

	"tailbell/config"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
	"github.com/rs/zerolog"
)

const (
	busFolder = "bus"
	loopback  = "127.0.0.1"
	// readyTimeout is how long a started server may take to accept clients;
	// recovery of its streams comes before and is not counted.
	readyTimeout = 10 * time.Second
	maxClients   = 64
	flushersEnd  = 20 * time.Millisecond
)

// account is a user of the embedded server, made up anew at every start.
type account struct {
	user, password string
}

func newAccount(user string) account {
	return account{user: user, password: rand.Text()}
}

// embedded is the server in this process.
type embedded struct {
	server  *server.Server
	log     *serverLog
	daemon  account // this process
	visitor account // other commands, through the loopback listener
}

// startServer starts the embedded server on the set-up's folder.
func startServer(setup *config.Setup, o options, logger zerolog.Logger) (*embedded, error) {
	e := &embedded{daemon: newAccount("daemon"), visitor: newAccount("visitor")}
	s, err := server.NewServer(e.options(setup, o))
	if err != nil {
		return nil, fmt.Errorf("setting up the embedded bus: %w", err)
	}
	log := &serverLog{log: logger}
	e.log = log
	s.SetLoggerV2(log, false, false, false)
	s.Start()
	e.server = s
	if reason := log.fatal(); reason != "" {
		e.stop()
		return nil, fmt.Errorf("starting the embedded bus in %s: %s",
			filepath.Join(setup.Folder, busFolder), reason)
	}
	if !s.ReadyForConnections(readyTimeout) {
		e.stop()
		return nil, fmt.Errorf("the embedded bus was not ready within %s", readyTimeout)
	}
	return e, nil
}

func (e *embedded) options(setup *config.Setup, o options) *server.Options {
	n := names{setup.Name}
	payload := max(maxStored(setup), leastPayload)
	return &server.Options{
		ServerName: setup.Name,
		Host:       loopback,
		Port:       server.RANDOM_PORT,
		DontListen: o.noListener,
		NoSigs:     true,
		NoLog:      true,
		MaxConn:    maxClients,
		MaxPayload: int32(min(payload, server.MAX_PENDING_SIZE)),
		Users: []*server.User{
			{Username: e.daemon.user, Password: e.daemon.password},
			{
				Username: e.visitor.user, Password: e.visitor.password,
				Permissions: visitorPermissions(n),
			},
		},
		JetStream:              true,
		DisableJetStreamBanner: true,
		StoreDir:               filepath.Join(setup.Folder, busFolder),
		SyncAlways:             true,
		JetStreamMaxMemory:     memoryLimit,
		JetStreamMaxStore:      storeLimit,
	}
}

// visitorPermissions let other commands publish into the input stream, read
// both streams and ask the daemon; they can't change or empty a stream, pose
// as the daemon or forge an alert.
func visitorPermissions(n names) *server.Permissions {
	return &server.Permissions{
		Publish: &server.SubjectPermission{Deny: []string{
			n.alertAll(),
			n.summaries(),    // only daemons tell each other
			n.inbox() + ".>", // answers to the daemon come from the server
			"$JS.API.STREAM.CREATE.>",
			"$JS.API.STREAM.UPDATE.>",
			"$JS.API.STREAM.DELETE.>",
			"$JS.API.STREAM.PURGE.>",
			"$JS.API.STREAM.MSG.DELETE.>",
			"$JS.API.STREAM.RESTORE.>",
		}},
		Subscribe: &server.SubjectPermission{Deny: []string{n.control(">")}},
	}
}

// connectOptions connect this process to the server without a socket.
func (e *embedded) connectOptions() []nats.Option {
	return []nats.Option{
		nats.InProcessServer(e.server),
		nats.UserInfo(e.daemon.user, e.daemon.password),
	}
}

// stop shuts the server down and waits until it has gone. The server itself
// doesn't wait for the flushers of staged batches, which notice within
// milliseconds that they are to end.
func (e *embedded) stop() {
	e.server.Shutdown()
	e.server.WaitForShutdown()
	time.Sleep(flushersEnd)
}
