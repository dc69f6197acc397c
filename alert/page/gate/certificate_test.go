package gate

import (
	"crypto/tls"
	"io"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/config"
)

func TestCertificatesAreReadAgain(t *testing.T) {
	folder := t.TempDir()
	p := config.Page{Cert: filepath.Join(folder, "cert.pem"), Key: filepath.Join(folder, "key.pem")}
	ca := newAuthority(t)
	ca.issue(t, 2, p.Cert, p.Key)
	s, actor, _ := openUsers(t, p)
	s.roots = ca.pool()
	serial := func() int64 {
		conn, err := tls.Dial("tcp", s.server.Address(), &tls.Config{RootCAs: s.roots, MinVersion: tls.VersionTLS12})
		if err != nil {
			t.Fatal(err)
		}
		defer conn.Close() //nolint:errcheck // only looked at
		return conn.ConnectionState().PeerCertificates[0].SerialNumber.Int64()
	}
	if n := serial(); n != 2 {
		t.Errorf("serial number %d", n)
	}
	b := s.browser()
	if a := s.signIn(b, actor); a.status != 303 || !strings.HasPrefix(a.header.Get("Set-Cookie"), "__Host-tailbell-quillmere=") || !strings.Contains(a.header.Get("Set-Cookie"), "; Secure") {
		t.Errorf("%+v", a)
	}
	if a := s.ask(b, "GET", "/", ""); a.status != 200 {
		t.Errorf("%+v", a)
	}
	ca.issue(t, 3, p.Cert, p.Key)
	if n := serial(); n != 3 {
		t.Errorf("serial number %d after a change", n)
	}
	// Halfway through a change, and while there is none, the old one goes on.
	ca.issue(t, 4, p.Cert, filepath.Join(folder, "other.pem"))
	if n := serial(); n != 3 || !strings.Contains(s.log.String(), "goes on with the certificate that it has") {
		t.Errorf("serial number %d halfway through a change; the log:\n%s", n, s.log)
	}
	if err := os.Remove(p.Key); err != nil {
		t.Fatal(err)
	}
	if n := serial(); n != 3 {
		t.Errorf("serial number %d without a key", n)
	}
	ca.issue(t, 5, p.Cert, p.Key)
	if n := serial(); n != 5 {
		t.Errorf("serial number %d at the end", n)
	}
	if strings.Contains(s.log.String(), "PRIVATE") {
		t.Error("the log holds a key")
	}
}

func TestPlainRequestsGetNothingOverTLS(t *testing.T) {
	folder := t.TempDir()
	p := config.Page{Cert: filepath.Join(folder, "cert.pem"), Key: filepath.Join(folder, "key.pem")}
	newAuthority(t).issue(t, 2, p.Cert, p.Key)
	s, actor, _ := openUsers(t, p)
	s.page.Cert = "" // so that the request goes in the clear
	if a := s.ask(s.client(), "GET", "/", "", "Authorization", "Bearer "+actor); a.status != http.StatusBadRequest || strings.Contains(a.body, secretText) {
		t.Errorf("%+v", a)
	}
	// Old versions of TLS are refused.
	conn, err := (&tls.Dialer{Config: &tls.Config{InsecureSkipVerify: true, MinVersion: tls.VersionTLS10, MaxVersion: tls.VersionTLS11}}).DialContext(t.Context(), "tcp", s.server.Address())
	if err == nil {
		t.Error("TLS 1.1 was accepted", conn.Close())
	}
}

func TestCertificatesThatCannotServe(t *testing.T) {
	folder := t.TempDir()
	cert, key := filepath.Join(folder, "cert.pem"), filepath.Join(folder, "key.pem")
	listen := func() error {
		users := filepath.Join(t.TempDir(), "users")
		g, err := New(Options{Name: "a", Page: config.Page{Listen: "127.0.0.1:0", Cert: cert, Key: key, Users: users}})
		if err != nil {
			t.Fatal(err)
		}
		s, err := g.Listen(t.Context(), http.NotFoundHandler())
		if err == nil {
			t.Fatal("served", s.Close())
		}
		return err
	}
	if err := listen(); !os.IsNotExist(err) && !strings.Contains(err.Error(), "no such file") {
		t.Error(err)
	}
	newAuthority(t).issue(t, 2, cert, key)
	if err := os.Chmod(key, 0o644); err != nil {
		t.Fatal(err)
	}
	if err := listen(); !strings.Contains(err.Error(), "chmod 600") {
		t.Error(err)
	}
	if err := os.WriteFile(key, []byte("no key"), 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.Chmod(key, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := listen(); !strings.Contains(err.Error(), cert) {
		t.Error(err)
	}
}

func TestConnectionsAboveTheLimitAreClosed(t *testing.T) {
	inner, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	l := &limitListener{Listener: inner}
	l.mu.open = maxConnections - 1
	dial := func() net.Conn {
		conn, err := net.Dial("tcp", inner.Addr().String())
		if err != nil {
			t.Fatal(err)
		}
		return conn
	}
	first, second := dial(), dial()
	accepted, err := l.Accept()
	if err != nil {
		t.Fatal(err)
	}
	next := make(chan net.Conn)
	go func() {
		conn, err := l.Accept()
		if err != nil {
			t.Error(err)
		}
		next <- conn
	}()
	if _, err := second.Read(make([]byte, 1)); err == nil {
		t.Error("a connection too many was kept")
	}
	for range 2 { // closing twice makes room once
		accepted.Close() //nolint:errcheck // the second time it fails
	}
	third := dial()
	for _, c := range []io.Closer{<-next, first, second, third, inner} {
		c.Close() //nolint:errcheck // the end of the test
	}
	if l.mu.open != maxConnections-1 {
		t.Errorf("%d are counted as open", l.mu.open)
	}
}
