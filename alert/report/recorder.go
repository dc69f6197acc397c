package report

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
	"tailbell/monitor/estimate"
	"tailbell/monitor/life"
)

// Recorder gathers a report from an engine.
type Recorder struct {
	setup   *config.Setup
	looks   map[key][]figure.Point
	worst   map[key][]float64 // log10 p of each
	made    map[string][2]int64
	sums    []monitor.SlotSum
	records map[string]life.Record
	refused []monitor.Refusal
	shifts  []shift
	from    time.Time
	to      time.Time
	// met are the series seen, and harvests the looks taken by indicator.
	met      map[string]bool
	harvests map[string]*harvest
}

// key is one window of one series.
type key struct{ indicator, series, window string }

// NewRecorder returns a recorder for looks under the set-up. Play the messages of
// a history, or for an engine that has played them Meet its series; give every
// Drain to Take.
func NewRecorder(setup *config.Setup) *Recorder {
	return &Recorder{
		setup: setup, looks: map[key][]figure.Point{}, worst: map[key][]float64{}, made: map[string][2]int64{},
		records: map[string]life.Record{}, met: map[string]bool{}, harvests: map[string]*harvest{},
	}
}

func (r *Recorder) indicator(name string) *config.Indicator {
	i := slices.IndexFunc(r.setup.Indicators, func(in config.Indicator) bool { return in.Name == name })
	if i < 0 {
		return nil
	}
	return &r.setup.Indicators[i]
}

// Play gives the engine the next message of a history, and takes the looks that
// it puts beyond change. Clock ticks between messages, one for each time at
// which looks fall due, keep them from leaving the engine's memory untaken; they
// change nothing else.
func (r *Recorder) Play(e *monitor.Engine, m monitor.Message) {
	for i := range m.Items {
		if m.Items[i].Reason == "" {
			r.Meet(m.Items[i].Observation.Series)
		}
	}
	for m.HasTime {
		due, any := e.NextDue()
		if !any || due >= m.Time {
			r.harvest(e, m.Time)
			break
		}
		r.harvest(e, due)
		e.Apply(&monitor.Message{Position: e.Position() + 1, Kind: monitor.Tick, Stored: due, Time: due, HasTime: true})
	}
	r.moved(m.Position, e.Position()+1)
	m.Position = e.Position() + 1
	e.Apply(&m)
}

// shift says that from a position on messages were played so much later than
// they stand in the history, since ticks were put between them.
type shift struct{ from, by uint64 }

func (r *Recorder) moved(was, is uint64) {
	if n := len(r.shifts); is-was > 0 && (n == 0 || r.shifts[n-1].by != is-was) {
		r.shifts = append(r.shifts, shift{is, is - was})
	}
}

// Refused are the refusals so far, with the positions that messages had before
// Play.
func (r *Recorder) Refused() []monitor.Refusal {
	list := slices.Clone(r.refused)
	for i := range list {
		at, _ := slices.BinarySearchFunc(r.shifts, list[i].Position+1, func(s shift, position uint64) int { return cmp.Compare(s.from, position) })
		if at > 0 {
			list[i].Position -= r.shifts[at-1].by
		}
	}
	return list
}

// harvest takes the looks that what comes at that moment, or later, can't change.
func (r *Recorder) harvest(e *monitor.Engine, at monitor.Instant) {
	for i := range r.setup.Indicators {
		in := &r.setup.Indicators[i]
		if h := r.harvests[in.Name]; h != nil {
			if until := at.Add(-in.Horizon); until > h.next {
				r.take(e, in, h, until)
			}
		}
	}
}

func (r *Recorder) take(e *monitor.Engine, in *config.Indicator, h *harvest, until monitor.Instant) {
	for _, name := range h.series {
		for _, w := range in.Windows {
			for _, v := range e.Views(name, w.Name, h.taken.Time(), until.Time()) {
				r.look(&v)
			}
		}
	}
	h.taken, h.next = until, h.cal.Start(h.cal.Slot(until-1)+1)
}

