package main

import (
	"encoding/base64"
	"encoding/json"
	"fmt"
	"io"
	"math/rand/v2"
	"net/http"
	"net/http/httptest"
	"strings"
	"sync"
	"testing"
	"time"

	"tailbell/alert/outlet"
	"tailbell/monitor/life"
)

const ordealSecret = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"

// delivery is one step as an outlet delivered it.
type delivery struct {
	alert string
	step  int
	text  string
}

// receiver is what a webhook posts to. It fails, hangs, and breaks off at
// random.
type receiver struct {
	t      *testing.T
	server *httptest.Server
	mu     sync.Mutex
	random *rand.Rand
	tame   bool // no faults any more
	took   []delivery
	faults int
}

func newReceiver(t *testing.T, seed uint64) *receiver {
	t.Helper()
	r := &receiver{t: t, random: rand.New(rand.NewPCG(seed, 3))}
	r.server = httptest.NewServer(http.HandlerFunc(r.serve))
	t.Cleanup(r.server.Close)
	return r
}

// serve takes a step, or fails before or after it did.
func (r *receiver) serve(w http.ResponseWriter, req *http.Request) {
	body, err := io.ReadAll(req.Body)
	if err != nil {
		return // the daemon was killed
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	fault := r.random.IntN(60)
	if r.tame {
		fault = 60
	}
	if fault < 4 {
		r.faults++
	}
	switch fault {
	case 0:
		w.WriteHeader(http.StatusServiceUnavailable)
		return
	case 1:
		idle(time.Duration(r.random.IntN(40)) * time.Millisecond)
	case 2:
		http.Redirect(w, req, "/elsewhere", http.StatusTemporaryRedirect)
		return
	}
	r.take(req, body)
	if fault == 3 {
		panic(http.ErrAbortHandler) // taken, but the answer is lost
	}
	w.WriteHeader(http.StatusNoContent)
}

func (r *receiver) take(req *http.Request, body []byte) {
	key, err := base64.StdEncoding.DecodeString(strings.TrimPrefix(ordealSecret, "whsec_"))
	if err != nil {
		r.t.Error(err)
	}
	id, at := req.Header.Get("Webhook-Id"), req.Header.Get("Webhook-Timestamp")
	if req.Header.Get("Webhook-Signature") != outlet.Signature([][]byte{key}, id, at, body) || req.URL.Path != "/alerts" {
		r.t.Errorf("a step with a wrong signature, or at a wrong place: %s", req.URL.Path)
	}
	one, err := eventOf(body)
	if err != nil {
		r.t.Error(err)
	}
	r.took = append(r.took, one)
}

func (r *receiver) calm() {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.tame = true
}

// eventOf reads a step as a CloudEvent.
func eventOf(body []byte) (delivery, error) {
	var e struct {
		ID   string `json:"id"`
		Data struct {
			Step   life.Step   `json:"step"`
			Record life.Record `json:"record"`
		} `json:"data"`
	}
	if err := json.Unmarshal(body, &e); err != nil {
		return delivery{}, err
	}
	d := delivery{alert: e.Data.Record.ID, step: e.Data.Step.Number, text: string(body)}
	if e.ID != life.Key(d.alert, d.step) {
		return d, fmt.Errorf("the event's id is %s", e.ID)
	}
	return d, nil
}

// printed reads steps as the terminal writes them with --json. A line that a
// kill cut off comes again.
func printed(text []byte) []delivery {
	var list []delivery
	for line := range strings.Lines(string(text)) {
		var n life.Notice
		if err := json.Unmarshal([]byte(line), &n); err != nil {
			continue
		}
		list = append(list, delivery{alert: n.Record.ID, step: n.Step.Number, text: line})
	}
	return list
}

// checkDeliveries sees that every step of every alert arrived, the first time
// after the one before it, and with the same words whenever it came again. It
// returns how many came again.
func checkDeliveries(t *testing.T, what string, took []delivery, alerts []life.Record, complete bool) (again int) {
	t.Helper()
	last := map[string]int{}
	texts := map[string]string{}
	for _, d := range took {
		key := life.Key(d.alert, d.step)
		if was, seen := texts[key]; seen {
			again++
			if was != d.text {
				t.Errorf("%s: step %s says something else the second time", what, key)
			}
			continue
		}
		texts[key] = d.text
		if complete && d.step != last[d.alert]+1 || d.step <= last[d.alert] {
			t.Errorf("%s: step %d of alert %s came after step %d", what, d.step, d.alert, last[d.alert])
		}
		last[d.alert] = d.step
	}
	for i := range alerts {
		if a := &alerts[i]; complete && last[a.ID] != len(a.Steps) {
			t.Errorf("%s: alert %s has %d steps, %d arrived", what, a.ID, len(a.Steps), last[a.ID])
		}
		delete(last, alerts[i].ID)
	}
	for id := range last {
		t.Errorf("%s: alert %s was delivered, but is not in the store", what, id)
	}
	return again
}
