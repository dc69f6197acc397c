package quillmere

import (
	"fmt"
	"strings"
	"time"

	"tailbell/monitor/rehearse"
)

// rubbish writes what must be refused, each with one fault, and what nobody
// monitors. Each kind comes several times over the two years.
func (a *author) rubbish() {
	r := a.source("rubbish")
	for n := 20; n < days; n += 97 {
		s := sites[n%len(sites)]
		w := s.wards[rehearse.Between(r, 0, len(s.wards)-1)]
		a.garbled(s, w, n)
		a.misplaced(s, w, n+rehearse.Between(r, 1, 9))
		a.unmonitored(s, w, n+rehearse.Between(r, 1, 9))
	}
}

// garbled sends bytes that a reader can't take for an observation.
func (a *author) garbled(s site, w ward, n int) {
	start, end := a.date(n-1), a.date(n)
	line := seriesOf(s.name, w.name, "line-infection")
	interval := fmt.Sprintf(`"start":%q,"end":%q`, start.Format(time.RFC3339), end.Format(time.RFC3339))
	const alone = 5 // of them can't stand beside others in a message
	for i, x := range []struct{ raw, fault string }{
		{"ward sheet, page 2 of 3", "not_json"},
		{`{"id":"li-cut-off","series":"` + line + `","events":1,`, "not_json"},
		{"\xff\xfes\x00h\x00e\x00e\x00t\x00", "not_json"},
		{`17`, "not_object"},
		{"{\"series\":%S,%I,\"events\":1,\"id\":\"li-n\xe4chtlich\",\"reported\":%R}", "not_utf8"},
		{`{"series":%S,%I,"events":1,"round":"night","reported":%R}`, "unknown_field"},
		{`{"series":%S,%I,"events":1,"events":2,"reported":%R}`, "duplicate_field"},
		{`{"series":%S,"start":"2024-13-02T00:00:00+01:00","end":"2024-13-03T00:00:00+01:00","events":1,"reported":%R}`, "bad_time"},
		{`{"series":%S,%I,"events":-1,"reported":%R}`, "bad_events"},
		{`{"series":%S,%I,"exposure":-22,"reported":%R}`, "bad_exposure"},
		{`{"series":%S,%I,"reported":%R}`, "nothing_reported"},
		{`{"series":%S,"events":1,"reported":%R}`, "bad_interval"},
		{`{"series":"` + s.name + `//line-infection",%I,"events":1,"reported":%R}`, "bad_series"},
		{`{"series":%S,%I,"events":1,"revision":2,"reported":%R}`, "bad_revision"},
		{`{"series":"` + seriesOf(s.name, w.name, "fall") + `",%I,"exposure":21.1234567,"reported":%R}`, "finer_than_grain"},
		{`{"series":%S,"at":` + quoted(start) + `,"exposure":22,"reported":%R}`, "instant_exposure"},
	} {
		sent := a.desk(s.name, end)
		raw := strings.NewReplacer("%S", `"`+line+`"`, "%I", interval, "%R", quoted(sent)).Replace(x.raw)
		a.pub.Send(rehearse.Element{
			Series: line, Raw: []byte(raw), Fault: x.fault, Reported: sent, Sent: sent,
			Alone: i < alone, Meant: rehearse.Refused,
		})
	}
}

func quoted(t time.Time) string { return `"` + t.Format(time.RFC3339) + `"` }

// misplaced sends sound observations that lie where nothing may be counted.
func (a *author) misplaced(s site, w ward, n int) {
	start, end := a.date(n-1), a.date(n)
	theatre := seriesOf(s.name, s.theatres[0].name, "wound-infection")
	e := rehearse.Element{
		Series: seriesOf(s.name, w.name, "line-infection"), ID: "stray-" + w.name + "-" + compact(start), Revision: 1,
		Start: start, End: end, HasEvents: true,
	}
	longAgo, farAhead, spanning := e, e, e
	longAgo.Start, longAgo.End = start.AddDate(-10, 0, 0), end.AddDate(-10, 0, 0)
	farAhead.Start, farAhead.End = start.AddDate(20, 0, 0), end.AddDate(20, 0, 0)
	spanning.Start = start.AddDate(0, 0, -1)
	halves := rehearse.Element{
		Series: theatre, ID: e.ID, Revision: 1, Start: start, End: end,
		Exposure: 30*rehearse.One + 5*rehearse.Tenth, HasExposure: true,
	}
	nothing := rehearse.Element{Series: e.Series, ID: "never-sent-" + compact(start), Revision: 2, Retracted: true}
	for _, x := range []rehearse.Element{longAgo, farAhead, spanning, halves, nothing} {
		x.Reported = a.desk(s.name, end)
		x.Sent, x.Meant = x.Reported, rehearse.Refused
		a.pub.Send(x)
	}
	// None of them registered the id: it still serves the right one.
	e.Reported = a.desk(s.name, end)
	e.Sent = e.Reported
	a.pub.Send(e)
}

// unmonitored sends what no indicator watches.
func (a *author) unmonitored(s site, w ward, n int) {
	start, end := a.date(n-1), a.date(n)
	for i, series := range []string{
		seriesOf(s.name, w.name, "needle-injury"), seriesOf(s.name, w.name, "pressure-sore"),
		seriesOf(ferrybill, regions[n%len(regions)], "login", "slow-answer"),
	} {
		site, _, _ := strings.Cut(series, "/")
		sent := a.desk(s.name, end)
		e := rehearse.Element{
			Series: series, Start: start, End: end, Events: int64(i), HasEvents: true,
			Reported: sent, Sent: sent, Meant: rehearse.Unmonitored,
		}
		if site != ferrybill {
			e.ID = "other-" + w.name + "-" + compact(start) + fmt.Sprint(i)
		}
		a.pub.Send(e)
	}
}