// harvest says which looks of an indicator were taken: those before taken. Looks
// at events lie within slots, too; next is the boundary from which on it is worth
// to take more.
type harvest struct {
	taken  monitor.Instant
	next   monitor.Instant
	cal    *monitor.Calendar
	series []string // in order of their names
}

func newHarvest(in *config.Indicator) *harvest {
	first := monitor.InstantOf(time.Date(1, 1, 1, 0, 0, 0, 0, time.UTC))
	return &harvest{taken: first, next: first, cal: monitor.NewCalendar(in.Every, in.Zone)}
}

// Meet notes that there is a series.
func (r *Recorder) Meet(name string) {
	if r.met[name] {
		return
	}
	r.met[name] = true
	for i := range r.setup.Indicators {
		in := &r.setup.Indicators[i]
		if !in.Matches(name) {
			continue
		}
		if r.harvests[in.Name] == nil {
			r.harvests[in.Name] = newHarvest(in)
		}
		h := r.harvests[in.Name]
		h.series = append(h.series, name)
		slices.Sort(h.series)
	}
}

// look takes a look as the data stand.
func (r *Recorder) look(v *monitor.View) {
	n := r.made[v.Indicator]
	if v.Made {
		n[0]++
	} else {
		n[1]++
	}
	r.made[v.Indicator] = n
	if r.from.IsZero() || v.Due.Before(r.from) {
		r.from = v.Due
	}
	if v.Due.After(r.to) {
		r.to = v.Due
	}
	k := key{v.Indicator, v.Series, v.Window}
	r.looks[k] = append(r.looks[k], pointOf(v))
	p := 0.0
	for _, t := range []*monitor.ViewTail{&v.Upper, &v.Lower} {
		if t.Watched && v.Made {
			p = min(p, t.Log10P)
		}
	}
	r.worst[k] = append(r.worst[k], p)
}

func pointOf(v *monitor.View) figure.Point {
	p := figure.Point{
		At: v.End, Events: v.Events, Expected: v.Expected, Made: v.Made, Provisional: v.Provisional > 0, Late: v.Late > 0,
		Signals: v.Upper.Signals, SignalsLow: v.Lower.Signals,
		Critical: v.Upper.Critical, HasCritical: v.Upper.HasCritical, Floor: v.Lower.Critical, HasFloor: v.Lower.HasCritical,
		Rate: math.NaN(), Lower: math.NaN(), Upper: math.NaN(), Usual: math.NaN(),
	}
	if !v.Made {
		p.Why = v.Status
	}
	return p
}

// Take takes what the engine handed over.
func (r *Recorder) Take(c *monitor.Changes) error {
	for i := range c.Archived {
		var s monitor.SlotSum
		if err := json.Unmarshal(c.Archived[i].Data, &s); err != nil {
			return fmt.Errorf("an archived slot can't be read: %w", err)
		}
		r.sums = append(r.sums, s)
	}
	r.refused = append(r.refused, c.Refused...)
	for i := range c.Alerts {
		r.records[c.Alerts[i].ID] = c.Alerts[i]
	}
	return nil
}

// Options say how a report is made.
type Options struct {
	// Seed and Draws of what is simulated of the usual rates; no draws leaves
	// them out.
	Seed  uint64
	Draws int
	// Pictures is how many series of each indicator have pictures: those with
	// alerts first.
	Pictures int
	// Progress is told how many of how many parts are done.
	Progress func(done, total int)
}

