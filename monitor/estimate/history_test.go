package estimate

import (
	"errors"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

func midnight(t *testing.T, text string) monitor.Instant {
	t.Helper()
	v, err := time.Parse(time.DateOnly, text)
	if err != nil {
		t.Fatal(err)
	}
	return monitor.InstantOf(v)
}

const gathered = `
name = "x"
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
events = "%EVENTS%"
%EXPOSURE%
settle = "1d"
windows = ["28d"]
[indicator.baseline]
kind = "known"
rate = 1
`

func indicatorOf(t *testing.T, events, exposure string) *config.Indicator {
	t.Helper()
	text := strings.NewReplacer("%EVENTS%", events, "%EXPOSURE%", exposure).Replace(gathered)
	setup, err := config.Parse([]byte(text), "test")
	if err != nil {
		t.Fatal(err)
	}
	return &setup.Indicators[0]
}

func sum(t *testing.T, day string, events int64, exposure string) monitor.SlotSum {
	t.Helper()
	s := monitor.SlotSum{Series: "ward/fall", Start: midnight(t, day), Events: max(events, 0), HasEvents: events >= 0}
	s.Exposure, s.HasExposure = exposure, exposure != ""
	return s
}

// TestGather says which slots count, for each way of reporting.
func TestGather(t *testing.T) {
	sums := []monitor.SlotSum{
		sum(t, "2026-03-01", 9, "9"), // replaced below
		sum(t, "2026-03-01", 1, "20.5"),
		sum(t, "2026-03-02", -1, "20"),
		sum(t, "2026-03-04", 2, ""),
		sum(t, "2026-03-05", 3, "0"),
		sum(t, "2026-03-06", 0, "0"),
		sum(t, "2026-03-07", 1, "21.25"),
		sum(t, "2026-03-09", 7, "20"), // not settled
		{Series: "ward/other", Start: midnight(t, "2026-03-01"), Events: 5, HasEvents: true, Exposure: "5", HasExposure: true},
	}
	clock := midnight(t, "2026-03-10")
	for _, c := range []struct {
		name, events, exposure string
		slots, missing, over   int
		total                  int64
		sum                    string
	}{
		{"counted and reported", "counted", "", 3, 4, 1, 2, "41.75"},
		{"each and reported", "each", "", 4, 3, 1, 2, "61.75"},
		{"counted by the clock", "counted", "exposure = \"clock\"\nclock = { size = 12, per = \"1d\" }", 5, 3, 0, 7, "60"},
		{"each by the clock", "each", "exposure = \"clock\"\nclock = { size = 12.5, per = \"1d\" }", 8, 0, 0, 7, "100"},
	} {
		h, err := Gather(indicatorOf(t, c.events, c.exposure), sums, Span{Clock: clock})
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		s := h.Series[0]
		r := h.rate(&s)
		if len(h.Series) != 1 || len(s.Slots) != c.slots || s.Missing != c.missing || s.Overfull != c.over || r.Events != c.total || r.Exposure != c.sum {
			t.Errorf("%s: %d slots, %d missing, %d overfull, %d events in %s; want %d, %d, %d, %d in %s", c.name,
				len(s.Slots), s.Missing, s.Overfull, r.Events, r.Exposure, c.slots, c.missing, c.over, c.total, c.sum)
		}
	}
}

// TestGatherSpan: silence after the last message counts only as far as it is
// known, and spans cut whole slots.
func TestGatherSpan(t *testing.T) {
	in := indicatorOf(t, "each", "exposure = \"clock\"\nclock = { size = 1, per = \"1d\" }\nsince = \"2026-02-27\"")
	sums := []monitor.SlotSum{sum(t, "2026-03-01", 1, "")}
	for _, c := range []struct {
		name     string
		from, to string
		slots    int
	}{
		{"until the clock", "", "", 6},
		{"to", "", "2026-03-02", 3},
		{"beyond the clock", "", "2026-04-01", 33},
		{"from", "2026-03-01", "2026-03-03", 2},
	} {
		span := Span{Clock: midnight(t, "2026-03-06")}
		if c.from != "" {
			span.From = midnight(t, c.from).Time()
		}
		if c.to != "" {
			span.To = midnight(t, c.to).Time()
		}
		h, err := Gather(in, sums, span)
		if err != nil || len(h.Series[0].Slots) != c.slots {
			t.Errorf("%s: %v %v, want %d slots", c.name, err, h, c.slots)
		}
	}
	if _, err := Gather(in, sums, Span{From: midnight(t, "2026-03-02").Time(), To: midnight(t, "2026-03-01").Time()}); !errors.Is(err, ErrSpan) {
		t.Errorf("reversed span: %v", err)
	}
	if _, err := Gather(in, nil, Span{}); !errors.Is(err, ErrNothing) {
		t.Errorf("nothing: %v", err)
	}
}

// TestDigest: the digest names the data, not their order.
func TestDigest(t *testing.T) {
	in := indicatorOf(t, "counted", "")
	a, b := sum(t, "2026-03-01", 1, "20.5"), sum(t, "2026-03-02", 2, "20")
	digest := func(sums ...monitor.SlotSum) string {
		h, err := Gather(in, sums, Span{Clock: midnight(t, "2026-03-10")})
		if err != nil {
			t.Fatal(err)
		}
		return h.Digest
	}
	first := digest(a, b)
	if digest(b, a) != first || digest(a, b, a) != first {
		t.Error("order or repetition changes the digest")
	}
	b.Exposure = "20.000001"
	if digest(a, b) == first {
		t.Error("other data have the same digest")
	}
}

func TestParts(t *testing.T) {
	monday := time.Date(2026, 3, 2, 5, 0, 0, 0, time.UTC)
	if got := Weekday.of(monday); got != 0 || Weekday.Label(got) != "Monday" {
		t.Errorf("weekday %d", got)
	}
	if got := HourOfWeek.of(monday.AddDate(0, 0, 6)); got != 149 || HourOfWeek.Label(got) != "Sun 05:00" {
		t.Errorf("hour of the week %d", got)
	}
	if got := Month.of(monday); got != 2 || Month.Label(got) != "March" {
		t.Errorf("month %d", got)
	}
	for _, c := range []struct {
		every config.Every
		slots int
		want  string
	}{
		{config.Every{N: 5, Unit: config.Minute}, 6, "30m"},
		{config.Every{N: 5, Unit: config.Minute}, 12, "1h"},
		{config.Every{N: 1, Unit: config.Hour}, 168, "7d"},
		{config.Every{N: 1, Unit: config.Day}, 28, "28d"},
		{config.Every{N: 3, Unit: config.Month}, 4, "1y"},
		{config.Every{N: 1, Unit: config.Month}, 5, "5mo"},
	} {
		if got := lengthOf(&config.Indicator{Every: c.every}, c.slots); got != c.want {
			t.Errorf("%d slots of %s are %q, want %q", c.slots, c.every, got, c.want)
		}
	}
}
