package monitor

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

// TestArchiveFrom finds the first day of an archive, and sees that a clock that
// moves on never takes it back.
func TestArchiveFrom(t *testing.T) {
	day := func(y int, m time.Month, d int) Instant { return InstantOf(time.Date(y, m, d, 0, 0, 0, 0, time.UTC)) }
	for _, c := range []struct {
		keep      string
		now, want Instant
	}{
		{"1d", day(2026, 3, 2), day(2026, 3, 1)},
		{"1d", day(2026, 3, 2) - 1, day(2026, 2, 28)},
		{"2w", day(2026, 3, 2) + 5, day(2026, 2, 16)},
		{"1mo", day(2026, 3, 31), day(2026, 2, 28)},
		{"1mo", day(2028, 3, 31), day(2028, 2, 29)},
		{"1mo", day(2026, 1, 15), day(2025, 12, 15)},
		{"13mo", day(2026, 1, 15), day(2024, 12, 15)},
		{"1y", day(2028, 2, 29), day(2027, 2, 28)},
		{"10y", day(2026, 12, 1) + 12345, day(2016, 12, 1)},
		{"100y", day(1951, 3, 5), day(1851, 3, 5)},
	} {
		keep, err := config.ParseSpan(c.keep)
		if err != nil {
			t.Fatal(err)
		}
		if got := ArchiveFrom(keep, c.now); got != c.want {
			t.Errorf("%s before %s is %s, want %s", c.keep, c.now.Time(), got.Time(), c.want.Time())
		}
	}
	if got := ArchiveFrom(config.Every{}, day(2026, 3, 2)); got != Beginning {
		t.Errorf("without a length the archive begins %v", got)
	}
	for _, text := range []string{"1d", "30d", "1w", "1mo", "2mo", "11mo", "1y", "4y"} {
		keep, err := config.ParseSpan(text)
		if err != nil {
			t.Fatal(err)
		}
		last := Beginning
		for now := day(1995, 1, 1); now < day(2005, 1, 1); now = now.Add(7 * time.Hour) {
			from := ArchiveFrom(keep, now)
			if from < last {
				t.Fatalf("%s before %s is %s, earlier than before", text, now.Time(), from.Time())
			}
			last = from
		}
	}
}

const keepSetup = `
name = "keep"
folder = "x"
[limits]
archive = "%s"
[[indicator]]
name = "fall"
series = ["quillmere/*/fall"]
unit = "bed-days"
every = "1d"
events = "each"
exposure = "clock"
clock = { size = 20, per = "1d" }
settle = "1d"
horizon = "3d"
ids = "none"
windows = ["7d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.01
`

// TestArchiveBegins plays a stream in which the archive's length changes, in batches
// of several sizes and with restarts: what is kept is the same.
func TestArchiveBegins(t *testing.T) {
	begin := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	lengths := map[int]string{0: "all", 60: "30d", 100: "10d", 103: "1y", 130: "20d"}
	// On which day it begins; a longer length gives nothing back.
	want := func(day int) int {
		switch {
		case day < 60:
			return -1
		case day < 100:
			return day - 30
		case day < 103:
			return day - 10
		case day < 130:
			return 93
		}
		return max(93, day-20)
	}
	for _, batch := range []int{1, 3, 7, 1000} {
		t.Run(fmt.Sprint(batch), func(t *testing.T) {
			e := New(Partition{Of: 1, KeyParts: 1})
			m := NewMemory()
			position, waiting := uint64(0), 0
			apply := func(msg Message) {
				position++
				msg.Position, msg.HasTime = position, true
				e.Apply(&msg)
			}
			for day := range 160 {
				at := InstantOf(begin.AddDate(0, 0, day))
				if text, ok := lengths[day]; ok {
					setup, err := config.Parse(fmt.Appendf(nil, keepSetup, text), "test")
					if err != nil {
						t.Fatal(err)
					}
					apply(Message{Kind: SettingMessage, Time: at, Setting: Setting{Setup: setup}})
				}
				apply(Message{Kind: Observations, Time: at, Items: []Item{{Observation: Observation{
					Series: fmt.Sprintf("quillmere/ward-%d/fall", day%3), Start: at, End: at, Instant: true, HasEvents: true, Events: 1,
				}}}})
				if waiting++; waiting < batch && day != 159 {
					continue
				}
				waiting = 0
				c := e.Drain()
				m.Commit(c)
				from := Beginning
				if w := want(day); w >= 0 {
					from = InstantOf(begin.AddDate(0, 0, w))
				}
				if c.ArchiveFrom == nil && from != Beginning || c.ArchiveFrom != nil && *c.ArchiveFrom != from {
					t.Fatalf("on day %d the archive begins %v, want %v", day, c.ArchiveFrom, from.Time())
				}
				var err error
				if e, err = m.Reopen(Partition{Of: 1, KeyParts: 1}); err != nil {
					t.Fatal(err)
				}
			}
		})
	}
}

// TestFirstFull tells when a window that comes in will first be full, and holds the
// first look at it against that.
func TestFirstFull(t *testing.T) {
	begin := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	for _, window := range []string{`"28d"`, `{ span = "28d", step = "7d" }`, `"8d"`, `"9d"`, `{ span = "12d", step = "5d" }`} {
		for _, change := range []int{40, 43, 45} {
			e := New(Partition{Of: 1, KeyParts: 1})
			var told, first Instant
			e.OnLook(func(v View) {
				if told != 0 && v.Window != "7d" && v.Made && first == 0 {
					first = InstantOf(v.End)
				}
			})
			position := uint64(0)
			apply := func(msg Message) {
				position++
				msg.Position, msg.HasTime = position, true
				e.Apply(&msg)
			}
			for day := range 100 {
				at := InstantOf(begin.AddDate(0, 0, day)).Add(time.Hour)
				if day == 0 || day == change {
					text := fmt.Sprintf(keepSetup, "all")
					if day > 0 {
						text = strings.Replace(text, `["7d"]`, `["7d", `+window+`]`, 1)
					}
					setup, err := config.Parse([]byte(text), "test")
					if err != nil {
						t.Fatal(err)
					}
					if day > 0 {
						apply(Message{Kind: Tick, Time: at})
						in := &setup.Indicators[0]
						told, _ = e.Kept()["fall"].FirstFull(in, &in.Windows[1])
					}
					apply(Message{Kind: SettingMessage, Time: at, Setting: Setting{Setup: setup}})
				}
				apply(Message{Kind: Observations, Time: at, Items: []Item{{Observation: Observation{
					Series: "quillmere/ward/fall", Start: at, End: at, Instant: true, HasEvents: true, Events: 1,
				}}}})
			}
			// One that what is kept fills already is first looked at when looks fall due.
			if first == 0 || first < told || first != told && told > InstantOf(begin.AddDate(0, 0, change)) {
				t.Errorf("%s on day %d: told %s, looked at first %s", window, change, told.Time(), first.Time())
			}
		}
	}
}