// Report makes the report when the history has passed through the engine.
func (r *Recorder) Report(ctx context.Context, e *monitor.Engine, o Options) (*Report, error) {
	for i := range r.setup.Indicators {
		if h := r.harvests[r.setup.Indicators[i].Name]; h != nil {
			r.take(e, &r.setup.Indicators[i], h, e.Clock().Add(time.Second))
		}
	}
	out := &Report{Setup: r.setup, Account: e.Account(), From: r.from, To: r.to}
	for _, c := range e.Conditions() {
		if in := r.indicator(c.Indicator); in != nil {
			x := Condition{c.Series, c.Text, c.Since.Time().In(in.Zone).Format(time.DateOnly)}
			if !slices.Contains(out.Conditions, x) { // of several windows
				out.Conditions = append(out.Conditions, x)
			}
		}
	}
	sums := append(slices.Clone(r.sums), e.Slots()...)
	for i := range r.setup.Indicators {
		in, err := r.one(ctx, &r.setup.Indicators[i], sums, e.Clock(), o)
		if err != nil {
			return nil, err
		}
		out.Indicators = append(out.Indicators, in)
		if o.Progress != nil {
			o.Progress(i+1, len(r.setup.Indicators))
		}
	}
	return out, nil
}

// one gathers what came of one indicator.
func (r *Recorder) one(ctx context.Context, cfg *config.Indicator, sums []monitor.SlotSum, clock monitor.Instant, o Options) (*Indicator, error) {
	how, err := describe(r.setup, cfg)
	if err != nil {
		return nil, err
	}
	in := &Indicator{Cfg: cfg, How: how, Looks: r.made[cfg.Name][0], Withheld: r.made[cfg.Name][1]}
	for i := range cfg.Baselines {
		in.Baselines = append(in.Baselines, baselineOf(cfg, &cfg.Baselines[i]))
	}
	h, err := estimate.Gather(cfg, sums, estimate.Span{Clock: clock})
	if errors.Is(err, estimate.ErrNothing) {
		return in, nil
	}
	if err != nil {
		return nil, err
	}
	if o.Draws > 0 {
		if in.Estimate, err = estimate.Analyse(ctx, h, estimate.Options{Seed: o.Seed, Draws: o.Draws}); err != nil {
			return nil, err
		}
	}
	r.alerts(in)
	r.series(in, h, o)
	return in, nil
}

// describe takes the sentences on the indicator from the description of the
// whole set-up.
func describe(setup *config.Setup, cfg *config.Indicator) ([]string, error) {
	alone := *setup
	alone.Indicators = []config.Indicator{*cfg}
	var b strings.Builder
	if err := alone.Describe(&b); err != nil {
		return nil, err
	}
	var how []string
	for _, line := range strings.Split(b.String(), "\n") {
		if strings.HasPrefix(line, "  ") {
			how = append(how, strings.TrimSpace(line))
		}
	}
	return how, nil
}

// baselineOf says what a baseline is, with exact bounds where it is a
// reference.
func baselineOf(in *config.Indicator, b *config.Baseline) Baseline {
	row := Baseline{Series: b.Series.String(), Source: b.Source, Rate: "counted from the history", Bounds: "-"}
	if b.Version != "" {
		row.Source = strings.TrimSpace(row.Source + " (version " + b.Version + ")")
	}
	switch b.Kind {
	case config.Known:
		row.Kind, row.Rate = "known", words.Number(b.Rate*in.Per)
	case config.Reference:
		exposure := float64(b.Exposure.Coef) / math.Pow10(int(b.Exposure.Digits))
		lower, upper := exact.Garwood(b.Events, in.Alpha)
		if in.Measure == config.Proportion {
			lower, upper = exact.ClopperPearson(b.Events, int64(exposure), in.Alpha)
			lower, upper = lower*exposure, upper*exposure
		}
		row.Kind = fmt.Sprintf("reference: %s in %s %s", words.Amount(b.Events, in.EventNoun), words.Grouped(b.Exposure.String()), in.Unit)
		row.Rate = words.Number(float64(b.Events) / exposure * in.Per)
		row.Bounds = words.Number(lower/exposure*in.Per) + " to " + words.Number(upper/exposure*in.Per)
	case config.Trailing:
		row.Kind = fmt.Sprintf("the series' own past, %d slots, %d before the window", b.SpanSlots, b.GapSlots)
	case config.Peers:
		row.Kind = fmt.Sprintf("its peers over %d slots", b.SpanSlots)
	}
	if b.Margin != 1 {
		row.Kind += fmt.Sprintf("; a ratio of %g is accepted", b.Margin)
	}
	if b.Spread > 1 {
		row.Kind += fmt.Sprintf("; spread %g", b.Spread)
	}
	var valid []string
	if !b.From.IsZero() {
		valid = append(valid, "from "+b.From.In(in.Zone).Format(time.DateOnly))
	}
	if !b.To.IsZero() {
		valid = append(valid, "to "+b.To.In(in.Zone).Format(time.DateOnly))
	}
	row.From = strings.Join(valid, " ")
	return row
}

