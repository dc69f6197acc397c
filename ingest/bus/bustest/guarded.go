package bustest

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"math/big"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"

	"tailbell/config"
)

// Guarded is a server of somebody else's: over TLS with certificates on both
// sides, with the accounts and permissions of a configuration.
type Guarded struct {
	URL string
	// Folder holds the PEM files ca, client and client-key; a foreign
	// authority's are foreign and foreign-key.
	Folder string
	server *server.Server
}

// users are those of the documented configuration, with their passwords.
var users = map[string]string{
	"daemon": "owl-keeps-watch", "command": "hand-on-the-bell", "publisher": "count-me-in", "reader": "only-looking", "keeper": "lord-of-the-streams",
}

// Documented returns the configuration of a server that a document shows: its
// indented lines from the one that begins with "listen:" on.
func Documented(tb testing.TB, document string) string {
	tb.Helper()
	text, err := os.ReadFile(document)
	if err != nil {
		tb.Fatal(err)
	}
	_, rest, found := strings.Cut(string(text), "\n    listen:")
	if !found {
		tb.Fatalf("%s shows no configuration", document)
	}
	var b strings.Builder
	for line := range strings.SplitSeq("    listen:"+rest, "\n") {
		if line != "" && !strings.HasPrefix(line, "    ") {
			break
		}
		b.WriteString(line + "\n")
	}
	return b.String()
}

// StartGuarded starts a server of a documented configuration, on a loopback
// port and with a folder of its own.
func StartGuarded(tb testing.TB, configuration string) *Guarded {
	tb.Helper()
	g := &Guarded{Folder: tb.TempDir()}
	ours, foreign := newAuthority(tb), newAuthority(tb)
	g.write(tb, "ca", ours.der, nil)
	g.issue(tb, ours, "server")
	g.issue(tb, ours, "client")
	g.issue(tb, foreign, "foreign")
	for _, edit := range [][2]string{
		{`listen: "0.0.0.0:4222"`, `listen: "127.0.0.1:-1"`},
		{`"/var/lib/nats"`, `"` + filepath.Join(g.Folder, "store") + `"`},
		{`"server.pem"`, `"` + g.File("server") + `"`},
		{`"server-key.pem"`, `"` + g.File("server-key") + `"`},
		{`"clients-ca.pem"`, `"` + g.File("ca") + `"`},
	} {
		if !strings.Contains(configuration, edit[0]) {
			tb.Fatalf("the configuration has no %s:\n%s", edit[0], configuration)
		}
		configuration = strings.ReplaceAll(configuration, edit[0], edit[1])
	}
	for user, password := range users {
		configuration = strings.ReplaceAll(configuration, "$"+strings.ToUpper(user)+"_PASSWORD", `"`+password+`"`)
	}
	path := filepath.Join(g.Folder, "server.conf")
	if err := os.WriteFile(path, []byte(configuration), 0o600); err != nil {
		tb.Fatal(err)
	}
	options, err := server.ProcessConfigFile(path)
	if err != nil {
		tb.Fatalf("the configuration: %v\n%s", err, configuration)
	}
	options.NoSigs, options.NoLog = true, true
	if g.server, err = server.NewServer(options); err != nil {
		tb.Fatal(err)
	}
	g.server.Start()
	tb.Cleanup(func() {
		g.server.Shutdown()
		g.server.WaitForShutdown()
	})
	if !g.server.ReadyForConnections(10 * time.Second) {
		tb.Fatal("the guarded server is not ready")
	}
	g.URL = "tls://" + g.server.Addr().String()
	return g
}

// File is the path of one of the PEM files.
func (g *Guarded) File(name string) string { return filepath.Join(g.Folder, name+".pem") }

// Setup is a set-up by which a user connects.
func (g *Guarded) Setup(tb testing.TB, user string) *config.Setup {
	tb.Helper()
	setup := Setup(tb)
	setup.Bus = config.Bus{
		MaxBytes: 64 << 20, Replicas: 1, URL: g.URL, User: user, PasswordFile: g.PasswordFile(tb, user),
		CA: g.File("ca"), Cert: g.File("client"), Key: g.File("client-key"),
	}
	return setup
}

// PasswordFile writes the password of a user into a file.
func (g *Guarded) PasswordFile(tb testing.TB, user string) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), user)
	if err := os.WriteFile(path, []byte(users[user]+"\n"), 0o600); err != nil {
		tb.Fatal(err)
	}
	return path
}

// Connect connects a user as a program of somebody else's does; errors that
// the server reports go to the channel.
func (g *Guarded) Connect(tb testing.TB, user string) (*nats.Conn, <-chan error) {
	tb.Helper()
	reported := make(chan error, 100)
	nc, err := nats.Connect(g.URL, nats.UserInfo(user, users[user]), nats.RootCAs(g.File("ca")), nats.ClientCert(g.File("client"), g.File("client-key")),
		nats.CustomInboxPrefix("_INBOX."+user), nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) { reported <- err }))
	if err != nil {
		tb.Fatalf("connecting %s: %v", user, err)
	}
	tb.Cleanup(nc.Close)
	return nc, reported
}

// authority signs certificates for 127.0.0.1.
type authority struct {
	cert *x509.Certificate
	der  []byte
	key  *ecdsa.PrivateKey
}

func newAuthority(tb testing.TB) *authority {
	tb.Helper()
	key := newKey(tb)
	template := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "authority of a test"},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign,
	}
	der, err := x509.CreateCertificate(rand.Reader, template, template, key.Public(), key)
	if err != nil {
		tb.Fatal(err)
	}
	cert, err := x509.ParseCertificate(der)
	if err != nil {
		tb.Fatal(err)
	}
	return &authority{cert, der, key}
}

func newKey(tb testing.TB) *ecdsa.PrivateKey {
	tb.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		tb.Fatal(err)
	}
	return key
}

// issue writes a certificate, of which the name is the common name, and its
// key.
func (g *Guarded) issue(tb testing.TB, a *authority, name string) {
	tb.Helper()
	key := newKey(tb)
	template := &x509.Certificate{
		SerialNumber: big.NewInt(2), Subject: pkix.Name{CommonName: name},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, KeyUsage: x509.KeyUsageDigitalSignature,
		ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth, x509.ExtKeyUsageClientAuth},
	}
	der, err := x509.CreateCertificate(rand.Reader, template, a.cert, key.Public(), a.key)
	if err != nil {
		tb.Fatal(err)
	}
	raw, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		tb.Fatal(err)
	}
	g.write(tb, name, der, raw)
}

func (g *Guarded) write(tb testing.TB, name string, cert, key []byte) {
	tb.Helper()
	for path, block := range map[string]*pem.Block{
		g.File(name): {Type: "CERTIFICATE", Bytes: cert}, g.File(name + "-key"): {Type: "PRIVATE KEY", Bytes: key},
	} {
		if block.Bytes == nil {
			continue
		}
		if err := os.WriteFile(path, pem.EncodeToMemory(block), 0o600); err != nil {
			tb.Fatal(err)
		}
	}
}
