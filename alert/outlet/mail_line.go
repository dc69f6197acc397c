package outlet

import (
	"context"
	"crypto/tls"
	"errors"
	"net"
	"slices"
	"strings"
	"sync"

	"github.com/wneessen/go-mail"
	"github.com/wneessen/go-mail/smtp"

	"tailbell/config"
)

// mailLine is the connection of one try, which ends with it.
type mailLine struct {
	mu   sync.Mutex
	conn net.Conn
	over bool
}

func (l *mailLine) take(conn net.Conn) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.conn = conn
	if l.over {
		_ = conn.Close() //nolint:errcheck // nothing was said on it
	}
}

func (l *mailLine) close() {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.over = true
	if l.conn != nil {
		_ = l.conn.Close() //nolint:errcheck // what was said on it stands or falls with its answer
	}
}

// dial connects, with TLS from the first byte where the set-up says so.
func (m *Mail) dial(line *mailLine, secure *tls.Config, way config.MailTLS) mail.DialContextFunc {
	return func(ctx context.Context, network, address string) (conn net.Conn, err error) {
		if way == config.DirectTLS {
			d := tls.Dialer{NetDialer: &m.dialer, Config: secure}
			conn, err = d.DialContext(ctx, network, address)
		} else {
			conn, err = m.dialer.DialContext(ctx, network, address)
		}
		if err == nil {
			line.take(conn)
		}
		return conn, err
	}
}

// signIn signs in by the best way that the server offers.
type signIn struct {
	user, password, host string
	// clear allows it without TLS, on this machine.
	clear  bool
	chosen smtp.Auth
}

// Start chooses the way.
func (s *signIn) Start(server *smtp.ServerInfo) (string, []byte, error) {
	offers := func(way string) bool {
		return slices.ContainsFunc(server.Auth, func(o string) bool { return strings.EqualFold(o, way) })
	}
	switch {
	case !server.TLS && !s.clear:
		return "", nil, errors.New("a password is not sent in the clear")
	case offers("SCRAM-SHA-256"):
		s.chosen = smtp.ScramSHA256Auth(s.user, s.password)
	case offers("PLAIN"):
		s.chosen = smtp.PlainAuth("", s.user, s.password, s.host, s.clear)
	case offers("LOGIN"):
		s.chosen = smtp.LoginAuth(s.user, s.password, s.host, s.clear)
	default:
		return "", nil, errors.New("the server offers no way to sign in that is known here: SCRAM-SHA-256, PLAIN or LOGIN")
	}
	return s.chosen.Start(server)
}

// Next answers the server.
func (s *signIn) Next(fromServer []byte, more bool) ([]byte, error) {
	return s.chosen.Next(fromServer, more)
}
