package estimate

import (
	"errors"
	"math"
	"slices"
	"testing"
	"time"

	"tailbell/exact/resample"
	"tailbell/monitor"
)

const oneDay = monitor.Instant(24 * time.Hour / time.Microsecond)

// TestProductLimit works a small example by hand: by day 10,
//
//	occurred on day 0: 10 with delay 1, 4 with delay 2, 6 with delay 3
//	occurred on day 8: 9 with delay 1, 3 with delay 2 (3 would not be known yet)
//
// Of delay 3 could have been seen 20, of which 6 were: F(2) = 1 - 6/20. Of delay
// 2 or less could have been seen 26, of which 7 had 2: F(1) = F(2) (1 - 7/26).
// Naively the 19 of delay 1 among all 32 would be the share.
func TestProductLimit(t *testing.T) {
	d, err := DelayOf([]Reported{
		{0, oneDay, 10}, {0, 2 * oneDay, 4}, {0, 3 * oneDay, 6}, {8 * oneDay, 9 * oneDay, 9}, {8 * oneDay, 10 * oneDay, 3},
	}, 10*oneDay)
	if err != nil {
		t.Fatal(err)
	}
	day := 24 * time.Hour
	for _, c := range []struct {
		age      time.Duration
		f, naive float64
	}{
		{0, 0, 0},
		{day - 1, 0, 0},
		{day, 14. / 20 * 19 / 26, 19. / 32},
		{2*day - 1, 14. / 20 * 19 / 26, 19. / 32},
		{2 * day, 14. / 20, 26. / 32},
		{3 * day, 1, 1},
		{30 * day, 1, 1},
	} {
		near(t, "F", d.F(c.age), c.f, 1e-12)
		near(t, "naive F", d.Naive(c.age), c.naive, 1e-12)
	}
	if got := d.Ages(0, day, 10); len(got) != 3 || got[0] != day || got[2] != 3*day {
		t.Errorf("ages are %v", got)
	}
}

// TestTruncation: from history that ends now, the product limit finds F and the
// naive estimate does not.
func TestTruncation(t *testing.T) {
	const histories, days, perDay, mean = 200, 40, 3.0, 10.0
	day := 24 * time.Hour
	var limit, naive float64
	for i := range uint64(histories) {
		d, err := DelayOf(delayedHistory(resample.Source(3, i), days, perDay, mean), days*oneDay)
		if err != nil {
			t.Fatal(err)
		}
		limit += d.F(5*day) / histories
		naive += d.Naive(5*day) / histories
	}
	// Delays over the longest known are not seen at all: F is given that.
	truth := -math.Expm1(-5/mean) / -math.Expm1(-36/mean)
	t.Logf("F(5d) is %.4f; product limit %.4f, naive %.4f", truth, limit, naive)
	near(t, "product limit", limit, truth, 0.015)
	if naive < truth+0.08 {
		t.Errorf("naive F is %.4f: the truncation should have raised it above %.4f", naive, truth)
	}
}

// delayedHistory are the reports known by the end of so many days, with
// exponential delays of that mean in days.
func delayedHistory(rng source, days int, perDay, mean float64) []Reported {
	var reports []Reported
	for day := range days {
		end := monitor.Instant(day+1) * oneDay
		for range resample.Poisson(rng, perDay) {
			at := end + monitor.Instant(rng.ExpFloat64()*mean*float64(oneDay))
			if at <= monitor.Instant(days)*oneDay {
				reports = append(reports, Reported{end, at, 1})
			}
		}
	}
	return reports
}

func TestDelayErrors(t *testing.T) {
	if _, err := DelayOf(nil, oneDay); !errors.Is(err, ErrNoReports) {
		t.Errorf("no reports: %v", err)
	}
	if _, err := DelayOf([]Reported{{0, 2 * oneDay, 5}}, oneDay); !errors.Is(err, ErrNoReports) {
		t.Errorf("a report from after now: %v", err)
	}
	if _, err := DelayOf([]Reported{{0, oneDay, 5}}, 9*oneDay); !errors.Is(err, ErrNoDelay) {
		t.Errorf("few events: %v", err)
	}
}

// TestReports follows corrections: what stands in the end counts from when it
// was first said.
func TestReports(t *testing.T) {
	r := NewReports(func(at monitor.Instant) monitor.Instant { return (at/oneDay + 1) * oneDay })
	add := func(id string, revision int64, day, events, reported int64) {
		r.Add("east", &monitor.Observation{
			ID: id, Revision: revision, Start: monitor.Instant(day) * oneDay, Events: events, HasEvents: true,
			Reported: monitor.Instant(reported) * oneDay, HasReported: true,
		})
	}
	add("grows", 1, 0, 2, 1)
	add("grows", 2, 0, 5, 4)
	add("grows", 2, 0, 5, 9) // a repeat
	add("shrinks", 1, 1, 3, 2)
	add("shrinks", 2, 1, 4, 5)
	add("shrinks", 3, 1, 3, 6)
	add("moves", 1, 2, 1, 3)
	add("moves", 2, 3, 1, 7)
	add("zero", 1, 2, 0, 3)
	add("", 0, 2, 1, 8)
	add("gone", 1, 2, 1, 3)
	r.Add("east", &monitor.Observation{ID: "gone", Revision: 2, Retracted: true, Reported: 4 * oneDay, HasReported: true})
	r.Add("east", &monitor.Observation{ID: "untimed", Events: 4, HasEvents: true})
	want := []Reported{
		{oneDay, oneDay, 2},
		{oneDay, 4 * oneDay, 3},
		{2 * oneDay, 2 * oneDay, 3},
		{3 * oneDay, 8 * oneDay, 1},
		{4 * oneDay, 3 * oneDay, 1},
	}
	got := r.All()
	if len(got) != len(want) {
		t.Fatalf("got %v, want %v", got, want)
	}
	for i := range want {
		if got[i] != want[i] {
			t.Errorf("report %d is %v, want %v", i, got[i], want[i])
		}
	}
}

// TestAges: a set-up takes the share of the greatest age reached, so the ages told
// are those at which slots are looked at; else what is known at the first look of
// a slot would be taken for nothing.
func TestAges(t *testing.T) {
	var reports []Reported
	hour := oneDay / 24
	for day := range monitor.Instant(200) {
		for i := range monitor.Instant(4) { // after 0, 10, 20 and 30 hours
			reports = append(reports, Reported{day * oneDay, day*oneDay + i*10*hour, 1})
		}
	}
	d, err := DelayOf(reports, 400*oneDay)
	if err != nil {
		t.Fatal(err)
	}
	for settle, want := range map[time.Duration][]time.Duration{
		0:              {0, 24 * time.Hour, 48 * time.Hour}, // a quarter, three quarters, all
		12 * time.Hour: {12 * time.Hour, 36 * time.Hour},    // a half, all
	} {
		if got := d.Ages(settle, 24*time.Hour, 10); !slices.Equal(got, want) {
			t.Errorf("settling in %v: %v, want %v", settle, got, want)
		}
	}
}
