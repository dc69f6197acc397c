package page

import (
	"context"
	"crypto/rand"
	"html/template"
	"net/http"
	"net/url"
	"slices"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// alertLooks is how many looks the picture of an alert shows.
const alertLooks = 90

// nameCookie keeps the name that acts were last taken under, where there are
// no users.
const nameCookie = "tailbell-acts-as"

// alertData is one alert.
type alertData struct {
	*life.Record
	Sentence, Strongest string
	Numbers, Basis      string
	Since, Sources      string
	Window              string
	Steps               []step
	Picture             template.HTML
	Kept                bool // the picture shows what the record keeps
	Head                []string
	Rows                [][]string
	SeriesLink          string
	Place               string
	Caution             string
	Acts                []actForm
	By, Once            string
	Problem             string
	Given               url.Values // what was filled in
	Marks               []life.Mark
	Shelves             []shelfTime
}

// step is one line of the history.
type step struct {
	At              time.Time
	What, By, Why   string
	Evidence, Now   string
	Mark            life.Mark
	TakenBack, Late bool
	Until           time.Time // of a shelf
}

// alert shows one alert.
func (p *Page) alert(r *http.Request) (*screen, error) {
	return p.alertScreen(r, r.PathValue("id"), "", nil)
}

// alertScreen shows one alert; with a problem and what was filled in, if an
// act of it was not taken.
func (p *Page) alertScreen(r *http.Request, id, wrong string, given url.Values) (*screen, error) {
	record, err := p.find(r.Context(), id)
	if err != nil {
		return nil, err
	}
	d := &alertData{
		Record: record, Place: words.Place(record), Sentence: words.Sentence(record, &record.Opening), Numbers: words.Numbers(&record.Opening),
		Basis: words.Basis(record, &record.Opening), Since: words.Afterwards(record), Sources: words.Sources(record),
		Window: record.Opening.Window, SeriesLink: seriesLink(record.Series), Caution: words.CautionOf(record), Problem: wrong, Given: given,
		Marks: life.Marks, Shelves: shelfTimes,
	}
	if !words.SameLook(&record.Worst, &record.Opening) {
		d.Strongest = words.Sentence(record, &record.Worst)
	}
	if record.Silence != nil {
		d.Numbers, d.Basis = "", ""
	}
	zone := words.Zone(record)
	for i := range record.Steps {
		line := stepOf(record, &record.Steps[i], zone)
		if i > 0 && record.Steps[i].Condition == record.Steps[i-1].Condition {
			line.Now = ""
		}
		d.Steps = append(d.Steps, line)
	}
	who := p.o.Who(r.Context())
	if who.MayAct {
		d.Acts = actsOn(record)
		d.By = nameOf(r, who, given)
		d.Once = rand.Text()
	}
	if record.Silence == nil {
		d.draw(r.Context(), p, record)
	}
	return &screen{name: "alert", Title: title(record), Here: "/alerts", Data: d}, nil
}

// nameOf is the name to act under: the user's, else what was given, else the
// one of the last time.
func nameOf(r *http.Request, who Person, given url.Values) string {
	if who.Name != "" {
		return who.Name
	}
	if by := given.Get("by"); by != "" {
		return by
	}
	if c, err := r.Cookie(nameCookie); err == nil {
		if name, err := url.QueryUnescape(c.Value); err == nil {
			return name
		}
	}
	return ""
}

func stepOf(r *life.Record, s *life.Step, zone *time.Location) step {
	line := step{At: s.At.In(zone), What: string(s.Kind), By: s.By, Why: s.Why, Mark: s.Mark, TakenBack: s.Kind == life.StepMarked && s.Mark == life.NotMarked}
	line.Late = s.Kind == life.StepOpened && r.Late
	if s.Until != nil {
		line.Until = s.Until.In(zone)
	}
	if s.Evidence != nil {
		line.Evidence = words.Brief(r, s.Evidence)
	}
	if string(s.Kind) != string(s.Condition) {
		line.Now = string(s.Condition)
	}
	return line
}

// draw makes the picture of the alert's opening window around its time: from
// the looks as the data stand, or, where they have left memory or the engine
// does not answer, from the evidence that the record keeps.
func (d *alertData) draw(ctx context.Context, p *Page, r *life.Record) {
	s, err := p.o.Parts[p.o.PartOf(r.Series)].See(ctx, &Sight{
		Series: r.Series, Window: r.Opening.Window, Until: pictureEnd(r), Looks: alertLooks,
	})
	if err != nil {
		s = &Seen{} // the engine does not answer
	}
	views, in := s.Views, indicatorOf(s.Setup, r.Indicator)
	f := figure.Series{
		Title: r.Series + ", windows of " + words.Length(r.Opening.Window), Events: words.Noun(&r.Opening), Window: words.Length(r.Opening.Window),
		Unit: trimmed(words.Per(&r.Opening)), Spans: []figure.Span{spanOf(r)},
	}
	made := false
	for i := range views {
		made = made || views[i].Made
		f.Points = append(f.Points, pointOf(&views[i], in))
	}
	if !made {
		f.Points, d.Kept = keptPoints(r), true
	}
	if len(f.Points) > 1 {
		d.Picture = template.HTML(f.SVG()) //nolint:gosec // figure escapes all text
		d.Head, d.Rows = f.Columns(), f.Rows()
	}
}

// pictureEnd is the last moment that the picture of an alert shows: somewhat
// after it left; the zero time for now.
func pictureEnd(r *life.Record) time.Time {
	if at, left := leftAt(r); left {
		return at.Add(r.Opening.To.Sub(r.Opening.From) / 2)
	}
	return time.Time{}
}

// leftAt is when the alert ceased to signal, by itself or by hand.
func leftAt(r *life.Record) (time.Time, bool) {
	for i := range r.Steps {
		if s := &r.Steps[i]; s.Kind == life.StepReturned || s.Kind == life.StepClosed || s.Kind == life.StepWithdrawn {
			return s.At, true
		}
	}
	return time.Time{}, false
}

// keptPoints are the looks of the opening window that the record's steps keep.
func keptPoints(r *life.Record) []figure.Point {
	zone := words.Zone(r)
	var points []figure.Point
	add := func(e *life.Evidence) {
		if e == nil || e.Window != r.Opening.Window {
			return
		}
		scale := 1.0
		if e.Measure == "proportion" && e.Per <= 1 {
			scale = 100
		}
		f := figure.Point{
			At: e.To.In(zone), Events: e.Events, Exposure: words.Grouped(e.Exposure), Expected: e.Expected, Made: true,
			Provisional: e.Provisional > 0, Late: e.LateEvents > 0,
			Rate: e.Rate * scale, Lower: e.RateLower * scale, Upper: e.RateUpper * scale, Usual: e.Baseline.Rate * scale,
		}
		if r.Direction == life.Lower {
			f.Floor, f.HasFloor, f.SignalsLow = e.Critical, true, true
		} else {
			f.Critical, f.HasCritical, f.Signals = e.Critical, true, true
		}
		points = slices.DeleteFunc(points, func(old figure.Point) bool { return old.At.Equal(f.At) })
		points = append(points, f)
	}
	for i := range r.Steps {
		add(r.Steps[i].Evidence)
	}
	add(&r.Opening)
	add(&r.Worst)
	slices.SortFunc(points, func(a, b figure.Point) int { return a.At.Compare(b.At) })
	return points
}
