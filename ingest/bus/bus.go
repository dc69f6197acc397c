package bus

import (
	"context"
	"errors"
	"fmt"
	"os"
	"sync"
	"sync/atomic"
	"time"

	"tailbell/config"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/rs/zerolog"
)

const (
	connectTimeout = 10 * time.Second
	flushTimeout   = 5 * time.Second
	pingInterval   = 20 * time.Second
	fewReconnects  = 8 // some ten seconds
)

// State is the state of the connection to the bus.
type State int

// The states of the connection.
const (
	Connected State = iota
	Disconnected
	Closed
)

// String returns the state as shown to people.
func (s State) String() string {
	switch s {
	case Connected:
		return "connected"
	case Disconnected:
		return "disconnected"
	case Closed:
		return "closed"
	}
	return "unknown"
}

// Option changes how a Bus is opened.
type Option func(*options)

type options struct {
	noListener bool
	divides    bool
	log        zerolog.Logger
	onState    func(State, error)
}

// WithoutListener keeps an embedded bus off the network: no socket, no
// control.json. Nothing outside the process reaches it.
func WithoutListener() Option { return func(o *options) { o.noListener = true } }

// ToDivide opens a stream whose division is under way, too: see Divide.
func ToDivide() Option { return func(o *options) { o.divides = true } }

// WithLog gives the bus a logger. By default it logs nothing.
func WithLog(l zerolog.Logger) Option { return func(o *options) { o.log = l } }

// WithState calls f whenever the connection is lost (with the reason, if there
// is one), is back, or is closed. f must not block. A Bus that was just opened
// is connected; f is not called for that.
func WithState(f func(State, error)) Option { return func(o *options) { o.onState = f } }

func gather(opts []Option) options {
	o := options{log: zerolog.Nop(), onState: func(State, error) {}}
	for _, opt := range opts {
		opt(&o)
	}
	return o
}

// Bus is a connection to the bus of one deployment, and for the daemon of an
// embedded one the server itself. Its methods may be called concurrently.
type Bus struct {
	setup    *config.Setup
	names    names
	nc       *nats.Conn
	js       jetstream.JetStream
	closed   chan struct{} // closed when the connection is
	embedded *embedded     // nil for a remote bus and for clients
	lock     *lock         // nil for clients
	log      zerolog.Logger
	notes    []string
	atomic   bool         // the input stream takes atomic batches
	divides  bool         // a division under way is no obstacle
	layout   layout       // of the input stream; written while the bus is opened
	tries    atomic.Int64 // rounds of attempts to come back since the connection was lost
	denied   atomic.Pointer[denial]

	closing  sync.Once
	closeErr error
}

// Open takes the lock of the set-up's folder, starts the embedded bus or
// connects to the remote one, and sees to its streams. The folder is created
// if it is missing. If another process holds it the error is an ErrLocked.
func Open(ctx context.Context, setup *config.Setup, opts ...Option) (*Bus, error) {
	o := gather(opts)
	if err := checkName(setup.Name); err != nil {
		return nil, err
	}
	if err := os.MkdirAll(setup.Folder, 0o700); err != nil {
		return nil, fmt.Errorf("making the folder: %w", err)
	}
	l, err := takeLock(ctx, setup.Folder)
	if err != nil {
		return nil, err
	}
	b := newBus(setup, o)
	b.lock = l
	if err := b.open(ctx, o); err != nil {
		return nil, errors.Join(err, b.Close())
	}
	return b, nil
}

func newBus(setup *config.Setup, o options) *Bus {
	b := &Bus{
		setup:   setup,
		names:   names{setup.Name},
		closed:  make(chan struct{}),
		divides: o.divides,
		log:     o.log.With().Str("part", "bus").Logger(),
	}
	b.denied.Store(&denial{next: make(chan struct{})})
	return b
}

// open does what Open does once the lock is held.
func (b *Bus) open(ctx context.Context, o options) error {
	if err := removeEndpoint(b.setup.Folder); err != nil {
		return err
	}
	if b.setup.Bus.URL != "" {
		if err := b.connectRemote(o); err != nil {
			return err
		}
		return b.ensureStreams(ctx, false)
	}
	e, err := startServer(b.setup, o, b.log)
	if err != nil {
		return err
	}
	b.embedded = e
	if err := b.connect("", e.connectOptions(), o); err != nil {
		return fmt.Errorf("connecting to the embedded bus: %w", err)
	}
	if err := b.ensureStreams(ctx, true); err != nil {
		return err
	}
	if o.noListener {
		return nil
	}
	return endpoint{
		Format: endpointFormat, Deployment: b.setup.Name, PID: os.Getpid(),
		URL: "nats://" + e.server.Addr().String(), User: e.visitor.user, Password: e.visitor.password,
	}.write(b.setup.Folder)
}

// Dial connects as a client: to the embedded bus of the daemon that runs on
// the set-up's folder, or to the remote bus. For the embedded bus the error is
// an ErrNoDaemon if no process holds the folder's lock.
func Dial(ctx context.Context, setup *config.Setup, opts ...Option) (*Bus, error) {
	o := gather(opts)
	if err := checkName(setup.Name); err != nil {
		return nil, err
	}
	b := newBus(setup, o)
	err := b.dial(ctx, o)
	if err != nil {
		return nil, errors.Join(err, b.Close())
	}
	return b, nil
}

