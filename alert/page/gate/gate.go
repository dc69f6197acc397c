package gate

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"net/url"
	"os"
	"strings"
	"sync"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
)

const (
	// StreamTime is how long a stream of server-sent events may last, and
	// requestTime any other request.
	StreamTime  = 5 * time.Minute
	requestTime = 20 * time.Second
	// maxBody is how many bytes a request may carry.
	maxBody = 64 << 10
)

// Options say what a gate guards.
type Options struct {
	// Name of the deployment: its cookie goes by it.
	Name string
	// Page is the set-up's.
	Page config.Page
	// Now tells the time, by which sessions end.
	Now func() time.Time
	// Log is told who signs in and out, and of wrong tokens: names and
	// addresses, never a token.
	Log zerolog.Logger
	// Random gives the bytes of session cookies; nil for the system's.
	Random io.Reader
}

// Gate guards the page. Its methods may be used concurrently.
type Gate struct {
	o        Options
	near     bool // listens on this machine only
	secure   bool // people reach it over TLS
	host     string
	sites    *http.CrossOriginProtection
	sessions sessions
	throttle throttle
	mu       struct {
		sync.Mutex
		seen  os.FileInfo // of the file of users when it was last read
		users []User
		fault string // why it could not be read, once told
	}
}

// New returns the gate for a page. It fails where the page would be open to
// others, and where the file of users can't be read: later on that lets nobody
// in, and is logged.
func New(o Options) (*Gate, error) {
	g := &Gate{o: o, sites: http.NewCrossOriginProtection()}
	if g.o.Random == nil {
		g.o.Random = rand.Reader
	}
	host, _, err := net.SplitHostPort(o.Page.Listen)
	if err != nil {
		return nil, fmt.Errorf("the page's address: %w", err)
	}
	g.near = isNear(host)
	g.secure = o.Page.Cert != ""
	if o.Page.URL != "" {
		u, err := url.Parse(o.Page.URL)
		if err != nil {
			return nil, errors.New("the page's url is no address")
		}
		g.host, g.secure = u.Hostname(), u.Scheme == "https"
		if err := g.sites.AddTrustedOrigin(o.Page.URL); err != nil {
			return nil, fmt.Errorf("the page's url: %w", err)
		}
	}
	open := o.Page.Users == ""
	if elsewhere := !g.near || (g.host != "" && !isNear(g.host)); elsewhere && (open || !g.secure) {
		return nil, errors.New("the page would be open to others: away from loopback it needs TLS and users")
	}
	if !open {
		users, err := Book{o.Page.Users}.Users()
		if err != nil {
			return nil, err
		}
		if len(users) == 0 {
			o.Log.Warn().Str("users", o.Page.Users).Msg("nobody may sign in to the page yet: tailbell user add NAME adds a user")
		}
	}
	return g, nil
}

func isNear(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || (ip != nil && ip.IsLoopback())
}

// Person is who asks.
type Person struct {
	// Name is that of the user; empty where there are no users: an act's name
	// is asked for then.
	Name string
	Role Role
}

// Named reports whether the person has a name to act under.
func (p Person) Named() bool { return p.Name != "" }

// MayAct reports whether the person may act on alerts.
func (p Person) MayAct() bool { return p.Role == Act }

type personKey struct{}

// Of returns who asks, for a request that came through a Gate. Others may only
// look, and have no name.
func Of(ctx context.Context) Person {
	p, ok := ctx.Value(personKey{}).(Person)
	if !ok {
		return Person{Role: Read}
	}
	return p
}

