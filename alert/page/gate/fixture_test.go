package gate

import (
	"bytes"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"io"
	"math/big"
	"net"
	"net/http"
	"net/http/cookiejar"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
)

// secretText is what nobody may see who is not let in.
const secretText = "four line infections on ward 3"

// stand is a gate that serves over real sockets.
type stand struct {
	t      *testing.T
	gate   *Gate
	server *Server
	page   config.Page
	log    *safeBuffer
	roots  *x509.CertPool
	now    time.Time
	// acted counts the requests that reached the page and would have changed
	// something, by who sent them.
	mu    sync.Mutex
	acted []Person
}

// safeBuffer is a log that may be written to and read at once.
type safeBuffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (b *safeBuffer) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.Write(p)
}

func (b *safeBuffer) String() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.String()
}

// open begins to serve. The zero config.Page is one on loopback.
func open(t *testing.T, p config.Page) *stand {
	t.Helper()
	if p.Listen == "" {
		p.Listen = "127.0.0.1:0"
	}
	s := &stand{t: t, page: p, log: &safeBuffer{}, now: time.Now()}
	var err error
	s.gate, err = New(Options{Name: "quillmere", Page: p, Now: func() time.Time { return s.now }, Log: zerolog.New(s.log)})
	if err != nil {
		t.Fatal(err)
	}
	s.server, err = s.gate.Listen(t.Context(), s)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := s.server.Close(); err != nil {
			t.Error(err)
		}
	})
	return s
}

// openUsers begins to serve to users, and returns the tokens of one who may
// act and one who may look.
func openUsers(t *testing.T, p config.Page) (s *stand, actor, reader string) {
	t.Helper()
	p.Users = filepath.Join(t.TempDir(), "users")
	actor = addUser(t, p.Users, "Asha Venn", Act)
	reader = addUser(t, p.Users, "audit", Read)
	return open(t, p), actor, reader
}

func addUser(t *testing.T, path, name string, role Role) string {
	t.Helper()
	token, err := Book{path}.Add(name, role, time.Now(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	return token
}

// ServeHTTP is the page: one with something to see, something to do, and
// nothing else.
func (s *stand) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	if r.URL.Path == "/missing" {
		http.NotFound(w, r)
		return
	}
	if r.Method == http.MethodPost {
		if _, err := io.ReadAll(r.Body); err != nil {
			http.Error(w, err.Error(), http.StatusRequestEntityTooLarge)
			return
		}
		s.mu.Lock()
		s.acted = append(s.acted, Of(r.Context()))
		s.mu.Unlock()
	}
	if _, err := io.WriteString(w, secretText+" for "+Of(r.Context()).Name); err != nil {
		s.t.Error(err)
	}
}

func (s *stand) acts() []Person {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.acted
}

// url is the address of a path.
func (s *stand) url(path string) string {
	scheme := "http://"
	if s.page.Cert != "" {
		scheme = "https://"
	}
	return scheme + s.server.Address() + path
}

// browser returns a client with cookies that follows no redirects.
func (s *stand) browser() *http.Client {
	jar, err := cookiejar.New(nil)
	if err != nil {
		s.t.Fatal(err)
	}
	c := s.client()
	c.Jar = jar
	return c
}

func (s *stand) client() *http.Client {
	transport := &http.Transport{TLSClientConfig: &tls.Config{RootCAs: s.roots, MinVersion: tls.VersionTLS12}}
	s.t.Cleanup(transport.CloseIdleConnections)
	return &http.Client{
		Transport:     transport,
		CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
	}
}

// answer is what a request got.
type answer struct {
	status int
	header http.Header
	body   string
}

// ask sends a request; header holds names and values in turn.
func (s *stand) ask(c *http.Client, method, path, body string, header ...string) answer {
	s.t.Helper()
	req, err := http.NewRequestWithContext(s.t.Context(), method, s.url(path), strings.NewReader(body))
	if err != nil {
		s.t.Fatal(err)
	}
	for i := 0; i < len(header); i += 2 {
		if header[i] == "Host" {
			req.Host = header[i+1]
			continue
		}
		req.Header.Add(header[i], header[i+1])
	}
	resp, err := c.Do(req)
	if err != nil {
		s.t.Fatal(err)
	}
	text, err := io.ReadAll(resp.Body)
	if err != nil {
		s.t.Fatal(err)
	}
	if err := resp.Body.Close(); err != nil {
		s.t.Error(err)
	}
	return answer{resp.StatusCode, resp.Header, string(text)}
}

const (
	formType = "application/x-www-form-urlencoded"
	html     = "text/html,application/xhtml+xml"
)

// signIn signs a browser in.
func (s *stand) signIn(c *http.Client, token string) answer {
	s.t.Helper()
	return s.ask(c, http.MethodPost, SignInPath, "token="+token+"&to=%2Falert%2Fa1", "Content-Type", formType, "Sec-Fetch-Site", "same-origin")
}

// authority signs certificates for tests.
type authority struct {
	cert *x509.Certificate
	key  *ecdsa.PrivateKey
}

func newAuthority(t *testing.T) *authority {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	template := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "authority of a test"},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign,
	}
	der, err := x509.CreateCertificate(rand.Reader, template, template, &key.PublicKey, key)
	if err != nil {
		t.Fatal(err)
	}
	cert, err := x509.ParseCertificate(der)
	if err != nil {
		t.Fatal(err)
	}
	return &authority{cert, key}
}

func (a *authority) pool() *x509.CertPool {
	pool := x509.NewCertPool()
	pool.AddCert(a.cert)
	return pool
}

// issue writes a certificate for this machine and its key.
func (a *authority) issue(t *testing.T, serial int64, certFile, keyFile string) {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	template := &x509.Certificate{
		SerialNumber: big.NewInt(serial), Subject: pkix.Name{CommonName: "page of a test"},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		DNSNames: []string{"localhost"}, IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)},
	}
	der, err := x509.CreateCertificate(rand.Reader, template, a.cert, &key.PublicKey, a.key)
	if err != nil {
		t.Fatal(err)
	}
	raw, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		t.Fatal(err)
	}
	writePEM(t, keyFile, "PRIVATE KEY", raw)
	writePEM(t, certFile, "CERTIFICATE", der)
}

func writePEM(t *testing.T, path, kind string, der []byte) {
	t.Helper()
	if err := os.WriteFile(path, pem.EncodeToMemory(&pem.Block{Type: kind, Bytes: der}), 0o600); err != nil {
		t.Fatal(err)
	}
}