func (b *Bus) dial(ctx context.Context, o options) error {
	if b.setup.Bus.URL != "" {
		if err := b.connectRemote(o); err != nil {
			return err
		}
		return b.ensureStreams(ctx, false)
	}
	e, err := readEndpoint(b.setup.Folder)
	if err == nil {
		err = b.connect(e.URL, []nats.Option{
			nats.UserInfo(e.User, e.Password),
			// A daemon that starts again has another port and other
			// credentials: there is no use in waiting long.
			nats.MaxReconnects(fewReconnects),
		}, o)
	}
	if err != nil {
		return b.explain(err)
	}
	if e.Deployment != b.setup.Name {
		return fmt.Errorf("the daemon on %s runs the deployment %q, not %q: "+
			"use its own set-up", b.setup.Folder, e.Deployment, b.setup.Name)
	}
	return b.checkStreams(ctx)
}

// explain says why a daemon can't be reached: there is none, or there is one
// that doesn't answer.
func (b *Bus) explain(cause error) error {
	held, pid, err := locked(b.setup.Folder)
	switch {
	case err != nil:
		return errors.Join(cause, err)
	case !held:
		return fmt.Errorf("%w on %s", ErrNoDaemon, b.setup.Folder)
	case errors.Is(cause, os.ErrNotExist):
		return fmt.Errorf("process %d holds %s but offers no way in: "+
			"it is starting or stopping, try again", pid, b.setup.Folder)
	}
	return fmt.Errorf("the daemon (process %d) can't be reached: %w", pid, cause)
}

func (b *Bus) connectRemote(o options) error {
	opts, err := remoteOptions(b.setup.Bus)
	if err != nil {
		return err
	}
	if err := b.connect(b.setup.Bus.URL, opts, o); err != nil {
		return fmt.Errorf("connecting to the bus at %s: %w", shown(b.setup.Bus.URL), err)
	}
	return nil
}

// connect makes the connection. Once made it comes back by itself, however
// long the bus was away, unless opts say otherwise.
func (b *Bus) connect(url string, opts []nats.Option, o options) error {
	wait := newBackoff()
	base := []nats.Option{
		nats.Name("tailbell " + b.setup.Name),
		nats.CustomInboxPrefix(b.names.inbox()),
		nats.Timeout(connectTimeout),
		nats.PingInterval(pingInterval),
		nats.MaxReconnects(-1),
		nats.IgnoreAuthErrorAbort(),
		nats.CustomReconnectDelay(func(n int) time.Duration {
			b.tries.Store(int64(n))
			return wait.delay(n)
		}),
		nats.DisconnectErrHandler(func(nc *nats.Conn, err error) {
			if !nc.IsClosed() {
				o.onState(Disconnected, err)
			}
		}),
		nats.ReconnectHandler(func(*nats.Conn) {
			b.tries.Store(0)
			o.onState(Connected, nil)
		}),
		nats.ClosedHandler(func(nc *nats.Conn) {
			o.onState(Closed, nc.LastError())
			close(b.closed)
		}),
		nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) {
			if errors.Is(err, nats.ErrSlowConsumer) {
				// A backlog came faster than it is taken. Sources see the gap and
				// read on after what they handed out.
				b.log.Debug().Err(err).Msg("reading again what did not fit")
				return
			}
			b.noteDenial(err)
			b.log.Warn().Err(err).Msg("the connection to the bus reports an error")
		}),
	}
	nc, err := nats.Connect(url, append(base, opts...)...)
	if err != nil {
		return err
	}
	b.nc = nc
	b.js, err = jetstream.New(nc)
	return err
}

// Close lets what is under way end, closes the connection, shuts an embedded
// server down and waits for it, and lets go of the folder. It may be called
// again.
func (b *Bus) Close() error {
	b.closing.Do(func() { b.closeErr = b.close() })
	return b.closeErr
}

func (b *Bus) close() error {
	var errs []error
	if b.lock != nil {
		errs = append(errs, removeEndpoint(b.setup.Folder))
	}
	if b.nc != nil {
		b.flush()
		b.nc.Close()
		<-b.closed
	}
	if b.embedded != nil {
		b.embedded.stop()
	}
	if b.lock != nil {
		errs = append(errs, b.lock.release())
	}
	return errors.Join(errs...)
}

// flush sends what is still in the connection's buffer. Everything that must
// arrive has been acknowledged before: what is left are last requests and
// replies, and nothing is lost with them.
func (b *Bus) flush() {
	if !b.nc.IsConnected() {
		return
	}
	ctx, cancel := context.WithTimeout(context.Background(), flushTimeout)
	defer cancel()
	if err := b.nc.FlushWithContext(ctx); err != nil {
		b.log.Debug().Err(err).Msg("flushing the connection before it is closed")
	}
}

// Conn is the connection, for request and reply.
func (b *Bus) Conn() *nats.Conn { return b.nc }

// Connected reports whether the connection is up.
func (b *Bus) Connected() bool { return b.nc.IsConnected() }

// Tries is how often it was tried in vain to come back since the connection was
// lost, 0 while it is up.
func (b *Bus) Tries() int { return int(b.tries.Load()) }

// Embedded reports whether the server runs in this process.
func (b *Bus) Embedded() bool { return b.embedded != nil }

// Broken says why the embedded server stores nothing any more, "" if it does:
// after a disk was full or a write failed it refuses every message until it is
// started again.
func (b *Bus) Broken() string {
	if b.embedded == nil {
		return ""
	}
	return b.embedded.log.broken()
}

// Notes name the settings of existing streams that differ from the set-up
// without harm.
func (b *Bus) Notes() []string { return b.notes }

// MemberSubject is the subject on which one of several daemons that share the
// deployment answers the verb to the others.
func (b *Bus) MemberSubject(member, verb string) string {
	return b.names.control(token(member) + "." + verb)
}

// ControlSubject is the subject on which a daemon answers the verb.
func (b *Bus) ControlSubject(verb string) string { return b.names.control(verb) }
