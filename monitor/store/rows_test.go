package store

import (
	"errors"
	"fmt"
	"slices"
	"testing"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

func notices(position uint64, n int) []life.Notice {
	var list []life.Notice
	for i := range n {
		list = append(list, life.Notice{Key: fmt.Sprintf("%d.%d", position, i)})
	}
	return list
}

func keys(t *testing.T, s *Store, outlet string, max int) []string {
	t.Helper()
	rows, err := s.Pending(outlet, max)
	if err != nil {
		t.Fatal(err)
	}
	list := make([]string, len(rows))
	for i, row := range rows {
		list[i] = row.Notice.Key
	}
	return list
}

func TestOutbox(t *testing.T) {
	s := create(t, Options{})
	// Without an outlet steps are counted, but not kept.
	mustCommit(t, s, monitor.Changes{Position: 1, Steps: notices(1, 3)}, Mark{})
	if err := s.Outlets(FromOldest, "bus", "bus"); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 2, Steps: notices(2, 3)}, Mark{})
	if got, want := keys(t, s, "bus", 10), []string{"2.0", "2.1", "2.2"}; !slices.Equal(got, want) {
		t.Errorf("the first outlet waits for %v, want %v", got, want)
	}
	if err := errors.Join(s.Delivered("bus", 4, 0), s.Outlets(FromOldest, "oldest"), s.Outlets(FromEnd, "end", "bus")); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 3, Steps: notices(3, 1)}, Mark{})
	s = reopen(t, s)
	for outlet, want := range map[string][]string{
		"bus": {"2.1", "2.2", "3.0"}, "oldest": {"2.1", "2.2", "3.0"}, "end": {"3.0"},
	} {
		if got := keys(t, s, outlet, 10); !slices.Equal(got, want) {
			t.Errorf("%s waits for %v, want %v", outlet, got, want)
		}
	}
	if got := keys(t, s, "bus", 2); len(got) != 2 {
		t.Errorf("at most 2 gave %v", got)
	}
	if err := s.Delivered("bus", 8, 0); !errors.Is(err, ErrOrder) {
		t.Errorf("a delivery of what never was gave %v, want ErrOrder", err)
	}
	// What was said before does not turn a cursor back.
	if err := errors.Join(s.Delivered("bus", 7, 2), s.Delivered("bus", 5, 0), s.Delivered("end", 7, 0)); err != nil {
		t.Fatal(err)
	}
	state, err := s.OutletState()
	want := []Outlet{{"bus", 7, 0, 0, 2, 2}, {"end", 7, 0, 0, 1, 0}, {"oldest", 4, 3, 0, 0, 0}}
	if err != nil || !slices.Equal(state, want) {
		t.Errorf("OutletState gave %v, %v; want %v", state, err, want)
	}
	if err := s.DropOutlet("oldest"); err != nil {
		t.Fatal(err)
	}
	if report, err := s.Check(t.Context()); err != nil || report.OutboxRows != 0 {
		t.Errorf("%d rows are kept for nobody, %v", report.OutboxRows, err)
	}
}

// TestSkip lets steps go in the middle and at the front, which moves the cursor
// over all that lies next to it.
func TestSkip(t *testing.T) {
	s := create(t, Options{})
	if err := s.Outlets(FromOldest, "ward", "other"); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 1, Steps: notices(1, 6)}, Mark{})
	if err := errors.Join(s.Skip("ward", "1.2"), s.Skip("ward", "1.1")); err != nil {
		t.Fatal(err)
	}
	s = reopen(t, s)
	if got, want := keys(t, s, "ward", 2), []string{"1.0", "1.3"}; !slices.Equal(got, want) {
		t.Errorf("the outlet waits for %v, want %v", got, want)
	}
	for _, key := range []string{"1.2", "9.9"} {
		if err := s.Skip("ward", key); !errors.Is(err, ErrNotFound) {
			t.Errorf("skipping %s gave %v, want ErrNotFound", key, err)
		}
	}
	if err := errors.Join(s.Skip("ward", "1.0"), s.Delivered("ward", 4, 0), s.Skip("ward", "1.4")); err != nil {
		t.Fatal(err)
	}
	state, err := s.OutletState()
	want := []Outlet{{"other", 0, 6, 0, 0, 0}, {"ward", 5, 1, 4, 1, 0}}
	if err != nil || !slices.Equal(state, want) {
		t.Errorf("OutletState gave %v, %v; want %v", state, err, want)
	}
	if got := keys(t, s, "other", 10); len(got) != 6 {
		t.Errorf("the other outlet waits for %v", got)
	}
	if _, err := s.Check(t.Context()); err != nil {
		t.Error(err)
	}
}

