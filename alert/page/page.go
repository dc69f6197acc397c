// Package page serves what people look at: the alerts that need attention, all
// series, one series, one alert with the acts on it, and the state of the
// machine.
//
// # Model
//
// A Page answers from what the daemon has committed: alerts from the stores,
// looks from the engines between two messages, in bounded pieces. Where several
// processes share the partitions, those of others are read by asking their owners. Lists of
// series come from an index that is built anew, beside the engines, when
// somebody looks and something was committed since. Acts go into the stream as
// those of commands do, and carry a name.
//
// Every screen is one HTML text that needs no script. A script of our own asks
// for the same text again when the daemon says that something was committed
// (server-sent events), and puts its main part in place.
//
// # Caveats
//
// Who may look and act, and over which connection, is not decided here: put
// package gate before the handler. The handler sets no security headers.
package page

import (
	"context"
	"fmt"
	"net/http"
	"sync"
	"sync/atomic"
	"time"

	"tailbell/monitor"
)

// Person is who asks.
type Person struct {
	// Name under which acts are taken; "" where it is asked for.
	Name string
	// MayAct says whether acts are offered.
	MayAct bool
	// SignedIn says that the person can sign out.
	SignedIn bool
}

// Options are what a page shows, and how it acts.
type Options struct {
	// Name of the deployment.
	Name  string
	Parts []Part
	// PartOf is the number of the partition that a series belongs to.
	PartOf func(series string) int
	// Act takes an act and returns when it is committed. A *RefusedError says
	// why it was refused.
	Act func(ctx context.Context, act *monitor.Act) error
	// State is how the machine is doing.
	State func(ctx context.Context) (*State, error)
	// Who asks; nil for a machine of one's own, where everybody may act under
	// the name that they give.
	Who func(ctx context.Context) Person
	// Now tells the time.
	Now func() time.Time
	// Failed is told what went wrong that a person can't mend; nil for nobody.
	Failed func(err error)
}

// RefusedError says why an act was refused.
type RefusedError struct{ Why string }

func (e *RefusedError) Error() string { return e.Why }

// Page serves the screens. Close ends what it does in the background.
type Page struct {
	o         Options
	mux       *http.ServeMux
	index     index
	open      openAlerts
	past      pastAlerts
	news      news
	lastState lastState
	commits   atomic.Uint64
	changes   atomic.Uint64 // commits, and what was shown too old meanwhile
	debt      debt
	sent      sent
	work      sync.WaitGroup
	ctx       context.Context //nolint:containedctx // of the work in the background, which Close ends
	stop      context.CancelFunc
}

// New returns a page that reads what the options give.
func New(o Options) (*Page, error) {
	if o.Who == nil {
		o.Who = func(context.Context) Person { return Person{MayAct: true} }
	}
	if o.Failed == nil {
		o.Failed = func(error) {}
	}
	if len(o.Parts) == 0 || o.PartOf == nil || o.Act == nil || o.State == nil || o.Now == nil {
		return nil, fmt.Errorf("page: an option is missing")
	}
	p := &Page{o: o, mux: http.NewServeMux()}
	p.ctx, p.stop = context.WithCancel(context.Background())
	p.index.wake = make(chan struct{})
	p.past.ids = map[string][]string{}
	p.past.after = make([]uint64, len(o.Parts))
	for pattern, screen := range map[string]func(*http.Request) (*screen, error){
		"GET /{$}":         p.now,
		"GET /series":      p.list,
		"GET /series/one":  p.one,
		"GET /alerts":      p.record,
		"GET /alerts/{id}": p.alert,
		"GET /machine":     p.machine,
	} {
		p.mux.HandleFunc(pattern, func(w http.ResponseWriter, r *http.Request) { p.answer(w, r, screen) })
	}
	p.mux.HandleFunc("POST /alerts/{id}", p.act)
	p.mux.HandleFunc("GET /alerts.csv", p.export("csv", "text/csv; charset=utf-8; header=present"))
	p.mux.HandleFunc("GET /alerts.json", p.export("json", "application/json"))
	p.mux.HandleFunc("GET /live", p.live)
	p.mux.HandleFunc("GET /own/{version}/{file}", serveOwn)
	p.mux.HandleFunc("/", func(w http.ResponseWriter, r *http.Request) {
		p.answer(w, r, func(*http.Request) (*screen, error) {
			return nil, &problem{http.StatusNotFound, "There is no such page.", "What is served is linked above."}
		})
	})
	return p, nil
}

// ServeHTTP answers a request.
func (p *Page) ServeHTTP(w http.ResponseWriter, r *http.Request) { p.mux.ServeHTTP(w, r) }

// Committed tells the page that something was committed. It returns at once.
func (p *Page) Committed() {
	p.commits.Add(1)
	p.changes.Add(1)
	p.news.tell()
}

// debt is news that is owed to those who were shown something old.
type debt struct {
	mu   sync.Mutex
	owed bool
}

// owe tells the news again when what was now shown too old can be read anew.
func (p *Page) owe(after time.Duration) {
	p.debt.mu.Lock()
	defer p.debt.mu.Unlock()
	if p.debt.owed {
		return
	}
	p.debt.owed = true
	p.work.Go(func() {
		timer := time.NewTimer(after)
		defer timer.Stop()
		select {
		case <-timer.C:
		case <-p.ctx.Done():
		}
		p.debt.mu.Lock()
		p.debt.owed = false
		p.debt.mu.Unlock()
		p.changes.Add(1)
		p.news.tell()
	})
}

// Close ends the work in the background and waits for it.
func (p *Page) Close() {
	p.stop()
	p.work.Wait()
}