// alerts takes the indicator's alerts, in order of their opening.
func (r *Recorder) alerts(in *Indicator) {
	for _, a := range r.records {
		if a.Indicator == in.Cfg.Name {
			in.Alerts = append(in.Alerts, Alert{Record: a})
		}
	}
	slices.SortFunc(in.Alerts, func(a, b Alert) int { return cmp.Or(a.OpenedAt().Compare(b.OpenedAt()), cmp.Compare(a.ID, b.ID)) })
	for i := range in.Alerts {
		a := &in.Alerts[i]
		a.Picture = r.around(in, a)
	}
}

// spanOf is the time in which an alert signalled.
func (r *Recorder) spanOf(a *life.Record) figure.Span {
	s := figure.Span{Kind: figure.Alert, From: a.Opening.To, To: r.to, Text: "alert " + a.ID}
	if a.Mark == life.MarkReal {
		s.Kind = figure.Real
	}
	over := slices.IndexFunc(a.Steps, func(s life.Step) bool {
		return s.Kind == life.StepReturned || s.Kind == life.StepWithdrawn || s.Kind == life.StepClosed
	})
	if over >= 0 {
		s.To = a.Steps[over].At
	}
	if s.To.Before(s.From) {
		s.To = s.From
	}
	return s
}

// around draws the opening window from a few windows before the alert to one
// after it.
func (r *Recorder) around(in *Indicator, a *Alert) *Picture {
	k := key{in.Cfg.Name, a.Series, a.Opening.Window}
	span := r.spanOf(&a.Record)
	length := a.Opening.To.Sub(a.Opening.From)
	from, to := a.Opening.From.Add(-2*length), span.To.Add(length)
	var points []figure.Point
	var worst []float64
	for i, p := range r.looks[k] {
		if !p.At.Before(from) && !p.At.After(to) {
			points, worst = append(points, p), append(worst, r.worst[k][i])
		}
	}
	if len(points) < 2 {
		return nil
	}
	f := r.figure(in, k, thin(points, worst), len(points))
	f.Spans = []figure.Span{span}
	f.Height = 220
	if a.Condition == life.Withdrawn {
		f.Note = "Drawn from the data as they were corrected: no look signals any more."
	}
	return f
}

func (r *Recorder) figure(in *Indicator, k key, points []figure.Point, of int) *Picture {
	return &Picture{Looks: of, Series: figure.Series{
		Title: k.series + ", windows of " + words.Length(k.window), Events: in.Cfg.EventNoun, Unit: per(in), Window: words.Length(k.window), Points: points,
	}}
}