func TestOutletsMustBeKnown(t *testing.T) {
	s := create(t, Options{})
	for name, err := range map[string]error{
		"Outlets":    s.Outlets(FromEnd, ""),
		"Delivered":  s.Delivered("bus", 0, 0),
		"DropOutlet": s.DropOutlet("bus"),
		"Skip":       s.Skip("bus", "1.0"),
		"Pending":    func() error { _, err := s.Pending("bus", 1); return err }(),
	} {
		if !errors.Is(err, ErrNoOutlet) {
			t.Errorf("%s gave %v, want ErrNoOutlet", name, err)
		}
	}
}

func TestAlertsByFilter(t *testing.T) {
	s := create(t, Options{})
	conditions := []life.Condition{life.Unacknowledged, life.Acknowledged, life.Returned, life.Closed, life.Withdrawn}
	for i := range 1000 {
		mustCommit(t, s, monitor.Changes{Position: uint64(i + 1), Alerts: []life.Record{{
			ID: fmt.Sprint("a", i), Series: fmt.Sprint("s/", i%10), Indicator: fmt.Sprint(i % 2),
			Condition: conditions[i%5], Direction: []life.Direction{life.Upper, life.Lower}[i%3%2],
		}}}, Mark{})
	}
	for name, c := range map[string]struct {
		filter AlertFilter
		after  uint64
		max    int
		want   []uint64
	}{
		"first":         {AlertFilter{}, 0, 3, []uint64{1, 2, 3}},
		"after":         {AlertFilter{}, 997, 30, []uint64{998, 999, 1000}},
		"past the end":  {AlertFilter{}, 1000, 30, nil},
		"newest":        {AlertFilter{NewestFirst: true}, 0, 2, []uint64{1000, 999}},
		"before":        {AlertFilter{NewestFirst: true}, 3, 9, []uint64{2, 1}},
		"before all":    {AlertFilter{NewestFirst: true}, 1, 9, nil},
		"far before":    {AlertFilter{NewestFirst: true}, 5000, 1, []uint64{1000}},
		"not done":      {AlertFilter{NotDone: true}, 2, 4, []uint64{3, 6, 7, 8}},
		"not done, new": {AlertFilter{NotDone: true, NewestFirst: true}, 0, 4, []uint64{998, 997, 996, 993}},
		"condition":     {AlertFilter{Conditions: []life.Condition{life.Closed}}, 0, 2, []uint64{4, 9}},
		"series":        {AlertFilter{Series: "s/9", Indicator: "1", Direction: life.Upper}, 970, 9, []uint64{990, 1000}},
		"rare":          {AlertFilter{Series: "s/9", NewestFirst: true}, 15, 9, []uint64{10}},
	} {
		rows, err := s.Alerts(c.filter, c.after, c.max)
		if err != nil {
			t.Errorf("%s: %v", name, err)
		}
		var got []uint64
		for _, row := range rows {
			got = append(got, row.Number)
		}
		if !slices.Equal(got, c.want) {
			t.Errorf("%s gave %v, want %v", name, got, c.want)
		}
	}
	if row, err := s.Alert("a41"); err != nil || row.Number != 42 || row.Record.Series != "s/1" {
		t.Errorf("Alert gave %+v, %v", row, err)
	}
	if _, err := s.Alert("nobody"); !errors.Is(err, ErrNotFound) {
		t.Errorf("an unknown id gave %v, want ErrNotFound", err)
	}
	if err := s.Commit(monitor.Changes{Position: 5000, Alerts: []life.Record{{}}}, Mark{}); !errors.Is(err, ErrOrder) {
		t.Errorf("an alert without an id gave %v, want ErrOrder", err)
	}
}

