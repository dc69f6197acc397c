package estimate

import (
	"math"
	"math/big"
	"os"
	"strconv"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

const testdata = "../../testdata/baseline/"

// near fails unless got is within tolerance of want.
func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s is %.10g, want %.10g within %g", what, got, want, tolerance)
	}
}

// rows reads the lines of a file of data, without comments and header.
func rows(t *testing.T, file string) [][]string {
	t.Helper()
	text, err := os.ReadFile(testdata + file)
	if err != nil {
		t.Fatal(err)
	}
	var all [][]string
	for line := range strings.Lines(string(text)) {
		if line = strings.TrimSpace(line); line != "" && !strings.HasPrefix(line, "#") {
			all = append(all, strings.Split(line, ","))
		}
	}
	return all[1:]
}

func number(t *testing.T, text string) int64 {
	t.Helper()
	n, err := strconv.ParseInt(text, 10, 64)
	if err != nil {
		t.Fatal(err)
	}
	return n
}

// frequencies returns the counts of one of the classic data sets.
func frequencies(t *testing.T, name string) []int64 {
	t.Helper()
	var counts []int64
	for _, row := range rows(t, "frequencies.csv") {
		if row[0] == name {
			for range number(t, row[2]) {
				counts = append(counts, number(t, row[1]))
			}
		}
	}
	if len(counts) == 0 {
		t.Fatalf("no data set %s", name)
	}
	return counts
}

// plain is an indicator of monthly slots.
func plain() *config.Indicator {
	return &config.Indicator{
		Name: "plain", Title: "Plain", EventNoun: "events", Unit: "units", Per: 1,
		Series: []config.Pattern{config.NewPattern("**")}, Every: config.Every{N: 1, Unit: config.Month},
		Zone: time.UTC, Windows: []config.Window{{Name: "1mo", Slots: 1, Step: 1}},
		Upper: true, PLimit: 0.001, Alpha: 0.05,
	}
}

// seriesOf makes monthly slots from January 2000 on.
func seriesOf(name string, events []int64, exposure func(i int) float64) Series {
	cal := monitor.NewCalendar(config.Every{N: 1, Unit: config.Month}, time.UTC)
	first := cal.Slot(monitor.InstantOf(time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC)))
	s := Series{Name: name, grains: new(big.Int)}
	for i, n := range events {
		number := first + int64(i)
		s.Slots = append(s.Slots, Slot{Number: number, Start: cal.Start(number), Events: n, Exposure: exposure(i)})
		s.grains.Add(s.grains, big.NewInt(int64(exposure(i))))
	}
	return s
}

func one(int) float64 { return 1 }

// historyOf makes a history of series that begin together.
func historyOf(in *config.Indicator, series ...Series) *History {
	h := &History{Indicator: in, Series: series, Digest: strings.Repeat("0", 64)}
	h.From = series[0].Slots[0].Start
	cal := monitor.NewCalendar(in.Every, in.Zone)
	for _, s := range series {
		h.To = max(h.To, cal.Start(s.Slots[len(s.Slots)-1].Number+1))
	}
	return h
}
