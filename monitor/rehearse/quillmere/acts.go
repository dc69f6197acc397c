package quillmere

import (
	"time"

	"tailbell/monitor/rehearse"
)

// The invented people who act.
var people = []string{"B. Ostrander", "M. Quell", "T. Averin"}

// acts writes what people did about the planted excesses, at fixed times. They
// do not know whether an alert was open: an act that meets none is refused.
func (a *author) acts() error {
	for i, x := range a.plan.excesses {
		by := people[i%len(people)]
		mid := x.From.Add(x.To.Sub(x.From) * 2 / 3)
		seen, noted, done := a.office(mid), a.office(x.To.AddDate(0, 0, 3)), a.office(x.To.AddDate(0, 0, 30))
		if x.To.Sub(x.From) < 12*day {
			seen, noted, done = x.To.Add(20*time.Minute), x.To.Add(90*time.Minute), x.To.Add(20*time.Hour)
		}
		steps := []struct {
			at   time.Time
			act  string
			why  string
			some bool
		}{
			{seen, "acknowledge", "", i%4 != 3},
			{noted, "note", "Looked into with the team; practice has changed since.", i%2 == 0},
			{done, "close", "Dealt with; the cause is known and gone.", i%5 == 2},
		}
		for _, s := range steps {
			if !s.some {
				continue
			}
			fields := map[string]string{"act": s.act, "series": x.Series, "direction": string(x.Direction), "by": by}
			if s.why != "" {
				fields["why"] = s.why
			}
			if err := a.pub.PersonActs(s.at, fields, ""); err != nil {
				return err
			}
		}
	}
	return a.wrongActs()
}

// wrongActs are refused however the alerts stand.
func (a *author) wrongActs() error {
	series := "quillmere-east/ward-1/line-infection"
	upper := string(rehearse.Upper)
	for _, x := range []struct {
		date   string
		fields map[string]string
		reason string
	}{
		{"2024-06-12", map[string]string{"act": "close", "series": series, "direction": upper, "by": people[0]}, "bad_act"},
		{"2024-10-30", map[string]string{"act": "acknowledge", "series": series, "direction": upper}, "bad_act"},
		{"2025-03-19", map[string]string{"act": "forget", "series": series, "direction": upper, "by": people[1]}, "bad_act"},
		{"2025-08-27", map[string]string{"act": "acknowledge", "series": "quillmere-east/ward-99/fall", "direction": upper, "by": people[2]}, "no_such_alert"},
	} {
		if err := a.pub.PersonActs(a.office(a.when(x.date)), x.fields, x.reason); err != nil {
			return err
		}
	}
	return nil
}

// office is twenty to eleven in the morning of a day.
func (a *author) office(t time.Time) time.Time {
	y, m, d := t.In(a.zone).Date()
	return time.Date(y, m, d, 10, 40, 0, 0, a.zone)
}