func TestRefusedExpire(t *testing.T) {
	day := monitor.Instant(24 * time.Hour / time.Microsecond)
	s := create(t, Options{Retention: Retention{RawAge: 10 * 24 * time.Hour, RawBytes: 50, Rows: 12}})
	position := uint64(0)
	refuse := func(at monitor.Instant, n, bytes int) {
		t.Helper()
		position++
		var list []monitor.Refusal
		for i := range n {
			list = append(list, monitor.Refusal{Position: position, Index: i, Reason: monitor.NotJSON, Raw: make([]byte, bytes)})
		}
		mustCommit(t, s, monitor.Changes{Position: position, Refused: list}, Mark{Position: position, Stored: at})
	}
	expect := func(when string, rows, raw uint64) {
		t.Helper()
		report, err := s.Check(t.Context())
		if err != nil || report.RefusedRows != rows || report.RefusedRaw != raw {
			t.Errorf("%s: %d rows, %d with bytes, %v; want %d, %d", when, report.RefusedRows, report.RefusedRaw, err, rows, raw)
		}
	}
	refuse(day, 4, 10)
	expect("at first", 4, 4)
	refuse(2*day, 2, 10)
	expect("with too many bytes", 6, 5)
	refuse(11*day+1, 0, 0)
	expect("when the first are old", 6, 2)
	refuse(5*day, 0, 0) // the bus's clock went back
	expect("with a clock that went back", 6, 2)
	refuse(100*day, 20, 1)
	expect("with too many rows", 12, 12)
	rows, err := s.Refused(0, 100)
	if err != nil || len(rows) != 12 || rows[0].Number != 15 || rows[0].Expired || len(rows[0].Refusal.Raw) != 1 {
		t.Errorf("Refused gave %d rows from %d, %v", len(rows), rows[0].Number, err)
	}
	if counts, err := s.RefusedCount(); err != nil || counts[monitor.NotJSON] != 26 {
		t.Errorf("RefusedCount gave %v, %v", counts, err)
	}
	refuse(200*day, 1, 3)
	if row, err := s.RefusedOne(26); err != nil || !row.Expired || row.Refusal.Raw != nil || row.Refusal.Index != 19 {
		t.Errorf("an expired one gave %+v, %v", row, err)
	}
	if _, err := s.RefusedOne(3); !errors.Is(err, ErrNotFound) {
		t.Errorf("a row that is gone gave %v, want ErrNotFound", err)
	}
}

func TestRefusedAt(t *testing.T) {
	s := create(t, Options{})
	for position := uint64(1); position <= 300; position++ {
		var list []monitor.Refusal
		for i := range position % 4 {
			list = append(list, monitor.Refusal{Position: position, Index: int(i), Reason: monitor.BadAct})
		}
		mustCommit(t, s, monitor.Changes{Position: position, Refused: list}, Mark{})
	}
	for position, want := range map[uint64]int{3: 3, 7: 3, 299: 3, 298: 2, 300: 0, 9999: 0} {
		rows, err := s.RefusedAt(position)
		if err != nil || len(rows) != want {
			t.Errorf("RefusedAt(%d) gave %d rows, %v; want %d", position, len(rows), err, want)
		}
		for i, row := range rows {
			if row.Refusal.Position != position || row.Refusal.Index != i {
				t.Errorf("RefusedAt(%d) gave %+v", position, row.Refusal)
			}
		}
	}
}

// TestClockThatStartsLate: refusals of commits without a mark are reckoned
// from the first time that the bus gives.
func TestClockThatStartsLate(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1, Refused: []monitor.Refusal{{Position: 1, Raw: []byte("r")}}}, Mark{})
	first := monitor.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	for i, c := range []struct {
		at      monitor.Instant
		expired bool
	}{{first, false}, {first.Add(30 * 24 * time.Hour), false}, {first.Add(30*24*time.Hour + time.Microsecond), true}} {
		position := uint64(i + 2)
		mustCommit(t, s, monitor.Changes{Position: position}, Mark{Position: position, Stored: c.at})
		if row, err := s.RefusedOne(1); err != nil || row.Expired != c.expired {
			t.Errorf("at %d expired is %t, %v", i, row.Expired, err)
		}
	}
}
