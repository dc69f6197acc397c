package page

import (
	"context"
	"errors"
	"html/template"
	"net/http"
	"net/url"
	"strconv"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// slotRows is how many slots are listed, alertRows how many alerts of a series.
const (
	slotRows  = 21
	alertRows = 50
)

// lookCounts are the numbers of looks that pictures may show.
var lookCounts = []int{60, 180, 720}

// oneData is one series.
type oneData struct {
	Name, Place   string
	Title         string // of the indicator
	Indicator     string
	Crumbs        []crumb
	Windows       []choice
	Spans         []choice
	Window        string
	Counts, Rates template.HTML
	Head          []string
	Rows          [][]string
	From, To      time.Time
	Older, Newer  string // links
	Latest        *standing
	Why           string // no look was made
	Slots         []monitor.SlotView
	Changes       []monitor.Dated
	Conditions    []monitor.Condition
	Alerts        []*life.Record
	AllAlerts     bool
	Seen          time.Time
	Noun, Unit    string
	SlotLength    string
}

// choice is one of several links, of which one is in force.
type choice struct {
	Text, Link string
	Here       bool
}

// standing is the latest look of the window that could be made.
type standing struct {
	life.Evidence
	Direction life.Direction
	Counted   string
	Bounds    string
	Numbers   string
	Basis     string
	Lower     string // bounds of the usual rate, where it was estimated
	Upper     string
	Per       string
	Odds      string
}

// one shows one series.
func (p *Page) one(r *http.Request) (*screen, error) {
	asked := r.URL.Query()
	name := asked.Get("name")
	looks := lookCounts[0]
	for _, n := range lookCounts {
		if asked.Get("looks") == strconv.Itoa(n) {
			looks = n
		}
	}
	until, err := time.Parse(time.RFC3339, asked.Get("until"))
	if err != nil {
		until = time.Time{}
	}
	s, in, err := p.see(r.Context(), &Sight{Series: name, Window: asked.Get("window"), Until: until, Looks: looks, Whole: true, Slots: slotRows})
	if err != nil {
		return nil, err
	}
	window := s.Window
	d := &oneData{
		Name: name, Indicator: in.Name, Title: in.Title, Window: window, Slots: s.Slots, Changes: s.Changes,
		Conditions: s.Glance.Conditions, Seen: s.Glance.Seen.Time().In(in.Zone), Noun: in.EventNoun, Unit: in.Unit, SlotLength: in.Every.String(),
	}
	d.Place = placeOf(name, in)
	d.Crumbs = crumbs(name)
	if n := len(d.Crumbs); n > 0 {
		d.Crumbs = d.Crumbs[:n-1]
	}
	d.choose(in, window, looks)
	if s.Judged {
		d.Latest = standingOf(&s.Evidence, in)
	}
	if n := len(s.Views); n > 0 && !s.Views[n-1].Made {
		d.Why = "The latest look was not made: " + s.Views[n-1].Status + "."
	}
	ctx, cancel := context.WithTimeout(r.Context(), 3*time.Second)
	defer cancel()
	if err := d.addAlerts(ctx, p, name); err != nil {
		return nil, err
	}
	d.draw(s, in, window)
	d.turn(s, looks, until)
	return &screen{name: "one", Title: name, Here: "/series", Data: d}, nil
}

// see reads a series.
func (p *Page) see(ctx context.Context, want *Sight) (*Seen, *config.Indicator, error) {
	s, err := p.o.Parts[p.o.PartOf(want.Series)].See(ctx, want)
	if err != nil {
		return nil, nil, err
	}
	if !s.Known {
		return nil, nil, &problem{http.StatusNotFound, "There is no series " + strconv.Quote(want.Series) + ".", "The list of series finds it by a few letters of its name."}
	}
	return s, indicatorOf(s.Setup, s.Glance.Indicator), nil
}

// windowOf is the window asked for, if there is one of that name, else that
// with the strongest evidence.
func windowOf(in *config.Indicator, asked, strongest string) string {
	for _, w := range in.Windows {
		if w.Name == asked {
			return asked
		}
	}
	if strongest != "" {
		return strongest
	}
	return in.Windows[0].Name
}

func (d *oneData) link(window string, looks int, until time.Time) string {
	v := url.Values{"name": {d.Name}, "window": {window}, "looks": {strconv.Itoa(looks)}}
	if !until.IsZero() {
		v.Set("until", until.Format(time.RFC3339))
	}
	return "/series/one?" + v.Encode()
}

func (d *oneData) choose(in *config.Indicator, window string, looks int) {
	for _, w := range in.Windows {
		d.Windows = append(d.Windows, choice{words.Length(w.Name), d.link(w.Name, looks, time.Time{}), w.Name == window})
	}
	for _, n := range lookCounts {
		d.Spans = append(d.Spans, choice{words.Amount(int64(n), "looks"), d.link(window, n, time.Time{}), n == looks})
	}
}

// turn links to earlier and later looks.
func (d *oneData) turn(s *Seen, looks int, until time.Time) {
	n := len(s.Views)
	if n == 0 {
		return
	}
	d.From, d.To = s.Views[0].Start, s.Views[n-1].End
	if n == looks {
		d.Older = d.link(d.Window, looks, s.Views[0].End)
	}
	if !until.IsZero() {
		d.Newer = d.link(d.Window, looks, time.Time{})
	}
}

// draw makes the pictures, with the alerts and changes in them.
func (d *oneData) draw(s *Seen, in *config.Indicator, window string) {
	f := figure.Series{
		Title: d.Name + ", windows of " + words.Length(window), Events: in.EventNoun, Window: words.Length(window),
		Unit: trimmed(words.Per(&life.Evidence{Measure: measureOf(in), Unit: in.Unit, Per: in.Per})),
	}
	for i := range s.Views {
		f.Points = append(f.Points, pointOf(&s.Views[i], in))
	}
	for _, r := range d.Alerts {
		f.Spans = append(f.Spans, spanOf(r))
	}
	for _, c := range s.Changes {
		f.Spans = append(f.Spans, figure.Span{Kind: figure.Change, From: c.At, Text: c.What})
	}
	d.Counts = template.HTML(f.SVG())    //nolint:gosec // figure escapes all text
	d.Rates = template.HTML(f.RateSVG()) //nolint:gosec // figure escapes all text
	d.Head, d.Rows = f.Columns(), f.Rows()
}

func trimmed(per string) string {
	if per != "" && per[0] == ' ' {
		return per[1:]
	}
	return per
}

func measureOf(in *config.Indicator) string {
	if in.Measure == config.Proportion {
		return "proportion"
	}
	return "rate"
}

// spanOf is the time from the opening of an alert until it returned, or was
// done, or the strongest evidence so far.
func spanOf(r *life.Record) figure.Span {
	s := figure.Span{Kind: figure.Alert, From: r.Opening.To, To: r.Worst.To, Text: "alert " + r.ID}
	if r.Silence != nil {
		s.From, s.To, s.Text = r.Opened, r.Opened, "silence "+r.ID
	}
	if r.Mark == life.MarkReal {
		s.Kind = figure.Real
	}
	if r.Since != nil && r.Since.To.After(s.To) {
		s.To = r.Since.To
	}
	if at, left := leftAt(r); left {
		s.To = at
	}
	return s
}

// addAlerts adds the newest alerts of the series.
func (d *oneData) addAlerts(ctx context.Context, p *Page, name string) error {
	ids, all, err := p.idsOf(ctx, name)
	if err != nil {
		return err
	}
	d.AllAlerts = all && len(ids) <= alertRows
	for _, id := range ids[:min(len(ids), alertRows)] {
		r, err := p.find(ctx, id)
		var gone *problem
		if errors.As(err, &gone) {
			continue
		}
		if err != nil {
			return err
		}
		d.Alerts = append(d.Alerts, r)
	}
	return nil
}

// standingOf says the latest look in words.
func standingOf(e *life.Evidence, in *config.Indicator) *standing {
	r := &life.Record{Zone: in.ZoneName, Direction: life.Upper}
	s := &standing{
		Evidence: *e, Direction: life.Upper, Counted: words.Brief(r, e), Bounds: words.Bounds(e), Numbers: words.Numbers(e),
		Basis: words.Basis(r, e), Per: words.Per(e), Odds: words.Odds(e.Log10P),
	}
	if b := &e.Baseline; b.Events > 0 || b.Kind != "known" {
		if lower, upper, ok := unsure(b, in); ok {
			s.Lower, s.Upper = words.Pair(lower, upper)
		}
	}
	return s
}

// unsure gives the exact bounds of an estimated usual rate.
func unsure(b *life.Baseline, in *config.Indicator) (lower, upper float64, ok bool) {
	exposure, err := strconv.ParseFloat(b.Exposure, 64)
	if err != nil || exposure <= 0 || b.Kind == "known" {
		return 0, 0, false
	}
	if b.Weighted != nil {
		exposure = *b.Weighted
	}
	scale := scaleOf(in)
	if in.Measure == config.Proportion {
		lower, upper = exact.ClopperPearson(b.Events, int64(exposure), in.Alpha)
		return lower * scale, upper * scale, true
	}
	lower, upper = exact.Garwood(b.Events, in.Alpha)
	return lower / exposure * scale, upper / exposure * scale, true
}
