package outlet_test

import (
	"bufio"
	"bytes"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/base64"
	"encoding/pem"
	"errors"
	"fmt"
	"io"
	"math/big"
	"net"
	"net/mail"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"tailbell/alert/outlet/outlettest"
)

const (
	mailUser     = "tailbell"
	mailPassword = "hunter2-for-mail"
)

// letter is a message that the server took.
type letter struct {
	from    string
	to      []string
	data    []byte
	secure  bool
	checked bool // the sender has signed in
}

// mailServer is a mail server over real sockets: enough of RFC 5321, STARTTLS
// (RFC 3207) and AUTH PLAIN (RFC 4954).
type mailServer struct {
	t        *testing.T
	listener net.Listener
	secure   *tls.Config
	direct   bool // TLS from the first byte
	ca       string
	sessions sync.WaitGroup

	mu struct {
		sync.Mutex
		down    bool
		refuse  string // a recipient that is refused for good
		noTLS   bool   // STARTTLS is not offered
		letters []letter
	}
}

func newMailServer(t *testing.T, direct bool) *mailServer {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	s := &mailServer{t: t, listener: l, direct: direct}
	s.secure, s.ca = certificate(t)
	s.sessions.Go(s.accept)
	t.Cleanup(func() {
		if err := l.Close(); err != nil {
			t.Error(err)
		}
		s.sessions.Wait()
	})
	return s
}

// certificate makes one for 127.0.0.1 that is its own authority.
func certificate(t *testing.T) (*tls.Config, string) {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	form := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "mail.example.org"},
		NotBefore: time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC), NotAfter: time.Date(2100, 1, 1, 0, 0, 0, 0, time.UTC),
		IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, IsCA: true, BasicConstraintsValid: true,
		KeyUsage: x509.KeyUsageDigitalSignature | x509.KeyUsageCertSign, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
	}
	der, err := x509.CreateCertificate(rand.Reader, form, form, &key.PublicKey, key)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "ca.pem")
	if err := os.WriteFile(path, pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: der}), 0o600); err != nil {
		t.Fatal(err)
	}
	return &tls.Config{Certificates: []tls.Certificate{{Certificate: [][]byte{der}, PrivateKey: key}}}, path
}

func (s *mailServer) address() string { return s.listener.Addr().String() }

// Down lets the server hang up on everybody.
func (s *mailServer) Down(down bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.mu.down = down
}

func (s *mailServer) set(change func()) {
	s.mu.Lock()
	defer s.mu.Unlock()
	change()
}

func (s *mailServer) letters() []letter {
	s.mu.Lock()
	defer s.mu.Unlock()
	return append([]letter(nil), s.mu.letters...)
}

// Arrived returns the messages by their Message-ID.
func (s *mailServer) Arrived() []outlettest.Arrival {
	var all []outlettest.Arrival
	for _, l := range s.letters() {
		m, err := mail.ReadMessage(bytes.NewReader(l.data))
		if err != nil {
			s.t.Error(err)
			continue
		}
		all = append(all, outlettest.Arrival{ID: m.Header.Get("Message-Id"), Body: plainOf(s.t, l.data)})
	}
	return all
}

func (s *mailServer) accept() {
	for {
		conn, err := s.listener.Accept()
		if err != nil {
			return
		}
		s.sessions.Go(func() {
			session := &mailSession{server: s, conn: conn}
			if s.direct {
				session.conn, session.letter.secure = tls.Server(conn, s.secure), true
			}
			session.serve()
		})
	}
}

// mailSession is one connection.
type mailSession struct {
	server *mailServer
	conn   net.Conn
	in     *bufio.Reader
	letter letter
}

func (m *mailSession) serve() {
	defer func() { _ = m.conn.Close() }() //nolint:errcheck // the client may have gone
	m.server.mu.Lock()
	down := m.server.mu.down
	m.server.mu.Unlock()
	if down {
		return
	}
	m.in = bufio.NewReader(m.conn)
	m.say("220 mail.example.org ready")
	for {
		line, err := m.in.ReadString('\n')
		if err != nil || !m.answer(strings.TrimRight(line, "\r\n")) {
			return
		}
	}
}

func (m *mailSession) say(line string) {
	if _, err := io.WriteString(m.conn, line+"\r\n"); err != nil {
		m.server.t.Log(err)
	}
}

// answer answers one line and reports whether the session goes on.
func (m *mailSession) answer(line string) bool {
	s := m.server
	verb, rest, _ := strings.Cut(line, " ")
	switch strings.ToUpper(verb) {
	case "EHLO", "HELO":
		s.mu.Lock()
		offers := !m.letter.secure && !s.mu.noTLS
		s.mu.Unlock()
		m.say("250-mail.example.org")
		if offers {
			m.say("250-STARTTLS")
		}
		m.say("250 AUTH PLAIN")
	case "STARTTLS":
		m.say("220 go on")
		m.conn, m.letter.secure = tls.Server(m.conn, s.secure), true
		m.in = bufio.NewReader(m.conn)
	case "AUTH":
		if m.signIn(rest) {
			m.letter.checked = true
			m.say("235 welcome")
			return true
		}
		m.say("535 no")
	case "MAIL":
		m.letter.from, m.letter.to = rest, nil
		m.say("250 good")
	case "RCPT":
		s.mu.Lock()
		refuse := s.mu.refuse
		s.mu.Unlock()
		if refuse != "" && strings.Contains(rest, refuse) {
			m.say("550 nobody of that name\x1b[31m")
			return true
		}
		m.letter.to = append(m.letter.to, rest)
		m.say("250 good")
	case "DATA":
		m.say("354 go on")
		return m.take()
	case "RSET", "NOOP":
		m.say("250 good")
	case "QUIT":
		m.say("221 bye")
		return false
	default:
		m.say("502 unknown")
	}
	return true
}

func (m *mailSession) signIn(rest string) bool {
	_, coded, _ := strings.Cut(rest, " ")
	plain, err := base64.StdEncoding.DecodeString(coded)
	return err == nil && string(plain) == "\x00"+mailUser+"\x00"+mailPassword
}

// take reads a message to its end.
func (m *mailSession) take() bool {
	var data bytes.Buffer
	for {
		line, err := m.in.ReadString('\n')
		if err != nil {
			return false
		}
		if line == ".\r\n" {
			break
		}
		data.WriteString(strings.TrimPrefix(line, "."))
	}
	l := m.letter
	l.data = data.Bytes()
	m.server.set(func() { m.server.mu.letters = append(m.server.mu.letters, l) })
	m.say("250 taken")
	return true
}

var errNoPart = errors.New("no such part")

// describe tells a letter in a failure.
func (l letter) String() string {
	return fmt.Sprintf("from %s to %v, secure %v, signed in %v, %d bytes", l.from, l.to, l.secure, l.checked, len(l.data))
}
