package plant

import (
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// Episode is a span in which it is known that the rate was not the usual one.
type Episode struct {
	Series    config.Pattern
	Direction life.Direction
	From, To  time.Time // half-open
	Note      string
}

// ReadKnown reads known episodes from CSV: the columns series (a name or a
// pattern), start and end (a date in the zone, or RFC 3339; end is no part of
// it), and optionally direction (upper unless said) and note.
func ReadKnown(r io.Reader, zone *time.Location) ([]Episode, error) {
	rows := csv.NewReader(r)
	rows.Comment, rows.TrimLeadingSpace = '#', true
	header, err := rows.Read()
	if err != nil {
		return nil, fmt.Errorf("a file of known episodes begins with the columns series, start, end, direction, note: %w", err)
	}
	header[0] = strings.TrimPrefix(header[0], "\ufeff")
	columns := map[string]int{}
	for i, h := range header {
		name := strings.ToLower(strings.TrimSpace(h))
		if !slices.Contains([]string{"series", "start", "end", "direction", "note"}, name) {
			return nil, fmt.Errorf("column %d is none of series, start, end, direction and note", i+1)
		}
		columns[name] = i
	}
	for _, name := range []string{"series", "start", "end"} {
		if _, ok := columns[name]; !ok {
			return nil, fmt.Errorf("the column %s is missing", name)
		}
	}
	var list []Episode
	for {
		row, err := rows.Read()
		if errors.Is(err, io.EOF) {
			return list, nil
		}
		if err != nil {
			return nil, err
		}
		e, err := episodeOf(row, columns, zone)
		if err != nil {
			line, _ := rows.FieldPos(0)
			return nil, fmt.Errorf("line %d: %w", line, err)
		}
		list = append(list, e)
	}
}

func episodeOf(row []string, columns map[string]int, zone *time.Location) (e Episode, err error) {
	text := func(name string) string {
		if i, ok := columns[name]; ok {
			return strings.TrimSpace(row[i])
		}
		return ""
	}
	if text("series") == "" {
		return e, errors.New("the series is missing")
	}
	e.Series, e.Note, e.Direction = config.NewPattern(text("series")), text("note"), life.Upper
	switch d := text("direction"); d {
	case "", string(life.Upper):
	case string(life.Lower):
		e.Direction = life.Lower
	default:
		return e, errors.New("the direction is neither upper nor lower")
	}
	if e.From, err = timeOf(text("start"), zone); err != nil {
		return e, fmt.Errorf("start: %w", err)
	}
	if e.To, err = timeOf(text("end"), zone); err != nil {
		return e, fmt.Errorf("end: %w", err)
	}
	if !e.From.Before(e.To) {
		return e, errors.New("the episode ends before it begins")
	}
	return e, nil
}

func timeOf(text string, zone *time.Location) (time.Time, error) {
	if t, err := time.ParseInLocation(time.DateOnly, text, zone); err == nil {
		return t, nil
	}
	t, err := time.Parse(time.RFC3339, text)
	if err != nil {
		return t, errors.New("it is neither a date such as 2025-12-31 nor a time such as 2025-12-31T08:00:00+01:00")
	}
	return t, nil
}

// overlaps reports whether the window that opened an alert holds some of the
// episode.
func (e *Episode) overlaps(a *life.Record) bool {
	return a.Direction == e.Direction && e.Series.Match(a.Series) &&
		a.Opening.From.Before(e.To) && a.Opening.To.After(e.From)
}

// Hold holds the alerts over a real history against what is known of it: marks,
// and the known episodes (nil where none are given; else all that there are).
// level is that of the bounds.
func Hold(alerts []life.Record, known []Episode, level float64) Record {
	var r Record
	var days []float64
	for i := range known {
		f := firstIn(&known[i], alerts)
		if f.Found {
			r.Sensitivity.Count++
			days = append(days, f.Days)
		}
		if f.Late {
			r.Late++
		}
		r.Sensitivity.Of++
		r.Episodes = append(r.Episodes, f)
	}
	r.Sensitivity.bound(level)
	for i := range alerts {
		a := &alerts[i]
		is, decided := stands(a, known)
		switch {
		case !decided:
			r.Undecided++
			continue
		case is:
			r.Predictive.Count++
		case a.Condition == life.Withdrawn:
			r.Withdrawn++
		}
		r.Predictive.Of++
	}
	r.Predictive.bound(level)
	if len(days) > 0 {
		r.Timeliness = quartiles(days, len(known))
	}
	return r
}

// stands reports whether an alert stands for something real, and whether that
// can be told.
func stands(a *life.Record, known []Episode) (is, decided bool) {
	switch {
	case a.Mark != life.NotMarked:
		return a.Mark == life.MarkReal, true
	case known == nil:
		return false, a.Condition == life.Withdrawn
	}
	return slices.ContainsFunc(known, func(e Episode) bool { return e.overlaps(a) }), true
}

// firstIn is the first alert that an episode brought.
func firstIn(e *Episode, alerts []life.Record) EpisodeFound {
	f := EpisodeFound{Series: e.Series.String(), Direction: string(e.Direction), From: e.From, To: e.To, Note: e.Note}
	for i := range alerts {
		a := &alerts[i]
		at := a.OpenedAt()
		if a.Condition == life.Withdrawn || !e.overlaps(a) || !at.After(e.From) {
			continue
		}
		if days := at.Sub(e.From).Hours() / 24; !f.Found || days < f.Days {
			f.Found, f.Late, f.Alert, f.Days = true, a.Opening.To.After(e.To), a.ID, days
		}
	}
	return f
}
