package history

import (
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

var hardZones = []string{"UTC", "Europe/Berlin", "America/New_York", "Australia/Lord_Howe", "Pacific/Apia", "America/Sao_Paulo", "Asia/Kathmandu", "Africa/Casablanca", "America/Havana"}

// The moments of a wall time are all that a walk through the days around it
// finds.
func TestMomentsAgainstAWalk(t *testing.T) {
	const step = 15 * time.Minute
	for _, name := range hardZones {
		z := zone(t, name)
		shown := make(map[time.Time][]monitor.Instant)
		first := time.Date(2011, 12, 1, 0, 0, 0, 0, time.UTC)
		last := first.AddDate(1, 2, 0)
		for at := first; at.Before(last); at = at.Add(step) {
			y, m, d := at.In(z).Date()
			wall := time.Date(y, m, d, at.In(z).Hour(), at.In(z).Minute(), 0, 0, time.UTC)
			shown[wall] = append(shown[wall], monitor.InstantOf(at))
		}
		for wall := first.AddDate(0, 0, 2); wall.Before(last.AddDate(0, 0, -2)); wall = wall.Add(step) {
			got, want := moments(wall, z), shown[wall]
			if len(got) != len(want) {
				t.Fatalf("%s in %s: %v, want %v", wall, name, got, want)
			}
			for i := range got {
				if got[i] != want[i] {
					t.Fatalf("%s in %s: %v, want %v", wall, name, got, want)
				}
			}
		}
	}
}

// Days begin where the slots of the engine begin.
func TestFirstMomentAgreesWithTheCalendar(t *testing.T) {
	for _, name := range hardZones {
		z := zone(t, name)
		c := monitor.NewCalendar(config.Every{N: 1, Unit: config.Day}, z)
		for day := time.Date(1850, 1, 1, 0, 0, 0, 0, time.UTC); day.Year() < 2040; day = day.AddDate(0, 0, 1) {
			if got, want := firstMoment(day, z), c.Start(day.Unix()/86400); got != want {
				t.Fatalf("%s in %s begins at %s, for the engine at %s", day.Format(time.DateOnly), name, got.Time(), want.Time())
			}
		}
	}
}
