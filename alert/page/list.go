package page

import (
	"context"
	"fmt"
	"html/template"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

const (
	// listRows is how many series are on one list, listGroups how many groups.
	listRows   = 40
	listGroups = 12
	manyGroups = 400
	// trendLooks is how many looks a trend shows.
	trendLooks = 24
	// maxFirst bounds how far a list is turned over: further on, search.
	maxFirst = 1_000_000
)

// listed is one series on the list.
type listed struct {
	Name, Window, Status string
	Signals, Made        bool
	Provisional          bool
	Up                   bool
	Events               int64
	Expected             float64
	At                   string // the count at which it signals
	Odds, P              string
	Conditions           int
	End                  time.Time
	Trend                template.HTML
	Link                 string
	Parts                []crumb
	Last, Place          string
}

// crumb is one of the leading name parts.
type crumb struct{ Part, Link string }

// listData is the list of series.
type listData struct {
	Query, Under  string
	Crumbs        []crumb
	Groups        []groupLine
	MoreGroups    string // the link to all of them
	OfGroups      int
	Rows          []listed
	Total, First  int
	Until         int
	Before, After string // links
	Signals       int
	At            time.Time
}

type groupLine struct {
	group
	Link, Odds string
}

// list shows series, the strongest evidence first.
func (p *Page) list(r *http.Request) (*screen, error) {
	asked := r.URL.Query()
	q := query{under: strings.Trim(asked.Get("under"), "/"), words: strings.Fields(strings.ToLower(asked.Get("find"))), most: listRows}
	if n, err := strconv.Atoi(asked.Get("from")); err == nil {
		q.first = min(max(n-1, 0), maxFirst)
	}
	if len(asked.Get("find")) > 500 || len(q.under) > 1000 {
		return nil, &problem{http.StatusBadRequest, "That is too long to look for.", "Give a few letters of the name."}
	}
	g, err := p.glances(r.Context())
	if err != nil {
		return nil, err
	}
	rows, total := g.find(q)
	d := &listData{
		Query: asked.Get("find"), Under: q.under, Total: total, First: q.first + 1, Until: q.first + len(rows),
		Signals: g.signals, At: g.at,
	}
	if d.Rows, err = p.listed(r.Context(), g, rows); err != nil {
		return nil, err
	}
	link := func(first int) string { return listLink(q.under, d.Query, first) }
	if q.first > 0 {
		d.Before = link(max(q.first-listRows, 0))
	}
	if d.Until < total {
		d.After = link(q.first + listRows)
	}
	d.Crumbs = crumbs(q.under)
	if d.Query == "" {
		d.rollUp(g, q.under, asked.Get("parts") == "all")
	}
	return &screen{name: "list", Title: listTitle(q.under), Here: "/series", Data: d}, nil
}

func listTitle(under string) string {
	if under == "" {
		return "All series"
	}
	return "Series under " + under
}

// rollUp adds the groups by the next name part, if there are at least two.
func (d *listData) rollUp(g *glances, under string, all bool) {
	groups := g.split(under)
	if len(groups) < 2 {
		return
	}
	d.OfGroups = len(groups)
	most := listGroups
	if all {
		most = manyGroups
	}
	for _, one := range groups[:min(most, len(groups))] {
		d.Groups = append(d.Groups, groupLine{one, listLink(one.Under, "", 0), words.Odds(one.Log10P)})
	}
	if !all && len(groups) > most {
		d.MoreGroups = listLink(under, "", 0) + sep(under) + "parts=all"
	}
}

func sep(under string) string {
	if under == "" {
		return "?"
	}
	return "&"
}

func listLink(under, find string, first int) string {
	v := url.Values{}
	if under != "" {
		v.Set("under", under)
	}
	if find != "" {
		v.Set("find", find)
	}
	if first > 0 {
		v.Set("from", strconv.Itoa(first+1))
	}
	if len(v) == 0 {
		return "/series"
	}
	return "/series?" + v.Encode()
}

func crumbs(under string) []crumb {
	if under == "" {
		return nil
	}
	var all []crumb
	at := 0
	for part := range strings.SplitSeq(under, "/") {
		at += len(part)
		all = append(all, crumb{part, listLink(under[:at], "", 0)})
		at++
	}
	return all
}

func seriesLink(name string) string { return "/series/one?" + url.Values{"name": {name}}.Encode() }

// listed fills in what the index does not hold of the rows on one list: their
// trends.
func (p *Page) listed(ctx context.Context, g *glances, rows []*row) ([]listed, error) {
	all := make([]listed, len(rows))
	for i, r := range rows {
		l := listed{
			Name: r.name, Window: r.window, Status: r.status, Signals: r.signals, Made: r.made, Provisional: r.provisional,
			Up: r.direction != life.Lower, Events: r.events, Expected: r.expected, Conditions: r.conditions, End: r.end,
			Link: seriesLink(r.name),
		}
		l.Parts, l.Place = crumbs(r.name), g.placeOf(r.name, r.indicator)
		l.Last = l.Parts[len(l.Parts)-1].Part
		l.Parts = l.Parts[:len(l.Parts)-1]
		if r.made {
			l.Odds, l.P = words.Odds(r.log10p), words.PValue(r.log10p)
		}
		if r.hasCritical {
			l.At = words.Whole(r.critical)
			if !l.Up {
				l.At += " or fewer"
			}
		}
		if r.window != "" {
			var err error
			if l.Trend, err = p.trend(ctx, r.name, r.window); err != nil {
				return nil, err
			}
		}
		all[i] = l
	}
	return all, nil
}

// trend is the small picture of a window's latest looks.
func (p *Page) trend(ctx context.Context, series, window string) (template.HTML, error) {
	seen, err := p.o.Parts[p.o.PartOf(series)].See(ctx, &Sight{Series: series, Window: window, Looks: trendLooks})
	if err != nil {
		return "", fmt.Errorf("looks of %s: %w", series, err)
	}
	views := seen.Views
	if !slices.ContainsFunc(views, func(v monitor.View) bool { return v.Made }) {
		return "", nil // a row of gaps tells nothing
	}
	s := figure.Series{Title: series + ", " + words.Length(window)}
	for i := range views {
		s.Points = append(s.Points, pointOf(&views[i], nil))
	}
	return template.HTML(s.TrendSVG()), nil //nolint:gosec // figure escapes all text
}

// pointOf is a look as figures show it; without the stanza no rates.
func pointOf(v *monitor.View, in *config.Indicator) figure.Point {
	f := figure.Point{
		At: v.End, Events: v.Events, Exposure: words.Grouped(v.Decimal()), Expected: v.Expected, Made: v.Made, Why: v.Status,
		Provisional: v.Provisional > 0, Late: v.Late > 0,
		Critical: v.Upper.Critical, HasCritical: v.Upper.Watched && v.Upper.HasCritical,
		Floor: v.Lower.Critical, HasFloor: v.Lower.Watched && v.Lower.HasCritical,
		Signals: v.Upper.Signals, SignalsLow: v.Lower.Signals,
	}
	f.Rate, f.Lower, f.Upper, f.Usual = rates(v, in)
	return f
}
