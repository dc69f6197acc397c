package page

import (
	"fmt"
	"net/http"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/monitor"
)

// TestManySeriesTakeBoundedWork lists and finds among 100,000 series. What is
// bounded is counted; the times are only told.
func TestManySeriesTakeBoundedWork(t *testing.T) {
	many := 100_000
	if testing.Short() {
		many = 10_000
	}
	s := newStand(t)
	began := time.Now()
	const perMessage = 1000
	for n := range 9 {
		for at := 0; at < many; at += perMessage {
			m := &monitor.Message{Kind: monitor.Observations, HasTime: true, Time: monitor.InstantOf(time.Date(2026, 1, 2+n, 0, 0, 0, 0, s.zone))}
			for i := at; i < at+perMessage; i++ {
				events := int64(0)
				if i%5000 == 17 {
					events = 2 // some ring
				}
				m.Items = append(m.Items, s.day(fmt.Sprintf("site-%02d/ward-%05d/fall", i%50, i), n, events, 20))
				m.Items[len(m.Items)-1].Observation.ID = ""
			}
			s.mu.Lock()
			m.Position = s.engine.Position() + 1
			s.engine.Apply(m)
			s.mu.Unlock()
		}
	}
	s.commit()
	t.Logf("%d series fed and committed in %s", many, time.Since(began))

	timed := func(what string, f func()) time.Duration {
		began := time.Now()
		f()
		took := time.Since(began)
		t.Logf("%s: %s", what, took)
		return took
	}
	timed("the index is built", func() { s.get("/series") })
	if want := many/glancesAtOnce + listRows + 5; s.asked > want {
		t.Errorf("the index and one list looked at the engine %d times, at most %d are expected", s.asked, want)
	}
	for _, target := range []string{"/series", "/series?from=99000", "/series?find=ward-0001+fall", "/series?under=site-07", "/series?under=site-07&find=fall&from=1001"} {
		s.asked = 0
		code, body := 0, ""
		timed(target, func() { code, body = s.get(target) })
		if code != http.StatusOK || s.asked > listRows {
			t.Errorf("%s: %d, looked at the engine %d times", target, code, s.asked)
		}
		if n := strings.Count(body, "<tr"); n > listRows+listGroups+2 {
			t.Errorf("%s has %d rows", target, n)
		}
		if len(body) > 200_000 {
			t.Errorf("%s has %d bytes", target, len(body))
		}
	}
	if _, body := s.get("/series"); !strings.Contains(body, "signals") || !strings.Contains(text(body), fmt.Sprintf("1 to 40 of %d,000 series", many/1000)) {
		t.Error("what signals is not at the top")
	}
	g, err := s.page.glances(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	q := query{words: []string{"ward-00", "fall"}, most: listRows}
	if n := testing.AllocsPerRun(5, func() { g.find(q) }); n > 10 {
		t.Errorf("finding allocates %g times", n)
	}
	timed("/", func() { s.get("/") })
	timed("/machine", func() { s.get("/machine") })
	timed("/series/one", func() { s.get("/series/one?name=site-17/ward-00017/fall") })
}

// TestFindAgainstPlainSearch holds find and split against going through all
// rows.
func TestFindAgainstPlainSearch(t *testing.T) {
	s := newStand(t)
	m := &monitor.Message{Kind: monitor.Observations, HasTime: true, Time: monitor.InstantOf(time.Date(2026, 1, 2, 0, 0, 0, 0, s.zone))}
	names := []string{"a/b/fall", "a/b-c/fall", "a-b/c/fall", "a0/b/fall", "A/B/fall", "a/c/fall"}
	for _, name := range names {
		m.Items = append(m.Items, s.day(name, 0, 0, 20))
	}
	s.apply(m)
	g, err := s.page.glances(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for _, under := range []string{"", "a", "a/b", "a-b", "b", "a/b/fall"} {
		for _, word := range []string{"", "b", "fall", "a/b", "x"} {
			var want []string
			for _, n := range names {
				if (under == "" || strings.HasPrefix(n, under+"/")) && strings.Contains(strings.ToLower(n), word) {
					want = append(want, n)
				}
			}
			rows, total := g.find(query{under: under, words: []string{word}, most: 100})
			var got []string
			for _, r := range rows {
				got = append(got, r.name)
			}
			slices.Sort(got)
			slices.Sort(want)
			if !slices.Equal(got, want) || total != len(want) {
				t.Errorf("under %q, %q: %v (%d), want %v", under, word, got, total, want)
			}
		}
	}
	groups := map[string]int{}
	for _, one := range g.split("") {
		groups[one.Under] = one.Series
	}
	if fmt.Sprint(groups) != "map[A:1 a:3 a-b:1 a0:1]" {
		t.Error(groups)
	}
	if under := g.split("a/b"); len(under) != 0 {
		t.Errorf("%v under a/b", under)
	}
	if rows, total := g.find(query{first: 2, most: 3}); len(rows) != 3 || total != len(names) {
		t.Errorf("%d of %d", len(rows), total)
	}
}