// series takes the indicator's series with their pictures.
func (r *Recorder) series(in *Indicator, h *estimate.History, o Options) {
	cfg := in.Cfg
	funnel := &figure.Funnel{
		Title: cfg.Title + ": each series against all", Events: cfg.EventNoun, Exposure: cfg.Unit,
		Rate: per(in), Per: cfg.Per, Proportion: cfg.Measure == config.Proportion,
	}
	shared := sharedEnd(h)
	for i := range h.Series {
		s := &Series{Name: h.Series[i].Name, Missing: h.Series[i].Missing}
		exposure := 0.0
		for _, x := range h.Series[i].Slots {
			s.Events += x.Events
			exposure += x.Exposure
		}
		s.Exposure = words.Number(exposure)
		s.rate(cfg, exposure)
		if in.Estimate != nil && i < len(in.Estimate.Series) && in.Estimate.Series[i].Name == s.Name {
			s.Exposure = words.Grouped(in.Estimate.Series[i].Exposure)
		}
		for j := range in.Alerts {
			if in.Alerts[j].Series == s.Name {
				s.Alerts++
			}
		}
		funnel.Units = append(funnel.Units, figure.Unit{Name: strings.TrimSuffix(s.Name, shared), Events: s.Events, Exposure: exposure})
		in.Series = append(in.Series, s)
	}
	if len(funnel.Units) > 1 {
		in.Funnel = funnel
	}
	shown := slices.Clone(in.Series)
	slices.SortStableFunc(shown, func(a, b *Series) int { return cmp.Compare(b.Alerts, a.Alerts) })
	if len(shown) > o.Pictures {
		in.LeftOut = len(shown) - o.Pictures
		shown = shown[:o.Pictures]
	}
	for _, s := range shown {
		r.draw(in, s)
	}
}

func (s *Series) rate(cfg *config.Indicator, exposure float64) {
	if exposure == 0 {
		s.Rate, s.Upper = math.NaN(), math.NaN()
		return
	}
	s.Rate = float64(s.Events) / exposure * cfg.Per
	if cfg.Measure == config.Proportion {
		s.Lower, s.Upper = exact.ClopperPearson(s.Events, int64(math.Round(exposure)), cfg.Alpha)
		s.Lower, s.Upper = s.Lower*cfg.Per, s.Upper*cfg.Per
		return
	}
	s.Lower, s.Upper = exact.Garwood(s.Events, cfg.Alpha)
	s.Lower, s.Upper = s.Lower/exposure*cfg.Per, s.Upper/exposure*cfg.Per
}

// draw draws the whole history of a series, a picture for each window.
func (r *Recorder) draw(in *Indicator, s *Series) {
	for i := range in.Cfg.Windows {
		k := key{in.Cfg.Name, s.Name, in.Cfg.Windows[i].Name}
		points := thin(r.looks[k], r.worst[k])
		if len(points) < 2 {
			continue
		}
		f := r.figure(in, k, points, len(r.looks[k]))
		for j := range in.Alerts {
			if a := &in.Alerts[j]; a.Series == s.Name {
				f.Spans = append(f.Spans, r.spanOf(&a.Record))
			}
		}
		s.Pictures = append(s.Pictures, f)
	}
}

// mostPoints is how many looks a picture shows.
const mostPoints = 420

// thin keeps, of each of so many equal stretches, the look with the smallest p,
// one that was not made before those.
func thin(points []figure.Point, log10p []float64) []figure.Point {
	if len(points) <= mostPoints {
		return points
	}
	var kept []figure.Point
	for i := range mostPoints {
		from, to := i*len(points)/mostPoints, (i+1)*len(points)/mostPoints
		best := from
		for j := from; j < to; j++ {
			if weight(&points[j], log10p[j]) < weight(&points[best], log10p[best]) {
				best = j
			}
		}
		kept = append(kept, points[best])
	}
	return kept
}

// weight is less the more a look has to say: log10 p, and for one that was not
// made that of a p of 0.03.
func weight(p *figure.Point, log10p float64) float64 {
	if !p.Made {
		return -1.5
	}
	return log10p
}

// sharedEnd is the last part of the names if all series have the same, with the
// slash before it.
func sharedEnd(h *estimate.History) string {
	last := ""
	for i := range h.Series {
		at := strings.LastIndexByte(h.Series[i].Name, '/')
		if at <= 0 || last != "" && h.Series[i].Name[at:] != last {
			return ""
		}
		last = h.Series[i].Name[at:]
	}
	return last
}
