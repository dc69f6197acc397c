package report

import (
	"cmp"
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"tailbell/alert/figure"
	"tailbell/config"
	"tailbell/monitor"
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
