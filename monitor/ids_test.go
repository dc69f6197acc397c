package monitor

import (
	"fmt"
	"testing"
	"time"

	"tailbell/config"
)

// TestRevisionsDontGrow revises a few ids very often: what is kept of them must
// not grow, and must be what an engine goes on from.
func TestRevisionsDontGrow(t *testing.T) {
	setup, err := config.Parse(fmt.Appendf(nil, footprintSetup, "kept"), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	store := NewMemory()
	p := Partition{Of: 1, KeyParts: 1}
	e := New(p)
	e.Apply(&Message{Position: 1, Kind: SettingMessage, Setting: Setting{Setup: setup}})
	start := InstantOf(time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC))
	most := 0
	for revision := range int64(20_000) {
		for id := range 2 {
			e.Apply(&Message{Position: e.position + 1, Kind: Observations, Items: []Item{{Observation: Observation{
				Series: "quillmere-east/ward-1/fall", ID: fmt.Sprint(id), Revision: revision, Start: start, End: start.Add(24 * time.Hour),
				HasEvents: true, Events: revision % 3, HasExposure: true, Exposure: config.Decimal{Coef: 22},
			}}}})
		}
		store.Commit(e.Drain())
		kept := 0
		for _, ids := range store.ids {
			kept += len(ids)
		}
		if most = max(most, kept); revision%5000 == 4999 {
			if e, err = store.Reopen(p); err != nil {
				t.Fatal(err)
			}
		}
	}
	if most > maxStale+10 {
		t.Errorf("%d entries were kept of two ids", most)
	}
	if a := e.Account(); a.Counted+a.Withheld != 2 || a.Replaced != 39_998 {
		t.Errorf("%+v", a)
	}
}
