package bus_test

import (
	"errors"
	"os"
	"strings"
	"testing"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"

	"github.com/nats-io/jwt/v2"
	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nkeys"
)

// issuer signs the claims of those below it.
type issuer struct {
	pair   nkeys.KeyPair
	public string
}

func newIssuer(t *testing.T, create func() (nkeys.KeyPair, error)) issuer {
	t.Helper()
	pair, err := create()
	if err != nil {
		t.Fatal(err)
	}
	public, err := pair.PublicKey()
	if err != nil {
		t.Fatal(err)
	}
	return issuer{pair, public}
}

func (i issuer) sign(t *testing.T, claims jwt.Claims) string {
	t.Helper()
	token, err := claims.Encode(i.pair)
	if err != nil {
		t.Fatal(err)
	}
	return token
}

// credentialsFile writes the credentials of a user that the account signs.
func (i issuer) credentialsFile(t *testing.T, until time.Time, publish, subscribe []string) string {
	t.Helper()
	user := newIssuer(t, nkeys.CreateUser)
	claims := jwt.NewUserClaims(user.public)
	claims.Expires = until.Unix()
	claims.Pub.Allow.Add(publish...)
	claims.Sub.Allow.Add(subscribe...)
	claims.Resp = &jwt.ResponsePermission{MaxMsgs: 1, Expires: time.Minute}
	seed, err := user.pair.Seed()
	if err != nil {
		t.Fatal(err)
	}
	text, err := jwt.FormatUserConfig(i.sign(t, claims), seed)
	if err != nil {
		t.Fatal(err)
	}
	return write(t, "daemon.creds", string(text))
}

// TestCredentialsFile connects by credentials to a server that trusts an
// operator alone, with the documented permissions in the user's own claims.
func TestCredentialsFile(t *testing.T) {
	operator, account := newIssuer(t, nkeys.CreateOperator), newIssuer(t, nkeys.CreateAccount)
	system := newIssuer(t, nkeys.CreateAccount)
	claims := jwt.NewAccountClaims(account.public)
	claims.Limits.JetStreamLimits = jwt.JetStreamLimits{DiskStorage: 2 << 30, MemoryStorage: 1 << 20, Streams: -1, Consumer: -1}
	trusted, err := jwt.DecodeOperatorClaims(operator.sign(t, jwt.NewOperatorClaims(operator.public)))
	if err != nil {
		t.Fatal(err)
	}
	resolver := &server.MemAccResolver{}
	for of, token := range map[string]string{
		account.public: operator.sign(t, claims), system.public: operator.sign(t, jwt.NewAccountClaims(system.public)),
	} {
		if err := resolver.Store(of, token); err != nil {
			t.Fatal(err)
		}
	}
	r := startRemote(t, func(o *server.Options) {
		o.Username, o.Password = "", ""
		o.TrustedOperators, o.AccountResolver, o.SystemAccount = []*jwt.OperatorClaims{trusted}, resolver, system.public
	})
	publishes := []string{
		"quillmere.in.*.*", "quillmere.alert.>", "$JS.API.STREAM.INFO.*", "$JS.API.STREAM.CREATE.*", "$JS.API.STREAM.MSG.GET.quillmere-in",
		"$JS.API.CONSUMER.CREATE.quillmere-in.>", "$JS.API.CONSUMER.MSG.NEXT.quillmere-in.*", "$JS.API.CONSUMER.DELETE.quillmere-in.*",
	}
	listens := []string{"_INBOX.quillmere.>", "quillmere.control.*"}
	setup := bustest.Setup(t)
	setup.Bus.URL = "nats://" + r.server.Addr().String()
	later := time.Now().Add(time.Hour)
	setup.Bus.Credentials = account.credentialsFile(t, later, publishes, listens)
	b := open(t, setup)
	publish(t, b, 0, 1, 100)
	expect(t, read(t, source(t, b, 0, 0), 100, 100), 1)

	for name, file := range map[string]string{
		"expired":           account.credentialsFile(t, time.Now().Add(-time.Minute), publishes, listens),
		"another account's": newIssuer(t, nkeys.CreateAccount).credentialsFile(t, later, publishes, listens),
		"no credentials":    write(t, "daemon.creds", "nothing of the kind"),
	} {
		setup.Bus.Credentials = file
		other, err := bus.Dial(t.Context(), setup)
		if err == nil {
			t.Fatal(name, "connects", other.Close())
		}
		if text, readErr := os.ReadFile(file); readErr != nil || strings.Contains(err.Error(), string(text)) {
			t.Errorf("%s: %v", name, errors.Join(err, readErr))
		}
	}
	setup.Bus.Credentials = account.credentialsFile(t, later, []string{"quillmere.control.*"}, listens)
	if _, err := bus.Dial(deadline(t), setup); !errors.Is(err, bus.ErrNotAllowed) || !strings.Contains(err.Error(), "$JS.API.STREAM.INFO.quillmere-in") {
		t.Errorf("less is allowed: %v", err)
	}
}
