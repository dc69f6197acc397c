package page

import (
	"context"
	"encoding/json"
	"errors"
	"net/http"
	"net/http/httptest"
	"net/url"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/monitor"
)

// overTheBus is a partition that is read by messages.
func overTheBus(t *testing.T, here Here, largest *int) *Elsewhere {
	t.Helper()
	return &Elsewhere{Ask: func(ctx context.Context, q *Question) (*Reply, error) {
		data, err := json.Marshal(q)
		if err != nil {
			return nil, err
		}
		asked := &Question{}
		if err := json.Unmarshal(data, asked); err != nil {
			return nil, err
		}
		answer, err := Answer(ctx, here, asked)
		if err != nil {
			return nil, err
		}
		if data, err = json.Marshal(answer); err != nil {
			return nil, err
		}
		*largest = max(*largest, len(data))
		r := &Reply{}
		return r, json.Unmarshal(data, r)
	}}
}

// TestElsewhereLooksTheSame holds every screen of a partition in another process
// against the one of a partition that is here.
func TestElsewhereLooksTheSame(t *testing.T) {
	s := newStand(t)
	r := s.ring()
	s.apply(&monitor.Message{Kind: monitor.Observations, Items: []monitor.Item{{Reason: monitor.BadEvents, Detail: "events is -1", Raw: []byte("{}")}}})
	s.apply(&monitor.Message{Kind: monitor.Observations, HasTime: true, Time: s.engine.Clock(), Items: []monitor.Item{s.day("east/ward-3/fall", 64, 0, 0)}})
	here, ok := s.page.o.Parts[0].(Here)
	if !ok {
		t.Fatal("the stand's partition is not here")
	}
	o, largest := s.page.o, 0
	o.Parts = []Part{overTheBus(t, here, &largest)}
	other, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	defer other.Close()
	for _, target := range []string{
		"/", "/series", "/series?under=east", "/series?find=QUAY+fall", "/alerts", "/alerts?condition=unacknowledged", "/alerts/" + r.ID, "/machine",
		"/series/one?name=east/ward-2/fall", "/series/one?name=east/ward-3/fall&window=28d", "/series/one?name=quay/ward-9/fall&until=2026-02-01T00:00:00Z",
		"/series/one?name=nothing", "/alerts/nothing", "/alerts.csv", "/alerts.json",
	} {
		code, body := s.get(target)
		w := httptest.NewRecorder()
		other.ServeHTTP(w, httptest.NewRequestWithContext(t.Context(), http.MethodGet, target, nil))
		if w.Code != code {
			t.Errorf("%s: %d, want %d", target, w.Code, code)
		}
		if diff := cmp.Diff(text(body), text(w.Body.String())); diff != "" {
			t.Errorf("%s (-here +elsewhere):\n%s", target, diff)
		}
		if strings.Contains(body, "<svg") != strings.Contains(w.Body.String(), "<svg") {
			t.Errorf("%s: only one of the two has a picture", target)
		}
	}
	// An act that needs the other process's clock.
	form := url.Values{"act": {"shelve"}, "why": {"being worked on"}, "for": {"3d"}, "by": {"T. Averin"}}
	post := httptest.NewRequestWithContext(t.Context(), http.MethodPost, "/alerts/"+r.ID, strings.NewReader(form.Encode()))
	post.Header.Set("Content-Type", "application/x-www-form-urlencoded")
	w := httptest.NewRecorder()
	other.ServeHTTP(w, post)
	if w.Code != http.StatusSeeOther {
		t.Errorf("shelving: %d: %s", w.Code, text(w.Body.String()))
	}
	if largest > replyBytes {
		t.Errorf("a reply of %d bytes", largest)
	}
}

// TestRepliesHaveARoom reads more alerts than one reply holds.
func TestRepliesHaveARoom(t *testing.T) {
	s := newStand(t)
	r := s.ring()
	here, ok := s.page.o.Parts[0].(Here)
	if !ok {
		t.Fatal("the stand's partition is not here")
	}
	asked := 0
	p := &Elsewhere{Ask: func(ctx context.Context, q *Question) (*Reply, error) {
		asked++
		answer, err := Answer(ctx, here, q)
		if err == nil && len(answer.Alerts) > 1 { // as if each filled a reply
			answer.Alerts, answer.More = answer.Alerts[:1], true
		}
		return answer, err
	}}
	want, err := here.Alerts(t.Context(), AlertsWanted{}, 0, 10)
	if err != nil || len(want) < 2 {
		t.Fatalf("%d alerts, %v", len(want), err)
	}
	got, err := p.Alerts(t.Context(), AlertsWanted{}, 0, 10)
	if diff := cmp.Diff(want, got); err != nil || diff != "" || asked < len(want) {
		t.Errorf("%v after %d questions: %s", err, asked, diff)
	}
	if _, err := p.Alert(t.Context(), "nothing"); !isNotFound(err) {
		t.Errorf("an alert that is not there: %v", err)
	}
	if one, err := p.Alert(t.Context(), r.ID); err != nil || one.Record.ID != r.ID {
		t.Errorf("%v, %v", one.Record.ID, err)
	}
	away := errors.New("away")
	p.Ask = func(context.Context, *Question) (*Reply, error) { return nil, away }
	if _, err := p.See(t.Context(), &Sight{Series: "x"}); !errors.Is(err, away) {
		t.Errorf("an owner that is away: %v", err)
	}
}
