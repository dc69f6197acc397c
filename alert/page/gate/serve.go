package gate

import (
	"context"
	"errors"
	"fmt"
	"io"
	stdlog "log"
	"net"
	"net/http"
	"sync"
	"time"

	"github.com/rs/zerolog"
)

const (
	// headerTime is how long a request's head may take, bodyTime all of it,
	// writeTime its answer, and idleTime a connection may wait for the next.
	headerTime = 5 * time.Second
	bodyTime   = 15 * time.Second
	writeTime  = requestTime + 10*time.Second
	idleTime   = 2 * time.Minute
	// maxHeader is how many bytes a request's head may have.
	maxHeader = 16 << 10
	// maxConnections is how many connections are open at once; a further one
	// is closed at once, so that the page never takes the files that the store
	// and the bus need.
	maxConnections = 1000
	// closeTime is how long requests may go on when the server closes.
	closeTime = 3 * time.Second
)

// Server serves the page behind its gate.
type Server struct {
	server     *http.Server
	address    string
	log        zerolog.Logger
	done       chan struct{}
	endStreams context.CancelFunc
}

// streamsKey finds the context that ends with the server's streams.
type streamsKey struct{}

// Listen begins to serve the page at the set-up's address: handler behind
// Guard, over TLS where there is a certificate. It ends with Close.
func (g *Gate) Listen(ctx context.Context, handler http.Handler) (*Server, error) {
	p := g.o.Page
	if !p.Served() {
		return nil, errNoPage
	}
	var cert *certificate
	if p.Cert != "" {
		var err error
		if cert, err = loadCertificate(p.Cert, p.Key, g.o.Log); err != nil {
			return nil, err
		}
	}
	var lc net.ListenConfig
	inner, err := lc.Listen(ctx, "tcp", p.Listen)
	if err != nil {
		return nil, fmt.Errorf("the page at %s: %w: another daemon may hold it; give another address as listen in [page]", p.Listen, err)
	}
	s := g.start(ctx, inner, handler, cert)
	g.o.Log.Info().Str("address", s.address).Bool("tls", cert != nil).Bool("users", p.Users != "").Msg("page")
	return s, nil
}

// start serves what comes to a listener.
func (g *Gate) start(ctx context.Context, inner net.Listener, handler http.Handler, cert *certificate) *Server {
	ctx = context.WithoutCancel(ctx)
	streams, end := context.WithCancel(ctx)
	s := &Server{address: inner.Addr().String(), log: g.o.Log, done: make(chan struct{}), endStreams: end}
	s.server = &http.Server{
		Handler:           g.Guard(handler),
		ReadHeaderTimeout: headerTime, ReadTimeout: bodyTime, WriteTimeout: writeTime, IdleTimeout: idleTime,
		MaxHeaderBytes: maxHeader,
		BaseContext:    func(net.Listener) context.Context { return context.WithValue(ctx, streamsKey{}, streams) },
		ErrorLog:       stdlog.New(debugWriter{g.o.Log}, "", 0),
	}
	listener := &limitListener{Listener: inner}
	go func() {
		defer close(s.done)
		err := s.serve(listener, cert)
		if !errors.Is(err, http.ErrServerClosed) {
			s.log.Error().Err(err).Msg("serving the page")
		}
	}()
	return s
}

func (s *Server) serve(listener net.Listener, cert *certificate) error {
	if cert == nil {
		return s.server.Serve(listener)
	}
	s.server.TLSConfig = cert.config()
	return s.server.ServeTLS(listener, "", "")
}

// Address is where the server listens: HOST:PORT.
func (s *Server) Address() string { return s.address }

// Close stops to listen, ends streams, and lets other requests end for a
// moment.
func (s *Server) Close() error {
	s.endStreams()
	ctx, cancel := context.WithTimeout(context.Background(), closeTime)
	defer cancel()
	err := s.server.Shutdown(ctx)
	if errors.Is(err, context.DeadlineExceeded) {
		err = s.server.Close()
	}
	<-s.done
	return err
}

// debugWriter takes what the HTTP server has to say, which is about single
// connections: handshakes that failed, and the like.
type debugWriter struct{ log zerolog.Logger }

var _ io.Writer = debugWriter{}

func (w debugWriter) Write(line []byte) (int, error) {
	w.log.Debug().Bytes("http", line).Msg("a connection to the page")
	return len(line), nil
}

// limitListener closes connections above a number at once.
type limitListener struct {
	net.Listener
	mu struct {
		sync.Mutex
		open int
	}
}

// Accept returns the next connection that there is room for.
func (l *limitListener) Accept() (net.Conn, error) {
	for {
		conn, err := l.Listener.Accept()
		if err != nil {
			return nil, err
		}
		if l.enter() {
			return &limitConn{Conn: conn, leave: sync.OnceFunc(l.leave)}, nil
		}
		if err := conn.Close(); err != nil {
			continue // it was gone already
		}
	}
}

func (l *limitListener) enter() bool {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.mu.open >= maxConnections {
		return false
	}
	l.mu.open++
	return true
}

func (l *limitListener) leave() {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.mu.open--
}

// limitConn makes room when it closes.
type limitConn struct {
	net.Conn
	leave func()
}

// Close closes the connection.
func (c *limitConn) Close() error {
	c.leave()
	return c.Conn.Close()
}
