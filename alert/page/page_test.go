package page

import (
	"bufio"
	"encoding/json"
	"net/http"
	"net/http/httptest"
	"net/url"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

func TestScreensHoldTheirContent(t *testing.T) {
	s := newStand(t)
	r := s.ring()
	s.apply(&monitor.Message{Kind: monitor.Observations, Items: []monitor.Item{{Reason: monitor.BadEvents, Detail: "events is <b>-1</b>", Raw: []byte("{}")}}})
	for target, wants := range map[string][]string{
		"/": {
			"What needs attention now", "Nobody has acknowledged these 2", "nothing has been reported since", "Ward 2, East: more falls than usual",
			"Ward 2, East: 7 falls in the 7 days to", "unacknowledged", "1 feed has said nothing for longer than expected",
			"The machine is hindered", "3 steps wait for outlet hooks", "Caution. A signal is a statistical finding",
		},
		"/series": {
			"Rolled up by the next name part", "east 2 1", "quay 1 0", "3 of 3 series", "Ward 2, East: falls", "signals , about 1 of",
		},
		"/series?under=east":     {"Series under east", "2 of 2 series", "ward-1"},
		"/series?find=QUAY+fall": {"Found 1", "Ward 9, Quay: falls"},
		"/series?find=nothing":   {"No series has all of these in its name."},
		"/series/one?name=east/ward-2/fall": {
			"Ward 2, East: falls", "Counts in each window of", "The rate, with exact bounds", "The numbers behind the picture", "The latest look",
			"The usual rate was estimated from 60 falls in 12,000 bed-days", "The usual rate itself is known only within 3.8 to 6.4 per 1,000 bed-days",
			"tailbell exact --events", r.ID, "The latest slots of 1 day", "not yet settled", "Absent is not zero",
		},
		"/series/one?name=quay/ward-9/fall": {"nothing was heard for longer than 20d"},
		"/alerts":                           {"The record of alerts", "Ward 2, East: more falls than usual", "unacknowledged"},
		"/alerts?condition=closed":          {"There is none."},
		"/alerts/" + r.ID: {
			"more falls than usual", "If the usual rate held,", "Caution. A signal is a statistical finding: it diagnoses nothing",
			"This look signals at", "Since the opening look", "Its history", "opened", "What you can do", "Acknowledge this alert", "Shelve this alert",
		},
		"/machine": {
			"The archive of partition 0: 7 slots since 2026-01-01 (UTC).",
			"The stream", "1,200 34", "hooks 0 7 41 3 not delivered : the receiver is away", "Overdue reports 1", "quay/ward-9/fall",
			"bad_events 1", "events is &lt;b&gt;-1&lt;/b&gt;", "The account",
		},
	} {
		code, body := s.get(target)
		if code != http.StatusOK {
			t.Errorf("%s: %d", target, code)
		}
		for _, want := range wants {
			if !strings.Contains(text(body), want) {
				t.Errorf("%s lacks %q:\n%s", target, want, text(body))
			}
		}
		for _, bad := range []string{"<no value>", "NaN", "%!", " style=", "<script>", "onclick"} {
			if strings.Contains(body, bad) {
				t.Errorf("%s holds %q", target, bad)
			}
		}
	}
	for target, want := range map[string]int{
		"/nothing": 404, "/alerts/nothing": 404, "/series/one?name=x": 404, "/alerts?condition=x": 400, "/alerts?before=x": 400,
		"/series?find=" + strings.Repeat("x", 501): 400,
	} {
		if code, body := s.get(target); code != want || !strings.Contains(body, "<h1>") {
			t.Errorf("%.40s: %d, want %d", target, code, want)
		}
	}
}

func TestActsCarryANameAndAreKept(t *testing.T) {
	s := newStand(t)
	id := s.ring().ID
	target := "/alerts/" + id
	w := s.post(target, url.Values{"act": {"acknowledge"}, "why": {"seen <b>it</b>"}})
	if body := w.Body.String(); w.Code != http.StatusUnprocessableEntity || !strings.Contains(body, "Your name is missing") || !strings.Contains(body, "seen &lt;b&gt;it") {
		t.Errorf("without a name: %d", w.Code)
	}
	w = s.post(target, url.Values{"act": {"acknowledge"}, "by": {"T. Averin"}, "why": {"seen"}})
	if w.Code != http.StatusSeeOther || w.Header().Get("Location") != target+"#history" {
		t.Fatalf("%d to %q: %s", w.Code, w.Header().Get("Location"), text(w.Body.String()))
	}
	cookie := w.Result().Cookies()[0]
	if !cookie.HttpOnly || cookie.SameSite != http.SameSiteStrictMode {
		t.Errorf("the cookie is %v", cookie)
	}
	for _, form := range []url.Values{
		{"act": {"note"}, "why": {"asked the ward"}, "once": {"x1"}},
		{"act": {"note"}, "why": {"asked the ward"}, "once": {"x1"}}, // a second click
		{"act": {"mark"}, "why": {"one cause"}, "mark": {"real"}},
		{"act": {"shelve"}, "why": {"being worked on"}, "for": {"3d"}},
	} {
		form.Set("by", "T. Averin")
		if w := s.post(target, form); w.Code != http.StatusSeeOther {
			t.Errorf("%v: %d: %s", form, w.Code, text(w.Body.String()))
		}
	}
	r, err := s.page.find(t.Context(), id)
	if err != nil || r.Condition != life.Shelved || r.Mark != life.MarkReal || r.Shelf.Until.Sub(s.engine.Clock().Time()) != 72*time.Hour {
		t.Fatalf("%v %+v", err, r)
	}
	if n := len(r.Steps); n != 6 { // opened, worsened, and four acts
		t.Errorf("%d steps", n)
	}
	request := httptest.NewRequestWithContext(t.Context(), http.MethodGet, target, nil)
	request.AddCookie(cookie)
	_, body := s.do(request)
	for _, want := range []string{"shelved", "acknowledged by T. Averin: “seen”", "marked real by T. Averin", "note by T. Averin: “asked the ward”", "until"} {
		if !strings.Contains(strings.NewReplacer("&ldquo;", "“", "&rdquo;", "”").Replace(text(body)), want) {
			t.Errorf("%q is not in %s", want, text(body))
		}
	}
	if !strings.Contains(body, `value="T. Averin"`) || strings.Contains(body, `id="act-acknowledge"`) {
		t.Error("the name is not kept, or what is done is offered again")
	}
	if w := s.post(target, url.Values{"act": {"acknowledge"}, "by": {"B"}}); w.Code != http.StatusConflict || !strings.Contains(w.Body.String(), "Not taken.") {
		t.Errorf("a second acknowledgement: %d", w.Code)
	}
	for _, form := range []url.Values{
		{"act": {"mark"}, "why": {"x"}, "mark": {"odd"}}, {"act": {"mend"}}, {"act": {"close"}}, {"act": {"note"}, "why": {strings.Repeat("x", 2001)}},
	} {
		form.Set("by", "T. Averin")
		if w := s.post(target, form); w.Code != http.StatusUnprocessableEntity {
			t.Errorf("%.60v: %d", form, w.Code)
		}
	}
}

// TestSignalsWithoutAnAlertAreNamed sees that a series whose alert was closed by
// hand while it signalled stays in sight.
func TestSignalsWithoutAnAlertAreNamed(t *testing.T) {
	s := newStand(t)
	id := s.ring().ID
	const heading = "Signalling without an alert"
	if _, body := s.get("/"); strings.Contains(body, heading) {
		t.Errorf("an alert stands, but: %s", text(body))
	}
	w := s.post("/alerts/"+id, url.Values{"act": {"close"}, "by": {"T. Averin"}, "why": {"a register error"}})
	if w.Code != http.StatusSeeOther {
		t.Fatalf("%d: %s", w.Code, text(w.Body.String()))
	}
	_, body := s.get("/")
	for _, want := range []string{
		heading + " 1", "east/ward-2/fall , ▲ more than usual: its alert was closed by hand while it signalled: no other opens before 5 looks in a row are quiet.",
	} {
		if !strings.Contains(text(body), want) {
			t.Errorf("%q is not in %s", want, text(body))
		}
	}
}

func TestUsersActUnderTheirOwnName(t *testing.T) {
	s := newStand(t)
	target := "/alerts/" + s.ring().ID
	s.person = &Person{Name: "nurse-1", MayAct: true, SignedIn: true}
	if w := s.post(target, url.Values{"act": {"acknowledge"}, "by": {"somebody else"}}); w.Code != http.StatusSeeOther || len(w.Result().Cookies()) != 0 {
		t.Errorf("%d", w.Code)
	}
	if _, body := s.get(target); !strings.Contains(text(body), "acknowledged by nurse-1") || strings.Contains(body, `name="by"`) || !strings.Contains(body, "/sign-out") {
		t.Error("the act is not the user's, or a name is asked for")
	}
	s.person = &Person{Name: "onlooker", SignedIn: true}
	if _, body := s.get(target); strings.Contains(body, "<textarea") || !strings.Contains(body, "You may look, but not act.") {
		t.Error("acts are offered to somebody who may look")
	}
	if w := s.post(target, url.Values{"act": {"note"}, "why": {"x"}}); w.Code != http.StatusForbidden {
		t.Errorf("%d", w.Code)
	}
}

func TestRecordTurnsItsPages(t *testing.T) {
	s := newStand(t)
	s.ring()
	records, _, more, err := s.page.newestAlerts(t.Context(), AlertsWanted{NewestFirst: true}, []uint64{0})
	if err != nil || more || len(records) != 2 { // one that rings, and a silence
		t.Errorf("%d alerts, more %v, %v", len(records), more, err)
	}
	if code, body := s.get("/alerts?before=1"); code != http.StatusOK || !strings.Contains(body, "There is none.") {
		t.Errorf("before the oldest: %d", code)
	}
}

func TestRecordIsExportedWhole(t *testing.T) {
	s := newStand(t)
	r := s.ring()
	code, text := s.get("/alerts.csv")
	if code != http.StatusOK || strings.Count(text, "\n"+r.ID+","+r.Series+",") != len(r.Steps) {
		t.Errorf("%d: %s", code, text)
	}
	code, text = s.get("/alerts.json")
	var all []life.Record
	if err := json.Unmarshal([]byte(text), &all); code != http.StatusOK || err != nil ||
		!slices.ContainsFunc(all, func(o life.Record) bool { return o.ID == r.ID && len(o.Steps) == len(r.Steps) }) {
		t.Errorf("%d, %v: %s", code, err, text)
	}
}

func TestLiveTellsWhatStands(t *testing.T) {
	s := newStand(t)
	server := httptest.NewServer(s.page)
	defer server.Close()
	request, err := http.NewRequestWithContext(t.Context(), http.MethodGet, server.URL+"/live", nil)
	if err != nil {
		t.Fatal(err)
	}
	answer, err := http.DefaultClient.Do(request)
	if err != nil {
		t.Fatal(err)
	}
	defer answer.Body.Close() //nolint:errcheck // only read
	lines := bufio.NewScanner(answer.Body)
	next := func() string {
		for lines.Scan() {
			if lines.Text() != "" {
				return lines.Text()
			}
		}
		return "the stream ended"
	}
	if got := next(); got != "retry: 3000" {
		t.Error(got)
	}
	s.days(0, 1, map[string]func(int) int64{"east/ward-1/fall": usually})
	if got := next() + " " + next(); got != "event: news data: No alert waits to be acknowledged." {
		t.Error(got)
	}
	s.page.Close()
	if got := next(); got != "the stream ended" {
		t.Error(got)
	}
}

func TestOwnFilesAreServedUnderTheirVersion(t *testing.T) {
	s := newStand(t)
	_, body := s.get("/")
	for _, name := range []string{"page.css", "page.js", "mark.svg"} {
		target := "/own/" + ownVersion() + "/" + name
		if !strings.Contains(body, target) {
			t.Errorf("%s is not used", target)
		}
		if code, file := s.get(target); code != http.StatusOK || file == "" {
			t.Errorf("%s: %d", target, code)
		}
	}
	for _, target := range []string{"/own/0/page.css", "/own/" + ownVersion() + "/page.go", "/own/" + ownVersion() + "/..%2fpage.go"} {
		if code, _ := s.get(target); code != http.StatusNotFound {
			t.Errorf("%s: %d", target, code)
		}
	}
}

// TestAnEngineThatIsHeldUp looks while no engine answers: alerts come from the
// store, and people are told.
func TestAnEngineThatIsHeldUp(t *testing.T) {
	s := newStand(t)
	id := s.ring().ID
	s.away = true
	for target, want := range map[string]string{
		"/":             "no answer",
		"/alerts/" + id: "this is what its record keeps",
		"/alerts":       "more falls than usual",
	} {
		code, body := s.get(target)
		if code != http.StatusOK || !strings.Contains(body, want) || !strings.Contains(body, "more falls than usual") {
			t.Errorf("%s: %d: %s", target, code, text(body))
		}
	}
	for _, target := range []string{"/series", "/series/one?name=east/ward-2/fall"} {
		if code, _ := s.get(target); code != http.StatusServiceUnavailable {
			t.Errorf("%s: %d", target, code)
		}
	}
	if w := s.post("/alerts/"+id, url.Values{"act": {"acknowledge"}, "by": {"T. Averin"}}); w.Code != http.StatusSeeOther {
		t.Errorf("%d", w.Code)
	}
	s.failed = nil // of the index, which was told
}