// Guard returns a handler that lets through to next what may pass. What
// reaches next is of a person that Of knows, from no other site, for one of
// the page's own hosts, bounded in size and time, and if it is more than GET
// or HEAD, of a person who may act.
func (g *Gate) Guard(next http.Handler) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		setHeaders(w.Header())
		ctx, cancel := g.bound(w, r)
		defer cancel()
		r = r.WithContext(ctx)
		r.Body = http.MaxBytesReader(w, r.Body, maxBody)
		switch {
		case g.near && !g.knowsHost(r.Host):
			// Else a foreign name that is made to mean this machine would turn
			// a foreign page into one of ours.
			http.Error(w, "This is not the host that was asked for.", http.StatusMisdirectedRequest)
		case g.sites.Check(r) != nil || foreignPart(r):
			http.Error(w, "Requests from other sites are refused.", http.StatusForbidden)
		case g.o.Page.Users == "":
			g.pass(w, r, next, Person{Role: Act})
		default:
			g.admit(w, r, next)
		}
	})
}

// bound bounds the time of a request.
func (g *Gate) bound(w http.ResponseWriter, r *http.Request) (context.Context, context.CancelFunc) {
	if r.Method != http.MethodGet || r.Header.Get("Accept") != "text/event-stream" {
		return context.WithTimeout(r.Context(), requestTime)
	}
	ctx, end := context.WithTimeout(r.Context(), StreamTime)
	cancel := end
	if streams, ok := ctx.Value(streamsKey{}).(context.Context); ok {
		stop := context.AfterFunc(streams, end) // when the server closes
		cancel = func() { stop(); end() }
	}
	// A writer that knows no deadline has none to extend.
	if err := http.NewResponseController(w).SetWriteDeadline(g.o.Now().Add(StreamTime + requestTime)); err != nil {
		g.o.Log.Debug().Err(err).Msg("extending a stream's time")
	}
	return ctx, cancel
}

// knowsHost reports whether a Host header names this machine, or what the
// set-up calls it.
func (g *Gate) knowsHost(asked string) bool {
	host, _, err := net.SplitHostPort(asked)
	if err != nil {
		host = asked
	}
	host = strings.Trim(host, "[]")
	return isNear(host) || (g.host != "" && strings.EqualFold(host, g.host))
}

// foreignPart reports whether another site asks for a part of itself, such as
// a picture or a script: what it could learn from the answer's size or time is
// not for it. A link on another site is no part of it.
func foreignPart(r *http.Request) bool {
	site := r.Header.Get("Sec-Fetch-Site")
	if site != "cross-site" && site != "same-site" {
		return false
	}
	return r.Header.Get("Sec-Fetch-Mode") != "navigate" || (r.Header.Get("Sec-Fetch-Dest") != "document" && r.Header.Get("Sec-Fetch-Dest") != "")
}

// pass hands the request on, unless it would change something and the person
// may only look.
func (g *Gate) pass(w http.ResponseWriter, r *http.Request, next http.Handler, p Person) {
	if r.Method != http.MethodGet && r.Method != http.MethodHead && !p.MayAct() {
		http.Error(w, "You may look, but not act: the role act is needed.", http.StatusForbidden)
		return
	}
	next.ServeHTTP(w, r.WithContext(context.WithValue(r.Context(), personKey{}, p)))
}

// users returns who may sign in, as the file says now.
func (g *Gate) users() []User {
	g.mu.Lock()
	defer g.mu.Unlock()
	info, err := os.Stat(g.o.Page.Users)
	if err == nil && g.mu.seen != nil && sameFile(info, g.mu.seen) {
		return g.mu.users
	}
	users, readErr := Book{g.o.Page.Users}.Users()
	if err = errors.Join(ignoreMissing(err), readErr); err != nil {
		g.mu.users, g.mu.seen = nil, nil
		if fault := err.Error(); fault != g.mu.fault { // once for each
			g.mu.fault = fault
			g.o.Log.Error().Err(err).Msg("nobody can sign in to the page")
		}
		return nil
	}
	g.mu.users, g.mu.seen, g.mu.fault = users, info, ""
	return users
}

func ignoreMissing(err error) error {
	if errors.Is(err, os.ErrNotExist) {
		return nil
	}
	return err
}

// sameFile reports whether a file is as it was.
func sameFile(a, b os.FileInfo) bool {
	return os.SameFile(a, b) && a.Size() == b.Size() && a.ModTime().Equal(b.ModTime()) && a.Mode() == b.Mode()
}
