package main

import (
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/chromedp/chromedp"

	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

const pageSetup = `name = "quillmere"
folder = "data"
[time]
mode = "history"
[page]
listen = %q
[[indicator]]
name = "fall"
title = "Falls"
noun = "falls"
series = ["quillmere-*/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
zone = "Europe/Berlin"
events = "counted"
settle = "1d"
horizon = "120d"
expect = "30d"
windows = ["7d", "28d"]
tails = ["upper"]
p_limit = 0.001
quiet = 5
[indicator.baseline]
kind = "reference"
events = 60
exposure = 12000
source = "invented count of two years"
`

// wards publishes a day of falls on some wards.
type wards struct {
	s   *service
	day int // since the beginning of 2026
}

// report publishes so many days: falls on ward 3 as told, else a fall now and
// then.
func (w *wards) report(days int, falls func(day int) int) {
	w.s.t.Helper()
	zone := w.s.setup().Indicators[0].Zone
	var lines []string
	for range days {
		start := time.Date(2026, 1, 1+w.day, 0, 0, 0, 0, zone)
		for i, ward := range []string{"quillmere-east/ward-3", "quillmere-east/ward-4", "quillmere-north/stroke-unit", "quillmere-quay/ward-9"} {
			n := 0
			if (w.day+3*i)%11 == 4 {
				n = 1
			}
			if i == 0 {
				n = falls(w.day)
			}
			if i == 3 && w.day > 70 {
				continue // says no more
			}
			lines = append(lines, fmt.Sprintf(`{"id":"%s-%d","series":"%s/fall","start":"%s","end":"%s","events":%d,"exposure":20}`,
				strings.ReplaceAll(ward, "/", "."), w.day, ward, start.Format(time.RFC3339), start.AddDate(0, 0, 1).Format(time.RFC3339), n))
		}
		w.day++
	}
	w.s.publish(lines...)
}

func rarely(day int) int {
	if day%12 == 5 {
		return 1
	}
	return 0
}

// newPagedService returns a service that serves the page; more stands in its
// table.
func newPagedService(t *testing.T, more string) (s *service, address string) {
	t.Helper()
	address = freeAddress(t)
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	text := strings.Replace(fmt.Sprintf(pageSetup, address), "[[indicator]]", more+"\n[[indicator]]", 1)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return newService(t, path), address
}

// TestPageInABrowser follows an alert as people see it: it appears while they
// look on, is acknowledged, survives a kill, is marked, shelved, comes back,
// and returns.
func TestPageInABrowser(t *testing.T) {
	s, address := newPagedService(t, "")
	b := newBrowser(t, "http://"+address)
	s.start()
	s.servesPage(address)
	w := &wards{s: s}
	b.open("/")
	b.shows("No alert stands.", "Silence is no proof of safety", "Caution.")
	inTab[bool](b, "window.neverReloaded = true")
	w.report(70, rarely)
	b.shows("4 series are watched")
	w.report(6, func(int) int { return 1 })
	b.shows("Nobody has acknowledged these", "Ward 3, Quillmere East: more falls than usual", "Now 1")
	if !inTab[bool](b, "window.neverReloaded === true") {
		t.Error("the alert appeared by loading the page again")
	}

	b.run("going to the alert", chromedp.Click(`main h3 a`), chromedp.WaitVisible("#act-acknowledge"))
	id := inTab[string](b, "location.pathname.split('/').pop()")
	b.run("acknowledging", chromedp.SendKeys("#by-acknowledge", "T. Averin"), chromedp.SendKeys("#why-acknowledge", "on my way"),
		chromedp.Click(`//button[contains(., "Acknowledge")]`))
	b.shows("acknowledged by T. Averin: “on my way”")

	s.stop(syscall.SIGKILL)
	s.start()
	s.servesPage(address)
	b.open("/alerts/" + id)
	b.shows("acknowledged by T. Averin: “on my way”")

	// What somebody writes stays while the rest goes on.
	b.run("writing", chromedp.SendKeys("#why-note", "half a sen"))
	note := wire.EncodeAct(nil, &monitor.Act{Kind: monitor.Note, Alert: id, By: "B. Olin", Why: "asked the ward"})
	if _, err := s.dial().Publish(t.Context(), bus.Outgoing{Kind: bus.Act, Data: note}); err != nil {
		t.Fatal(err)
	}
	b.shows("note by B. Olin: “asked the ward”")
	if got := inTab[string](b, `document.getElementById("why-note").value`); got != "half a sen" {
		t.Errorf("what was being written is now %q", got)
	}
	inTab[bool](b, `document.getElementById("why-note").value = "", document.activeElement.blur(), true`)
	b.run("marking", chromedp.Click("#fold-mark > summary"), chromedp.SetValue("#mark-mark", "real"), chromedp.SendKeys("#why-mark", "wet floor"), chromedp.Click(`//form[.//input[@value="mark"]]//button`))
	b.shows("marked real by T. Averin: “wet floor”")
	b.run("shelving", chromedp.Click("#fold-shelve > summary"), chromedp.SetValue("#for-shelve", "3d"), chromedp.SendKeys("#why-shelve", "floor is being changed"), chromedp.Click(`//form[.//input[@value="shelve"]]//button`))
	b.shows("shelved until", "by T. Averin: “floor is being changed”")
	w.report(5, func(int) int { return 1 }) // past the shelf's time
	b.shows("unshelved", "unacknowledged")
	act := wire.EncodeAct(nil, &monitor.Act{Kind: monitor.Acknowledge, Alert: id, By: "B. Olin"})
	if _, err := s.dial().Publish(t.Context(), bus.Outgoing{Kind: bus.Act, Data: act}); err != nil {
		t.Fatal(err)
	}
	b.shows("acknowledged by B. Olin")
	w.report(45, func(int) int { return 0 })
	b.shows("returned", "returned and acknowledged", "closed")
	s.stop(syscall.SIGTERM)
}

// TestEveryScreenInABrowser looks at every screen in three widths and both
// themes: what it holds, and that axe finds nothing wrong.
func TestEveryScreenInABrowser(t *testing.T) {
	s, address := newPagedService(t, "")
	b := newBrowser(t, "http://"+address)
	s.start()
	s.servesPage(address)
	w := &wards{s: s}
	w.report(70, rarely)
	w.report(45, func(day int) int {
		if day < 76 || day > 104 {
			return 1
		}
		return 0
	})
	s.publish(`{"series":"quillmere-east/ward-3/fall","events":-1}`)
	s.await("two alerts", func() bool {
		code, out, _ := run(t, "alert", "list", "--all", "--config", s.path)
		return code == 0 && strings.Count(out, "quillmere-east/ward-3/fall") == 2
	})
	_, out, _ := run(t, "alert", "list", "--config", s.path)
	id := strings.Fields(strings.Split(out, "\n")[1])[0]
	s.says(0, nil, "alert", "note", id, "--by", "T. Averin", "--why", "asked the ward")
	for _, screen := range []struct {
		name, target string
		holds        []string
	}{
		{"now", "/", []string{"Nobody has acknowledged these", "Returned, but never acknowledged", "What is not being seen"}},
		{"series", "/series", []string{"Rolled up by the next name part", "Ward 3, Quillmere East: falls", "▲ signals"}},
		{"one", "/series/one?name=quillmere-east/ward-3/fall&window=7d", []string{
			"Counts in each window of 7 days", "The rate, with exact bounds", "known only within", "The latest slots", "Alerts",
		}},
		{"alert", "/alerts/" + id, []string{"If the usual rate held", "Since the opening look", "note by T. Averin: “asked the ward”", "What you can do"}},
		{"record", "/alerts", []string{"The record of alerts", "returned", "unacknowledged"}},
		{"machine", "/machine", []string{"The stream", "Outlets", "Overdue reports", "quillmere-quay/ward-9/fall", "bad_events"}},
		{"problem", "/nothing", []string{"There is no such page."}},
	} {
		b.open(screen.target)
		b.shows(screen.holds...)
		for _, width := range []int64{360, 820, 1280} {
			for _, theme := range []string{"light", "dark"} {
				b.look(screen.name, screen.target, width, theme)
			}
		}
	}

	b.open("/series")
	b.run("typing", chromedp.SendKeys("#find", "stroke"))
	b.shows("Found", "Stroke Unit, Quillmere North: falls", "1 to 1 of 1 series")
	if !inTab[bool](b, `document.activeElement.id === "find" && location.search === "?find=stroke"`) {
		t.Error("typing lost the field, or the address does not follow")
	}
	s.stop(syscall.SIGTERM)
}

// TestPageForUsersAlone asks without a token, with a wrong one, and with those
// of a user who may look and one who may act.
func TestPageForUsersAlone(t *testing.T) {
	s, address := newPagedService(t, `users = "who"`)
	tokens := map[string]string{}
	for name, role := range map[string]string{"Asha Venn": "act", "audit": "read"} {
		code, token, complaint := run(t, "user", "add", name, "--role", role, "--config", s.path)
		if code != 0 {
			t.Fatal(complaint)
		}
		tokens[name] = strings.TrimSpace(token)
	}
	s.start()
	w := &wards{s: s}
	w.report(70, rarely)
	w.report(10, func(int) int { return 1 })
	s.await("an alert", func() bool {
		code, out, _ := run(t, "alert", "list", "--config", s.path)
		return code == 0 && strings.Contains(out, "quillmere-east/ward-3/fall")
	})
	_, out, _ := run(t, "alert", "list", "--config", s.path)
	id := strings.Fields(strings.Split(out, "\n")[1])[0]
	ask := func(method, target, token, form string) (int, string) {
		t.Helper()
		req, err := http.NewRequestWithContext(t.Context(), method, "http://"+address+target, strings.NewReader(form))
		if err != nil {
			t.Fatal(err)
		}
		if form != "" {
			req.Header.Set("Content-Type", "application/x-www-form-urlencoded")
		}
		if token != "" {
			req.Header.Set("Authorization", "Bearer "+token)
		}
		answer, err := http.DefaultClient.Do(req)
		if err != nil {
			t.Fatal(err)
		}
		text, err := io.ReadAll(answer.Body)
		if err := errors.Join(err, answer.Body.Close()); err != nil {
			t.Fatal(err)
		}
		return answer.StatusCode, string(text)
	}
	for _, token := range []string{"", tokens["audit"] + "x", strings.Replace(tokens["Asha Venn"], "token-", "token-x", 1)} {
		for _, target := range []string{"/", "/series", "/alerts/" + id, "/alerts/other", "/machine", "/live", "/series/one?name=quillmere-east/ward-3/fall"} {
			code, text := ask(http.MethodGet, target, token, "")
			for _, secret := range []string{"Ward", "ward", "falls", id, "waiting"} {
				if strings.Contains(strings.ReplaceAll(text, url.QueryEscape(target), ""), secret) && !strings.Contains(target, secret) {
					t.Errorf("%s with a wrong token (%d) shows %q:\n%s", target, code, secret, text)
				}
			}
			if token != "" && code != http.StatusUnauthorized && code != http.StatusTooManyRequests {
				t.Errorf("%s with a wrong token: %d", target, code)
			}
		}
	}
	if code, text := ask(http.MethodGet, "/alerts/"+id, tokens["audit"], ""); code != http.StatusOK || !strings.Contains(text, "You may look, but not act.") || strings.Contains(text, "<textarea") {
		t.Errorf("who may look: %d", code)
	}
	if code, _ := ask(http.MethodPost, "/alerts/"+id, tokens["audit"], "act=note&why=x"); code != http.StatusForbidden {
		t.Errorf("an act of one who may look: %d", code)
	}
	if code, text := ask(http.MethodPost, "/alerts/"+id, tokens["Asha Venn"], "act=note&why=asked&by=somebody+else"); code != http.StatusOK || !strings.Contains(text, "by Asha Venn: &ldquo;asked&rdquo;") {
		t.Errorf("an act of one who may act: %d: %s", code, text)
	}

	b := newBrowser(t, "http://"+address)
	b.open("/alerts/" + id)
	b.shows("Sign in to Tailbell")
	b.run("signing in", chromedp.SendKeys("#token", tokens["Asha Venn"]), chromedp.Click("button"))
	b.shows("Ward 3, Quillmere East: more falls than usual", "Asha Venn", "By Asha Venn")
	b.run("acknowledging", chromedp.Click(`//button[contains(., "Acknowledge")]`))
	b.shows("acknowledged by Asha Venn")
	b.run("signing out", chromedp.Click(".leave button"))
	b.shows("Sign in to Tailbell")
	s.stop(syscall.SIGTERM)
}
