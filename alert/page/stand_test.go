package page

import (
	"context"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"net/url"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

const standSetup = `name = "stand"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 200_000
memory = "8 GiB"
[[indicator]]
name = "fall"
title = "Falls"
noun = "falls"
series = ["*/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
zone = "Europe/Berlin"
events = "each"
settle = "1d"
horizon = "60d"
expect = "20d"
windows = ["7d", "28d"]
tails = ["upper", "lower"]
p_limit = 0.001
quiet = 5
[indicator.baseline]
kind = "reference"
events = 60
exposure = 12000
source = "invented"
`

// stand is a page over one partition: an engine and a store that the test
// feeds itself.
type stand struct {
	t      *testing.T
	page   *Page
	engine *monitor.Engine
	store  *store.Store
	zone   *time.Location
	now    time.Time
	person *Person // nil for whoever
	failed []error
	mu     sync.Mutex // of the engine and now
	away   bool       // the engine does not answer
	asked  int        // how often the engine was looked at
}

func newStand(t *testing.T) *stand {
	t.Helper()
	setup, err := config.Parse([]byte(standSetup), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	id := store.Identity{Deployment: "stand", Partitions: 1, KeyParts: 1}
	st, err := store.Create(filepath.Join(t.TempDir(), "s.store"), id, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	s := &stand{
		t: t, store: st, engine: monitor.New(monitor.Partition{Of: 1, KeyParts: 1}),
		zone: setup.Indicators[0].Zone, now: time.Date(2026, 4, 1, 9, 0, 0, 0, time.UTC),
	}
	s.page, err = New(Options{
		Name: "stand", Act: s.act, State: s.state, Now: s.clock,
		PartOf: func(string) int { return 0 },
		Who: func(context.Context) Person {
			if s.person != nil {
				return *s.person
			}
			return Person{MayAct: true}
		},
		Failed: func(err error) { s.failed = append(s.failed, err) },
		Parts: []Part{Here{Store: st, Do: func(_ context.Context, look func(*monitor.Engine)) error {
			s.mu.Lock()
			defer s.mu.Unlock()
			s.asked++
			if s.away {
				return context.DeadlineExceeded
			}
			look(s.engine)
			return nil
		}}},
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		s.page.Close()
		if err := st.Close(); err != nil {
			t.Error(err)
		}
		for _, err := range s.failed {
			t.Errorf("the page failed: %v", err)
		}
	})
	s.apply(&monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	return s
}

func (s *stand) clock() time.Time {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.now
}

// apply feeds one message, and commits it.
func (s *stand) apply(m *monitor.Message) {
	s.t.Helper()
	s.mu.Lock()
	m.Position = s.engine.Position() + 1
	s.engine.Apply(m)
	s.mu.Unlock()
	s.commit()
}

func (s *stand) commit() {
	s.t.Helper()
	s.mu.Lock()
	changes := s.engine.Drain()
	s.mu.Unlock()
	if err := s.store.Commit(changes, store.Mark{}); err != nil {
		s.t.Fatal(err)
	}
	s.mu.Lock()
	s.now = s.now.Add(time.Minute) // past what the page keeps for a moment
	s.mu.Unlock()
	s.page.Committed()
}

// day is one day of one ward.
func (s *stand) day(series string, n int, events int64, beds uint64) monitor.Item {
	begin := time.Date(2026, 1, 1+n, 0, 0, 0, 0, s.zone)
	return monitor.Item{Observation: monitor.Observation{
		Series: series, ID: fmt.Sprintf("%s-%d", strings.ReplaceAll(series, "/", "."), n),
		Start: monitor.InstantOf(begin), End: monitor.InstantOf(begin.AddDate(0, 0, 1)),
		Events: events, HasEvents: true, HasExposure: beds > 0, Exposure: config.Decimal{Coef: beds},
	}}
}

// days reports wards day by day: what falls says, and 20 bed-days each.
func (s *stand) days(from, to int, falls map[string]func(day int) int64) {
	s.t.Helper()
	for n := from; n < to; n++ {
		m := &monitor.Message{Kind: monitor.Observations, HasTime: true, Time: monitor.InstantOf(time.Date(2026, 1, 2+n, 0, 0, 0, 0, s.zone))}
		for _, ward := range []string{"east/ward-1/fall", "east/ward-2/fall", "quay/ward-9/fall"} {
			if f := falls[ward]; f != nil {
				m.Items = append(m.Items, s.day(ward, n, f(n), 20))
			}
		}
		s.apply(m)
	}
}

func usually(day int) int64 {
	if day%9 == 4 {
		return 1
	}
	return 0
}

// ring lets ward 2 ring, beside two that do not, one of which falls silent.
func (s *stand) ring() life.Record {
	s.t.Helper()
	s.days(0, 40, map[string]func(int) int64{"east/ward-1/fall": usually, "east/ward-2/fall": usually, "quay/ward-9/fall": usually})
	s.days(40, 66, map[string]func(int) int64{"east/ward-1/fall": usually, "east/ward-2/fall": func(n int) int64 {
		if n >= 55 {
			return 1
		}
		return 0
	}})
	records, _, err := s.page.standing(s.t.Context())
	records = slices.DeleteFunc(slices.Clone(records), func(r life.Record) bool { return r.Silence != nil })
	if err != nil || len(records) != 1 {
		s.t.Fatalf("%d alerts, %v", len(records), err)
	}
	return records[0]
}

func (s *stand) act(_ context.Context, act *monitor.Act) error {
	before := s.engine.Account().ActsRefused
	s.apply(&monitor.Message{Kind: monitor.ActMessage, Act: *act, HasTime: true, Time: s.engine.Clock()})
	if s.engine.Account().ActsRefused == before {
		return nil
	}
	rows, err := s.store.RefusedAt(s.engine.Position())
	if err != nil || len(rows) != 1 {
		return fmt.Errorf("%d refusals, %w", len(rows), err)
	}
	return &RefusedError{rows[0].Refusal.Detail}
}

func (s *stand) state(context.Context) (*State, error) {
	at := s.engine.Clock().Time()
	return &State{
		Connected: true, Embedded: true, Setup: "0123456789abcdef",
		Troubles: []Trouble{{Kind: "steps not delivered", Text: "3 steps wait for outlet hooks", Since: at}},
		Parts: []PartState{{
			Position: 1200, End: 1234, Clock: &at, History: true, Version: 1, Account: s.engine.Account(), Archive: "7 slots since 2026-01-01 (UTC)",
			Outlets: []OutletState{{Name: "hooks", Delivered: 7, PassedOver: 41, Waiting: 3, Trouble: "the receiver is away"}},
		}},
	}, nil
}

// get asks for a screen.
func (s *stand) get(target string) (int, string) {
	s.t.Helper()
	return s.do(httptest.NewRequestWithContext(s.t.Context(), http.MethodGet, target, nil))
}

func (s *stand) do(r *http.Request) (int, string) {
	s.t.Helper()
	w := httptest.NewRecorder()
	s.page.ServeHTTP(w, r)
	body, err := io.ReadAll(w.Result().Body)
	if err != nil {
		s.t.Fatal(err)
	}
	return w.Code, string(body)
}

// post sends a form.
func (s *stand) post(target string, form url.Values) *httptest.ResponseRecorder {
	s.t.Helper()
	r := httptest.NewRequestWithContext(s.t.Context(), http.MethodPost, target, strings.NewReader(form.Encode()))
	r.Header.Set("Content-Type", "application/x-www-form-urlencoded")
	w := httptest.NewRecorder()
	s.page.ServeHTTP(w, r)
	return w
}

// text is a page's text without its marks.
func text(html string) string {
	var b strings.Builder
	inside := false
	for _, c := range html {
		switch {
		case c == '<':
			inside = true
			b.WriteByte(' ')
		case c == '>':
			inside = false
		case !inside:
			b.WriteRune(c)
		}
	}
	return strings.Join(strings.Fields(b.String()), " ")
}
