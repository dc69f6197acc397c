package main

import (
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"regexp"
	"strings"
	"syscall"
	"testing"
)

// pageAddress is where a service's page listens, as its log says.
func (s *service) pageAddress() string {
	s.t.Helper()
	for line := range strings.Lines(s.log.String()) {
		var entry struct{ Message, Address string }
		if json.Unmarshal([]byte(line), &entry) == nil && entry.Message == "page" {
			return entry.Address
		}
	}
	s.t.Fatalf("no page:\n%s", s.log)
	return ""
}

// screen reads a screen of a page.
func (s *service) screen(target string) (int, string) {
	s.t.Helper()
	req, err := http.NewRequestWithContext(s.t.Context(), http.MethodGet, "http://"+s.pageAddress()+target, nil)
	if err != nil {
		s.t.Fatal(err)
	}
	answer, err := http.DefaultClient.Do(req)
	if err != nil {
		s.t.Fatal(err)
	}
	body, err := io.ReadAll(answer.Body)
	if err := answer.Body.Close(); err != nil {
		s.t.Error(err)
	}
	if err != nil {
		s.t.Fatal(err)
	}
	return answer.StatusCode, string(body)
}

var tags = regexp.MustCompile(`<[^>]*>`)

// plainly is what people read of a screen.
func plainly(html string) string {
	return strings.Join(strings.Fields(tags.ReplaceAllString(html, " ")), " ")
}

// TestPageOfSeveral serves the whole by the page of any process that shares the
// partitions: alerts and series of others, their state, and acts on them.
func TestPageOfSeveral(t *testing.T) {
	c := newCluster(t, 2, true)
	for _, s := range c.services {
		text := string(readFile(t, s.path)) + "[page]\nlisten = \"127.0.0.1:0\"\n"
		if err := os.WriteFile(s.path, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
		s.start()
	}
	c.look()
	c.evenly(2)
	c.feed(0, 20)
	c.services[0].await("steps", func() bool { return c.steps() >= 20 })

	rows := listed(t, c.services[0].path)
	for i, s := range c.services {
		s.await("all alerts", func() bool {
			code, now := s.screen("/")
			return code == http.StatusOK && strings.Contains(plainly(now), "Nobody has acknowledged these 20")
		})
		if _, list := s.screen("/series"); !strings.Contains(plainly(list), "20 of 20 series") {
			t.Errorf("process %d does not list all series", i)
		}
		for site := range 20 {
			code, one := s.screen("/series/one?name=" + url.QueryEscape(fmt.Sprintf("site-%d/ward-1/fall", site)))
			if code != http.StatusOK || !strings.Contains(one, "<svg") {
				t.Errorf("process %d, site %d: %d", i, site, code)
			}
		}
		_, machine := s.screen("/machine")
		for _, r := range rows {
			if !strings.Contains(machine, r.Owner) {
				t.Errorf("process %d does not say that %s owns partition %d", i, r.Owner, r.Number)
			}
		}
		if strings.Count(machine, "(this one)") != 4 {
			t.Errorf("process %d says that it owns %d partitions", i, strings.Count(machine, "(this one)"))
		}
	}

	// Each alert is acknowledged on the page of one process, half of them elsewhere.
	var alerts []struct{ ID string }
	_, out, _ := run(t, "alert", "list", "--json", "--config", c.services[1].path)
	if err := json.Unmarshal([]byte(out), &alerts); err != nil || len(alerts) != 20 {
		t.Fatalf("%v: %s", err, out)
	}
	for _, a := range alerts {
		form := url.Values{"act": {"acknowledge"}, "by": {"Ann Example"}, "why": {"seen"}}
		req, err := http.NewRequestWithContext(t.Context(), http.MethodPost, "http://"+c.services[0].pageAddress()+"/alerts/"+a.ID, strings.NewReader(form.Encode()))
		if err != nil {
			t.Fatal(err)
		}
		req.Header.Set("Content-Type", "application/x-www-form-urlencoded")
		req.Header.Set("Origin", "http://"+c.services[0].pageAddress())
		answer, err := http.DefaultTransport.RoundTrip(req)
		if err != nil {
			t.Fatal(err)
		}
		if err := answer.Body.Close(); err != nil {
			t.Error(err)
		}
		if answer.StatusCode != http.StatusSeeOther {
			t.Errorf("acknowledging %s: %d", a.ID, answer.StatusCode)
		}
	}
	c.services[1].await("the acts on the other page", func() bool {
		_, now := c.services[1].screen("/")
		return !strings.Contains(now, "Nobody has acknowledged")
	})
	for _, s := range c.services {
		s.stop(syscall.SIGTERM)
	}
}
